"""Formulas and reactions: charge, atoms, molar mass, balance."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from catalogs.constants import solid_table, species_table
from chemistry import FormulaError
from chemistry.formula import (
    ATOMIC_WEIGHTS_G_PER_MOL,
    charge_of,
    check_balance,
    elements_of,
    molar_mass_g_per_mol,
    read_reaction,
    strip_phase,
)

CHARGES = {
    "H+": 1, "Na+": 1, "Cu+2": 2, "Fe+3": 3, "Cl-": -1, "SO4-2": -2, "PO4-3": -3, "OH-": -1,
    "NH4+": 1, "CH3COO-": -1, "(EDTA)-4": -4, "Cu(EDTA)-2": -2, "Fe(OH)2+": 1, "Cu2(OH)2+2": 2,
    "Al(OH)4-": -1, "CO2(aq)": 0, "AgCl(s)": 0, "Zn(OH)2(s,am)": 0, "CO2(g)": 0, "H2O": 0,
}  # fmt: skip

# Handbook molar masses, g/mol (CRC Handbook of Chemistry and Physics, from memory).
MOLAR_MASSES = {
    "NaOH": 39.997, "Ca(OH)2": 74.093, "CaO": 56.077, "Na2CO3": 105.988, "NaHCO3": 84.007,
    "H2SO4": 98.079, "HCl": 36.461, "FeCl3": 162.204, "Fe2(SO4)3": 399.878, "BaCl2": 208.233,
    "CaSO4.2H2O": 172.171, "Na2S": 78.045, "FeS": 87.910, "Mg(OH)2": 58.320, "AgCl": 143.321,
    "Pb3(CO3)2(OH)2": 775.633, "Al2(SO4)3.18H2O": 666.426, "MgNH4PO4.6H2O": 245.406,
}  # fmt: skip


@pytest.mark.parametrize(("formula", "charge"), CHARGES.items())
def test_a_charge_stands_at_the_end_with_its_sign_first(formula: str, charge: int) -> None:
    assert charge_of(formula) == charge


@pytest.mark.parametrize(("formula", "mass"), MOLAR_MASSES.items())
def test_molar_masses_are_those_of_the_handbook(formula: str, mass: float) -> None:
    assert molar_mass_g_per_mol(formula) == pytest.approx(mass, rel=1e-4)


def test_brackets_and_water_of_crystallisation_count_every_atom() -> None:
    assert elements_of("Al2(SO4)3.18H2O") == {"Al": 2, "S": 3, "O": 30, "H": 36}
    assert elements_of("Cu4(OH)6SO4(s)") == {"Cu": 4, "O": 10, "H": 6, "S": 1}
    assert elements_of("Pb(EDTA)-2") == {"Pb": 1, "C": 10, "H": 12, "N": 2, "O": 8}


def test_phases_are_no_part_of_a_formula() -> None:
    assert strip_phase("Zn(OH)2(s,am)") == "Zn(OH)2"
    assert strip_phase("Fe(OH)3") == "Fe(OH)3"
    assert elements_of("CaCO3(s,calcite)") == elements_of("CaCO3")


BAD_FORMULAS = {
    "": "holds no atoms",
    "NaCl.": "holds no atoms",
    "CaSO4.0.5H2O": "holds no atoms",
    "Na0": "holds no atoms",
    "Xx2": "unknown element 'Xx'",
    "nacl": "cannot read 'nacl'",
    "Na+Cl-": "cannot read",
    "SO4--": "cannot read",
    "Ca(OH2": "bracket opened but never closed",
    "CaOH)2": "bracket closed but never opened",
}


@pytest.mark.parametrize(("formula", "message"), BAD_FORMULAS.items())
def test_a_formula_that_cannot_be_read_is_an_error(formula: str, message: str) -> None:
    with pytest.raises(FormulaError, match=message):
        elements_of(formula)


atoms = st.dictionaries(
    st.sampled_from(sorted(ATOMIC_WEIGHTS_G_PER_MOL)), st.integers(1, 40), min_size=1, max_size=5
)


@settings(max_examples=60, deadline=None, derandomize=True, database=None)
@given(atoms, st.integers(1, 12), atoms, st.integers(-4, 4))
def test_a_formula_written_from_counts_reads_back_as_the_counts(
    bare: dict[str, int], times: int, bracketed: dict[str, int], charge: int
) -> None:
    sign = f"{'+' if charge > 0 else '-'}{abs(charge) if abs(charge) > 1 else ''}" if charge else ""
    inner = "".join(f"{e}{n if n > 1 else ''}" for e, n in bracketed.items())
    text = "".join(f"{e}{n}" for e, n in bare.items()) + f"({inner}){times}{sign}"
    expected = {e: float(n) for e, n in bare.items()}
    for element, count in bracketed.items():
        expected[element] = expected.get(element, 0.0) + times * count
    assert elements_of(text) == expected
    assert charge_of(text) == charge
    mass = sum(ATOMIC_WEIGHTS_G_PER_MOL[e] * n for e, n in expected.items())
    assert molar_mass_g_per_mol(text) == pytest.approx(mass, rel=1e-12)


def test_a_reaction_is_read_as_signed_coefficients() -> None:
    read = read_reaction("5 Zn+2 + 2 CO3-2 + 6 H2O = Zn5(OH)6(CO3)2(s) + 6 H+")
    assert read == {"Zn+2": -5, "CO3-2": -2, "H2O": -6, "Zn5(OH)6(CO3)2(s)": 1, "H+": 6}
    assert read_reaction("A + A = 0.5 B") == {"A": -2.0, "B": 0.5}
    assert read_reaction("A + H2O = B + H2O") == {"A": -1.0, "B": 1.0}


@pytest.mark.parametrize("text", ["A = B = C", "A=B", "A + B", "x A = B", " = B", "-1 A = B"])
def test_a_reaction_that_cannot_be_read_is_an_error(text: str) -> None:
    with pytest.raises(FormulaError):
        read_reaction(text)


def test_what_does_not_balance_is_named() -> None:
    assert check_balance("Cu+2 + 2 H2O = Cu(OH)2(aq) + 2 H+") == []
    assert check_balance("Cu+2 + H2O = Cu(OH)2(aq) + 2 H+") == ["H by +2", "O by +1"]
    assert check_balance("Ag+ + Cl- = AgCl2-") == ["Cl by +1", "charge by -1"]


def test_every_reaction_of_the_catalog_balances() -> None:
    rows = [*species_table().values(), *solid_table().values()]
    wrong = {row.name: check_balance(row.reaction) for row in rows}
    assert {name: problems for name, problems in wrong.items() if problems} == {}
    assert len(rows) > 300
