"""Purchasing: pure comparisons of contracts, and the public names of buying.

Owns how a demand is covered from offers at the least cost. The block inside models is
`optimiser.purchasing_block`; the answer without a solver is `optimiser.price_book`.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping, Sequence
from os import PathLike
from pathlib import Path
from typing import TYPE_CHECKING, cast

from optimiser.deal import Deal
from optimiser.errors import Interrupted, ModelError, NoPurchase, beyond_offers
from optimiser.linear_model import Model
from optimiser.offer_cost import pieces_of
from optimiser.offer_dates import date_notes, holding
from optimiser.price_book import PriceBook, cheapest_purchase, counted_demand
from optimiser.purchasing_block import PurchasingBlock, add_purchasing
from optimiser.shared_terms import no_common_ground
from optimiser.solver import SolverPort, Termination, open_solver

if TYPE_CHECKING:
    import pandas as pd

    from optimiser.offer import Offer

__all__ = [
    "PriceBook",
    "PurchasingBlock",
    "add_purchasing",
    "best_deal",
    "cheapest_purchase",
    "purchase",
]

_COMPARISON_GAP = 1e-9


def purchase(
    demand: Mapping[str, float],
    offers: str | PathLike[str] | pd.DataFrame | Sequence[Offer],
    *,
    solver: SolverPort | str = "highs",
    use_expired: bool = False,
) -> Deal:
    """Cover a demand from offers at the least cost.

    Parameters
    ----------
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    offers
        A price book file, a frame with its columns, or offers.
    solver
        ``highs``, ``cbc``, or a solver of your own.
    use_expired
        Buy from offers that do not hold today as well.

    Returns
    -------
    Deal
        Cost by cause and what is bought on each offer.

    Raises
    ------
    NoPurchase
        The offers cannot cover the demand; every reason is named.
    InputFileError
        The offers cannot be used as they stand.
    Interrupted
        The solver's time limit came before any solution.

    Examples
    --------
    >>> from optimiser.site import Offer
    >>> soda = Offer(offer="S1", supplier="Alder Chemicals", reagent="soda_ash", product="dense",
    ...              form="powder", strength_fraction=0.99, density_kg_per_l=1.0, price=310.0,
    ...              price_per="t", freight_per_t=20.0, least_order_t=5.0)
    >>> deal = purchase({"soda_ash": 2970.0}, [soda])
    >>> deal.cost
    {'goods': 1550.0, 'freight': 100.0, 'total': 1650.0}
    >>> round(deal.buys[0].surplus_kg_pure_per_year, 6)
    1980.0
    """
    every = read_offers(offers)
    today = datetime.date.today()
    given = every if use_expired else holding(every, today)
    needed = counted_demand(
        demand, {offer.reagent for offer in given}, date_notes(every, today, used=use_expired)
    )
    port = open_solver(solver, relative_gap=_COMPARISON_GAP) if isinstance(solver, str) else solver
    model = Model("purchase")
    block = add_purchasing(model, given, needed)
    report = port.solve(model)
    if report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION:
        raise Interrupted(f"{report.solver} found no purchase within its time limit")
    if report.termination is Termination.INFEASIBLE:
        raise NoPurchase(_why_nothing_covers(given, needed))
    if not report.termination.has_solution:
        raise ModelError(f"{report.solver} ended a purchase with: {report.termination.value}")
    return block.deal(report.values, gap=report.gap, solver=report.version)


def best_deal(
    demand: Mapping[str, float], book: PriceBook, *, solver: SolverPort | str = "highs"
) -> Deal:
    """Cheapest purchase from a prepared price book: by its curves where they are exact.

    Parameters
    ----------
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    book
        The offers.
    solver
        Asked only where terms tie offers together or come in whole packs.

    Raises
    ------
    NoPurchase
        The offers cannot cover the demand; every reason is named.
    """
    if not book.inexact & {key.partition("@")[0] for key, kg in demand.items() if kg > 0.0}:
        return book.cheapest(demand)
    return purchase(demand, book.offers, solver=solver, use_expired=True)


def _why_nothing_covers(offers: Sequence[Offer], demand: Mapping[str, float]) -> list[str]:
    reasons = []
    for reagent, kg in demand.items():
        most = math.fsum(
            o.most_t * o.kg_pure_per_t for o in offers if o.reagent == reagent and pieces_of(o)
        )
        if kg > most:
            reasons.append(beyond_offers(reagent, kg, most))
    return reasons or [no_common_ground()]


def read_offers(given: str | PathLike[str] | pd.DataFrame | Sequence[Offer]) -> tuple[Offer, ...]:
    """Offers from a price book file, a frame with its columns, or offers."""
    if isinstance(given, (str, PathLike)):
        from optimiser.offers_reader import load_offers

        return load_offers(Path(given))
    from optimiser.offer_checks import offers_from_frame, require_usable_offers

    if hasattr(given, "to_dict"):
        return offers_from_frame(cast("pd.DataFrame", given))
    return require_usable_offers(given)
