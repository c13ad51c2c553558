"""Activity coefficients by Pitzer's equations, for sulfate and chloride of the common cations.

An independent reference for salty water: Harvie, Moller & Weare 1984, Geochim. Cosmochim. Acta 48,
723, with the unsymmetrical mixing term by Pitzer's approximation (1975, J. Solution Chem. 4, 249).
Parameters at 25 C from memory; they give the gypsum solubilities that the paper shows.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

A_PHI = 0.392  # at 25 C
B_SCREENING = 1.2
ALPHA_ONE, ALPHA_ONE_22, ALPHA_TWO_22 = 2.0, 1.4, 12.0

CHARGES = {
    "Na+": 1, "K+": 1, "NH4+": 1, "Mg+2": 2, "Ca+2": 2, "Ba+2": 2, "Cl-": -1, "SO4-2": -2,
}  # fmt: skip
# beta0, beta1, beta2, C phi of each salt; barium sulfate like calcium sulfate.
SALTS: dict[tuple[str, str], tuple[float, float, float, float]] = {
    ("Na+", "Cl-"): (0.0765, 0.2664, 0.0, 0.00127),
    ("Na+", "SO4-2"): (0.01958, 1.113, 0.0, 0.00497),
    ("K+", "Cl-"): (0.04835, 0.2122, 0.0, -0.00084),
    ("K+", "SO4-2"): (0.04995, 0.7793, 0.0, 0.0),
    ("NH4+", "Cl-"): (0.0522, 0.1918, 0.0, -0.003),
    ("NH4+", "SO4-2"): (0.04088, 0.6585, 0.0, -0.00116),
    ("Mg+2", "Cl-"): (0.35235, 1.6815, 0.0, 0.00519),
    ("Mg+2", "SO4-2"): (0.221, 3.343, -37.23, 0.025),
    ("Ca+2", "Cl-"): (0.3159, 1.614, 0.0, -0.00034),
    ("Ca+2", "SO4-2"): (0.2, 3.1973, -54.24, 0.0),
    ("Ba+2", "Cl-"): (0.2628, 1.4963, 0.0, -0.01938),
    ("Ba+2", "SO4-2"): (0.2, 3.1973, -54.24, 0.0),
}
THETA = {
    ("Na+", "K+"): -0.012, ("Na+", "Ca+2"): 0.07, ("Na+", "Mg+2"): 0.07, ("K+", "Ca+2"): 0.032,
    ("Ca+2", "Mg+2"): 0.007, ("Cl-", "SO4-2"): 0.02,
}  # fmt: skip
PSI = {
    ("Na+", "K+", "Cl-"): -0.0018, ("Na+", "K+", "SO4-2"): -0.010,
    ("Na+", "Ca+2", "Cl-"): -0.007, ("Na+", "Ca+2", "SO4-2"): -0.055,
    ("Na+", "Mg+2", "Cl-"): -0.012, ("Na+", "Mg+2", "SO4-2"): -0.015,
    ("Ca+2", "Mg+2", "Cl-"): -0.012, ("Ca+2", "Mg+2", "SO4-2"): 0.024,
    ("K+", "Mg+2", "Cl-"): -0.022, ("K+", "Mg+2", "SO4-2"): -0.048,
    ("Cl-", "SO4-2", "Na+"): 0.0014, ("Cl-", "SO4-2", "Ca+2"): -0.018,
    ("Cl-", "SO4-2", "Mg+2"): -0.004,
}  # fmt: skip


def ln_coefficients(molalities: Mapping[str, float]) -> dict[str, float]:
    """Natural log activity coefficients of the ions of an electroneutral mixture. [mol/kg] in"""
    water = _Water(molalities)
    return {ion: water.ln_coefficient(ion) for ion in molalities}


class _Water:
    def __init__(self, m: Mapping[str, float]) -> None:
        self.m = m
        self.cations = [i for i in m if CHARGES[i] > 0]
        self.anions = [i for i in m if CHARGES[i] < 0]
        self.strength = 0.5 * sum(x * CHARGES[i] ** 2 for i, x in m.items())
        self.equivalents = sum(x * abs(CHARGES[i]) for i, x in m.items())
        root = float(np.sqrt(self.strength))
        f = -A_PHI * (
            root / (1.0 + B_SCREENING * root) + 2.0 / B_SCREENING * np.log(1.0 + B_SCREENING * root)
        )
        for c in self.cations:
            for a in self.anions:
                f += m[c] * m[a] * self.second(c, a)[1]
        for same in (self.cations, self.anions):
            for i, one in enumerate(same):
                f += sum(m[one] * m[o] * self.unsymmetrical(one, o)[1] for o in same[:i])
        self.f = float(f)
        self.third = sum(
            m[c] * m[a] * self.second(c, a)[2] for c in self.cations for a in self.anions
        )

    def second(self, cation: str, anion: str) -> tuple[float, float, float]:
        """B, its slope with the ionic strength, and C of a salt."""
        zero, one, two, c_phi = SALTS[cation, anion]
        root = float(np.sqrt(self.strength))
        c = c_phi / (2.0 * np.sqrt(abs(CHARGES[cation] * CHARGES[anion])))
        terms = [(one, ALPHA_ONE_22 if two else ALPHA_ONE), (two, ALPHA_TWO_22)]
        b = zero + sum(beta * _g(alpha * root) for beta, alpha in terms)
        slope = sum(beta * _g_slope(alpha * root) for beta, alpha in terms) / self.strength
        return b, slope, c

    def unsymmetrical(self, one: str, other: str) -> tuple[float, float]:
        """Mixing term of ions of unlike charge numbers and its slope."""
        z, w = abs(CHARGES[one]), abs(CHARGES[other])
        if z == w:
            return 0.0, 0.0

        def theta(strength: float) -> float:
            x = 6.0 * A_PHI * np.sqrt(strength)
            mixed = _j(z * w * x) - 0.5 * _j(z * z * x) - 0.5 * _j(w * w * x)
            return float(z * w / (4.0 * strength) * mixed)

        step = 1e-5 * self.strength
        slope = (theta(self.strength + step) - theta(self.strength - step)) / (2.0 * step)
        return theta(self.strength), slope

    def ln_coefficient(self, ion: str) -> float:
        m, z = self.m, CHARGES[ion]
        same, opposite = (
            (self.cations, self.anions) if z > 0 else (self.anions, self.cations)
        )  # fmt: skip
        value = z * z * self.f + abs(z) * self.third
        for x in opposite:
            b, _, c = self.second(ion, x) if z > 0 else self.second(x, ion)
            value += m[x] * (2.0 * b + self.equivalents * c)
        for other in same:
            if other != ion:
                theta = THETA.get((ion, other), THETA.get((other, ion), 0.0))
                value += 2.0 * m[other] * (theta + self.unsymmetrical(ion, other)[0])
                value += m[other] * sum(m[x] * _psi(ion, other, x) for x in opposite)
        for i, one in enumerate(opposite):
            value += sum(m[one] * m[other] * _psi(one, other, ion) for other in opposite[:i])
        return float(value)


def _psi(one: str, other: str, third: str) -> float:
    return PSI.get((one, other, third), PSI.get((other, one, third), 0.0))


def _g(x: float) -> float:
    return float(2.0 * (1.0 - (1.0 + x) * np.exp(-x)) / x**2)


def _g_slope(x: float) -> float:
    return float(-2.0 * (1.0 - (1.0 + x + 0.5 * x * x) * np.exp(-x)) / x**2)


def _j(x: float) -> float:
    return float(x / (4.0 + 4.581 * x**-0.7237 * np.exp(-0.0120 * x**0.528)))
