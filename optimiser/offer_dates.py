"""Which offers hold on a day, and what to say of the others.

Owns the rule that an offer past its last day, or before its first, is bought from only when told.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable

from optimiser.offer import Offer

EXPIRED_WORDS = ("leave_out", "use")
"""What a site may do with offers that do not hold; the first is the default."""


def holds_on(offer: Offer, day: datetime.date) -> bool:
    """Tell whether an offer may be bought from on a day."""
    iso = day.isoformat()
    last = [end for end in (offer.valid_until, offer.ends_on if offer.signed else "") if end]
    return offer.valid_from <= iso and all(iso <= end for end in last)


def holding(offers: Iterable[Offer], day: datetime.date) -> tuple[Offer, ...]:
    """The offers that may be bought from on a day."""
    return tuple(offer for offer in offers if holds_on(offer, day))


def date_notes(offers: Iterable[Offer], day: datetime.date, *, used: bool) -> tuple[str, ...]:
    """Say which offers do not hold on a day, and what became of them."""
    return tuple(
        f"offer {offer.offer} ({offer.supplier}) {_when(offer, day)}: "
        + ("used all the same, ask whether it holds" if used else "left out")
        for offer in offers
        if not holds_on(offer, day)
    )


def _when(offer: Offer, day: datetime.date) -> str:
    if offer.valid_from > day.isoformat():
        return f"is valid from {offer.valid_from}"
    if offer.valid_until and offer.valid_until < day.isoformat():
        return f"was valid until {offer.valid_until}"
    return f"ended on {offer.ends_on}"
