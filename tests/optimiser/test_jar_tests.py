"""Jar tests of a site: known factors come back, the file is kept whole, bad sheets say all."""

from __future__ import annotations

import datetime
import json
from pathlib import Path

import numpy as np
import pytest
import yaml

from catalogs.problems import InputFileError, ProblemLog
from chemistry.feed import feed_water
from chemistry.state import equilibrate
from optimiser import assess
from optimiser.bench_sheet import BenchSheet, load_bench_sheet
from optimiser.cli import main
from optimiser.jar_file import (
    JarCalibration,
    Span,
    calibration_text,
    read_calibration,
    write_calibration,
)
from optimiser.jar_tests import JarResult, compare_jars
from optimiser.site import Site
from optimiser.site_reader import load_site
from tests.optimiser.small_sites import COPPER_ZINC, OFFERS, merged, price_book, small_site

DAY = datetime.date(2026, 1, 1)
NAMES = {"hydrated_lime": "hydrated lime", "caustic_soda": "caustic soda",
         "hydrochloric_acid": "hydrochloric acid"}  # fmt: skip
METALS = ("Cu", "Zn", "Cl")
LIME_FACTOR, COPPER_FACTOR, ZINC_FACTOR = 1.25, 3.0, 1.6


@pytest.fixture(autouse=True)
def _folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)


@pytest.fixture(scope="module")
def site() -> Site:
    return small_site()


def bench(
    site: Site, *, scatter: float = 0.0, doses: tuple[float, ...] = (255, 270, 285, 300, 320)
) -> str:
    """A bench sheet as the equilibrium with known factors would give it, seeded."""
    rng = np.random.default_rng(4)
    feed = feed_water(site.analysis, site.system)
    index = site.system.index
    rows = ["date,test,hydrated_lime mg/L,pH,Cu filtered mg/L,Cu unfiltered mg/L,Zn filtered mg/L"]
    rows.append(f"2025-05-05,raw,0,{feed.ph_as_sampled:.9f},58,58,40")
    for number, dose in enumerate(doses, start=1):
        totals = feed.totals_mol_per_l.copy()
        reagent = site.reagents["hydrated_lime"]
        moles = dose / LIME_FACTOR / 1000.0 / reagent.molar_mass_g_per_mol
        for component, count in reagent.components.items():
            totals[index[component]] += count * moles
        state = equilibrate(site.system, totals)
        copper = float(state.dissolved["Cu+2"].iloc[0]) * 63546.0 * COPPER_FACTOR
        zinc = float(state.dissolved["Zn+2"].iloc[0]) * 65380.0 * ZINC_FACTOR
        noise = np.exp(rng.normal(0.0, scatter, 3))
        rows.append(
            f"2025-05-05,{number},{dose * noise[0]:.9g},{state.ph[0]:.9f},{copper * noise[1]:.9g},"
            f"{copper * noise[1] + 0.02:.9g},{zinc * noise[2]:.9g}"
        )
    return "\n".join(rows) + "\n"


def sheet(text: str) -> BenchSheet:
    Path("bench.csv").write_text(text, encoding="utf-8")
    return load_bench_sheet(Path("bench.csv"), NAMES, METALS, on_day=DAY)


def problems(text: str) -> list[tuple[int, str, str]]:
    try:
        sheet(text)
    except InputFileError as error:
        return [(p.line, p.found, p.expected) for p in error.problems]
    return []


def compared(site: Site, **settings: float) -> JarResult:
    return compare_jars(site, sheet(bench(site, **settings)))  # type: ignore[arg-type]


# -- what the tests say --------------------------------------------------------------------------


def test_known_factors_come_back_from_a_bench_without_scatter(site: Site) -> None:
    made = compared(site).calibration
    assert made.dose_factors["hydrated_lime"].factor == pytest.approx(LIME_FACTOR, rel=1e-4)
    assert made.residual_factors["Cu"].factor == pytest.approx(COPPER_FACTOR, rel=1e-3)
    assert made.residual_factors["Zn"].factor == pytest.approx(ZINC_FACTOR, rel=1e-3)


def test_with_scatter_the_intervals_hold_them(site: Site) -> None:
    made = compared(site, scatter=0.1).calibration
    for fit, truth in (
        (made.dose_factors["hydrated_lime"], LIME_FACTOR),
        (made.residual_factors["Cu"], COPPER_FACTOR),
        (made.residual_factors["Zn"], ZINC_FACTOR),
    ):
        assert fit.low < truth < fit.high
        assert fit.scatter_ln > 0.01


def test_conditions_of_the_tests_are_kept(site: Site) -> None:
    made = compared(site).calibration
    assert (made.first_day, made.last_day, made.jars) == ("2025-05-05", "2025-05-05", 5)
    assert made.doses_mg_per_l == {"hydrated_lime": Span(low=255.0, high=320.0)}
    assert dict(made.feed_mg_per_l) == {"Cu": 58.0, "Zn": 40.0}
    assert made.results == "bench.csv"


def test_a_jar_without_a_dose_is_the_water_that_was_tested(site: Site) -> None:
    text = bench(site)
    thinner = text.replace(",58,58,40\n", ",29,29,40\n")
    found = compare_jars(site, sheet(thinner))
    assert found.calibration.feed_mg_per_l["Cu"] == 29.0
    assert any("Cu 58 mg/L in the feed: the water tested held 29" in w for w in found.warnings)
    without = "\n".join(line for line in text.split("\n") if ",raw," not in line)
    found = compare_jars(site, sheet(without))
    assert found.calibration.feed_mg_per_l["Cu"] == 58.0
    assert any("no jar without a dose" in warning for warning in found.warnings)


def test_few_jars_are_warned_of_and_wide(site: Site) -> None:
    one = compare_jars(site, sheet(bench(site, doses=(285,))))
    fit = one.calibration.residual_factors["Cu"]
    assert fit.scatter_assumed
    assert fit.high / fit.low > 100.0
    assert any("Cu: from one jar only" in warning for warning in one.warnings)
    many = compared(site, scatter=0.1).calibration.residual_factors["Cu"]
    assert many.high / many.low < 1.5


def test_results_below_a_reporting_limit_take_no_part(site: Site) -> None:
    lines = bench(site).split("\n")
    cells = lines[3].split(",")
    cells[4] = "<0.5"
    lines[3] = ",".join([*cells[:5], "0.6", cells[6]])
    found = compare_jars(site, sheet("\n".join(lines)))
    assert found.calibration.residual_factors["Cu"].factor == pytest.approx(3.0, rel=1e-3)
    assert found.calibration.residual_factors["Cu"].jars == 4
    assert any("1 result(s) below the reporting limit" in warning for warning in found.warnings)


def test_three_jars_below_a_practical_floor_lower_it(site: Site) -> None:
    rows = ["date,test,hydrated_lime mg/L,pH,Cu filtered mg/L,Cu unfiltered mg/L"]
    for number, (dose, ph, total) in enumerate(
        [(270, 8.4, 0.03), (280, 8.8, 0.02), (285, 9.0, 0.035), (290, 9.2, 0.5)], start=1
    ):
        rows.append(f"2025-05-05,{number},{dose},{ph},0.01,{total}")
    made = compare_jars(site, sheet("\n".join(rows))).calibration
    assert dict(made.floors_mg_per_l) == {"Cu": 0.035}
    made = compare_jars(site, sheet("\n".join(rows[:3]))).calibration
    assert dict(made.floors_mg_per_l) == {}


def test_sludge_and_theory_stand_side_by_side(site: Site) -> None:
    text = bench(site).replace("Zn filtered mg/L\n", "Zn filtered mg/L,sludge mg/L\n", 1)
    lines = text.strip().split("\n")
    lines = [lines[0], f"{lines[1]},"] + [f"{line},250" for line in lines[2:]]
    found = compare_jars(site, sheet("\n".join(lines)))
    assert found.sludge_factor is not None
    ratio = 250.0 / found.sludge_mg_per_l
    assert ratio.min() < found.sludge_factor.factor < ratio.max()
    assert (found.sludge_mg_per_l > 100.0).all()


# -- the file ------------------------------------------------------------------------------------


def round_trip(made: JarCalibration) -> JarCalibration | None:
    Path("jar.yaml").write_text(calibration_text(made, ["a | line"]), encoding="utf-8")
    log = ProblemLog()
    found = read_calibration(Path("jar.yaml"), log, NAMES, METALS)
    assert [str(problem) for problem in log.problems] == []
    return found


def test_a_calibration_survives_its_file(site: Site) -> None:
    made = compared(site, scatter=0.1).calibration
    found = round_trip(made)
    assert found is not None
    assert found.first_day == made.first_day
    assert found.doses_mg_per_l["hydrated_lime"].low == pytest.approx(
        made.doses_mg_per_l["hydrated_lime"].low, rel=1e-4
    )
    assert found.residual_factors["Cu"].low == pytest.approx(
        made.residual_factors["Cu"].low, rel=1e-4
    )


def test_a_file_is_not_written_over_unless_forced() -> None:
    path = Path("jar.yaml")
    write_calibration(path, "one\n")
    with pytest.raises(FileExistsError) as caught:
        write_calibration(path, "two\n")
    assert "--force" in str(caught.value.strerror)
    assert path.read_text() == "one\n"
    write_calibration(path, "two\n", force=True)
    assert path.read_text() == "two\n"
    assert [p.name for p in Path().iterdir()] == ["jar.yaml"]


def test_a_failure_half_way_leaves_the_old_file(monkeypatch: pytest.MonkeyPatch) -> None:
    path = Path("jar.yaml")
    path.write_text("old\n")

    def fail(self: Path, target: Path) -> None:
        raise PermissionError(1, "no", str(target))

    monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(PermissionError):
        write_calibration(path, "new\n", force=True)
    assert [p.name for p in Path().iterdir()] == ["jar.yaml"]
    assert path.read_text() == "old\n"


def test_a_damaged_file_is_told_by_line() -> None:
    Path("jar.yaml").write_text(
        'results: "b.csv"\nfirst_day: 2025-05-05\nlast_day: 2025-05-05\njars: 3\nconfidence: 0.9\n'
        "ph: {low: 9, high: 8}\ndose_factors:\n  lime: {factor: 1.2, low: 1.1, high: 1.3, "
        "scatter_ln: 0.1}\nresidual_factors:\n  Cu: {factor: 9, low: 1, high: 3, scatter_ln: 0.1}\n"
    )
    log = ProblemLog()
    assert read_calibration(Path("jar.yaml"), log, NAMES, METALS) is None
    assert [(p.line, p.found) for p in log.problems] == [
        (6, "low 9 above high 8"), (8, "'lime'"), (10, "factor 9 outside its interval 1 to 3"),
    ]  # fmt: skip


# -- in the site ---------------------------------------------------------------------------------


def write_site(changes: dict[str, object] | None = None, text: str = "") -> Path:
    tree = merged(COPPER_ZINC, changes or {})
    Path("offers.csv").write_text(price_book(OFFERS), encoding="utf-8")
    Path("site.yaml").write_text(yaml.safe_dump(tree, sort_keys=False), encoding="utf-8")
    if text:
        Path("bench.csv").write_text(text, encoding="utf-8")
    return Path("site.yaml")


NAMED = {"treatment": {"jar_tests": "jar.yaml"}}


def test_the_command_writes_the_file_and_the_site_takes_its_factors(
    site: Site, capsys: pytest.CaptureFixture[str]
) -> None:
    path = write_site(text=bench(site, scatter=0.05))
    assert main(["jar", str(path), "bench.csv"]) == 0
    shown = capsys.readouterr().out
    assert "fed / reacting" in shown
    assert "dissolved / theory" in shown
    assert "add `jar_tests: jar.yaml` under `treatment`" in shown
    assert main(["jar", str(path), "bench.csv"]) == 2
    assert "--force" in capsys.readouterr().err
    assert main(["jar", str(path), "bench.csv", "--force", "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert [jar["test"] for jar in data["jars"]] == ["1", "2", "3", "4", "5"]
    loaded = load_site(write_site(NAMED))
    lime = data["dose_factors"]["hydrated_lime"]
    assert loaded.treatment.dose_factors["hydrated_lime"] == pytest.approx(lime["factor"], rel=1e-4)
    assert loaded.residual_factors["Cu"] == pytest.approx(
        tuple(data["residual_factors"]["Cu"][k] for k in ("factor", "low", "high")), rel=1e-4
    )
    assert any("jar tests of 2025-05-05 (bench.csv, 5 jars)" in note for note in loaded.notes)


def jar(**changes: object) -> None:
    lines = {
        "results": "bench.csv", "first_day": "2025-05-05", "last_day": "2025-05-05", "jars": 5,
        "confidence": 0.9, "ph": {"low": 8.0, "high": 9.0},
        "doses_mg_per_l": {"hydrated_lime": {"low": 250, "high": 280}},
        "feed_mg_per_l": {"Cu": 58, "Zn": 40}, **changes,
    }  # fmt: skip
    text = yaml.safe_dump(lines, sort_keys=False).replace("'2025-05-05'", "2025-05-05")
    Path("jar.yaml").write_text(text)


def fit(factor: float) -> dict[str, float]:
    return {"factor": factor, "low": factor / 2, "high": factor * 2, "scatter_ln": 0.2, "jars": 5}


def test_a_factor_of_the_site_file_wins_over_the_tests() -> None:
    jar(dose_factors={"hydrated_lime": fit(1.4), "caustic_soda": fit(0.8)})
    own = merged(NAMED, {"treatment": {"dose_factors": {"hydrated_lime": 1.1}}})
    loaded = load_site(write_site(own))
    assert dict(loaded.treatment.dose_factors) == {"caustic_soda": 1.0, "hydrated_lime": 1.1}
    assert any("1.1 of the site file stands, not 1.4" in note for note in loaded.notes)


def test_floors_fall_to_what_was_reached_and_never_rise() -> None:
    before = load_site(write_site()).floors_mg_per_l
    jar(floors_mg_per_l={"Cu": 0.03, "Zn": 50})
    after = load_site(write_site(NAMED)).floors_mg_per_l
    assert max(before["Cu"].values()) > 0.03
    assert max(after["Cu"].values()) == 0.03
    assert after["Zn"] == before["Zn"]


def test_a_plan_outside_the_tested_range_is_flagged() -> None:
    jar(dose_factors={"hydrated_lime": fit(1.2)})
    site = load_site(write_site(NAMED))
    found = assess(site, {"hydrated_lime": 400.0, "caustic_soda": 5.0})
    flagged = [text for text in found.cautions if text.startswith("outside the jar tests")]
    assert "outside the jar tests: hydrated_lime 400 mg/L: the jar tests ran from 250 to 280" in (
        flagged
    )
    assert "outside the jar tests: caustic_soda: not in the jar tests" in flagged


def test_a_feed_that_left_the_tested_range_asks_for_new_tests() -> None:
    jar(feed_mg_per_l={"Cu": 20, "Zn": 40})
    notes = load_site(write_site(NAMED)).notes
    assert "Cu 58 mg/L in the feed: the water tested held 20: make new jar tests" in notes


def test_a_site_that_names_no_file_says_how_to_make_one() -> None:
    with pytest.raises(InputFileError) as caught:
        load_site(write_site(NAMED))
    (problem,) = caught.value.problems
    assert problem.found == "no file 'jar.yaml' beside the site file"
    assert "dosewright jar SITE RESULTS.csv" in problem.remedy


# -- bad sheets ----------------------------------------------------------------------------------


def test_every_problem_of_a_sheet_is_told_at_once() -> None:
    found = problems(
        "date,test,hydrated_lyme mg/L,caustic_soda,pH,Cu filtered mg/L,Cu unfiltered mg/L,"
        "Ni filtered mg/L,Zn mg/L\n"
        "2025-05-05,1,100,20,8.4,0.5,0.4,1,1\n"
        "05/06/2025,2,-5,20,,0.5,0.6,1,1\n"
        '2027-05-05,3,100,20,15,"0,5",0.6,1,1\n'
        "2025-05-05,1,100,20,8.4,0.5,0.6,1,1\n"
    )
    assert {(line, text.split(",")[0]) for line, text, _ in found} >= {
        (1, "the column 'hydrated_lyme mg/L'"),
        (1, "a dose without a unit"),
        (2, "filtered 0.5 mg/L above unfiltered 0.4 mg/L"),
        (2, "Ni"),
        (2, "Zn"),
        (3, "'05/06/2025'"),
        (3, "a jar without a pH"),
        (4, "'2027-05-05'"),
        (4, "15"),
        (4, "'0"),
        (5, "a second jar '1' of 2025-05-05"),
    }


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("a,b\n1,2\n", "no header row among 2 rows"),
        ("date,pH,Cu filtered mg/L\n2025-05-05,8,1\n", "no column with a dose of a reagent"),
        ("date,caustic_soda mg/L,pH\n2025-05-05,20,8\n", "no column with a metal"),
        ("date,caustic_soda mg/L,pH,Cu filtered mg/L\n2025-05-05,0,8,1\n", "no jar with a dose"),
        ("date,caustic_soda mg/L,pH,Cu filtered mg/L\n", "no jars"),
        ("date,caustic_soda g/L,pH,Cu filtered mg/L\n2025-05-05,300,8,1\n", "300000 mg/L"),
        (
            "date,caustic_soda mg/L,caustic soda mg/L,pH,Cu filtered mg/L\n2025-05-05,2,2,8,1\n",
            "a second column like 'caustic_soda mg/L'",
        ),
    ],
)
def test_what_a_sheet_lacks_is_said(text: str, found: str) -> None:
    assert found in [text for _, text, _ in problems(text)]


def test_a_sheet_may_be_a_workbook(site: Site) -> None:
    import openpyxl

    work = openpyxl.Workbook()
    page = work.active
    assert page is not None
    for line in bench(site).strip().split("\n"):
        page.append([float(c) if c.replace(".", "", 1).isdigit() else c for c in line.split(",")])
    work.save("bench.xlsx")
    found = load_bench_sheet(Path("bench.xlsx"), NAMES, METALS, on_day=DAY)
    assert len(found.jars) == 6
