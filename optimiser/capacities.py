"""What a plan asks of pumps, feeders, tanks and silos, on an average day and at the peak.

Owns the comparison of feed rates with what is installed; the installation is `Site.dosing`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from catalogs.reagents import ProductForm, Reagent
from optimiser.site import Dosing, FeedRange, Offer, Site

Data = dict[str, Any]

HOURS_PER_DAY = 24.0


def capacities(site: Site, feeding: Sequence[Mapping[str, Any]]) -> list[Data]:
    """Rates of every product that a plan feeds, and what does not fit.

    Parameters
    ----------
    site
        The problem; ``peak_flow_m3_per_d`` and ``dosing`` may be missing, and then only the rates
        and the days of stock that are known are given.
    feeding
        Rows of `Describer.feeding`: the dose, and the highest dose that any state takes.

    Notes
    -----
    The average rate is the dose at the average flow; the peak rate is the highest dose of any
    corner at the peak flow. A pump or feeder has to hold both ends of that range: the least is the
    lowest dose at the average flow.
    """
    offers = {offer.offer: offer for offer in site.offers}
    rows = []
    for feed in feeding:
        offer = offers[feed["offer"]]
        installed = site.dosing.get(feed["reagent"], Dosing())
        rows.append(_row(site, feed, offer, installed))
    return rows


def _row(site: Site, feed: Mapping[str, Any], offer: Offer, installed: Dosing) -> Data:
    peak_flow = site.peak_flow_m3_per_d or site.flow_m3_per_d
    product_per_mg = 1.0 / (1000.0 * offer.strength_fraction * HOURS_PER_DAY)

    def kg_per_h(dose_mg_per_l: float, flow_m3_per_d: float) -> float:
        return dose_mg_per_l * flow_m3_per_d * product_per_mg

    rates = {
        "least": kg_per_h(feed["alarm_low_mg_per_l"], site.flow_m3_per_d),
        "average": kg_per_h(feed["dose_mg_per_l"], site.flow_m3_per_d),
        "peak": kg_per_h(feed["alarm_high_mg_per_l"], peak_flow),
    }
    stock_t = _stock_t(installed, offer)
    per_day = rates["average"] * HOURS_PER_DAY / 1000.0
    problems = [
        *_rate_problems(rates, offer, installed),
        *_store_problems(offer, stock_t),
        *_cold(site.reagents[feed["reagent"]], offer, installed),
    ]
    return {
        "key": feed["key"], "reagent": feed["reagent"], "offer": offer.offer,
        **{f"{name}_kg_per_h": rate for name, rate in rates.items()},
        **{f"{name}_l_per_h": rate / offer.density_kg_per_l for name, rate in rates.items()},
        "days_of_stock": stock_t / per_day if stock_t is not None and per_day > 0.0 else None,
        "problems": problems,
    }  # fmt: skip


def _stock_t(installed: Dosing, offer: Offer) -> float | None:
    if installed.store_t is not None:
        return installed.store_t
    return None if installed.store_m3 is None else installed.store_m3 * offer.density_kg_per_l


def _rate_problems(rates: Mapping[str, float], offer: Offer, installed: Dosing) -> list[str]:
    problems: list[str] = []
    if installed.pump_l_per_h is not None:
        by_volume = {name: rate / offer.density_kg_per_l for name, rate in rates.items()}
        problems += _outside(by_volume, installed.pump_l_per_h, "pump", "L/h")
    if installed.feeder_kg_per_h is not None:
        problems += _outside(rates, installed.feeder_kg_per_h, "feeder", "kg/h")
    dissolver = installed.dissolver_kg_per_h
    if dissolver is not None and rates["peak"] > dissolver:
        problems.append(
            f"the dissolver makes down {dissolver:g} kg/h, the peak takes {rates['peak']:.3g}"
        )
    return problems


def _outside(rates: Mapping[str, float], held: FeedRange, what: str, unit: str) -> list[str]:
    problems = []
    if rates["peak"] > held.high:
        problems.append(
            f"the {what} gives at most {held.high:g} {unit}, the peak takes {rates['peak']:.3g}"
        )
    if rates["least"] < held.low:
        problems.append(
            f"the {what} turns down to {held.low:g} {unit}, the least is {rates['least']:.3g}"
        )
    return problems


def _store_problems(offer: Offer, stock_t: float | None) -> list[str]:
    if stock_t is None or offer.least_order_t <= stock_t:
        return []
    return [f"the store holds {stock_t:.3g} t, the least order is {offer.least_order_t:g} t"]


def _cold(reagent: Reagent, offer: Offer, installed: Dosing) -> list[str]:
    """Whether the product crystallises in the store as cold as it gets."""
    form = _nearest_form(reagent, offer)
    if form is None or installed.lowest_degc is None or form.crystallises_below_degc is None:
        return []
    if installed.lowest_degc >= form.crystallises_below_degc:
        return []
    return [
        f"{form.form} of {100.0 * form.strength_fraction:g} % crystallises below "
        f"{form.crystallises_below_degc:g} C, the store gets as cold as {installed.lowest_degc:g}: "
        "heat and insulate it, or buy a weaker product"
    ]


def _nearest_form(reagent: Reagent, offer: Offer) -> ProductForm | None:
    """The catalogued form of the offer's kind whose strength is nearest."""
    same = [f for f in reagent.product_forms if f.form == offer.form] or list(reagent.product_forms)
    return min(same, key=lambda f: abs(f.strength_fraction - offer.strength_fraction), default=None)
