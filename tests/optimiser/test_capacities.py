"""Feed rates against pumps, feeders, tanks and silos."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from optimiser import assess, load_site
from optimiser.capacities import capacities
from optimiser.render import assessment_text
from optimiser.site import Dosing, FeedRange

SILVER = Path(__file__).parents[2] / "catalogs" / "sites" / "silver_rinse" / "site.yaml"


@pytest.fixture(scope="module")
def site():
    return load_site(SILVER)


def _feed(site, dose, low, high):
    offer = next(o for o in site.offers if o.reagent == "caustic_soda")
    return offer, {
        "key": "caustic_soda", "reagent": "caustic_soda", "offer": offer.offer,
        "dose_mg_per_l": dose, "alarm_low_mg_per_l": low, "alarm_high_mg_per_l": high,
    }  # fmt: skip


def test_rates_follow_from_dose_flow_and_strength(site):
    peaked = replace(site, peak_flow_m3_per_d=2.0 * site.flow_m3_per_d)
    offer, feed = _feed(site, 100.0, 80.0, 130.0)
    (row,) = capacities(peaked, [feed])
    # g/m3 x m3/d / 1000 = kg/d pure; over strength and 24 h the product
    average = 100.0 * site.flow_m3_per_d / 1000.0 / offer.strength_fraction / 24.0
    assert row["average_kg_per_h"] == pytest.approx(average)
    assert row["average_l_per_h"] == pytest.approx(average / offer.density_kg_per_l)
    assert row["least_kg_per_h"] == pytest.approx(0.8 * average)
    assert row["peak_kg_per_h"] == pytest.approx(2.0 * 1.3 * average)
    assert row["days_of_stock"] is None
    assert row["problems"] == []


def test_a_pump_must_hold_the_least_and_the_peak(site):
    _, feed = _feed(site, 100.0, 80.0, 130.0)
    (free,) = capacities(site, [feed])
    least, peak = free["least_l_per_h"], free["peak_l_per_h"]
    for low, high, problems in (
        (0.99 * least, 1.01 * peak, 0), (1.01 * least, 1.01 * peak, 1),
        (0.99 * least, 0.99 * peak, 1), (1.01 * least, 0.99 * peak, 2),
    ):  # fmt: skip
        fitted = replace(
            site, dosing={"caustic_soda": Dosing(pump_l_per_h=FeedRange(low=low, high=high))}
        )
        (row,) = capacities(fitted, [feed])
        assert len(row["problems"]) == problems


def test_days_of_stock_and_an_order_too_big_for_the_tank(site):
    offer, feed = _feed(site, 100.0, 80.0, 130.0)
    tank = replace(site, dosing={"caustic_soda": Dosing(store_m3=1.0)})
    (row,) = capacities(tank, [feed])
    held = 1000.0 * offer.density_kg_per_l
    assert row["days_of_stock"] == pytest.approx(held / (24.0 * row["average_kg_per_h"]))
    bigger = replace(offer, least_order_t=2.0 * held / 1000.0)
    others = tuple(o for o in site.offers if o.offer != offer.offer)
    (row,) = capacities(replace(tank, offers=(*others, bigger)), [feed])
    assert "least order" in row["problems"][0]


def test_caustic_of_50_percent_in_a_cold_store_is_named(site):
    """50 % caustic freezes near 14 C, 32 % near 2 C (product rows of the catalog)."""
    offer, feed = _feed(site, 100.0, 80.0, 130.0)
    strong = replace(offer, strength_fraction=0.5, form="solution")
    others = tuple(o for o in site.offers if o.offer != offer.offer)
    cold = replace(site, offers=(*others, strong), dosing={"caustic_soda": Dosing(lowest_degc=8.0)})
    (row,) = capacities(cold, [feed])
    assert "crystallises below 14" in row["problems"][0]
    warm = replace(cold, dosing={"caustic_soda": Dosing(lowest_degc=15.0)})
    assert capacities(warm, [feed])[0]["problems"] == []


def test_an_assessment_prints_what_does_not_fit(site):
    small = {"caustic_soda": Dosing(pump_l_per_h=FeedRange(low=0.001, high=0.002), store_m3=1.0)}
    found = assess(replace(site, dosing=small), {"caustic_soda": 10.0, "sodium_chloride": 60.0})
    text = assessment_text(found.to_dict())
    assert "the pump gives at most 0.002 L/h" in " ".join(text.split())
