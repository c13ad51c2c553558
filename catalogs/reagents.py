"""Reagents as chemistry and the trade see them: component vectors, product forms, practical limits.

Owns the reagents that a plan may dose; what a supplier charges for them belongs to the offers.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType
from typing import Any

from catalogs.packaged import CatalogDataError, read_tree

FAMILIES = ("hydroxide", "carbonate", "sulfide", "chloride", "sulfate", "iron", "acid")
"""What a reagent is bought for."""

PH_CONTROLS = ("up", "down", "")

CAUTIONS_DEFER_TO = (
    "Cautions are flags, not decisions: local codes, the supplier's safety data sheet and a "
    "licensed practitioner decide."
)
"""To be printed wherever cautions are."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ProductForm:
    """A form in which a reagent is sold.

    Parameters
    ----------
    form
        What the product is and its strength in trade words.
    strength_fraction
        Pure compound per mass of product. [kg/kg]
    density_kg_per_l
        Density of a solution or slurry near 20 C, bulk density of a solid. [kg/L]
    crystallises_below_degc
        Temperature under which the product freezes or drops crystals, None where that does not
        trouble an ordinary plant. [C]
    """

    form: str
    strength_fraction: float
    density_kg_per_l: float
    crystallises_below_degc: float | None = None
    note: str = ""
    source: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Reagent:
    """A chemical that can be dosed, as a fixed vector of components.

    Parameters
    ----------
    reagent
        Id, as in doses and offers.
    components
        Moles of each component per mole of ``formula``; OH- counts as minus one H+.
    family
        What it is bought for, one of `FAMILIES`.
    is_slurry
        Whether its excess stays solid and leaves with the sludge.
    dose_factor
        Fed over reacting; 1 for soluble reagents.
    ph_control
        ``up`` or ``down`` where the pH controller may drive it, otherwise empty.
    control_rank
        Lower is preferred as the controller among the reagents dosed; 99 for those that are none.
    ph_ceiling
        Highest pH it reaches in practice, None where the equilibrium alone decides.
    crystallises_below_degc
        As of its most usual product form. [C]
    """

    reagent: str
    name: str
    formula: str
    molar_mass_g_per_mol: float
    components: Mapping[str, float]
    family: str
    is_slurry: bool
    dose_factor: float
    dose_factor_source: str
    ph_control: str
    control_rank: int
    ph_ceiling: float | None
    crystallises_below_degc: float | None
    product_forms: tuple[ProductForm, ...]
    cautions: tuple[str, ...]
    source: str


@lru_cache(maxsize=1)
def _reagents() -> Mapping[str, Reagent]:
    tree = read_tree("reagents.yaml")
    cautions = {str(key): str(text) for key, text in tree["cautions"].items()}
    rows = {name: _reagent(name, row, cautions) for name, row in tree["reagents"].items()}
    return MappingProxyType(rows)


def load_reagents() -> dict[str, Reagent]:
    """Every reagent of the catalog by id, in the order of the file.

    Examples
    --------
    >>> dict(load_reagents()["soda_ash"].components)
    {'Na+': 2.0, 'CO3-2': 1.0}
    """
    return dict(_reagents())


def _reagent(name: str, row: dict[str, Any], cautions: Mapping[str, str]) -> Reagent:
    if row["family"] not in FAMILIES or row.get("ph_control", "") not in PH_CONTROLS:
        raise CatalogDataError(f"reagents.yaml: {name}: unknown family or pH control")
    ceiling = row.get("ph_ceiling")
    forms = tuple(_product_form(form) for form in row["product_forms"])
    return Reagent(
        reagent=name,
        name=row["name"],
        formula=row["formula"],
        molar_mass_g_per_mol=float(row["molar_mass_g_per_mol"]),
        components=MappingProxyType({c: float(n) for c, n in row["components"].items()}),
        family=row["family"],
        is_slurry=row.get("is_slurry", False),
        dose_factor=float(row.get("dose_factor", 1.0)),
        dose_factor_source=row.get("dose_factor_source", "soluble: what is fed reacts or stays"),
        ph_control=row.get("ph_control", ""),
        control_rank=int(row.get("control_rank", 99)),
        ph_ceiling=None if ceiling is None else float(ceiling),
        crystallises_below_degc=forms[0].crystallises_below_degc,
        product_forms=forms,
        cautions=tuple(cautions[key] for key in row["cautions"]),
        source=row["source"],
    )


def _product_form(row: dict[str, Any]) -> ProductForm:
    crystallises = row.get("crystallises_below_degc")
    return ProductForm(
        form=row["form"],
        strength_fraction=float(row["strength_fraction"]),
        density_kg_per_l=float(row["density_kg_per_l"]),
        crystallises_below_degc=None if crystallises is None else float(crystallises),
        note=row.get("note", ""),
        source=row["source"],
    )
