"""Errors of the chemistry layer.

ChemistryError
├── FormulaError           a formula or a reaction that cannot be read or does not balance
├── SystemDefinitionError  species, solids and components that do not fit together
├── WaterError             totals that no water can have, wrong shapes, unknown components
└── EquilibriumError       a state that missed its certificate
"""

from __future__ import annotations


class ChemistryError(Exception):
    """Any problem that the chemistry layer reports to its caller."""


class FormulaError(ChemistryError):
    """A chemical formula or reaction cannot be read or does not balance."""


class SystemDefinitionError(ChemistryError):
    """Species, solids and components of a system do not fit together."""


class WaterError(ChemistryError):
    """Totals, pH or temperature that no water can have, or that do not fit the system."""


class EquilibriumError(ChemistryError):
    """One or more states missed their certificate."""
