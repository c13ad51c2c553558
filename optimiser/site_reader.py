"""Reading a site file: from YAML and price book to a validated problem, or all its problems.

Owns the top level of the file, what must agree between its blocks, and the chemical system of the
site. The blocks themselves are read by `site_feed`, `site_limits`, `site_treatment` and
`offers_reader`.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from catalogs.constants import load_system
from catalogs.entries import NON_NEGATIVE, Entry
from catalogs.positions import load_yaml
from catalogs.problems import InputFileError, ProblemLog, Spot
from catalogs.reagents import Reagent, load_reagents
from chemistry.activity import choose_activity
from chemistry.errors import WaterError
from chemistry.feed import ANALYTES, BURDENS, FeedWater, WaterAnalysis, feed_water
from chemistry.sample_waters import SampleWaters, close_samples, mean_analysis
from chemistry.system import System
from optimiser.jar_file import JarCalibration
from optimiser.site import (
    Disposal,
    Dosing,
    Procurement,
    Site,
    SolverSettings,
    StockKeeping,
    Uncertainty,
)
from optimiser.site_constants import OwnBlock, read_own
from optimiser.site_dosing import read_dosing
from optimiser.site_feed import FeedBlock, read_feed
from optimiser.site_jar import JarChanges, read_site_jar, with_jar
from optimiser.site_limits import Foreseen, LimitsBlock, read_limits
from optimiser.site_offers import SiteOffers, read_site_offers
from optimiser.site_procurement import read_procurement
from optimiser.site_salt import ACTIVITY_CHOICES, AUTO, activity_notes, saltiest_mol_per_l
from optimiser.site_samples import SampleBlock
from optimiser.site_stock import read_stock
from optimiser.site_treatment import (
    TreatmentBlock,
    read_disposal,
    read_solver,
    read_treatment,
    read_uncertainty,
)

ALWAYS_COMPONENTS = ("H+", "Na+", "CO3-2")
"""Components of every site's system, whatever was analysed: water, caustic and air bring them."""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Blocks:
    """The blocks of a site file; None where one is missing."""

    name: str
    currency: str
    feed: FeedBlock | None
    treatment: TreatmentBlock | None
    limits: LimitsBlock | None
    disposal: Disposal | None
    charges: Mapping[str, float]
    offers: SiteOffers
    solver: SolverSettings
    dosing: Mapping[str, Dosing]
    stock: StockKeeping
    uncertainty: Uncertainty
    doses_today: Mapping[str, float]
    procurement: Procurement
    own: OwnBlock
    activity: str
    jar: JarCalibration | None = None


@dataclass(frozen=True, eq=False, slots=True)
class _Chemistry:
    """The system of a site, and what is said about its choice."""

    system: System
    analysis: WaterAnalysis
    notes: tuple[str, ...] = ()
    sample_waters: SampleWaters | None = None


def load_site(
    path: str | Path, *, on_day: datetime.date | None = None, use_expired: bool = False
) -> Site:
    """Read and validate a site file and its price book.

    Parameters
    ----------
    path
        The site file; its price book is looked up beside it.
    on_day
        Day that the validity of offers is held against; today when left out.
    use_expired
        Buy from offers that do not hold on that day as well, whatever the site file says.

    Returns
    -------
    Site
        A problem that `plan` and `assess` can work on.

    Raises
    ------
    InputFileError
        Everything that is wrong in both files, with file, line and field, all at once.
    """
    log = ProblemLog()
    file = Path(path)
    table = load_yaml(file, log)
    if table is None:
        raise InputFileError(log.problems)
    reagents = load_reagents()
    entry = Entry.top(table, str(path), log)
    day = on_day or datetime.date.today()
    blocks = _read_blocks(entry, file, reagents, day, use_expired=use_expired)
    chemistry = _checked_chemistry(blocks, reagents)
    log.raise_if_any()
    return _site(blocks, file, reagents, chemistry)


def _read_blocks(
    entry: Entry, file: Path, reagents: Mapping[str, Reagent], day: datetime.date,
    *, use_expired: bool,
) -> _Blocks:  # fmt: skip
    name, currency = entry.text("site"), entry.text("currency")
    feed_entry = entry.block("feed")
    feed = None if feed_entry is None else read_feed(feed_entry, file.parent, day)
    treatment_entry = entry.block("treatment")
    treatment = None if treatment_entry is None else read_treatment(treatment_entry, reagents)
    limits_entry = entry.block("limits")
    jar = None
    if treatment is not None and treatment.jar_spot is not None:
        jar = read_site_jar(treatment.jar_tests, treatment.jar_spot, file.parent, reagents)
    foreseen = _foreseen(feed, treatment, reagents)
    limits = None if limits_entry is None else read_limits(limits_entry, foreseen)
    disposal_entry = entry.block("disposal")
    disposal = None if disposal_entry is None else read_disposal(disposal_entry)
    known = treatment.allowed_at if treatment else {}
    blocks = _Blocks(
        name=name, currency=currency, feed=feed, treatment=treatment, limits=limits,
        disposal=disposal, charges=entry.numbers("burden_charges_per_kg", BURDENS, "burdens"),
        offers=read_site_offers(
            entry, file, reagents, known, currency=currency, day=None if use_expired else day
        ),
        solver=read_solver(entry.block_or_none("solver")),
        dosing=read_dosing(entry.block_or_none("dosing"), known),
        stock=read_stock(entry.block_or_none("stock")),
        uncertainty=read_uncertainty(entry.block_or_none("uncertainty")),
        doses_today=entry.numbers("today", known, "reagents allowed in treatment", NON_NEGATIVE),
        procurement=read_procurement(entry.block_or_none("procurement"), known),
        own=read_own(entry),
        activity=entry.choice_or("activity", AUTO, ACTIVITY_CHOICES, "activity models"),
        jar=jar,
    )  # fmt: skip
    entry.finish()
    return blocks


def _foreseen(
    feed: FeedBlock | None, treatment: TreatmentBlock | None, reagents: Mapping[str, Reagent]
) -> Foreseen | None:
    if feed is None or treatment is None or not feed.is_complete:
        return None
    brought = {c for name in treatment.allowed_at for c in reagents[name].components}
    if feed.closing_analyte:
        brought.add(ANALYTES[feed.closing_analyte].component)
    cyanide = feed.analysis.measurements.get("CN") if feed.analysis else None
    return Foreseen(
        analysed=tuple(feed.analysed),
        brought_components=brought,
        flow_m3_per_d=feed.flow_m3_per_d,
        cyanide_mg_per_l=cyanide.total_mg_per_l if cyanide else 0.0,
    )


def _checked_chemistry(blocks: _Blocks, reagents: Mapping[str, Reagent]) -> _Chemistry | None:
    """Build the site's system, and record it when the feed cannot be electroneutral in it."""
    feed = blocks.feed
    if feed is None or feed.analysis is None:
        return None
    first = "sit" if blocks.activity == "sit" else "davies"
    found = _feed_in(blocks, feed, _system(blocks, feed, reagents, first))
    if found is None or blocks.treatment is None:
        return None
    treatment = blocks.treatment.treatment
    saltiest = max(saltiest_mol_per_l(w, treatment, reagents) for w in found.extremes)
    if blocks.activity == AUTO and choose_activity(saltiest) != first:
        chosen = choose_activity(saltiest)
        found = _feed_in(blocks, feed, _system(blocks, feed, reagents, chosen))
    if found is None:
        return None
    water = found.water
    return _Chemistry(
        water.system, water.analysis,
        tuple(activity_notes(water, blocks.activity, saltiest)), found.sample_waters,
    )  # fmt: skip


def _system(
    blocks: _Blocks, feed: FeedBlock, reagents: Mapping[str, Reagent], activity: str
) -> System:
    allowed = blocks.treatment.allowed_at if blocks.treatment else {}
    catalogued = load_system(
        feed.temperature_degc, components=site_components(feed, allowed, reagents),
        activity=activity,
    )  # fmt: skip
    return blocks.own.applied_to(catalogued)


@dataclass(frozen=True, eq=False, slots=True)
class _Feed:
    """The feed in a system; of samples their mean, and the one that holds most salt."""

    water: FeedWater
    saltiest: FeedWater | None = None
    sample_waters: SampleWaters | None = None

    @property
    def extremes(self) -> tuple[FeedWater, ...]:
        return (self.water,) if self.saltiest is None else (self.water, self.saltiest)


def _feed_in(blocks: _Blocks, feed: FeedBlock, system: System) -> _Feed | None:
    """The feed in a system; None, and problems, where it cannot be."""
    assert feed.analysis is not None
    try:
        if feed.sampled is None:
            return _Feed(feed_water(feed.analysis, system))
        return _samples_in(feed, feed.sampled, system)
    except WaterError as error:
        _refuse_water(feed, feed.analysis_spot, str(error))
        return None


def _samples_in(feed: FeedBlock, sampled: SampleBlock, system: System) -> _Feed | None:
    """Every sample closed, and their mixture; None, and problems, where one cannot be."""
    samples = sampled.samples
    waters = close_samples(samples, system)
    for number, reason in waters.failures.items():
        sample = samples.samples[number]
        _refuse_water(feed, sampled.spots[(sample.day, sample.time, sample.label)], reason)
    if waters.failures:
        return None
    charged = abs(waters.totals_mol_per_l) @ abs(system.component_charges)
    saltiest = samples.samples[int(charged.argmax())]
    mean = feed_water(mean_analysis(samples, waters), system)
    return _Feed(mean, feed_water(saltiest.analysis, system), waters)


def _refuse_water(feed: FeedBlock, spot: Spot, reason: str) -> None:
    spot.problem(
        f"an analysis that does not hold ({reason})",
        f"a water that can exist, its charge closed with {feed.closing_analyte}",
        "Check its units and look for missing ions; then correct what is named above.",
    )


def site_components(
    feed: FeedBlock, allowed: Mapping[str, object], reagents: Mapping[str, Reagent]
) -> tuple[str, ...]:
    """Components that a site needs: those analysed, dosed, closed with, and the usual ones."""
    found = dict.fromkeys(ALWAYS_COMPONENTS)
    found |= dict.fromkeys(
        ANALYTES[name].component for name in feed.analysed if ANALYTES[name].is_modelled
    )
    if feed.closing_analyte:
        found[ANALYTES[feed.closing_analyte].component] = None
    for name in allowed:
        found |= dict.fromkeys(reagents[name].components)
    if feed.aerated and "Fe+2" in found:
        found["Fe+3"] = None
    return tuple(found)


def _site(
    blocks: _Blocks, file: Path, reagents: Mapping[str, Reagent], chemistry: _Chemistry | None
) -> Site:
    feed, treatment, limits, disposal = (
        blocks.feed, blocks.treatment, blocks.limits, blocks.disposal,
    )  # fmt: skip
    if not (feed and treatment and limits and disposal and chemistry and feed.analysis):
        raise AssertionError("a block that is missing leaves a problem")
    system = chemistry.system
    changes = JarChanges(
        treatment=treatment.treatment, floors_mg_per_l=limits.floors_mg_per_l, notes=()
    )
    if blocks.jar is not None:
        changes = with_jar(blocks.jar, treatment.treatment, limits.floors_mg_per_l)
    return Site(
        name=blocks.name, path=file, currency=blocks.currency,
        flow_m3_per_d=feed.flow_m3_per_d, operating_days_per_year=feed.operating_days_per_year,
        stands_for=feed.stands_for, analysis=chemistry.analysis, system=system,
        reagents={name: reagents[name] for name in treatment.allowed_at},
        limits=limits.limits, ph_window=limits.ph_window, design_margin=limits.design_margin,
        variability=limits.variability, floors_mg_per_l=changes.floors_mg_per_l,
        treatment=changes.treatment, disposal=disposal,
        burden_charges_per_kg=blocks.charges, offers=blocks.offers.offers, solver=blocks.solver,
        uncertainty=blocks.uncertainty, dosing=blocks.dosing, stock=blocks.stock,
        peak_flow_m3_per_d=feed.peak_flow_m3_per_d,
        pretreated=feed.pretreated, today=blocks.doses_today,
        procurement=blocks.procurement,
        own_constants=blocks.own.constants, solid_switches=blocks.own.switches,
        samples=feed.sampled.samples if feed.sampled else None,
        sample_waters=chemistry.sample_waters,
        jar=blocks.jar,
        notes=(
            *blocks.own.notes(system), *chemistry.notes, *feed.notes, *limits.notes,
            *_closing_notes(feed, limits),
            *_surcharge_notes(feed, limits), *blocks.offers.notes, *_sample_notes(feed),
            *changes.notes, *_jar_notes(blocks.jar, chemistry.analysis),
        ),
    )  # fmt: skip


def _closing_notes(feed: FeedBlock, limits: LimitsBlock) -> list[str]:
    ion = feed.closing_analyte
    if all(limit.parameter != ion for limit in limits.limits):
        return []
    return [
        f"the charge is closed with {ion}, which has a limit: whether it is met leans on the"
        " charge balance of the analysis"
    ]


def _surcharge_notes(feed: FeedBlock, limits: LimitsBlock) -> list[str]:
    charged = [limit.label for limit in limits.limits if limit.surcharge_per_kg is not None]
    if not charged or feed.stands_for != "peak":
        return []
    return [
        f"surcharges on {', '.join(charged)} are counted as if every day were the peak that the"
        " analysis stands for: a year costs less"
    ]


def _sample_notes(feed: FeedBlock) -> list[str]:
    if feed.sampled is None:
        return []
    count = len(feed.sampled.samples.samples)
    return [
        f"the feed is {count} samples in {feed.sampled.samples.source}; where one water is shown it"
        " is their flow-weighted mean"
    ]


def _jar_notes(jar: JarCalibration | None, analysis: WaterAnalysis) -> list[str]:
    """Metals of the feed that have left the range of the jar tests."""
    if jar is None:
        return []
    feed = {name: m.dissolved_mg_per_l for name, m in analysis.measurements.items()}
    return [f"{text}: make new jar tests" for text in jar.outside(feed_mg_per_l=feed)]
