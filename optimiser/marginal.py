"""What a little more or less of a limit, the margin or the sludge tariff costs, near the plan.

Owns the change of one figure of the site, the first-order cost from the prices of the last step's
model, and the re-solve that checks it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from optimiser.costing import DISPOSAL
from optimiser.nearby import Standing, changed, repolish, worst_ratios
from optimiser.polish_step import build_step, cost_unit, in_cost_units
from optimiser.quality import DAILY, LOAD, MONTHLY, MONTHLY_LOAD
from optimiser.quality_slopes import RULE
from optimiser.recipes import set_point_bounds
from optimiser.site import Limit, Site
from optimiser.surcharges import surcharge_rows

Data = dict[str, Any]

BINDING_RATIO = 1e-3  # a check binds when it is within this share of its target
MODEL_RADIUS = 2e-3
CHANGE = 0.01
TARIFF_RISE = 0.10
MARGIN_STEP = 0.01
LEAST_PRICE = 1e-9

_FIELDS = {
    DAILY: "daily_mg_per_l", MONTHLY: "monthly_mg_per_l", LOAD: "daily_load_kg_per_d",
    MONTHLY_LOAD: "monthly_load_kg_per_d",
}  # fmt: skip


def marginal_costs(plan: Standing) -> list[Data]:
    """Cost of every binding limit, the design margin and the sludge tariff, near the plan.

    Returns
    -------
    list of dict
        ``first_order_per_year`` from the row prices of the step model, ``resolved_per_year`` from
        a plan polished under the change, ``looser_per_year`` the same for the change the other way;
        None where no plan was found near by. [currency/year]

    Notes
    -----
    A check asks ``ln(value / target) <= 0``; ``1 %`` off its target moves the right-hand side of
    its rows by ``ln 0.99``. With row prices ``y`` (change of the least cost per unit of right-hand
    side) the cost changes by ``ln 0.99 sum(y)`` to first order. The tariff changes the cost by its
    share of it, since the plan is at rest. All of it is local: another recipe is not looked for.
    """
    prices = _check_prices(plan)
    checks, _ = worst_ratios(plan.evaluator, plan.place)
    rows = [
        _limit_row(plan, int(number), prices)
        for number in np.flatnonzero(checks >= -BINDING_RATIO)
        if plan.evaluator.judge.checks[number].averaging != RULE
    ]
    return [*rows, *_margin_row(plan, prices), *_tariff_row(plan), *_surcharge_rows(plan)]


def slack_limits(plan: Standing) -> list[Data]:
    """Limits that do not bind, the tightest first, with how far the plan stays below its target.

    A little more or less of them changes nothing near the plan: their marginal cost is 0.
    """
    checks, _ = worst_ratios(plan.evaluator, plan.place)
    rows = [
        {
            "parameter": check.label, "averaging": check.averaging,
            "below_target_percent": -100.0 * float(np.expm1(ratio)),
        }
        for check, ratio in zip(plan.evaluator.judge.checks, checks, strict=True)
        if check.averaging != RULE and ratio < -BINDING_RATIO
    ]  # fmt: skip
    return sorted(rows, key=lambda row: float(row["below_target_percent"]))


def binding_otherwise(plan: Standing) -> list[str]:
    """Rules, and ends of the set point and of doses, that the plan stands at."""
    evaluator, point = plan.evaluator, plan.track.point
    checks, rules = worst_ratios(evaluator, plan.place)
    texts = [
        check.label
        for check, ratio in zip(evaluator.judge.checks, checks, strict=True)
        if check.averaging == RULE and ratio >= -BINDING_RATIO
    ]
    texts += [
        rule.label
        for rule, ratio in zip(plan.place.seen.rules, rules, strict=True)
        if ratio >= -BINDING_RATIO
    ]
    bounds = set_point_bounds(evaluator)
    controller, doses = int(point.controller[0]), point.doses[0]
    if controller >= 0:
        low, high = bounds.ph_low(controller, doses), bounds.ph_high(controller, doses)
        if abs(point.ph[0] - low) < 1e-3:
            texts.append(f"lowest set point allowed, pH {low:.2f}")
        if abs(point.ph[0] - high) < 1e-3:
            texts.append(f"highest set point allowed, pH {high:.2f}")
    for i in np.flatnonzero(doses > 0.0):
        name = evaluator.plant.reagents[i].name
        if doses[i] <= bounds.dose_low[i] * (1.0 + BINDING_RATIO):
            texts.append(f"least real dose of {name}, {bounds.dose_low[i]:g} mg/L")
        if doses[i] >= bounds.dose_high[i] * (1.0 - BINDING_RATIO):
            texts.append(f"dose ceiling of {name}, {bounds.dose_high[i]:g} mg/L")
    return list(dict.fromkeys(texts))


def _check_prices(plan: Standing) -> dict[int, float]:
    """Row prices of the last step's model, added up by check. [currency/year per unit of ratio]"""
    evaluator = plan.evaluator
    model = build_step(
        evaluator, plan.place.seen, plan.place.point, MODEL_RADIUS, set_point_bounds(evaluator)
    )
    unit = cost_unit(plan.place.seen, plan.place.point)
    report = plan.solver.solve(in_cost_units(model, unit))
    if report.termination.has_solution and model.integers:
        report = plan.solver.solve_with_integers_fixed(model, report.values)
    prices: dict[int, float] = {}
    for key, price in report.marginal_values.items():
        words = key.split()
        if words[0] == "check":
            prices[int(words[1])] = prices.get(int(words[1]), 0.0) + price * unit
    return prices


def _limit_row(plan: Standing, number: int, prices: Mapping[int, float]) -> Data:
    check = plan.evaluator.judge.checks[number]
    tight = with_limits(plan.evaluator.site, {number: 1.0 - CHANGE})
    loose = with_limits(plan.evaluator.site, {number: 1.0 + CHANGE})
    return {
        "kind": "burden cap" if check.burden else "limit", "parameter": check.label,
        "averaging": check.averaging, "value": check.limit, "unit": check.unit,
        "change": "1 % tighter",
        "first_order_per_year": _first_order(prices.get(number, 0.0), np.log(1.0 - CHANGE)),
        "resolved_per_year": _difference(plan, tight),
        "looser_per_year": _difference(plan, loose),
    }  # fmt: skip


def _margin_row(plan: Standing, prices: Mapping[int, float]) -> list[Data]:
    site = plan.evaluator.site
    margin = site.design_margin
    if margin <= MARGIN_STEP:
        return []
    checks = plan.evaluator.judge.checks
    price = sum(p for number, p in prices.items() if checks[number].averaging != RULE)
    tight = replace(site, design_margin=margin - MARGIN_STEP)
    loose = replace(site, design_margin=margin + MARGIN_STEP)
    return [
        {
            "kind": "design margin", "parameter": "design margin", "averaging": "",
            "value": margin, "unit": "", "change": f"{margin:g} to {margin - MARGIN_STEP:g}",
            "first_order_per_year": _first_order(price, np.log1p(-MARGIN_STEP / margin)),
            "resolved_per_year": _difference(plan, tight),
            "looser_per_year": _difference(plan, loose) if loose.design_margin <= 1.0 else None,
        }
    ]  # fmt: skip


def _tariff_row(plan: Standing) -> list[Data]:
    place = plan.place
    chosen = place.seen.priced.sludges[place.point]
    if chosen is None:
        return []
    cost = float(place.seen.priced.by_cause[DISPOSAL][place.point])
    site, rule = plan.evaluator.site, chosen[2]
    return [
        {
            "kind": "sludge tariff", "parameter": f"sludge tariff, {rule.sludge_class}",
            "averaging": "", "value": rule.tariff_per_wet_t, "unit": f"{site.currency}/t wet",
            "change": "10 % dearer", "first_order_per_year": TARIFF_RISE * cost,
            "resolved_per_year": _difference(plan, _with_tariff(site, 1.0 + TARIFF_RISE)),
            "looser_per_year": _difference(plan, _with_tariff(site, 1.0 - TARIFF_RISE)),
        }
    ]  # fmt: skip


def _surcharge_rows(plan: Standing) -> list[Data]:
    """Rates per kilogram that the plan pays, each a little dearer."""
    site = plan.evaluator.site
    charged = surcharge_rows(plan.evaluator, plan.place.seen, plan.place.point)
    numbers = [n for n, limit in enumerate(site.limits) if limit.surcharge_per_kg is not None]
    return [
        {
            "kind": "surcharge", "parameter": f"surcharge on {row['parameter']}", "averaging": "",
            "value": row["rate_per_kg"], "unit": f"{site.currency}/kg", "change": "10 % dearer",
            "first_order_per_year": TARIFF_RISE * row["cost_per_year"],
            "resolved_per_year": _difference(plan, _with_rate(site, number, 1.0 + TARIFF_RISE)),
            "looser_per_year": _difference(plan, _with_rate(site, number, 1.0 - TARIFF_RISE)),
        }
        for number, row in zip(numbers, charged, strict=True)
        if row["cost_per_year"] > 0.0
    ]  # fmt: skip


def _with_rate(site: Site, number: int, factor: float) -> Site:
    limits = list(site.limits)
    rate = limits[number].surcharge_per_kg
    assert rate is not None, "only limits with a rate are charged"
    limits[number] = replace(limits[number], surcharge_per_kg=factor * rate)
    return replace(site, limits=tuple(limits))


def _first_order(price: float, step: float) -> float:
    change = float(price * step)
    return change if abs(change) > LEAST_PRICE else 0.0


def _difference(plan: Standing, site: Site) -> float | None:
    """Cost of the plan polished under a changed site, less the plan's."""
    track = repolish(changed(plan.evaluator, site), plan.place, plan.solver)
    return track.total - plan.total if track.feasible else None


def _with_tariff(site: Site, factor: float) -> Site:
    rules = tuple(
        replace(rule, tariff_per_wet_t=factor * rule.tariff_per_wet_t)
        for rule in site.disposal.rules
    )
    return replace(site, disposal=replace(site.disposal, rules=rules))


def with_limits(site: Site, factors: Mapping[int, float]) -> Site:
    """The site with the limits behind some checks multiplied; checks stand in their order."""
    position = 0
    limits = list(site.limits)
    for i, limit in enumerate(limits):
        for name in _FIELDS.values():
            value = getattr(limit, name)
            if value is None:
                continue
            if position in factors:
                limits[i] = _replaced(limits[i], name, factors[position] * value)
            position += 1
    if any(number >= position for number in factors):
        raise ValueError(f"a check of {sorted(factors)} belongs to no limit")
    return replace(site, limits=tuple(limits))


def _replaced(limit: Limit, name: str, value: float) -> Limit:
    if name == "daily_mg_per_l":
        return replace(limit, daily_mg_per_l=value)
    if name == "monthly_mg_per_l":
        return replace(limit, monthly_mg_per_l=value)
    if name == "monthly_load_kg_per_d":
        return replace(limit, monthly_load_kg_per_d=value)
    return replace(limit, daily_load_kg_per_d=value)
