"""The equilibrium of many random waters: shares of hard ones, worst certificate, speed, failures.

``python -m tests.benchmarks.equilibrium_random [--count 100000] [--seed 1]``; the waters are those
of the test suite's generator. A failure prints the call that solves its water again, and the exit
code is then 1. A sample is solved again from the states of waters with other totals.
"""

from __future__ import annotations

import argparse
import secrets
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from tests.chemistry.certificate import Certificate, certify
from tests.chemistry.waters import PROMISED_SHARES, Waters, random_waters, replay, shares

FloatArray = NDArray[np.float64]

FIXED_SEED = 1
PIECE = 5000  # waters solved in one call
SAMPLE_SHARE = 0.02  # solved from two starts
LIMITS = {
    "mass_balance": 1e-10, "mass_action": 1e-10, "ionic_strength": 1e-9,
    "supersaturation": 1e-8, "presence": 1e-8,
}  # fmt: skip


@dataclass
class Tally:
    """What the waters so far gave."""

    count: int = 0
    seconds: float = 0.0
    shares: dict[str, float] = field(default_factory=dict)
    worst: dict[str, float] = field(default_factory=dict)
    failures: list[str] = field(default_factory=list)
    sampled: int = 0
    worst_of_two_starts: float = 0.0
    slowest: float = 0.0

    def add(self, waters: Waters, state: EquilibriumState, seconds: float) -> None:
        """Count a piece."""
        proof, n = certify(state), state.totals.shape[0]
        for name, share in shares(waters, state).items():
            before = self.shares.get(name, 0.0) * self.count
            self.shares[name] = (before + share * n) / (self.count + n)
        for name, value in proof.worst().items():
            pick = min if name == "least_amount" else max
            self.worst[name] = pick(self.worst.get(name, value), value)
        good = is_good(state, proof)
        self.failures += [replay(state.system, state.totals[i]) for i in np.flatnonzero(~good)]
        self.count += n
        self.seconds += seconds
        self.slowest = max(self.slowest, seconds / n)


def is_good(state: EquilibriumState, proof: Certificate) -> NDArray[np.bool_]:
    """Which states are certified, by the check of the tests and by their own."""
    good = state.converged & (proof.least_amount >= 0.0)
    for name, limit in LIMITS.items():
        good &= getattr(proof, name) <= limit
    return good


def difference_of_starts(
    system: System, waters: Waters, state: EquilibriumState, seed: int
) -> float:
    """Largest relative difference of a dissolved total between two starts.

    The other start is the state of the water with every total moved by up to a factor of 2.
    """
    rng = np.random.default_rng(seed)
    moved = waters.totals * 2.0 ** rng.uniform(-1.0, 1.0, waters.totals.shape)
    proton = system.index["H+"]
    moved[:, proton] = 0.0
    moved[:, proton] = -(moved @ system.component_charges)
    neighbour = equilibrate(system, moved, on_failure="flag")
    again = equilibrate(system, waters.totals, start=neighbour, on_failure="flag")
    scale = state.species_mol_per_l @ np.abs(system.formation)
    gap = np.abs(again.dissolved_mol_per_l - state.dissolved_mol_per_l)
    return float((gap / np.maximum(scale, 1e-20)).max())


def run(system: System, count: int, seed: int) -> Tally:
    """Solve waters in pieces."""
    tally, piece = Tally(), 0
    while tally.count < count:
        n = min(PIECE, count - tally.count)
        waters = random_waters(system, n, seed + 1_000_003 * piece)
        begin = time.process_time()
        state = equilibrate(system, waters.totals, on_failure="flag")
        tally.add(waters, state, time.process_time() - begin)
        some = np.arange(max(1, round(SAMPLE_SHARE * n)))
        part = Waters(waters.totals[some], waters.stratum[some], waters.has_zero[some])
        gap = difference_of_starts(system, part, state.rows(some), seed + piece)
        tally.worst_of_two_starts = max(tally.worst_of_two_starts, gap)
        tally.sampled += some.size
        piece += 1
    return tally


def text_of(tally: Tally, system: System, seed: int) -> str:
    """The figures as lines."""
    lines = [
        f"{tally.count} waters, seed {seed}, {len(system.components)} components, "
        f"{len(system.species_names)} species, {len(system.solids)} solids",
        f"failed: {len(tally.failures)}",
        *(
            f"share with {name}: {share:.1%} (promised {PROMISED_SHARES[name]:.0%})"
            for name, share in tally.shares.items()
        ),
        *(f"worst {name.replace('_', ' ')}: {value:.2e}" for name, value in tally.worst.items()),
        f"two starts, {tally.sampled} waters: dissolved totals differ by "
        f"{tally.worst_of_two_starts:.1e} at most",
        f"cold: {tally.count / tally.seconds:.0f} states per second of processor time",
        *tally.failures[:20],
    ]
    return "\n".join(lines) + "\n"


def main(arguments: Sequence[str] | None = None) -> int:
    """Run; the exit code is 1 if a water failed or a promised share was missed."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks.equilibrium_random")
    parser.add_argument("--count", type=int, default=100_000)
    parser.add_argument("--seed", type=int, default=FIXED_SEED)
    parser.add_argument("--fresh", action="store_true", help="draw a seed nobody has seen")
    parser.add_argument("--activity", default="davies", help="davies, sit or ideal")
    options = parser.parse_args(arguments)
    seed = secrets.randbelow(2**31) if options.fresh else options.seed
    system = load_system(activity=options.activity)
    tally = run(system, options.count, seed)
    sys.stdout.write(text_of(tally, system, seed))
    missed = [n for n, share in tally.shares.items() if share < PROMISED_SHARES[n]]
    return 1 if tally.failures or missed else 0


if __name__ == "__main__":
    sys.exit(main())
