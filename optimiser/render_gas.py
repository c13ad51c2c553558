"""The text of the gas over a plan's water."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import INDENT, given, number, paragraph

Data = Mapping[str, Any]
_GASES = {"co2": "CO2", "h2s": "H2S"}
_LEAST_PPM = 0.1


def gas_lines(data: Data) -> list[str]:
    """Write the highest pressure of each gas, what leaves the water, and thresholds in air.

    Parameters
    ----------
    data
        ``Plan.to_dict()``; gases that hardly show are left out.
    """
    lines: list[str] = []
    for key, gas in data.get("gas", {}).items():
        evolved = gas.get("evolved_kg_per_d", 0.0)
        if gas["highest_ppm"] < _LEAST_PPM and not evolved:
            continue
        where = str(gas["highest_at"]).replace("_", " ")
        text = (
            f"{_GASES[key]}: up to {number(gas['highest_ppm'])} ppm in air at rest over the water "
            f"({gas['highest_in']}; {where})."
        )
        if evolved:
            text += f" {number(evolved)} kg/d leave the water where it may vent."
        if "site_limit_ppm" in gas:
            text += f" Site limit: {given(gas['site_limit_ppm'])} ppm."
        marks = [
            f"{given(t['limit_ppm'])} ppm {str(t['threshold']).replace('_', ' ')} over "
            f"{t['averaging']} ({t['source']})"
            for t in gas["thresholds"]
        ]
        lines += paragraph(f"{text} Thresholds in air: {'; '.join(marks)}.", indent=INDENT * 2,
                           first=INDENT)  # fmt: skip
    return lines
