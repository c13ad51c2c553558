"""Terms that tie offers together: bundles, framework agreements and the shares of suppliers.

Owns their rows in the purchasing block; what they mean is written in `optimiser.offer`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from optimiser.errors import ModelError, unbounded_demand
from optimiser.linear_model import Expression, Model, Sense
from optimiser.offer import Framework, Offer
from optimiser.offer_cost import FEES, GOODS, REBATE, pieces_of

_STRETCH = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """An offer in the block: its tonnes, its use (a sum of binaries), most tonnes and costs."""

    bought: str
    used: Expression | None
    most_t: float
    costs: Mapping[str, Expression]


def is_shared(offer: Offer) -> bool:
    """Whether some term ties the offer to others."""
    return bool(offer.bundle) or offer.framework is not None or _has_share(offer)


def tied_together(offers: Sequence[Offer]) -> dict[str, float]:
    """How much more than the demand may pay, by reagent, where offers are tied. [kg/year]

    A least order of one supplier may call for more from the others, so that it stays under its
    share; a framework's rebate may be worth buying more of any of its products.
    """
    stretched = {o.reagent: 0.0 for o in offers if is_shared(o)}
    for reagent in {o.reagent for o in offers if _has_share(o)}:
        lows = math.fsum(_low_kg(o) for o in offers if o.reagent == reagent)
        stretched[reagent] += _STRETCH * lows
    for offer in offers:
        if offer.framework is not None and offer.framework.rebate_fraction > 0.0:
            stretched[offer.reagent] += offer.kg_pure_per_t * offer.framework.rebate_above_t
    return stretched


def no_common_ground() -> str:
    """Say that the terms contradict each other at this demand."""
    return (
        "the volume caps, least orders, suppliers' shares and bundles leave no way to buy this "
        "demand; relax one of them or add an offer"
    )


def add_shared_terms(
    model: Model, offers: Mapping[str, Offer], parts: Mapping[str, Part]
) -> dict[str, Expression]:
    """Add the rows of bundles, frameworks and suppliers' shares.

    Returns
    -------
    dict
        Costs by cause that belong to no single offer; they are charged already.

    Notes
    -----
    With ``B`` the binary of a bundle, its offers have ``used = B``, and every other unsigned offer
    of its reagents ``used <= 1 - B``. With ``F`` that of a framework its offers have
    ``used <= F``; its rebate ``R`` is at most its share of the goods, and 0 unless the tonnes reach
    the threshold. With ``A_S`` the kg pure bought from supplier ``S``, ``T`` from all and ``M`` the
    most of ``T``::

        A_S <= most_share T,     A_S >= least_share T - least_share M (1 - used_o)
    """
    for bundle in sorted({o.bundle for o in offers.values() if o.bundle}):
        _add_bundle(model, bundle, offers, parts)
    for reagent in sorted({o.reagent for o in offers.values() if _has_share(o)}):
        mine = {key: o for key, o in offers.items() if o.reagent == reagent}
        _add_shares(model, mine, parts)
    frameworks = {o.framework.name: o.framework for o in offers.values() if o.framework}
    shared: dict[str, Expression] = {}
    for name, framework in sorted(frameworks.items()):
        under = {k: parts[k] for k, o in offers.items() if o.framework and o.framework.name == name}
        for cause, amount in _add_framework(model, framework, under).items():
            shared[cause] = shared.get(cause, Expression()).plus(amount)
    return shared


def _add_framework(
    model: Model, framework: Framework, parts: Mapping[str, Part]
) -> dict[str, Expression]:
    name = framework.name
    tonnes = {part.bought: 1.0 for part in parts.values()}
    costs: dict[str, Expression] = {}
    if math.isfinite(framework.most_t):
        model.add_row(f"most of framework {name}", tonnes, Sense.AT_MOST, framework.most_t)
    if framework.fee_per_year > 0.0:
        binary = model.add_variable(f"framework {name}", high=1.0, integer=True)
        for key, part in parts.items():
            if part.used is not None:
                row = {**part.used.terms, binary: -1.0}
                model.add_row(f"{key} under {name}", row, Sense.AT_MOST, 0.0)
        costs[FEES] = Expression({binary: framework.fee_per_year})
    if framework.rebate_fraction > 0.0:
        costs[REBATE] = _add_framework_rebate(model, framework, parts)
    for cause, amount in costs.items():
        model.add_cost(cause, amount)
    return costs


def _add_framework_rebate(
    model: Model, framework: Framework, parts: Mapping[str, Part]
) -> Expression:
    name, goods = framework.name, Expression()
    for part in parts.values():
        for cause in (GOODS, REBATE):
            goods = goods.plus(part.costs.get(cause, Expression()))
    most = framework.rebate_fraction * max(model.highest(goods), 0.0)
    rebate = model.add_variable(f"rebate of {name}", high=most)
    reached = model.add_variable(f"rebate of {name} reached", high=1.0, integer=True)
    share = Expression({rebate: 1.0}).plus(goods.times(-framework.rebate_fraction))
    model.add_row(f"share of {name}", share.terms, Sense.AT_MOST, -share.constant)
    model.add_row(f"only if {name}", {rebate: 1.0, reached: -most}, Sense.AT_MOST, 0.0)
    volume = {**{part.bought: 1.0 for part in parts.values()}, reached: -framework.rebate_above_t}
    model.add_row(f"volume of {name}", volume, Sense.AT_LEAST, 0.0)
    return Expression({rebate: -1.0})


def _add_bundle(
    model: Model, bundle: str, offers: Mapping[str, Offer], parts: Mapping[str, Part]
) -> None:
    binary = model.add_variable(f"bundle {bundle}", high=1.0, integer=True)
    inside = {key for key, o in offers.items() if o.bundle == bundle}
    reagents = {offers[key].reagent for key in inside}
    for key, offer in offers.items():
        used = parts[key].used
        if used is None:
            continue
        if key in inside:
            both = {**used.terms, binary: -1.0}
            model.add_row(f"bundled {key}", both, Sense.EQUAL, 0.0)
        elif offer.reagent in reagents and not offer.signed:
            either = {**used.terms, binary: 1.0}
            model.add_row(f"{key} or bundle {bundle}", either, Sense.AT_MOST, 1.0)


def _add_shares(model: Model, offers: Mapping[str, Offer], parts: Mapping[str, Part]) -> None:
    total = Expression({parts[key].bought: o.kg_pure_per_t for key, o in offers.items()})
    most_kg = math.fsum(parts[key].most_t * o.kg_pure_per_t for key, o in offers.items())
    for supplier in sorted({o.supplier for o in offers.values()}):
        mine = {key: o for key, o in offers.items() if o.supplier == supplier}
        part = Expression({parts[key].bought: o.kg_pure_per_t for key, o in mine.items()})
        name = f"{supplier} {next(iter(mine.values())).reagent}"
        most = min(o.most_share_fraction for o in mine.values())
        if most < 1.0:
            row = part.plus(total.times(-most)).terms
            model.add_row(f"most of {name}", row, Sense.AT_MOST, 0.0)
        for key, offer in mine.items():
            share = offer.least_share_fraction
            if share <= 0.0:
                continue
            used = parts[key].used
            if used is None or not math.isfinite(most_kg):
                raise ModelError(unbounded_demand(offer.reagent, key))
            away = Expression(used.terms, 0.0).times(-share * most_kg)
            row = part.plus(total.times(-share)).plus(away).terms
            model.add_row(f"least of {key}", row, Sense.AT_LEAST, -share * most_kg)


def _has_share(offer: Offer) -> bool:
    return offer.least_share_fraction > 0.0 or offer.most_share_fraction < 1.0


def _low_kg(offer: Offer) -> float:
    return offer.kg_pure_per_t * max(piece.low_t for piece in pieces_of(offer))
