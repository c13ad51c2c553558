"""When to order how much over the weeks of a year: the mixed-integer model of one store.

Owns the model and what is read from its solution; where uses, prices and stores come from is
`optimiser.order_plan`.

Each week an offer may bring orders at its start, the use of the week is drawn evenly, and

- the stock of all offers of the store, with what is delivered, never exceeds the store;
- at the end of a week each offer's stock is at least its floor, and falls below the stock it began
  with no faster than it is used;
- the year ends with at least the opening stock, and at least the yearly total is ordered;
- what is there after a delivery is used, oldest first, before it is past its shelf life, or written
  off; that is planned only where more is bought than used, or where the least order outlasts its
  shelf life, and not to make room in the store.

Least cost of goods, freight, fees, holding and of what is written off. The relaxation is tight:
with ``n`` the use net of the floors, ``r`` the stock above them and ``Y`` the orders of a week,
every window of weeks ``t..l`` has ``r(t-1) + sum_j n(j..l) Y(j) >= n(t..l)``: what is used before
the first order of the window was there before (Barany, Van Roy & Wolsey, Strong formulations for
multi-item capacitated lot sizing, Management Science 30, 1984, 1255-1261; from memory). For one
offer whose orders may have any size these rows leave nothing to branch on where no other row
binds. A greatest order ``C`` and a most ``B`` that may be in stock before
``t`` add ``sum_(t<=j<=l) Y(j) >= ceil((n(t..l) - B) / C)``.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence

from optimiser.errors import Interrupted, ModelError
from optimiser.linear_model import Expression, Model, Sense
from optimiser.lot_offer import SLACK, Delivery, LotOffer, LotPlan
from optimiser.order_size import OrderPiece
from optimiser.solver import SolveReport, SolverPort, Termination

_NOTHING_T = 1e-6


def plan_lots(
    offers: Sequence[LotOffer], most_in_store: float, solver: SolverPort
) -> tuple[Mapping[str, LotPlan] | None, SolveReport]:
    """Find the cheapest orders of the offers that share a store.

    Parameters
    ----------
    offers
        All over the same weeks.
    most_in_store
        What the store holds, in the unit of ``volume_per_t``; infinite where it has no end.
    solver
        Decides; the gap it reports is relative to what orders and stock can change.

    Returns
    -------
    dict and report
        Plans by offer; None where no orders keep all rules.

    Raises
    ------
    Interrupted
        The time limit came before any solution.
    """
    model = Model("orders")
    add_lots(model, offers, most_in_store)
    report = solver.solve(model)
    if report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION:
        raise Interrupted(f"{report.solver} found no orders within its time limit")
    if report.termination is Termination.INFEASIBLE:
        return None, report
    if not report.termination.has_solution:
        raise ModelError(f"{report.solver} ended an order plan with: {report.termination.value}")
    return {offer.key: _read(offer, report.values) for offer in offers}, report


def add_lots(model: Model, offers: Sequence[LotOffer], most_in_store: float) -> None:
    """Add the orders of the offers that share a store to a model; see `plan_lots`."""
    for offer in offers:
        _add_offer(model, offer, most_in_store)
    _add_store(model, offers, most_in_store)


def _name(what: str, offer: LotOffer, week: int, *more: int) -> str:
    return ":".join([what, offer.key, *(f"{k}" for k in (week, *more))])


def _slots(offer: LotOffer, week: int) -> list[tuple[int, int, OrderPiece]]:
    """Places for an order in a week: delivery, number of the piece, piece."""
    every = itertools.product(range(offer.deliveries_per_week), enumerate(offer.pieces))
    return [(slot, k, piece) for slot, (k, piece) in every]


def _amounts(offer: LotOffer, week: int) -> dict[str, float]:
    """Terms that add up to what is delivered in a week."""
    return {_name("t", offer, week, slot, k): 1.0 for slot, k, _ in _slots(offer, week)}


def _counts(offer: LotOffer, week: int, factor: float = 1.0) -> dict[str, float]:
    """Terms that add up to the orders of a week."""
    return {_name("order", offer, week, slot, k): factor for slot, k, _ in _slots(offer, week)}


def _add_offer(model: Model, offer: LotOffer, most_in_store: float) -> None:
    weeks = range(len(offer.use_t))
    fits_t = most_in_store / offer.volume_per_t
    held = (offer.opening_t, *offer.held_floor_t)
    all_t = max(math.fsum(offer.use_t) + max(offer.held_floor_t), offer.least_total_t)
    for week in weeks:
        for slot, k, piece in _slots(offer, week):
            low = piece.low_t
            high = min(piece.high_t, fits_t - held[week], max(all_t, low))
            high = high if offer.may_waste else min(high, offer.reach_t(week))
            high = offer.in_packs(high)
            order = model.add_variable(
                _name("order", offer, week, slot, k), high=1.0 if low <= high else 0.0, integer=True
            )
            amount = model.add_variable(_name("t", offer, week, slot, k), high=max(high, 0.0))
            model.add_row(f"most {amount}", {amount: 1.0, order: -high}, Sense.AT_MOST, 0.0)
            if low > 0.0:
                model.add_row(f"least {amount}", {amount: 1.0, order: -low}, Sense.AT_LEAST, 0.0)
        _add_deliveries(model, offer, week)
        low = offer.held_floor_t[week]
        model.add_variable(_name("stock", offer, week), low=low)
        wasted = math.inf if offer.may_waste else 0.0
        model.add_variable(_name("off", offer, week), high=wasted)
        _add_balance(model, offer, week)
    _add_year(model, offer)
    _add_tightening(model, offer, fits_t)
    _add_costs(model, offer)


def _add_deliveries(model: Model, offer: LotOffer, week: int) -> None:
    """One piece an order, whole packs, and the first place is taken first."""
    pieces, last = range(len(offer.pieces)), None
    for slot in range(offer.deliveries_per_week):
        one = {_name("order", offer, week, slot, k): 1.0 for k in pieces}
        if len(pieces) > 1:
            model.add_row(_name("one", offer, week, slot), one, Sense.AT_MOST, 1.0)
        if last is not None:
            after = {**one, **dict.fromkeys(last, -1.0)}
            model.add_row(_name("first", offer, week, slot), after, Sense.AT_MOST, 0.0)
        last = one
        if offer.pack_t > 0.0:
            packs = model.add_variable(_name("packs", offer, week, slot), integer=True)
            terms = {_name("t", offer, week, slot, k): 1.0 for k in pieces}
            terms[packs] = -offer.pack_t
            model.add_row(_name("whole", offer, week, slot), terms, Sense.EQUAL, 0.0)


def _before(offer: LotOffer, week: int) -> tuple[dict[str, float], float]:
    """The stock before a week as terms and a constant."""
    if week == 0:
        return {}, offer.opening_t
    return {_name("stock", offer, week - 1): 1.0}, 0.0


def _add_balance(model: Model, offer: LotOffer, week: int) -> None:
    before, opening = _before(offer, week)
    terms = {
        **before, **_amounts(offer, week), _name("stock", offer, week): -1.0,
        _name("off", offer, week): -1.0,
    }  # fmt: skip
    rhs = offer.use_t[week] - opening
    model.add_row(_name("balance", offer, week), terms, Sense.EQUAL, rhs)


def _add_year(model: Model, offer: LotOffer) -> None:
    """The yearly total, the number of orders, and the shelf life."""
    weeks = range(len(offer.use_t))
    ordered = {key: a for week in weeks for key, a in _amounts(offer, week).items()}
    beyond = model.add_variable(f"beyond:{offer.key}")
    whole = {**ordered, beyond: -1.0}
    model.add_row(f"year:{offer.key}", whole, Sense.EQUAL, offer.least_total_t)
    if offer.orders is not None:
        counted = {key: a for week in weeks for key, a in _counts(offer, week).items()}
        model.add_row(f"orders:{offer.key}", counted, Sense.EQUAL, float(offer.orders))
    if offer.shelf_weeks is None:
        return
    for week in weeks:
        until = range(week, week + offer.shelf_weeks)
        used = offer.reach_t(week)
        before, opening = _before(offer, week)
        off = {_name("off", offer, k): -1.0 for k in until if k < len(offer.use_t)}
        terms = {**before, **_amounts(offer, week), **off}
        model.add_row(_name("fresh", offer, week), terms, Sense.AT_MOST, used - opening)


def _add_tightening(model: Model, offer: LotOffer, fits_t: float) -> None:
    """The rows of the module's docstring; they cut no plan off."""
    held = (offer.opening_t, *offer.held_floor_t)
    net = [u + b - a for u, (a, b) in zip(offer.use_t, itertools.pairwise(held), strict=True)]
    for first in range(len(net)):
        before, _ = _before(offer, first)
        for last in range(first, len(net)):
            needed = math.fsum(net[first : last + 1])
            if needed > fits_t + net[last]:
                break
            terms, left = dict(before), needed
            for week in range(first, last + 1):
                terms |= _counts(offer, week, left)
                left = max(left - net[week], 0.0)
            above = held[first] if before else 0.0
            key = _name("window", offer, first, last)
            model.add_row(key, terms, Sense.AT_LEAST, needed + above)
    _add_counts(model, offer, net, fits_t)


def _add_counts(model: Model, offer: LotOffer, net: Sequence[float], fits_t: float) -> None:
    """Least number of orders in windows, by the largest order and the most that may be before."""
    weeks = range(len(net))
    held = (offer.opening_t, *offer.held_floor_t)
    full = [fits_t if offer.may_waste else min(fits_t, offer.reach_t(week)) for week in weeks]
    largest = offer.in_packs(min(max(piece.high_t for piece in offer.pieces), max(full)))
    if not 0.0 < largest < math.inf:
        return
    for first in weeks:
        before = full[first - 1] - offer.use_t[first - 1] - held[first] if first else 0.0
        if math.isinf(before):
            continue
        counted: dict[str, float] = {}
        seen = 0
        for last in range(first, len(net)):
            counted |= _counts(offer, last)
            least = math.ceil((math.fsum(net[first : last + 1]) - before) / largest - SLACK)
            if least > seen:  # the first window that needs one order more
                key = _name("count", offer, first, last)
                model.add_row(key, counted, Sense.AT_LEAST, float(least))
                seen = least


def _add_costs(model: Model, offer: LotOffer) -> None:
    """All costs, less the least total at the lowest rates: that is paid whatever is decided.

    What is ordered beyond it pays the lowest rates through a variable of its own, so that no
    constant dilutes the solver's gap.
    """
    goods = min(piece.goods_per_t for piece in offer.pieces)
    freight = min(piece.freight_per_t for piece in offer.pieces)
    beyond = f"beyond:{offer.key}"
    terms: dict[str, dict[str, float]] = {
        "goods": {beyond: goods}, "freight": {beyond: freight}, "fees": {},
    }  # fmt: skip
    for week, fee in enumerate(offer.fees):
        for slot, k, piece in _slots(offer, week):
            amount, order = _name("t", offer, week, slot, k), _name("order", offer, week, slot, k)
            dearer = {"goods": piece.goods_per_t - goods, "freight": piece.freight_per_t - freight}
            terms["goods"] |= {amount: dearer["goods"], order: piece.goods_fixed}
            terms["freight"] |= {amount: dearer["freight"], order: piece.freight_fixed}
            terms["fees"][order] = fee
    for cause, cost in terms.items():
        model.add_cost(cause, Expression(cost))
    weeks = range(len(offer.use_t))
    stock = {_name("stock", offer, week): offer.holding_per_t_and_week for week in weeks}
    model.add_cost("holding", Expression(stock))
    off = {_name("off", offer, week): offer.value_per_t for week in weeks}
    model.add_cost("written off", Expression(off))


def _add_store(model: Model, offers: Sequence[LotOffer], most_in_store: float) -> None:
    if math.isinf(most_in_store):
        return
    for week in range(len(offers[0].use_t)):
        terms: dict[str, float] = {}
        room = most_in_store
        for offer in offers:
            before, opening = _before(offer, week)
            room -= offer.volume_per_t * opening
            there = {**before, **_amounts(offer, week)}
            terms |= {key: a * offer.volume_per_t for key, a in there.items()}
        model.add_row(f"store:{week}", terms, Sense.AT_MOST, room)


def _read(offer: LotOffer, values: Mapping[str, float]) -> LotPlan:
    deliveries = []
    for week in range(len(offer.use_t)):
        for slot, k, piece in _slots(offer, week):
            tonnes = _tidy(values[_name("t", offer, week, slot, k)])
            if tonnes > _NOTHING_T:
                deliveries.append(
                    Delivery(
                        week=week, tonnes=tonnes, goods=piece.goods(tonnes),
                        freight=piece.freight(tonnes),
                    )
                )  # fmt: skip
    weeks = range(len(offer.use_t))
    return LotPlan(
        deliveries=tuple(deliveries),
        stock_t=tuple(_tidy(values[_name("stock", offer, week)]) for week in weeks),
        written_off_t=tuple(_tidy(values[_name("off", offer, week)]) for week in weeks),
    )


def _tidy(tonnes: float) -> float:
    """Drop the dust of the solver's arithmetic: 1 mg and below."""
    return round(tonnes, 9) + 0.0
