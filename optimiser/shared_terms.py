"""Terms that tie offers together: bundles and the shares of suppliers.

Owns their rows in the purchasing block; what they mean is written in `optimiser.offer`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from optimiser.errors import ModelError, unbounded_demand
from optimiser.linear_model import Expression, Model, Sense
from optimiser.offer import Offer
from optimiser.offer_cost import pieces_of

Columns = Mapping[str, tuple[str, Expression | None, float]]
"""Per offer: its tonnes, its use (a sum of binaries) and the most tonnes."""

_STRETCH = 4.0


def tied_together(offers: Sequence[Offer]) -> dict[str, float]:
    """How much more than the demand may pay, by reagent, where suppliers' shares bind. [kg/year]

    A least order of one supplier may call for more from the others, so that it stays under its
    share.
    """
    reagents = {o.reagent for o in offers if _has_share(o)}
    return {
        name: _STRETCH * math.fsum(_low_kg(o) for o in offers if o.reagent == name)
        for name in reagents
    }


def no_common_ground() -> str:
    """Say that the terms contradict each other at this demand."""
    return (
        "the volume caps, least orders, suppliers' shares and bundles leave no way to buy this "
        "demand; relax one of them or add an offer"
    )


def add_shared_terms(model: Model, offers: Mapping[str, Offer], columns: Columns) -> None:
    """Add the rows of bundles and suppliers' shares.

    Notes
    -----
    With ``B`` the binary of a bundle, its offers have ``used = B``, and every other unsigned offer
    of its reagents ``used <= 1 - B``. With ``A_S`` the kg pure bought from supplier ``S``, ``T``
    from all and ``M`` the most of ``T``::

        A_S <= most_share T,     A_S >= least_share T - least_share M (1 - used_o)
    """
    for bundle in sorted({o.bundle for o in offers.values() if o.bundle}):
        _add_bundle(model, bundle, offers, columns)
    for reagent in sorted({o.reagent for o in offers.values() if _has_share(o)}):
        mine = {key: o for key, o in offers.items() if o.reagent == reagent}
        _add_shares(model, mine, columns)


def _add_bundle(model: Model, bundle: str, offers: Mapping[str, Offer], columns: Columns) -> None:
    binary = model.add_variable(f"bundle {bundle}", high=1.0, integer=True)
    inside = {key for key, o in offers.items() if o.bundle == bundle}
    reagents = {offers[key].reagent for key in inside}
    for key, offer in offers.items():
        _, used, _ = columns[key]
        if used is None:
            continue
        if key in inside:
            both = {**used.terms, binary: -1.0}
            model.add_row(f"bundled {key}", both, Sense.EQUAL, 0.0)
        elif offer.reagent in reagents and not offer.signed:
            either = {**used.terms, binary: 1.0}
            model.add_row(f"{key} or bundle {bundle}", either, Sense.AT_MOST, 1.0)


def _add_shares(model: Model, offers: Mapping[str, Offer], columns: Columns) -> None:
    total = Expression({columns[key][0]: o.kg_pure_per_t for key, o in offers.items()})
    most_kg = math.fsum(columns[key][2] * o.kg_pure_per_t for key, o in offers.items())
    for supplier in sorted({o.supplier for o in offers.values()}):
        mine = {key: o for key, o in offers.items() if o.supplier == supplier}
        part = Expression({columns[key][0]: o.kg_pure_per_t for key, o in mine.items()})
        name = f"{supplier} {next(iter(mine.values())).reagent}"
        most = min(o.most_share_fraction for o in mine.values())
        if most < 1.0:
            row = part.plus(total.times(-most)).terms
            model.add_row(f"most of {name}", row, Sense.AT_MOST, 0.0)
        for key, offer in mine.items():
            share = offer.least_share_fraction
            if share <= 0.0:
                continue
            used = columns[key][1]
            if used is None or not math.isfinite(most_kg):
                raise ModelError(unbounded_demand(offer.reagent, key))
            away = Expression(used.terms, 0.0).times(-share * most_kg)
            row = part.plus(total.times(-share)).plus(away).terms
            model.add_row(f"least of {key}", row, Sense.AT_LEAST, -share * most_kg)


def _has_share(offer: Offer) -> bool:
    return offer.least_share_fraction > 0.0 or offer.most_share_fraction < 1.0


def _low_kg(offer: Offer) -> float:
    return offer.kg_pure_per_t * max(piece.low_t for piece in pieces_of(offer))
