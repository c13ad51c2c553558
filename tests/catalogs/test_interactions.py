"""The table of interaction coefficients: rows, sources, and what it leaves to the rule."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest

from catalogs.constants import COMPONENTS, load_system, species_table
from catalogs.interactions import (
    interaction_parameters,
    interaction_table,
    interactions,
    missing_pairs,
)
from chemistry.activity import SIT_BA, WATER_MOL_PER_KG, debye_hueckel_a, interaction_by_rule
from chemistry.formula import charge_of

ROWS = list(interaction_table().values())


def test_no_row_and_no_digit_was_lost() -> None:
    assert len(ROWS) == 119
    assert sum(row.coefficient_kg_per_mol for row in ROWS) == pytest.approx(5.2, abs=1e-9)
    published = [row for row in ROWS if row.status == "published"]
    assert len(published) == 45
    assert sum(row.coefficient_kg_per_mol for row in published) == pytest.approx(0.445, abs=1e-9)


def test_every_row_has_a_source_and_says_whether_it_is_published() -> None:
    for row in ROWS:
        assert row.source.strip(), row
        assert row.status in ("published", "estimated")
        allowed = {"confirmed", "from memory"}
        assert row.confidence in (allowed if row.status == "published" else {*allowed, "estimated"})


def test_every_pair_is_of_species_that_go_with_the_table() -> None:
    known = {*COMPONENTS, *species_table("sit")}
    assert {name for row in ROWS for name in (row.one, row.other)} <= known


def test_no_pair_stands_twice_and_none_is_of_equal_charges() -> None:
    assert len({frozenset(pair) for pair in interaction_table()}) == len(ROWS)
    for row in ROWS:
        assert charge_of(row.one) * charge_of(row.other) <= 0
        assert charge_of(row.one) or charge_of(row.other)


def test_no_row_repeats_what_the_rule_says_anyway() -> None:
    repeated = [
        (row.one, row.other)
        for row in ROWS
        if row.status == "estimated"
        and not any(word in row.source for word in ("set to zero", "stand-in"))
        and row.coefficient_kg_per_mol == pytest.approx(
            interaction_by_rule(row.one, row.other, charge_of(row.one), charge_of(row.other))
        )
    ]  # fmt: skip
    assert repeated == []


def test_the_parameters_of_the_table_are_those_of_the_equation() -> None:
    values = interaction_parameters()
    assert float(values["debye_hueckel_a_25_degc"].value) == debye_hueckel_a(25.0)
    assert float(values["ion_size_term"].value) == SIT_BA
    assert float(values["water_mol_per_kg"].value) == WATER_MOL_PER_KG
    assert all(row.source.strip() for row in values.values())


@pytest.mark.parametrize(
    ("line", "cation", "anion"),
    [
        ("cation_with_anion_of_charge_1", "Zn+2", "Xx-"),
        ("alkali_or_ammonium_with_anion", "K+", "Xx-3"),
        ("other_pairs", "Zn+2", "Xx-2"),
    ],
)
def test_the_lines_of_the_rule_are_what_the_model_does(line: str, cation: str, anion: str) -> None:
    z = charge_of(cation) if line.startswith("cation") else -charge_of(anion)
    written = {"-0.05 + 0.1 z": -0.05 + 0.1 * z, "-0.05 z": -0.05 * z, "0": 0.0}
    expected = written[interaction_parameters()[line].value]
    found = interaction_by_rule(cation, anion, charge_of(cation), charge_of(anion))
    assert found == pytest.approx(expected)


def test_the_matrix_of_coefficients_is_the_table_and_the_rule_pair_by_pair() -> None:
    system = load_system(components=["Na+", "Ca+2", "Cu+2", "Cl-", "SO4-2", "CO3-2", "NH4+"])
    names, charges = system.species_names, system.charges
    matrix = interactions().matrix(names, charges)
    np.testing.assert_array_equal(matrix, matrix.T)
    for i, k in combinations(range(len(names)), 2):
        one_by_one = interactions().of(names[i], names[k], charges[i], charges[k])
        assert matrix[i, k] == pytest.approx(one_by_one, abs=1e-15), (names[i], names[k])


def test_the_alkali_ion_pairs_that_the_coefficients_contain_are_left_out() -> None:
    species = load_system(activity="sit").species_names
    assert not {"NaCO3-", "NaHCO3(aq)", "NaPO4-2", "NaHPO4-"} & set(species)
    assert {"NaSO4-", "KSO4-", "NH4SO4-"} <= set(species)


def test_pairs_that_follow_the_rule_are_listed_with_what_it_gives() -> None:
    system = load_system(components=["Na+", "Cu+2", "Cl-", "SO4-2", "CO3-2"], activity="sit")
    found = {(p.one, p.other): p.coefficient_kg_per_mol for p in missing_pairs(system)}
    assert found == pytest.approx(
        {("H+", "CO3-2"): 0.0, ("Cu+2", "CO3-2"): 0.0, ("Cu+2", "OH-"): 0.15}
    )
    assert {p.status for p in missing_pairs(system)} == {"rule"}
    assert all(p.source for p in missing_pairs(system))


def test_the_ions_that_matter_may_be_named() -> None:
    system = load_system(components=["Na+", "Cu+2", "Cl-"], activity="sit")
    found = missing_pairs(system, ["Cl-", "CuOH+", "Na+", "no ion of the system"])
    assert [(p.one, p.other) for p in found] == [("CuOH+", "Cl-")]


def test_a_system_without_coefficients_misses_none() -> None:
    assert missing_pairs(load_system(components=["Cu+2", "Cl-"])) == ()
