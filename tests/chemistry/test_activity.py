"""Activity coefficients: published values, slopes, and thermodynamic consistency."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from chemistry import System, SystemDefinitionError, equilibrate
from chemistry.activity import (
    Interactions,
    build_activity,
    debye_hueckel_a,
    interaction_by_rule,
)

FloatArray = NDArray[np.float64]

LN10 = float(np.log(10.0))
WATER_MOL_PER_KG = 55.508

# Mean activity coefficients of NaCl at 25 C (Robinson & Stokes 1959, Electrolyte Solutions,
# appendix 8.10, from memory).
SODIUM_CHLORIDE = {0.01: 0.902, 0.05: 0.820, 0.1: 0.778, 0.2: 0.735, 0.5: 0.681, 1.0: 0.657}
SODIUM_CHLORIDE_EPSILON = 0.03  # kg/mol


def mean_coefficient(activity: str, molality: float, **settings: object) -> float:
    """Mean activity coefficient of NaCl from an equilibrium state."""
    system = System(["Na+", "Cl-"], activity=activity, **settings)  # type: ignore[arg-type]
    state = equilibrate(system, {"Na+": molality, "Cl-": molality})
    ln_gamma = state.log_activity[0] - np.log(molality)
    return float(np.exp(ln_gamma.mean()))


@pytest.mark.parametrize("molality", [m for m in SODIUM_CHLORIDE if m <= 0.5])
def test_davies_gives_the_coefficients_of_table_salt_within_its_range(molality: float) -> None:
    found = mean_coefficient("davies", molality)
    assert found == pytest.approx(SODIUM_CHLORIDE[molality], rel=0.08 if molality > 0.2 else 0.02)


@pytest.mark.parametrize("molality", list(SODIUM_CHLORIDE))
def test_specific_interaction_gives_them_in_salty_water_too(molality: float) -> None:
    pairs = Interactions({("Na+", "Cl-"): SODIUM_CHLORIDE_EPSILON})
    found = mean_coefficient("sit", molality, interactions=pairs)
    assert found == pytest.approx(SODIUM_CHLORIDE[molality], rel=0.025)


def test_ideal_coefficients_are_1() -> None:
    assert mean_coefficient("ideal", 0.5) == pytest.approx(1.0, rel=1e-12)


def test_davies_term_is_the_equation_and_grows_with_the_square_of_the_charge() -> None:
    model = build_activity("davies", np.array([0.0, 1.0, -2.0, 3.0]))
    offset = model.offset(np.array([[0.1]]))[0]
    root = np.sqrt(0.1)
    log10_gamma = -0.509 * (root / (1 + root) - 0.03)
    np.testing.assert_allclose(offset, -LN10 * log10_gamma * np.array([0.0, 1.0, 4.0, 9.0]))


def test_davies_term_is_frozen_above_a_half() -> None:
    model = build_activity("davies", np.array([1.0]))
    value, slope = model.screening(np.array([0.5, 0.7, 5.0]))
    assert value[0] == value[1] == value[2]
    np.testing.assert_array_equal(slope, 0.0)
    below, slope_below = model.screening(np.array([0.5 - 1e-9]))
    assert below[0] == pytest.approx(value[0], abs=1e-8)
    assert slope_below[0] != 0.0


def test_auto_is_davies() -> None:
    assert build_activity("auto", np.array([1.0])).name == "davies"


def test_debye_hueckel_a_follows_the_published_table() -> None:
    """Freeze & Cherry 1979, Groundwater, Appendix IV; 0.509 at 25 C."""
    table = {0.0: 0.4883, 10.0: 0.4960, 25.0: 0.5090, 50.0: 0.5319}
    for degc, a in table.items():
        assert debye_hueckel_a(degc) == pytest.approx(a, abs=1e-12)
    assert 0.5042 < debye_hueckel_a(22.0) < 0.5090


def test_unknown_models_and_missing_coefficients_are_refused() -> None:
    with pytest.raises(SystemDefinitionError, match="unknown activity model 'debye': use one of"):
        build_activity("debye", np.array([1.0]))
    with pytest.raises(SystemDefinitionError, match="sit needs interaction coefficients"):
        build_activity("sit", np.array([1.0]))


def test_pairs_without_a_published_value_follow_the_rule() -> None:
    assert interaction_by_rule("Ca+2", "Xx-", 2.0, -1.0) == pytest.approx(0.15)
    assert interaction_by_rule("Xx-", "Ca+2", -1.0, 2.0) == pytest.approx(0.15)
    assert interaction_by_rule("Na+", "Xx-2", 1.0, -2.0) == pytest.approx(-0.10)
    assert interaction_by_rule("Ca+2", "SO4-2", 2.0, -2.0) == 0.0
    assert interaction_by_rule("Ca+2", "Mg+2", 2.0, 2.0) == 0.0
    assert interaction_by_rule("CO2(aq)", "Na+", 0.0, 1.0) == 0.0


NAMES = ("Na+", "Ca+2", "Al+3", "Cl-", "SO4-2", "CO2(aq)")
CHARGES = np.array([1.0, 2.0, 3.0, -1.0, -2.0, 0.0])
PAIRS = Interactions({
    ("Na+", "Cl-"): 0.03, ("Ca+2", "Cl-"): 0.14, ("Al+3", "Cl-"): 0.33, ("SO4-2", "Na+"): -0.12,
    ("CO2(aq)", "Na+"): 0.1,
})  # fmt: skip


def interacting_model():
    return build_activity(
        "sit", CHARGES, names=NAMES, water=np.array([0.0, 0.0, 0.0, 0.0, 0.0, 1.0]),
        interactions=PAIRS,
    )  # fmt: skip


MIXTURES = np.random.default_rng(3).uniform(0.01, 1.0, (6, CHARGES.size))


@pytest.mark.parametrize("name", ["davies", "sit"])
def test_slopes_are_the_differences_of_the_offsets(name: str) -> None:
    model = interacting_model() if name == "sit" else build_activity("davies", CHARGES)
    y = (MIXTURES * (0.05 if name == "davies" else 1.0)) @ model.functionals
    columns = np.arange(model.width)
    slopes = model.offset_slope(y, columns)
    for column in columns:
        step = np.zeros_like(y)
        step[:, column] = 1e-6 * np.maximum(y[:, column], 0.1)
        change = model.offset(y + step) - model.offset(y - step)
        expected = change / (2.0 * step[:, column, None])
        np.testing.assert_allclose(slopes[:, :, column], expected, rtol=1e-6, atol=1e-8)


def test_water_and_solutes_obey_gibbs_duhem() -> None:
    """``sum m d ln(g m) + 55.508 d ln a_w = 0`` along any change of a mixture.

    The offset holds the water that a species is formed with; only coefficients count here, so the
    species are formed without.
    """
    model = build_activity("sit", CHARGES, names=NAMES, interactions=PAIRS)
    rng = np.random.default_rng(4)
    for m in MIXTURES:
        way = 1e-5 * rng.uniform(-1.0, 1.0, m.size) * m
        high, low = ((m + sign * way)[None, :] for sign in (1.0, -1.0))
        y_high, y_low = high @ model.functionals, low @ model.functionals
        ln_a_high = np.log(high) - model.offset(y_high)
        ln_a_low = np.log(low) - model.offset(y_low)
        solutes = float((m * (ln_a_high - ln_a_low)[0]).sum())
        water = float((model.ln_water(y_high) - model.ln_water(y_low))[0])
        assert solutes + WATER_MOL_PER_KG * water == pytest.approx(
            0.0, abs=1e-8 * np.abs(way).max()
        )


def test_the_activity_of_water_over_a_dilute_salt_is_that_of_its_particles() -> None:
    model = build_activity("sit", np.array([1.0, -1.0]), names=("Na+", "Cl-"), interactions=PAIRS)
    y = np.array([[0.01, 0.01]]) @ model.functionals
    osmotic = -model.ln_water(y)[0] * WATER_MOL_PER_KG / 0.02
    assert osmotic == pytest.approx(0.968, abs=0.003)  # Robinson & Stokes 1959, from memory


def test_davies_and_ideal_leave_water_alone() -> None:
    for name in ("davies", "ideal"):
        model = build_activity(name, CHARGES)
        assert (model.ln_water(np.array([[0.4]])) == 0.0).all()
