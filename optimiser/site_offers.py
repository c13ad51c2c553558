"""The price book of a site: which offers it names, which of them hold, what is missing.

Owns the keys ``offers`` and ``expired_offers`` of a site file; rows are read by
`optimiser.offers_reader`.
"""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from catalogs.entries import Entry
from catalogs.problems import Spot, echo
from catalogs.reagents import Reagent
from optimiser.offer import Offer
from optimiser.offer_dates import EXPIRED_WORDS, date_notes, holding
from optimiser.offers_reader import OFFER_COLUMNS, read_offers


@dataclass(frozen=True, slots=True)
class SiteOffers:
    """The offers that a site may buy from, and what is said about those it may not."""

    offers: tuple[Offer, ...] = ()
    notes: tuple[str, ...] = ()


def read_site_offers(
    entry: Entry, file: Path, reagents: Mapping[str, Reagent], allowed: Mapping[str, Spot],
    *, currency: str, day: datetime.date | None,
) -> SiteOffers:  # fmt: skip
    """Read the price book beside the site file; every allowed reagent must be in it.

    Parameters
    ----------
    entry
        The top of the site file.
    file
        Its path.
    allowed
        Reagents that the site allows, with their places.
    currency
        The site's.
    day
        Day that the dates of offers are held against; None to take every offer.
    """
    name = entry.text("offers")
    expired = entry.choice_or("expired_offers", EXPIRED_WORDS[0], EXPIRED_WORDS, "words for it")
    if not name:
        return SiteOffers()
    book = file.parent / name
    if not book.exists():
        entry.at("offers").problem(
            f"no file {echo(name)} beside the site file",
            "a price book",
            f"Write one with the columns {','.join(OFFER_COLUMNS)}, or correct the name.",
        )
        return SiteOffers()
    log = entry.spot.log
    before = len(log.problems)
    offers, sold = read_offers(book, reagents, log, currency=currency)
    used = day is None or expired == "use"
    kept = offers if day is None or used else holding(offers, day)
    found = SiteOffers(kept, () if day is None else date_notes(offers, day, used=used))
    if not sold and len(log.problems) > before:
        return found  # the table itself could not be read: that was said
    sound, alive = ({offer.reagent for offer in some} for some in (offers, kept))
    for reagent, spot in allowed.items():
        if reagent not in sold:
            spot.problem(
                f"{reagent}, which no offer sells",
                f"at least one offer of it in {name}",
                "Add an offer, or take the reagent out of the list.",
            )
        elif reagent in sound - alive:
            spot.problem(
                f"{reagent}, of which no offer in {name} holds on {day}",
                "an offer that holds",
                "Ask for a new one, or write `expired_offers: use` in the site file.",
            )
    return found
