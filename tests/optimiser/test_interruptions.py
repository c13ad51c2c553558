"""Whatever stops a run: one message, the exit code, whole files, no solver left behind."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest

from tests.optimiser.cli_runs import SITES, program, run, with_cbc, write_site

STOPPED = "dosewright: stopped before there was a result\n"
SIGNAL = """
import optimiser.{module} as where
honest = where.{name}
def stop(*args, **kwargs):
    os.kill(os.getpid(), signal.{signal})
    return honest(*args, **kwargs)
where.{name} = stop
"""
PHASES = {
    "reading": ("site_reader", "read_solver"),
    "proposing": ("search", "grid"),
    "polishing": ("polish", "build_step"),
    "settling": ("search", "moves"),
    "describing": ("planning", "describe"),
}


@pytest.fixture
def site(tmp_path: Path) -> Path:
    return write_site(tmp_path / "site")


@pytest.fixture
def scratch(tmp_path: Path) -> Path:
    folder = tmp_path / "scratch"
    folder.mkdir()
    return folder


# -- signals --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("signal", "phase"),
    [*(("SIGTERM", phase) for phase in PHASES), ("SIGINT", "proposing"), ("SIGINT", "polishing")],
)
def test_a_signal_stops_a_plan_in_any_phase(
    signal: str, phase: str, site: Path, scratch: Path
) -> None:
    module, name = PHASES[phase]
    done = run(
        "plan", site, "--json", arranged=SIGNAL.format(module=module, name=name, signal=signal),
        cwd=scratch, environment={"TMPDIR": str(scratch)},
    )  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (4, "", STOPPED)
    assert list(scratch.iterdir()) == []


@pytest.mark.parametrize("signal", ["INT", "TERM", "HUP"])
def test_a_signal_while_a_solver_program_runs_takes_it_along(
    signal: str, site: Path, tmp_path: Path, scratch: Path
) -> None:
    marker = tmp_path / "pid"
    script = f"echo $$ > {marker}; kill -{signal} $PPID; exec sleep 250"
    done = run(
        "plan", site, "--solver", "cbc", arranged=with_cbc(program(tmp_path / "cbc", script)),
        cwd=scratch, environment={"TMPDIR": str(scratch)},
    )  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (4, "", STOPPED)
    assert not Path(f"/proc/{marker.read_text().strip()}").exists()
    assert list(scratch.iterdir()) == []


@pytest.mark.parametrize("command", ["explain", "curves", "floors", "assess"])
def test_other_commands_stop_alike(command: str, site: Path) -> None:
    arranged = SIGNAL.format(module="site_reader", name="read_solver", signal="SIGTERM")
    done = run(command, site, arranged=arranged)
    assert (done.returncode, done.stdout, done.stderr) == (4, "", STOPPED)


# -- time limits ----------------------------------------------------------------------------------

LATE = """
import optimiser.search as search
CALLS = [0]
def late(self):
    CALLS[0] += 1
    self.findings.stopped_early |= CALLS[0] > {calls}
    return CALLS[0] > {calls}
search.Search._late = late
"""


def test_a_plan_out_of_time_after_its_first_polish_is_verified_and_says_so(site: Path) -> None:
    done = run("plan", site, "--json", arranged=LATE.format(calls=3))
    assert (done.returncode, done.stderr) == (0, "")
    found = json.loads(done.stdout)
    assert found["compliant"]
    assert found["proof"]["stopped_early"] is True
    text = run("plan", site, arranged=LATE.format(calls=3))
    assert text.returncode == 0
    assert "The time limit ended the search before it was through." in text.stdout


def test_a_plan_out_of_time_before_any_polish_ends_in_exit_code_4(site: Path) -> None:
    done = run("plan", site, "--json", arranged=LATE.format(calls=0))
    assert (done.returncode, done.stdout) == (4, "")
    assert done.stderr == (
        "dosewright: stopped after 60 s before a verified plan was found: raise the time limit or "
        "allow fewer reagents\n"
    )


@pytest.mark.parametrize("seconds", ["0.5", "1"])
def test_a_short_time_limit_gives_a_verified_plan_or_says_that_there_is_none_yet(
    seconds: str,
) -> None:
    done = run("plan", SITES / "silver_rinse", "--json", "--time-limit", seconds)
    if done.returncode == 0:
        found = json.loads(done.stdout)
        assert found["compliant"]
        assert done.stderr == ""
    else:
        assert (done.returncode, done.stdout) == (4, "")
        said = f"dosewright: stopped after {seconds} s before a verified plan was found"
        assert done.stderr.startswith(said)


# -- streams --------------------------------------------------------------------------------------


def test_a_reader_that_leaves_before_the_plan_is_no_fault(site: Path) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w") as closed:
        done = run("plan", site, "--json", stdout=closed)
    assert (done.returncode, done.stderr) == (0, "")


def test_a_closed_standard_output_is_refused_at_once(site: Path) -> None:
    done = run("plan", site, stdout=None, preexec_fn=lambda: os.close(1))
    assert done.returncode == 2
    assert done.stderr == "dosewright: standard output is closed, so nothing can be printed\n"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device that is always full")
@pytest.mark.parametrize("form", [[], ["--json"]])
def test_a_full_disk_under_standard_output_is_named_once(form: list[str], site: Path) -> None:
    with Path("/dev/full").open("w", encoding="utf-8") as full:
        done = run("assess", site, "--dose", "caustic_soda=240", *form, stdout=full)
    assert done.returncode == 2
    assert done.stderr == "dosewright: input or output: No space left on device\n"


# -- files ----------------------------------------------------------------------------------------

HALF = """
import errno
import pandas as pd
def half(self, path, **options):
    with open(path, "w") as stream:
        stream.write("metal,half of a")
    {end}
pd.DataFrame.to_csv = half
"""
ENDS = {
    "full disk": ("raise OSError(errno.ENOSPC, 'No space left on device')", 2),
    "Ctrl-C": ("os.kill(os.getpid(), signal.SIGINT)", 4),
    "fault": ("raise RuntimeError('broken')", 1),
}


@pytest.mark.parametrize("end", ENDS)
def test_a_table_is_written_whole_or_not_at_all(end: str, site: Path, tmp_path: Path) -> None:
    folder = tmp_path / "tables"
    folder.mkdir()
    table = folder / "floors.csv"
    table.write_text("the table of last week\n", encoding="utf-8")
    action, code = ENDS[end]
    done = run("floors", site, "--csv", table, arranged=HALF.format(end=action))
    assert (done.returncode, done.stdout) == (code, "")
    assert "Traceback" not in done.stderr
    assert len(done.stderr.splitlines()) == 1
    assert [path.name for path in folder.iterdir()] == ["floors.csv"]
    assert table.read_text(encoding="utf-8") == "the table of last week\n"


def test_a_table_replaces_an_older_one_and_may_be_a_device(site: Path, tmp_path: Path) -> None:
    table = tmp_path / "floors.csv"
    table.write_text("old\n", encoding="utf-8")
    assert run("floors", site, "--csv", table).returncode == 0
    assert table.read_text(encoding="utf-8").startswith("metal,")
    shown = run("floors", site, "--csv", "/dev/stderr")
    assert shown.returncode == 0
    assert shown.stderr == table.read_text(encoding="utf-8")
