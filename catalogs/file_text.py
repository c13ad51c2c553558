"""Reading a user's file as text, after refusing what should not be read at all.

Owns the guards before parsing: kind of file, size, encoding, control characters.
"""

from __future__ import annotations

import re
import stat
from pathlib import Path

from catalogs.problems import ProblemLog, Spot, listed

_CONTROL = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u2028\u2029\ufffe\uffff]")


def read_text(path: Path, log: ProblemLog, *, max_bytes: int, name: str = "") -> str | None:
    """Read a file as UTF-8 text, refusing what should not be read at all.

    Parameters
    ----------
    path
        A regular file.
    log
        Takes the problems found.
    max_bytes
        Largest size; looked up before anything is read.
    name
        How messages call the file; the path when empty.

    Returns
    -------
    str or None
        The text with line feeds as line ends, or None when a problem was recorded.
    """
    spot = Spot(log=log, file=name or str(path), line=1)
    try:
        status = path.stat()
        if not _may_be_read(path, status.st_mode, status.st_size, max_bytes, spot):
            return None
        with path.open("rb") as stream:
            raw = stream.read(max_bytes + 1)
    except OSError as error:
        reason = error.strerror or type(error).__name__
        spot.problem(f"no readable file ({reason})", "a file", "Check the path and its rights.")
        return None
    if len(raw) > max_bytes:
        _refuse_size(len(raw), max_bytes, spot)
        return None
    return _decoded(raw, spot)


def _may_be_read(path: Path, mode: int, size: int, max_bytes: int, spot: Spot) -> bool:
    if stat.S_ISDIR(mode):
        inside = sorted(p.name for p in path.iterdir() if p.suffix in (".yaml", ".yml", ".csv"))
        remedy = f"Name a file in it: {listed(inside, most=5)}." if inside else "Name a file."
        spot.problem("a directory", "a file", remedy)
        return False
    if not stat.S_ISREG(mode):
        spot.problem("a device or pipe", "a file", "Save the data to a file and name that.")
        return False
    if size > max_bytes:
        _refuse_size(size, max_bytes, spot)
        return False
    return True


def _refuse_size(size: int, max_bytes: int, spot: Spot) -> None:
    spot.problem(
        f"a file of {size / 1e6:.1f} MB",
        f"at most {max_bytes / 1e6:g} MB",
        "Nothing was read. Check that this is the right file, then remove what is not needed.",
    )


def _decoded(raw: bytes, spot: Spot) -> str | None:
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        spot.at("encoding", line).problem(
            f"the byte 0x{raw[error.start]:02x}",
            "text in UTF-8",
            "Save the file with the encoding UTF-8.",
        )
        return None
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    control = _CONTROL.search(text)
    if control:
        line = text.count("\n", 0, control.start()) + 1
        spot.at("encoding", line).problem(
            f"the control character 0x{ord(control.group()):02x}",
            "printable text",
            "Delete that character; it is invisible in most editors.",
        )
        return None
    return text
