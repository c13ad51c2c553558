"""The price book: reading ``offers.csv`` into offers, every row checked.

Owns the columns and their meaning; what an order costs is `optimiser.purchasing`.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping
from pathlib import Path

from catalogs.entries import NON_NEGATIVE, Entry, Range
from catalogs.positions import load_csv
from catalogs.problems import ProblemLog, echo, listed
from catalogs.reagents import Reagent, load_reagents
from optimiser.site import Offer

OFFER_COLUMNS = (
    "offer", "supplier", "reagent", "product", "form", "strength_percent", "density_kg_per_l",
    "price", "price_per", "freight_per_t", "least_order_t", "valid_until", "note",
)  # fmt: skip
"""Header of a price book, in the order it is written."""

PRICE_UNITS = ("t", "L")
_STRENGTH_PERCENT = Range(low=1.0, high=100.0)
_DENSITY_KG_PER_L = Range(low=0.2, high=5.0)


def load_offers(path: str | Path) -> tuple[Offer, ...]:
    """Read a price book.

    Parameters
    ----------
    path
        A comma-separated file with the columns `OFFER_COLUMNS`.

    Returns
    -------
    tuple of Offer

    Raises
    ------
    InputFileError
        Everything that is wrong in the file, all at once.
    """
    log = ProblemLog()
    offers, _ = read_offers(Path(path), load_reagents(), log)
    log.raise_if_any()
    return offers


def read_offers(
    path: Path, reagents: Mapping[str, Reagent], log: ProblemLog
) -> tuple[tuple[Offer, ...], frozenset[str]]:
    """Read a price book, recording problems in a log.

    Returns
    -------
    tuple
        The sound offers, and every reagent that some row offers, sound or not.
    """
    sold: set[str] = set()
    offers: dict[str, Offer] = {}
    lines: dict[str, int] = {}
    for row in load_csv(path, OFFER_COLUMNS, log):
        before = len(log.problems)
        entry = Entry.top(row, str(path), log)
        offer = _offer(entry, reagents)
        entry.finish()
        sold.add(offer.reagent)
        if offer.offer in lines:
            entry.at("offer").problem(
                f"{echo(offer.offer)} twice",
                "a name of its own for each offer",
                f"It already stands in line {lines[offer.offer]}: rename one of them.",
            )
        elif offer.offer:
            lines[offer.offer] = row.line
        if len(log.problems) == before:
            offers[offer.offer] = offer
    return tuple(offers.values()), frozenset(sold)


def _offer(entry: Entry, reagents: Mapping[str, Reagent]) -> Offer:
    reagent = entry.choice("reagent", reagents, "reagents")
    return Offer(
        offer=entry.text("offer"),
        supplier=entry.text("supplier"),
        reagent=reagent,
        product=entry.text("product"),
        form=entry.text("form"),
        strength_fraction=entry.number("strength_percent", _STRENGTH_PERCENT) / 100.0,
        density_kg_per_l=_density(entry, reagents.get(reagent)),
        price=entry.number("price", NON_NEGATIVE),
        price_per=entry.choice("price_per", PRICE_UNITS, "units of price"),
        freight_per_t=entry.number_or("freight_per_t", 0.0, NON_NEGATIVE),
        least_order_t=entry.number_or("least_order_t", 0.0, NON_NEGATIVE),
        valid_until=entry.day_or("valid_until"),
        note=entry.text_or("note"),
    )


def _density(entry: Entry, reagent: Reagent | None) -> float:
    """Read the density; where the cell is empty, say what the catalog knows of the reagent."""
    if reagent is None or entry.has("density_kg_per_l"):
        return entry.number("density_kg_per_l", _DENSITY_KG_PER_L)
    usual = listed(f"{form.density_kg_per_l:g} ({form.form})" for form in reagent.product_forms)
    entry.at("density_kg_per_l").problem(
        "nothing",
        _DENSITY_KG_PER_L.describe(),
        f"Take it from the data sheet (bulk density of a solid). Usual values: {usual}.",
    )
    return math.nan


def expired_notes(offers: tuple[Offer, ...], today: datetime.date) -> tuple[str, ...]:
    """Say which offers are past their last day."""
    return tuple(
        f"offer {offer.offer} ({offer.supplier}) was valid until {offer.valid_until}: ask whether"
        " it still holds"
        for offer in offers
        if offer.valid_until and datetime.date.fromisoformat(offer.valid_until) < today
    )
