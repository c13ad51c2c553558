"""Sulfate in salty water against Pitzer's equations, and what the ion pairs of sodium are for."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from scipy.optimize import brentq

from catalogs import load_system
from catalogs.interactions import interactions
from chemistry import System, equilibrate
from chemistry.activity import Interactions
from tests.chemistry.pitzer import ln_coefficients

LN10 = float(np.log(10.0))
TRACE = 1e-7
SEAWATER = {
    "Na+": 0.469, "K+": 0.0102, "Mg+2": 0.0528, "Ca+2": 0.0103, "Cl-": 0.546, "SO4-2": 0.0282,
}  # fmt: skip


def off_log10(system: System, water: Mapping[str, float]) -> dict[str, float]:
    """Total activity coefficients of the model less those of Pitzer's equations, log10."""
    state = equilibrate(system, water)
    pitzer = ln_coefficients(water)
    return {
        ion: float(state.log_activity[0, system.index[ion]] - np.log(m) - pitzer[ion]) / LN10
        for ion, m in water.items()
    }


def system_for(water: Mapping[str, float], activity: str = "sit") -> System:
    return load_system(components=water, solids=[], activity=activity)


def salt_with_traces(cation: str, salt: float) -> dict[str, float]:
    """Chloride of one cation with traces of barium and sulfate."""
    return {cation: salt, "Cl-": salt, "SO4-2": TRACE, "Ba+2": TRACE}


def test_pitzers_equations_here_give_the_gypsum_of_the_paper() -> None:
    """Against a second coding of the paper by someone else, mol/kg; log10 Ks 4.581."""

    def miss(gypsum: float, salt: float) -> float:
        water = {"Ca+2": gypsum, "SO4-2": gypsum} | ({"Na+": salt, "Cl-": salt} if salt else {})
        ln_g = ln_coefficients(water)
        ln_water = -0.0337 * salt  # two moles of water per mole of gypsum, osmotic coefficient 0.94
        product = 2.0 * np.log(gypsum) + ln_g["Ca+2"] + ln_g["SO4-2"] + 2.0 * ln_water
        return float(product + 4.581 * LN10)

    found = [brentq(miss, 1e-3, 0.2, args=(salt,)) for salt in (0.0, 0.1, 0.5, 1.0, 2.5)]
    assert found == pytest.approx([0.0152, 0.0220, 0.0354, 0.0450, 0.0566], rel=0.02)


@pytest.mark.parametrize("salt", [0.1, 0.3, 0.5, 1.0, 2.0])
@pytest.mark.parametrize("cation", ["Na+", "K+", "NH4+"])
def test_sulfate_in_chloride_brine_is_within_a_tenth_of_a_decade(cation: str, salt: float) -> None:
    water = salt_with_traces(cation, salt)
    assert abs(off_log10(system_for(water), water)["SO4-2"]) < 0.1


@pytest.mark.parametrize("salt", [0.1, 0.3, 0.5, 1.0, 2.0])
def test_barium_and_sulfate_together_are_within_four_percent_in_table_salt(salt: float) -> None:
    water = salt_with_traces("Na+", salt)
    off = off_log10(system_for(water), water)
    assert abs(off["SO4-2"] + off["Ba+2"]) < 0.017


def test_seawater_is_within_a_tenth_of_a_decade_ion_by_ion() -> None:
    water = SEAWATER | {"Ba+2": TRACE}
    off = off_log10(system_for(water), water)
    assert {ion: round(x, 3) for ion, x in off.items() if abs(x) > 0.08} == {}


def test_davies_is_worse_in_seawater_and_in_brine() -> None:
    for water in (SEAWATER | {"Ba+2": TRACE}, salt_with_traces("Na+", 1.0)):
        salty, davies = (off_log10(system_for(water, name), water) for name in ("sit", "davies"))
        product = {n: abs(x["SO4-2"] + x["Ba+2"]) for n, x in (("s", salty), ("d", davies))}
        assert product["d"] > 3.0 * product["s"]


def test_published_coefficients_without_sodium_sulfate_pairs_put_sulfate_too_high() -> None:
    """Why the table keeps the pairs of sulfate: its header states these errors."""
    without = dict(interactions().pairs) | {("Na+", "SO4-2"): -0.12, ("K+", "SO4-2"): -0.06}
    for cation, salt, low, high in (("Na+", 0.3, 0.2, 0.3), ("Na+", 2.0, 0.4, 0.5),
                                    ("K+", 0.3, 0.3, 0.4), ("K+", 2.0, 1.0, 1.3)):  # fmt: skip
        water = salt_with_traces(cation, salt)
        kept = system_for(water)
        species = [s for s in kept.species if s.name not in ("NaSO4-", "KSO4-")]
        system = System(
            kept.components, species, activity="sit", interactions=Interactions(without)
        )
        assert low < 10.0 ** off_log10(system, water)["SO4-2"] - 1.0 < high
