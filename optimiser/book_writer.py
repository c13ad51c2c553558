"""Price books written as workbooks for buyers: drop-downs, formats, and what each column means.

Owns the look of the sheets and the conversion between CSV and workbook; what is written are the
cells of a book as they stand, so that nothing of it is lost. Texts are never written as formulas.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path

from catalogs.positions import Scalar, load_yaml
from catalogs.problems import ProblemLog
from catalogs.reagents import load_reagents
from optimiser.offer_rows import OFFER_COLUMNS, TERM_COLUMNS
from optimiser.offers_reader import book_entries, offers_of_rows
from optimiser.whole_files import write_whole

Row = Mapping[str, str]
"""Texts of the cells of one row that are not empty, by column."""


@dataclass(frozen=True, slots=True)
class BookRows:
    """The cells of a price book and the lines of comment that stood in its file."""

    rows: tuple[Row, ...]
    comments: tuple[str, ...] = ()


def load_rows(path: str | Path, *, currency: str = "") -> BookRows:
    """Read the cells of a sound price book.

    Parameters
    ----------
    path
        A CSV file or a workbook.
    currency
        As for `optimiser.offers_reader.load_offers`.

    Raises
    ------
    InputFileError
        Everything that is wrong in the file, all at once.
    """
    file, log = Path(path), ProblemLog()
    entries = list(book_entries(file, log))
    rows = tuple(_cells({key: node for key, node, _ in entry.pairs()}) for entry in entries)
    offers_of_rows(entries, load_reagents(), log, currency=currency)
    log.raise_if_any()
    comments: list[str] = []
    if file.suffix.lower() == ".csv":
        lines = file.read_text(encoding="utf-8-sig").splitlines()
        comments = [line.lstrip("# ").rstrip() for line in lines if line.lstrip().startswith("#")]
    return BookRows(rows, tuple(comments))


def _cells(nodes: Mapping[str, object]) -> Row:
    return _completed({k: n.text for k, n in nodes.items() if isinstance(n, Scalar) and n.text})


def _completed(row: dict[str, str]) -> Row:
    """The cells of a row; what a book without a column takes for granted is written out."""
    if "reagent" in row:
        row.setdefault("price_for", "product")
        if "least_order_t" in row:
            row.setdefault("least_order_per", "order")
    return row


def example_rows() -> BookRows:
    """Rows that show what terms look like."""
    data = files("optimiser") / "book_sheet_data" / "examples.csv"
    return rows_of_text(data.read_text(encoding="utf-8"))


def rows_of_text(text: str) -> BookRows:
    """Cells of a sound price book that is given as comma-separated text."""
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    rows = csv.DictReader(io.StringIO("\n".join(lines)), strict=True)
    return BookRows(tuple(_completed({k: cell for k, cell in r.items() if cell}) for r in rows))


def book_of_site(site_file: Path) -> Path:
    """Path of the price book that a sound site file names."""
    table = load_yaml(site_file, ProblemLog())
    node = table.nodes.get("offers") if table is not None else None
    return site_file.parent / (node.text if isinstance(node, Scalar) else "")


def csv_text(book: BookRows) -> str:
    """A price book as comma-separated text, with the columns that some row fills."""
    used = {key for row in book.rows for key in row}
    columns = [*OFFER_COLUMNS, *(key for key in TERM_COLUMNS if key in used)]
    stream = io.StringIO(newline="")
    for comment in book.comments:
        stream.write(f"# {comment}\n")
    writer = csv.DictWriter(stream, columns, restval="", lineterminator="\n")
    writer.writeheader()
    writer.writerows(book.rows)
    return stream.getvalue()


def write_book(path: str | Path, book: BookRows, *, force: bool = False) -> None:
    """Write a price book, as a workbook or as CSV by the ending of the file's name.

    Parameters
    ----------
    path
        The file to write, ``.xlsx`` or ``.csv``; whole or not at all.
    book
        What `load_rows` read.
    force
        Replace a file that is there.

    Raises
    ------
    FileExistsError
        The file is there and ``force`` is not given.
    ValueError
        The name has another ending.
    """
    target = Path(path)
    ending = target.suffix.lower()
    if ending == ".csv":
        data = csv_text(book).encode()
    elif ending == ".xlsx":
        from optimiser.book_sheets import workbook_bytes

        data = workbook_bytes(book.rows, example_rows().rows, book.comments)
    else:
        raise ValueError(f"{target.name}: a price book is written as .xlsx or .csv")
    write_whole(target, data, force=force)
