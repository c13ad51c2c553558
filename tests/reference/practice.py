"""Practice as the catalogs hold it, copper carried over with solids, the charge-balance error."""

from __future__ import annotations

from collections.abc import Mapping

from catalogs.limit_sets import SetLimit, load_limit_sets
from catalogs.practice_data import practical_floor, variability_of
from chemistry.feed import charge_balance_error_percent
from optimiser import assess
from optimiser.combined_flow import alternative_limit_mg_per_l, treated_ceiling_mg_per_l
from tests.optimiser.small_sites import Tree, own, small_site
from tests.reference.cases import Case, computes


@computes("C01")
def practical_floors(case: Case) -> Mapping[str, float]:
    return {name: practical_floor(*name.split("/")).floor_mg_per_l for name in case.values}


@computes("C02")
def one_day_over_mean(case: Case) -> Mapping[str, float]:
    return {name: variability_of(name).daily_ratio for name in case.values}


@computes("C04")
def metal_finishing_limits(case: Case) -> Mapping[str, float]:
    sets = load_limit_sets()
    existing, new = (
        {limit.parameter: limit for limit in sets[case.inputs[which]].limits}
        for which in ("existing", "new")
    )
    found = {}
    for name in case.values:
        *which, parameter, averaging = name.split()
        found[name] = _ceiling((new if which else existing)[parameter], averaging)
    return found


def _ceiling(limit: SetLimit, averaging: str) -> float:
    value = limit.daily_mg_per_l if averaging == "daily" else limit.monthly_mg_per_l
    assert value is not None
    return value


@computes("C07")
def copper_carried_over(case: Case) -> Mapping[str, float]:
    """A copper water at pH 9 behind a separator that lets the case's solids through."""
    water: Tree = {
        "feed": {"analysis": {"Zn": None}},
        "treatment": {
            "separator": {"tss_mg_per_l": case.inputs["tss_mg_per_l"], "capture_fraction": 0.1}
        },
        "disposal": {"bound_water_factor": 1.0},
    }
    limit = own({"parameter": "Cu", "daily_mg_per_l": 20.0})
    data = assess(small_site(water, limit), {"caustic_soda": 180.0}, trim="none").data
    (copper,) = data["limits"]
    return {"total": case.inputs["dissolved_mg_per_l"] + copper["carry_over"]}


@computes("I01")
def charge_balance(case: Case) -> Mapping[str, float]:
    return {
        "error": charge_balance_error_percent(
            case.inputs["cations_meq_per_l"], case.inputs["anions_meq_per_l"]
        )
    }


@computes("I02")
def combined_wastestreams(case: Case) -> Mapping[str, float]:
    given = case.inputs
    (treated, _), (partner, _) = given["treated"], given["partner"]
    alternative = alternative_limit_mg_per_l(
        [tuple(given["treated"]), tuple(given["partner"])], total_m3_per_d=given["total"],
        dilute_m3_per_d=given["dilute"],
    )  # fmt: skip
    others = [(partner, given["partner_mg_per_l"]), tuple(given["unregulated"]),
              (given["dilute"], 0.0)]  # fmt: skip
    return {
        "alternative": alternative,
        "ceiling": treated_ceiling_mg_per_l(alternative, treated, others),
    }
