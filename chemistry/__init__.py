"""Ground floor of dosewright: equilibrium chemistry on arrays and frozen types; reads no file."""

from chemistry.errors import (
    ChemistryError,
    EquilibriumError,
    FormulaError,
    SystemDefinitionError,
    WaterError,
)
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import Solid, Species, System

__all__ = [
    "ChemistryError",
    "EquilibriumError",
    "EquilibriumState",
    "FormulaError",
    "Solid",
    "Species",
    "System",
    "SystemDefinitionError",
    "WaterError",
    "equilibrate",
]
