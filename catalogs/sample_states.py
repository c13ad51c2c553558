"""Iron and chromium in tables of samples: from a total and one oxidation state to both states.

Owns that subtraction and the refusal of an element whose oxidation state nobody states.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

from catalogs.cells import Cell
from catalogs.sample_tables import RawSample, RawTable, Result
from chemistry.samples import Reported

STATES: Mapping[str, tuple[str, str]] = {"Fe": ("Fe(II)", "Fe(III)"), "Cr": ("Cr(VI)", "Cr(III)")}
"""Element to the state that laboratories measure beside it, and the state that is the rest."""

Add = Callable[[Cell, str, str, str, str], None]


def split_states(
    raw: RawSample, dissolved: dict[str, Reported], total: dict[str, Reported], add: Add,
    note: Callable[[str], None],
) -> None:  # fmt: skip
    """Replace the total of an element by the state that is left, in both mappings.

    A measured state below its reporting limit takes nothing off. With both states measured the
    total is not needed and is dropped.

    Parameters
    ----------
    raw
        The sample, for the places of its results.
    dissolved, total
        Amounts by analyte, [mg/L]; changed in place.
    add, note
        Take problems and remarks.
    """
    for element, (measured, rest) in STATES.items():
        result = _place(raw, element)
        if result is None:
            continue
        states = [(dissolved, dissolved.pop(element, None)), (total, total.pop(element, None))]
        if any(rest in amounts for amounts, _ in states):
            note(f"{element}: {measured} and {rest} are read, the sum of both is left out")
            continue
        if not any(measured in amounts for amounts, _ in states):
            note(f"{element}: left out where {measured} is blank")
            continue
        note(f"{rest}: {element} less {measured}")
        for amounts, whole in states:
            part = amounts.get(measured) or dissolved.get(measured) or total.get(measured)
            if whole is not None and part is not None:
                left = _rest(whole, part)
                if left is None:
                    add(
                        result.cell, result.heading.text,
                        f"{element} {whole.as_written} below {measured} {part.as_written}",
                        f"{measured} at most {element}", "Check units and which column is which.",
                    )  # fmt: skip
                    continue
                amounts[rest] = left


def check_states(table: RawTable, add: Add) -> None:
    """Record elements of a table whose oxidation state nobody states."""
    names = {heading.name for heading, _ in table.headings}
    for heading, cell in table.headings:
        states = STATES.get(heading.name, ())
        if states and not names & set(states):
            measured, rest = states
            add(
                cell, heading.text, f"{heading.name} without its oxidation state",
                f"{measured} or {rest}",
                f"Add a column of {measured}; or say which it is with `columns:"
                f" {{{' '.join(heading.text.split())}: {rest}}}` under `samples`.",
            )  # fmt: skip


def _place(raw: RawSample, element: str) -> Result | None:
    for (name, _), result in raw.results.items():
        if name == element:
            return result
    return None


def _rest(whole: Reported, part: Reported) -> Reported | None:
    """What is left of an element; None where the part is more than the whole."""
    if part.is_below:
        return whole
    if whole.is_below:
        return whole if part.value <= whole.value else None
    if part.value > whole.value:
        return None
    return Reported(
        value=whole.value - part.value, is_below=False,
        as_written=f"{whole.as_written} less {part.as_written}",
    )  # fmt: skip
