"""Quantities carry their units in their names, spelt the same way everywhere."""

from __future__ import annotations

import ast
import csv
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGES = ("chemistry", "catalogs", "optimiser")
FILES = sorted(path for package in PACKAGES for path in (ROOT / package).rglob("*.py"))
# samples of a demo site are as a laboratory sends them: their headers are not ours
TABLES = sorted(p for p in (ROOT / "catalogs").rglob("*.csv") if p.name != "samples.csv")

# Spellings of a unit that the house writes in another way, and the way it does.
WRONG_UNITS = {
    r"_mgl$|_mg_l$|_mg_per_L$|_ppm_as": "_mg_per_l",
    r"_moll$|_mol_l$|_molar$|_mol_per_L$": "_mol_per_l",
    r"_m3_d$|_m3d$|_m3_per_day$": "_m3_per_d",
    r"_kg_d$|_kgd$|_kg_per_day$": "_kg_per_d",
    r"_celsius$|_deg_c$|_temp_c$|_temperature_c$": "_degc",
    r"_per_annum$|_per_yr$|_annual$": "_per_year",
    r"_pct$|_perc$": "_percent",
}
TEMPERATURE = re.compile(r"(^|_)temperature$")
HEADER = re.compile(r"[a-z][a-z0-9_]*")


def float_fields(path: Path) -> list[tuple[str, int]]:
    """Names of class fields and arguments annotated as float."""
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.AnnAssign) and isinstance(node.target, ast.Name):
            name, annotation = node.target.id, node.annotation
        elif isinstance(node, ast.arg) and node.annotation is not None:
            name, annotation = node.arg, node.annotation
        else:
            continue
        if re.match(r"float\b", ast.unparse(annotation)):
            found.append((name, node.lineno))
    return found


def misspelt(name: str) -> list[str]:
    hints = [right for wrong, right in WRONG_UNITS.items() if re.search(wrong, name)]
    return hints + (["_degc"] if TEMPERATURE.search(name) else [])


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(ROOT)))
def test_units_are_spelt_the_house_way(path: Path) -> None:
    wrong = {f"{line}: {name}": misspelt(name) for name, line in float_fields(path)}
    assert {where: hints for where, hints in wrong.items() if hints} == {}


@pytest.mark.parametrize("name", ["dose_mgl", "flow_m3_per_day", "temperature", "water_temp_c"])
def test_a_misspelt_unit_would_be_seen(name: str) -> None:
    assert misspelt(name)


@pytest.mark.parametrize("path", TABLES, ids=lambda path: str(path.relative_to(ROOT)))
def test_headers_of_tables_are_plain_names_without_repeats(path: Path) -> None:
    lines = [line for line in path.read_text(encoding="utf-8").splitlines() if line[:1] != "#"]
    header = next(csv.reader(lines))
    assert [name for name in header if not HEADER.fullmatch(name)] == []
    assert len(set(header)) == len(header)
    assert {name: misspelt(name) for name in header if misspelt(name)} == {}
