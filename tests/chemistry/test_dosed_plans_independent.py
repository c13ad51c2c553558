"""Dosed tanks of the demo sites agree with the oracle in 50 digits: doses, solids, dissolved.

Each tank starts from the feed's totals and the paced doses, added up here by hand. The oracle finds
the dose that holds the pH and what a vented tank loses to the air, as well as the state.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from catalogs import load_system
from chemistry import EquilibriumState, equilibrate
from optimiser import assess, load_site
from optimiser.evaluation import Evaluator
from optimiser.points import (
    CLOSED_FORMED,
    CLOSED_HELD,
    END_TEXT,
    VENTED_FORMED,
    VENTED_HELD,
    Block,
    Points,
)
from optimiser.site import Site
from tests.chemistry.oracle import Held, blurred, solve_exact, water_of, worst_difference
from tests.optimiser.small_sites import small_site

AGREES = 1e-6  # relative, of dissolved totals and doses
SITES = Path(__file__).parents[2] / "catalogs" / "sites"
BRINE = "small brine by specific ion interaction"
SALT = {"feed": {"analysis": {"Na": "26 g/L"}}}


@dataclass(frozen=True)
class Tank:
    """A site's tank: reagents paced in mg/L, the one that holds the pH if any, and the ends."""

    site: str
    paced: Mapping[str, float] = field(default_factory=dict)
    controller: str = ""
    ph: float = 7.0
    ends: tuple[int, ...] = (CLOSED_FORMED,)

    def __str__(self) -> str:
        doses = [f"{name} {dose:g}" for name, dose in self.paced.items()]
        held = [f"{self.controller} to pH {self.ph:g}"] if self.controller else []
        return f"{self.site}: {', '.join([*doses, *held])}"


TANKS = (
    Tank("plating_rinse", {}, "caustic_soda", 9.6),
    Tank("plating_rinse", {"sodium_hydrosulfide": 45}, "hydrated_lime", 8.7),
    Tank("plating_rinse", {"soda_ash": 150}, "caustic_soda", 9.1, (CLOSED_FORMED, VENTED_FORMED)),
    Tank("plating_rinse", {"caustic_soda": 390}),
    Tank("silver_rinse", {"sodium_chloride": 140}, "caustic_soda", 8.4),
    Tank("silver_rinse", {"sodium_hydrosulfide": 11}, "magnesium_hydroxide", 8.1),
    Tank("lead_battery", {}, "hydrated_lime", 8.9, (CLOSED_FORMED, CLOSED_HELD)),
    Tank("lead_battery", {"soda_ash": 250}, "quicklime", 9.3, (VENTED_FORMED, VENTED_HELD)),
    Tank("lead_battery", {"sodium_hydrosulfide": 30}, "caustic_soda", 8.0),
    Tank("mercury_lab", {"sodium_sulfide": 25}, "caustic_soda", 9.0),
    Tank("mercury_lab", {"ferrous_sulfide": 40}, "magnesium_hydroxide", 8.8),
    Tank("barium_glaze", {"sodium_sulfate": 75}, "carbon_dioxide", 8.6),
    Tank("barium_glaze", {"ferric_sulfate": 60}, "sulfuric_acid", 9.2),
    Tank(BRINE, {}, "caustic_soda", 9.2),
    Tank(BRINE, {"hydrated_lime": 230}),
)
CASES = [(tank, end) for tank in TANKS for end in tank.ends]


@cache
def evaluator_of(name: str) -> Evaluator:
    return Evaluator(brine() if name == BRINE else load_site(SITES / name / "site.yaml"))


def brine() -> Site:
    site = small_site(SALT)
    system = load_system(
        site.system.temperature_degc, components=site.system.components, activity="sit"
    )
    return replace(site, system=system)


@cache
def blocks_of(tank_index: int) -> dict[int, Block]:
    """The tank's nominal state at every end."""
    tank = TANKS[tank_index]
    evaluator = evaluator_of(tank.site)
    plant = evaluator.plant
    doses = np.zeros((1, len(plant.names)))
    for name, dose in tank.paced.items():
        doses[0, plant.index[name]] = dose
    controller = plant.index[tank.controller] if tank.controller else -1
    none = np.array([-1])
    seen = evaluator.evaluate(
        Points(doses, np.array([controller]), np.array([tank.ph]), none), full=False
    )
    return {block.end: block for block in seen.blocks}


def dosed_totals(tank: Tank, *, carbonate_alone: bool = False) -> dict[str, float]:
    """Feed and paced doses, before the controller's. [mol/L]"""
    site, plant = evaluator_of(tank.site).site, evaluator_of(tank.site).plant
    totals = dict(
        zip(plant.system.components, map(float, plant.feed.totals_mol_per_l), strict=True)
    )
    for name, dose in tank.paced.items():
        reagent = site.reagents[name]
        if carbonate_alone and "CO3-2" not in reagent.components:
            continue
        reacting = dose / reagent.dose_factor / (1000.0 * reagent.molar_mass_g_per_mol)
        for component, moles in reagent.components.items():
            totals[component] += moles * reacting
    return totals


def lost_carbon_dioxide(tank: Tank) -> float:
    """What feed and carbonate reagents lose to the site's air before other alkali. [mol/L]"""
    site = evaluator_of(tank.site).site
    mixed, pco2 = dosed_totals(tank, carbonate_alone=True), site.treatment.vent_pco2_atm
    start = equilibrate(site.system.narrowed(solids=()), mixed, pco2_atm=pco2)
    exact, _ = solve_exact(*water_of(start, Held(pco2_atm=pco2)))
    return -float(exact.co2)


def tank_ids(case: object) -> str:
    return END_TEXT[case] if isinstance(case, int) else str(case)


@pytest.mark.parametrize(("tank", "end"), CASES, ids=tank_ids)
def test_a_dosed_tank_is_that_of_the_oracle(tank: Tank, end: int) -> None:
    block = blocks_of(TANKS.index(tank))[end]
    state = block.state
    totals = dosed_totals(tank)
    if end in (VENTED_FORMED, VENTED_HELD):
        lost = lost_carbon_dioxide(tank)
        assert lost > 1e-5
        totals["CO3-2"] -= lost
        totals["H+"] -= 2.0 * lost
    held = Held()
    if tank.controller:
        reagent = evaluator_of(tank.site).site.reagents[tank.controller]
        held = Held(ph=tank.ph, titrant=reagent.components)
    water, start = water_of(state, held, totals)
    exact, _ = solve_exact(water, blurred(start))
    assert state.converged.all()
    assert worst_difference(state, exact) < AGREES
    assert float(exact.ph) == pytest.approx(float(state.ph[0]), abs=1e-8)
    for name, amount in exact.solids.items():
        found = float(state.solids_mol_per_l[0, state.system.solid_names.index(name)])
        assert float(amount) == pytest.approx(found, rel=AGREES, abs=1e-12)
    if tank.controller:
        per_mg = 1.0 / reagent.dose_factor / (1000.0 * reagent.molar_mass_g_per_mol)
        assert block.held.all()
        assert float(exact.titrant) / per_mg == pytest.approx(float(block.dose[0]), rel=AGREES)


PLAIN_HYDROXIDE = re.compile(r"[A-Z][a-z]?\(OH\)\d\(s")  # its cake binds water
ASSESSED = (
    Tank("plating_rinse", {"caustic_soda": 390}),
    Tank("silver_rinse", {"sodium_chloride": 140, "caustic_soda": 9}),
    Tank("mercury_lab", {"sodium_sulfide": 25, "caustic_soda": 45}),
)


@pytest.mark.parametrize("tank", ASSESSED, ids=tank_ids)
def test_what_an_assessment_prints_of_the_tank_is_that_of_the_oracle(tank: Tank) -> None:
    """The pH, the ionic strength and the sludge, solid by solid."""
    site = evaluator_of(tank.site).site
    printed = assess(site, tank.paced, trim="none").data
    totals = dosed_totals(tank)
    exact, _ = solve_exact(*water_of(equilibrate(site.system, totals)))
    (at_tank,) = [row for row in printed["water"] if row["point"] == "tank"]
    assert at_tank["ph"] == pytest.approx(float(exact.ph), abs=1e-6)
    assert at_tank["ionic_strength_mol_per_l"] == pytest.approx(
        float(exact.ionic_strength), rel=AGREES
    )
    system, bound = site.system, site.disposal.bound_water_factor
    masses = dict(zip(system.solid_names, system.solid_molar_masses_g_per_mol, strict=True))
    expected = {
        n: float(x) * masses[n] * site.flow_m3_per_d * (bound if PLAIN_HYDROXIDE.match(n) else 1.0)
        for n, x in exact.solids.items()
    }
    sludge = printed["sludge"]["dry_kg_per_d_by_solid"]
    assert {name.split(" ")[0]: mass for name, mass in sludge.items()} == pytest.approx(
        expected, rel=1e-5
    )


def present_in(state: EquilibriumState) -> set[str]:
    return {n for n, a in zip(state.system.solid_names, state.active[0], strict=True) if a}


def test_the_tanks_differ_and_hold_the_solids_that_plans_rest_on() -> None:
    """Else the comparison above would prove little."""
    states = [blocks_of(TANKS.index(tank))[end].state for tank, end in CASES]
    seen = [present_in(state) for state in states]
    assert len(TANKS) >= 10
    assert len({frozenset(solids) for solids in seen}) >= 10
    assert min(map(len, seen)) >= 2
    everything = set[str]().union(*seen)
    assert {"AgCl(s)", "BaSO4(s)", "CaSO4.2H2O(s)", "HgS(s,black)", "CdCO3(s)"} <= everything
    salty = [s for s in states if s.system.activity == "sit"]
    assert min(float(s.ionic_strength[0]) for s in salty) > 0.5
