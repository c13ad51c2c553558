"""Quantities as laboratories write them: ``38 mg/L``, ``<0.05 mg/L``, ``12 mg/L as N``.

Owns the accepted unit strings and reporting bases; the conversions between masses, amounts and
bases are those of `chemistry.units`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass

from catalogs.entries import number_remedy, parse_number
from catalogs.positions import Node, Scalar, describe
from catalogs.problems import Spot, closest, echo, listed
from chemistry.feed import Analyte
from chemistry.formula import elements_of
from chemistry.units import (
    L_PER_US_GALLON,
    meq_per_l_to_mg_per_l_as_caco3,
    mg_per_l_as_basis_to_mg_per_l,
    mol_per_l_to_mg_per_l,
)

MASS_UNITS_IN_MG_PER_L: Mapping[str, float] = {
    "mg/L": 1.0, "g/m3": 1.0, "g/L": 1e3, "kg/m3": 1e3, "ug/L": 1e-3, "mg/m3": 1e-3, "ng/L": 1e-6,
}  # fmt: skip
AMOUNT_UNITS_IN_MOL_PER_L: Mapping[str, float] = {"mol/L": 1.0, "mmol/L": 1e-3, "umol/L": 1e-6}
CHARGE_UNITS_IN_MEQ_PER_L: Mapping[str, float] = {"meq/L": 1.0, "eq/L": 1e3}
FLOW_UNITS_IN_M3_PER_D: Mapping[str, float] = {
    "m3/d": 1.0, "m3/h": 24.0, "m3/s": 86400.0, "L/s": 86.4, "L/min": 1.44, "L/h": 0.024,
    "L/d": 1e-3, "ML/d": 1e3, "gpm": 1.44 * L_PER_US_GALLON, "gpd": 1e-3 * L_PER_US_GALLON,
    "MGD": 1e3 * L_PER_US_GALLON,
}  # fmt: skip
"""Units of flow; gallons are US gallons. [m3/d]"""

_UNITS = (*MASS_UNITS_IN_MG_PER_L, *AMOUNT_UNITS_IN_MOL_PER_L, *CHARGE_UNITS_IN_MEQ_PER_L)
_QUANTITY = re.compile(
    r"(?P<below><?)\s*(?P<number>[-+]?(?:[0-9][0-9.,_]*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?)"
    r"\s*(?P<unit>.*?)(?:\s+as\s+(?P<basis>\S.*))?"
)
_EXPECTED = "a quantity with its unit, such as 38 mg/L or <0.05 mg/L"
_MOST_MG_PER_L = 1e6  # a kilogram in a litre
_ELEMENT_BASES = ("N", "P", "S")


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """A value, its unit and basis as written, spelled the way the tables here spell them."""

    value: float
    unit: str
    basis: str
    is_below: bool
    as_written: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Concentration:
    """A concentration of an analyte itself; ``is_below`` marks a reporting limit. [mg/L]"""

    mg_per_l: float
    is_below: bool
    as_written: str


def read_concentration(node: Node, spot: Spot, analyte: Analyte) -> Concentration | None:
    """Read a concentration of one analyte.

    Parameters
    ----------
    node, spot
        The value and its place.
    analyte
        Whose molar mass and charge the conversions use.

    Returns
    -------
    Concentration or None
        In mg/L of the analyte itself, whatever unit and basis were written; None when a problem
        was recorded.
    """
    quantity = _parse(node, spot)
    if quantity is None or not _basis_fits(quantity, analyte, spot):
        return None
    value = to_mg_per_l(quantity, analyte)
    if value > _MOST_MG_PER_L:
        spot.problem(
            echo(quantity.as_written), "at most 1 kg/L", "Check the unit: mg/L, ug/L or g/L."
        )
        return None
    return Concentration(mg_per_l=value, is_below=quantity.is_below, as_written=quantity.as_written)


def read_alkalinity(node: Node, spot: Spot) -> float:
    """Read an alkalinity as mg/L as CaCO3 or meq/L; nan when a problem was recorded.

    Returns
    -------
    float
        [mg/L as CaCO3]
    """
    quantity = _parse(node, spot)
    if quantity is None:
        return math.nan
    if quantity.unit in CHARGE_UNITS_IN_MEQ_PER_L and not quantity.basis:
        meq = quantity.value * CHARGE_UNITS_IN_MEQ_PER_L[quantity.unit]
        return meq_per_l_to_mg_per_l_as_caco3(meq)
    if quantity.unit in MASS_UNITS_IN_MG_PER_L and quantity.basis == "CaCO3":
        return quantity.value * MASS_UNITS_IN_MG_PER_L[quantity.unit]
    spot.problem(
        echo(quantity.as_written),
        "an alkalinity such as 120 mg/L as CaCO3 or 2.4 meq/L",
        "Alkalinity is reported as CaCO3: write that basis, or use meq/L.",
    )
    return math.nan


def _parse(node: Node, spot: Spot) -> Quantity | None:
    """Split a quantity into its parts, recording what is wrong with them."""
    text = " ".join(node.text.split()) if isinstance(node, Scalar) else ""
    match = _QUANTITY.fullmatch(text)
    if match is None:
        spot.problem(
            describe(node), _EXPECTED, "Write the number first; a value below the reporting limit"
            " as < and that limit.",
        )  # fmt: skip
        return None
    number, unit = match["number"], spelled_unit(match["unit"])
    value = parse_number(number)
    if value is None or not math.isfinite(value):
        spot.problem(echo(text), _EXPECTED, number_remedy(number))
        return None
    if value < 0.0 or (match["below"] and value == 0.0):
        spot.problem(
            echo(text), "a concentration of 0 or more", "Correct the number, or write < and the"
            " reporting limit.",
        )  # fmt: skip
        return None
    if unit not in _UNITS:
        spot.problem(echo(text), _EXPECTED, _unit_remedy(number, unit))
        return None
    return Quantity(
        value=value, unit=unit, basis=match["basis"] or "", is_below=bool(match["below"]),
        as_written=text,
    )  # fmt: skip


def spelled_unit(unit: str) -> str:
    """Spell a unit as the tables do: u for micro, a capital L for litre, 3 for cube.

    Examples
    --------
    >>> spelled_unit("\N{MICRO SIGN}g/l")
    'ug/L'
    """
    plain = unit.replace("\N{MICRO SIGN}", "u").replace("\N{GREEK SMALL LETTER MU}", "u")
    plain = plain.replace("\N{SUPERSCRIPT THREE}", "3").replace(" / ", "/")
    return f"{plain[:-1]}L" if plain.endswith("/l") else plain


def _unit_remedy(number: str, unit: str) -> str:
    known = f"The units known here: {', '.join(_UNITS)}."
    if not unit:
        return f"Add the unit: {number} mg/L. {known}"
    if unit[0].isdigit():
        return "Write the number without spaces: 1200 mg/L, not 1 200 mg/L."
    if unit.lower() in ("ppm", "ppb"):
        same = "mg/L" if unit.lower() == "ppm" else "ug/L"
        return f"In a dilute water 1 {unit} is 1 {same}: write {number} {same}. {known}"
    near = closest(unit, _UNITS)
    meant = f"Did you mean `{number} {near}`? " if near else ""
    return f"{meant}{known} A basis follows the unit: 12 mg/L as N."


def bases_of(analyte: Analyte) -> tuple[str, ...]:
    """Reporting bases that a mass of this analyte may be given on.

    Examples
    --------
    >>> from chemistry.feed import ANALYTES
    >>> bases_of(ANALYTES["NH4"]), bases_of(ANALYTES["Cr(III)"])
    (('NH4', 'N', 'CaCO3'), ('Cr(III)', 'Cr'))
    """
    own = [analyte.analyte]
    element = analyte.analyte.split("(")[0]
    if analyte.is_metal:
        return tuple(dict.fromkeys([*own, element]))
    atoms = elements_of(analyte.component) if analyte.is_modelled else {}
    own += [e for e in _ELEMENT_BASES if atoms.get(e) == 1.0]
    if analyte.is_modelled and "S" not in own[:1]:
        own.append("CaCO3")
    return tuple(dict.fromkeys(own))


def _basis_fits(quantity: Quantity, analyte: Analyte, spot: Spot) -> bool:
    known = bases_of(analyte)
    if not quantity.basis:
        return True
    if quantity.basis in known and quantity.unit in MASS_UNITS_IN_MG_PER_L:
        return True
    spot.problem(
        echo(quantity.as_written),
        f"a basis that suits {analyte.analyte}",
        f"Write a mass per litre as one of: {listed(known)}; without a basis it is the mass of"
        f" {analyte.name} itself.",
    )
    return False


def to_mg_per_l(quantity: Quantity, analyte: Analyte) -> float:
    """Convert a quantity to the mass of the analyte itself. [mg/L]"""
    mass, charge = analyte.molar_mass_g_per_mol, analyte.charge
    if quantity.unit in AMOUNT_UNITS_IN_MOL_PER_L:
        amount = quantity.value * AMOUNT_UNITS_IN_MOL_PER_L[quantity.unit]
        return mol_per_l_to_mg_per_l(amount, mass)
    if quantity.unit in CHARGE_UNITS_IN_MEQ_PER_L:
        meq = quantity.value * CHARGE_UNITS_IN_MEQ_PER_L[quantity.unit]
        return mol_per_l_to_mg_per_l(meq / 1000.0 / abs(charge), mass)
    value = quantity.value * MASS_UNITS_IN_MG_PER_L[quantity.unit]
    if quantity.basis in ("CaCO3", *_ELEMENT_BASES) and quantity.basis != analyte.analyte:
        return mg_per_l_as_basis_to_mg_per_l(value, quantity.basis, mass, charge)
    return value
