"""A real mine water beside the plan: need of caustic against the dose that was reported.

Water, dose and outcome: Lambeth & Andrews 2012, presentation at the EPA Hardrock Mining Conference,
Denver. The dose is 8 US gal a day of 30 % NaOH (1.33 kg/L, from memory) for 10 US gal/min, about
222 mg/L NaOH, to pH 9; every metal but aluminium met its criterion, aluminium stayed above. The
split of iron is not given, so both ends are run. Nothing here is tuned to the report.
"""

from __future__ import annotations

import sys
from functools import cache
from pathlib import Path

import pytest

from chemistry.state import EquilibriumState
from optimiser import assess, load_site, plan
from optimiser.outcome import Assessment, Plan
from optimiser.site import Site
from tests.optimiser.small_sites import dissolved_mg_per_l, dose_for_ph, row_of, settled

ENDS = ("ferric", "ferrous")
REPORTED_MG_PER_L = 222.0
REPORTED_PH = 9.0
NAOH_MG_PER_MEQ = 39.997
# mg/L in the feed, g/mol, hydroxides per metal
METALS = {"Al": (19.0, 26.982, 3), "Cu": (3.5, 63.546, 2), "Zn": (18.0, 65.38, 2)}
IRON_MG_PER_L, IRON_G_PER_MOL = 93.0, 55.845
IRON = {"ferric": ("Fe(III)", "Fe+3", 3), "ferrous": ("Fe(II)", "Fe+2", 2)}
DISSOLVED = {"Al": ("Al+3", 26.982), "Cu": ("Cu+2", 63.546), "Zn": ("Zn+2", 65.38),
             "Pb": ("Pb+2", 207.2)}  # fmt: skip


@cache
def site_of(end: str) -> Site:
    return load_site(Path(__file__).parent / "sites" / "mine_adit" / f"site_{end}.yaml")


@cache
def plan_of(end: str) -> Plan:
    return plan(site_of(end))


@cache
def need_mg_per_l(end: str) -> float:
    """Caustic that brings the water to the reported pH by equilibrium."""
    return dose_for_ph(site_of(end), "caustic_soda", REPORTED_PH, {})


@cache
def at_reported_ph(end: str) -> EquilibriumState:
    return settled(site_of(end), {"caustic_soda": need_mg_per_l(end)})


@cache
def as_reported(end: str) -> Assessment:
    return assess(site_of(end), {"caustic_soda": REPORTED_MG_PER_L}, trim="none")


def stoichiometry_mg_per_l(end: str) -> tuple[float, float]:
    """NaOH for every metal as its plain hydroxide, without and with the free acid of pH 2.9."""
    hydroxide = sum(count * mg / mass for mg, mass, count in METALS.values())
    hydroxide += IRON[end][2] * IRON_MG_PER_L / IRON_G_PER_MOL
    free_acid = 1000.0 * 10.0**-2.9
    return hydroxide * NAOH_MG_PER_MEQ, (hydroxide + free_acid) * NAOH_MG_PER_MEQ


def comparison() -> str:
    """The water's need beside the dose reported, and residuals beside what was seen."""
    lines = [
        "",
        "mine adit W01: 222 mg/L NaOH reported to pH 9; every metal met but Al (reported)",
        "iron     NaOH by stoichiometry  by equilibrium to pH 9  over reported  "
        "pH at 222 mg/L  dissolved at pH 9 [mg/L]",
    ]
    for end in ENDS:
        least, most = stoichiometry_mg_per_l(end)
        need = need_mg_per_l(end)
        water = at_reported_ph(end)
        iron = dissolved_mg_per_l(water, IRON[end][1], IRON_G_PER_MOL)
        residuals = ", ".join(
            f"{metal} {dissolved_mg_per_l(water, *key):.2g}" for metal, key in DISSOLVED.items()
        )
        lines.append(
            f"{end:<8} {least:4.0f} to {most:4.0f} mg/L      {need:4.0f} mg/L"
            f"               {need / REPORTED_MG_PER_L:.2f} x         "
            f"{as_reported(end).water['ph'].iloc[1]:.1f}             {residuals}, Fe {iron:.2g}"
        )
        lines.append(f"         {plan_of(end)!r}")
    return "\n".join(lines) + "\n"


def test_the_comparison_with_the_report_is_printed(capsys: pytest.CaptureFixture[str]) -> None:
    text = comparison()
    with capsys.disabled():
        sys.stdout.write(text)
    assert all(end in text for end in ENDS)


@pytest.mark.parametrize("end", ENDS)
def test_both_ends_have_a_plan_that_holds_again(end: str) -> None:
    made = plan_of(end)
    assert made.compliant
    again = assess(site_of(end), made.doses)
    assert again.compliant
    assert again.cost["total"] == pytest.approx(made.cost["total"], rel=1e-6)


@pytest.mark.parametrize("end", ENDS)
def test_need_by_equilibrium_is_near_full_hydroxide_stoichiometry(end: str) -> None:
    least, most = stoichiometry_mg_per_l(end)
    assert 0.92 * least < need_mg_per_l(end) < 1.05 * most


@pytest.mark.parametrize("end", ENDS)
def test_the_need_is_1_3_to_1_6_times_the_reported_dose(end: str) -> None:
    # the source's numbers do not close: hydroxysulfates and hydrolysed iron lower the real need
    assert 1.295 < need_mg_per_l(end) / REPORTED_MG_PER_L < 1.65


def test_ferrous_iron_needs_less_alkali_than_ferric() -> None:
    iron = IRON_MG_PER_L / IRON_G_PER_MOL * NAOH_MG_PER_MEQ
    difference = need_mg_per_l("ferric") - need_mg_per_l("ferrous")
    assert 0.5 * iron < difference < 1.2 * iron  # one hydroxide less per iron


@pytest.mark.parametrize("end", ENDS)
def test_the_reported_dose_falls_short_of_ph_9_and_of_the_limits(end: str) -> None:
    result = as_reported(end)
    assert float(result.water["ph"].iloc[1]) < REPORTED_PH
    assert not result.compliant
    assert not row_of(result, IRON[end][0])["meets"]


@pytest.mark.parametrize("end", ENDS)
def test_at_ph_9_copper_zinc_and_lead_meet_and_aluminium_is_what_stays(end: str) -> None:
    water = at_reported_ph(end)
    left = {name: dissolved_mg_per_l(water, *key) for name, key in DISSOLVED.items()}
    assert left["Cu"] < 0.3
    assert left["Zn"] < 1.5
    assert left["Pb"] < 0.6
    assert left["Al"] > 1.0  # aluminate: above any criterion that was met near neutral
    neutral = settled(
        site_of(end), {"caustic_soda": dose_for_ph(site_of(end), "caustic_soda", 6.5, {})}
    )
    assert left["Al"] > 10.0 * dissolved_mg_per_l(neutral, *DISSOLVED["Al"])


def test_ferric_iron_is_gone_at_ph_9_and_ferrous_is_not() -> None:
    ferric = dissolved_mg_per_l(at_reported_ph("ferric"), "Fe+3", IRON_G_PER_MOL)
    ferrous = dissolved_mg_per_l(at_reported_ph("ferrous"), "Fe+2", IRON_G_PER_MOL)
    assert ferric < 0.01
    assert ferrous > 2.0


def test_the_ferrous_plan_goes_to_a_higher_ph_than_the_reported_one() -> None:
    assert plan_of("ferrous").set_points[0]["ph_set_point"] > REPORTED_PH
    assert plan_of("ferric").set_points[0]["ph_set_point"] <= REPORTED_PH
