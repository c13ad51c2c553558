"""What a site says for buyers: costs of changing over, the years compared, last year's bill.

Owns the block ``procurement`` of a site file; what follows from it is `optimiser.contracts`.
"""

from __future__ import annotations

from collections.abc import Collection

from catalogs.entries import NON_NEGATIVE, POSITIVE, Entry, Range
from optimiser.site import Procurement


def read_procurement(entry: Entry | None, reagents: Collection[str]) -> Procurement:
    """Read the block; the defaults where it is left out.

    Parameters
    ----------
    entry
        The block.
    reagents
        Those that the site allows.
    """
    if entry is None:
        return Procurement()
    found = Procurement(
        switching_costs=entry.numbers(
            "switching_costs", reagents, "reagents allowed in treatment", NON_NEGATIVE
        ),
        term_years=entry.number_or("term_years", None, Range(above=0.0, high=30.0)),
        last_year_bill=entry.number_or("last_year_bill", None, POSITIVE),
    )
    entry.finish()
    return found
