"""The starter site: a commented example that users replace line by line by their own plant.

Owns writing it, whole or not at all and never over anything; the example itself lies in
`starter_site`.
"""

from __future__ import annotations

import errno
import shutil
import tempfile
from importlib.resources import files
from pathlib import Path

STARTER_FILES = ("site.yaml", "offers.csv")


def starter_texts() -> dict[str, str]:
    """Return the files of the starter site by name."""
    folder = files("optimiser") / "starter_site"
    return {name: (folder / name).read_text(encoding="utf-8") for name in STARTER_FILES}


def _with_workbook(texts: dict[str, str]) -> dict[str, bytes]:
    """The starter's files with its price book as a workbook."""
    from optimiser.book_sheets import workbook_bytes
    from optimiser.book_writer import example_rows, rows_of_text

    site, book = (texts[name] for name in STARTER_FILES)
    rows = rows_of_text(book).rows
    return {
        "site.yaml": site.replace("offers: offers.csv ", "offers: offers.xlsx").encode(),
        "offers.xlsx": workbook_bytes(rows, example_rows().rows),
    }


def write_starter(directory: str | Path, *, workbook: bool = False) -> tuple[Path, ...]:
    """Write the starter site and its price book into a folder.

    Parameters
    ----------
    directory
        A folder; it is made when absent, inside a folder that exists. It may hold other files.
    workbook
        Write the price book as a workbook instead of a CSV file.

    Returns
    -------
    tuple of Path
        The files written, the site file first.

    Raises
    ------
    FileExistsError
        The folder holds one of the files already, or is a file; nothing was written.
    OSError
        The folder cannot be written to; nothing was left behind.
    """
    target = Path(directory)
    texts = starter_texts()
    contents = {name: text.encode() for name, text in texts.items()}
    if workbook:
        contents = _with_workbook(texts)
    for name in contents:
        if (target / name).exists():
            raise _taken(target / name)
    if target.exists() and not target.is_dir():
        raise _taken(target)
    if target.exists():
        _write_all(target, contents)
    else:
        _write_folder(target, contents)
    return tuple(target / name for name in contents)


def _taken(path: Path) -> FileExistsError:
    return FileExistsError(
        errno.EEXIST, "is already there; nothing was written. Choose another folder", str(path)
    )


def _write_all(folder: Path, contents: dict[str, bytes]) -> None:
    """Write new files into an existing folder; when one fails, take the others back."""
    written: list[Path] = []
    try:
        for name, content in contents.items():
            with (folder / name).open("xb") as stream:
                written.append(folder / name)
                stream.write(content)
    except BaseException:
        for path in written:
            path.unlink(missing_ok=True)
        raise


def _write_folder(target: Path, contents: dict[str, bytes]) -> None:
    """Fill a folder beside the target, then give it the target's name in one step."""
    with tempfile.TemporaryDirectory(
        prefix=f".{target.name}.", dir=target.parent, ignore_cleanup_errors=True
    ) as parent:
        staged = Path(parent) / "site"
        staged.mkdir()
        _write_all(staged, contents)
        try:
            staged.rename(target)
        except OSError:
            shutil.rmtree(staged, ignore_errors=True)
            raise
