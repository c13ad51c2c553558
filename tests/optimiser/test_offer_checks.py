"""Offers as files and frames price alike, and what is wrong in a frame is named."""

from __future__ import annotations

import math
from pathlib import Path

import pandas as pd
import pytest

from catalogs.problems import InputFileError
from optimiser.purchasing import purchase

BOOK = """\
offer,supplier,reagent,product,form,strength_percent,density_kg_per_l,price,price_per,freight_per_t,least_order_t,valid_until,note
S1,Larkspur Supplies,caustic_soda,lye 50,solution,50,1.525,420,t,35,20,,
S2,Tamarisk Trading,caustic_soda,lye 30,solution,30,1.33,0.41,L,50,,,in drums
"""


def test_a_price_book_is_read_from_its_path(tmp_path: Path) -> None:
    path = tmp_path / "offers.csv"
    path.write_text(BOOK, encoding="utf-8")
    demand = {"caustic_soda": 12000.0}
    from_file = purchase(demand, path)
    assert from_file.cost["goods"] == pytest.approx(24.0 * 420.0)
    assert purchase(demand, str(path)).cost == from_file.cost


@pytest.mark.parametrize("strength", ["strength_percent", "strength_fraction"])
def test_a_frame_prices_like_the_file_it_came_from(tmp_path: Path, strength: str) -> None:
    path = tmp_path / "offers.csv"
    path.write_text(BOOK, encoding="utf-8")
    frame = pd.read_csv(path)
    if strength == "strength_fraction":
        frame[strength] = frame.pop("strength_percent") / 100.0
    for kg in (600.0, 12000.0):
        demand = {"caustic_soda": kg}
        assert purchase(demand, frame).cost == pytest.approx(purchase(demand, path).cost)


def test_a_frame_may_leave_out_what_has_a_default() -> None:
    frame = pd.DataFrame(
        {"offer": ["a"], "reagent": ["soda_ash"], "strength_percent": [99], "price": [300],
         "price_per": ["t"]}, index=[17],
    )  # fmt: skip
    assert purchase({"soda_ash": 990.0}, frame).cost["total"] == pytest.approx(300.0)


def test_what_is_wrong_in_a_frame_is_named_by_row_and_column() -> None:
    frame = pd.DataFrame(
        {"offer": ["a", None], "reagent": ["soda_ash"] * 2, "strength_percent": [99, 0],
         "price": ["410,50", 300], "price_per": ["t", "t"]},
    )  # fmt: skip
    with pytest.raises(InputFileError) as caught:
        purchase({"soda_ash": 990.0}, frame)
    assert str(caught.value) == (
        "offers frame:1: price: found '410,50', expected a number\n"
        "    Use a decimal point, no unit and no thousands separator."
    )
    frame["price"] = [410.5, math.nan]
    with pytest.raises(InputFileError) as caught:
        purchase({"soda_ash": 990.0}, frame)
    fields = [problem.field for problem in caught.value.problems]
    assert fields == ["offer", "strength_percent", "price"]


def test_a_frame_with_other_columns_is_refused_with_a_suggestion() -> None:
    frame = pd.DataFrame({"offer": ["a"], "reagent": ["soda_ash"], "prise": [300.0]})
    with pytest.raises(InputFileError) as caught:
        purchase({"soda_ash": 990.0}, frame)
    text = str(caught.value)
    assert "offers frame:1: prise: found an unknown column" in text
    assert "Did you mean `price`?" in text
    assert "price: found no such column" in text
    assert "price_per: found no such column" in text
    assert "strength_percent: found none or two columns of strength" in text
