"""Figures of practice: floors under a promise, day-to-day variability, gases over a tank.

Owns published and customary figures with their sources; a site may override floors and
variability by its own data.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType

from catalogs.packaged import number_or_none, read_rows
from catalogs.problems import did_you_mean
from chemistry.analysis import METALS
from chemistry.system import GAS_CONSTANT_KJ_PER_MOL_K, LN10, REFERENCE_TEMPERATURE_K

LIGAND_FAMILIES = ("hydroxide", "carbonate", "sulfide", "chloride", "sulfate", "iron")
"""Families that a residual may be credited to."""

SALT_PARAMETERS = (
    "Ca", "Mg", "Na", "K", "NH4", "Cl", "SO4", "CO3", "HCO3", "S", "F", "PO4", "acetate",
    "TDS", "hardness", "sulfide",
)  # fmt: skip
"""Parameters whose variability is that of dissolved salts."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PracticalFloor:
    """Lowest total metal that practice lets a plan promise, with the range of the source."""

    metal: str
    family: str
    floor_mg_per_l: float
    low_mg_per_l: float
    source: str
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Variability:
    """Ratios of the day's and the month's highest value to the long-term mean.

    The month is a proxy: the highest average of ten days, which is what the source tabulates.
    """

    parameter: str
    daily_ratio: float
    monthly_ratio: float
    source: str
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class GasThreshold:
    """A concentration in air that people must not meet. [ppm by volume]"""

    gas: str
    threshold: str
    limit_ppm: float
    averaging: str
    source: str


@dataclass(frozen=True, slots=True, kw_only=True)
class GasSolubility:
    """Henry's constant of a gas, ``species`` being its dissolved form."""

    gas: str
    species: str
    log10_k: float
    enthalpy_kj_per_mol: float
    source: str
    note: str

    def mol_per_kg_atm(self, temperature_degc: float = 25.0) -> float:
        """Henry's constant at a temperature by van 't Hoff. [mol/(kg atm)]

        Examples
        --------
        >>> round(gas_solubilities()["CO2"].mol_per_kg_atm(25.0), 4)
        0.034
        """
        kelvin = temperature_degc + 273.15
        shift = 1.0 / kelvin - 1.0 / REFERENCE_TEMPERATURE_K
        slope = self.enthalpy_kj_per_mol / (GAS_CONSTANT_KJ_PER_MOL_K * LN10)
        return float(10.0 ** (self.log10_k - slope * shift))


@lru_cache(maxsize=1)
def practical_floors() -> tuple[PracticalFloor, ...]:
    """Rows of the table of practical floors, the default for other metals last."""
    return tuple(
        PracticalFloor(
            metal=row["metal"],
            family=row["family"],
            floor_mg_per_l=float(row["floor_mg_per_l"]),
            low_mg_per_l=float(row["low_mg_per_l"]),
            source=row["source"],
            note=row["note"],
        )
        for row in read_rows("practical_floors.csv")
    )


def practical_floor(metal: str, family: str) -> PracticalFloor:
    """Floor that applies to a metal and a ligand family.

    A family without a row takes the highest floor of its metal, a metal without any row the
    customary default.

    Parameters
    ----------
    metal
        Analyte id (``Cu``, ``Cr(III)``), or an element for all its oxidation states.
    family
        One of `LIGAND_FAMILIES`.

    Raises
    ------
    KeyError
        The family is unknown.

    Examples
    --------
    >>> practical_floor("Cd", "carbonate").floor_mg_per_l
    0.05
    """
    if family not in LIGAND_FAMILIES:
        raise KeyError(f"unknown family {family!r}. {did_you_mean(family, LIGAND_FAMILIES)}")
    own = [row for row in practical_floors() if row.metal == _element(metal)]
    exact = [row for row in own if row.family == family]
    if exact:
        return exact[0]
    if own:
        return max(own, key=lambda row: row.floor_mg_per_l)
    return practical_floors()[-1]


@lru_cache(maxsize=1)
def floors_mg_per_l() -> Mapping[str, Mapping[str, float]]:
    """Floors by metal and family for every metal of an analysis, defaults filled in. [mg/L]"""
    return MappingProxyType(
        {
            metal: MappingProxyType(
                {f: practical_floor(metal, f).floor_mg_per_l for f in LIGAND_FAMILIES}
            )
            for metal in (*METALS, "Cr", "Fe")
            if metal != "Cr(VI)"
        }
    )


@lru_cache(maxsize=1)
def variabilities() -> Mapping[str, Variability]:
    """Rows of the table of variability, ``metals`` and ``salts`` being the defaults."""
    rows = {row["parameter"]: row for row in read_rows("variability.csv")}
    usual = rows["metals"]
    usual_monthly = float(usual["ten_day_mean_mg_per_l"]) / float(usual["mean_mg_per_l"])
    return MappingProxyType(
        {name: _variability(name, row, usual_monthly) for name, row in rows.items()}
    )


def _variability(name: str, row: Mapping[str, str], usual_monthly: float) -> Variability:
    mean = float(row["mean_mg_per_l"])
    ten_day = number_or_none(row["ten_day_mean_mg_per_l"])
    note = row["note"]
    if ten_day is None:
        gap = "monthly ratio: common practice, no source (that of other metals)"
        note = f"{note}; {gap}" if note else gap
    return Variability(
        parameter=name,
        daily_ratio=float(row["one_day_max_mg_per_l"]) / mean,
        monthly_ratio=usual_monthly if ten_day is None else ten_day / mean,
        source=row["source"],
        note=note,
    )


def variability_of(parameter: str) -> Variability:
    """Variability of a limit's parameter: its own row, or the default for metals or for salts.

    Examples
    --------
    >>> round(variability_of("Cr(III)").daily_ratio, 2), variability_of("SO4").parameter
    (5.24, 'salts')
    """
    table = variabilities()
    if _element(parameter) in table:
        return table[_element(parameter)]
    return table["salts" if parameter in SALT_PARAMETERS else "metals"]


@lru_cache(maxsize=1)
def gas_thresholds() -> tuple[GasThreshold, ...]:
    """Rows of the table of gas thresholds."""
    return tuple(
        GasThreshold(
            gas=row["gas"],
            threshold=row["threshold"],
            limit_ppm=float(row["limit_ppm"]),
            averaging=row["averaging"],
            source=row["source"],
        )
        for row in read_rows("gas_thresholds.csv")
    )


def gas_threshold(gas: str, threshold: str = "ceiling") -> GasThreshold:
    """One threshold of one gas.

    Raises
    ------
    KeyError
        The table has no such row.

    Examples
    --------
    >>> gas_threshold("H2S").limit_ppm
    10.0
    """
    for row in gas_thresholds():
        if (row.gas, row.threshold) == (gas, threshold):
            return row
    known = ", ".join(f"{row.gas} {row.threshold}" for row in gas_thresholds())
    raise KeyError(f"no threshold {gas} {threshold}: there are {known}")


@lru_cache(maxsize=1)
def gas_solubilities() -> Mapping[str, GasSolubility]:
    """Henry's constants by gas."""
    return MappingProxyType(
        {
            row["gas"]: GasSolubility(
                gas=row["gas"],
                species=row["species"],
                log10_k=float(row["log10_k"]),
                enthalpy_kj_per_mol=float(row["enthalpy_kj_per_mol"]),
                source=row["source"],
                note=row["note"],
            )
            for row in read_rows("gas_solubility.csv")
        }
    )


def _element(parameter: str) -> str:
    """Return the analyte without its oxidation state: ``Fe(II)`` gives ``Fe``."""
    return parameter.split("(", maxsplit=1)[0]
