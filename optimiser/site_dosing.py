"""The dosing block of a site file: pumps, feeders, dissolvers, tanks and silos by reagent.

Owns reading that block; what the plan asks of it is `optimiser.capacities`.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping

from catalogs.entries import POSITIVE, Entry, Range
from optimiser.site import Dosing, FeedRange

_TEMPERATURE_DEGC = Range(low=-60.0, high=60.0)


def read_dosing(entry: Entry | None, reagents: Collection[str]) -> Mapping[str, Dosing]:
    """Read what is installed; ``reagents`` are those that the treatment allows.

    The block may be left out, and each of its keys too.
    """
    if entry is None:
        return {}
    found = {
        name: _one(block) for name, block in entry.blocks_by_name(reagents, "allowed reagents")
    }
    entry.finish()
    return found


def _one(entry: Entry) -> Dosing:
    made = Dosing(
        pump_l_per_h=_range(entry, "pump_l_per_h"),
        feeder_kg_per_h=_range(entry, "feeder_kg_per_h"),
        dissolver_kg_per_h=entry.number_or("dissolver_kg_per_h", None, POSITIVE),
        store_m3=entry.number_or("store_m3", None, POSITIVE),
        store_t=entry.number_or("store_t", None, POSITIVE),
        lowest_degc=entry.number_or("lowest_degc", None, _TEMPERATURE_DEGC),
    )
    entry.finish()
    return made


def _range(entry: Entry, key: str) -> FeedRange | None:
    block = entry.block_or_none(key)
    if block is None:
        return None
    low, high = block.number("low", POSITIVE), block.number("high", POSITIVE)
    if low >= high:
        block.at("low").problem(
            f"low {low:g} is not below high {high:g}",
            "the least and the greatest rate",
            "Exchange or correct them.",
        )
    block.finish()
    return FeedRange(low=low, high=high)
