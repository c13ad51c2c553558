"""Activity coefficients: Davies and ideal, as smooth functions of the ionic strength.

Owns the coefficients and their slopes; the ionic strength itself is found with the equilibrium.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import SystemDefinitionError

FloatArray = NDArray[np.float64]

# Debye-Hueckel A, (kg/mol)^0.5: Freeze & Cherry 1979, Groundwater, Appendix IV; 25 C rounded to
# the usual 0.509 so that it is the value the constants were reduced with.
_A_TEMPERATURES_DEGC = np.array([0.0, 10.0, 15.0, 20.0, 25.0, 30.0, 40.0, 50.0, 60.0])
_A_VALUES = np.array([0.4883, 0.4960, 0.5000, 0.5042, 0.5090, 0.5130, 0.5221, 0.5319, 0.5425])

# Davies 1962, Ion Association: log10 g = -A z^2 (sqrt(I)/(1+sqrt(I)) - 0.3 I).
DAVIES_LINEAR = 0.3
# Above this ionic strength the Davies term keeps its value: the equation holds to about 0.5.
DAVIES_FROZEN_ABOVE = 0.5

ACTIVITY_NAMES = ("auto", "davies", "ideal")


def debye_hueckel_a(temperature_degc: float) -> float:
    """Debye-Hueckel A at a temperature, interpolated in the published table. [(kg/mol)^0.5]

    References
    ----------
    Freeze & Cherry 1979, Groundwater, Appendix IV.
    """
    return float(np.interp(temperature_degc, _A_TEMPERATURES_DEGC, _A_VALUES))


@dataclass(frozen=True, eq=False)
class ActivityModel:
    """Natural log of activity coefficients as a function of ionic strength.

    ``ln g_s = -z_s^2 D(I)`` with ``D`` of the model; neutral species keep 1, as in the review that
    the shipped constants come from.
    """

    name: str
    a_ln: float
    squared_charges: FloatArray

    def screening(self, ionic_strength: FloatArray) -> tuple[FloatArray, FloatArray]:
        """D(I) and dD/dI, in natural-log units. Shapes as ``ionic_strength``. [-], [kg/mol]"""
        if self.name == "ideal":
            zero = np.zeros_like(ionic_strength)
            return zero, zero
        held = np.minimum(ionic_strength, DAVIES_FROZEN_ABOVE)
        root = np.sqrt(np.maximum(held, 1e-30))
        value = self.a_ln * (root / (1.0 + root) - DAVIES_LINEAR * held)
        slope = self.a_ln * (0.5 / (root * (1.0 + root) ** 2) - DAVIES_LINEAR)
        return value, np.where(ionic_strength < DAVIES_FROZEN_ABOVE, slope, 0.0)


def build_activity(name: str, charges: FloatArray, temperature_degc: float = 25.0) -> ActivityModel:
    """Build the model by name for species with these charges, shape (species,).

    Raises
    ------
    SystemDefinitionError
        The name is unknown.
    """
    if name not in ACTIVITY_NAMES:
        raise SystemDefinitionError(
            f"unknown activity model {name!r}: use one of {', '.join(ACTIVITY_NAMES)}"
        )
    chosen = "davies" if name == "auto" else name
    a_ln = debye_hueckel_a(temperature_degc) * float(np.log(10.0))
    return ActivityModel(chosen, a_ln, np.square(np.asarray(charges, dtype=float)))
