"""The command line as a process: exit codes, signals, streams that fail, whole files.

Owns how the program ends when something outside it goes wrong; what commands do is
`optimiser.cli`.
"""

from __future__ import annotations

import os
import signal
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from optimiser.cli_options import PROGRAM

if TYPE_CHECKING:
    from collections.abc import Callable
    from types import FrameType, TracebackType

    import pandas as pd

DONE, OUR_FAULT, BAD_INPUT, NO_PLAN, STOPPED = 0, 1, 2, 3, 4

PLEASE_REPORT = (
    "Please run the command again with --debug and send the output with the site file to the "
    "maintainers."
)


def say(message: str) -> None:
    """Tell the user something that is no result."""
    sys.stderr.write(f"{PROGRAM}: {message}\n")


def progress() -> Callable[[str], None] | None:
    """Show one line that renews itself, only where somebody watches."""
    if not sys.stderr.isatty():
        return None

    def show(message: str) -> None:
        sys.stderr.write(f"\r\x1b[K{message[:99]}")
        sys.stderr.flush()

    return show


def clear_progress() -> None:
    """Take the progress line away."""
    if sys.stderr.isatty():
        sys.stderr.write("\r\x1b[K")


def own_the_process(*, debug: bool) -> None:
    """Set what only a process of our own may: how signals and unforeseen errors end it.

    A request to end (SIGTERM, SIGHUP) ends it like Ctrl-C, so that solvers that run as programs and
    their files go with it.
    """
    if sys.stdout is None:
        say("standard output is closed, so nothing can be printed")
        raise SystemExit(BAD_INPUT)
    if not debug:
        sys.excepthook = _report_fault
    for name in ("SIGTERM", "SIGHUP"):
        number = getattr(signal, name, None)
        if number is not None and signal.getsignal(number) == signal.SIG_DFL:
            signal.signal(number, _stop)


def _stop(_number: int, _frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def drop_output() -> None:
    """Lead what is still to be written nowhere: the interpreter would stumble over it at exit."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def drop_unwritable_output() -> None:
    """Drop what a full disk did not take, so that it is reported once."""
    try:
        sys.stdout.flush()
    except OSError:
        drop_output()


def write_csv(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as a whole or not at all: beside its place first, then moved there.

    What is no plain file (a pipe, a device) is written in place.
    """
    if path.exists() and not path.is_file():
        frame.to_csv(path, index=False, lineterminator="\n")
        return
    target = path.resolve()
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        frame.to_csv(part, index=False, lineterminator="\n")
        part.replace(target)
    except OSError as error:
        error.filename = str(path)
        raise
    finally:
        part.unlink(missing_ok=True)


def _report_fault(
    kind: type[BaseException], value: BaseException, trace: TracebackType | None
) -> None:
    """Say in one line that the program failed, and what to send to whom."""
    place = trace
    while place is not None and place.tb_next is not None:
        place = place.tb_next
    where = ""
    if place is not None:
        code = place.tb_frame.f_code
        where = f" in {Path(code.co_filename).name}:{place.tb_lineno}"
    text = " ".join(str(value).split()) or "no message"
    say(
        f"a fault of the program, not of your input: {kind.__name__}{where}: {text}. "
        f"{PLEASE_REPORT}"
    )
