"""README.md is true: its commands run, its session and its examples are what the program does."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
from functools import lru_cache
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
INSTALL = "python3 -m venv .venv && .venv/bin/python -m pip install "
NUMBER = re.compile(r"-?\d[\d,]*(?:\.\d+)?(?:e[-+]\d+)?")


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)


def commands() -> list[str]:
    return [line.strip() for line in README.splitlines() if line.startswith("python3 -m venv")]


@lru_cache
def run(*arguments: str) -> subprocess.CompletedProcess[str]:
    """Run the command line of this checkout, as the installed `dosewright` would."""
    return subprocess.run(
        [sys.executable, "-m", "optimiser", *arguments],
        cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False,
    )  # fmt: skip


def test_the_first_paragraph_states_the_job() -> None:
    first = next(part for part in README.split("\n\n") if not part.startswith("#"))
    for word in ("precipitation reagents", "doses", "supplier offers", "limit", "least", "cost"):
        assert word in first.replace("\n", " ")


def test_two_commands_of_one_line_install_and_plan_and_test() -> None:
    plan, check = commands()
    assert plan.startswith(INSTALL)
    assert check.startswith(INSTALL)
    site = re.search(r"&& \.venv/bin/dosewright plan (\S+)$", plan)
    assert site is not None
    assert (ROOT / site.group(1)).is_file()
    assert check.endswith("'.[dev]' && .venv/bin/python -m tests")


def test_continuous_integration_runs_the_commands_of_this_page() -> None:
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    assert "grep -E '^ *(\\$ )?python3 -m venv ' README.md" in script
    assert os.access(ROOT / ".ci" / "run", os.X_OK)


def test_releases_and_system_packages_are_named() -> None:
    for word in ("Debian 12", "Ubuntu 24.04", "python3-venv", "git"):
        assert word in README


def sessions() -> list[tuple[list[str], list[str]]]:
    """Commands after `$ dosewright` in console blocks, with the lines shown under them."""
    found = []
    for block in blocks("console"):
        for part in re.split(r"^\$ dosewright ", block, flags=re.MULTILINE)[1:]:
            command, _, shown = part.partition("\n")
            found.append((command.split(), shown.splitlines()))
    return found


@pytest.mark.parametrize("session", sessions(), ids=lambda session: " ".join(session[0])[:50])
def test_a_session_shows_what_the_program_prints(session: tuple[list[str], list[str]]) -> None:
    """Words must agree exactly, numbers to 2 %: other machines round the last digits elsewhere."""
    command, shown = session
    done = run(*command)
    assert done.returncode in (0, 3), done.stderr
    printed = [words_of(line) for line in done.stdout.splitlines()]
    position = 0
    for line in shown:
        if line.strip() in ("", "..."):
            continue
        words = words_of(line)
        assert words in printed[position:], f"not printed (in this order): {line}"
        position = printed.index(words, position) + 1
        actual = done.stdout.splitlines()[position - 1]
        assert numbers_of(line) == pytest.approx(numbers_of(actual), rel=0.02, abs=0.051), actual


def words_of(line: str) -> list[str]:
    return re.sub(r"[-]{2,}", "--", NUMBER.sub("#", line)).split()


def numbers_of(line: str) -> list[float]:
    return [float(text.replace(",", "")) for text in NUMBER.findall(line)]


def test_there_is_a_session_with_a_plan() -> None:
    assert any(command[0] == "plan" for command, _ in sessions())


def test_the_smallest_site_of_the_page_is_a_site(tmp_path: Path) -> None:
    (site,) = blocks("yaml")
    (offers,) = blocks("csv")
    (tmp_path / "site.yaml").write_text(site, encoding="utf-8")
    (tmp_path / "offers.csv").write_text(offers, encoding="utf-8")
    done = run("check", str(tmp_path / "site.yaml"))
    assert done.returncode == 0, done.stderr
    planned = run("plan", str(tmp_path / "site.yaml"), "--json")
    assert planned.returncode == 0, planned.stdout + planned.stderr
    assert json.loads(planned.stdout)["compliant"] is True


def test_the_python_of_the_page_runs() -> None:
    (code,) = blocks("python")
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert done.stdout


@pytest.mark.parametrize(
    "name",
    ["plan", "assess", "explain", "tradeoff", "curves", "floors", "orders", "jar", "check", "new"],
)
def test_every_command_is_on_the_page(name: str) -> None:
    assert re.search(rf"`dosewright {name} ", README)


def test_every_link_into_the_house_leads_somewhere() -> None:
    targets = re.findall(r"\]\((?!https?://)([^)#]+)\)", README)
    assert targets
    assert [target for target in targets if not (ROOT / target).exists()] == []


def test_the_guide_names_every_module() -> None:
    guide = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    modules = {
        path.stem
        for package in ("chemistry", "catalogs", "optimiser")
        for path in (ROOT / package).glob("*.py")
        if not path.stem.startswith("__")
    }
    assert sorted(name for name in modules if f"`{name}`" not in guide) == []
