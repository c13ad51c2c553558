"""Dose responses and their envelopes, on waters whose curves bend, break and come back."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from chemistry import Solid, Species, System, WaterError
from chemistry.response import Envelope, Response, linearise, response

WATER = ("H2O = OH- + H+", -14.0)
CARBONATE = (("CO3-2 + H+ = HCO3-", 10.329), ("CO3-2 + 2 H+ = CO2(aq) + H2O", 16.681))

# Formation constants at 25 C. Silver chloride: Ksp 1.8e-10, log beta 3.31 and 5.25 (Smith &
# Martell; Stumm & Morgan, from memory), AgCl3-2 5.20 (Kratohvil & Tezak 1954).
SILVER = System(
    ["H+", "Na+", "Ag+", "Cl-", "SO4-2", "Cu+2"],
    [
        Species.from_reaction(reaction, k)
        for reaction, k in (
            WATER,
            ("SO4-2 + H+ = HSO4-", 1.988),
            ("Ag+ + Cl- = AgCl(aq)", 3.31),
            ("Ag+ + 2 Cl- = AgCl2-", 5.25),
            ("Ag+ + 3 Cl- = AgCl3-2", 5.20),
        )
    ],
    [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", -float(np.log10(1.8e-10)))],
    activity="ideal",
)
# Zinc hydrolysis and amorphous hydroxide: Powell et al. 2013, Pure Appl. Chem. 85, 2249; Schindler
# et al. 1964. Hydroxysulfate: textbook value.
ZINC = System(
    ["H+", "Na+", "Zn+2", "SO4-2"],
    [
        Species.from_reaction(reaction, k)
        for reaction, k in (
            WATER,
            ("SO4-2 + H+ = HSO4-", 1.988),
            ("Zn+2 + SO4-2 = ZnSO4(aq)", 2.37),
            ("Zn+2 + H2O = ZnOH+ + H+", -8.96),
            ("Zn+2 + 2 H2O = Zn(OH)2(aq) + 2 H+", -17.82),
            ("Zn+2 + 3 H2O = Zn(OH)3- + 3 H+", -28.05),
            ("Zn+2 + 4 H2O = Zn(OH)4-2 + 4 H+", -40.5),
        )
    ],
    [
        Solid.from_reaction("Zn+2 + 2 H2O = Zn(OH)2(s,am) + 2 H+", -12.45),
        Solid.from_reaction("4 Zn+2 + SO4-2 + 6 H2O = Zn4(OH)6SO4(s) + 6 H+", -28.4),
    ],
)
# Lead: Powell et al. 2009, Pure Appl. Chem. 81, 2425; Nasanen et al. 1961.
LEAD = System(
    ["H+", "Na+", "Pb+2", "SO4-2", "CO3-2"],
    [
        Species.from_reaction(reaction, k)
        for reaction, k in (
            WATER,
            *CARBONATE,
            ("SO4-2 + H+ = HSO4-", 1.988),
            ("Pb+2 + H2O = PbOH+ + H+", -7.46),
            ("Pb+2 + 2 H2O = Pb(OH)2(aq) + 2 H+", -16.94),
            ("Pb+2 + 3 H2O = Pb(OH)3- + 3 H+", -28.03),
            ("Pb+2 + CO3-2 = PbCO3(aq)", 6.45),
            ("Pb+2 + 2 CO3-2 = Pb(CO3)2-2", 10.13),
            ("Pb+2 + SO4-2 = PbSO4(aq)", 2.82),
        )
    ],
    [
        Solid.from_reaction("Pb+2 + SO4-2 = PbSO4(s)", 7.79),
        Solid.from_reaction("Pb+2 + CO3-2 = PbCO3(s)", 13.13),
        Solid.from_reaction("3 Pb+2 + 2 CO3-2 + 2 H2O = Pb3(CO3)2(OH)2(s) + 2 H+", 17.9),
    ],
)
LADDERS = {
    "silver": (SILVER, {"Ag+": 1e-3, "SO4-2": 5e-4}, {"Na+": 1, "Cl-": 1}, 0.5, "Ag+"),
    "zinc": (ZINC, {"Zn+2": 1e-3, "H+": 4e-3, "SO4-2": 3e-3}, {"Na+": 1, "H+": -1}, 0.05, "Zn+2"),
    "lead": (LEAD, {"Pb+2": 5e-4, "H+": 2e-3, "SO4-2": 2e-3}, {"Na+": 2, "CO3-2": 1}, 0.02, "Pb+2"),
}  # fmt: skip


@cache
def enclosed(name: str) -> tuple[Response, Envelope]:
    system, totals, additions, highest, component = LADDERS[name]
    found = response(system, totals, additions, np.linspace(0.0, highest, 9))
    return found, linearise(found, component, 0.05)


def random_doses(name: str, envelope: Envelope, count: int) -> np.ndarray:
    """Uniform, log-uniform and crowded around the breaks, in equal parts."""
    random = np.random.default_rng(20240229)
    highest = LADDERS[name][3]
    uniform = random.uniform(0.0, highest, count - 2 * (count // 3))
    decades = highest * 10.0 ** random.uniform(-8.0, 0.0, count // 3)
    breaks = np.array([c.dose_mol_per_l for c in envelope.changes])
    near = random.choice(breaks, count // 3) * (1.0 + 1e-4 * random.standard_normal(count // 3))
    return np.clip(np.concatenate([uniform, decades, near]), 0.0, highest)


@pytest.mark.parametrize("name", LADDERS)
def test_envelopes_bracket_the_true_curve_at_1000_random_doses(name: str) -> None:
    found, envelope = enclosed(name)
    doses = random_doses(name, envelope, 1000)
    assert doses.size == 1000
    true, _, _ = found.ln_residual(envelope.component, doses)
    below, above = envelope.optimistic_at(doses), envelope.safe_at(doses)
    assert np.all(below <= true)
    assert np.all(true <= above)
    assert envelope.within_tolerance
    assert np.max(above - below) <= envelope.largest_error_ln + 1e-12 <= 0.05 + 1e-12


@pytest.mark.parametrize("name", LADDERS)
def test_curves_span_decades_and_break_where_solids_come_and_go(name: str) -> None:
    found, envelope = enclosed(name)
    assert envelope.safe_ln.max() - envelope.safe_ln.min() > np.log(50.0)
    expected = {
        "silver": [("AgCl(s)",)],
        "zinc": [("Zn4(OH)6SO4(s)",), ("Zn(OH)2(s,am)",)],
        "lead": [("PbCO3(s)",), ("Pb3(CO3)2(OH)2(s)",)],
    }
    assert [c.appears for c in envelope.changes if c.appears] == expected[name]
    for change in envelope.changes:
        step = 1e-7 * change.dose_mol_per_l
        doses = np.array([change.dose_mol_per_l - step, change.dose_mol_per_l + step])
        _, _, present = found.ln_residual(envelope.component, doses)
        before, after = (set(np.array(found.system.solid_names)[p]) for p in present)
        assert after - before == set(change.appears)
        assert before - after == set(change.disappears)


def test_silver_is_lowest_at_a_few_millimoles_and_comes_back() -> None:
    # Minimum of 0.056 mg/L (0.03 to 0.07 over published constants) at 2.2 to 3.1 mmol/L of free
    # chloride; 0.385 mg/L at 0.1 mol/L without AgCl3-2 (closed form, constants as given, ideal).
    found, envelope = enclosed("silver")
    fine = found.at(np.linspace(1.5e-3, 0.02, 400))
    silver = fine.residual_mol_per_l("Ag+") * 107.868e3
    chloride = fine.system.species_names.index("Cl-")
    lowest = int(np.argmin(silver))
    assert 0.03 < silver[lowest] < 0.07
    assert 2.2e-3 < fine.state.species_mol_per_l[lowest, chloride] < 3.1e-3
    two = SILVER.species[:4]
    plain = System(SILVER.components, two, SILVER.solids, activity="ideal")
    salt = response(plain, {"Ag+": 1e-3, "SO4-2": 5e-4}, {"Na+": 1, "Cl-": 1}, [0.1, 0.101])
    assert salt.residual_mol_per_l("Ag+")[0] * 107.868e3 == pytest.approx(0.385, rel=0.05)
    assert envelope.safe_ln[-1] > envelope.safe_ln.min() + np.log(20.0)


def test_onset_of_a_solid_is_where_its_product_is_reached() -> None:
    bare = System(
        ["H+", "Na+", "Ag+", "Cl-"], [Species.from_reaction(*WATER)],
        [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", 9.75)], activity="ideal",
    )  # fmt: skip
    found = response(bare, {"Ag+": 1e-3}, {"Na+": 1, "Cl-": 1}, [0.0, 5e-4])
    envelope = linearise(found, "Ag+")
    assert [c.dose_mol_per_l for c in envelope.changes] == pytest.approx([10**-9.75 / 1e-3])


def test_a_solid_between_two_rungs_with_the_same_solids_is_found() -> None:
    system, totals, additions, highest, component = LADDERS["zinc"]
    found = response(system, totals, additions, [0.0, highest])
    _, _, present = found.ln_residual(component, found.doses_mol_per_l)
    assert not present.any()  # nothing at either end, hydroxide in between
    envelope = linearise(found, component, 0.1)
    assert {s for c in envelope.changes for s in c.appears} >= {"Zn(OH)2(s,am)"}
    doses = np.linspace(0.0, highest, 200)
    true, _, _ = found.ln_residual(component, doses)
    assert np.all(envelope.optimistic_at(doses) <= true)
    assert np.all(true <= envelope.safe_at(doses))


@pytest.mark.parametrize("name", LADDERS)
def test_slopes_are_those_of_finite_differences(name: str) -> None:
    found, envelope = enclosed(name)
    breaks = np.array([c.dose_mol_per_l for c in envelope.changes])
    doses = LADDERS[name][3] * np.array([0.03, 0.11, 0.29, 0.47, 0.83])
    step = 1e-5 * doses
    assert np.abs(doses[:, None] / breaks - 1.0).min() > 1e-3
    _, slope, _ = found.ln_residual(envelope.component, doses)
    up, _, _ = found.ln_residual(envelope.component, doses + step)
    down, _, _ = found.ln_residual(envelope.component, doses - step)
    assert slope == pytest.approx((up - down) / (2.0 * step), rel=1e-5, abs=1e-5)


def test_a_tighter_tolerance_takes_more_breakpoints_and_lies_inside() -> None:
    found, envelope = enclosed("lead")
    tight = linearise(found, "Pb+2", 0.005)
    assert tight.largest_error_ln <= 0.005
    assert tight.doses_mol_per_l.size > 2 * envelope.doses_mol_per_l.size
    assert np.all(np.diff(tight.doses_mol_per_l) > 0.0)


def test_where_balances_cannot_resolve_the_curve_the_lines_part_and_say_so() -> None:
    # Silver at the equivalence of sulfide falls to 1e-17 mol/L: the balances close to 1e-12.
    sulfide = System(
        ["H+", "Na+", "Ag+", "HS-"],
        [Species.from_reaction(*WATER), Species.from_reaction("HS- + H+ = H2S(aq)", 6.99)],
        [Solid.from_reaction("2 Ag+ + HS- = Ag2S(s) + H+", 36.03)],
    )
    found = response(
        sulfide, {"Ag+": 4.5e-3, "Na+": 1e-3}, {"Na+": 1, "HS-": 1}, [0.0, 0.02], ph=8.6
    )
    envelope = linearise(found, "Ag+")
    assert not envelope.within_tolerance
    wide = envelope.safe_ln - envelope.optimistic_ln > envelope.tolerance_ln
    assert envelope.doses_mol_per_l[wide] == pytest.approx(2.25e-3, rel=1e-6)
    doses = np.concatenate([np.linspace(0.0, 0.02, 200), 2.25e-3 + np.linspace(-1e-9, 1e-9, 200)])
    true, _, _ = found.ln_residual("Ag+", doses)
    assert np.all(envelope.optimistic_at(doses) <= true)
    assert np.all(true <= envelope.safe_at(doses))


def test_a_held_ph_asks_for_base_and_keeps_the_ph() -> None:
    system, totals, additions, highest, _ = LADDERS["lead"]
    found = response(system, totals, additions, [0.0, 0.5 * highest, highest], ph=9.0)
    assert found.ph == pytest.approx(9.0, abs=1e-10)
    proton = found.system.index["H+"]
    asked = found.totals_mol_per_l + found.doses_mol_per_l[:, None] * found.additions
    asked[:, proton] -= found.base_demand_mol_per_l
    assert asked == pytest.approx(found.state.totals, rel=1e-12)
    assert found.base_demand_mol_per_l[0] == pytest.approx(2e-3, rel=0.4)
    assert found.base_demand_mol_per_l[2] < found.base_demand_mol_per_l[0]  # soda ash is alkali
    envelope = linearise(found, "Pb+2")
    doses = np.linspace(0.0, highest, 300)
    true, _, _ = found.ln_residual("Pb+2", doses)
    assert np.all(envelope.optimistic_at(doses) <= true)
    assert np.all(true <= envelope.safe_at(doses))


def test_frames_carry_names_and_doses() -> None:
    found, _ = enclosed("silver")
    assert list(found.dissolved.columns) == ["H+", "Na+", "Ag+", "Cl-", "SO4-2"]  # no copper
    assert list(found.solids.columns) == ["AgCl(s)"]
    assert found.dissolved.index.name == "dose_mol_per_l"
    assert found.solids["AgCl(s)"].iloc[-1] == pytest.approx(1e-3, rel=0.2)
    assert found.base_demand_mol_per_l == pytest.approx(np.zeros(9))
    array = np.array([0.0, 0.0, 1e-3, 0.0, 5e-4, 0.0])
    again = response(SILVER, array, {"Na+": 1, "Cl-": 1}, found.doses_mol_per_l)
    assert again.residual_mol_per_l("Ag+") == pytest.approx(found.residual_mol_per_l("Ag+"))


@pytest.mark.parametrize("doses", [[0.1], [0.1, 0.1], [0.2, 0.1], [-0.1, 0.1], [0.0, np.nan]])
def test_doses_must_rise(doses: list[float]) -> None:
    with pytest.raises(WaterError, match="doses must be at least two rising numbers, none below 0"):
        response(SILVER, {"Ag+": 1e-3}, {"Cl-": 1, "Na+": 1}, doses)


def test_what_is_not_there_is_refused() -> None:
    found, envelope = enclosed("silver")
    with pytest.raises(WaterError, match=r"'Cu\+2' is in neither the water nor the reagent"):
        linearise(found, "Cu+2")
    with pytest.raises(WaterError, match=r"tolerance 0.0 is not above 0"):
        linearise(found, "Ag+", 0.0)
    with pytest.raises(WaterError, match=r"additions name unknown components: Xx"):
        response(SILVER, {"Ag+": 1e-3}, {"Xx": 1.0}, [0.0, 1.0])
    with pytest.raises(WaterError, match=r"totals have shape \(2,\): expected one value for each"):
        response(SILVER, np.zeros(2), {"Cl-": 1.0}, [0.0, 1.0])
    with pytest.raises(WaterError, match=r"a dose is outside the envelope, 0 to 0.5 mol/L"):
        envelope.safe_at(np.array([0.6]))
