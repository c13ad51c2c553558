"""Files written whole or not at all, and never over another unless told."""

from __future__ import annotations

import errno
import os
import tempfile
from pathlib import Path


def write_whole(path: Path, data: bytes, *, force: bool = False) -> None:
    """Write a file beside its place first, then move it there.

    Parameters
    ----------
    path
        The file; its folder must exist.
    data
        What it is to hold.
    force
        Replace a file that is there.

    Raises
    ------
    FileExistsError
        The file is there and ``force`` is not given; it is left as it is.
    OSError
        The folder cannot be written to; nothing was left behind.
    """
    refuse_to_overwrite(path, force=force)
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    staged = Path(name)
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
        staged.chmod(0o644)
        staged.replace(path)
    except BaseException:
        staged.unlink(missing_ok=True)
        raise


def refuse_to_overwrite(path: Path, *, force: bool) -> None:
    """Raise FileExistsError where a file would be overwritten without being asked to."""
    if path.is_dir() or (path.exists() and not force):
        raise FileExistsError(
            errno.EEXIST, "is already there; nothing was written. Use --force to replace it",
            str(path),
        )  # fmt: skip
