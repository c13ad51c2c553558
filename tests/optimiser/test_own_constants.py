"""Own constants of a site: read strictly, used everywhere, shown with source and old value."""

from __future__ import annotations

from pathlib import Path

import pytest
import yaml

from catalogs.constants import solid_table, species_table
from catalogs.problems import InputFileError
from chemistry import equilibrate
from optimiser import assess, load_site
from optimiser.site import Site
from tests.optimiser.small_sites import COPPER_ZINC, OFFERS, price_book, small_site

COPPER = {
    "name": "Cu(OH)2(s,fresh)", "kind": "solid", "log10_k": -10.2, "replace": True,
    "reaction": "Cu+2 + 2 H2O = Cu(OH)2(s,fresh) + 2 H+", "source": "bench tests of May",
}  # fmt: skip
PAIR = {
    "name": "ZnCl(OH)(aq)", "kind": "species", "log10_k": -5.5, "enthalpy_kj_per_mol": 40,
    "reaction": "Zn+2 + Cl- + H2O = ZnCl(OH)(aq) + H+", "source": "a thesis of our own",
}  # fmt: skip
AGED = {"solid": "CuO(s)", "reason": "floc is kept for days"}


def site_with(**keys: object) -> Site:
    return small_site(keys)


def residual_mol_per_l(site: Site, component: str, chloride: float = 0.0) -> float:
    system = site.system
    totals = {"Cu+2": 9e-4, "Zn+2": 6e-4, "Cl-": chloride, "Na+": 6e-3, "H+": 0.0}
    state = equilibrate(system, totals, ph=9.0)
    return float(state.dissolved_mol_per_l[0, system.index[component]])


def test_a_constant_in_place_of_the_catalogs_moves_the_residual() -> None:
    plain, own = site_with(), site_with(constants=[COPPER])
    shift = COPPER["log10_k"] - solid_table()["Cu(OH)2(s,fresh)"].log10_k  # type: ignore[operator]
    assert shift < 0.0, "the own solid is more soluble"
    more = residual_mol_per_l(own, "Cu+2") / residual_mol_per_l(plain, "Cu+2")
    assert more == pytest.approx(10.0**-shift, rel=0.05)
    assert own.system.solid_names == plain.system.solid_names
    [found] = [s for s in own.system.solids if s.name == "Cu(OH)2(s,fresh)"]
    assert found.mineral == solid_table()["Cu(OH)2(s,fresh)"].mineral
    assert found.enthalpy_kj_per_mol == solid_table()["Cu(OH)2(s,fresh)"].enthalpy_kj_per_mol


def test_a_species_of_its_own_holds_metal_up() -> None:
    strong = PAIR | {"log10_k": 0.0}
    plain, own = site_with(), site_with(constants=[strong])
    assert "ZnCl(OH)(aq)" in own.system.species_names
    held, free = (residual_mol_per_l(site, "Zn+2", chloride=9e-3) for site in (own, plain))
    assert held > 2.0 * free
    [found] = [s for s in own.system.species if s.name == "ZnCl(OH)(aq)"]
    assert found.enthalpy_kj_per_mol == 40.0
    assert found.source == "a thesis of our own"


def test_a_solid_of_its_own_is_a_candidate() -> None:
    lower = COPPER | {
        "name": "Cu(OH)2(s,own)", "replace": False, "log10_k": -7.0, "mineral": "own floc",
        "reaction": "Cu+2 + 2 H2O = Cu(OH)2(s,own) + 2 H+",
    }  # fmt: skip
    plain, own = site_with(), site_with(constants=[lower])
    assert own.system.solid_names == (*plain.system.solid_names, "Cu(OH)2(s,own)")
    assert residual_mol_per_l(own, "Cu+2") < 0.2 * residual_mol_per_l(plain, "Cu+2")


def test_solids_are_switched_on_and_off() -> None:
    plain = site_with()
    off = {"solid": "Zn(OH)2(s,am)", "reason": "not seen"}
    assert off["solid"] in plain.system.solid_names
    site = site_with(solids_on=[AGED], solids_off=[off])
    assert set(site.system.solid_names) == ({*plain.system.solid_names, "CuO(s)"} - {off["solid"]})
    assert residual_mol_per_l(site, "Cu+2") < 0.2 * residual_mol_per_l(plain, "Cu+2")
    # what is off has its catalog constant again where a site replaces it
    aged = {"name": "CuO(s)", "kind": "solid", "log10_k": -7.2, "replace": True,
            "reaction": "Cu+2 + H2O = CuO(s) + 2 H+", "source": "aged floc"}  # fmt: skip
    assert "CuO(s)" in site_with(constants=[aged]).system.solid_names


def test_the_plan_shows_what_stands_in_place_of_the_catalog() -> None:
    site = site_with(
        constants=[COPPER, PAIR, PAIR | {"name": "PbCl(OH)(aq)",
                   "reaction": "Pb+2 + Cl- + H2O = PbCl(OH)(aq) + H+"}],
        solids_on=[AGED],
    )  # fmt: skip
    shown = assess(site, {"caustic_soda": 180.0}).to_dict()["assumptions"]
    old = solid_table()["Cu(OH)2(s,fresh)"].log10_k
    for text in (
        f"own constant of the solid Cu(OH)2(s,fresh): log10 K -10.2, in place of {old:g}, for "
        "Cu+2 + 2 H2O = Cu(OH)2(s,fresh) + 2 H+; source: bench tests of May",
        "own constant of the species ZnCl(OH)(aq): log10 K -5.5, enthalpy 40 kJ/mol, added to the "
        "catalog, for Zn+2 + Cl- + H2O = ZnCl(OH)(aq) + H+; source: a thesis of our own",
        "own constant of the species PbCl(OH)(aq): takes no part, the water has no Pb+2; source: a "
        "thesis of our own",
        "solid switched on: CuO(s) (tenorite); reason: floc is kept for days",
    ):
        assert text in shown


def test_a_site_without_own_constants_keeps_the_catalogs_system() -> None:
    site = site_with()
    assert site.own_constants == ()
    assert site.solid_switches == ()
    assert site_with(constants=[COPPER]).own_constants[0].source == "bench tests of May"


# -- refusals ------------------------------------------------------------------------------------


def problems_of(tmp_path: Path, **keys: object) -> list[str]:
    """Messages without their place."""
    tree = {**COPPER_ZINC, **keys}
    text = yaml.safe_dump(tree, sort_keys=False, width=1000)
    (tmp_path / "site.yaml").write_text(text)
    (tmp_path / "offers.csv").write_text(price_book(OFFERS))
    try:
        load_site(tmp_path / "site.yaml")
    except InputFileError as error:
        return [str(p).split("site.yaml:")[1].split(": ", 1)[1] for p in error.problems]
    return []


FORM = "expected a formation reaction such as Cu+2 + 2 H2O = Cu(OH)2(s) + 2 H+"


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"source": None}, "constants[1].source: found nothing, expected text\n"),
        ({"log10_k": "8,9"},
         "constants[1].log10_k: found '8,9', expected a number from -300 to 300\n"),
        ({"kind": "gas"},
         "constants[1].kind: found 'gas', expected one of the kinds of constant\n"
         "    The kinds of constant known here: solid, species."),
        ({"kind": "species"},
         "constants[1].name: found species 'Cu(OH)2(s,fresh)', expected a solid named with (s) "
         "and a species without\n    Set `kind: solid`, or drop the (s)."),
        ({"replace": False},
         "constants[1].name: found 'Cu(OH)2(s,fresh)', which the catalog has (log10 K -9.3,"),
        ({"name": "Cu(OH)2(s,b)", "reaction": "Cu+2 + 2 H2O = Cu(OH)2(s,b) + 2 H+"},
         "constants[1].name: found 'Cu(OH)2(s,b)', which the catalog does not have, expected a name"
         " to replace\n    Drop `replace`, or correct the name. Did you mean `Cu(OH)2(s)`?"),
        ({"reaction": "Cu+2 + 2 H2O = Cu(OH)2(s,fresh) + H+"},
         "constants[1].reaction: found a reaction that does not balance (H by -1, charge by -1), "
         "expected the same atoms and charge on both sides\n"
         "    Correct the coefficients; H2O and H+ close oxygen and charge."),
        ({"reaction": "Cu+2 + 2 OH- = Cu(OH)2(s,fresh)"},
         f"constants[1].reaction: found 'OH-', which is no component, {FORM}\n"
         "    Write it with components: H2O = OH- + H+ has log10 K -14."),
        ({"reaction": "Cx+2 + 2 H2O = Cu(OH)2(s,fresh) + 2 H+"},
         f"constants[1].reaction: found 'Cx+2 + 2 H2O = Cu(OH)2(s,fresh) + 2 H+', {FORM}\n"
         "    Correct it: unknown element 'Cx' in 'Cx+2'."),
        ({"reaction": "Cu+2 and hydroxide"},
         f"constants[1].reaction: found 'Cu+2 and hydroxide', {FORM}\n"
         "    Correct it: a reaction needs one ' = ': 'Cu+2 and hydroxide'."),
        ({"reaction": "Cu+2 + H2O = CuO(s) + 2 H+"},
         "constants[1].reaction: found 'Cu+2 + H2O = CuO(s) + 2 H+', which does not form 1 mol of "
         f"Cu(OH)2(s,fresh), {FORM}\n"
         "    Write the reaction that has Cu(OH)2(s,fresh) once on the right."),
        ({"enthalpy": 3}, "constants[1].enthalpy: found an unknown key, expected only known keys\n"
         "    Did you mean `enthalpy_kj_per_mol`?"),
    ],
)  # fmt: skip
def test_a_constant_that_cannot_be_is_refused(
    tmp_path: Path, change: dict[str, object], said: str
) -> None:
    constant = {k: v for k, v in (COPPER | change).items() if v is not None}
    assert any(found.startswith(said) for found in problems_of(tmp_path, constants=[constant]))


@pytest.mark.parametrize(
    ("constants", "said"),
    [
        ([COPPER, dict(COPPER)],
         "constants[2].name: found 'Cu(OH)2(s,fresh)' twice, expected each name once\n"),
        ([PAIR | {"name": "Zn+2", "reaction": "Zn+2 = Zn+2"}],
         "constants[1].name: found the component Zn+2, expected something formed from components"),
        ([PAIR | {"scale_former": True}],
         "constants[1].scale_former: found scale_former on a dissolved species"),
    ],
)  # fmt: skip
def test_names_that_clash_are_refused(
    tmp_path: Path, constants: list[dict[str, object]], said: str
) -> None:
    assert any(found.startswith(said) for found in problems_of(tmp_path, constants=constants))


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ({"solids_on": [{"solid": "CuO(s)"}]},
         "solids_on[1].reason: found nothing, expected text\n    Add `reason` here."),
        ({"solids_on": [{"solid": "CuOO(s)", "reason": "a"}]},
         "solids_on[1].solid: found 'CuOO(s)', expected one of the solids of the catalog\n"
         "    Did you mean `CuO(s)`?"),
        ({"solids_on": [{"solid": "Cu(OH)2(s,fresh)", "reason": "a"}]},
         "solids_on[1].solid: found Cu(OH)2(s,fresh), which is on already, expected a solid "
         "that is off\n    Delete the entry."),
        ({"solids_off": [{"solid": "CuO(s)", "reason": "a"}]},
         "solids_off[1].solid: found CuO(s), which is off already, expected a solid that is on\n"),
        ({"solids_on": [AGED], "solids_off": [dict(AGED)]},
         "solids_off[1].solid: found 'CuO(s)' twice, expected each name once\n"),
        ({"constants": [COPPER], "solids_off": [{"solid": "Cu(OH)2(s,fresh)", "reason": "a"}]},
         "solids_off[1].solid: found 'Cu(OH)2(s,fresh)' twice, expected each name once\n"),
        ({"constants": "mine.csv"}, "constants: found 'mine.csv', expected a list\n"),
    ],
)  # fmt: skip
def test_switches_that_cannot_be_are_refused(
    tmp_path: Path, keys: dict[str, object], said: str
) -> None:
    assert any(found.startswith(said) for found in problems_of(tmp_path, **keys))


def test_every_problem_is_told_at_once(tmp_path: Path) -> None:
    found = problems_of(
        tmp_path, constants=[COPPER | {"log10_k": "x"}, PAIR | {"reaction": "nothing"}],
        solids_on=[{"solid": "no"}],
    )  # fmt: skip
    assert len(found) == 4


def test_the_catalog_has_what_these_tests_name() -> None:
    assert not solid_table()["CuO(s)"].by_default
    assert "ZnCl(OH)(aq)" not in species_table()
