"""Effluents of lime-and-settle plants, with and without a filter, beside the prediction.

Use: ``python -m tests.reference.effluents``. The feed is a mixed metal-finishing rinse of common
practice (no source: the plants behind the published figures are not described one by one), limed to
pH 8.5 to 9.5; the solids that slip past are those that the same documents report. The mean is
predicted at pH 9 with the mean solids. The one-day maximum is the worst of pH 8.5, 9 and 9.5 with
the solids of the worst day: no ratio of maximum to mean goes into it, since the catalog takes those
from the same documents.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping
from functools import cache

import numpy as np

from optimiser.evaluation import Evaluator
from optimiser.points import Points
from tests.optimiser.small_sites import Tree, own, small_site
from tests.reference.cases import Case, computes, load_cases, readings_of

METALS = ("Cd", "Cr", "Cu", "Pb", "Ni", "Zn", "Fe")
PH_OF_DAYS = (8.5, 9.0, 9.5)
COMPARED = ("C02 means", "C02 worst day", "C03 means", "C08 one day")
FEED: Tree = {
    "feed": {
        "ph": 2.6, "close_charge_with": "SO4", "aerated": True, "tss_mg_per_l": 20,
        "analysis": {
            "Cu": "25 mg/L", "Ni": "25 mg/L", "Zn": "30 mg/L", "Cr(III)": "30 mg/L",
            "Fe(II)": "30 mg/L", "Pb": "3 mg/L", "Cd": "2 mg/L", "Na": "150 mg/L",
            "Ca": "40 mg/L", "Cl": "150 mg/L", "SO4": "500 mg/L", "CO3": "30 mg/L",
        },
    },
    "treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0},
}  # fmt: skip


@cache
def totals_mg_per_l(tss_mg_per_l: float, ph: float) -> Mapping[str, float]:
    """Predicted total of every metal, the higher of the ends that a plan is held to."""
    separator: Tree = {
        "treatment": {"separator": {"tss_mg_per_l": tss_mg_per_l, "capture_fraction": 0.5}}
    }
    limits = own(*({"parameter": metal, "daily_mg_per_l": 100} for metal in METALS))
    evaluator = Evaluator(small_site(FEED, separator, limits))
    lime = evaluator.plant.index["hydrated_lime"]
    point = Points(
        np.zeros((1, len(evaluator.plant.names))), np.array([lime]), np.array([ph]), np.array([-1])
    )
    judged = evaluator.evaluate(point, full=False).judged
    worst = np.max([part.value.max(axis=0) for part in judged], axis=0)
    names = [check.label for check in evaluator.judge.checks]
    return {metal: float(worst[names.index(metal)]) for metal in METALS}


@computes("C02 means", "C03 means")
def means(case: Case) -> Mapping[str, float]:
    return totals_mg_per_l(case.inputs["tss_mg_per_l"], 9.0)


@computes("C02 worst day", "C08 one day")
def worst_day(case: Case) -> Mapping[str, float]:
    days = [totals_mg_per_l(case.inputs["tss_mg_per_l"], ph) for ph in PH_OF_DAYS]
    return {metal: max(day[metal] for day in days) for metal in case.values}


def comparison() -> str:
    """The table of ratios, predicted over published."""
    rows = [f"{'metal':<6}" + "".join(f"{name:>28}" for name in COMPARED)]
    rows.append(" " * 6 + f"{'predicted published ratio':>28}" * len(COMPARED))
    for metal in METALS:
        cells = []
        for name in COMPARED:
            reading = readings_of(name).get(metal)
            cells.append(
                f"{'-':>28}" if reading is None else
                f"{reading.measured:>11.3g}{reading.expectation.reference:>10.3g}"
                f"{reading.ratio:>7.2f}"
            )  # fmt: skip
        rows.append(f"{metal:<6}" + "".join(cells))
    solids = "".join(f"{load_cases()[n].inputs['tss_mg_per_l']:>28g}" for n in COMPARED)
    return "\n".join([*rows, f"{'TSS':<6}{solids}"])


if __name__ == "__main__":
    sys.stdout.write(comparison() + "\n")
