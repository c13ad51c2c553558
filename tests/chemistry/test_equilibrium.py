"""Equilibrium states: what every water promises."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from chemistry import System, equilibrate
from tests.chemistry.acid_rinse import COMPONENTS, IDEAL, PROTON, SYSTEM, assert_same
from tests.chemistry.certificate import certify

FloatArray = NDArray[np.float64]

log10_totals = st.lists(
    st.floats(-9.0, -0.53, allow_nan=False) | st.just(-np.inf), min_size=11, max_size=11
)
batches = st.lists(log10_totals, min_size=1, max_size=4)
quick = settings(max_examples=25, deadline=None, derandomize=True, database=None)


def closed(logs: list[list[float]]) -> FloatArray:
    """Totals from logs of all but the protons, which close the charge."""
    others = 10.0 ** np.array(logs)
    totals = np.insert(others, PROTON, 0.0, axis=1)
    totals[:, PROTON] = -(totals @ SYSTEM.component_charges)
    return totals


@quick
@given(batches)
def test_every_water_is_certified(logs: list[list[float]]) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    worst = certify(state).worst()
    assert worst["mass_balance"] <= 1e-10
    assert worst["mass_action"] <= 1e-10
    assert worst["ionic_strength"] <= 1e-10
    assert worst["supersaturation"] <= 1e-8
    assert worst["presence"] <= 1e-8
    assert worst["least_amount"] >= 0.0


@quick
@given(batches)
def test_the_certificate_tells_the_errors_that_the_reactions_show(logs: list[list[float]]) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    own, told = certify(state), state.certificate
    np.testing.assert_allclose(told["mass_balance"], own.mass_balance, atol=1e-13)
    np.testing.assert_allclose(told["supersaturation"], own.supersaturation, atol=1e-11)
    np.testing.assert_allclose(told["presence"], own.presence, atol=1e-11)
    assert told["charge"].max() < 1e-9  # the totals were closed
    assert told["converged"].all()


@quick
@given(batches)
def test_dissolved_and_solids_add_up_to_the_totals(logs: list[list[float]]) -> None:
    totals = closed(logs)
    state = equilibrate(SYSTEM, totals)
    added = state.dissolved_mol_per_l + state.solids_mol_per_l @ SYSTEM.solid_formation
    np.testing.assert_allclose(added, totals, rtol=1e-9, atol=1e-13)


@quick
@given(st.lists(log10_totals, min_size=3, max_size=5), st.randoms(use_true_random=False))
def test_a_water_does_not_notice_the_others(logs: list[list[float]], random) -> None:
    totals = closed(logs)
    whole = equilibrate(SYSTEM, totals)
    order = list(range(len(totals)))
    random.shuffle(order)
    assert_same(equilibrate(SYSTEM, totals[order]), whole.rows(np.array(order)))
    for i in range(len(totals)):
        assert_same(equilibrate(SYSTEM, totals[i]), whole.row(i))


@quick
@given(batches, st.randoms(use_true_random=False))
def test_the_order_of_components_species_and_solids_is_free(
    logs: list[list[float]], random
) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    mixed = {}
    for part in ("components", "species", "solids"):
        mixed[part] = list(getattr(SYSTEM, part))
        random.shuffle(mixed[part])
    other = System(**mixed, activity="davies")
    totals = {c: state.totals[:, SYSTEM.index[c]] for c in SYSTEM.components}
    again = equilibrate(other, totals)
    np.testing.assert_allclose(again.ph, state.ph, atol=1e-9)
    np.testing.assert_allclose(
        again.dissolved[list(SYSTEM.components)], state.dissolved, rtol=1e-8, atol=1e-15
    )
    np.testing.assert_allclose(
        again.solids[list(SYSTEM.solid_names)], state.solids, rtol=1e-8, atol=1e-12
    )


@quick
@given(log10_totals, st.floats(1e-6, 0.1))
def test_more_of_a_solid_that_is_there_only_adds_to_it(logs: list[float], more: float) -> None:
    state = equilibrate(SYSTEM, closed([logs]))
    here = np.flatnonzero(state.solids_mol_per_l[0] > 0.0)
    if here.size == 0:
        return
    grown = equilibrate(SYSTEM, state.totals + more * SYSTEM.solid_formation[here[0]])
    np.testing.assert_allclose(grown.ph, state.ph, atol=1e-8)
    np.testing.assert_allclose(
        grown.dissolved_mol_per_l, state.dissolved_mol_per_l, rtol=1e-7, atol=1e-12
    )
    added = grown.solids_mol_per_l[0] - state.solids_mol_per_l[0]
    expected = more * (np.arange(added.size) == here[0])
    np.testing.assert_allclose(added, expected, atol=1e-11)


@quick
@given(log10_totals, st.floats(1e-6, 0.05), st.integers(0, len(COMPONENTS) - 1))
def test_more_of_a_component_raises_its_activity(
    logs: list[float], more: float, component: int
) -> None:
    """Gibbs energy is convex: without activity coefficients no component works against itself."""
    totals = closed([logs, logs])
    totals[1, component] += more
    state = equilibrate(IDEAL, totals)
    before, after = state.log_activity[:, component]
    assert after >= before - 1e-9


@quick
@given(log10_totals)
def test_ideal_waters_have_no_coefficients(logs: list[float]) -> None:
    state = equilibrate(IDEAL, closed([logs]))
    free = state.species_mol_per_l[:, : len(COMPONENTS)]
    there = free > 1e-280
    np.testing.assert_allclose(np.log(free[there]), state.log_activity[there], rtol=0, atol=1e-12)


@quick
@given(log10_totals, st.floats(2.0, 12.0))
def test_a_held_ph_needs_the_protons_that_make_it_by_themselves(
    logs: list[float], ph: float
) -> None:
    held = equilibrate(SYSTEM, closed([logs]), ph=ph)
    assert held.ph[0] == pytest.approx(ph, abs=1e-11)
    assert_same(equilibrate(SYSTEM, held.totals), held, rtol=1e-6)
    given_protons = closed([logs])[0, PROTON]
    assert held.titrant_mol_per_l[0] == pytest.approx(
        held.totals[0, PROTON] - given_protons, rel=1e-9, abs=1e-14
    )
