"""The sludge of a plan as plain data: what forms, what it weighs, which class it falls into."""

from __future__ import annotations

from typing import Any

from optimiser.evaluation import Evaluation, Evaluator

Data = dict[str, Any]

SMALLEST_SHOWN_KG_PER_D = 1e-6


def sludge_data(evaluator: Evaluator, seen: Evaluation, point: int) -> Data:
    """Solids by kind, dry and wet, with the class and the rule that set it; the dearest end's."""
    chosen = seen.priced.sludges[point]
    if chosen is None:
        return {}
    made, row, rule = chosen
    flow = evaluator.site.flow_m3_per_d / 1000.0
    per_year = evaluator.site.operating_days_per_year / 1000.0
    minerals = {s.name: s.mineral or s.name for s in evaluator.plant.system.solids}
    solids = made.masses_by_name(row, least_mg_per_l=SMALLEST_SHOWN_KG_PER_D / flow)
    dry = float(made.dry_mg_per_l[row]) * flow
    wet = float(made.wet_mg_per_l[row]) * flow
    text = rule.text or (
        f"first rule whose condition holds: {', '.join(rule.metals)} above "
        f"{rule.above_mg_per_kg_dry:g} mg/kg dry" if rule.metals else "no other rule applies"
    )  # fmt: skip
    return {
        "dry_kg_per_d_by_solid": {
            f"{name} ({minerals[name]})" if minerals[name] != name else name: mass * flow
            for name, mass in solids.items()
        },
        "unreacted_kg_per_d": float(made.unreacted_mg_per_l[row]) * flow,
        "feed_solids_kg_per_d": float(made.feed_particles_mg_per_l[row]) * flow,
        "polymer_kg_per_d": float(made.polymer_mg_per_l[row]) * flow,
        "dry_t_per_year": dry * per_year, "wet_t_per_year": wet * per_year,
        "cake_solids_fraction": made.cake_solids_fraction,
        "sludge_class": rule.sludge_class, "rule": text,
    }  # fmt: skip
