"""Names of columns as laboratories write them lead to analytes, fractions, units and bases."""

from __future__ import annotations

import pytest

from catalogs.sample_words import read_fraction, read_heading, read_unit
from chemistry.analysis import ANALYTES


@pytest.mark.parametrize(
    ("text", "name", "fraction", "unit", "basis"),
    [
        ("Cu", "Cu", "", "", ""),
        ("copper", "Cu", "", "", ""),
        ("Copper (dissolved)", "Cu", "dissolved", "", ""),
        ("Cu total", "Cu", "total", "", ""),
        ("CU_D", "Cu", "dissolved", "", ""),
        ("Cu-T (\N{MICRO SIGN}g/l)", "Cu", "total", "ug/L", ""),
        ("Diss. Cu mg/l", "Cu", "dissolved", "mg/L", ""),
        ("Total copper as Cu (mg/L)", "Cu", "total", "mg/L", "Cu"),
        ("Pb Total Recoverable ug/L", "Pb", "total", "ug/L", ""),
        ("Cd filtered 0.45 um", "Cd", "dissolved", "", ""),
        ("Nickel Ni [mg/L]", "Ni", "", "mg/L", ""),
        ("Aluminum", "Al", "", "", ""),
        ("Cu2+ mg/L", "Cu", "", "mg/L", ""),
        ("Fe2+", "Fe(II)", "", "", ""),
        ("Iron (III), dissolved", "Fe(III)", "dissolved", "", ""),
        ("Cr VI", "Cr(VI)", "", "", ""),
        ("Hexavalent chromium", "Cr(VI)", "", "", ""),
        ("SO4 2-", "SO4", "", "", ""),
        ("SO42- (mg/L)", "SO4", "", "mg/L", ""),
        ("Sulphate", "SO4", "", "", ""),
        ("NH4-N", "NH4", "", "", "N"),
        ("Ammonia as N", "NH4", "", "", "N"),
        ("PO4-P mg/L", "PO4", "", "mg/L", "P"),
        ("Ca as CaCO3 mg/L", "Ca", "", "mg/L", "CaCO3"),
        ("Zn mmol/L", "Zn", "", "mmol/L", ""),
        ("Mg mg.L-1", "Mg", "", "mg/L", ""),
        ("Cyanide, free", "CN", "", "", ""),
        ("Chloride\n(mg/L)", "Cl", "", "mg/L", ""),
    ],
)
def test_a_column_of_an_analyte_is_understood(
    text: str, name: str, fraction: str, unit: str, basis: str
) -> None:
    found = read_heading(text)
    assert (found.role, found.name, found.fraction, found.unit, found.basis) == (
        "analyte", name, fraction, unit, basis,
    )  # fmt: skip


@pytest.mark.parametrize("name", [name for name in ANALYTES if name != "S"])
def test_every_analyte_is_known_by_its_id_and_its_name(name: str) -> None:
    assert read_heading(name).name == name
    assert read_heading(ANALYTES[name].name.split(" (")[0]).name == name


@pytest.mark.parametrize(
    ("text", "role", "unit"),
    [
        ("Flow (m3/d)", "flow", "m3/d"),
        ("Q [L/s]", "flow", "L/s"),
        ("Flow ML/d", "flow", "ML/d"),
        ("Flow gpm", "flow", "gpm"),
        ("pH (field)", "ph", ""),
        ("Temp (\N{DEGREE SIGN}C)", "temperature", "degC"),
        ("Total suspended solids mg/L", "tss", "mg/L"),
        ("Alkalinity, total as CaCO3 (mg/L)", "alkalinity", "mg/L"),
        ("Acidity meq/L", "acidity", "meq/L"),
        ("Sampling date/time", "date", ""),
        ("Sample ID", "sample", ""),
        ("Reporting limit", "limit", ""),
    ],
)
def test_other_columns_are_understood(text: str, role: str, unit: str) -> None:
    assert (read_heading(text).role, read_heading(text).unit) == (role, unit)


@pytest.mark.parametrize(
    "text",
    ["As mg/L", "COD", "Total dissolved solids", "Dissolved oxygen", "Nitrate as N", "T", "D",
     "Hardness (mg/L CaCO3)"],
)  # fmt: skip
def test_what_is_no_analyte_here_is_unknown(text: str) -> None:
    assert read_heading(text).role == "unknown"


def test_sulfur_and_total_cyanide_are_not_taken_for_sulfide_and_free_cyanide() -> None:
    assert read_heading("S mg/L").role == "unknown"
    assert "sulfide" in read_heading("S mg/L").hint
    assert read_heading("Total cyanide").role == "unknown"
    assert "free" in read_heading("Total cyanide").hint


def test_ammonia_without_a_basis_asks_for_it() -> None:
    assert "basis" in read_heading("Ammonia mg/L").hint
    assert read_heading("NH3-N mg/L").hint == ""


def test_a_small_l_is_a_litre_and_a_megalitre_needs_its_capital() -> None:
    assert read_unit("m3/day")[0] == "m3/d"
    assert read_unit("ML/d")[0] == "ML/d"
    assert read_unit("ml/d")[0] == ""


@pytest.mark.parametrize(
    ("text", "fraction"),
    [("Dissolved", "dissolved"), ("T", "total"), ("filtered", "dissolved"), ("N", "total"),
     ("", None), ("river", None)],
)  # fmt: skip
def test_a_fraction_column_is_read(text: str, fraction: str | None) -> None:
    assert read_fraction(text) == fraction
