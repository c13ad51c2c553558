"""The starter site loads, means what its comments say, and is never written over anything."""

from __future__ import annotations

import datetime
import re
from pathlib import Path

import pytest

from catalogs.entries import parse_number
from chemistry.feed import feed_water
from optimiser import plan, starter
from optimiser.site_reader import load_site
from optimiser.starter import starter_texts, write_starter


def test_the_starter_loads_without_a_problem(tmp_path: Path) -> None:
    site_file, book = write_starter(tmp_path / "plant")
    assert (site_file, book) == (tmp_path / "plant/site.yaml", tmp_path / "plant/offers.csv")
    site = load_site(site_file, on_day=datetime.date(2026, 12, 1))
    assert not [note for note in site.notes if "valid until" in note]
    assert len(site.offers) == 8
    assert all(sum(offer.reagent == name for offer in site.offers) >= 2 for name in site.reagents)


def test_the_starter_is_a_sensible_water(tmp_path: Path) -> None:
    site = load_site(write_starter(tmp_path / "plant")[0])
    water = feed_water(site.analysis, site.system)
    assert abs(water.charge_balance_error_percent) < 5.0
    assert water.ionic_strength < 0.1
    assert {"Cu", "Ni", "Zn"} <= set(water.dissolved_mg_per_l)
    above = [
        limit.parameter
        for limit in site.limits
        if limit.parameter in water.dissolved_mg_per_l
        and water.dissolved_mg_per_l[limit.parameter] > (limit.monthly_mg_per_l or 1e9)
    ]
    assert {"Cu", "Ni", "Zn"} <= set(above)


def test_every_optional_key_that_is_commented_out_can_be_switched_on(tmp_path: Path) -> None:
    text = starter_texts()["site.yaml"]
    keys = re.findall(r"^ *# (\w+): .*# optional", text, flags=re.MULTILINE)
    assert len(keys) >= 9
    (tmp_path / "offers.csv").write_text(starter_texts()["offers.csv"])
    for key in keys:
        if key in ("acidity_meq_per_l", "titration", "alkalinity"):
            continue  # another water: these would contradict the pH of the example
        switched = re.sub(rf"^( *)# ({key}: )", r"\1\2", text, flags=re.MULTILINE)
        assert switched != text
        (tmp_path / "site.yaml").write_text(switched)
        load_site(tmp_path / "site.yaml")


def test_the_comments_of_the_starter_mark_optional_keys_truly(tmp_path: Path) -> None:
    text = starter_texts()["site.yaml"]
    lone = [
        line
        for line in text.split("\n")
        if "# optional" in line
        and not line.lstrip().startswith("#")
        and parse_number(line.split(":")[1].split("#")[0].strip()) is not None
    ]
    assert len(lone) >= 4
    (tmp_path / "offers.csv").write_text(starter_texts()["offers.csv"])
    for line in lone:
        (tmp_path / "site.yaml").write_text(text.replace(f"{line}\n", ""))
        load_site(tmp_path / "site.yaml")


def test_an_existing_folder_keeps_its_other_files(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    write_starter(tmp_path)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["notes.txt", "offers.csv", "site.yaml"]
    assert (tmp_path / "notes.txt").read_text() == "mine"


@pytest.mark.parametrize("name", ["site.yaml", "offers.csv"])
def test_nothing_is_overwritten(tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_text("mine")
    with pytest.raises(FileExistsError) as caught:
        write_starter(tmp_path)
    assert caught.value.strerror == ("is already there; nothing was written. Choose another folder")
    assert caught.value.filename == str(tmp_path / name)
    assert [(p.name, p.read_text()) for p in tmp_path.iterdir()] == [(name, "mine")]


def test_a_file_in_place_of_the_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "plant").write_text("mine")
    with pytest.raises(OSError, match="is already there"):
        write_starter(tmp_path / "plant")
    assert (tmp_path / "plant").read_text() == "mine"


@pytest.mark.parametrize("exists", [True, False])
def test_a_failure_half_way_leaves_nothing_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, exists: bool
) -> None:
    target = tmp_path / "plant"
    if exists:
        target.mkdir()
    texts = {**starter_texts(), "no/such/folder.csv": "x"}
    monkeypatch.setattr(starter, "starter_texts", lambda: texts)
    with pytest.raises(FileNotFoundError):
        write_starter(target)
    assert list(tmp_path.rglob("*")) == ([target] if exists else [])


def test_a_missing_parent_is_an_error_and_not_made(tmp_path: Path) -> None:
    with pytest.raises(FileNotFoundError):
        write_starter(tmp_path / "a" / "b")
    assert list(tmp_path.iterdir()) == []


def test_two_starters_are_the_same_bytes(tmp_path: Path) -> None:
    first, second = write_starter(tmp_path / "a"), write_starter(tmp_path / "b")
    assert [p.read_bytes() for p in first] == [p.read_bytes() for p in second]


@pytest.mark.slow
def test_the_starter_has_a_plan_that_meets_every_limit(tmp_path: Path) -> None:
    found = plan(load_site(write_starter(tmp_path / "plant")[0]))
    assert found.cost["total"] > 0.0
    assert found.limits["meets"].all()
    assert len(found.runners_up) >= 2
