"""Why there is no plan: which limits clash, how low each can go, and what stops it there."""

from __future__ import annotations

from typing import Any

import numpy as np

from optimiser.errors import NoPlan
from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator
from optimiser.points import END_TEXT
from optimiser.quality_slopes import RULE
from optimiser.search import Findings


def explain_no_plan(evaluator: Evaluator, findings: Findings) -> NoPlan:
    """Build the error that says why no recipe complies.

    Each limit's lowest reachable value is the least seen over all points examined; a limit clashes
    if even that misses its target, or if the best compromise misses it.
    """
    checks = evaluator.judge.checks
    best = min(findings.best.values(), key=lambda t: t.violation, default=None)
    missed = _missed(evaluator, best.place.seen, best.place.point) if best else {}
    clashes: list[dict[str, Any]] = []
    for number, check in enumerate(checks):
        lowest = float(findings.lowest[number]) if findings.lowest is not None else np.inf
        alone = lowest > check.target * np.exp(FEASIBLE_RATIO)
        if not alone and number not in missed:
            continue
        scale = check.variability
        clashes.append(
            {
                "limit": f"{check.label}, {check.averaging}"
                + (f" ({check.limit:g} {check.unit})" if check.averaging != RULE else ""),
                "lowest_reachable": lowest * scale,
                "target": check.target * scale,
                "reachable_alone": not alone,
                "best_compromise": missed.get(number, check.target) * scale,
                "stopped_by": _stopper(evaluator, findings, number),
            }
        )
    message = (
        f"no plan: none of the {len(findings.recipes_examined)} recipes examined meets every limit"
    )
    return NoPlan(message, reasons=_reasons(evaluator, findings, clashes), clashes=clashes)


def _missed(evaluator: Evaluator, seen: Evaluation, point: int) -> dict[int, float]:
    missed: dict[int, float] = {}
    for part in seen.judged:
        mine = (seen.rows.point[part.block.rows] == point) & part.block.reached
        for number in range(len(evaluator.judge.checks)):
            over = part.value[mine, number].max(initial=0.0)
            if part.ratio[mine, number].max(initial=-np.inf) > FEASIBLE_RATIO:
                missed[number] = max(missed.get(number, 0.0), float(over))
    return missed


def _reasons(evaluator: Evaluator, findings: Findings, clashes: list[dict[str, Any]]) -> list[str]:
    reasons = []
    together = [c["limit"] for c in clashes if c["reachable_alone"]]
    alone = [c["limit"] for c in clashes if not c["reachable_alone"]]
    if alone:
        reasons.append(f"out of reach whatever is dosed: {'; '.join(alone)}")
    if together:
        reasons.append(f"each within reach, but not together: {'; '.join(together)}")
    best = min(findings.best.values(), key=lambda t: t.violation, default=None)
    if best is not None:
        rules = [
            r.label for r in best.place.seen.rules if r.ratio[best.place.point] > FEASIBLE_RATIO
        ]
        if rules:
            reasons.append(f"the best compromise also breaks: {'; '.join(rules)}")
        recipe = ", ".join(
            evaluator.plant.names[i]
            for i in np.flatnonzero(best.place.seen.priced.doses[best.place.point] > 0.0)
        )
        reasons.append(f"nearest miss: {recipe} at pH {float(best.point.ph[0]):.2f}")
    if not clashes and not reasons:
        reasons.append("no set point and doses are left inside the site's windows and rules")
    return reasons


def _stopper(evaluator: Evaluator, findings: Findings, number: int) -> str:
    """What holds a limit's value up at the point where it is lowest."""
    check = evaluator.judge.checks[number]
    point = findings.lowest_point[number] if findings.lowest_point else None
    if point is None:
        return "no state examined reaches its set point"
    if check.burden:
        return _burden_stopper(evaluator, check.burden)
    if not check.metals:
        return check.source
    seen = evaluator.evaluate(point, full=False, all_ends=False)
    part = seen.judged[0]
    metal = max(check.metals, key=lambda m: part.residual[0, m] + part.carried[0, m])
    residual, carried = float(part.residual[0, metal]), float(part.carried[0, metal])
    floor = float(part.floor[0, metal])
    if floor > residual + carried:
        return "practical floor: no less is promised without a jar test"
    if carried > residual:
        return f"carry-over past the {evaluator.plant.treatment.separator.name}"
    return _leading_species(evaluator, seen, metal)


def _burden_stopper(evaluator: Evaluator, burden: str) -> str:
    feed = evaluator.plant.feed.burden_mg_per_l.get(burden, 0.0)
    return f"the feed brings {feed:.4g} mg/L and the doses add to it"


def _leading_species(evaluator: Evaluator, seen: Evaluation, metal: int) -> str:
    system = evaluator.plant.system
    weights = system.formation @ evaluator.judge.weights[metal]
    state = seen.blocks[0].state
    amounts = state.species_mol_per_l[0] * weights
    lead = int(np.argmax(amounts))
    share = 100.0 * amounts[lead] / max(float(amounts.sum()), 1e-300)
    name = system.species_names[lead]
    kind = "free ion" if lead < len(system.components) else "complex"
    return (
        f"dissolved as {name} ({kind}, {share:.0f} %) at pH {float(state.ph[0]):.1f}; "
        f"{END_TEXT[seen.blocks[0].end]}"
    )
