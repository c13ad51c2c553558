"""Imports every module that computes cases, so that they register."""

from __future__ import annotations

from tests.reference import (
    acid_and_base,
    effluents,
    hydroxide_ph,
    ligands_and_salts,
    practice,
    pure_water_solubility,
    reagents,
    sludge,
)

__all__ = [
    "acid_and_base",
    "effluents",
    "hydroxide_ph",
    "ligands_and_salts",
    "practice",
    "pure_water_solubility",
    "reagents",
    "sludge",
]
