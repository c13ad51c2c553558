"""The wheel holds the three packages with their data, and works away from the sources."""

from __future__ import annotations

import subprocess
import sys
import tomllib
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGES = ("optimiser", "chemistry", "catalogs")


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("wheel")
    subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(out)],
        cwd=ROOT, check=True, capture_output=True,
    )  # fmt: skip
    (built,) = out.glob("*.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    target = tmp_path_factory.mktemp("installed")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(target)
    return target


def names_in(wheel: Path) -> set[str]:
    with zipfile.ZipFile(wheel) as archive:
        return set(archive.namelist())


def test_the_wheel_holds_every_file_of_the_packages(wheel: Path) -> None:
    sources = {
        path.relative_to(ROOT).as_posix()
        for package in PACKAGES
        for path in (ROOT / package).rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    }
    assert sources - names_in(wheel) == set()


def test_the_wheel_holds_nothing_but_packages_and_its_own_record(wheel: Path) -> None:
    tops = {name.split("/")[0] for name in names_in(wheel)}
    assert tops == {*PACKAGES, "dosewright-0.1.0.dist-info"}


def test_the_wheel_carries_types_licence_and_data(wheel: Path) -> None:
    names = names_in(wheel)
    assert {f"{package}/py.typed" for package in PACKAGES} <= names
    assert "dosewright-0.1.0.dist-info/licenses/LICENSE" in names
    assert any(name.startswith("catalogs/data/") and name.endswith(".csv") for name in names)
    assert any(name.startswith("catalogs/sites/") and name.endswith("site.yaml") for name in names)


def test_the_licence_is_the_apache_licence() -> None:
    lines = (ROOT / "LICENSE").read_text(encoding="ascii").splitlines()
    assert [line.strip() for line in lines if line.strip()][:3] == [
        "Apache License",
        "Version 2.0, January 2004",
        "http://www.apache.org/licenses/",
    ]
    assert "   9. Accepting Warranty or Additional Liability. While redistributing" in lines
    assert lines[-1] == "   limitations under the License."


def test_pulp_stays_below_the_version_that_changes_its_interface() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert "pulp[highs]>=3.3.2,<4" in project["dependencies"]
    assert project["requires-python"] == ">=3.11"


def test_an_installed_copy_reads_its_own_catalogs(installed: Path, tmp_path: Path) -> None:
    site = installed / "catalogs" / "sites" / "plating_rinse" / "site.yaml"
    done = subprocess.run(
        [sys.executable, "-c", PROBE, str(installed), "check", str(site)],
        cwd=tmp_path, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.stderr == ""
    assert done.returncode == 0
    assert "no problem found" in done.stdout


PROBE = """\
import sys
sys.path.insert(0, sys.argv.pop(1))
import catalogs, chemistry, optimiser
from optimiser.cli import main
for package in (catalogs, chemistry, optimiser):
    assert package.__file__.startswith(sys.path[0]), package.__file__
sys.exit(main(sys.argv[1:]))
"""
