"""Shipped files are found in the package, and a damaged one is refused."""

from __future__ import annotations

from importlib.resources import files

import pytest

import catalogs
from catalogs import packaged
from catalogs.constants import load_system


def test_a_missing_file_is_named() -> None:
    with pytest.raises(packaged.CatalogDataError) as error:
        packaged.read_text("none.csv")
    assert str(error.value) == "the data file none.csv is missing from this installation"


def test_comment_lines_are_no_rows(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(packaged, "read_text", lambda _: "# a\n# b\nx,y\n1,2\n")
    assert packaged.read_rows("any.csv") == [{"x": "1", "y": "2"}]


def test_a_row_of_the_wrong_width_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(packaged, "read_text", lambda _: "x,y\n1,2,3\n")
    with pytest.raises(packaged.CatalogDataError, match="3 cells, 2 columns"):
        packaged.read_rows("any.csv")


def test_a_tree_that_is_a_list_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(packaged, "read_text", lambda _: "- 1\n")
    with pytest.raises(packaged.CatalogDataError, match="expected a table"):
        packaged.read_tree("any.yaml")


def test_an_empty_cell_is_no_number() -> None:
    assert packaged.number_or_none(" ") is None
    assert packaged.number_or_none("-1.5") == -1.5


def test_every_shipped_table_is_ascii_and_ends_with_a_newline() -> None:
    names = [entry.name for entry in (files("catalogs") / "data").iterdir() if entry.is_file()]
    assert len([name for name in names if name.endswith((".csv", ".yaml"))]) >= 10
    for name in names:
        text = packaged.read_text(name)
        assert text.isascii(), name
        assert text.endswith("\n"), name


def test_the_package_hands_out_its_loaders() -> None:
    assert catalogs.load_system is load_system
    assert set(catalogs.__all__) <= set(dir(catalogs))
    with pytest.raises(AttributeError, match="no attribute 'load_nothing'"):
        _ = catalogs.load_nothing
