"""Contracts compared: for each candidate the cheapest verified plan if it were signed.

Owns what signing an offer means for the plan, and the figures for the meeting; recipes come from
one search and are polished anew under each contract.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from optimiser.deal import Deal
from optimiser.errors import NoPurchase, UnknownOffer, VerificationFault
from optimiser.evaluation import Evaluator, Place
from optimiser.nearby import RADIUS, Standing, changed, point_data, stand
from optimiser.offer import Offer
from optimiser.plan_purchases import deal_of_point, exact_costs, exact_place, purchase_rows
from optimiser.planning import find
from optimiser.polish import Track, polish_each
from optimiser.recipes import set_point_bounds
from optimiser.runners_up import finish
from optimiser.site import Site
from optimiser.solver import solver_from

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]
Group = tuple[Offer, ...]

RECIPES_FINISHED = 8
RECIPES_TRIED = 4
STEPS = 8
MONTHS = 12.0

SCOPE = (
    "recipes are those of one search, polished anew under each contract and verified afresh by the "
    "equilibrium; a recipe that only a contract would bring to the fore may be missed"
)


@dataclass(frozen=True, eq=False, kw_only=True)
class ContractComparison:
    """What each candidate would cost and save.

    Attributes
    ----------
    data
        The plain data of `to_dict`.
    """

    data: Data = field(repr=False)

    def to_dict(self) -> Data:
        """Everything as plain data, what ``--json`` prints."""
        return self.data

    def to_frame(self) -> pd.DataFrame:
        """Return one row per candidate, the plan without a new contract first."""
        import pandas as pd

        rows = []
        for row in (self.data["best"], *self.data["candidates"]):
            flat = {key: value for key, value in row.items() if not isinstance(value, (dict, list))}
            flat["offers"] = " + ".join(row["offers"])
            flat["recipe"] = " + ".join(row["reagents"])
            rows.append(flat)
        return pd.DataFrame(rows)


@dataclass(frozen=True, eq=False, kw_only=True)
class Signing:
    """A site on which offers are signed: its offers, what is forced, and one-off fees by year."""

    site: Site
    terms: tuple[str, ...]
    alone: frozenset[str]
    """Reagents that the candidate supplies alone and that the plan has to use."""
    fees_per_year: float


def commits(offer: Offer) -> bool:
    """Whether an offer obliges to a yearly amount where it is signed."""
    yearly = offer.least_order_per == "year" and offer.least_order_t > 0.0
    return offer.take_or_pay_t > 0.0 or yearly


def sign(site: Site, group: Group) -> Signing:
    """The site if these offers were signed.

    Parameters
    ----------
    site
        The site.
    group
        Offers that are signed together.

    Notes
    -----
    An offer that obliges to a yearly amount (take-or-pay, or a least amount per year) is signed:
    that amount is due whatever is dosed, and other offers may be bought beside it. An offer that
    obliges to nothing says something only where it is bought, so it supplies all of its reagent,
    in a recipe that uses it. A bundle is signed as a whole and supplies its reagents alone.
    """
    ids = {offer.offer for offer in group}
    alone = frozenset(o.reagent for o in group if not commits(o) or o.bundle)
    signed, fees = [], 0.0
    for offer in site.offers:
        if offer.offer in ids and (commits(offer) or offer.bundle):
            fees += offer.mobilisation_fee * offer.currency_rate / offer.term_years
            signed.append(replace(offer, signed=True, bundle=""))
        elif offer.offer in ids or offer.signed or offer.reagent not in alone:
            signed.append(offer)
    return Signing(
        site=replace(site, offers=tuple(signed)), terms=tuple(_terms(offer) for offer in group),
        alone=frozenset(o.reagent for o in group if not commits(o)), fees_per_year=fees,
    )  # fmt: skip


def _terms(offer: Offer) -> str:
    if not commits(offer):
        return f"all {offer.reagent.replace('_', ' ')}"
    yearly = offer.least_order_t if offer.least_order_per == "year" else 0.0
    return f"{max(offer.take_or_pay_t, yearly):g} t a year due"


def compare_contracts(
    site: Site, candidates: Sequence[Sequence[str]] = (),
    progress: Callable[[str], None] | None = None,
) -> ContractComparison:  # fmt: skip
    """Find, for each candidate, the cheapest verified plan if it were signed.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`, with its offers.
    candidates
        Ids of offers that are signed together, one sequence a candidate; left out: every offer by
        itself that is not signed yet (a bundle as a whole).
    progress
        Called with a line of text now and then.

    Raises
    ------
    UnknownOffer
        A candidate is no offer that the site may buy from, or is signed already.
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does.
    """
    begun = time.perf_counter()
    groups = _groups(site, candidates)
    pool = Pool.of(site, progress)
    best = _best(pool)
    rows = []
    for group in groups:
        if progress is not None:
            progress(f"contract {' + '.join(offer.offer for offer in group)}")
        rows.append(_candidate(pool, group))
    rows.sort(key=lambda row: (row["total"] is None, row["total"] or 0.0, row["offers"]))
    today = _today(pool.plan.evaluator.site)
    years = _years(site, groups)
    for row in (best, *rows):
        row.update(_figures(site, row, best, today, years))
    data = {
        "site": site.name, "currency": site.currency, "term_years": years,
        "last_year_bill": site.procurement.last_year_bill, "today": today, "best": best,
        "candidates": rows, "scope": SCOPE, "notes": [n for n in site.notes if "offer " in n],
        "seconds": time.perf_counter() - begun,
    }  # fmt: skip
    return ContractComparison(data=data)


def _groups(site: Site, candidates: Sequence[Sequence[str]]) -> list[Group]:
    """Offers of each candidate; bundles are completed."""
    known = {offer.offer: offer for offer in site.offers}
    if not candidates:
        candidates = [[o.offer] for o in site.offers if not o.signed]
    groups: dict[tuple[str, ...], Group] = {}
    for names in candidates:
        for name in names:
            if name not in known or known[name].signed:
                raise UnknownOffer(name, [o.offer for o in site.offers if not o.signed])
        bundles = {known[name].bundle for name in names} - {""}
        group = tuple(o for o in site.offers if o.offer in names or o.bundle in bundles)
        groups.setdefault(tuple(offer.offer for offer in group), group)
    return list(groups.values())


@dataclass(frozen=True, eq=False, kw_only=True)
class Pool:
    """The plan of a site and the other recipes of its search, all polished to the end."""

    plan: Standing
    others: tuple[Track, ...]

    @classmethod
    def of(cls, site: Site, progress: Callable[[str], None] | None = None) -> Pool:
        """Search a site."""
        evaluator, findings = find(site, progress)
        solver = solver_from(site.solver)
        finish(evaluator, findings, solver, RECIPES_FINISHED)
        (_, first), *rest = findings.feasible
        plan = stand(evaluator, solver, first)
        return cls(plan=plan, others=tuple(track for _, track in rest))

    def cheapest(self, signing: Signing) -> tuple[Evaluator, Track] | None:
        """The cheapest verified point under signed offers; None where no recipe can be bought."""
        base = self.plan.evaluator
        forced = changed(base, replace(signing.site, treatment=base.site.treatment))
        ranked = sorted(
            (cost, k, track)
            for k, track in enumerate((self.plan.track, *self.others))
            if math.isfinite(cost := _screened(base, forced, signing, track.place))
        )
        if not ranked:
            return None
        tracks = polish_each(
            forced, [track.place for _, _, track in ranked[:RECIPES_TRIED]], self.plan.solver,
            bounds=set_point_bounds(forced), steps=STEPS, radius=RADIUS,
        )  # fmt: skip
        bought = [b for t in tracks if t.feasible and (b := _exact(forced, t.place)) is not None]
        for track in sorted(bought, key=lambda t: t.total):
            seen = forced.evaluate(track.point, slopes=False)
            if seen.feasible[0]:
                return forced, _exact(forced, Place(seen, 0)) or track
        return None


def _exact(evaluator: Evaluator, place: Place) -> Track | None:
    """The place with its exact cost; None where it cannot be bought."""
    try:
        return Track(exact_place(evaluator, place))
    except NoPurchase:
        return None


def _screened(base: Evaluator, forced: Evaluator, signing: Signing, place: Place) -> float:
    """Cost of a point as it stands under other offers; infinite where it may not be bought."""
    priced, row, total = place.seen.priced, place.point, float(place.seen.total[place.point])
    for i, name in enumerate(base.plant.names):
        dose = priced.doses[row, i] + priced.trim_doses[row, i]
        if dose <= 0.0 and name in signing.alone:
            return math.inf
        kg = np.array([dose * base.pricing.kg_per_mg_per_l])
        for sign_of_cost, pricing in ((1.0, forced.pricing), (-1.0, base.pricing)):
            if dose > 0.0 or pricing.book.sunk(name):
                goods, freight = pricing.purchase(i, kg)
                total += sign_of_cost * float(goods[0] + freight[0])
    return total


def _best(pool: Pool) -> Data:
    """The plan without a new contract."""
    plan = pool.plan
    signing = Signing(site=plan.evaluator.site, terms=(), alone=frozenset(), fees_per_year=0.0)
    row = _row(pool, (), signing)
    if row["total"] is None:
        raise VerificationFault(1 + len(pool.others))
    return row


def _candidate(pool: Pool, group: Group) -> Data:
    return _row(pool, group, sign(pool.plan.evaluator.site, group))


_EMPTY: Data = {
    "total": None, "cost": {}, "reagents": [], "controller": None, "ph_set_point": None,
    "doses": {}, "purchases": [], "bill_per_year": None, "bought_t_per_year": None,
    "verified": False,
}  # fmt: skip


def _row(pool: Pool, group: Group, signing: Signing) -> Data:
    row: Data = {
        "offers": [offer.offer for offer in group],
        "suppliers": list(dict.fromkeys(offer.supplier for offer in group)),
        "terms": list(signing.terms), "why": None,
    }  # fmt: skip
    used = sorted({o.reagent for o in group} - set(pool.plan.evaluator.plant.names))
    if used:
        return {**row, **_EMPTY, "why": f"{', '.join(used)} is not allowed at this site"}
    found = pool.cheapest(signing)
    if found is None:
        why = "no recipe that is known to comply can be bought under it"
        return {**row, **_EMPTY, "why": why}
    forced, track = found
    try:
        cost, deal = exactly(forced, track.place)
    except NoPurchase as none:
        return {**row, **_EMPTY, "why": "; ".join(none.reasons)}
    fees = signing.fees_per_year
    if fees:
        cost = {**cost, "mobilisation": fees, "total": cost.pop("total") + fees}
    mine = [buy for buy in deal.buys if buy.offer in row["offers"]]
    return {
        **row, **point_data(forced, track.place), "total": cost["total"], "cost": cost,
        "purchases": purchase_rows(forced, deal), "bill_per_year": deal.cost["total"] + fees,
        "bought_t_per_year": math.fsum(buy.bought_t_per_year for buy in mine), "verified": True,
    }  # fmt: skip


def exactly(evaluator: Evaluator, place: Place) -> tuple[dict[str, float], Deal]:
    """Cost of a point by cause with the total last, and its purchases.

    Raises
    ------
    NoPurchase
        Terms that tie offers together leave no way to buy its doses.
    """
    deal = deal_of_point(evaluator, place.seen.priced, place.point)
    return exact_costs(evaluator, place.seen.priced, place.point, deal), deal


def _today(site: Site) -> Data | None:
    """What the doses of today cost by the same rules."""
    from optimiser.assessment import assess

    if not site.today:
        return None
    found = assess(site, site.today)
    return {
        "doses": dict(site.today), "total": found.cost["total"], "compliant": found.compliant
    }  # fmt: skip


def _years(site: Site, groups: Sequence[Group]) -> float:
    terms = [offer.term_years for group in groups for offer in group]
    given = site.procurement.term_years
    return max(terms, default=1.0) if given is None else given


def _figures(site: Site, row: Data, best: Data, today: Data | None, years: float) -> Data:
    """What the meeting asks: differences, changing over, payback, cost over the term."""
    total, terms = row["total"], site.procurement
    if total is None:
        return dict.fromkeys(_FIGURES)
    known = today["doses"] if today is not None else best["doses"]
    running = {key.partition("@")[0] for key, dose in known.items() if dose > 0.0}
    new = sorted({key.partition("@")[0] for key in row["doses"]} - running)
    switching = math.fsum(terms.switching_costs.get(name, 0.0) for name in new)
    saving = None if today is None else today["total"] - total
    payback = None
    if saving is not None and saving > 0.0:
        payback = MONTHS * switching / saving
    last = terms.last_year_bill
    values = (
        total - best["total"], new, switching, saving, payback, years * total + switching,
        None if last is None else row["bill_per_year"] - last,
    )  # fmt: skip
    return dict(zip(_FIGURES, values, strict=True))


_FIGURES = (
    "dearer_than_best_per_year", "new_reagents", "switching_cost", "saving_per_year",
    "payback_months", "cost_over_term", "change_of_bill_per_year",
)  # fmt: skip
