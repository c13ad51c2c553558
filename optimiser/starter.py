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


def write_starter(directory: str | Path) -> tuple[Path, ...]:
    """Write the starter site and its price book into a folder.

    Parameters
    ----------
    directory
        A folder; it is made when absent, inside a folder that exists. It may hold other files.

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
    for name in texts:
        if (target / name).exists():
            raise _taken(target / name)
    if target.exists() and not target.is_dir():
        raise _taken(target)
    if target.exists():
        _write_all(target, texts)
    else:
        _write_folder(target, texts)
    return tuple(target / name for name in texts)


def _taken(path: Path) -> FileExistsError:
    return FileExistsError(
        errno.EEXIST, "is already there; nothing was written. Choose another folder", str(path)
    )


def _write_all(folder: Path, texts: dict[str, str]) -> None:
    """Write new files into an existing folder; when one fails, take the others back."""
    written: list[Path] = []
    try:
        for name, text in texts.items():
            with (folder / name).open("x", encoding="utf-8", newline="\n") as stream:
                written.append(folder / name)
                stream.write(text)
    except BaseException:
        for path in written:
            path.unlink(missing_ok=True)
        raise


def _write_folder(target: Path, texts: dict[str, str]) -> None:
    """Fill a folder beside the target, then give it the target's name in one step."""
    with tempfile.TemporaryDirectory(
        prefix=f".{target.name}.", dir=target.parent, ignore_cleanup_errors=True
    ) as parent:
        staged = Path(parent) / "site"
        staged.mkdir()
        _write_all(staged, texts)
        try:
            staged.rename(target)
        except OSError:
            shutil.rmtree(staged, ignore_errors=True)
            raise
