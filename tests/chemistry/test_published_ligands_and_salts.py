"""What the published chlorides and sulfates teach, beyond their numbers."""

from __future__ import annotations

import numpy as np

from catalogs import load_system
from tests.reference.cases import load_cases, readings_of
from tests.reference.ligands_and_salts import (
    gypsum_in_salt,
    lead_over_chloride,
    shipped_silver,
    silver_over_chloride,
)
from tests.reference.waters import dissolved_along, mg_per_l

SEWER_SULFATE_MG_PER_L = 1000.0


def test_chloride_has_a_best_dose_for_silver() -> None:
    excess = np.geomspace(1e-4, 0.3, 60)
    silver = dissolved_along(silver_over_chloride(shipped_silver(), excess), "Ag+")
    best = int(np.argmin(silver))
    assert 0.002 < excess[best] < 0.004
    assert (np.diff(silver[: best + 1]) < 0.0).all()
    assert (np.diff(silver[best:]) > 0.0).all()


def test_silver_in_brine_is_not_the_answer_without_complexes() -> None:
    readings = readings_of("D04")
    assert readings["shipped"].measured > 1000.0 * readings["naive"].measured
    assert readings["with_complexes"].measured > 2000.0 * readings["naive"].measured


def test_lead_is_not_removed_by_chloride() -> None:
    chloride = np.linspace(0.0, 4.0, 41)
    lead = dissolved_along(lead_over_chloride(chloride), "Pb+2")
    assert mg_per_l(float(lead.min()), "Pb") > 500.0
    assert 0 < int(np.argmin(lead)) < chloride.size - 1


def test_lead_in_brine_is_hundreds_of_times_the_bare_product() -> None:
    naive = readings_of("D07")["naive"].measured
    assert readings_of("D06")["lead_at_minimum"].measured > 300.0 * naive


def test_the_chloro_complexes_of_lead_and_silver_are_shipped() -> None:
    species = set(load_system().species_names)
    assert {"PbCl+", "PbCl2(aq)", "PbCl3-", "PbCl4-2"} <= species
    assert {"AgCl(aq)", "AgCl2-", "AgCl3-2"} <= species


def test_lead_chloride_in_water_is_more_than_twice_the_bare_product() -> None:
    readings = readings_of("D09")
    assert readings["shipped"].measured > 2.0 * readings["naive"].measured


def test_activity_lifts_barium_in_seawater_tens_of_times() -> None:
    readings = readings_of("D11")
    assert readings["shipped"].measured > 20.0 * readings["naive"].measured


def test_lime_alone_leaves_more_sulfate_than_a_common_sewer_limit() -> None:
    assert readings_of("D17")["shipped"].measured > SEWER_SULFATE_MG_PER_L


def test_a_salty_water_holds_more_gypsum() -> None:
    salt = np.array([0.0, 0.1, 0.25, 0.5])
    gypsum = dissolved_along(gypsum_in_salt(salt), "SO4-2")
    assert (np.diff(gypsum) > 0.0).all()


def test_ten_times_the_sulfuric_acid_hardly_lowers_lead() -> None:
    acid = {name: r.measured for name, r in readings_of("D13").items()}
    limits = load_cases()["D13"].values["0.1"].limits()
    assert limits[0] < acid["0.1"] < limits[1]
    assert acid["1.0"] > 0.5 * acid["0.1"]
