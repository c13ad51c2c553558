"""Operating points, their corners and the blocks of states that belong to them: arrays, no work.

Ends: gypsum and calcite formed or held back to a supersaturation; carbon dioxide from carbonate
dosed into acid water kept or vented. Corners: pH set point and paced doses, each with tolerance.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from chemistry.state import EquilibriumState
from chemistry.titration import StartValues

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

CLOSED_FORMED, CLOSED_HELD, VENTED_FORMED, VENTED_HELD = 0, 1, 2, 3
END_TEXT = {
    CLOSED_FORMED: "gas kept, scale formed",
    CLOSED_HELD: "gas kept, scale held back",
    VENTED_FORMED: "CO2 vented, scale formed",
    VENTED_HELD: "CO2 vented, scale held back",
}


@dataclass(frozen=True, eq=False)
class Points:
    """Candidate operating points, arrays over points.

    ``doses`` (points, reagents) in mg/L of pure compound fed, for the reagents paced with the flow;
    ``controller`` the reagent that holds the pH (-1: none), ``ph`` its set point, ``trim`` the
    reagent that may trim the discharge (-1: none), ``trim_dose`` its fixed dose (mg/L fed; nan: as
    much as brings the pH into the window).
    """

    doses: FloatArray
    controller: IntArray
    ph: FloatArray
    trim: IntArray
    trim_dose: FloatArray = field(default_factory=lambda: np.zeros(0))

    def __post_init__(self) -> None:
        if self.trim_dose.shape != self.ph.shape:
            object.__setattr__(self, "trim_dose", np.full(self.ph.shape, np.nan))

    def __len__(self) -> int:
        return int(self.ph.shape[0])

    def take(self, rows: IntArray | BoolArray | Sequence[int]) -> Points:
        """Return some points."""
        index = np.asarray(rows)
        return Points(
            self.doses[index], self.controller[index], self.ph[index], self.trim[index],
            self.trim_dose[index],
        )  # fmt: skip

    @classmethod
    def join(cls, parts: Sequence[Points]) -> Points:
        """Put several sets of points one after the other."""
        return cls(
            np.concatenate([p.doses for p in parts]),
            np.concatenate([p.controller for p in parts]),
            np.concatenate([p.ph for p in parts]),
            np.concatenate([p.trim for p in parts]),
            np.concatenate([p.trim_dose for p in parts]),
        )


@dataclass(frozen=True, eq=False)
class Rows:
    """Corners of points: arrays over rows.

    ``sample`` is the water, ``factor`` multiplies the paced doses, ``shift`` moves the set point;
    the row of a sample with factor 1 and shift 0 is its nominal one. Rows that do not count belong
    to a water that is shown and not judged.
    """

    point: IntArray
    sample: IntArray
    counts: BoolArray
    ph: FloatArray
    doses: FloatArray
    factor: FloatArray
    shift: FloatArray
    nominal: BoolArray

    def __len__(self) -> int:
        return int(self.point.shape[0])


@dataclass(frozen=True, eq=False)
class NominalRows:
    """Nominal rows of points and samples at one end, (points, samples) each.

    ``block`` and ``row`` are positions in the blocks; rows that the end does not have are those of
    the first block, and -1 is a row that did not reach its set point. ``known`` (points,) tells
    which points have rows of their own at the end.
    """

    block: IntArray
    row: IntArray
    known: BoolArray

    @classmethod
    def at(cls, end: int, rows: Rows, blocks: Sequence[Block], points: int) -> NominalRows:
        """Find the rows of an end."""
        samples = int(rows.sample.max()) + 1 if len(rows) else 1
        found = np.full((2, points, samples), -1, dtype=np.int64)
        known = np.zeros(points, dtype=bool)
        for number, block in enumerate(blocks):
            if number and block.end != end:
                continue
            mine = np.flatnonzero(rows.nominal[block.rows] & block.reached)
            point, sample = rows.point[block.rows[mine]], rows.sample[block.rows[mine]]
            found[0, point, sample], found[1, point, sample] = number, mine
            known[point] |= block.end == end
        return cls(found[0], found[1], known)

    def mean(self, values: Sequence[FloatArray], weight: FloatArray) -> FloatArray:
        """Mean over samples of one array (rows, ...) for each block, (points, ...)."""
        result = np.zeros((self.block.shape[0], *values[0].shape[1:]))
        for number, array in enumerate(values):
            point, sample = np.nonzero(self.block == number)
            shape = (point.size,) + (1,) * (array.ndim - 1)
            np.add.at(
                result, point,
                weight[sample].reshape(shape) * array[self.row[point, sample]],
            )  # fmt: skip
        return result


class WarmStart(Protocol):
    """Knows iterates of neighbouring waters for rows at an end."""

    def start(self, end: int, rows: IntArray) -> StartValues | None:
        """Iterates for these rows, or None where they are not known."""
        ...


@dataclass(frozen=True, eq=False)
class Block:
    """States of some rows at one end.

    ``dose`` is the controller's dose that holds the row's pH, ``trim_dose`` that of the trim
    reagent (both mg/L pure fed). ``held`` tells which rows the controller holds: where the paced
    doses alone overshoot the row's pH it rests, and the pH is what they make it; ``reached`` which
    rows are as they should be. ``liquid`` holds the totals of the separated water, ``effluent``
    those after trim, ``surplus`` what soluble reagents leave unreacted (rows, components);
    ``trim_state`` the trimmed waters of ``trimmed`` rows, ``trim_missing`` rows that would need a
    trim that nothing gives.
    """

    end: int
    rows: IntArray
    state: EquilibriumState
    dose: FloatArray
    held: BoolArray
    reached: BoolArray
    lost_slope: FloatArray
    liquid: FloatArray
    effluent: FloatArray
    surplus: FloatArray
    trim_dose: FloatArray
    trimmed: BoolArray
    trim_state: EquilibriumState | None
    trim_missing: BoolArray
