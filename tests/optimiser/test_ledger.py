"""The dose ledger against stoichiometry by hand, and its sums on every kind of reagent."""

from __future__ import annotations

import re
from collections.abc import Mapping

import numpy as np
import pytest

from optimiser.evaluation import Evaluator
from optimiser.ledger import FREE_ACID, LEFT, OTHER, SOLID, UNREACTED, Ledger, dose_ledger
from optimiser.points import Points
from optimiser.recipes import trim_for
from optimiser.site import Site
from tests.optimiser.small_sites import (
    ALKALINE,
    CARBONATE,
    SILVER,
    SULFATE,
    SULFIDE,
    feed_totals,
    settled,
    small_site,
)

NO_CAUSTIC = {"equipment_cost_per_year": {"caustic_soda": None}}
LIME = {"treatment": {"reagents": ["hydrated_lime"], **NO_CAUSTIC}}
BOTH = {"treatment": {"reagents": ["caustic_soda", "hydrated_lime"]}}
SODA = {"treatment": {"reagents": ["soda_ash"], **NO_CAUSTIC}}


def ledgers(
    site: Site, paced: Mapping[str, float], controller: str = "", ph: float = 7.0
) -> dict[str, Ledger]:
    """Ledgers of one operating point by key."""
    evaluator = Evaluator(site)
    index = evaluator.plant.index
    doses = np.zeros((1, len(evaluator.plant.names)))
    for name, dose in paced.items():
        doses[0, index[name]] = dose
    point = Points(
        doses, np.array([index[controller] if controller else -1]), np.array([ph]),
        np.array([trim_for(evaluator, ph)]),
    )  # fmt: skip
    seen = evaluator.evaluate(point)
    return {ledger.key: ledger for ledger in dose_ledger(evaluator, seen, 0)}


def amount(ledger: Ledger, kind: str, use: str = "") -> float:
    """What goes to one use. [mg/L]"""
    return sum(p.amount_mg_per_l for p in ledger.parts if p.kind == kind and use in p.use)


@pytest.mark.parametrize(
    ("changes", "paced", "controller", "ph"),
    [
        ([], {}, "caustic_soda", 9.0),
        ([LIME], {}, "hydrated_lime", 9.0),
        ([BOTH], {"hydrated_lime": 150.0}, "caustic_soda", 9.2),
        ([SULFATE, LIME], {}, "hydrated_lime", 9.8),
        ([SULFIDE], {"sodium_hydrosulfide": 25.0}, "caustic_soda", 9.0),
        ([CARBONATE], {"soda_ash": 120.0}, "caustic_soda", 9.0),
        ([CARBONATE, SODA], {}, "soda_ash", 9.0),
        ([ALKALINE], {}, "hydrochloric_acid", 9.0),
        ([SILVER], {"sodium_chloride": 60.0}, "", 7.5),
    ],
)
def test_the_parts_of_every_dose_add_up_to_it(
    changes: list[dict[str, object]], paced: Mapping[str, float], controller: str, ph: float
) -> None:
    found = ledgers(small_site(*changes), paced, controller, ph)
    assert set(found) >= {*paced, *([controller] if controller else [])}
    for ledger in found.values():
        total = sum(part.amount_mg_per_l for part in ledger.parts)
        assert total == pytest.approx(ledger.dose_mg_per_l, rel=1e-6), ledger


def test_a_trim_is_accounted_for_too() -> None:
    found = ledgers(small_site(), {}, "caustic_soda", 9.9)
    trim = found["hydrochloric_acid@trim"]
    assert trim.counted_as == "H+"
    assert sum(p.amount_mg_per_l for p in trim.parts) == pytest.approx(trim.dose_mg_per_l, rel=1e-6)


def test_caustic_goes_to_free_acid_and_hydroxides_by_their_equivalents() -> None:
    # the feed's free acid is read off its pH, the hydroxides off the solids' formulas
    site = small_site()
    ledger = ledgers(site, {}, "caustic_soda", 9.0)["caustic_soda"]
    mass = site.reagents["caustic_soda"].molar_mass_g_per_mol
    feed = settled(site, {}, ph=None)
    water = settled(site, {"caustic_soda": ledger.dose_mg_per_l})
    h = [float(s.species_mol_per_l[0, s.system.species_names.index("H+")]) for s in (feed, water)]
    assert amount(ledger, FREE_ACID) == pytest.approx(1000.0 * mass * (h[0] - h[1]), rel=1e-5)
    hydroxide = sum(
        float(moles) * hydroxides_in(name) for name, moles in water.solids.iloc[0].items()
    )
    assert hydroxide > 2e-3
    assert amount(ledger, SOLID) == pytest.approx(1000.0 * mass * hydroxide, rel=1e-5)


def hydroxides_in(solid: object) -> int:
    """OH groups in a formula as it is written."""
    found = re.search(r"\(OH\)(\d*)", str(solid))
    return int(found[1] or 1) if found else 0


def test_two_alkalis_share_every_use_by_their_equivalents() -> None:
    found = ledgers(small_site(), {"hydrated_lime": 150.0}, "caustic_soda", 9.2)
    caustic, lime = found["caustic_soda"], found["hydrated_lime"]
    reagents = small_site().reagents
    eq = [
        amount(caustic, SOLID) / reagents["caustic_soda"].molar_mass_g_per_mol,
        2.0 * amount(lime, SOLID) / reagents["hydrated_lime"].molar_mass_g_per_mol,
    ]
    fed = [
        caustic.dose_mg_per_l / reagents["caustic_soda"].molar_mass_g_per_mol,
        2.0 * (150.0 / 1.15) / reagents["hydrated_lime"].molar_mass_g_per_mol,
    ]
    assert eq[0] / eq[1] == pytest.approx(fed[0] / fed[1], rel=1e-9)
    assert amount(lime, UNREACTED) == pytest.approx(150.0 * (1.0 - 1.0 / 1.15), rel=1e-9)


def test_sulfide_goes_to_its_solids_one_for_one_and_the_rest_stays_dissolved() -> None:
    site = small_site(SULFIDE)
    found = ledgers(site, {"sodium_hydrosulfide": 25.0}, "caustic_soda", 9.0)
    ledger = found["sodium_hydrosulfide"]
    moles = 25.0 / 1000.0 / site.reagents["sodium_hydrosulfide"].molar_mass_g_per_mol
    metals = sum(feed_totals(site)[site.system.index[c]] for c in ("Cu+2", "Cd+2"))
    assert amount(ledger, SOLID) == pytest.approx(25.0 * metals / moles, rel=0.01)
    assert amount(ledger, LEFT) == pytest.approx(25.0 * (1.0 - metals / moles), rel=0.02)


def test_bicarbonate_made_by_carbonate_is_no_second_dose_of_acid() -> None:
    found = ledgers(small_site(SILVER), {"sodium_chloride": 60.0})
    assert amount(found["sodium_chloride"], OTHER) == 0.0
    assert amount(found["sodium_chloride"], SOLID, "Ag as chloride") > 0.0
