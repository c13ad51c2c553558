"""The price book: reading a CSV file or a workbook into offers, every row checked.

Owns how rows make offers: one row each, further rows of the same offer for its further tiers. A row
is read by `optimiser.offer_rows`, whatever kind of table it stands in.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from catalogs.entries import Entry
from catalogs.positions import load_csv
from catalogs.problems import ProblemLog, Spot, echo
from catalogs.reagents import Reagent, load_reagents
from optimiser.offer import Offer, Tier
from optimiser.offer_checks import check_shared, check_terms
from optimiser.offer_rows import (
    OFFER_COLUMNS,
    TERM_COLUMNS,
    TIER_CELLS,
    read_offer,
    refuse_formulas,
    tier_cells,
    tier_price,
)

__all__ = ["OFFER_COLUMNS", "TERM_COLUMNS", "load_offers", "read_offers"]


def load_offers(path: str | Path, *, currency: str = "") -> tuple[Offer, ...]:
    """Read a price book.

    Parameters
    ----------
    path
        A comma-separated file or a workbook (``.xlsx``, sheet ``offers``) with the columns
        `OFFER_COLUMNS`, and of `TERM_COLUMNS` those that some offer needs.
    currency
        The currency that costs are wanted in; offers in another one need a dated rate.

    Returns
    -------
    tuple of Offer

    Raises
    ------
    InputFileError
        Everything that is wrong in the file, all at once.
    """
    log = ProblemLog()
    offers, _ = read_offers(Path(path), load_reagents(), log, currency=currency)
    log.raise_if_any()
    return offers


def read_offers(
    path: Path, reagents: Mapping[str, Reagent], log: ProblemLog, *, currency: str = ""
) -> tuple[tuple[Offer, ...], frozenset[str]]:
    """Read a price book, recording problems in a log.

    Returns
    -------
    tuple
        The sound offers, and every reagent that some row offers, sound or not.
    """
    return offers_of_rows(book_entries(path, log), reagents, log, currency=currency)


def book_entries(path: Path, log: ProblemLog) -> Iterable[Entry]:
    """Rows of a price book, a CSV file or a workbook, each with the places of its cells."""
    if path.suffix.lower() != ".csv":
        from catalogs.sheets import is_workbook

        if is_workbook(path):
            from optimiser.book_reader import sheet_entries

            return sheet_entries(path, log)
    rows = load_csv(path, OFFER_COLUMNS, log, optional=TERM_COLUMNS)
    return [Entry.top(row, str(path), log) for row in rows]


def offers_of_rows(
    entries: Iterable[Entry], reagents: Mapping[str, Reagent], log: ProblemLog,
    *, currency: str = "",
) -> tuple[tuple[Offer, ...], frozenset[str]]:  # fmt: skip
    """Make offers of the rows of a table, recording problems in a log.

    Returns
    -------
    tuple
        The sound offers, and every reagent that some row offers, sound or not.
    """
    drafts: dict[str, _Draft] = {}
    sold: set[str] = set()
    for entry in entries:
        before = len(log.problems)
        name = entry.text_or("offer")
        if name in drafts and not entry.has("reagent") and entry.has("tier_from_t"):
            _add_tier(drafts[name], entry)
            drafts[name].sound &= len(log.problems) == before
            continue
        offer = read_offer(entry, reagents, currency)
        draft = _Draft(offer, entry.spot.line, entry.spot, tier_cells(entry))
        entry.finish()
        sold.add(offer.reagent)
        if offer.offer in drafts:
            entry.at("offer").problem(
                f"{echo(offer.offer)} twice",
                "a name of its own for each offer",
                f"It already stands in line {drafts[offer.offer].line}: rename one of them.",
            )
        draft.sound = len(log.problems) == before
        drafts.setdefault(offer.offer, draft)
    offers = [(draft.finished(log), draft) for draft in drafts.values()]
    sound = [(offer, draft.spot) for offer, draft in offers if draft.sound]
    check_shared(sound)
    return tuple(offer for offer, _ in sound), frozenset(sold)


@dataclass(slots=True)
class _Draft:
    """An offer whose tiers are still being gathered."""

    offer: Offer
    line: int
    spot: Spot
    first: tuple[float, float, Spot]
    further: list[tuple[float, float, Spot, float]] = field(default_factory=list)
    sound: bool = True

    def finished(self, log: ProblemLog) -> Offer:
        """Put the tiers together and check the whole."""
        before = len(log.problems)
        start, end, spot = self.first
        if not math.isnan(start) and start > 0.0:
            spot.problem(
                f"{start:g}", "0 for the first tier",
                "Write 0 here and the least amount in least_order_t.",
            )  # fmt: skip
        for begin, stop, place, _ in self.further:
            if math.isfinite(end) and begin != end:
                what = "a gap" if begin > end else "an overlap"
                place.problem(
                    f"{what}: {begin:g} after a tier that ends at {end:g}",
                    "tiers that join",
                    f"Begin this tier at {end:g}, or end the one before at {begin:g}.",
                )
            end = stop
        offer = replace(
            self.offer,
            tiers=tuple(Tier(from_t=begin, price=price) for begin, _, _, price in self.further),
        )
        if math.isfinite(end) and self.offer.tier_per != "order":
            offer = replace(offer, most_t_per_year=min(offer.most_t_per_year, end))
        if self.sound and len(log.problems) == before:
            check_terms(offer, self.spot)
        self.sound &= len(log.problems) == before
        return offer


def _add_tier(draft: _Draft, entry: Entry) -> None:
    refuse_formulas(entry)
    start, end, spot = tier_cells(entry)
    draft.further.append((start, end, spot, tier_price(entry)))
    entry.finish_row(TIER_CELLS)
