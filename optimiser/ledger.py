"""The dose ledger: what becomes of every dose, by balance between the feed and the treated water.

Owns the split of each dose over acid, alkalinity, solids, complexes and what stays dissolved; the
waters come from an evaluation and are not solved again, but for the feed without solids.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import METALS, analyte_of
from chemistry.errors import WaterError
from chemistry.state import EquilibriumState, equilibrate
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.plant import Plant

FloatArray = NDArray[np.float64]
Data = dict[str, Any]

PROTON = "H+"
FREE_ACID, FREE_BASE, ALKALINITY = "free acid", "free base", "alkalinity"
WEAK, SOLID, COMPLEX = "weak acids and bases", "solid", "complexes"
TOOK_UP_ACID = "took up acid, dissolved"
LEFT, OTHER, UNREACTED, SPARE = "left dissolved", "another dose", "unreacted", "other states"

# What a family is bought for; iron is bought for its own metal.
_ACTIVE: Mapping[str, str] = {
    "hydroxide": PROTON, "acid": PROTON, "carbonate": "CO3-2", "sulfide": "HS-", "chloride": "Cl-",
    "sulfate": "SO4-2", "phosphate": "PO4-3",
}  # fmt: skip
_COUNTED_AS = {"CO3-2": "carbonate", "HS-": "sulfide"}


@dataclass(frozen=True, slots=True)
class Part:
    """A part of a dose: ``kind`` (one of this module's names), what it is spent on, how much."""

    kind: str
    use: str
    amount_mg_per_l: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Ledger:
    """What becomes of one dose; the parts add up to it. A negative part is set free elsewhere.

    ``counted_as`` is what the balance is drawn up in: OH- equivalents for alkalis, H+ for acids,
    otherwise the ion that the reagent is bought for.
    """

    key: str
    reagent: str
    counted_as: str
    dose_mg_per_l: float
    parts: tuple[Part, ...]

    def to_dict(self) -> Data:
        """Return plain data, ready for JSON."""
        return {
            "key": self.key, "reagent": self.reagent, "counted_as": self.counted_as,
            "dose_mg_per_l": self.dose_mg_per_l,
            "parts": [
                {
                    "kind": part.kind, "use": part.use, "amount_mg_per_l": part.amount_mg_per_l,
                    "share_percent": 100.0 * part.amount_mg_per_l / self.dose_mg_per_l,
                }
                for part in self.parts
            ],
        }  # fmt: skip


@dataclass(slots=True)
class _Balance:
    """Amounts of one component by (kind, use). [mol/L]"""

    uses: dict[tuple[str, str], float] = field(default_factory=dict)

    def add(self, kind: str, use: str, moles: float) -> None:
        """Add to one use."""
        if moles != 0.0:
            self.uses[kind, use] = self.uses.get((kind, use), 0.0) + moles


@dataclass(frozen=True, eq=False)
class _Change:
    """Species and solids gained between two waters, with the moles dosed in between.

    ``species`` and ``solids`` in mol/L; ``moles`` (reagents, components) what each dose brought.
    """

    species: FloatArray
    solids: FloatArray
    moles: FloatArray


class _Accountant:
    """Draws up balances of one component over a change of water."""

    def __init__(self, evaluator: Evaluator) -> None:
        self.plant: Plant = evaluator.plant
        self.families = evaluator.judge.families
        system = self.plant.system
        self.names = tuple(system.components)
        charges = np.asarray(system.component_charges, dtype=float)
        self.is_metal = np.array(
            [c > 0 and n not in (PROTON, "NH4+") for c, n in zip(charges, self.names, strict=True)]
        )

    def active(self, reagent: int) -> tuple[str, float]:
        """Component that a reagent is counted in, and the sign that makes its supply positive."""
        known = self.plant.reagents[reagent]
        component = _ACTIVE.get(known.family, "")
        if component not in known.components:
            component = next((c for c in known.components if c.startswith("Fe")), "")
        if not component:
            component = next(c for c in known.components if c not in (PROTON, "Na+"))
        return component, 1.0 if known.components[component] > 0 else -1.0

    def balance(self, change: _Change, component: str, sign: float) -> tuple[_Balance, float]:
        """Uses of a component, and the supply that they belong to. [mol/L]"""
        column = self.plant.system.index[component]
        result = _Balance()
        formation = self.plant.system.formation
        for j, name in enumerate(self.plant.system.species_names):
            moles = sign * float(formation[j, column]) * float(change.species[j])
            result.add(*self._species_use(component, sign, name, formation[j]), moles)
        for p in range(change.solids.size):
            row = self.plant.system.solid_formation[p]
            use = f"{self._metals(row)} as {self.families[p]}"
            result.add(SOLID, use, sign * float(row[column]) * float(change.solids[p]))
        brought = sign * change.moles[:, column]
        for i in np.flatnonzero(brought < 0.0):
            result.add(OTHER, self.plant.reagents[i].name, -float(brought[i]))
        return result, float(brought[brought > 0.0].sum())

    def _species_use(
        self, component: str, sign: float, name: str, row: FloatArray
    ) -> tuple[str, str]:
        active = self.plant.system.index[component]
        metal = (row != 0.0) & self.is_metal
        metal[active] = False
        if metal.any():
            return COMPLEX, self._metals(row, without=active)
        if self.is_metal[active]:
            return LEFT, name
        if component != PROTON:
            acid = row[self.plant.system.index[PROTON]] > 0.0
            return (TOOK_UP_ACID if acid else LEFT), name
        if name == PROTON:
            return (FREE_ACID, PROTON) if sign < 0.0 else (LEFT, PROTON)
        others = [n for n, v in zip(self.names, row, strict=True) if v != 0.0 and n != PROTON]
        if not others:
            return (LEFT, "OH-") if sign < 0.0 else (FREE_BASE, "OH-")
        if "CO3-2" in others:
            return ALKALINITY, "carbonate and bicarbonate"
        return WEAK, " + ".join(_printed(n) for n in others)

    def _metals(self, row: FloatArray, without: int = -1) -> str:
        found = [
            _printed(n)
            for i, n in enumerate(self.names)
            if row[i] > 0.0 and self.is_metal[i] and i != without
        ]
        # the metal that limits are written for comes first
        found.sort(key=lambda n: n not in METALS)
        return " + ".join(found) or "solid"


def dose_ledger(evaluator: Evaluator, seen: Evaluation, point: int) -> list[Ledger]:
    """Say what becomes of every dose of a point.

    Parameters
    ----------
    evaluator, seen, point
        An evaluated point.

    Returns
    -------
    list of Ledger
        One per dose, keys ``reagent`` or ``reagent@trim``.

    Notes
    -----
    For the component ``c`` that a reagent is counted in, the mass balance between two waters is::

        sum over species  nu_c (after - before) + sum over solids  nu_c (after - before)
            = sum over doses  (moles of c brought)

    so the terms on the left are the uses of what is brought, divided among the reagents that bring
    it in proportion; a reagent that takes it away is a use too. The waters are the nominal state
    with gas kept and scale formed; what is fed for another end stands apart, as does what a dose
    factor above 1 adds.
    """
    plant, block = evaluator.plant, seen.blocks[0]
    k = seen.nominal_row(block, point)
    assert k is not None, "a point has its nominal state"
    accountant = _Accountant(evaluator)
    nominal = np.where(seen.points.doses[point] > 0.0, seen.points.doses[point], 0.0)
    if seen.points.controller[point] >= 0:
        nominal[seen.points.controller[point]] += float(block.dose[k])
    tank = block.state.row(k)
    feed = equilibrate(plant.liquid_system, plant.totals)
    change = _Change(
        _species(plant, tank) - _species(plant, feed), tank.solids_mol_per_l[0],
        nominal[:, None] * plant.reacting,
    )  # fmt: skip
    fed = seen.priced.doses[point]
    ledgers = [
        _ledger(accountant, change, int(i), plant.names[i], float(fed[i]), float(nominal[i]))
        for i in np.flatnonzero(fed > 0.0)
    ]
    return ledgers + _trim_ledgers(accountant, seen, point, k, tank)


def _trim_ledgers(
    accountant: _Accountant, seen: Evaluation, point: int, k: int, tank: EquilibriumState
) -> list[Ledger]:
    plant, block = accountant.plant, seen.blocks[0]
    reagent, fed = int(seen.points.trim[point]), seen.priced.trim_doses[point]
    if reagent < 0 or fed[reagent] <= 0.0:
        return []
    nominal = np.zeros(len(plant.names))
    species = np.zeros(len(plant.system.species_names))
    if block.trimmed[k] and block.trim_state is not None:
        after = block.trim_state.row(int(block.trimmed[:k].sum()))
        nominal[reagent] = float(block.trim_dose[k])
        species = _species(plant, after) - _species(plant, tank)
    change = _Change(species, np.zeros(0), nominal[:, None] * plant.reacting)
    key = f"{plant.names[reagent]}@trim"
    return [_ledger(accountant, change, reagent, key, float(fed[reagent]), float(nominal[reagent]))]


def _ledger(
    accountant: _Accountant, change: _Change, reagent: int, key: str, fed: float, nominal: float
) -> Ledger:
    plant = accountant.plant
    component, sign = accountant.active(reagent)
    balance, supply = accountant.balance(change, component, sign)
    factor = float(plant.factors[reagent])
    reacting = nominal / factor
    parts = [
        Part(kind, use, reacting * moles / supply)
        for (kind, use), moles in balance.uses.items()
        if supply > 0.0
    ]
    parts.sort(key=lambda part: -abs(part.amount_mg_per_l))
    if factor > 1.0:
        # a slurry settles unreacted; the excess of a soluble reagent stays in the water
        kind = UNREACTED if plant.slurry[reagent] else LEFT
        parts.append(Part(kind, "dose factor", nominal - reacting))
    if fed - nominal > 1e-9 * fed:
        parts.append(Part(SPARE, "gas vented or scale held back", fed - nominal))
    counted = {PROTON: "H+" if sign > 0.0 else "OH- equivalents"}.get(component)
    return Ledger(
        key=key, reagent=plant.names[reagent],
        counted_as=counted or _COUNTED_AS.get(component) or _printed(component),
        dose_mg_per_l=fed, parts=tuple(parts),
    )  # fmt: skip


def _species(plant: Plant, state: EquilibriumState) -> FloatArray:
    """Species of one state in the order of the plant's system. [mol/L]"""
    where = {name: i for i, name in enumerate(state.system.species_names)}
    values = state.species_mol_per_l[0]
    return np.array(
        [values[where[n]] if n in where else 0.0 for n in plant.system.species_names], dtype=float
    )


def _printed(component: str) -> str:
    try:
        return analyte_of(component)
    except WaterError:
        return component
