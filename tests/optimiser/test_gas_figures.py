"""Gas in plans: what leaves the water, the highest pressures, and thresholds beside them."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from catalogs.practice_data import gas_thresholds
from chemistry import equilibrate
from optimiser import assess
from optimiser.outcome import Outcome
from optimiser.render_gas import gas_lines
from optimiser.tables import number
from tests.optimiser.small_sites import (
    CARBONATE,
    FLOW_M3_PER_D,
    SULFIDE,
    dosed,
    lost_co2_mol_per_l,
    small_site,
)

SODA = {"soda_ash": 420.0, "caustic_soda": 100.0}
CO2_G_PER_MOL = 44.009


@pytest.fixture(scope="module")
def soda() -> Outcome:
    return assess(small_site(CARBONATE), SODA)


def test_carbon_dioxide_that_leaves_is_what_the_open_water_gives_off(soda: Outcome) -> None:
    """The same loss by hand: the feed with its carbonate at rest with air, times the flow."""
    lost = lost_co2_mol_per_l(small_site(CARBONATE), SODA)
    evolved = soda.data["gas"]["co2"]["evolved_kg_per_d"]
    assert evolved == pytest.approx(lost * CO2_G_PER_MOL * FLOW_M3_PER_D, rel=1e-6)
    brought = SODA["soda_ash"] / 105.988 / 1000.0
    assert 0.25 * brought < lost < brought


def test_without_carbonate_nothing_leaves() -> None:
    found = assess(small_site(), {"caustic_soda": 190.0}).data["gas"]
    assert found["co2"]["evolved_kg_per_d"] == 0.0
    assert found["co2"]["highest_ppm"] == 0.0
    assert "h2s" not in found
    assert gas_lines({"gas": found}) == []


def test_the_pressure_is_that_of_the_dosed_water_at_its_highest(soda: Outcome) -> None:
    site, found = small_site(CARBONATE), soda.data["gas"]["co2"]
    ppm = [
        1e6 * equilibrate(site.system, dosed(site, SODA | {"soda_ash": factor * SODA["soda_ash"]}))
        .partial_pressure_atm("CO2(aq)")[0]
        for factor in (0.95, 1.0, 1.05)
    ]  # fmt: skip
    assert found["highest_ppm"] >= ppm[1] * (1.0 - 1e-6)
    assert found["highest_pressure_atm"] == pytest.approx(1e-6 * found["highest_ppm"])
    assert found["highest_in"] in ("tank", "after trim")
    assert found["highest_at"].endswith("gas kept, scale formed")


def test_a_plan_with_sulfide_shows_its_gas_beside_the_thresholds() -> None:
    site = small_site(SULFIDE)
    outcome = assess(site, {"caustic_soda": 160.0, "sodium_hydrosulfide": 25.0})
    found = outcome.data["gas"]["h2s"]
    assert found["site_limit_ppm"] == site.treatment.h2s_limit_ppm
    assert [t["limit_ppm"] for t in found["thresholds"]] == sorted(
        t.limit_ppm for t in gas_thresholds() if t.gas == "H2S"
    )
    assert all(t["source"] for t in found["thresholds"])
    row = next(row for row in outcome.data["water"] if row["point"] == "tank")
    assert found["highest_ppm"] >= row["h2s_ppm"] > 0.0


def text_of(data: dict[str, Any]) -> str:
    lines = gas_lines(data)
    assert max(len(line) for line in lines) <= 100
    return " ".join(" ".join(lines).split())


def test_the_text_tells_pressure_loss_and_named_thresholds(soda: Outcome) -> None:
    text = text_of(soda.data)
    evolved = soda.data["gas"]["co2"]["evolved_kg_per_d"]
    assert f"{number(evolved)} kg/d leave the water where it may vent." in text
    assert "5,000 ppm shift average over 8 hours (OSHA 29 CFR 1910.1000 table Z-1" in text


def test_the_text_tells_sulfide_where_it_shows() -> None:
    outcome = assess(small_site(SULFIDE), {"caustic_soda": 95.0, "sodium_hydrosulfide": 60.0})
    assert outcome.data["gas"]["h2s"]["highest_ppm"] > 0.1
    text = text_of(outcome.data)
    assert "Site limit: 10 ppm." in text
    for name in ("NIOSH", "OSHA", "ACGIH"):
        assert name in text


def test_warm_water_gives_off_more() -> None:
    cold, warm = (
        assess(small_site(CARBONATE, {"feed": {"temperature_degc": t}}), SODA).data["gas"]["co2"]
        for t in (8.0, 35.0)
    )
    assert warm["evolved_kg_per_d"] > cold["evolved_kg_per_d"] > 0.0
    assert np.isfinite(warm["highest_ppm"])
