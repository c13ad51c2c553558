"""`plan`: from a site to its cheapest verified plan, or to the reasons why there is none."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from typing import Any

from optimiser.bound import Bound, joined
from optimiser.bound_tree import prove
from optimiser.describe import describe
from optimiser.diagnosis import explain_no_plan
from optimiser.errors import FeedRefused, Interrupted, VerificationFault
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.next_points import SETTLE_STEP
from optimiser.outcome import Plan
from optimiser.plan_purchases import price_exactly
from optimiser.runners_up import finish
from optimiser.runners_up import runners_up as others_of
from optimiser.sample_search import SampleSearch, has_many, no_plan_on_samples
from optimiser.search import Findings, Search
from optimiser.separators import choose_separator, separator_sites
from optimiser.site import Site
from optimiser.site_salt import MODEL_TEXT
from optimiser.solver import require_warm_linear, solver_from

RUNNERS_UP = 5
# Largest ionic strength planned on unless the site says otherwise, by activity model. [mol/L]
LARGEST_IONIC_STRENGTH = {"davies": 1.0, "sit": 3.0, "ideal": 1.0}


def plan(
    site: Site,
    progress: Callable[[str], None] | None = None,
    *,
    prove_s: float | None = None,
    runners_up: int = RUNNERS_UP,
) -> Plan:
    """Find the cheapest plan that the full equilibrium confirms.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    progress
        Called with a line of text now and then.
    prove_s
        Seconds to spend on a lower bound of what any plan of the site costs; without it the proof
        is a search. [s]
    runners_up
        How many other recipes to tell of at most.

    Raises
    ------
    NoPlan
        No recipe that the site allows meets every limit; says which clash and what stops them.
    FeedRefused
        The water is too salty for the activity model and the site does not say to go on.
    Interrupted
        The time limit came before a verified plan was found.
    SolverUnavailable
        A package that the site's solver or the proof needs is missing.
    VerificationFault
        No find holds when its states are solved afresh.
    """
    if prove_s is not None:
        require_warm_linear()
    begun = time.perf_counter()
    evaluator, findings = find(site, progress)
    finished(evaluator, findings, runners_up)
    bound: Bound | None = None
    refuted: list[str] = []
    if prove_s is not None and findings.whole is not None:
        refuted.append("no lower bound of the cost is worked out for a feed of many samples")
    elif prove_s is not None:
        _, refuted = _verified(evaluator, findings)
        bound = _proven(site, evaluator, findings, prove_s, progress)
    return plan_of(evaluator, findings, begun, bound, runners_up=runners_up, refuted=refuted)


def finished(evaluator: Evaluator, findings: Findings, runners_up: int = RUNNERS_UP) -> None:
    """Polish the runners-up of a search to the end and price the best recipes exactly."""
    with findings.timed("runners-up"):
        finish(evaluator, findings, solver_from(evaluator.site.solver), runners_up)
    price_exactly(evaluator, findings)


def _proven(
    site: Site, evaluator: Evaluator, findings: Findings, seconds: float,
    progress: Callable[[str], None] | None,
) -> Bound:  # fmt: skip
    """Bound every plan of a site, whatever separator it chooses: the least bound counts."""
    least = findings.feasible[0][1].total
    options = separator_sites(site)
    if len(options) == 1:
        return prove(evaluator, least, seconds=seconds, progress=progress)
    share = seconds / len(options)
    bounds = [prove(Evaluator(o), least, seconds=share, progress=progress) for o in options]
    return joined(bounds)


def plan_of(
    evaluator: Evaluator,
    findings: Findings,
    begun: float,
    bound: Bound | None = None,
    *,
    runners_up: int = RUNNERS_UP,
    refuted: Sequence[str] = (),
) -> Plan:
    """Describe the best of a search's findings as a plan; ``begun`` is `time.perf_counter`'s.

    ``bound`` is what is proven of plans that cost less, ``refuted`` what did not hold when it was
    verified afresh.

    Raises
    ------
    FeedRefused
        The plan's water is too salty for the activity model.
    VerificationFault
        No find holds when its states are solved afresh.
    """
    seen, more = _verified(evaluator, findings)
    runners = others_of(evaluator, findings, solver_from(evaluator.site.solver), runners_up)
    solved = evaluator
    evaluator = findings.whole or evaluator
    strength = max(float(b.state.ionic_strength.max()) for b in seen.blocks)
    refuse_salty(evaluator.site, strength, "the plan's water")
    proof = _proof(solved, findings)
    if bound is not None:
        proof |= bound.to_dict()
        findings.seconds["bound"] = bound.seconds
    data = describe(evaluator, seen, 0, proof=proof, extra=[*refuted, *more])
    data["runners_up"], data["runners_up_left_out"] = runners
    data["separators"] = [dict(row) for row in findings.separators]
    data["proof"]["seconds"] = {
        **findings.seconds, "total": time.perf_counter() - begun,
    }  # fmt: skip
    return Plan(doses=data["doses"], cost=data["cost"], compliant=data["compliant"], data=data)


def _verified(evaluator: Evaluator, findings: Findings) -> tuple[Evaluation, list[str]]:
    """Solve the cheapest find afresh; what does not hold leaves the findings, with a word on it.

    Raises
    ------
    VerificationFault
        None of them holds.
    """
    refuted: list[str] = []
    for recipe, track in findings.feasible:
        seen = findings.certified.get(recipe)
        if seen is None:
            seen = evaluator.evaluate(track.point, slopes=False)
        if seen.feasible[0]:
            return seen, refuted
        del findings.best[recipe]
        refuted.append(
            f"{' + '.join(recipe)} at {track.total:,.0f} {evaluator.site.currency} a year was "
            "found and left out: it did not hold when its states were solved afresh"
        )
    raise VerificationFault(len(refuted))


def find(site: Site, progress: Callable[[str], None] | None = None) -> tuple[Evaluator, Findings]:
    """Search a site; the first of ``findings.feasible`` is the plan.

    Where the site may choose its separator, the evaluator is that of the best one.

    Raises
    ------
    NoPlan, FeedRefused, Interrupted
        As `plan` does.
    """
    if site.treatment.separator_options:
        chosen = choose_separator(site, lambda option: _search(option, progress))
        chosen.findings.separators = chosen.rows
        return chosen.evaluator, chosen.findings
    return _search(site, progress)


def _search(site: Site, progress: Callable[[str], None] | None) -> tuple[Evaluator, Findings]:
    evaluator = Evaluator(site)
    refuse_salty(site, evaluator.plant.feed.ionic_strength, "the feed")
    solver = solver_from(site.solver)
    search = Search(
        evaluator, solver, time_limit_s=site.solver.time_limit_s,
        progress=progress,
    )  # fmt: skip
    findings = search.run()
    if has_many(evaluator) and findings.best:
        samples = SampleSearch(evaluator, findings, solver, bounds=search.bounds, progress=progress)
        evaluator, findings = samples.run()
    if not findings.feasible:
        if findings.stopped_early:
            raise Interrupted(
                f"stopped after {site.solver.time_limit_s:g} s before a verified plan was found: "
                "raise the time limit or allow fewer reagents"
            )
        if findings.whole is not None:
            raise no_plan_on_samples(findings)
        raise explain_no_plan(evaluator, findings, solver)
    return evaluator, findings


def refuse_salty(site: Site, ionic_strength: float, what: str) -> None:
    """Refuse waters above the activity model's range unless the site says to go on.

    Raises
    ------
    FeedRefused
        The ionic strength exceeds that of `LARGEST_IONIC_STRENGTH`.
    """
    model = site.system.activity_model
    largest = LARGEST_IONIC_STRENGTH[model.name]
    if too_salty(site, ionic_strength):
        raise FeedRefused(
            f"{site.path}: {what} has an ionic strength of {ionic_strength:.2f} mol/L; the "
            f"activity model, {MODEL_TEXT[model.name]}, is trusted to about "
            f"{model.trusted_to_mol_per_l:g} and refused above {largest:g}.\n    Set treatment."
            "salty_water_allowed: true to plan all the same, and confirm by bench tests."
        )


def too_salty(site: Site, ionic_strength: float) -> bool:
    """Whether a water is above the activity model's range and the site does not say to go on."""
    largest = LARGEST_IONIC_STRENGTH[site.system.activity_model.name]
    return ionic_strength > largest and not site.treatment.salty_water_allowed


def _proof(evaluator: Evaluator, findings: Findings) -> dict[str, Any]:
    return {
        "kind": "searched",
        "statement": "no cheaper plan was found among the recipes and cells examined",
        "recipes_examined": len(findings.recipes_examined),
        "recipes_ruled_out": len(findings.recipes_ruled_out),
        "recipes_allowed": findings.recipes_allowed,
        "most_reagents": findings.most_reagents,
        "cells_examined": findings.cells_examined,
        "states_examined": evaluator.plant.states_solved,
        "smallest_step_percent": 100.0 * SETTLE_STEP,
        "stopped_early": findings.stopped_early,
    }
