"""The equilibrium never fails: 2 000 random waters, the hard ones among them, all certified."""

from __future__ import annotations

import sys

import numpy as np
import pytest

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from tests.chemistry.certificate import certify
from tests.chemistry.waters import PROMISED_SHARES, Waters, random_waters, replay, shares

COUNT = 2000
SEED = 20_261_201


@pytest.fixture(scope="module")
def system() -> System:
    return load_system()


@pytest.fixture(scope="module")
def waters(system: System) -> Waters:
    return random_waters(system, COUNT, SEED)


@pytest.fixture(scope="module")
def state(system: System, waters: Waters) -> EquilibriumState:
    return equilibrate(system, waters.totals, on_failure="flag")


def test_every_random_water_is_certified(state: EquilibriumState) -> None:
    proof = certify(state)
    good = (
        state.converged
        & (proof.mass_balance <= 1e-10)
        & (proof.mass_action <= 1e-10)
        & (proof.ionic_strength <= 1e-10)
        & (proof.supersaturation <= 1e-8)
        & (proof.presence <= 1e-8)
        & (proof.least_amount >= 0.0)
    )
    failed = [replay(state.system, state.totals[i]) for i in np.flatnonzero(~good)]
    assert not failed, "\n".join([f"{len(failed)} of {COUNT} waters failed:", *failed[:5]])


def test_the_waters_hold_enough_of_every_hard_kind(waters: Waters, state: EquilibriumState) -> None:
    found = shares(waters, state)
    sys.stdout.write("".join(f"{name}: {share:.1%}\n" for name, share in found.items()))
    assert {n: s for n, s in found.items() if s < PROMISED_SHARES[n]} == {}


def test_the_waters_are_electroneutral_and_within_the_range(system: System, waters: Waters) -> None:
    proton = system.index["H+"]
    others = np.delete(waters.totals, proton, axis=1)
    charge = waters.totals @ system.component_charges
    assert np.abs(charge).max() < 1e-14
    assert others.max() <= 0.3
    assert others[others > 0.0].min() >= 1e-13
    counted = (waters.totals != 0.0).sum(axis=1)
    assert counted.max() == 20


def test_two_starts_agree(system: System, waters: Waters, state: EquilibriumState) -> None:
    """A start from a water with every total moved by up to a factor of 2 ends in the same state."""
    rng = np.random.default_rng(SEED + 1)
    moved = waters.totals * 2.0 ** rng.uniform(-1.0, 1.0, waters.totals.shape)
    proton = system.index["H+"]
    moved[:, proton] = 0.0
    moved[:, proton] = -(moved @ system.component_charges)
    neighbour = equilibrate(system, moved)
    again = equilibrate(system, waters.totals, start=neighbour)
    assert_same_states(again, state)


def assert_same_states(one: EquilibriumState, other: EquilibriumState) -> None:
    """Same pH, dissolved totals and, but for ties, solids.

    A tie: constants with two decimals sometimes make the reaction between four solids run neither
    way (3 Ni(OH)2 + 2 Ag3PO4 = Ni3(PO4)2 + 3 Ag2O + 3 H2O), and the split is then open. It shows
    as an absent solid that is just saturated.
    """
    np.testing.assert_allclose(one.ph, other.ph, atol=1e-8)
    np.testing.assert_allclose(
        one.dissolved_mol_per_l, other.dissolved_mol_per_l, rtol=1e-7, atol=1e-17
    )
    just_saturated = ~other.active & (np.abs(other.saturation_index_log10) < 1e-9)
    tied = just_saturated.any(axis=1)
    assert tied.mean() < 0.005
    np.testing.assert_array_equal(one.active[~tied], other.active[~tied])
    np.testing.assert_allclose(
        one.solids_mol_per_l[~tied], other.solids_mol_per_l[~tied], rtol=1e-6, atol=1e-11
    )
