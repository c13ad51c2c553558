"""Analytes, measurements and the water analysis: what a laboratory reports, as frozen types.

Owns the table that leads from an analyte to its component; turning an analysis into component
totals is `chemistry.feed`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from chemistry.errors import WaterError
from chemistry.formula import molar_mass_g_per_mol

# End point of an acidity titration unless the analysis names another: phenolphthalein, pH 8.3
# (common practice).
ACIDITY_END_PH = 8.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Analyte:
    """A parameter that a laboratory reports, and the component that carries it.

    ``molar_mass_g_per_mol`` turns mg/L of the analyte itself into mol/L of ``component``;
    ``protons`` counts the H+ that the analyte brings beside its component (bicarbonate is
    carbonate and one proton). ``charge`` is the analyte's own. ``component`` is empty where the
    equilibrium knows none: such analytes are carried as notes.
    """

    analyte: str
    name: str
    component: str
    molar_mass_g_per_mol: float
    charge: int
    is_metal: bool = False
    protons: int = 0
    note: str = ""

    @property
    def is_modelled(self) -> bool:
        """Whether the equilibrium knows a component for it."""
        return bool(self.component)


def _metal(analyte: str, name: str, component: str, charge: int, note: str = "") -> Analyte:
    mass = molar_mass_g_per_mol(component)
    return Analyte(
        analyte=analyte, name=name, component=component, molar_mass_g_per_mol=mass,
        charge=charge, is_metal=True, note=note,
    )  # fmt: skip


def _ligand(
    analyte: str, name: str, component: str, charge: int, *, acid_protons: int = 0
) -> Analyte:
    """A chelating ligand; with ``acid_protons`` its mg/L are those of the acid."""
    acid = acid_protons * molar_mass_g_per_mol("H")
    return Analyte(
        analyte=analyte, name=name, component=component, charge=charge,
        molar_mass_g_per_mol=molar_mass_g_per_mol(component) + acid,
        note=f"mg/L of {name}; holds metals in solution",
    )  # fmt: skip


def _ion(
    analyte: str, name: str, component: str, charge: int, formula: str = "", protons: int = 0
) -> Analyte:
    return Analyte(
        analyte=analyte, name=name, component=component, charge=charge, protons=protons,
        molar_mass_g_per_mol=molar_mass_g_per_mol(formula or component),
    )  # fmt: skip


_TABLE: tuple[Analyte, ...] = (
    _metal("Cu", "copper", "Cu+2", 2),
    _metal("Ni", "nickel", "Ni+2", 2),
    _metal("Zn", "zinc", "Zn+2", 2),
    _metal("Pb", "lead", "Pb+2", 2),
    _metal("Cd", "cadmium", "Cd+2", 2),
    _metal("Ag", "silver", "Ag+", 1),
    _metal("Hg", "mercury", "Hg+2", 2),
    _metal("Co", "cobalt", "Co+2", 2),
    _metal("Mn", "manganese", "Mn+2", 2),
    _metal("Al", "aluminium", "Al+3", 3),
    _metal("Ba", "barium", "Ba+2", 2),
    _metal("Sr", "strontium", "Sr+2", 2),
    _metal("Fe(II)", "ferrous iron", "Fe+2", 2),
    _metal("Fe(III)", "ferric iron", "Fe+3", 3),
    _metal("Cr(III)", "trivalent chromium", "Cr+3", 3),
    Analyte(
        analyte="Cr(VI)", name="hexavalent chromium", component="",
        molar_mass_g_per_mol=molar_mass_g_per_mol("Cr"), charge=-2, is_metal=True,
        note="not removed by precipitation: it needs reduction to Cr(III) first",
    ),
    Analyte(
        analyte="CN", name="free cyanide", component="",
        molar_mass_g_per_mol=molar_mass_g_per_mol("CN-"), charge=-1,
        note="holds metals in solution and must be destroyed first",
    ),
    _ion("Ca", "calcium", "Ca+2", 2),
    _ion("Mg", "magnesium", "Mg+2", 2),
    _ion("Na", "sodium", "Na+", 1),
    _ion("K", "potassium", "K+", 1),
    _ion("NH4", "ammonium", "NH4+", 1),
    _ion("Cl", "chloride", "Cl-", -1),
    _ion("SO4", "sulfate", "SO4-2", -2),
    _ion("CO3", "carbonate", "CO3-2", -2),
    _ion("HCO3", "bicarbonate", "CO3-2", -1, formula="HCO3-", protons=1),
    _ion("S", "sulfide (as sulfur)", "HS-", -1, formula="S", protons=0),
    _ion("F", "fluoride", "F-", -1),
    _ion("PO4", "phosphate", "PO4-3", -3),
    _ion("acetate", "acetate", "CH3COO-", -1),
    # EDTA and NTA are names of acids, and what laboratories state them as; the others are anions.
    _ligand("EDTA", "EDTA (as the acid, H4EDTA)", "(EDTA)-4", -4, acid_protons=4),
    _ligand("NTA", "NTA (as the acid, H3NTA)", "(NTA)-3", -3, acid_protons=3),
    _ligand("citrate", "citrate (as the anion)", "(Cit)-3", -3),
    _ligand("tartrate", "tartrate (as the anion)", "(Tart)-2", -2),
    _ligand("oxalate", "oxalate (as the anion)", "(Ox)-2", -2),
    _ligand("gluconate", "gluconate (as the anion)", "(Gluc)-", -1),
)  # fmt: skip

ANALYTES: Mapping[str, Analyte] = {a.analyte: a for a in _TABLE}
"""Every analyte by its id."""

CHELATES: tuple[str, ...] = ("EDTA", "NTA", "citrate", "tartrate", "oxalate", "gluconate")
"""Ids of the chelating ligands."""

METALS: tuple[str, ...] = tuple(a.analyte for a in _TABLE if a.is_metal)
"""Ids of the metals, whose total and dissolved amounts may differ."""


def component_of(ion: str) -> str:
    """Component behind an analyte id or a component name.

    Raises
    ------
    WaterError
        Neither an analyte with a component nor a component of the table.

    Examples
    --------
    >>> component_of("SO4"), component_of("SO4-2")
    ('SO4-2', 'SO4-2')
    """
    if ion in ANALYTES and ANALYTES[ion].is_modelled:
        return ANALYTES[ion].component
    if any(a.component == ion for a in _TABLE if a.is_modelled):
        return ion
    raise WaterError(f"{ion!r} is no ion that the equilibrium knows: use SO4, Cl, Na or another")


def analyte_of(component: str) -> str:
    """Analyte id that a component is best printed as (``SO4-2`` gives ``SO4``).

    Raises
    ------
    WaterError
        The component carries no analyte.
    """
    for analyte in _TABLE:
        if analyte.component == component:
            return analyte.analyte
    raise WaterError(f"component {component!r} carries no analyte")


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """One reported value, in mg/L of the analyte itself.

    ``total_mg_per_l`` is the unfiltered value, equal to the dissolved one where only one was
    reported. With ``below_reporting_limit`` both hold the reporting limit: what compliance counts;
    the balance uses half of the dissolved value.
    """

    dissolved_mg_per_l: float
    total_mg_per_l: float
    below_reporting_limit: bool = False
    as_written: str = ""

    @property
    def balance_mg_per_l(self) -> float:
        """Dissolved amount that mass and charge balances use. [mg/L]"""
        return self.dissolved_mg_per_l * (0.5 if self.below_reporting_limit else 1.0)

    @property
    def particulate_mg_per_l(self) -> float:
        """Amount on particles: total less dissolved. [mg/L]"""
        return self.total_mg_per_l - self.dissolved_mg_per_l


@dataclass(frozen=True, slots=True, kw_only=True)
class WaterAnalysis:
    """A water as the laboratory describes it.

    Parameters
    ----------
    measurements
        Analyte id to its measurement.
    temperature_degc
        Temperature of the water. [C]
    ph
        Measured pH; may be absent where acidity or a titration is given.
    acidity_meq_per_l
        Base needed to ``acidity_end_ph``; overrides the pH for the acid. [meq/L]
    titration
        Points (base added in meq/L, pH); override both.
    alkalinity_mg_per_l_as_caco3
        Total alkalinity; sets the carbonate. [mg/L as CaCO3]
    tss_mg_per_l
        Suspended solids of the feed. [mg/L]
    close_charge_with
        Ion, as component or analyte id, whose amount is moved until the water is electroneutral.
    aerated
        Whether dissolved Fe(II) becomes Fe(III) before treatment.

    Raises
    ------
    WaterError
        Unknown analytes, negative or non-finite values, dissolved above total, no acid given.
    """

    measurements: Mapping[str, Measurement]
    close_charge_with: str
    temperature_degc: float = 25.0
    ph: float | None = None
    acidity_meq_per_l: float | None = None
    acidity_end_ph: float = ACIDITY_END_PH
    titration: tuple[tuple[float, float], ...] = ()
    alkalinity_mg_per_l_as_caco3: float | None = None
    tss_mg_per_l: float = 0.0
    aerated: bool = False
    notes: tuple[str, ...] = field(default=())

    def __post_init__(self) -> None:
        """Refuse what no water can be; every problem in one message."""
        problems = [*_measurement_problems(self.measurements), *_acid_problems(self)]
        for name in ("tss_mg_per_l", "alkalinity_mg_per_l_as_caco3"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value >= 0.0):
                problems.append(f"{name} is {value}: it must be a number of at least 0")
        if not math.isfinite(self.temperature_degc):
            problems.append("the temperature is no number")
        if problems:
            raise WaterError("; ".join(problems))
        component_of(self.close_charge_with)


def _measurement_problems(measurements: Mapping[str, Measurement]) -> list[str]:
    problems: list[str] = []
    for analyte, value in measurements.items():
        if analyte not in ANALYTES:
            problems.append(f"unknown analyte {analyte!r}: known are {', '.join(ANALYTES)}")
        problems += [
            f"{analyte}: {part} mg/L is no concentration"
            for part in (value.dissolved_mg_per_l, value.total_mg_per_l)
            if not (math.isfinite(part) and part >= 0.0)
        ]
        if value.dissolved_mg_per_l > value.total_mg_per_l:
            problems.append(
                f"{analyte}: dissolved {value.dissolved_mg_per_l:g} mg/L is above total "
                f"{value.total_mg_per_l:g} mg/L"
            )
    return problems


def _acid_problems(analysis: WaterAnalysis) -> list[str]:
    problems: list[str] = []
    points = [("titration", ph) for _, ph in analysis.titration]
    if analysis.ph is not None:
        points.append(("measured", analysis.ph))
    points.append(("acidity end", analysis.acidity_end_ph))
    for what, ph in points:
        if not 0.0 <= ph <= 14.0:
            problems.append(f"{what} pH {ph} is outside 0 to 14")
    if any(not math.isfinite(base) or base < 0.0 for base, _ in analysis.titration):
        problems.append("a titration point has a negative or missing amount of base")
    acidity = analysis.acidity_meq_per_l
    if acidity is not None and not (math.isfinite(acidity) and acidity >= 0.0):
        problems.append(f"acidity {acidity} meq/L is no amount of base")
    if analysis.ph is None and acidity is None and not analysis.titration:
        problems.append("no acid given: state the pH, an acidity or titration points")
    return problems
