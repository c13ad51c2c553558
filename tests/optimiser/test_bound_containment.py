"""The relaxation of a cell holds every plan of the cell: what makes the word proven true."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from chemistry import equilibrate
from optimiser.bound_cells import Corner
from optimiser.bound_model import Relaxation
from optimiser.bound_shrink import shrink
from optimiser.bound_vent import can_vent, vent_range
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.planning import find
from optimiser.points import Points
from optimiser.recipes import Recipe, recipes, set_point_bounds, trim_for
from optimiser.site import Site
from optimiser.solver import open_solver
from tests.optimiser.bound_points import broken, cell_around, least_cost_at, place_of, point_values
from tests.optimiser.small_sites import (
    ALKALINE,
    CARBONATE,
    SILVER,
    SULFATE,
    SULFIDE,
    small_site,
    with_factors,
)

FloatArray = NDArray[np.float64]

ROWS_HELD_TO = 2e-7
"""Rows are loosened by 1e-6; a point of the exact equilibrium needs none of that."""


TURNS = 2
"""Once in the cell as drawn, once after it was shrunk to what costs no more than the point."""


def without_limits(site: Site) -> Site:
    """The site with every limit a thousand times wider, so that random points are plans."""
    wide = [
        replace(
            limit,
            daily_mg_per_l=limit.daily_mg_per_l and 1e3 * limit.daily_mg_per_l,
            monthly_mg_per_l=limit.monthly_mg_per_l and 1e3 * limit.monthly_mg_per_l,
            daily_load_kg_per_d=limit.daily_load_kg_per_d and 1e3 * limit.daily_load_kg_per_d,
        )
        for limit in site.limits
    ]
    return replace(site, limits=tuple(wide))


def random_points(evaluator: Evaluator, count: int, seed: int) -> Evaluation:
    """Points of random recipes, doses and set points with all their corners and ends."""
    rng = np.random.default_rng(seed)
    plant, bounds = evaluator.plant, set_point_bounds(evaluator)
    known = [r for size in (1, 2, 3) for r in recipes(plant, size)]
    parts = []
    for _ in range(count):
        recipe = known[rng.integers(len(known))]
        doses = np.zeros((1, len(plant.names)))
        for r in recipe.paced:
            doses[0, r] = evaluator.least[r] * 10.0 ** rng.uniform(0.0, 1.8)
        own = -1 if recipe.controller is None else recipe.controller
        low, high = bounds.ph_low(own, doses[0]), bounds.ph_high(own, doses[0])
        ph = rng.uniform(low, max(low, high)) if own >= 0 else plant.feed.ph
        trim = np.array([trim_for(evaluator, ph)])
        parts.append(Points(doses, np.array([own]), np.array([ph]), trim))
    return evaluator.evaluate(Points.join(parts))


def random_corners(
    paced: int, rng: np.random.Generator, *, held_ph: bool, vents: bool
) -> tuple[Corner, ...]:
    found = {}
    for _ in range(2):
        shift = int(rng.choice([-1, 1])) if held_ph else 0
        signs = tuple(int(s) for s in rng.choice([-1, 1], size=paced))
        vented = vents and bool(rng.integers(2))
        corner = Corner(shift, signs, bool(rng.integers(2)), vented=vented)
        if shift or paced:
            found[corner.tag] = corner
    return tuple(found.values())


def contained(site: Site, count: int, seed: int) -> int:
    """Check that feasible random points lie in random cells around them; return how many."""
    evaluator = Evaluator(without_limits(site))
    seen = random_points(evaluator, count, seed)
    for point in np.flatnonzero(seen.feasible):
        check_point(evaluator, seen, int(point), np.random.default_rng([seed, int(point)]))
    return int(seen.feasible.sum())


def check_point(
    evaluator: Evaluator, seen: Evaluation, point: int, rng: np.random.Generator
) -> None:
    """Check that a feasible point lies in a random cell around it, before and after shrinking."""
    relaxation, solver = Relaxation(evaluator), open_solver("highs", relative_gap=1e-9)
    paced = np.flatnonzero(seen.points.doses[point] > 0.0)
    own = int(seen.points.controller[point])
    recipe = Recipe(None if own < 0 else own, tuple(int(r) for r in paced))
    corners = random_corners(
        paced.size, rng, held_ph=own >= 0, vents=can_vent(evaluator.plant, recipe)
    )
    cell = cell_around(
        evaluator, seen, point, corners,
        ph_width=10.0 ** rng.uniform(-2.0, 0.3), dose_ratio=10.0 ** rng.uniform(0.02, 0.5),
    )  # fmt: skip
    cost = float(seen.total[point])
    for turn in range(TURNS):
        made = relaxation.build(cell)
        assert made is not None, f"point {point}: its cell is called empty"
        values = point_values(relaxation, made, seen, point)
        assert broken(made.model, values, ROWS_HELD_TO) == [], f"point {point}, turn {turn}"
        assert least_cost_at(made.model, values, solver) <= cost * (1.0 + 1e-6)
        smaller = shrink(relaxation, made, cost * (1.0 + 1e-6))
        assert smaller is not None, f"point {point}: its cell shrinks to nothing"
        cell = smaller


@pytest.mark.parametrize(
    ("changes", "least"),
    [
        ((), 5),
        ((SULFATE,), 5),
        ((SULFIDE,), 3),
        ((CARBONATE,), 5),
        ((ALKALINE,), 5),
        ((SILVER,), 3),
    ],
    ids=["copper and zinc", "sulfate", "sulfide", "carbonate", "alkaline", "silver"],
)
def test_random_points_of_small_sites_lie_in_their_cells(
    changes: tuple[dict[str, object], ...], least: int
) -> None:
    assert contained(small_site(*changes), 8, 7) >= least


def test_random_points_of_a_site_with_factors_of_jar_tests_lie_in_their_cells() -> None:
    assert contained(with_factors(small_site(), Cu=0.2, Zn=4.0), 8, 7) >= 5


FINE_FILTER: dict[str, object] = {"treatment": {"separator": {"tss_mg_per_l": 0.05}}}


def test_plans_that_stand_at_limits_lie_in_their_cells() -> None:
    """The recipes of a search, each at its cheapest: limits bind, and so does the filter."""
    evaluator, findings = find(small_site(SULFATE, FINE_FILTER))
    separator, tight = evaluator.plant.treatment.separator, 0
    for _, track in findings.feasible:
        seen = evaluator.evaluate(track.point)
        check_point(evaluator, seen, 0, np.random.default_rng(5))
        mass = seen.blocks[0].state.solids_mol_per_l @ evaluator.judge.solid_mass
        assert (separator.tss_mg_per_l / mass < 1.0 - separator.capture_fraction).all()
        tight += float(seen.violation[0]) > -1e-3
    assert tight > 0


def test_the_share_that_slips_past_is_never_above_the_true_one() -> None:
    evaluator = Evaluator(small_site(SULFATE, FINE_FILTER))
    relaxation = Relaxation(evaluator)
    seen = random_points(evaluator, 6, 3)
    for point in range(6):
        cell = cell_around(evaluator, seen, point, (), ph_width=0.5, dose_ratio=1.5)
        made = relaxation.build(cell)
        if made is None:
            continue  # this point misses a limit, and so does its whole cell
        rows = made.rows[cell.corners[0].tag]
        block, k = place_of(seen, point, cell.corners[0], cell.recipe.paced)
        share, _ = evaluator.judge._share(
            block.state.solids_mol_per_l[[k]], np.zeros(1, dtype=np.int64)
        )
        assert relaxation.least_share(rows) <= share[0] * (1.0 + 1e-9)


def test_what_a_vented_water_keeps_lies_in_its_bracket() -> None:
    """Soda ash from far below to far above what the feed's acid drives out as gas."""
    plant = Evaluator(small_site(CARBONATE)).plant
    soda, carbonate = plant.index["soda_ash"], plant.system.index["CO3-2"]
    steps = np.geomspace(20.0, 2000.0, 25)
    doses = np.zeros((25, len(plant.names)))
    doses[:, soda] = steps
    mixed = plant.totals + doses @ plant.reacting
    state = equilibrate(
        plant.liquid_system, mixed, pco2_atm=plant.treatment.vent_pco2_atm, on_failure="flag"
    )
    kept = np.minimum(state.totals[:, carbonate], mixed[:, carbonate])
    assert kept.max() > 50.0 * kept.min()
    for first, last in ((0, 24), (3, 9), (8, 14), (12, 13), (15, 24)):
        found = vent_range(plant, doses[first], doses[last])
        inside = kept[first : last + 1]
        assert found.kept_low <= inside.min()
        assert inside.max() <= found.kept_high
        assert found.kept_high <= 1.06 * inside.max() + 2e-6
        assert found.kept_low >= 0.94 * inside.min() - 2e-6
