"""A price book may be a workbook: nothing is lost in it, and every slip is named by its cell."""

from __future__ import annotations

import datetime
import shutil
import subprocess
from dataclasses import replace
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from openpyxl.worksheet.worksheet import Worksheet

from catalogs.problems import InputFileError
from catalogs.reagents import load_reagents
from optimiser.book_columns import CHOICE, DAY, NUMBER, TEXT, book_columns
from optimiser.book_sheets import KEY_ROW, workbook_bytes
from optimiser.book_writer import BookRows, example_rows, load_rows, write_book
from optimiser.cli import main
from optimiser.offers_reader import OFFER_COLUMNS, TERM_COLUMNS, load_offers
from optimiser.site_reader import load_site
from optimiser.starter import write_starter

PLAIN = {
    "offer": "A", "supplier": "Larkspur Supplies", "reagent": "caustic_soda", "product": "lye",
    "form": "solution", "strength_percent": "50", "density_kg_per_l": "1.525", "price": "300.125",
    "price_per": "t", "price_for": "product",
}  # fmt: skip
EVERYTHING = (
    {
        **PLAIN, "offer": "001", "note": "tank, \"north\"; 5 °C", "strength_as": "Na2O",
        "strength_percent": "38.7", "tested_strength_percent": "38.2",
        "penalty_percent_per_point": "1.5", "price_for": "active", "tier_kind": "incremental",
        "tier_per": "year", "tier_from_t": "0", "tier_to_t": "12.5", "order_size_t": "24",
        "least_order_t": "20", "least_order_per": "order", "freight_per_t": "0.1",
        "freight_per_drop": "310", "freight_free_from_t": "25", "take_or_pay_t": "40",
        "most_t_per_year": "900", "least_share_percent": "10", "most_share_percent": "66.7",
        "rebate_percent": "2.5", "rebate_above_t": "30", "rebate_on": "excess",
        "mobilisation_fee": "1800", "term_years": "2.5", "index_name": "soda index",
        "index_base": "112.53", "index_now": "118.1", "index_pass_through_percent": "60",
        "index_most_fall_percent": "10", "index_most_rise_percent": "15", "currency": "USD",
        "currency_rate": "0.91237", "currency_rate_date": "2026-11-30", "framework": "F",
        "framework_fee_per_year": "99", "framework_most_t": "1200",
        "framework_rebate_percent": "1", "framework_rebate_above_t": "100",
        "lead_time_d": "10", "shelf_life_d": "60", "deposit": "40 an IBC", "payment": "30 days",
        "valid_from": "2026-01-01", "valid_until": "2030-12-31",
    },
    {"offer": "001", "price": "288", "tier_from_t": "12.5", "note": "second slice"},
    {
        **{key: value for key, value in PLAIN.items() if key != "strength_percent"},
        "offer": "B", "supplier": "Moorgate Chemie", "strength_g_per_l": "760.5",
        "pack_l": "1000", "price_per": "pack", "bundle": "two", "signed": "yes", "left_t": "80",
        "ends_on": "2029-12-31", "orders_per_year": "4",
    },
    {
        **PLAIN, "offer": "C", "supplier": "Moorgate Chemie", "reagent": "soda_ash",
        "form": "powder", "strength_percent": "99.2", "bundle": "two", "pack_kg": "25",
    },
)  # fmt: skip


def write(path: Path, *rows: dict[str, str]) -> Path:
    path.write_bytes(workbook_bytes(rows))
    return path


def edited(path: Path, cells: dict[str, Any], *, merge: str = "") -> Path:
    """Set cells of the sheet of offers by the name of their column and their row."""
    book = openpyxl.load_workbook(path)
    sheet = book["offers"]
    letters = {cell.value: cell.column_letter for cell in sheet[KEY_ROW] if cell.value}
    for place, value in cells.items():
        key, _, row = place.partition(":")
        sheet[f"{letters[key]}{row}"] = value
    if merge:
        sheet.merge_cells(merge)
    book.save(path)
    return path


def told(path: Path) -> list[str]:
    with pytest.raises(InputFileError) as caught:
        load_offers(path, currency="EUR")
    return [f"{p.field}: {p.found} / {p.expected} / {p.remedy}" for p in caught.value.problems]


def offers_sheet(path: Path) -> Worksheet:
    return openpyxl.load_workbook(path)["offers"]


# --- nothing is lost -----------------------------------------------------------------------------


def test_the_sheet_has_every_column_of_a_price_book() -> None:
    assert sorted(book_columns()) == sorted((*OFFER_COLUMNS, *TERM_COLUMNS))
    assert {key for row in EVERYTHING for key in row} == set(book_columns())


def test_a_column_says_truly_what_kind_of_value_it_takes(tmp_path: Path) -> None:
    """A word that is no number, no date and no choice is refused by all columns but texts."""
    keys = list(book_columns())
    rows = [{**PLAIN, "offer": f"K{k}", "least_order_t": "1", "least_order_per": "year",
             "currency": "EUR", key: "own"} for k, key in enumerate(keys)]  # fmt: skip
    lines = told(write(tmp_path / "b.xlsx", *rows))
    for number, key in enumerate(keys, start=KEY_ROW + 1):
        mine = [x.split(" / ")[1] for x in lines if f"{number} ({key}): 'own'" in x]
        kind = book_columns()[key].kind
        if kind == TEXT or key == "form":
            assert not [text for text in mine if text.startswith(("a number", "a date", "one of"))]
        else:
            (expected,) = mine
            begin = {NUMBER: "a number", DAY: "a date", CHOICE: "one of the "}[kind]
            assert expected.startswith(begin), key


def test_what_is_written_is_read_back(tmp_path: Path) -> None:
    source = tmp_path / "offers.csv"
    write_book(source, BookRows(EVERYTHING))
    write_book(tmp_path / "offers.xlsx", load_rows(source, currency="EUR"))
    offers = load_offers(source, currency="EUR")
    assert [offer.offer for offer in offers] == ["001", "B", "C"]
    assert offers[0].tiers[0].price == 288.0
    assert load_offers(tmp_path / "offers.xlsx", currency="EUR") == offers
    assert load_rows(tmp_path / "offers.xlsx", currency="EUR").rows == EVERYTHING


def test_a_spreadsheet_program_loses_nothing(tmp_path: Path) -> None:
    program = shutil.which("soffice") or shutil.which("libreoffice")
    if program is None:
        pytest.skip("no LibreOffice here to convert the workbook with")
    path, out = write(tmp_path / "offers.xlsx", *EVERYTHING), tmp_path / "out"
    subprocess.run(
        [program, f"-env:UserInstallation=file://{tmp_path}/profile", "--headless", "--convert-to",
         "xlsx", "--outdir", str(out), str(path)],
        check=True, capture_output=True, timeout=300,
    )  # fmt: skip
    assert load_rows(out / "offers.xlsx", currency="EUR").rows == EVERYTHING
    again = load_offers(out / "offers.xlsx", currency="EUR")
    assert again == load_offers(path, currency="EUR")
    kept = offers_sheet(out / "offers.xlsx").data_validations.dataValidation
    assert sum(rule.type == "list" for rule in kept) == 10


def test_numbers_and_dates_are_numbers_and_dates(tmp_path: Path) -> None:
    sheet = offers_sheet(write(tmp_path / "b.xlsx", *EVERYTHING))
    by_key = {cell.value: sheet.cell(KEY_ROW + 1, cell.column) for cell in sheet[KEY_ROW]}
    assert (by_key["price"].value, by_key["price"].data_type) == (300.125, "n")
    assert by_key["currency_rate"].number_format == "#,##0.0000"
    assert by_key["valid_until"].value == datetime.datetime(2030, 12, 31)
    assert by_key["valid_until"].number_format == "yyyy-mm-dd"
    assert (by_key["offer"].value, by_key["offer"].data_type) == ("001", "s")


@pytest.mark.parametrize("text", ["=1+1", "+44 20", "-tank", "@home", '=HYPERLINK("x")'])
def test_no_text_becomes_a_formula(tmp_path: Path, text: str) -> None:
    path = write(tmp_path / "b.xlsx", {**PLAIN, "note": text, "supplier": text})
    sheet = offers_sheet(path)
    found = [cell for row in sheet.iter_rows() for cell in row if cell.value == text]
    assert [cell.data_type for cell in found] == ["s", "s"]
    assert all(cell.quotePrefix for cell in found)
    assert any(line.startswith(f"offers!B{KEY_ROW + 1} (supplier)") for line in told(path))


# --- for people ----------------------------------------------------------------------------------


def test_choices_have_drop_downs_and_the_header_stays_in_sight(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN)
    sheet = offers_sheet(path)
    assert sheet.freeze_panes == f"C{KEY_ROW + 1}"
    letters = {cell.value: cell.column_letter for cell in sheet[KEY_ROW]}
    lists = {
        str(rule.sqref).split(":")[0]: rule.formula1
        for rule in sheet.data_validations.dataValidation
        if rule.type == "list"
    }
    assert lists[f"{letters['price_for']}4"] == '"product,active"'
    assert lists[f"{letters['tier_kind']}4"] == '"all_units,incremental"'
    assert lists[f"{letters['least_order_per']}4"] == lists[f"{letters['tier_per']}4"]
    ids = openpyxl.load_workbook(path)["reagents"]
    count = len(load_reagents())
    assert lists[f"{letters['reagent']}4"] == f"reagents!$A$2:$A${count + 1}"
    assert [row[0].value for row in ids.iter_rows(min_row=2)] == list(load_reagents())


def test_titles_carry_units_and_a_sheet_tells_meaning_and_costing(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN)
    sheet = offers_sheet(path)
    titles = {sheet.cell(KEY_ROW, c.column).value: c.value for c in sheet[KEY_ROW - 1]}
    assert titles["freight_per_drop"] == "Freight\n[money/delivery]"
    told_of = openpyxl.load_workbook(path)["columns"]
    rows = {str(row[0].value).removesuffix(" *"): row for row in told_of.iter_rows(min_row=2)}
    assert set(rows) == set(book_columns())
    assert all(row[4].value and row[5].value for row in rows.values())


def test_the_examples_are_sound_and_show_what_the_starter_does_not(tmp_path: Path) -> None:
    write_book(tmp_path / "b.csv", example_rows())
    offers = load_offers(tmp_path / "b.csv", currency="EUR")
    assert any(offer.tiers for offer in offers)
    assert any(offer.take_or_pay_t for offer in offers)
    assert any(offer.index for offer in offers)


def test_comments_of_a_csv_book_are_kept_on_the_guide(tmp_path: Path) -> None:
    write_book(tmp_path / "b.csv", BookRows((PLAIN,), ("bids of the May round",)))
    write_book(tmp_path / "b.xlsx", load_rows(tmp_path / "b.csv"))
    guide = openpyxl.load_workbook(tmp_path / "b.xlsx")["guide"]
    assert "bids of the May round" in [row[0].value for row in guide.iter_rows()]


# --- slips are named by their cell ---------------------------------------------------------------


def test_every_slip_is_told_at_once_by_sheet_and_cell(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN, {**PLAIN, "offer": "B"}, {**PLAIN, "offer": "B"})
    edited(path, {"price:4": "410,50", "reagent:5": "caustic", "density_kg_per_l:6": None})
    lines = told(path)
    assert lines[0].startswith("offers!L4 (price): '410,50' / a number of 0 or more")
    assert "410.50" in lines[0]
    assert lines[1].startswith("offers!C5 (reagent): 'caustic' / one of the reagents / Did you")
    assert any(line.startswith("offers!F6 (density_kg_per_l): nothing") for line in lines)
    assert any(line.startswith("offers!A6 (offer): 'B' twice") for line in lines)
    with pytest.raises(InputFileError) as caught:
        load_offers(path)
    assert str(caught.value).startswith(f"{path}:4: offers!L4 (price): found '410,50'")


def test_gaps_between_tiers_are_told_by_cell(tmp_path: Path) -> None:
    first = {**PLAIN, "tier_kind": "all_units", "tier_per": "year", "tier_to_t": "20"}
    path = write(tmp_path / "b.xlsx", first, {"offer": "A", "tier_from_t": "30", "price": "280"})
    assert told(path) == [
        "offers!S5 (tier_from_t): a gap: 30 after a tier that ends at 20 / tiers that join / "
        "Begin this tier at 20, or end the one before at 30."
    ]


def test_cells_without_a_value_are_told_once_and_not_as_something_else(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN, {**PLAIN, "offer": "B"})
    edited(path, {"price:4": "=B1*2", "freight_per_t:4": "#REF!"}, merge="B4:B5")
    lines = told(path)
    assert len(lines) == 4
    assert sum("a formula without a stored value / a value" in line for line in lines) == 1
    assert sum("#REF! / a value" in line for line in lines) == 1
    assert sum("merged with its neighbours" in line for line in lines) == 2


def test_a_percentage_is_read_as_it_is_shown(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", {**PLAIN, "rebate_above_t": "5", "rebate_on": "all"})
    edited(path, {"rebate_percent:4": 0.025})
    book = openpyxl.load_workbook(path)
    cell = next(c for row in book["offers"].iter_rows() for c in row if c.value == 0.025)
    cell.number_format = "0.0%"
    book.save(path)
    rebate = load_offers(path)[0].rebate
    assert rebate is not None
    assert rebate.fraction == pytest.approx(0.025, rel=1e-12)


def test_unknown_and_missing_columns_are_told_by_cell(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN)
    edited(path, {"supplier:3": "suplier"})
    lines = told(path)
    assert lines[0].startswith("offers!B3: the column 'suplier' / only known columns / Did you mean"
                               " `supplier`?")  # fmt: skip
    assert lines[1].startswith("sheet offers: no column 'supplier'")


def test_values_beside_the_table_are_not_lost_silently(tmp_path: Path) -> None:
    path = write(tmp_path / "b.xlsx", PLAIN)
    book = openpyxl.load_workbook(path)
    book["offers"].cell(4, len(book_columns()) + 2).value = "call them"
    book.save(path)
    assert any("'call them' / nothing beside the table" in line for line in told(path))


def test_rows_of_comment_and_another_name_of_the_only_sheet_do(tmp_path: Path) -> None:
    book = openpyxl.Workbook()
    sheet = book.active
    assert sheet is not None
    sheet.append(["Bids of the May round (invented)"])
    sheet.append(list(PLAIN))
    sheet.append(["# still to come: Moorgate"])
    sheet.append([float(v) if v.replace(".", "").isdigit() else v for v in PLAIN.values()])
    for key in ("freight_per_t", "least_order_t", "valid_until", "note"):
        sheet.cell(2, sheet.max_column + 1).value = key
    book.save(tmp_path / "b.xlsx")
    (offer,) = load_offers(tmp_path / "b.xlsx")
    assert (offer.offer, offer.price) == ("A", 300.125)


def test_a_workbook_without_the_names_of_columns_is_refused(tmp_path: Path) -> None:
    book = openpyxl.Workbook()
    book.create_sheet("offers").append(["nothing", "here"])
    book.save(tmp_path / "b.xlsx")
    (line,) = told(tmp_path / "b.xlsx")
    assert line.startswith("sheet offers: no row with the names of the columns")


# --- files ---------------------------------------------------------------------------------------


def test_a_book_is_not_written_over_unless_forced(tmp_path: Path) -> None:
    path = tmp_path / "b.xlsx"
    path.write_text("mine")
    with pytest.raises(FileExistsError):
        write_book(path, BookRows((PLAIN,)))
    assert path.read_text() == "mine"
    write_book(path, BookRows((PLAIN,)), force=True)
    assert load_offers(path)[0].offer == "A"
    assert [item.name for item in tmp_path.iterdir()] == ["b.xlsx"]


def test_a_failure_half_way_leaves_nothing(tmp_path: Path, monkeypatch: Any) -> None:
    def fail(self: Path, target: Path) -> None:
        raise PermissionError(1, "no", str(target))

    monkeypatch.setattr(Path, "replace", fail)
    with pytest.raises(PermissionError):
        write_book(tmp_path / "b.xlsx", BookRows((PLAIN,)))
    assert list(tmp_path.iterdir()) == []


def test_the_starter_with_a_workbook_is_the_same_site(tmp_path: Path) -> None:
    site_file, book = write_starter(tmp_path / "sheet", workbook=True)
    assert book.name == "offers.xlsx"
    plain = load_site(write_starter(tmp_path / "text")[0])
    sheet = load_site(site_file)
    assert sheet.offers == plain.offers
    assert replace(sheet, path=plain.path).limits == plain.limits


def test_a_book_is_converted_both_ways(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site = str(write_starter(tmp_path / "plant")[0])
    target = tmp_path / "book.xlsx"
    assert main(["offers", site, "--write", str(target)]) == 0
    assert capsys.readouterr().out == f"{target}\n"
    assert load_offers(target) == load_offers(tmp_path / "plant" / "offers.csv")
    assert main(["offers", site, "--write", str(target)]) == 2
    assert "--force" in capsys.readouterr().err
    assert main(["offers", site, "--write", str(tmp_path / "book.csv"), "--force"]) == 0
    assert load_offers(tmp_path / "book.csv") == load_offers(target)


def test_new_writes_a_workbook_when_asked(tmp_path: Path) -> None:
    assert main(["new", str(tmp_path / "plant"), "--xlsx"]) == 0
    assert sorted(p.name for p in (tmp_path / "plant").iterdir()) == ["offers.xlsx", "site.yaml"]
    assert len(load_site(tmp_path / "plant" / "site.yaml").offers) == 8
