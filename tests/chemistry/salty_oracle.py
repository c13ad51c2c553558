"""An independent equilibrium with specific ion interaction in 40 digits, pair by pair.

Unknowns are the logarithms of every concentration, the log activities of the components and the
amounts of the solids said to be present. The equations are written out here from the table of
coefficients; a Jacobian in double precision only speeds the way to their root.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np
from mpmath import mp, mpf
from numpy.typing import NDArray

from catalogs.interactions import interaction_table
from chemistry import EquilibriumState
from chemistry.activity import interaction_by_rule

FloatArray = NDArray[np.float64]

DIGITS = 40
A, BA, WATER_MOL_PER_KG = "0.509", "1.5", "55.508"


class Lines:
    """Numbers in double precision or in many digits: what the equations need of them."""

    def __init__(self, exact: bool) -> None:
        self.exact = exact
        self.number: Callable[[object], object] = mpf if exact else float
        self.exp, self.log, self.sqrt = (
            (mp.exp, mp.log, mp.sqrt) if exact else (np.exp, np.log, np.sqrt)
        )


class SaltyWater:
    """One water over the species and the present solids of a state, at 25 C."""

    def __init__(self, state: EquilibriumState) -> None:
        system = state.system
        assert system.activity == "sit"
        assert system.temperature_degc == 25.0
        self.components = system.components
        free = [({c: 1.0}, 0.0, 0.0) for c in system.components]
        formed = [(s.stoichiometry, s.log10_k, s.water) for s in system.species]
        self.species = [*free, *formed]
        self.names, self.charges = system.species_names, [float(z) for z in system.charges]
        here = dict(zip(system.solid_names, state.active[0], strict=True))
        self.solids = [s for s in system.solids if here[s.name]]
        table = {p: row.coefficient_kg_per_mol for p, row in interaction_table().items()}
        self.pairs: list[tuple[int, int, float]] = []
        for i, one in enumerate(self.names):
            for k, other in enumerate(self.names[:i]):
                rule = interaction_by_rule(one, other, self.charges[i], self.charges[k])
                value = table.get((one, other), table.get((other, one), rule))
                if value:
                    self.pairs.append((i, k, value))
        self.start = np.concatenate(
            [
                np.log(state.species_mol_per_l[0]), state.log_activity[0],
                state.solids_mol_per_l[0][state.active[0]],
            ]
        )  # fmt: skip

    def activities(self, m: Sequence, lines: Lines) -> tuple[list, object]:
        """Natural log activity coefficients and log activity of water."""
        number, ln10 = lines.number, lines.log(lines.number(10))
        strength = sum(x * z * z for x, z in zip(m, self.charges, strict=True)) / 2
        root, a, ba = lines.sqrt(strength), number(A) * ln10, number(BA)
        d = a * root / (1 + ba * root)
        ln_g = [-d * z * z for z in self.charges]
        mixed = 0 * root
        for i, k, value in self.pairs:
            eps = number(str(value)) * ln10
            ln_g[i] += eps * m[k]
            ln_g[k] += eps * m[i]
            mixed += eps * m[i] * m[k]
        x = ba * root
        screening = 2 * a / ba**3 * (1 + x - 2 * lines.log(1 + x) - 1 / (1 + x))
        return ln_g, -(sum(m) - screening + mixed) / number(WATER_MOL_PER_KG)

    def errors(self, unknowns: Sequence, totals: Mapping[str, object], lines: Lines) -> list:
        """Errors of mass action, balances and saturation."""
        number, ln10 = lines.number, lines.log(lines.number(10))
        count, width = len(self.species), len(self.components)
        m = [lines.exp(u) for u in unknowns[:count]]
        ln_a = dict(zip(self.components, unknowns[count : count + width], strict=True))
        amounts = unknowns[count + width :]
        ln_g, ln_water = self.activities(m, lines)
        errors, sums = [], {c: -totals[c] for c in self.components}
        for i, (parts, log10_k, water) in enumerate(self.species):
            ln_m = number(str(log10_k)) * ln10 - ln_g[i] + water * ln_water
            errors.append(unknowns[i] - ln_m - sum(n * ln_a[c] for c, n in parts.items()))
            for c, n in parts.items():
                sums[c] += n * m[i]
        for solid, amount in zip(self.solids, amounts, strict=True):
            for c, n in solid.stoichiometry.items():
                sums[c] += n * amount
        errors += [sums[c] for c in self.components]
        for solid in self.solids:
            index = number(str(solid.log10_k)) * ln10 + solid.water * ln_water
            errors.append(index + sum(n * ln_a[c] for c, n in solid.stoichiometry.items()))
        return errors

    def jacobian(self, totals: Mapping[str, float]) -> FloatArray:
        """Slopes of the errors at the start, by complex steps."""
        lines = Lines(exact=False)
        size = self.start.size
        result = np.empty((size, size))
        for k in range(size):
            moved = self.start.astype(complex)
            moved[k] += 1e-30j
            result[:, k] = np.array(self.errors(list(moved), totals, lines)).imag / 1e-30
        return result

    def solve(self, totals: Mapping[str, mpf], inverse: FloatArray) -> list[mpf]:
        """Root in many digits by chord steps; raises where it does not arrive."""
        unknowns = [mpf(float(u)) for u in self.start]
        for _ in range(40):
            errors = self.errors(unknowns, totals, Lines(exact=True))
            largest = max(abs(e) for e in errors)
            if largest < mpf(10) ** (3 - DIGITS):
                return unknowns
            step = inverse @ np.array([float(e / largest) for e in errors])
            unknowns = [u - largest * mpf(s) for u, s in zip(unknowns, step, strict=True)]
        raise ArithmeticError(f"no convergence: {mp.nstr(largest, 3)}")

    def dissolved(self, unknowns: Sequence[mpf]) -> dict[str, mpf]:
        """Dissolved total of each component."""
        found = dict.fromkeys(self.components, mpf(0))
        for u, (parts, _, _) in zip(unknowns[: len(self.species)], self.species, strict=True):
            for c, n in parts.items():
                found[c] += mpf(n) * mp.exp(u)
        return found
