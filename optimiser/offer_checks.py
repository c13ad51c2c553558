"""Offers given in code: a frame or a list, checked row by row with all problems at once.

Owns what makes an offer usable by the purchasing block. Offers in files are read, with their line
numbers, by `optimiser.offers_reader`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING

from catalogs.problems import ProblemLog, Spot, did_you_mean
from optimiser.site import Offer

if TYPE_CHECKING:
    import pandas as pd

_TEXTS = ("offer", "supplier", "reagent", "product", "form", "price_per", "valid_until", "note")
_NUMBERS = {"density_kg_per_l": math.nan, "price": math.nan, "freight_per_t": 0.0,
            "least_order_t": 0.0}  # fmt: skip
_STRENGTHS = {"strength_percent": 0.01, "strength_fraction": 1.0}
_NEEDED = ("offer", "reagent", "price", "price_per")


def require_usable_offers(offers: Iterable[Offer], *, name: str = "offers") -> tuple[Offer, ...]:
    """Return the offers as a tuple when every one of them can be bought from.

    Parameters
    ----------
    offers
        Offers as built in code.
    name
        What to call the list in messages; rows are counted from 1.

    Raises
    ------
    InputFileError
        With every problem of every offer.
    """
    given = tuple(offers)
    log = ProblemLog()
    seen: set[str] = set()
    for row, offer in enumerate(given, start=1):
        spot = Spot(log=log, file=name, line=row)
        _check(offer, spot)
        if offer.offer in seen:
            spot.at("offer").problem(
                repr(offer.offer), "an id of its own", "Another row has it; rename one of them."
            )
        seen.add(offer.offer)
    log.raise_if_any()
    return given


def offers_from_frame(frame: pd.DataFrame) -> tuple[Offer, ...]:
    """Turn a frame with the columns of a price book into offers.

    Columns are those of an offers file; the strength may be ``strength_percent`` or
    ``strength_fraction``. Columns beyond ``offer``, ``reagent``, the strength, ``price`` and
    ``price_per`` may be missing, the density only where nothing is priced per litre.

    Raises
    ------
    InputFileError
        With every problem of every row; rows are counted from 1, whatever the index.
    """
    name = "offers frame"
    log = ProblemLog()
    known = [*_TEXTS, *_NUMBERS, *_STRENGTHS]
    columns = [str(column) for column in frame.columns]
    head = Spot(log=log, file=name, line=1)
    for column in columns:
        if column not in known:
            remedy = did_you_mean(column, known, what="columns")
            head.at(column).problem("an unknown column", "a column of a price book", remedy)
    for column in _NEEDED:
        if column not in columns:
            head.at(column).problem("no such column", "a value in every row", "Add the column.")
    if len(set(columns) & set(_STRENGTHS)) != 1:
        head.at("strength_percent").problem(
            "none or two columns of strength", "one of strength_percent and strength_fraction",
            "Give the strength once.",
        )  # fmt: skip
    log.raise_if_any()
    rows = [
        _offer({str(key): value for key, value in row.items()}, Spot(log=log, file=name, line=at))
        for at, row in enumerate(frame.to_dict("records"), start=1)
    ]
    log.raise_if_any()
    return require_usable_offers(rows, name=name)


def _offer(row: Mapping[str, object], spot: Spot) -> Offer:
    numbers = {key: _number(row, key, default, spot) for key, default in _NUMBERS.items()}
    strength = next(
        factor * _number(row, key, math.nan, spot)
        for key, factor in _STRENGTHS.items()
        if key in row
    )
    texts = {key: "" if _is_missing(row.get(key)) else str(row[key]).strip() for key in _TEXTS}
    return Offer(**texts, **numbers, strength_fraction=strength)  # type: ignore[arg-type]


def _number(row: Mapping[str, object], key: str, default: float, spot: Spot) -> float:
    value = row.get(key)
    if _is_missing(value):
        return default
    if isinstance(value, bool) or not hasattr(value, "__float__"):
        remedy = "Use a decimal point, no unit and no thousands separator."
        spot.at(key).problem(repr(value), "a number", remedy)
        return default
    return float(value)


def _is_missing(value: object) -> bool:
    is_nan = isinstance(value, float) and math.isnan(value)
    return value is None or is_nan or str(value) in {"", "<NA>", "NaT"}


def _check(offer: Offer, spot: Spot) -> None:
    if not offer.offer:
        spot.at("offer").problem("nothing", "an id", "Give every offer an id of its own.")
    if not 0.0 < offer.strength_fraction <= 1.0:
        spot.at("strength_percent").problem(
            f"{100 * offer.strength_fraction:g}", "above 0 and at most 100",
            "Give the mass of pure compound per mass of product.",
        )  # fmt: skip
    if offer.price_per not in {"t", "L"}:
        spot.at("price_per").problem(repr(offer.price_per), "t or L", "Say what the price is for.")
    elif offer.price_per == "L" and not 0.0 < offer.density_kg_per_l < math.inf:
        spot.at("density_kg_per_l").problem(
            f"{offer.density_kg_per_l:g}", "a density above 0 for a price per litre",
            "Give the density of the product as delivered.",
        )  # fmt: skip
    for field in ("price", "freight_per_t", "least_order_t"):
        value = getattr(offer, field)
        if not 0.0 <= value < math.inf:
            spot.at(field).problem(f"{value:g}", "a number of 0 or more", "Correct the number.")
