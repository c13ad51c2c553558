"""The site problem: feed, limits, treatment, disposal and offers as frozen types.

Owns the shapes that planning works on; reading a site file is `optimiser.site_reader`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from catalogs.reagents import Reagent
from chemistry.feed import WaterAnalysis
from chemistry.sample_waters import SampleWaters
from chemistry.samples import Samples
from chemistry.system import System
from optimiser.jar_file import JarCalibration
from optimiser.offer import Offer

__all__ = [
    "Disposal",
    "DisposalRule",
    "Limit",
    "Offer",
    "OwnConstant",
    "PhWindow",
    "Separator",
    "Site",
    "SolidSwitch",
    "SolverSettings",
    "StockKeeping",
    "Treatment",
]


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """A ceiling on one parameter of the treated water, with the periods it is written for.

    ``parameter`` is an analyte (``Cu``), a burden (``SO4``, ``TDS``, ``hardness``, ``sulfide``), or
    ``sum``, in which case ``of`` lists the analytes that are added up. Concentrations in mg/L of
    the total (dissolved and carried), loads in kg per day; ``None`` where none is written.
    ``design_margin`` replaces the site's for this limit. ``surcharge_per_kg`` is charged on the
    mean discharge above ``free_mg_per_l``, beside the ceilings or instead of them.
    """

    parameter: str
    of: tuple[str, ...] = ()
    daily_mg_per_l: float | None = None
    monthly_mg_per_l: float | None = None
    daily_load_kg_per_d: float | None = None
    monthly_load_kg_per_d: float | None = None
    design_margin: float | None = None
    surcharge_per_kg: float | None = None
    free_mg_per_l: float = 0.0
    source: str = ""

    @property
    def label(self) -> str:
        """The parameter as printed: ``Cu``, or ``Cu + Ni + Zn`` for a sum."""
        return " + ".join(self.of) if self.of else self.parameter


@dataclass(frozen=True, slots=True, kw_only=True)
class PhWindow:
    """A closed pH interval."""

    low: float
    high: float
    source: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Separator:
    """What takes the solids out after the reaction, and what slips past it.

    ``polymer_g_per_kg_solids`` replaces the treatment's for this separator.
    """

    name: str = "clarifier"
    tss_mg_per_l: float = 20.0
    capture_fraction: float = 0.98
    cost_per_year: float = 0.0
    polymer_g_per_kg_solids: float | None = None
    source: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Treatment:
    """What may be dosed, how it is controlled and what the plant's tanks do."""

    reagents: tuple[str, ...]
    required: tuple[str, ...] = ()
    trim_reagents: tuple[str, ...] = ()
    most_reagents: int = 4
    dose_ceilings_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    least_doses_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    dose_factors: Mapping[str, float] = field(default_factory=dict)
    equipment_cost_per_year: Mapping[str, float] = field(default_factory=dict)
    ph_set_point: PhWindow = PhWindow(low=6.0, high=11.5)
    ph_tolerance: float = 0.25
    dose_tolerance_fraction: float = 0.05
    separator: Separator = Separator()
    separator_options: tuple[Separator, ...] = ()
    """Separators to choose from; empty where there is only `separator`."""
    polymer_g_per_kg_solids: float = 0.0
    polymer_price_per_kg: float = 0.0
    scale_supersaturation_si: float = 0.3
    magnesia_ph_ceiling: float | None = None
    vent_pco2_atm: float = 4.2e-4
    sulfide_least_ph: float = 8.5
    scrubber: str = ""
    h2s_limit_ppm: float = 10.0
    inert_solids_dilute: bool = False
    salty_water_allowed: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class FeedRange:
    """Least and greatest rate that a pump or a feeder holds (its turndown)."""

    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Dosing:
    """What is installed for one reagent; None and 0 where the site says nothing.

    ``pump_l_per_h`` for liquids, ``feeder_kg_per_h`` and ``dissolver_kg_per_h`` for solids,
    ``store_m3`` the tank or ``store_t`` the silo, ``lowest_degc`` the coldest that an unheated
    store gets.
    """

    pump_l_per_h: FeedRange | None = None
    feeder_kg_per_h: FeedRange | None = None
    dissolver_kg_per_h: float | None = None
    store_m3: float | None = None
    store_t: float | None = None
    lowest_degc: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class StockKeeping:
    """What ordering and keeping stock cost, and how the use is spread over the year.

    ``order_fee`` is what an order costs beside its freight (placing, receiving, checking), in the
    site's currency; ``holding_percent_per_year`` is of the goods' price. Both defaults are common
    practice without a source. ``least_stock_d`` days of use are always there, or the offer's lead
    time where that is longer. ``monthly_flow_m3_per_d`` has twelve flows from January on, whose
    ratios spread the year's use; empty: those of the samples, or an even year.
    """

    order_fee: float = 50.0
    holding_percent_per_year: float = 10.0
    least_stock_d: float = 0.0
    monthly_flow_m3_per_d: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class DisposalRule:
    """A sludge class and when it applies; the first rule whose condition holds decides.

    The condition: any of ``metals`` above ``above_mg_per_kg_dry`` of the dry cake; a rule without
    metals always holds.
    """

    sludge_class: str
    tariff_per_wet_t: float
    metals: tuple[str, ...] = ()
    above_mg_per_kg_dry: float = 0.0
    pickup_fee: float = 0.0
    tonnes_per_pickup: float = 10.0
    yearly_fee: float = 0.0
    text: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Disposal:
    """Cake and tariff; ``most_wet_t_per_year`` caps the wet sludge of a year, None: no cap."""

    rules: tuple[DisposalRule, ...]
    cake_solids_fraction: float = 0.30
    bound_water_factor: float = 1.2
    most_wet_t_per_year: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class OwnConstant:
    """A constant of the site's own: a new species or solid, or one in place of the catalog's.

    ``log10_k`` belongs to ``reaction`` (formation from the components) at 25 C and zero ionic
    strength. None where a catalogued value stays.
    """

    name: str
    kind: str
    reaction: str
    log10_k: float
    source: str
    replace: bool = False
    enthalpy_kj_per_mol: float | None = None
    mineral: str = ""
    scale_former: bool | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SolidSwitch:
    """A catalogued solid that the site switches on or off, and why."""

    solid: str
    on: bool
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Uncertainty:
    """How far the site's own figures may be off, as standard deviations.

    The defaults are common practice without a source: 5 % on a laboratory's analysis, 0.05 pH on a
    calibrated electrode, 30 % on the solids that slip past a separator.
    """

    analysis_percent: float = 5.0
    ph: float = 0.05
    carried_solids_percent: float = 30.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Procurement:
    """What contracts are held against; money in the site's currency.

    ``switching_costs`` are spent once for a reagent that is not dosed today (tank, pump, silo);
    ``term_years`` are the years that costs are added up over, where empty the longest term among
    the offers compared; ``last_year_bill`` is what reagents cost, delivered, last year.
    """

    switching_costs: Mapping[str, float] = field(default_factory=dict)
    term_years: float | None = None
    last_year_bill: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class SolverSettings:
    """Choice and limits of the mixed-integer solver."""

    name: str = "highs"
    time_limit_s: float = 60.0
    relative_gap: float = 1e-6
    seed: int = 1


@dataclass(frozen=True, eq=False, kw_only=True)
class Site:
    """A validated problem: everything that `plan` and `assess` need."""

    name: str
    path: Path
    currency: str
    flow_m3_per_d: float
    operating_days_per_year: float
    stands_for: str
    analysis: WaterAnalysis
    system: System
    reagents: Mapping[str, Reagent]
    limits: tuple[Limit, ...]
    ph_window: PhWindow
    design_margin: float
    variability: Mapping[str, tuple[float, float]]
    floors_mg_per_l: Mapping[str, Mapping[str, float]]
    treatment: Treatment
    disposal: Disposal
    burden_charges_per_kg: Mapping[str, float]
    offers: tuple[Offer, ...]
    solver: SolverSettings = SolverSettings()
    uncertainty: Uncertainty = Uncertainty()
    peak_flow_m3_per_d: float | None = None
    dosing: Mapping[str, Dosing] = field(default_factory=dict)
    stock: StockKeeping = StockKeeping()
    pretreated: Mapping[str, str] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    today: Mapping[str, float] = field(default_factory=dict)
    """Doses of today's practice, mg/L pure fed, if the site file gives them."""
    procurement: Procurement = Procurement()
    own_constants: tuple[OwnConstant, ...] = ()
    solid_switches: tuple[SolidSwitch, ...] = ()
    samples: Samples | None = None
    """Dated samples of the feed where the site names a file; ``analysis`` is then their mean."""
    sample_waters: SampleWaters | None = None
    """The samples' closed waters in ``system``, in the order of ``samples``."""
    jar: JarCalibration | None = None
    """Jar tests that the site names; ``treatment`` and ``floors_mg_per_l`` hold their factors."""
    mean_caps_mg_per_l: Mapping[str, float] = field(default_factory=dict)
    """Caps on burdens of the mean discharge, which trade-offs set; a permit's are limits."""

    @property
    def flow_m3_per_year(self) -> float:
        """Treated volume in a year. [m3/year]"""
        return self.flow_m3_per_d * self.operating_days_per_year

    @property
    def residual_factors(self) -> Mapping[str, tuple[float, float, float]]:
        """Metal to (factor, low, high) of dissolved as measured over theory, from jar tests."""
        if self.jar is None:
            return {}
        found = self.jar.residual_factors
        return {metal: (fit.factor, fit.low, fit.high) for metal, fit in found.items()}
