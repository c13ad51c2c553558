"""A feed that is a file of dated samples: its site, its mean, its summary and its refusals."""

from __future__ import annotations

import datetime
from pathlib import Path

import numpy as np
import pytest

from catalogs.problems import InputFileError
from chemistry.feed import feed_water
from optimiser.render_site import site_text
from optimiser.site import Site
from optimiser.site_reader import load_site
from tests.optimiser.test_bad_files import OFFERS, SITE

SAMPLED = SITE.replace(
    """  flow_m3_per_d: 60
  operating_days_per_year: 220
  temperature_degc: 20
  ph: 3
  close_charge_with: SO4
  analysis:
    Cu: {dissolved: 20 mg/L, total: 21 mg/L}
    Zn: 15 mg/L
    Na: 100 mg/L
    SO4: 320 mg/L
""",
    """  samples: samples.csv
  operating_days_per_year: 220
  temperature_degc: 20
  close_charge_with: SO4
  analysis:
    Na: 100 mg/L
    SO4: 320 mg/L
""",
)
ROWS = """\
Date,Flow (m3/d),pH,Cu dissolved mg/L,Cu total mg/L,Zn mg/L,COD mg/L
2025-01-07,40,3.1,18,19,12,80
2025-01-14,80,2.9,22,23,<0.5,90
2025-01-21,60,3.0,20,21,,70
"""
DAY = datetime.date(2026, 1, 1)


@pytest.fixture(autouse=True)
def _folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


def load(rows: str = ROWS, site: str = SAMPLED) -> Site:
    assert site != SITE
    Path("site.yaml").write_text(site, encoding="utf-8")
    Path("offers.csv").write_text(OFFERS, encoding="utf-8")
    Path("samples.csv").write_text(rows, encoding="utf-8")
    return load_site("site.yaml", on_day=DAY)


def problems_of(rows: str = ROWS, site: str = SAMPLED) -> list[str]:
    try:
        load(rows, site)
    except InputFileError as error:
        return [str(problem) for problem in error.problems]
    return []


def test_the_site_carries_samples_and_their_mean() -> None:
    site = load()
    assert site.samples is not None
    assert site.sample_waters is not None
    assert len(site.samples.samples) == 3
    assert site.flow_m3_per_d == 60.0
    assert site.analysis.measurements["Cu"].dissolved_mg_per_l == pytest.approx(
        (18 * 40 + 22 * 80 + 20 * 60) / 180
    )
    mixed = np.array(site.samples.weights) @ site.sample_waters.totals_mol_per_l
    found = feed_water(site.analysis, site.system).totals_mol_per_l
    assert found == pytest.approx(mixed, abs=1e-13)
    assert any("3 samples in samples.csv" in note for note in site.notes)


def test_a_flow_of_the_site_stays_the_flow_of_the_year() -> None:
    site = load(site=SAMPLED.replace("  operating", "  flow_m3_per_d: 75\n  operating"))
    assert site.flow_m3_per_d == 75.0
    assert site.samples is not None
    assert site.samples.mean_flow_m3_per_d == 60.0


def test_check_prints_what_was_read_and_what_was_assumed() -> None:
    text = site_text(load())
    assert "3 samples, 2025-01-07 to 2025-01-21; flow 40.0 to 80.0 m3/d, mean 60.0." in text
    (copper,) = [line for line in text.split("\n") if line.startswith("  Cu ")]
    assert copper.split() == ["Cu", "mg/L", "3", "-", "-", "18.0", "20.0", "22.0", "23.0"]
    (zinc,) = [line for line in text.split("\n") if line.startswith("  Zn ")]
    assert zinc.split() == ["Zn", "mg/L", "2", "1", "1", "0.500", "6.25", "12.0"]
    assert "Zn: blank in 1 of 3 samples (2025-01-21)" in text
    assert "Na: not in the file, 100 mg/L of the site file for every sample" in text
    assert "not read as analytes, kept as they stand: COD mg/L" in text
    assert "the mean of 3 samples stands for the average" in " ".join(text.split())


def test_a_file_that_is_not_there_is_said() -> None:
    Path("samples.csv").unlink(missing_ok=True)
    site = SAMPLED.replace("samples.csv", "lab.csv")
    assert problems_of(site=site) == [
        "site.yaml:5: feed.samples: found no file 'lab.csv' beside the site file, expected a CSV or"
        " XLSX file of samples\n    Put the file there, or correct the name."
    ]


def test_problems_of_site_file_and_samples_come_together() -> None:
    told = problems_of(
        ROWS.replace("18,19", "19,18").replace("2025-01-14", "2025-13-14"),
        SAMPLED.replace("operating_days_per_year: 220", "operating_days_per_year: 400"),
    )
    assert [text.split(": found")[0] for text in told] == [
        "site.yaml:6: feed.operating_days_per_year",
        "samples.csv:2: column 4 (Cu dissolved mg/L)",
        "samples.csv:3: column 1 (Date)",
    ]


def test_what_is_missing_in_both_files_is_asked_for() -> None:
    told = problems_of(
        "Date,Cu mg/L\n2025-01-07,4\n", SAMPLED.replace("  temperature_degc: 20\n", "")
    )
    assert [text.split("\n")[0] for text in told] == [
        "site.yaml:3: feed.flow_m3_per_d: found nothing, and no such column in samples.csv,"
        " expected a number",
        "site.yaml:3: feed.temperature_degc: found nothing, and no such column in samples.csv,"
        " expected a number",
        "site.yaml:3: feed.ph: found no pH and no acidity, neither here nor in samples.csv,"
        " expected the measured pH",
    ]


def test_a_file_without_a_metal_is_refused() -> None:
    told = problems_of("Date,Flow m3/d,pH,Ca mg/L\n2025-01-07,4,3,5\n")
    assert told[0].startswith("site.yaml:5: feed.samples: found no metal in samples.csv")


def test_settings_of_the_file_are_read_and_checked() -> None:
    block = "samples: {file: samples.csv, date_order: day_month, columns: {Kupfer: Cu}, unit: mg/L}"
    rows = "Date,Flow m3/d,pH,Kupfer,Zn\n04/02/2025,4,3,5,6\n"
    site = load(rows, SAMPLED.replace("samples: samples.csv", block))
    assert site.samples is not None
    assert site.samples.samples[0].day == datetime.date(2025, 2, 4)
    bad = block.replace("day_month", "dmy").replace("Kupfer: Cu", "Kupfer: gold")
    told = problems_of(rows, SAMPLED.replace("samples: samples.csv", bad))
    assert [text.split(": found")[0] for text in told[:2]] == [
        "site.yaml:5: feed.samples.columns.Kupfer", "site.yaml:5: feed.samples.date_order",
    ]  # fmt: skip


def test_a_sample_that_cannot_be_closed_is_told_by_its_row() -> None:
    rows = ROWS.replace("COD", "Ca").replace(",12,80", ",12,20000").replace(",90\n", ",1\n")
    told = problems_of(rows, SAMPLED.replace("close_charge_with: SO4", "close_charge_with: Na"))
    assert len(told) == 1
    assert told[0].startswith("samples.csv:2: column 1: found an analysis that does not hold")
    assert "closed with Na" in told[0]


def test_hexavalent_chromium_in_one_sample_is_refused_as_in_a_single_analysis() -> None:
    rows = ROWS.replace("COD mg/L", "Cr(VI) mg/L").replace(",80\n", ",0.01\n")
    told = problems_of(rows.replace(",90\n", ",0.4\n").replace(",70\n", ",0.01\n"))
    assert len(told) == 1
    assert "found 0.4 mg/L" in told[0]
    assert "reduce it to Cr(III) first" in told[0]


def test_a_titration_beside_samples_is_refused() -> None:
    told = problems_of(
        site=SAMPLED.replace("  operating", "  titration: [[0, 3], [2, 7]]\n  operating")
    )
    assert "one titration beside a file of samples" in told[0]
