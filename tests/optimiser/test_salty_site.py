"""A salty site gets specific ion interaction, a dilute one Davies, and both say so."""

from __future__ import annotations

import pytest

from catalogs.problems import InputFileError
from chemistry.feed import feed_water
from optimiser import assess, plan
from optimiser.errors import FeedRefused
from optimiser.evaluation import Evaluator
from optimiser.largest_dose import USUAL_MOL_PER_L, largest_dose_mol_per_l
from optimiser.recipes import Recipe, ladder, set_point_bounds
from optimiser.site_salt import pairs_by_rule, saltiest_mol_per_l
from tests.optimiser.small_sites import CARBONATE, Tree, own, small_site

LOOSE = own({"parameter": "Cu", "daily_mg_per_l": 5.0}, {"parameter": "Zn", "daily_mg_per_l": 8.0})
BRINE: Tree = {"feed": {"analysis": {"Na": "26 g/L"}}}
STRONG_BRINE: Tree = {"feed": {"analysis": {"Na": "80 g/L"}}}
CAUSTIC = {"caustic_soda": 230.0}


def notes_on_activity(notes: tuple[str, ...] | list[str]) -> list[str]:
    return [note for note in notes if note.startswith("activity coefficients by")]


def test_a_dilute_site_keeps_davies_and_says_nothing() -> None:
    site = small_site(LOOSE)
    assert site.system.activity_model.name == "davies"
    assert notes_on_activity(site.notes) == []


def test_a_salty_site_gets_specific_interaction_and_says_why() -> None:
    site = small_site(LOOSE, BRINE)
    assert site.system.activity_model.name == "sit"
    assert "NaCO3-" not in site.system.species_names
    (note,) = notes_on_activity(site.notes)
    assert note.startswith(
        "activity coefficients by specific ion interaction, since the water may reach an ionic "
        "strength of 1."
    )


def test_the_plan_of_a_brine_names_its_model_and_lists_it_among_the_assumptions() -> None:
    found = plan(small_site(LOOSE, BRINE))
    assert found.compliant
    assert found.data["site"]["activity_model"] == "sit"
    assert len(notes_on_activity(found.data["assumptions"])) == 1
    assert not any("ionic strength reaches" in text for text in found.cautions)


def test_a_brine_above_the_reach_of_any_model_is_refused_unless_told() -> None:
    with pytest.raises(FeedRefused, match="specific ion interaction, is trusted to about 3 and"):
        plan(small_site(LOOSE, STRONG_BRINE))
    allowed: Tree = {"treatment": {"salty_water_allowed": True}}
    result = assess(small_site(LOOSE, STRONG_BRINE, allowed), CAUSTIC)
    assert any("specific ion interaction holds to about 3" in text for text in result.cautions)


@pytest.mark.parametrize("model", ["davies", "sit"])
def test_a_site_may_name_its_model(model: str) -> None:
    for water in ({}, BRINE):
        assert small_site(LOOSE, water, {"activity": model}).system.activity_model.name == model
    said = notes_on_activity(small_site(LOOSE, {"activity": model}).notes)
    assert [("as the site asks" in note) for note in said] == ([True] if model == "sit" else [])


def test_another_model_is_refused_with_those_that_there_are() -> None:
    with pytest.raises(InputFileError) as caught:
        small_site(LOOSE, {"activity": "sits"})
    said = str(caught.value)
    assert "expected one of the activity models" in said
    assert "Did you mean `sit`?" in said


def test_what_is_dosed_counts_as_salt() -> None:
    """Lead and zinc with soda ash: 0.02 mol/L of it is 0.06 mol/L of ionic strength and more."""
    site = small_site(CARBONATE)
    feed = feed_water(site.analysis, site.system)
    saltiest = saltiest_mol_per_l(feed, site.treatment, site.reagents)
    assert feed.ionic_strength + 0.04 < saltiest < feed.ionic_strength + 0.1
    small: Tree = {"treatment": {"dose_ceilings_mg_per_l": {"soda_ash": 50.0}}}
    capped = small_site(CARBONATE, small)
    less = saltiest_mol_per_l(feed, capped.treatment, capped.reagents)
    assert less < saltiest - 0.03


@pytest.mark.parametrize("calcium", ["2 mg/L", "2 g/L"])
def test_the_largest_dose_is_the_largest_that_recipes_try(calcium: str) -> None:
    """2 g/L of calcium are 0.05 mol/L, and bind as much carbonate."""
    site = small_site(CARBONATE, {"feed": {"analysis": {"Ca": calcium}}})
    evaluator = Evaluator(site)
    plant, soda = evaluator.plant, evaluator.plant.index["soda_ash"]
    known = plant.reagents[soda]
    most = largest_dose_mol_per_l(plant.system, plant.totals, known.components)
    assert (most > 0.05) is (calcium == "2 g/L")
    assert most >= USUAL_MOL_PER_L
    per_mole = 1000.0 * known.molar_mass_g_per_mol * float(plant.factors[soda])
    for short in (False, True):
        tried = ladder(
            evaluator, Recipe(None, (soda,)), soda, 1e-3, set_point_bounds(evaluator), short=short
        )
        assert max(tried) / per_mole >= (most if most > USUAL_MOL_PER_L or not short else 0.015)
        assert max(tried[1:] / tried[:-1]) < 11.0


def test_a_feed_close_to_the_boundary_is_tipped_over_by_its_doses() -> None:
    close: Tree = {"feed": {"analysis": {"Na": "6.3 g/L"}}}
    dosed = small_site(CARBONATE, close)
    feed = feed_water(dosed.analysis, dosed.system)
    assert feed.ionic_strength < 0.3
    assert dosed.system.activity_model.name == "sit"
    assert small_site(LOOSE, close).system.activity_model.name == "davies"


def test_pairs_without_a_coefficient_are_those_of_the_major_ions_alone() -> None:
    site = small_site(LOOSE, BRINE, {"feed": {"analysis": {"Ca": "200 mg/L", "HCO3": "500 mg/L"}}})
    pairs = {(p.one, p.other) for p in pairs_by_rule(feed_water(site.analysis, site.system))}
    assert all({"Na+", "Cl-"} != {one, other} for one, other in pairs)
    listed = notes_on_activity(site.notes)[0]
    assert all(f"{one} with {other}" in listed for one, other in pairs)
