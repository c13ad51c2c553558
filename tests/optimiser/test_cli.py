"""The command line: streams, exit codes, refusals with a remedy, a help that answers at once."""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from optimiser.cli import main
from optimiser.cli_options import build_parser
from tests.optimiser.cli_runs import write_site

ROOT = Path(__file__).resolve().parents[2]
DEMO = ROOT / "catalogs" / "sites" / "plating_rinse"
QUICK = ROOT / "catalogs" / "sites" / "mercury_lab"
PLAN_QUICK = ("plan", QUICK / "site.yaml", "--most-reagents", "2", "--time-limit", "600")
COMMANDS = ("plan", "assess", "tradeoff", "curves", "floors", "orders", "jar", "check", "new")
HEAVY = ("numpy", "scipy", "pandas", "pulp", "highspy", "yaml", "matplotlib")


def run(*arguments: str | Path, **changes: Any) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(ROOT), **changes.pop("env", {})}
    return subprocess.run(
        [sys.executable, "-m", "optimiser", *map(str, arguments)],
        cwd=ROOT, env=environment, capture_output=True, text=True, check=False, **changes,
    )  # fmt: skip


def run_code(code: str, *arguments: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", code, *map(str, arguments)],
        cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False,
    )  # fmt: skip


@pytest.fixture(scope="module")
def planned() -> subprocess.CompletedProcess[str]:
    return run(*PLAN_QUICK)


@pytest.fixture(scope="module")
def planned_data() -> dict[str, Any]:
    done = run(*PLAN_QUICK, "--json")
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    data: dict[str, Any] = json.loads(done.stdout)
    return data


@pytest.fixture
def site(tmp_path: Path) -> Path:
    """A copy of the demo that a test may spoil."""
    shutil.copytree(DEMO, tmp_path / "site")
    return tmp_path / "site" / "site.yaml"


def spoil(site: Path, old: str, new: str) -> None:
    text = site.read_text(encoding="utf-8")
    assert old in text
    site.write_text(text.replace(old, new, 1), encoding="utf-8")


@pytest.mark.parametrize("arguments", [["--help"], *([name, "--help"] for name in COMMANDS)])
def test_help_loads_no_heavy_library(arguments: list[str]) -> None:
    code = (
        "import sys, atexit\n"
        f"atexit.register(lambda: sys.stderr.write(' '.join(set({HEAVY!r}) & set(sys.modules))))\n"
        "from optimiser.cli import main\n"
        "main(sys.argv[1:])\n"
    )
    done = run_code(code, *arguments)
    assert done.returncode == 0
    assert done.stderr == ""
    assert done.stdout.startswith("usage: dosewright")


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_says_what_it_does_and_shows_an_example(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as left:
        main([name, "--help"])
    assert left.value.code == 0
    assert f"example:\n  dosewright {name} " in capsys.readouterr().out
    assert re.search(rf"^    {name} ", build_parser().format_help(), re.MULTILINE)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["pln"], "invalid choice: 'pln'"),
        (["plan"], "the following arguments are required: SITE"),
        (["plan", "s", "--most-reagents", "0"], "expected a whole number from 1, found '0'"),
        (["plan", "s", "--time-limit", "nan"], "expected a number, found 'nan'"),
        (["plan", "s", "--time-limit", "-1"], "expected a number above 0, found '-1'"),
        (["plan", "s", "--solver", "best"], "invalid choice: 'best'"),
        (
            ["assess", "s", "--dose", "caustic_soda"],
            "expected REAGENT=MG_PER_L such as caustic_soda=420, found 'caustic_soda'",
        ),
        (["assess", "s", "--dose", "lime=410,50"], "expected a number, found '410,50'"),
        (["assess", "s", "--dose", "lime=-4"], "a dose is 0 mg/L or more, found 'lime=-4'"),
        (["curves", "s", "--ph", "15"], "expected a pH from 0 to 14, found '15'"),
    ],
)
def test_a_mistyped_command_is_refused_with_a_remedy(
    arguments: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as left:
        main(arguments)
    assert left.value.code == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert said in streams.err
    assert "--help` lists what it takes." in streams.err


def test_no_command_at_all_shows_the_help_as_a_mistake(capsys: pytest.CaptureFixture[str]) -> None:
    assert main([]) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert streams.err.startswith("usage: dosewright")


def test_version_is_printed(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    assert re.fullmatch(r"dosewright (0\.1\.0|not installed)\n", capsys.readouterr().out)


def test_a_missing_file_is_named(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", str(tmp_path / "absent.yaml")]) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert "absent.yaml" in streams.err


def test_all_problems_of_a_site_are_reported_at_once(
    site: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    spoil(site, "flow_m3_per_d: 180", "flow_m3_per_d: 410,50")
    spoil(site, "most_reagents: 4", "most_reagent: 4")
    for command in ("check", "plan", "curves"):
        assert main([command, str(site)]) == 2
        streams = capsys.readouterr()
        assert streams.out == ""
        assert re.search(r"site\.yaml:\d+: feed\.flow_m3_per_d: found '410,50'", streams.err)
        assert re.search(r"site\.yaml:\d+: treatment\.most_reagent: ", streams.err)
        assert streams.err.endswith("dosewright: 2 problems found, nothing was computed\n")


def test_check_sums_up_a_good_site_and_takes_its_folder(
    capsys: pytest.CaptureFixture[str],
) -> None:
    assert main(["check", str(DEMO)]) == 0
    streams = capsys.readouterr()
    assert streams.err == ""
    assert streams.out.splitlines()[0] == f"{DEMO / 'site.yaml'}: no problem found"
    assert "charge-balance error" in streams.out


def test_new_writes_a_site_that_check_accepts(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["new", str(tmp_path / "plant")]) == 0
    written = [Path(line) for line in capsys.readouterr().out.splitlines()]
    assert {path.name for path in written} >= {"site.yaml", "offers.csv"}
    assert all(path.is_file() for path in written)
    assert main(["check", str(tmp_path / "plant")]) == 0


def test_new_overwrites_nothing(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    mine = tmp_path / "site.yaml"
    mine.write_text("mine", encoding="utf-8")
    assert main(["new", str(tmp_path)]) == 2
    assert mine.read_text(encoding="utf-8") == "mine"
    streams = capsys.readouterr()
    assert streams.out == ""
    assert "site.yaml" in streams.err


def test_a_plan_is_the_only_thing_on_stdout(planned: subprocess.CompletedProcess[str]) -> None:
    assert planned.returncode == 0, planned.stderr
    assert planned.stderr == ""
    assert planned.stdout.startswith(
        "Hollin Vale dental alloy and assay works: cheapest plan found, "
    )
    assert max(map(len, planned.stdout.splitlines())) <= 100
    assert "\x1b" not in planned.stdout


def test_text_and_json_show_the_same_plan(
    planned: subprocess.CompletedProcess[str], planned_data: dict[str, Any]
) -> None:
    from optimiser.render import plan_text

    timeless = re.compile(r"^  Time: .*\n", re.MULTILINE)
    assert timeless.sub("", plan_text(planned_data)) == timeless.sub("", planned.stdout)


def test_the_doses_of_a_plan_assessed_again_cost_the_same(planned_data: dict[str, Any]) -> None:
    doses = [f"{key}={dose!r}" for key, dose in planned_data["doses"].items()]
    done = run("assess", QUICK, "--json", "--dose", *doses)
    assert done.returncode == 0, done.stderr
    again = json.loads(done.stdout)
    assert again["cost"]["total"] == pytest.approx(planned_data["cost"]["total"], rel=1e-6)


def test_assess_falls_back_on_the_doses_of_today() -> None:
    by_default = run("assess", DEMO / "site.yaml", "--json")
    given = run(
        "assess", DEMO, "--json", "--dose", "caustic_soda=395", "--dose", "sodium_hydrosulfide=45"
    )
    assert by_default.returncode in (0, 3)
    assert by_default.returncode == given.returncode
    first, second = json.loads(by_default.stdout), json.loads(given.stdout)
    assert first["doses"] == second["doses"]
    assert first["cost"] == second["cost"]
    assert first["compliant"] == (by_default.returncode == 0)


def test_assess_without_any_dose_asks_for_one(
    site: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    spoil(site, "today:", "# today:")
    assert main(["assess", str(site)]) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert streams.err == (
        "dosewright: no doses: give --dose REAGENT=MG_PER_L, or write them under `today` in the "
        "site file\n"
    )


@pytest.mark.parametrize(
    ("dose", "said"),
    [
        ("caustic=10", "dosewright: --dose caustic: unknown reagent; did you mean `caustic_soda`?"),
        (
            "sulfuric_acid@trim=10",
            "this site does not list sulfuric_acid; add it under treatment.reagents or "
            "treatment.trim_reagents, with an offer in the price book",
        ),
        ("caustic_soda@end=10", "unknown stage 'end'; a dose is REAGENT or REAGENT@trim"),
    ],
)
def test_an_unknown_reagent_is_refused_with_a_suggestion(
    dose: str, said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["assess", str(DEMO), "--dose", dose]) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert said in streams.err


def test_two_trim_reagents_are_refused(capsys: pytest.CaptureFixture[str]) -> None:
    doses = ["soda_ash@trim=5", "caustic_soda@trim=5"]
    assert main(["assess", str(DEMO), "--dose", *doses]) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert "name one trim reagent" in streams.err


def test_no_dose_at_all_meets_no_limit() -> None:
    done = run("assess", DEMO, "--dose", "caustic_soda=0", "--trim", "none")
    assert done.returncode == 3
    assert "these doses do NOT comply" in done.stdout
    assert "MISSED" in done.stdout


def test_no_plan_ends_in_exit_code_3_with_the_reason(tmp_path: Path) -> None:
    limit = {"parameter": "Cu", "daily_mg_per_l": 1e-5, "source": "invented"}
    path = write_site(tmp_path / "site", {"limits": {"own": [limit]}})
    text, data = run("plan", path), run("plan", path, "--json")
    assert (text.returncode, data.returncode) == (3, 3)
    assert (text.stderr, data.stderr) == ("", "")
    assert text.stdout.startswith("Small copper and zinc rinse: no plan\n")
    assert "Cu, daily" in text.stdout
    assert max(map(len, text.stdout.splitlines())) <= 100
    answer = json.loads(data.stdout)
    assert answer["compliant"] is False
    assert any(clash["limit"].startswith("Cu, daily") for clash in answer["clashes"])


def test_a_plan_that_runs_out_of_time_ends_in_exit_code_4() -> None:
    done = run("plan", QUICK, "--time-limit", "0.001")
    assert done.returncode == 4
    assert done.stdout == ""
    assert done.stderr.startswith("dosewright: stopped after 0.001 s before a verified plan")


def test_curves_are_printed_and_written(tmp_path: Path) -> None:
    table = tmp_path / "curves.csv"
    done = run("curves", DEMO, "--ph", "9", "--csv", table)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert "Alkali and acid demand" in done.stdout
    assert max(map(len, done.stdout.splitlines())) <= 100
    header, *rows = table.read_text(encoding="utf-8").splitlines()
    assert header.startswith("curve,reagent,dose_mg_per_l,")
    assert len(rows) > 20


def test_a_file_that_cannot_be_written_is_named(tmp_path: Path) -> None:
    done = run("curves", DEMO, "--csv", tmp_path / "absent" / "curves.csv")
    assert done.returncode == 2
    assert done.stdout == ""
    assert "curves.csv" in done.stderr or "absent" in done.stderr
    assert "Traceback" not in done.stderr


def test_interrupting_a_plan_ends_in_exit_code_4() -> None:
    code = (
        "import os, signal, sys, threading\n"
        "from optimiser.cli import main\n"
        "threading.Timer(0.5, os.kill, (os.getpid(), signal.SIGINT)).start()\n"
        "sys.exit(main(sys.argv[1:]))\n"
    )
    done = run_code(code, "plan", DEMO)
    assert done.returncode == 4
    assert done.stdout == ""
    assert done.stderr == "dosewright: stopped before there was a result\n"


FAULTY = """\
import sys, types
broken = types.ModuleType("optimiser.site_reader")
def load_site(path):
    raise RuntimeError("the cat sat\\non the keyboard")
broken.load_site = load_site
sys.modules["optimiser.site_reader"] = broken
from optimiser.cli import main
sys.exit(main())
"""


def test_a_fault_of_the_program_is_one_line_and_says_what_to_do() -> None:
    done = run_code(FAULTY, "check", "site.yaml")
    assert done.returncode == 1
    assert done.stdout == ""
    assert done.stderr == (
        "dosewright: a fault of the program, not of your input: RuntimeError in <string>:4: "
        "the cat sat on the keyboard. Please run the command again with --debug and send the "
        "output with the site file to the maintainers.\n"
    )


def test_a_state_that_misses_its_certificate_is_a_fault_of_the_program() -> None:
    error = "from chemistry.errors import EquilibriumError as RuntimeError\n"
    plain = run_code(error + FAULTY, "check", "site.yaml")
    assert (plain.returncode, plain.stdout) == (1, "")
    assert plain.stderr.startswith("dosewright: the cat sat\non the keyboard\n    Please run the")
    detailed = run_code(error + FAULTY, "check", "site.yaml", "--debug")
    assert detailed.returncode == 1
    assert "Traceback" in detailed.stderr


def test_debug_leaves_mistakes_of_the_user_as_they_are() -> None:
    done = run("check", "absent.yaml", "--debug")
    assert done.returncode == 2
    assert "Traceback" not in done.stderr


def test_debug_shows_where_a_fault_came_from() -> None:
    done = run_code(FAULTY, "check", "site.yaml", "--debug")
    assert done.returncode == 1
    assert done.stderr.startswith("Traceback")


def test_a_reader_that_leaves_early_is_no_fault() -> None:
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as closed:
        done = subprocess.run(
            [sys.executable, "-m", "optimiser", "check", str(DEMO)],
            cwd=ROOT, stdout=closed, stderr=subprocess.PIPE, text=True, check=False,
        )  # fmt: skip
    assert (done.returncode, done.stderr) == (0, "")


def on_a_terminal(*arguments: str | Path, **environment: str) -> str:
    master, slave = os.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "optimiser", *map(str, arguments)],
        cwd=ROOT, stdout=slave, stderr=subprocess.DEVNULL,
        env={**os.environ, "TERM": "xterm", "NO_COLOR": "", **environment},
    )  # fmt: skip
    os.close(slave)
    seen = b""
    try:
        while chunk := os.read(master, 65536):
            seen += chunk
    except OSError:
        pass  # Linux reports the closed terminal as an error
    os.close(master)
    assert process.wait() == 0
    return seen.decode()


def test_colour_appears_on_a_terminal_unless_it_is_declined() -> None:
    assert "\x1b[1m" in on_a_terminal("curves", DEMO)
    assert "\x1b" not in on_a_terminal("curves", DEMO, NO_COLOR="1")
    assert "\x1b" not in on_a_terminal("curves", DEMO, TERM="dumb")
