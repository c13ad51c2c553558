"""The limits block of a site file: named sets, own limits, pH window, variability and floors.

Owns which limits apply to which feed; what a plan makes of them (margin, ratios) is elsewhere.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass

from catalogs.entries import NON_NEGATIVE, POSITIVE, POSITIVE_FRACTION, Entry, Range
from catalogs.limit_sets import LimitSet, SetLimit, load_limit_sets
from catalogs.practice_data import LIGAND_FAMILIES, floors_mg_per_l, variability_of
from catalogs.problems import Spot, echo, listed
from chemistry.feed import ANALYTES, BURDENS, METALS
from optimiser.site import Limit, PhWindow
from optimiser.site_combined_flow import read_combined_flow
from optimiser.site_feed import STATES_OF_ELEMENT
from optimiser.site_treatment import read_ph_window

SUM = "sum"
LIMITED_METALS = (*METALS, *STATES_OF_ELEMENT)
LIMITED = (*LIMITED_METALS, *BURDENS, SUM)
"""Parameters that a limit may be written for."""

CEILINGS = (
    "daily_mg_per_l", "monthly_mg_per_l", "daily_load_kg_per_d", "monthly_load_kg_per_d",
)  # fmt: skip
DESIGN_MARGIN = 0.8
_RATIO = Range(low=1.0, high=50.0)
_NOT_PLANNED: Mapping[str, str] = {
    "CN": "precipitation does not remove cyanide",
    "TSS": "the separator's suspended solids are an entry of the site",
}
_ANALYTES_OF_BURDEN: Mapping[str, tuple[str, ...]] = {"hardness": ("Ca", "Mg"), "sulfide": ("S",)}


@dataclass(frozen=True, slots=True, kw_only=True)
class Foreseen:
    """What the treated water can hold: analysed in the feed, or brought by closing and doses."""

    analysed: Collection[str]
    brought_components: Collection[str]
    cyanide_mg_per_l: float = 0.0
    flow_m3_per_d: float = 0.0

    def holds(self, parameter: str) -> bool:
        """Tell whether anything of a parameter can be in the treated water."""
        return parameter == "TDS" or any(
            name in self.analysed or ANALYTES[name].component in self.brought_components
            for name in analytes_of(parameter)
        )

    def is_analysed(self, parameter: str) -> bool:
        """Tell whether the feed's amount of a parameter is known."""
        return parameter == "TDS" or any(n in self.analysed for n in analytes_of(parameter))


def analytes_of(parameter: str) -> tuple[str, ...]:
    """Analytes that a limited parameter adds up.

    Examples
    --------
    >>> analytes_of("Cr"), analytes_of("hardness"), analytes_of("Cu")
    (('Cr(III)', 'Cr(VI)'), ('Ca', 'Mg'), ('Cu',))
    """
    if parameter in STATES_OF_ELEMENT:
        return STATES_OF_ELEMENT[parameter]
    if parameter in _ANALYTES_OF_BURDEN:
        return _ANALYTES_OF_BURDEN[parameter]
    return (parameter,) if parameter in ANALYTES else ()


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitsBlock:
    """What the limits block says, with the catalog's figures filled in."""

    limits: tuple[Limit, ...]
    ph_window: PhWindow
    design_margin: float
    variability: Mapping[str, tuple[float, float]]
    floors_mg_per_l: Mapping[str, Mapping[str, float]]
    notes: tuple[str, ...]


def read_limits(entry: Entry, foreseen: Foreseen | None) -> LimitsBlock:
    """Read the limits block of a site file.

    Parameters
    ----------
    entry
        The block; its log takes the problems.
    foreseen
        What can be in the treated water; None where the feed block is missing, which leaves that
        check out.
    """
    sets = load_limit_sets()
    chosen = [sets[name] for name in entry.names("sets", sets, "limit sets")]
    limits, notes = _from_sets(chosen, foreseen)
    limits, flow_notes = _combined(entry, chosen, limits, foreseen)
    notes += flow_notes
    if foreseen is not None:
        _check_cyanide(chosen, foreseen.cyanide_mg_per_l, entry.at("sets"))
    own: list[Limit] = []
    for block in entry.blocks("own"):
        limit = _own_limit(block, foreseen)
        if limit is not None:
            own.append(limit)
    if not entry.has("sets") and not entry.has("own"):
        entry.spot.problem("no limit", "`sets` or `own`", "Name a limit set or add an own limit.")
    window, ph_notes = _ph_window(entry, chosen)
    margin = entry.number_or("design_margin", DESIGN_MARGIN, POSITIVE_FRACTION)
    variability = _variability(entry)
    floors = _floors(entry)
    entry.finish()
    every = (*limits, *own)
    return LimitsBlock(
        limits=every, ph_window=window, design_margin=margin, variability=variability,
        floors_mg_per_l=floors,
        notes=(*notes, *ph_notes, *_unanalysed_notes(every, foreseen)),
    )  # fmt: skip


def _from_sets(
    chosen: Collection[LimitSet], foreseen: Foreseen | None
) -> tuple[list[Limit], list[str]]:
    """Limits of the named sets as far as the feed was analysed for them."""
    limits: list[Limit] = []
    notes: list[str] = []
    for limit_set in chosen:
        absent: list[str] = []
        for row in limit_set.limits:
            if row.parameter in _NOT_PLANNED:
                notes.append(_not_planned(limit_set, row))
            elif foreseen is not None and not foreseen.holds(row.parameter):
                absent.append(row.parameter)
            else:
                limits.append(
                    Limit(
                        parameter=row.parameter, daily_mg_per_l=row.daily_mg_per_l,
                        monthly_mg_per_l=row.monthly_mg_per_l, source=row.source,
                    )
                )  # fmt: skip
        if absent:
            notes.append(
                f"limit set {limit_set.limit_set}: {listed(absent)} not analysed, assumed absent"
            )
        notes += [
            f"limit set {limit_set.limit_set} leaves out: {text}" for text in limit_set.not_covered
        ]
    return limits, notes


def _combined(
    entry: Entry, chosen: Collection[LimitSet], limits: list[Limit], foreseen: Foreseen | None
) -> tuple[list[Limit], list[str]]:
    """Limits of the sets by the combined wastestream formula, where the site has one."""
    block = entry.block_or_none("combined_flow")
    if block is None or foreseen is None:
        return limits, []
    if not chosen:
        entry.at("combined_flow").problem(
            "a combined flow without a limit set",
            "`sets`: the formula is for categorical limits",
            "Name the set that regulates the process, or delete the block.",
        )
    found = read_combined_flow(block, foreseen.flow_m3_per_d)
    return (limits, []) if found is None else found.applied(limits)


def _check_cyanide(chosen: Collection[LimitSet], cyanide_mg_per_l: float, spot: Spot) -> None:
    """Refuse a cyanide above its limit: nothing that is planned here lowers it."""
    for limit_set in chosen:
        for row in limit_set.limits:
            ends = [v for v in (row.daily_mg_per_l, row.monthly_mg_per_l) if v is not None]
            if row.parameter == "CN" and cyanide_mg_per_l > min(ends):
                spot.problem(
                    f"CN {cyanide_mg_per_l:g} mg/L in the feed",
                    f"at most {min(ends):g} mg/L, its limit in {limit_set.limit_set}",
                    "Destroy it first and give the analysis after that: precipitation leaves it.",
                )


def _not_planned(limit_set: LimitSet, row: SetLimit) -> str:
    values = [
        f"{value:g} mg/L {period}"
        for value, period in ((row.daily_mg_per_l, "daily"), (row.monthly_mg_per_l, "monthly"))
        if value is not None
    ]
    return (
        f"limit set {limit_set.limit_set}: {row.parameter} {' and '.join(values)} is not planned"
        f" on: {_NOT_PLANNED[row.parameter]}"
    )


def _own_limit(entry: Entry, foreseen: Foreseen | None) -> Limit | None:
    before = len(entry.spot.log.problems)
    parameter = entry.choice("parameter", LIMITED, "limited parameters")
    of = entry.names("of", LIMITED_METALS, "metals", required=parameter == SUM)
    values = {key: entry.number_or(key, None, POSITIVE) for key in CEILINGS}
    rate = entry.number_or("surcharge_per_kg", None, POSITIVE)
    free = entry.number_or("free_mg_per_l", 0.0, NON_NEGATIVE)
    margin = entry.number_or("design_margin", None, POSITIVE_FRACTION)
    source = entry.text_or("source", f"{entry.spot.file}, line {entry.spot.line}")
    if not any(entry.has(key) for key in (*values, "surcharge_per_kg")):
        entry.spot.problem(
            "a limit without a value",
            listed((*values, "surcharge_per_kg")),
            "Add at least one of them.",
        )
    if entry.has("free_mg_per_l") and not entry.has("surcharge_per_kg"):
        entry.at("free_mg_per_l").problem(
            "a free concentration without a surcharge",
            "`free_mg_per_l` beside `surcharge_per_kg`",
            "Add the rate, or delete this key.",
        )
    entry.finish()
    if len(entry.spot.log.problems) > before:
        return None
    limit = Limit(
        parameter=parameter, of=of, daily_mg_per_l=values["daily_mg_per_l"],
        monthly_mg_per_l=values["monthly_mg_per_l"],
        daily_load_kg_per_d=values["daily_load_kg_per_d"],
        monthly_load_kg_per_d=values["monthly_load_kg_per_d"], design_margin=margin,
        surcharge_per_kg=rate, free_mg_per_l=free, source=source,
    )  # fmt: skip
    _check_own(limit, entry, foreseen)
    return limit


def _check_own(limit: Limit, entry: Entry, foreseen: Foreseen | None) -> None:
    for key, daily, monthly in (
        ("monthly_mg_per_l", limit.daily_mg_per_l, limit.monthly_mg_per_l),
        ("monthly_load_kg_per_d", limit.daily_load_kg_per_d, limit.monthly_load_kg_per_d),
    ):
        if daily is not None and monthly is not None and monthly > daily:
            entry.at(key).problem(
                f"monthly {monthly:g} above daily {daily:g}",
                "the monthly average at most the daily maximum",
                "Correct or swap the two values.",
            )
    if limit.parameter == SUM and len(limit.of) < 2:
        entry.at("of").problem("a sum of one", "at least two metals", "List what is added up.")
    if limit.parameter != SUM and limit.of:
        entry.at("of").problem(
            f"`of` beside {limit.parameter}", "`of` only with `parameter: sum`", "Delete `of`."
        )
    if foreseen is None:
        return
    for name in limit.of or (limit.parameter,):
        if not foreseen.holds(name):
            _refuse_unanalysed(name, entry.at("of" if limit.of else "parameter"))


def _refuse_unanalysed(name: str, spot: Spot) -> None:
    analytes = " or ".join(analytes_of(name))
    spot.problem(
        f"a limit on {echo(name)}, which was never analysed",
        "a parameter that the feed's analysis or an allowed reagent holds",
        f"Add {analytes} to feed.analysis (as `<0.05 mg/L` if none was found), or delete the"
        " limit.",
    )


def _unanalysed_notes(limits: Collection[Limit], foreseen: Foreseen | None) -> list[str]:
    """Say which limits are judged on a feed amount that nobody measured."""
    if foreseen is None:
        return []
    names = dict.fromkeys(n for limit in limits for n in (limit.of or (limit.parameter,)))
    return [
        f"{name} has a limit and was not analysed in the feed: only what the charge balance and"
        " the doses bring is counted"
        for name in names
        if foreseen.holds(name) and not foreseen.is_analysed(name)
    ]


def _ph_window(entry: Entry, chosen: Collection[LimitSet]) -> tuple[PhWindow, list[str]]:
    """Read the pH window; a set with a higher lower end raises it."""
    window = read_ph_window(entry, "ph", required=True)
    if window is None:
        return PhWindow(low=0.0, high=14.0), []
    notes: list[str] = []
    for limit_set in chosen:
        if limit_set.ph_low is None or limit_set.ph_low <= window.low:
            continue
        if limit_set.ph_low >= window.high:
            entry.at("ph").problem(
                f"high {window.high:g}",
                f"more than {limit_set.ph_low:g}, the least pH of {limit_set.limit_set}",
                "Correct `high`, or leave that limit set out.",
            )
        notes.append(
            f"the pH window begins at {limit_set.ph_low:g}, not at {window.low:g}:"
            f" {limit_set.ph_source}"
        )
        window = PhWindow(low=limit_set.ph_low, high=window.high, source=limit_set.ph_source)
    return window, notes


def _variability(entry: Entry) -> dict[str, tuple[float, float]]:
    """Ratios of the day's and the month's highest value to the mean, the site's own first."""
    ratios: dict[str, tuple[float, float]] = {}
    for name in (*LIMITED_METALS, *BURDENS):
        usual = variability_of(name)
        ratios[name] = (usual.daily_ratio, usual.monthly_ratio)
    block = entry.block_or_none("variability")
    for name, own in block.blocks_by_name(ratios, "limited parameters") if block else ():
        daily, monthly = own.number("daily", _RATIO), own.number("monthly", _RATIO)
        own.finish()
        if monthly > daily:
            own.spot.problem(
                f"monthly {monthly:g} above daily {daily:g}",
                "the monthly ratio at most the daily one",
                "Correct or swap the two values.",
            )
        ratios[name] = (daily, monthly)
    return ratios


def _floors(entry: Entry) -> dict[str, Mapping[str, float]]:
    """Practical floors by metal and family, the site's own first."""
    floors: dict[str, Mapping[str, float]] = dict(floors_mg_per_l())
    block = entry.block_or_none("floors")
    if block is not None:
        for name, _, _ in block.pairs():
            own = block.numbers(name, LIGAND_FAMILIES, "families", POSITIVE)
            if block.knows(name, floors, "metals"):
                floors[name] = {**floors[name], **own}
    return floors
