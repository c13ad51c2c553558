"""The treatment, disposal and solver blocks of a site file.

Owns reading these blocks and what must agree inside them; whether every reagent can be bought is
checked where the price book is at hand, in `optimiser.site_reader`.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from catalogs.entries import (
    FRACTION,
    NON_NEGATIVE,
    PH,
    POSITIVE,
    POSITIVE_FRACTION,
    Entry,
    Range,
)
from catalogs.problems import Spot, did_you_mean, echo
from catalogs.reagents import Reagent
from chemistry.feed import METALS
from optimiser.site import (
    Disposal,
    DisposalRule,
    PhWindow,
    Separator,
    SolverSettings,
    Treatment,
    Uncertainty,
)
from optimiser.site_feed import STATES_OF_ELEMENT

SOLVERS = ("highs", "cbc")
CAKE_METALS = (*METALS, *STATES_OF_ELEMENT)
_DOSE_FACTOR = Range(low=1.0, high=5.0)
_TOLERANCE = Range(low=0.0, high=2.0)
_SATURATION_INDEX = Range(low=0.0, high=3.0)
_BOUND_WATER = Range(low=1.0, high=3.0)
_GAP = Range(above=0.0, high=0.1)
_PERCENT = Range(low=0.0, high=200.0)
_DEFAULTS = Treatment(reagents=())


@dataclass(frozen=True, slots=True, kw_only=True)
class TreatmentBlock:
    """The treatment with the places where each reagent is allowed."""

    treatment: Treatment
    allowed_at: Mapping[str, Spot] = field(default_factory=dict)
    jar_tests: str = ""
    jar_spot: Spot | None = None


def read_treatment(entry: Entry, reagents: Mapping[str, Reagent]) -> TreatmentBlock:
    """Read the treatment block of a site file.

    Parameters
    ----------
    entry
        The block; its log takes the problems.
    reagents
        The catalog of reagents by id.
    """
    allowed_at: dict[str, Spot] = {}
    main = _reagent_list(entry, "reagents", reagents, allowed_at, required=True)
    trim = _reagent_list(entry, "trim_reagents", reagents, allowed_at)
    _check_trim(entry, trim, reagents)
    required = _reagent_list(entry, "required", main, {})
    known = tuple(dict.fromkeys([*main, *trim]))
    ceilings = entry.numbers("dose_ceilings_mg_per_l", known, "allowed reagents", POSITIVE)
    least = entry.numbers("least_doses_mg_per_l", known, "allowed reagents", NON_NEGATIVE)
    _check_dose_ends(entry, ceilings, least)
    options = _read_separator_options(entry)
    treatment = Treatment(
        reagents=main, required=required, trim_reagents=trim, dose_ceilings_mg_per_l=ceilings,
        least_doses_mg_per_l=least,
        most_reagents=entry.count_or("most_reagents", _DEFAULTS.most_reagents, low=1, high=9),
        dose_factors=entry.numbers("dose_factors", known, "allowed reagents", _DOSE_FACTOR),
        equipment_cost_per_year=entry.numbers(
            "equipment_cost_per_year", known, "allowed reagents", NON_NEGATIVE
        ),
        ph_set_point=read_ph_window(entry, "ph_set_point") or _DEFAULTS.ph_set_point,
        separator=options[0] if options else _read_separator(entry),
        separator_options=options,
        scrubber=entry.text_or("scrubber"),
        inert_solids_dilute=entry.flag_or("inert_solids_dilute", default=False),
        salty_water_allowed=entry.flag_or("salty_water_allowed", default=False),
        **_plain_numbers(entry),
    )  # fmt: skip
    if len(required) > treatment.most_reagents:
        entry.at("required").problem(
            f"{len(required)} required reagents",
            f"at most {treatment.most_reagents}, the number in most_reagents",
            "Raise `most_reagents` or require fewer.",
        )
    if treatment.sulfide_least_ph < _DEFAULTS.sulfide_least_ph and not treatment.scrubber:
        entry.at("sulfide_least_ph").problem(
            f"{treatment.sulfide_least_ph:g} and no scrubber",
            f"{_DEFAULTS.sulfide_least_ph:g} or more, or a named scrubber",
            "Below that pH sulfide gives off hydrogen sulfide: name the gas scrubber of the closed "
            "tank in `scrubber`, or raise `sulfide_least_ph`.",
        )
    jar_tests = entry.text_or("jar_tests")
    entry.finish()
    return TreatmentBlock(
        treatment=treatment, allowed_at=allowed_at, jar_tests=jar_tests,
        jar_spot=entry.at("jar_tests"),
    )  # fmt: skip


_PLAIN: Mapping[str, Range] = {
    "ph_tolerance": _TOLERANCE,
    "dose_tolerance_fraction": Range(low=0.0, high=0.5),
    "polymer_g_per_kg_solids": NON_NEGATIVE,
    "polymer_price_per_kg": NON_NEGATIVE,
    "scale_supersaturation_si": _SATURATION_INDEX,
    "vent_pco2_atm": Range(above=0.0, high=1.0),
    "sulfide_least_ph": PH,
    "h2s_limit_ppm": POSITIVE,
}


def _plain_numbers(entry: Entry) -> dict[str, float]:
    """Read the settings that are one number with a default."""
    values = {
        name: entry.number_or(name, getattr(_DEFAULTS, name), allowed)
        for name, allowed in _PLAIN.items()
    }
    ceiling = entry.number_or("magnesia_ph_ceiling", None, PH)
    if ceiling is not None:
        values["magnesia_ph_ceiling"] = ceiling
    return values


def _reagent_list(
    entry: Entry, key: str, options: Collection[str], places: dict[str, Spot], *,
    required: bool = False,
) -> tuple[str, ...]:  # fmt: skip
    """Read a list of reagents, remembering where each stands."""
    what = "reagents" if isinstance(options, Mapping) else "allowed reagents"
    before = len(entry.spot.log.problems)
    names = entry.names(key, options, what, required=required)
    for node, spot in entry.items(key):
        text = getattr(node, "text", "")
        if text in names:
            places.setdefault(text, spot)
    if required and not names and entry.has(key) and len(entry.spot.log.problems) == before:
        entry.at(key).problem("an empty list", "at least one reagent", "Name what may be dosed.")
    return names


def _check_trim(entry: Entry, trim: Collection[str], reagents: Mapping[str, Reagent]) -> None:
    movers = [name for name, reagent in reagents.items() if reagent.ph_control]
    for name in trim:
        if name not in movers:
            entry.at("trim_reagents").problem(
                echo(name),
                "reagents that move the pH",
                f"{reagents[name].name} cannot trim a pH. {did_you_mean('', movers)}",
            )


def _check_dose_ends(
    entry: Entry, ceilings: Mapping[str, float], least: Mapping[str, float]
) -> None:
    for name, low in least.items():
        if name in ceilings and low > ceilings[name]:
            entry.at("least_doses_mg_per_l").problem(
                f"{name} {low:g} mg/L",
                f"at most its ceiling of {ceilings[name]:g} mg/L",
                "Lower the least dose or raise the ceiling.",
            )


def read_ph_window(entry: Entry, key: str, *, required: bool = False) -> PhWindow | None:
    """Read a pH interval ``{low, high, source}``; None when it is left out or damaged."""
    block = entry.block(key) if required else entry.block_or_none(key)
    if block is None:
        return None
    low, high = block.number("low", PH), block.number("high", PH)
    source = block.text_or("source")
    block.finish()
    if low >= high:
        block.spot.problem(
            f"low {low:g} and high {high:g}", "low below high", "Correct or swap the two values."
        )
    return PhWindow(low=low, high=high, source=source)


def _read_separator_options(entry: Entry) -> tuple[Separator, ...]:
    """Separators to choose from; refused beside a single `separator`."""
    options = tuple(_separator(block) for block in entry.blocks("separators"))
    if options and entry.has("separator"):
        entry.at("separators").problem(
            "`separators` beside `separator`", "one of the two",
            "Write every separator that may be chosen under `separators`.",
        )  # fmt: skip
    names = [option.name for option in options]
    if len(set(names)) < len(names):
        entry.at("separators").problem(
            f"the names {', '.join(names)}", "a name of its own for each", "Rename one of them."
        )
    return options


def _read_separator(entry: Entry) -> Separator:
    block = entry.block_or_none("separator")
    return _DEFAULTS.separator if block is None else _separator(block)


def _separator(block: Entry) -> Separator:
    usual = _DEFAULTS.separator
    separator = Separator(
        name=block.text_or("name", usual.name),
        tss_mg_per_l=block.number("tss_mg_per_l", NON_NEGATIVE),
        capture_fraction=block.number_or("capture_fraction", usual.capture_fraction, FRACTION),
        cost_per_year=block.number_or("cost_per_year", usual.cost_per_year, NON_NEGATIVE),
        polymer_g_per_kg_solids=block.number_or("polymer_g_per_kg_solids", None, NON_NEGATIVE),
        source=block.text_or("source"),
    )
    block.finish()
    return separator


def read_disposal(entry: Entry) -> Disposal:
    """Read the disposal block of a site file.

    Parameters
    ----------
    entry
        The block; its log takes the problems.
    """
    usual = Disposal(rules=())
    rules = [_rule(block) for block in entry.blocks("rules", required=True)]
    _check_rules(entry, rules)
    disposal = Disposal(
        rules=tuple(rules),
        cake_solids_fraction=entry.number_or(
            "cake_solids_fraction", usual.cake_solids_fraction, POSITIVE_FRACTION
        ),
        bound_water_factor=entry.number_or(
            "bound_water_factor", usual.bound_water_factor, _BOUND_WATER
        ),
        most_wet_t_per_year=entry.number_or("most_wet_t_per_year", None, POSITIVE),
    )
    entry.finish()
    return disposal


def _rule(entry: Entry) -> DisposalRule:
    metals = entry.names("metals", CAKE_METALS, "metals")
    above = entry.number_or("above_mg_per_kg_dry", 0.0, NON_NEGATIVE)
    if metals and not entry.has("above_mg_per_kg_dry"):
        entry.spot.problem(
            "metals without a threshold", "above_mg_per_kg_dry", "Add it, or leave out the metals."
        )
    if entry.has("above_mg_per_kg_dry") and not entry.has("metals"):
        entry.spot.problem(
            "a threshold without metals", "metals", "List the metals that it holds for."
        )
    rule = DisposalRule(
        sludge_class=entry.text("sludge_class"),
        tariff_per_wet_t=entry.number("tariff_per_wet_t", NON_NEGATIVE),
        metals=metals,
        above_mg_per_kg_dry=above,
        pickup_fee=entry.number_or("pickup_fee", 0.0, NON_NEGATIVE),
        tonnes_per_pickup=entry.number_or("tonnes_per_pickup", 10.0, POSITIVE),
        yearly_fee=entry.number_or("yearly_fee", 0.0, NON_NEGATIVE),
        text=entry.text_or("text"),
    )
    entry.finish()
    return rule


def _check_rules(entry: Entry, rules: list[DisposalRule]) -> None:
    """Every sludge must meet exactly one deciding rule: an unconditional one, and last."""
    always = [number for number, rule in enumerate(rules, start=1) if not rule.metals]
    spot = entry.at("rules")
    if rules and not always:
        spot.problem(
            "only rules with a condition",
            "a last rule without `metals` for every other sludge",
            "Add the tariff of ordinary sludge as last rule.",
        )
    elif always and always[0] < len(rules):
        spot.problem(
            f"rules after rule {always[0]}, which always holds",
            "the rule without `metals` last",
            "The first rule that holds decides: move that one to the end.",
        )


def read_solver(entry: Entry | None) -> SolverSettings:
    """Read the solver block, which may be left out."""
    usual = SolverSettings()
    if entry is None:
        return usual
    solver = SolverSettings(
        name=entry.choice_or("name", usual.name, SOLVERS, "solvers"),
        time_limit_s=entry.number_or("time_limit_s", usual.time_limit_s, POSITIVE),
        relative_gap=entry.number_or("relative_gap", usual.relative_gap, _GAP),
        seed=entry.count_or("seed", usual.seed, low=0, high=2_000_000_000),
    )
    entry.finish()
    return solver


def read_uncertainty(entry: Entry | None) -> Uncertainty:
    """Read how far the site's figures may be off; the block may be left out."""
    usual = Uncertainty()
    if entry is None:
        return usual
    unsure = Uncertainty(
        analysis_percent=entry.number_or("analysis_percent", usual.analysis_percent, _PERCENT),
        ph=entry.number_or("ph", usual.ph, _TOLERANCE),
        carried_solids_percent=entry.number_or(
            "carried_solids_percent", usual.carried_solids_percent, _PERCENT
        ),
    )
    entry.finish()
    return unsure
