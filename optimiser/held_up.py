"""Which dissolved species holds a metal up: the leading one, its kind, and chelates.

Owns the words for species; the states come from elsewhere.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import CHELATES
from chemistry.state import EquilibriumState
from chemistry.system import System

FloatArray = NDArray[np.float64]

LIGANDS: Mapping[str, str] = {
    "Cl-": "chloride", "SO4-2": "sulfate", "CO3-2": "carbonate", "HS-": "sulfide",
    "F-": "fluoride", "PO4-3": "phosphate", "NH4+": "ammonia", "CH3COO-": "acetate",
    "(EDTA)-4": "EDTA", "(NTA)-3": "NTA", "(Cit)-3": "citrate", "(Tart)-2": "tartrate",
    "(Ox)-2": "oxalate", "(Gluc)-": "gluconate",
}  # fmt: skip
"""Components that bind metals in solution, as people call them."""

COMPLEXING = (*CHELATES, "ammonia", "acetate")
"""Complexing matter that a feed may carry and that no alkali takes out."""

ION_PAIRING = ("sulfate", "fluoride")
HELD_BY_MORE_THAN_PERCENT = 50.0


@dataclass(frozen=True, slots=True, kw_only=True)
class HeldUp:
    """The leading dissolved species of a metal, by its share of the dissolved metal.

    ``kind`` is free ion, hydroxo complex, ion pair, complex or chelate; ``ligand`` what it is with;
    ``complexing`` the complexing matter that carries most of the metal, with its share.
    """

    species: str
    share_percent: float
    kind: str
    ligand: str
    complexing: str
    complexing_share_percent: float

    @property
    def text(self) -> str:
        """The species in words.

        Examples
        --------
        >>> HeldUp(species="PbSO4(aq)", share_percent=71.2, kind="ion pair", ligand="sulfate",
        ...        complexing="", complexing_share_percent=0.0).text
        'PbSO4(aq), ion pair with sulfate, 71 %'
        """
        whom = f" with {self.ligand}" if self.ligand else ""
        return f"{self.species}, {self.kind}{whom}, {self.share_percent:.0f} %"

    @property
    def is_complexed(self) -> bool:
        """Whether complexing matter carries more than half of the dissolved metal."""
        return self.complexing_share_percent > HELD_BY_MORE_THAN_PERCENT

    def to_dict(self) -> dict[str, Any]:
        """Return plain data."""
        return {
            "species": self.species, "share_percent": self.share_percent, "kind": self.kind,
            "ligand": self.ligand, "text": self.text, "complexing": self.complexing,
            "complexing_share_percent": self.complexing_share_percent,
        }  # fmt: skip


def held_up_by(state: EquilibriumState, row: int, weights: FloatArray) -> HeldUp | None:
    """Find what holds a metal (or several) in solution in one state.

    Parameters
    ----------
    state
        Equilibrium states.
    row
        Which of them.
    weights
        Weight of each component, non-zero for the metals asked for, shape (components,).

    Returns
    -------
    HeldUp or None
        None where nothing of the metals is dissolved.
    """
    system = state.system
    amounts = np.maximum(state.species_mol_per_l[row] * (system.formation @ weights), 0.0)
    total = float(amounts.sum())
    if total <= 0.0:
        return None
    lead = int(np.argmax(amounts))
    shares: dict[str, float] = {}
    for position in np.flatnonzero(amounts > 0.0):
        for ligand in ligands_of(system, int(position)):
            if ligand in COMPLEXING:
                shares[ligand] = shares.get(ligand, 0.0) + float(amounts[position])
    complexing = max(shares, key=lambda name: shares[name], default="")
    found = ligands_of(system, lead)
    return HeldUp(
        species=system.species_names[lead],
        share_percent=100.0 * float(amounts[lead]) / total,
        kind=kind_of(system, lead),
        ligand=" and ".join(found),
        complexing=complexing,
        complexing_share_percent=100.0 * shares.get(complexing, 0.0) / total,
    )


def ligands_of(system: System, species: int) -> tuple[str, ...]:
    """Ligands in a species, strongest binders first; none for a free ion or a hydroxo complex."""
    count = len(system.components)
    if species < count:
        return ()
    inside = system.species[species - count].stoichiometry
    found = [LIGANDS[c] for c in inside if c in LIGANDS and inside[c] > 0.0]
    return tuple(sorted(found, key=lambda name: name not in CHELATES))


def kind_of(system: System, species: int) -> str:
    """Kind of a species that holds a metal."""
    if species < len(system.components):
        return "free ion"
    found = ligands_of(system, species)
    if not found:
        return "hydroxo complex"
    if found[0] in CHELATES:
        return "chelate"
    return "ion pair" if set(found) <= set(ION_PAIRING) else "complex"
