"""Quantities as laboratories write them, converted to mg/L of the analyte itself."""

from __future__ import annotations

import pytest

from catalogs.positions import Scalar
from catalogs.problems import ProblemLog, Spot
from catalogs.quantities import bases_of, read_alkalinity, read_concentration
from chemistry.feed import ANALYTES


def read(text: str, analyte: str) -> tuple[float, bool]:
    log = ProblemLog()
    found = read_concentration(
        Scalar(text, 1), Spot(log=log, file="f", line=1, field="x"), ANALYTES[analyte]
    )
    assert log.problems == ()
    assert found is not None
    assert found.as_written == " ".join(text.split())
    return found.mg_per_l, found.is_below


@pytest.mark.parametrize(
    "text",
    ["38 mg/L", "38mg/L", "38 mg/l", "0.038 g/L", "38 g/m3", "38000 ug/L", "38000 \u00b5g/l",
     "38000 \u03bcg/L", "38\u00a0mg/L", "3.8e1 mg/L", "0.038 kg/m3", "3.8e7 ng/L", "38 mg/L as Cu",
     "38 g/m\u00b3"],
)  # fmt: skip
def test_one_concentration_in_many_spellings(text: str) -> None:
    value, is_below = read(text, "Cu")
    assert value == pytest.approx(38.0, rel=1e-12)
    assert not is_below


@pytest.mark.parametrize(
    ("text", "analyte", "mg_per_l"),
    [
        # molar masses from the IUPAC atomic weights of 2021, added up by hand
        ("12 mg/L as N", "NH4", 12 * 18.039 / 14.007),
        ("3 mg/L as P", "PO4", 3 * 94.970 / 30.974),
        ("10 mg/L as S", "SO4", 10 * 96.056 / 32.06),
        ("10 mg/L as S", "S", 10.0),
        ("100 mg/L as CaCO3", "Ca", 100 / 50.04 * 40.078 / 2),
        ("100 mg/L as CaCO3", "HCO3", 100 / 50.04 * 61.016),
        ("2 mmol/L", "Cu", 2 * 63.546),
        ("2 meq/L", "Cu", 63.546),
        ("2e3 umol/L", "Cu", 2 * 63.546),
        ("1 mmol/L", "S", 32.06),
        ("4 mg/L as Cr", "Cr(VI)", 4.0),
    ],
)
def test_amounts_and_bases_become_mg_of_the_analyte(
    text: str, analyte: str, mg_per_l: float
) -> None:
    assert read(text, analyte)[0] == pytest.approx(mg_per_l, rel=1e-4)


def test_a_value_below_the_reporting_limit_keeps_the_limit() -> None:
    assert read("<0.05 mg/L", "Pb") == (0.05, True)
    assert read("< 50 ug/L", "Pb")[1] is True
    assert read("<1 mg/L as N", "NH4")[0] == pytest.approx(18.039 / 14.007, rel=1e-4)


def test_a_basis_is_taken_only_where_it_means_something() -> None:
    assert bases_of(ANALYTES["Fe(II)"]) == ("Fe(II)", "Fe")
    assert "N" not in bases_of(ANALYTES["CN"])
    assert "CaCO3" not in bases_of(ANALYTES["Cu"])
    log = ProblemLog()
    spot = Spot(log=log, file="f", line=1, field="x")
    assert read_concentration(Scalar("2 mmol/L as N", 1), spot, ANALYTES["NH4"]) is None
    assert len(log.problems) == 1


def test_alkalinity_needs_its_basis() -> None:
    log = ProblemLog()
    spot = Spot(log=log, file="f", line=1, field="x")
    assert read_alkalinity(Scalar("120 mg/L as CaCO3", 1), spot) == 120.0
    assert read_alkalinity(Scalar("0.12 g/L as CaCO3", 1), spot) == pytest.approx(120.0)
    assert read_alkalinity(Scalar("2.4 meq/L", 1), spot) == pytest.approx(2.4 * 50.04)
    assert log.problems == ()
    for text in ("120 mg/L", "2.4 mmol/L", "120 mg/L as N", "2.4 meq/L as CaCO3"):
        assert read_alkalinity(Scalar(text, 1), spot) != read_alkalinity(Scalar(text, 1), spot)
    assert len(log.problems) == 4
