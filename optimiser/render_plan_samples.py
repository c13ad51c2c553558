"""The lines of a plan on its samples, written from the plan's data."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import number, paragraph

Data = Mapping[str, Any]


def plan_sample_lines(data: Data) -> list[str]:
    """How many samples a plan holds on, and what its controller gives over them.

    Nothing for a feed of one analysis.
    """
    samples = data.get("samples")
    if not samples:
        return []
    lines = paragraph(
        f"The plan holds on each of {samples['count']} samples from {samples['first']} to "
        f"{samples['last']}: {samples['states_certified']:,} states were certified."
    )
    fed = samples["controller"]
    if fed:
        name = str(fed["reagent"]).replace("_", " ")
        lines += paragraph(
            f"The pH controller gives {number(fed['lowest_mg_per_l'])} mg/L of {name} on "
            f"{fed['lowest_on']}, {number(fed['mean_mg_per_l'])} in the mean of the volume and "
            f"{number(fed['highest_mg_per_l'])} on {fed['highest_on']}."
        )
    return lines
