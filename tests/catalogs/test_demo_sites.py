"""The demo sites: invented, loadable, electroneutral, and each shows what its comment promises."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import yaml
from numpy.typing import NDArray

import catalogs
from chemistry import equilibrate
from chemistry.feed import ANALYTES, FeedWater, feed_water
from optimiser import load_site, plan
from optimiser.site import Limit, Site

FloatArray = NDArray[np.float64]

HOME = Path(catalogs.__file__).parent / "sites"
REFERENCE = Path(__file__).parent.parent / "reference"
NAMES = (
    "plating_rinse",
    "silver_rinse",
    "barium_glaze",
    "lead_battery",
    "mercury_lab",
    "filter_choice",
    "brass_pickle",
)
MONEY = ("price", "cost", "tariff", "disposal", "recycling", "saving")


@cache
def demo(name: str) -> Site:
    return load_site(HOME / name / "site.yaml")


@cache
def feed(name: str) -> FeedWater:
    return feed_water(demo(name).analysis, demo(name).system)


def dissolved_mg_per_l(
    name: str, analyte: str, doses_mg_per_l: FloatArray, reagent: str, ph: float, alkali: str
) -> FloatArray:
    """Residual of one analyte at a pH held with an alkali (or acid), after doses of a reagent."""
    site, water = demo(name), feed(name)
    totals = water.totals_mol_per_l + doses_mg_per_l[:, None] * vector(site, reagent)
    state = equilibrate(site.system, totals, ph, titrant=vector(site, alkali))
    kind = ANALYTES[analyte]
    column = site.system.index[kind.component]
    return state.dissolved_mol_per_l[:, column] * 1000.0 * kind.molar_mass_g_per_mol


def vector(site: Site, reagent: str) -> FloatArray:
    """Moles of each component per mg of a reagent."""
    known = site.reagents[reagent]
    moles = np.array([known.components.get(c, 0.0) for c in site.system.components])
    return moles / (1000.0 * known.molar_mass_g_per_mol)


def money_in(node: object, *, is_money: bool = False) -> Iterator[float]:
    """Every number of a tree that stands under a key about money."""
    if isinstance(node, dict):
        for key, value in node.items():
            about = any(word in str(key).lower() for word in MONEY)
            yield from money_in(value, is_money=is_money or about)
    elif isinstance(node, list):
        for value in node:
            yield from money_in(value, is_money=is_money)
    elif is_money and isinstance(node, int | float):
        yield float(node)


def test_the_folder_holds_exactly_the_demos_listed_here() -> None:
    assert sorted(p.name for p in HOME.iterdir() if p.is_dir()) == sorted(NAMES)
    for name in NAMES:
        samples = ["samples.csv"] if demo(name).samples is not None else []
        held = sorted(p.name for p in (HOME / name).iterdir())
        assert held == ["offers.csv", *samples, "site.yaml"]


@pytest.mark.parametrize("name", NAMES)
class TestEveryDemo:
    def test_it_loads_under_its_own_name_and_currency(self, name: str) -> None:
        site = demo(name)
        assert site.name
        assert site.currency == "EUR"
        assert len({demo(other).name for other in NAMES}) == len(NAMES)

    def test_it_says_that_plant_and_prices_are_invented(self, name: str) -> None:
        opening = (HOME / name / "site.yaml").read_text().splitlines()[0]
        assert "invented" in opening
        assert "plant" in opening
        opening = (HOME / name / "offers.csv").read_text().splitlines()[0]
        assert "invented" in opening

    def test_its_price_book_offers_a_choice(self, name: str) -> None:
        offers = demo(name).offers
        assert len(offers) >= 8
        assert len({o.supplier for o in offers}) >= 3
        assert {o.price_per for o in offers} == {"t", "L"}
        assert len({o.form for o in offers}) >= 3
        strengths: dict[str, set[float]] = {}
        for offer in offers:
            strengths.setdefault(offer.reagent, set()).add(offer.strength_fraction)
        assert any(len(kinds) >= 2 for kinds in strengths.values())
        assert all(o.freight_per_t > 0.0 and o.least_order_t > 0.0 for o in offers)

    def test_every_allowed_reagent_can_be_bought(self, name: str) -> None:
        site = demo(name)
        allowed = {*site.treatment.reagents, *site.treatment.trim_reagents}
        assert allowed == {o.reagent for o in site.offers}

    def test_its_money_is_not_that_of_a_published_case(self, name: str) -> None:
        published = {
            value
            for path in sorted(REFERENCE.glob("*.yaml"))
            for value in money_in(yaml.safe_load(path.read_text()))
        }
        assert {550.0, 400.0} <= published
        site = demo(name)
        own = {o.price for o in site.offers}
        own |= {r.tariff_per_wet_t for r in site.disposal.rules}
        assert not own & published

    def test_its_analysis_is_nearly_electroneutral(self, name: str) -> None:
        assert abs(feed(name).charge_balance_error_percent) < 5.0

    def test_no_closing_ion_has_a_limit(self, name: str) -> None:
        limited = {p for limit in demo(name).limits for p in (limit.of or (limit.parameter,))}
        assert demo(name).analysis.close_charge_with not in limited

    def test_the_feed_breaks_a_metal_limit(self, name: str) -> None:
        daily = {x.parameter: x.daily_mg_per_l for x in demo(name).limits if x.daily_mg_per_l}
        found = feed(name).dissolved_mg_per_l
        assert any(found.get(metal, 0.0) > value for metal, value in daily.items())


def test_the_samples_say_that_they_are_invented() -> None:
    sampled = [name for name in NAMES if demo(name).samples is not None]
    assert sampled == ["brass_pickle"]
    assert "Invented" in (HOME / "brass_pickle" / "samples.csv").read_text().splitlines()[0]


class TestStories:
    def test_plating_hydroxide_leaves_lead_and_cadmium_and_a_little_sulfide_takes_them(
        self,
    ) -> None:
        doses = np.array([0.0, 40.0])
        for metal, before in (("Pb", 3.2), ("Cd", 2.6)):
            left = dissolved_mg_per_l(
                "plating_rinse", metal, doses, "sodium_hydrosulfide", 9.5, "caustic_soda"
            )
            assert left[0] > 0.9 * before
            assert left[1] < 0.01

    def test_silver_falls_to_a_best_chloride_dose_and_comes_back(self) -> None:
        doses = np.array([15.0, 30.0, 60.0, 150.0, 300.0, 800.0, 2000.0])
        left = dissolved_mg_per_l(
            "silver_rinse", "Ag", doses, "sodium_chloride", 8.0, "caustic_soda"
        )
        best = int(np.argmin(left))
        assert 60.0 < doses[best] < 800.0
        assert left[0] > 3.0 * left[best]
        assert left[-1] > 2.0 * left[best]
        assert np.all(np.diff(left[: best + 1]) < 0.0)
        assert np.all(np.diff(left[best:]) > 0.0)

    def test_barium_meets_its_limit_with_sulfuric_acid_alone_but_sulfate_does_not(self) -> None:
        none = np.zeros(1)
        arguments = (none, "sodium_sulfate", 9.4, "sulfuric_acid")
        limits = {x.parameter: x.daily_mg_per_l for x in demo("barium_glaze").limits}
        assert dissolved_mg_per_l("barium_glaze", "Ba", *arguments)[0] < 0.1
        sulfate, ceiling = dissolved_mg_per_l("barium_glaze", "SO4", *arguments)[0], limits["SO4"]
        assert ceiling is not None
        assert sulfate > ceiling
        other = dissolved_mg_per_l(
            "barium_glaze", "Ba", none, "sodium_sulfate", 9.4, "hydrochloric_acid"
        )
        assert other[0] > 50.0

    def test_lead_keeps_a_dissolved_sulfate_pair_that_carbonate_breaks(self) -> None:
        doses = np.array([0.0, 160.0])
        left = dissolved_mg_per_l("lead_battery", "Pb", doses, "soda_ash", 9.0, "caustic_soda")
        assert left[0] > 1.5
        assert left[1] < 0.15

    def test_lime_takes_sulfate_down_and_caustic_leaves_it(self) -> None:
        doses = np.array([0.0, 2300.0])
        left = dissolved_mg_per_l(
            "lead_battery", "SO4", doses, "hydrated_lime", 9.0, "caustic_soda"
        )
        assert left[0] > 3900.0
        assert left[1] < 2600.0

    @pytest.mark.parametrize("ph", [8.75, 9.5, 10.0])
    def test_mercury_leaves_with_sulfide_only(self, ph: float) -> None:
        none, carbonate = np.zeros(1), np.array([400.0])
        sulfide = np.array([8.0])
        for doses, reagent in ((none, "soda_ash"), (carbonate, "soda_ash")):
            left = dissolved_mg_per_l("mercury_lab", "Hg", doses, reagent, ph, "caustic_soda")
            assert left[0] == pytest.approx(1.4, rel=1e-6)
        left = dissolved_mg_per_l(
            "mercury_lab", "Hg", sulfide, "sodium_hydrosulfide", ph, "caustic_soda"
        )
        assert left[0] < 0.001

    def test_excess_sulfide_dissolves_mercury_again(self) -> None:
        doses = np.array([12.0, 60.0, 200.0])
        left = dissolved_mg_per_l(
            "mercury_lab", "Hg", doses, "sodium_hydrosulfide", 10.0, "caustic_soda"
        )
        assert left[2] > left[1] > left[0]
        assert left[2] > 0.02


# What each demo's cheapest plan uses, and the limit it sits on.
BINDING = {
    "plating_rinse": (("caustic_soda", "sodium_hydrosulfide"), "Ni"),
    "silver_rinse": (("caustic_soda", "sodium_chloride"), "Ag"),
    "barium_glaze": (("sulfuric_acid", "hydrochloric_acid"), "SO4"),
    "lead_battery": (("caustic_soda", "quicklime", "soda_ash"), "SO4"),
    "mercury_lab": (("caustic_soda", "ferrous_sulfide"), "Zn"),
    "filter_choice": (("caustic_soda",), "Ni"),
    "brass_pickle": (("caustic_soda",), "Zn"),
}


def narrowed(site: Site, reagents: tuple[str, ...]) -> Site:
    """The site with these reagents only, so that planning takes a second."""
    least = site.treatment.least_doses_mg_per_l
    kept = {name: dose for name, dose in least.items() if name in reagents}
    treatment = replace(site.treatment, reagents=reagents, least_doses_mg_per_l=kept)
    return replace(site, treatment=treatment)


def loosened(site: Site, parameter: str, factor: float) -> Site:
    def one(limit: Limit) -> Limit:
        if limit.parameter != parameter:
            return limit
        daily, monthly = limit.daily_mg_per_l, limit.monthly_mg_per_l
        return replace(
            limit,
            daily_mg_per_l=None if daily is None else factor * daily,
            monthly_mg_per_l=None if monthly is None else factor * monthly,
        )

    return replace(site, limits=tuple(one(limit) for limit in site.limits))


@pytest.mark.parametrize("name", NAMES)
def test_a_limit_truly_binds(name: str) -> None:
    reagents, parameter = BINDING[name]
    site = narrowed(demo(name), reagents)
    tight, loose = plan(site), plan(loosened(site, parameter, 1.25))
    assert tight.compliant
    fullest = max(
        row["predicted"] / row["target"]
        for row in tight.to_dict()["limits"]
        if row["parameter"] == parameter
    )
    assert fullest == pytest.approx(1.0, abs=2e-3)
    assert loose.cost["total"] < 0.999 * tight.cost["total"]
