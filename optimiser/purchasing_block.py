"""The purchasing block: every demand bought from offers, as part of a larger model.

Owns the variables, rows and costs of offers, and the way from a solution to a deal. What one offer
costs is `optimiser.offer_cost`; the rows that tie offers together are `optimiser.shared_terms`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from optimiser.deal import Buy, Deal, buys_of, deal_of, delivered_per_kg
from optimiser.errors import ModelError, NoPurchase, no_offer, unbounded_demand
from optimiser.linear_model import Expression, Model, Sense
from optimiser.offer import Offer
from optimiser.offer_cost import Piece, pieces_of, whole_packs_t
from optimiser.price_book import cheapest_purchase
from optimiser.shared_terms import Part, add_shared_terms, tied_together

_LEAST_BUY_T = 1e-7
"""Less than a tenth of a gram of product is a solver's rounding, not a purchase."""


@dataclass(frozen=True, slots=True, kw_only=True)
class OfferColumns:
    """The variables of one offer.

    ``bought`` is tonnes of product in a year; ``used`` is 1 where the offer is bought on, a sum of
    binaries, or None where the offer needs none. ``pieces`` holds per piece of its cost its tonnes,
    its binary (empty where it needs none) and its number.
    """

    bought: str
    used: Expression | None
    most_t: float
    pieces: tuple[tuple[str, str, Piece], ...]
    packs: str = ""


@dataclass(frozen=True, eq=False)
class PurchasingBlock:
    """The purchasing part of a model, and the way from a solution to a deal."""

    offers: Mapping[str, Offer]
    columns: Mapping[str, OfferColumns]
    costs: Mapping[str, Mapping[str, Expression]]
    demands: Mapping[str, Expression]
    shared: Mapping[str, Expression]

    def deal(self, values: Mapping[str, float], *, gap: float | None, solver: str) -> Deal:
        """Read the deal out of a solution.

        Within a reagent, demand is drawn from the cheapest delivered compound first, so a surplus
        shows on the dearer offer. What a solver's tolerance left short is bought on top.
        """
        buys: list[Buy] = []
        for reagent, demand in self.demands.items():
            bought, room = self._bought(reagent, values)
            demand_kg = max(demand.value(values), 0.0)
            if not bought and demand_kg > 0.0:
                bought = self._trace(reagent, demand_kg)
            if bought:
                demand_kg = self._covering(bought, room, demand_kg)
                buys += buys_of([(self.offers[k], t) for k, t in bought.items()], demand_kg)
        kept = [row for row in buys if row.bought_t_per_year > 0.0 or row.cost_per_year > 0.0]
        shared = {cause: amount.value(values) for cause, amount in self.shared.items()}
        return deal_of(kept, gap=gap, solver=solver, shared=shared)

    def _bought(
        self, reagent: str, values: Mapping[str, float]
    ) -> tuple[dict[str, float], dict[str, float]]:
        """Tonnes by offer without a solver's rounding, and how many more its piece takes."""
        bought: dict[str, float] = {}
        room: dict[str, float] = {}
        for key, offer in self.offers.items():
            if offer.reagent != reagent:
                continue
            columns = self.columns[key]
            tonnes = values[columns.bought]
            if columns.packs:
                tonnes = offer.pack_t * round(values[columns.packs])
            chosen = [p for _, use, p in columns.pieces if not use or values[use] > 0.5]
            is_used = columns.used is not None or offer.signed or tonnes > _LEAST_BUY_T
            if is_used and chosen:
                low = min(piece.low_t for piece in chosen)
                high = max(piece.high_t for piece in chosen)
                bought[key] = tonnes if columns.packs else min(max(tonnes, low), high)
                room[key] = 0.0 if columns.packs else high - bought[key]
        return bought, room

    def _trace(self, reagent: str, demand_kg: float) -> dict[str, float]:
        """Buy what is so little that the solver took it for nothing."""
        mine = [offer for offer in self.offers.values() if offer.reagent == reagent]
        deal = cheapest_purchase({reagent: demand_kg}, mine)
        return {row.offer: row.bought_t_per_year for row in deal.buys}

    def _covering(
        self, bought: dict[str, float], room: Mapping[str, float], demand_kg: float
    ) -> float:
        """Add what a solver's tolerance left short where there is room; return what is covered."""
        pure = {key: self.offers[key].kg_pure_per_t for key in bought}
        short = demand_kg - math.fsum(pure[key] * bought[key] for key in bought)
        if short <= 0.0:
            return demand_kg
        for key in sorted(room, key=lambda key: delivered_per_kg(self.offers[key], bought[key])):
            more = min(room[key], short / pure[key])
            bought[key] += more
            short -= more * pure[key]
            if short <= 0.0:
                return demand_kg
        return demand_kg - short


def add_purchasing(
    model: Model, offers: Sequence[Offer], demands: Mapping[str, Expression | float]
) -> PurchasingBlock:
    """Add to a model that every demand is bought, at the least cost.

    Parameters
    ----------
    model
        Gets the variables ``bought <offer>`` and ``used <offer>``, the rows ``cover <reagent>``,
        ``most <offer>`` and ``least <offer>`` and more for offers with several pieces, and the
        costs by cause (`optimiser.offer_cost.CAUSES`).
    offers
        Everything on offer; offers of reagents without demand are left out unless they are signed
        or belong to a bundle.
    demands
        Demand per reagent: a number, or an expression of variables that are in the model already.
        Ranges of those variables must bound it where an offer needs a binary. [kg pure/year]

    Returns
    -------
    PurchasingBlock
        Reads the deal out of a solution.

    Raises
    ------
    NoPurchase
        No offer sells a reagent that may be needed.
    ModelError
        A demand without upper end meets an offer that needs one.

    Notes
    -----
    For offers ``o`` of reagent ``r`` with strength ``s`` whose cost is straight on the pieces ``k``
    from ``l_k`` to ``u_k``, with fixed part ``f_k`` and slope ``p_k``::

        1000 sum_o s_o bought_o >= demand_r
        bought_o = sum_k x_ok,   l_k z_ok <= x_ok <= u_k z_ok,   sum_k z_ok <= 1,   z_ok in {0, 1}
        cost = sum_ok f_k z_ok + p_k x_ok

    This choice of pieces is the convex hull of one offer's cost, so no formulation of a single
    offer is tighter. Offers whose cost is convex and starts at 0 need no binaries: their pieces
    fill in order by themselves. Upper ends are the larger of a piece's own least and the highest
    need: buying beyond that never pays (suppliers' shares stretch them). Whole packs are integers.
    """
    wanted = {name: _as_expression(demand) for name, demand in demands.items()}
    wanted = {name: demand for name, demand in wanted.items() if model.highest(demand) > 0.0}
    sold = {offer.reagent for offer in offers}
    missing = [no_offer(name, sorted(sold)) for name in wanted if name not in sold]
    if missing:
        raise NoPurchase(missing)
    bundles = {o.bundle for o in offers if o.reagent in wanted and o.bundle}
    chosen = {
        o.offer: o
        for o in offers
        if pieces_of(o) and (o.reagent in wanted or o.signed or o.bundle in bundles)
    }
    demanded = {**{o.reagent: Expression() for o in chosen.values()}, **wanted}
    highest = {name: model.highest(demand) for name, demand in demanded.items()}
    columns, costs = {}, {}
    stretched = tied_together(tuple(chosen.values()))
    for key, offer in chosen.items():
        need_kg = highest[offer.reagent] + stretched.get(offer.reagent, 0.0)
        need_t = need_kg / offer.kg_pure_per_t
        columns[key] = _add_columns(model, offer, need_t, tied=offer.reagent in stretched)
        costs[key] = _add_costs(model, columns[key])
    for name, demand in wanted.items():
        cover = {
            columns[key].bought: offer.kg_pure_per_t
            for key, offer in chosen.items()
            if offer.reagent == name
        }
        terms = Expression(cover).plus(demand.times(-1.0)).terms
        model.add_row(f"cover {name}", terms, Sense.AT_LEAST, demand.constant)
        _add_somebody(
            model, name, demand, [columns[k] for k, o in chosen.items() if o.reagent == name]
        )
    parts = {
        key: Part(bought=one.bought, used=one.used, most_t=one.most_t, costs=costs[key])
        for key, one in columns.items()
    }
    shared = add_shared_terms(model, chosen, parts)
    return PurchasingBlock(chosen, columns, costs, demanded, shared)


def _as_expression(demand: Expression | float) -> Expression:
    return demand if isinstance(demand, Expression) else Expression({}, float(demand))


def _add_columns(model: Model, offer: Offer, need_t: float, *, tied: bool) -> OfferColumns:
    pieces, key = pieces_of(offer), offer.offer
    bought = f"bought {key}"
    if _needs_no_binary(pieces, forced=offer.signed) and not offer.pack_t and not tied:
        return _add_in_order(model, offer, pieces)
    if not math.isfinite(need_t):
        raise ModelError(unbounded_demand(offer.reagent, key))
    need_t = whole_packs_t(offer, need_t)
    ends = [min(piece.high_t, max(need_t, whole_packs_t(offer, piece.low_t))) for piece in pieces]
    most_t = max(ends)
    model.add_variable(bought, high=most_t)
    if len(pieces) == 1:
        used = model.add_variable(f"used {key}", high=1.0, integer=True)
        model.add_row(f"most {key}", {bought: 1.0, used: -most_t}, Sense.AT_MOST, 0.0)
        if pieces[0].low_t > 0.0:
            least = {bought: 1.0, used: -pieces[0].low_t}
            model.add_row(f"least {key}", least, Sense.AT_LEAST, 0.0)
        parts = [(bought, used, pieces[0])]
    else:
        parts = _add_pieces(model, key, pieces, ends)
    use = Expression({binary: 1.0 for _, binary, _ in parts})
    if offer.signed:
        model.add_row(f"signed {key}", use.terms, Sense.EQUAL, 1.0)
    packs = ""
    if offer.pack_t > 0.0:
        most = math.floor(most_t / offer.pack_t * (1.0 + 1e-9))
        packs = model.add_variable(f"packs {key}", high=float(most), integer=True)
        whole = {bought: 1.0, packs: -offer.pack_t}
        model.add_row(f"whole packs {key}", whole, Sense.EQUAL, 0.0)
    return OfferColumns(bought=bought, used=use, most_t=most_t, pieces=tuple(parts), packs=packs)


def _add_pieces(
    model: Model, key: str, pieces: Sequence[Piece], ends: Sequence[float]
) -> list[tuple[str, str, Piece]]:
    """Tonnes and binary of every piece; the offer's tonnes are their sum."""
    parts = []
    for number, (piece, end) in enumerate(zip(pieces, ends, strict=True), start=1):
        at = model.add_variable(f"bought {key} piece {number}", high=end)
        used = model.add_variable(f"used {key} piece {number}", high=1.0, integer=True)
        name = f"{key} piece {number}"
        model.add_row(f"most {name}", {at: 1.0, used: -end}, Sense.AT_MOST, 0.0)
        if piece.low_t > 0.0:
            least = {at: 1.0, used: -piece.low_t}
            model.add_row(f"least {name}", least, Sense.AT_LEAST, 0.0)
        parts.append((at, used, piece))
    total = {f"bought {key}": -1.0, **{at: 1.0 for at, _, _ in parts}}
    model.add_row(f"pieces {key}", total, Sense.EQUAL, 0.0)
    model.add_row(f"one piece {key}", {u: 1.0 for _, u, _ in parts}, Sense.AT_MOST, 1.0)
    return parts


def _add_in_order(model: Model, offer: Offer, pieces: Sequence[Piece]) -> OfferColumns:
    """An offer whose pieces fill in order: each is what is bought beyond its low end."""
    key, last = offer.offer, pieces[-1]
    bought = model.add_variable(f"bought {key}", high=last.high_t)
    if len(pieces) == 1:
        parts = [(bought, "", last)]
    else:
        parts = [
            (
                model.add_variable(f"bought {key} piece {number}", high=piece.high_t - piece.low_t),
                "", piece,
            )
            for number, piece in enumerate(pieces, start=1)
        ]  # fmt: skip
        total = {bought: -1.0, **{at: 1.0 for at, _, _ in parts}}
        model.add_row(f"pieces {key}", total, Sense.EQUAL, 0.0)
    return OfferColumns(bought=bought, used=None, most_t=last.high_t, pieces=tuple(parts))


def _needs_no_binary(pieces: Sequence[Piece], *, forced: bool) -> bool:
    """Whether the cost is convex from 0, with nothing to pay at 0 unless that is paid anyway."""
    first = pieces[0]
    if first.low_t > 0.0 or (first.total.fixed != 0.0 and not forced):
        return False
    totals = [piece.total for piece in pieces]
    return all(
        after.per_t >= before.per_t
        and math.isclose(after.at(piece.low_t), before.at(piece.low_t), rel_tol=1e-12, abs_tol=1e-9)
        for before, after, piece in zip(totals, totals[1:], pieces[1:], strict=False)
    )


def _add_somebody(
    model: Model, reagent: str, demand: Expression, columns: Sequence[OfferColumns]
) -> None:
    """Where something is needed and every offer has binaries, one of them is used.

    Solvers take a binary of a millionth for 0, which is enough to buy a trace on.
    """
    uses = [one.used for one in columns if one.used is not None]
    if len(uses) == len(columns) and model.highest(demand.times(-1.0)) < 0.0:
        terms = {binary: 1.0 for use in uses for binary in use.terms}
        model.add_row(f"use {reagent}", terms, Sense.AT_LEAST, 1.0)


def _add_costs(model: Model, columns: OfferColumns) -> dict[str, Expression]:
    """Charge every cause of every piece; pieces that fill in order pay their slope beyond 0."""
    costs: dict[str, Expression] = {}
    for number, (at, used, piece) in enumerate(columns.pieces):
        for cause, amount in piece.costs.items():
            charge = Expression({at: amount.per_t} if amount.per_t else {})
            if used and amount.fixed:
                charge = charge.plus(Expression({used: amount.fixed}))
            elif not used and number == 0:
                charge = charge.plus(Expression({}, amount.fixed))
            costs[cause] = costs.get(cause, Expression()).plus(charge)
    for cause, charge in costs.items():
        model.add_cost(cause, charge)
    return costs
