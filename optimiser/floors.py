"""Floors explained: the lowest residual of each metal with each ligand, and what stops it there.

Owns what a lowest state means: the species that holds the metal up, edges of what is allowed,
other metals, carry-over and practical floors. The states are found by `optimiser.floor_search`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.state import equilibrate
from optimiser.evaluation import Evaluator
from optimiser.floor_search import FAMILY_LIGANDS, FloorSearch, Lowest
from optimiser.held_up import HeldUp, held_up_by
from optimiser.site import Site

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]

MATTERS = 0.95  # a change below 5 % is not worth a word
SHOWN_MG_PER_L = 1e-4  # smallest residual that is told as a number
TAKES_PART = 0.99  # a ligand that lowers a residual by less than 1 % has no part in it
BEYOND_PH = 0.5  # how far outside a set-point window is looked
BEYOND_DOSE = 2.0  # and by what factor beyond the largest dose


@dataclass(frozen=True, slots=True, kw_only=True)
class Floor:
    """The lowest residual of one metal with one ligand family.

    mg/L of the metal; ``target_mg_per_l`` is the tightest ceiling on the mean prediction that its
    limits leave (None: limited in a sum alone). ``doses_mg_per_l`` by reagent, pure and fed, with
    the ``controller`` that holds the pH. ``stops`` says what stops it, the most telling first.
    """

    metal: str
    family: str
    feed_mg_per_l: float
    residual_mg_per_l: float
    carry_over_mg_per_l: float
    practical_floor_mg_per_l: float
    predicted_mg_per_l: float
    target_mg_per_l: float | None
    ph: float
    doses_mg_per_l: Mapping[str, float]
    controller: str | None
    solid: str
    held_up_by: HeldUp | None
    stopped_by: str
    stops: tuple[str, ...]

    @property
    def meets(self) -> bool | None:
        """Whether the prediction is at or below the target; None without one."""
        return None if self.target_mg_per_l is None else (
            self.predicted_mg_per_l <= self.target_mg_per_l
        )  # fmt: skip

    def to_dict(self) -> dict[str, Any]:
        """Return plain data."""
        return {
            "metal": self.metal, "family": self.family, "feed_mg_per_l": self.feed_mg_per_l,
            "residual_mg_per_l": self.residual_mg_per_l,
            "carry_over_mg_per_l": self.carry_over_mg_per_l,
            "practical_floor_mg_per_l": self.practical_floor_mg_per_l,
            "predicted_mg_per_l": self.predicted_mg_per_l,
            "target_mg_per_l": self.target_mg_per_l, "meets": self.meets, "ph": self.ph,
            "doses_mg_per_l": dict(self.doses_mg_per_l), "controller": self.controller,
            "solid": self.solid,
            "held_up_by": self.held_up_by.to_dict() if self.held_up_by else None,
            "stopped_by": self.stopped_by, "stops": list(self.stops),
        }  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Floors:
    """Every floor of a site, by metal and ligand family."""

    site: str
    floors: tuple[Floor, ...]
    not_in_the_water: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return plain data, ready for JSON."""
        return {
            "site": self.site,
            "floors": [floor.to_dict() for floor in self.floors],
            "not_in_the_water": list(self.not_in_the_water),
        }

    def to_frame(self) -> pd.DataFrame:
        """Return one row per metal and family."""
        import pandas as pd

        rows = []
        for floor in self.floors:
            row = floor.to_dict()
            held = row.pop("held_up_by") or {}
            doses = row.pop("doses_mg_per_l")
            row["doses_mg_per_l"] = "; ".join(f"{k} {v:.6g}" for k, v in doses.items())
            row["held_up_by"] = held.get("species", "")
            row["held_up_share_percent"] = held.get("share_percent")
            row["stops"] = "; ".join(row["stops"])
            rows.append(row)
        return pd.DataFrame(rows)


def explain_floors(site: Site) -> Floors:
    """Find the lowest residual of each limited metal with each ligand that a site may dose.

    Parameters
    ----------
    site
        The problem as read.

    Returns
    -------
    Floors
        Joint equilibrium of the whole feed at the nominal set point and dose, gas kept and scale
        formed. Plans stand above them: they hold limits over tolerances and at every end.

    Raises
    ------
    chemistry.errors.ChemistryError
        The feed cannot be made electroneutral.
    """
    search = FloorSearch(Evaluator(site))
    judge = search.judge
    present = [j for j in range(len(judge.metals)) if _feed_mg_per_l(search, j) > 0.0]
    found: dict[tuple[int, str], Lowest] = {}
    for family in search.families() if present else ():
        for lowest in search.lowest(family, present):
            found[lowest.metal, family] = lowest
    explained = [
        _Explained(search, found[j, family], found.get((j, "hydroxide"))).floor()
        for j in present
        for family in FAMILY_LIGANDS
        if (j, family) in found
    ]
    absent = [name for j, name in enumerate(judge.metals) if j not in present]
    return Floors(site=site.name, floors=tuple(explained), not_in_the_water=tuple(absent))


def _feed_mg_per_l(search: FloorSearch, metal: int) -> float:
    return float(search.plant.totals @ search.judge.weights[metal])


class _Explained:
    """One lowest state being explained."""

    def __init__(self, search: FloorSearch, lowest: Lowest, hydroxide: Lowest | None) -> None:
        self.search, self.lowest, self.hydroxide = search, lowest, hydroxide
        self.plant, self.judge = search.plant, search.judge
        self.metal = lowest.metal
        self.state = lowest.block.state
        self.residual = float(lowest.judged.residual[0, self.metal])
        self.carried = float(lowest.judged.carried[0, self.metal])
        self.practical = float(lowest.judged.floor[0, self.metal])
        self.untouched = float(self.judge.dissolved_only[self.metal])
        self.held_up = held_up_by(self.state, 0, self.judge.weights[self.metal])

    def floor(self) -> Floor:
        """The floor with its reasons."""
        names = self.plant.names
        controller = int(self.lowest.point.controller[0])
        doses = self.lowest.point.doses[0].copy()
        if controller >= 0:
            doses[controller] += float(self.lowest.block.dose[0])
        stops = self._stops()
        return Floor(
            metal=self.judge.metals[self.metal], family=self.lowest.family,
            feed_mg_per_l=_feed_mg_per_l(self.search, self.metal),
            residual_mg_per_l=self.residual, carry_over_mg_per_l=self.carried,
            practical_floor_mg_per_l=self.practical,
            predicted_mg_per_l=max(self.residual + self.carried, self.practical),
            target_mg_per_l=self._target(), ph=float(self.state.ph[0]),
            doses_mg_per_l={names[i]: float(doses[i]) for i in np.flatnonzero(doses > 0.0)},
            controller=names[controller] if controller >= 0 else None,
            solid=self._solid(), held_up_by=self.held_up,
            stopped_by=next(iter(stops)), stops=tuple(stops.values()),
        )  # fmt: skip

    def _target(self) -> float | None:
        own = [c.target for c in self.judge.checks if c.metals == (self.metal,)]
        return min(own, default=None)

    # -- reasons ---------------------------------------------------------------------------------

    def _stops(self) -> dict[str, str]:
        """What stops the residual, by kind; the most telling first."""
        reasons = {
            "practical floor": self._practical(),
            "carry-over": self._carry_over(),
            "no solid": self._no_part(),
            "untouched": self._untouched(),
            "dissolved species": self._species(),
            "pH": self._edge(),
            "dose": self._dose(),
            "other metals": self._other_metals(),
        }
        found = {kind: text for kind, text in reasons.items() if text}
        return found or {"dissolved species": "nothing of it is left in solution"}

    def _practical(self) -> str:
        if self.practical <= self.residual + self.carried:
            return ""
        return f"practical floor of {_mg(self.practical)}: no less is promised without a jar test"

    def _carry_over(self) -> str:
        if self.carried <= max(self.residual, SHOWN_MG_PER_L):
            return ""
        separator = self.plant.treatment.separator.name
        return f"carry-over past the {separator}: {_mg(self.carried)}"

    def _no_part(self) -> str:
        """The ligand makes no solid of the metal, or none that is lower than the hydroxide's."""
        family = self.lowest.family
        if not self._solid():
            return f"no solid of it forms with {family} in this water"
        if family == "hydroxide" or self.hydroxide is None:
            return ""
        lowest = float(self.hydroxide.judged.residual[0, self.metal])
        if self.residual < TAKES_PART * lowest:
            return ""
        return f"{family} takes it no lower than the set point alone"

    def _untouched(self) -> str:
        if self.untouched <= 0.5 * self.residual:
            return ""
        return f"{_mg(self.untouched)} of it is in a form that takes part in no precipitation"

    def _species(self) -> str:
        return f"dissolved as {self.held_up.text}" if self.held_up is not None else ""

    def _edge(self) -> str:
        """The set-point window, where the residual would fall on beyond it."""
        edges = self.lowest.edges
        for edge, step in (("high", BEYOND_PH), ("low", -BEYOND_PH)):
            if edge not in edges:
                continue
            ph = float(self.lowest.point.ph[0]) + step
            beyond = self._elsewhere(ph=ph)
            if beyond is not None and self._matters(beyond):
                limit = "highest" if edge == "high" else "lowest"
                return (
                    f"pH {ph - step:.2f} is the {limit} set point allowed with it; at pH {ph:.2f} "
                    f"it would come to {_mg(beyond)}"
                )
        return ""

    def _dose(self) -> str:
        if "dose" not in self.lowest.edges:
            return ""
        beyond = self._elsewhere(dose_factor=BEYOND_DOSE)
        if beyond is None or not self._matters(beyond):
            return ""
        return f"the largest dose tried; twice of it would come to {_mg(beyond)}"

    def _matters(self, residual: float) -> bool:
        """Whether a residual elsewhere is lower by more than a few percent, and in sight."""
        return self.residual > SHOWN_MG_PER_L and residual < MATTERS * self.residual

    def _elsewhere(self, *, ph: float | None = None, dose_factor: float = 1.0) -> float | None:
        """Residual at another set point or dose, None where it is not reached. [mg/L]"""
        point = self.lowest.point.take(np.array([0]))
        point.doses[:] *= dose_factor
        if ph is not None:
            if not 0.0 < ph < 14.0:
                return None
            point.ph[:] = ph
        block, judged = self.search.look(point)
        if not block.reached[0] or (ph is not None and abs(block.state.ph[0] - ph) > 0.01):
            return None
        return float(judged.residual[0, self.metal])

    def _other_metals(self) -> str:
        """What the residual would be if no other metal took the ligand.

        Where the ligand has no part in the lowest state, its largest dose is looked at.
        """
        alone = self._alone(np.asarray(self.state.totals[0], dtype=float), float(self.state.ph[0]))
        if alone is not None and self._matters(alone):
            return f"other metals take the ligand: alone it would come to {_mg(alone)}"
        paced = np.flatnonzero(self.lowest.point.doses[0] > 0.0)
        if not paced.size or not self._no_part():
            return ""
        point = self.lowest.point.take(np.array([0]))
        top = self.search.top_dose(int(paced[0]))
        point.doses[0, paced] = top
        block, judged = self.search.look(point)
        alone = self._alone(np.asarray(block.state.totals[0]), float(block.state.ph[0]))
        joint = float(judged.residual[0, self.metal])
        if not block.reached[0] or alone is None or alone >= MATTERS * min(joint, self.residual):
            return ""
        return (
            f"other metals take the ligand: at the largest dose of {top:.4g} mg/L it would come to "
            f"{_mg(alone)} alone"
        )

    def _alone(self, totals: FloatArray, ph: float) -> float | None:
        """Residual at the same dose and pH without any other metal. [mg/L]"""
        system, weights = self.plant.system, self.judge.weights[self.metal]
        others = [
            i
            for m in METALS
            if (i := system.index.get(ANALYTES[m].component)) is not None and weights[i] == 0.0
        ]
        if not (totals[others] > 0.0).any():
            return None
        bare = totals.copy()
        bare[others] = 0.0
        alone = equilibrate(system, bare, ph=ph, on_failure="flag")
        residual = float(alone.dissolved_mol_per_l[0] @ weights) + self.untouched
        return residual if alone.converged[0] else None

    def _solid(self) -> str:
        """The solid that holds most of the metal, empty where none does."""
        held = self.state.solids_mol_per_l[0] * self.judge.solid_metal[:, self.metal]
        if not held.size or held.max() <= 0.0:
            return ""
        return self.plant.system.solid_names[int(np.argmax(held))]


def _mg(value: float) -> str:
    shown = value >= SHOWN_MG_PER_L
    return f"{value:.3g} mg/L" if shown else f"less than {SHOWN_MG_PER_L:.4f} mg/L"
