"""Whole plans against optima that follow by hand from published stoichiometry and constants.

Each site is read from files by the real reader; each optimum is priced by hand from its own recipe
and by `assess`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import pytest

from optimiser import NoPlan, plan
from optimiser.site import Site
from tests.optimiser import hand_chemistry as hand
from tests.optimiser.closed_form_sites import (
    BOUND_WATER,
    M3_PER_YEAR,
    PRICES,
    closed_site,
    costly_plant,
    feed,
    floor,
    held,
    mol_per_l,
    priced_right,
    window,
)
from tests.optimiser.small_sites import Tree, row_of
from tests.reference.cases import Expectation, load_cases


def published(case: str, value: str) -> Expectation:
    """A published value with its own tolerance; its source stands beside it."""
    return load_cases()[case].values[value]


# -- the dose for a target residual ---------------------------------------------------------------


def silver_site(silver_mg_per_l: float = 20.0) -> Site:
    return closed_site(
        ("sodium_chloride",), ("Ag", 0.5), feed(7.0, "SO4", Ag=silver_mg_per_l, Na=200.0),
        floor("Ag", "chloride"),
    )  # fmt: skip


def test_salt_for_silver_is_the_common_ion_dose() -> None:
    """Solubility product and chloro complexes: sources in `hand_chemistry.salt_for_silver`."""
    answer = hand.salt_for_silver(
        mol_per_l(20, hand.AG), mol_per_l(200, hand.NA), mol_per_l(0.5, hand.AG)
    )
    held(silver_site(), "sodium_chloride", hand.NACL, answer, hand.AG + hand.CL)


def test_each_further_gram_of_silver_takes_the_published_salt() -> None:
    """Stoichiometry, case G12; the excess over it is that of the target and hardly moves."""
    low, high = plan(silver_site(20.0)), plan(silver_site(60.0))
    dose = high.doses["sodium_chloride"] - low.doses["sodium_chloride"]
    assert published("G12", "NaCl/Ag").met_by(dose / 40.0)


def test_salt_alone_cannot_pass_the_published_minimum_of_silver() -> None:
    """Least silver over its chloride, 0.03 to 0.07 mg/L whatever is dosed: case D02."""
    low, high = published("D02", "shipped").limits()
    change: Tree = {"limits": {"own": [
        {"parameter": "Ag", "daily_mg_per_l": low, "source": "invented"}
    ]}}  # fmt: skip
    site = closed_site(
        ("sodium_chloride",), ("Ag", high), feed(7.0, "SO4", Ag=20.0, Na=200.0),
        floor("Ag", "chloride"),
    )  # fmt: skip
    assert plan(site).compliant
    below = closed_site(
        ("sodium_chloride",), ("Ag", low), feed(7.0, "SO4", Ag=20.0, Na=200.0),
        floor("Ag", "chloride"), change,
    )  # fmt: skip
    with pytest.raises(NoPlan) as caught:
        plan(below)
    assert low < float(str(caught.value.clashes[0]["lowest_reachable"])) < high


def test_sulfate_for_barium_is_the_common_ion_dose() -> None:
    """BaSO4 9.97 (Blount 1977: 9.98; CRC Handbook 1.08e-10); BaSO4(aq) 2.49 (IUPAC database)."""
    answer = hand.sulfate_for_metal(
        mol_per_l(30, hand.BA), mol_per_l(200, hand.NA), mol_per_l(0.2, hand.BA),
        ksp=-9.97, pairs=(2.49,),
    )  # fmt: skip
    site = closed_site(
        ("sodium_sulfate",), ("Ba", 0.2), feed(7.0, "Cl", Ba=30.0, Na=200.0),
        floor("Ba", "sulfate"),
    )  # fmt: skip
    held(site, "sodium_sulfate", hand.NA_2_SO_4, answer, hand.BA + hand.SULFATE)


def test_sulfate_for_lead_is_the_common_ion_dose() -> None:
    """PbSO4 7.79 and PbSO4(aq) 2.72, Pb(SO4)2-2 3.47, PbOH+ -7.46 (Powell et al. 2009).

    Chloro complexes 1.59, 1.80, 1.7 and 1.4 (Martell & Smith).
    """
    lead, sodium = mol_per_l(150, hand.PB), mol_per_l(100, hand.NA)
    acid = hand.free_acid(3.5, lambda found: sodium + 3.0 * lead + found)
    answer = hand.sulfate_for_metal(
        lead, sodium, mol_per_l(5, hand.PB), ksp=-7.79, pairs=(2.72, 3.47),
        chlorides=(1.59, 1.80, 1.7, 1.4), hydroxide=-7.46, acid=acid,
    )  # fmt: skip
    site = closed_site(
        ("sodium_sulfate",), ("Pb", 5.0), feed(3.5, "Cl", Pb=150.0, Na=100.0),
        floor("Pb", "sulfate"), window(3.0, 10.0), costly_plant(40000),
    )  # fmt: skip
    held(site, "sodium_sulfate", hand.NA_2_SO_4, answer, hand.PB + hand.SULFATE)


def test_calcium_for_sulfate_is_the_dose_of_gypsum_saturation() -> None:
    """Gypsum 4.59, CaSO4(aq) 2.30: sources in `hand_chemistry.calcium_for_sulfate`."""
    answer = hand.calcium_for_sulfate(
        mol_per_l(6000, hand.SULFATE), mol_per_l(100, hand.CL), mol_per_l(5200, hand.SULFATE)
    )
    prices = {"calcium_chloride": (36.0, 1.36, 19.0, 5.0)}
    site = closed_site(
        ("calcium_chloride",), ("SO4", 5200.0),
        feed(7.0, "Na", Cu=0.001, SO4=6000.0, Cl=100.0), costly_plant(600000), prices=prices,
    )  # fmt: skip
    gypsum = hand.CA + hand.SULFATE + 2.0 * (2.0 * hand.H + hand.OXYGEN)
    held(site, "calcium_chloride", hand.CACL_2, answer, gypsum, prices)


def test_lime_leaves_the_published_sulfate_and_cannot_meet_1000_mg_per_l() -> None:
    """Lime into 0.05 mol/L sulfuric acid to pH 7 leaves 1400 to 1750 mg/L: case D17."""
    case = load_cases()["D17"].inputs
    acid = feed(closing="SO4", acidity=2000.0 * case["acid_mol_per_l"], Ni=0.01)
    ends = window(case["end_ph"], 9.0)
    made = plan(closed_site(("hydrated_lime",), ("SO4", 2000.0), acid, ends))
    sulfate = made.burden.set_index("burden").loc["SO4", "effluent_mg_per_l"]
    assert published("D17", "shipped").met_by(float(sulfate))
    with pytest.raises(NoPlan, match="SO4"):
        plan(closed_site(("hydrated_lime",), ("SO4", 1000.0), acid, ends))


def test_a_plan_is_found_where_a_trace_of_the_reagent_costs_next_to_nothing() -> None:
    """No solid forms at a trace, so that no slope leads from it to the dose that works."""
    lead = closed_site(
        ("sodium_sulfate",), ("Pb", 5.0), feed(3.5, "Cl", Pb=150.0, Na=100.0),
        floor("Pb", "sulfate"), window(3.0, 10.0),
    )  # fmt: skip
    assert plan(lead).compliant
    sulfate = closed_site(
        ("calcium_chloride",), ("SO4", 1800.0), feed(7.0, "Na", Cu=0.001, SO4=3200.0, Cl=100.0)
    )
    assert plan(sulfate).compliant


def test_three_ligands_are_found_where_each_alone_leaves_the_other_metals() -> None:
    """Salt for silver, sulfate for barium, caustic for zinc: no two of them will do."""
    limits = {"Ag": 1.0, "Ba": 0.5, "Zn": 0.5}
    own = [{"parameter": m, "daily_mg_per_l": v, "source": "invented"} for m, v in limits.items()]
    site = closed_site(
        ("sodium_chloride", "sodium_sulfate", "caustic_soda"), ("Ag", 1.0),
        feed(6.0, "acetate", Ag=30.0, Ba=50.0, Na=100.0, Zn=40.0),
        floor("Ag", "chloride"), floor("Ba", "sulfate"), window(3.0, 10.0),
        {"limits": {"own": own}},
    )  # fmt: skip
    assert set(plan(site).doses) == {"sodium_chloride", "sodium_sulfate", "caustic_soda"}


def test_a_dose_is_found_however_much_of_it_the_feed_binds() -> None:
    """104 mmol/L of sulfate down to 20 take more than 84 mmol/L of calcium."""
    site = closed_site(
        ("calcium_chloride",), ("SO4", 1920.0), feed(7.0, "Na", Cu=0.001, SO4=10000.0, Cl=100.0)
    )
    assert plan(site).doses["calcium_chloride"] / hand.CACL_2 > 84.0


HYDROXIDES: Mapping[str, tuple[float, dict[str, Any]]] = {
    # Ni(OH)2 fresh 12.8 and NiOH+ -9.54, Ni(OH)2 -21.15, Ni(OH)3- -30.0 (Baes & Mesmer 1976; COST
    # compilation), NiCl+ 0.08 (Gamsjager et al. 2005)
    "Ni": (hand.NI, {
        "ks": 12.8, "hydroxides": (-9.54, -21.15, -30.0), "chlorides": (0.08,),
    }),
    # Cd(OH)2 active 14.3 (Feitknecht), hydrolysis and CdCl+ 1.98, 2.60, 2.40, 1.7 (Powell 2011)
    "Cd": (hand.CD, {
        "ks": 14.3, "hydroxides": (-9.80, -20.19, -33.5, -47.28),
        "chlorides": (1.98, 2.60, 2.40, 1.7),
    }),
}  # fmt: skip


@pytest.mark.parametrize("metal", HYDROXIDES)
@pytest.mark.parametrize("target", [0.5, 2.0])
def test_a_hydroxide_plan_stands_at_the_ph_of_its_target(metal: str, target: float) -> None:
    mass, constants = HYDROXIDES[metal]
    total, acid, sodium = mol_per_l(40, mass), 0.008, mol_per_l(150, hand.NA)
    answer = hand.caustic_for_metal(
        total, acid, sodium + 2.0 * total + acid, mol_per_l(target, mass), **constants
    )
    site = closed_site(
        ("caustic_soda",), (metal, target), feed(acidity=1000.0 * acid, Na=150.0, **{metal: 40.0}),
        floor(metal, "hydroxide"),
    )  # fmt: skip
    solid = BOUND_WATER * (mass + 2.0 * (hand.OXYGEN + hand.H))
    made = held(site, "caustic_soda", hand.NAOH, answer, solid)
    assert made.set_points[0]["ph_set_point"] == pytest.approx(answer.ph, abs=0.002)


# -- neutralisation -------------------------------------------------------------------------------

ALKALIS = {
    "NaOH": "caustic_soda", "CaOH2": "hydrated_lime", "CaO": "quicklime", "KOH":
    "potassium_hydroxide", "MgOH2": "magnesium_hydroxide",
}  # fmt: skip
HYDROXIDE_ONLY: Tree = {
    "solids_off": [{"solid": "Cu2(OH)3Cl(s)", "reason": "the plain hydroxide is asked for"}]
}
MAGNESIA: Tree = {"treatment": {"magnesia_ph_ceiling": 9}}


@pytest.mark.parametrize("alkali", ALKALIS)
def test_acid_takes_the_published_weight_of_alkali(alkali: str) -> None:
    """Kilograms per kilogram of sulfuric acid: case G01."""
    name = ALKALIS[alkali]
    site = closed_site(
        (name,), ("Ni", 0.1), feed(closing="SO4", acidity=20.0, Ni=0.01), window(7.0, 9.0)
    )
    made = plan(site)
    assert list(made.doses) == [name]
    acid_mg_per_l = 0.5 * 20.0 * hand.H_2_SO_4
    assert published("G01", alkali).met_by(made.doses[name] / acid_mg_per_l)
    priced_right(site, made, 0.0)


@pytest.mark.parametrize("alkali", ["NaOH", "CaOH2", "MgOH2"])
def test_copper_takes_the_published_weight_of_alkali(alkali: str) -> None:
    """Kilograms per kilogram of copper: case G12. Two amounts of copper: the acid drops out."""
    doses = []
    for copper in (60.0, 120.0):
        site = closed_site(
            (ALKALIS[alkali],), ("Cu", 0.2), feed(4.5, Na=50.0, Cu=copper),
            floor("Cu", "hydroxide"), window(8.0, 9.0), HYDROXIDE_ONLY,
        )  # fmt: skip
        made = plan(site)
        doses.append(made.doses[ALKALIS[alkali]])
        removed = copper - row_of(made, "Cu")["residual"]
        hydroxide = removed / hand.CU * (hand.CU + 2.0 * (hand.OXYGEN + hand.H))
        priced_right(site, made, BOUND_WATER * hydroxide)
    assert published("G12", f"{alkali}/Cu").met_by((doses[1] - doses[0]) / 60.0)


def test_soda_ash_for_acid_is_the_carbonate_closed_form() -> None:
    """All CO2 kept is the dearer end: sources in `hand_chemistry.soda_for_acid`.

    To pH 8.3 the published rule is twice the weight that it takes with all CO2 gone (case G01).
    """
    for ph in (7.5, 8.3):
        site = closed_site(
            ("soda_ash",), ("Ni", 0.1), feed(acidity=20.0, Ni=0.0001), window(ph, ph + 0.3)
        )
        made = held(
            site, "soda_ash", hand.NA_2_CO_3, hand.soda_for_acid(0.020, 0.020, ph), 0.0
        )  # fmt: skip
    doubled = 2.0 * 0.5 * 20.0 * hand.H_2_SO_4
    ratio = made.doses["soda_ash"] / doubled
    assert ratio == pytest.approx(published("G01", "Na2CO3").expected, rel=0.02)


# -- one alkali against another -------------------------------------------------------------------


def pure(caustic: float, magnesia: float) -> dict[str, tuple[float, float, float, float]]:
    """Prices per tonne of pure alkali, no freight."""
    return {"caustic_soda": (100, 1.0, caustic, 0), "magnesium_hydroxide": (100, 1.0, magnesia, 0)}


def alkali_site(prices: Mapping[str, tuple[float, float, float, float]]) -> Site:
    """A million m3 a year with 25 meq/L of hydrochloric acid: 1000 t of caustic soda."""
    return closed_site(
        tuple(prices), ("Cu", 0.5), feed(acidity=25.0, Cu=0.1), window(7.0, 8.5), MAGNESIA,
        {"treatment": {"most_reagents": 1}}, prices=prices,
    )  # fmt: skip


def test_the_published_saving_of_magnesia_over_caustic() -> None:
    """1000 t of caustic at 550 or 730 t of magnesia at 400: case G02."""
    prices = pure(550.0, 400.0)
    made = plan(alkali_site(prices))
    caustic = plan(alkali_site({"caustic_soda": prices["caustic_soda"]}))
    tonnes = {name: dose * M3_PER_YEAR / 1e6 for name, dose in made.doses.items()}
    assert list(tonnes) == ["magnesium_hydroxide"]
    assert published("G02", "magnesia").met_by(tonnes["magnesium_hydroxide"])
    assert published("G02", "cost_magnesia").met_by(made.cost["magnesium_hydroxide"])
    assert published("G02", "cost_caustic").met_by(caustic.cost["caustic_soda"])
    assert published("G02", "saving").met_by(caustic.cost["total"] - made.cost["total"])


@pytest.mark.parametrize(("factor", "winner"), [
    (0.999, "magnesium_hydroxide"), (1.001, "caustic_soda"),
])  # fmt: skip
def test_the_alkali_switches_where_an_equivalent_costs_the_same(factor: float, winner: str) -> None:
    """At equal alkalinity a tonne of magnesia is worth 2 x 39.997 / 58.319 t of caustic."""
    even = 2.0 * hand.NAOH / hand.MG_OH_2
    prices = pure(400.0, 400.0 * even * factor)
    site = alkali_site(prices)
    made = plan(site)
    assert list(made.doses) == [winner]
    priced_right(site, made, 0.0, prices)


@pytest.mark.parametrize(("factor", "winner"), [
    (0.998, "hydrated_lime"), (1.002, "caustic_soda"),
])  # fmt: skip
def test_strength_and_freight_count_where_lime_and_caustic_break_even(
    factor: float, winner: str
) -> None:
    """The tie of two real offers: (price + freight) / strength x weight per equivalent."""
    _, _, price, freight = PRICES["caustic_soda"]
    caustic = (price + freight) / 0.50 * hand.NAOH
    lime = caustic / (hand.CA_OH_2 / 2.0) * 0.95
    prices = {
        "caustic_soda": PRICES["caustic_soda"],
        "hydrated_lime": (95.0, 0.5, round(factor * lime - 27.0, 6), 27.0),
    }
    made = plan(alkali_site(prices))
    assert list(made.doses) == [winner]
