"""Chemistry by hand for closed-form plans: one metal, one reagent, written out term by term.

Shares no code with the product. Constants are formation constants at 25 C and zero ionic strength,
each with the publication that it stands in; activity coefficients follow Davies 1962 with
A = 0.509 (Freeze & Cherry 1979, Appendix IV). Every function returns the dose that leaves a target.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from scipy.optimize import brentq

# Standard atomic weights, abridged (IUPAC 2021), g/mol.
H, OXYGEN, C, NA, CL, S = 1.008, 15.999, 12.011, 22.990, 35.45, 32.06
MG, CA, NI, CD, AG, BA, PB, CU = 24.305, 40.078, 58.693, 112.414, 107.868, 137.327, 207.2, 63.546
NAOH, CA_OH_2, MG_OH_2 = NA + OXYGEN + H, CA + 2 * (OXYGEN + H), MG + 2 * (OXYGEN + H)
NA_2_CO_3, NACL, NA_2_SO_4 = 2 * NA + C + 3 * OXYGEN, NA + CL, 2 * NA + S + 4 * OXYGEN
CACL_2, NA_2_S, H_2_SO_4 = CA + 2 * CL, 2 * NA + S, 2 * H + S + 4 * OXYGEN
SULFATE = S + 4 * OXYGEN

ROUNDS = 200
PKW = 14.0  # Stumm & Morgan 1996, Aquatic Chemistry


def gamma(charge: int, ionic_strength: float) -> float:
    """Activity coefficient (Davies 1962, Ion Association)."""
    root = math.sqrt(ionic_strength)
    return float(10.0 ** (-0.509 * charge**2 * (root / (1.0 + root) - 0.3 * ionic_strength)))


@dataclass(frozen=True)
class Answer:
    """A dose and what it leaves, all in mol/L but for the pH."""

    dose: float
    solid: float
    ph: float = math.nan
    ionic_strength: float = math.nan


def with_own_ionic_strength(water: Callable[[float], tuple[Answer, float]]) -> Answer:
    """Repeat a calculation with the ionic strength that it gives until it stays."""
    strength = 0.01
    for _ in range(ROUNDS):
        answer, found = water(strength)
        if abs(found - strength) < 1e-14:
            break
        strength = found
    return answer


def salt_for_silver(silver: float, sodium: float, target: float) -> Answer:
    """Sodium chloride that leaves ``target`` of silver in a sulfate water, lower branch.

    AgCl 9.75 (Owen & Brinkley 1938, in the IUPAC Stability Constants Database; the CRC Handbook
    prints 1.77e-10), AgCl(aq) 3.31 and AgCl2- 5.25 (Jonte & Martin 1952), AgCl3-2 5.2 and AgCl4-3
    4.6 (Martell & Smith, from memory), AgSO4- 1.29 (Martell & Smith), NaSO4- 0.75 (IUPAC Stability
    Constants Database, 0.65 to 1.03).
    """
    sulfate = (sodium + silver) / 2.0

    def water(strength: float) -> tuple[Answer, float]:
        g1, g2, g3 = (gamma(z, strength) for z in (1, 2, 3))
        k_pair = 10**0.75 * g1 * g2 / g1

        def forms(chloride: float) -> dict[str, float]:
            bare = 10**-9.75 / (g1 * g1 * chloride)
            total_na = sodium + dose_of(chloride, 0.0)
            free_so4 = _free(sulfate, total_na, k_pair)
            return {
                "Ag+": bare,
                "AgCl": 10 ** (3.31 - 9.75),
                "AgCl2-": 10 ** (5.25 - 9.75) * chloride,
                "AgCl3-2": 10 ** (5.2 - 9.75) * chloride**2 * g1 * g1 / g2,
                "AgCl4-3": 10 ** (4.6 - 9.75) * chloride**3 * g1**3 / g3,
                "AgSO4-": 10**1.29 * bare * free_so4 * g2,
                "SO4-2": free_so4,
            }

        def silver_left(found: dict[str, float]) -> float:
            return sum(value for name, value in found.items() if name.startswith("Ag"))

        def dose_of(chloride: float, bound: float) -> float:
            return chloride + bound + silver - target

        def miss(ln_chloride: float) -> float:
            return silver_left(forms(math.exp(ln_chloride))) - target

        chloride = math.exp(brentq(miss, math.log(1e-8), math.log(1e-3), xtol=1e-14))
        found = forms(chloride)
        bound = found["AgCl"] + 2 * found["AgCl2-"] + 3 * found["AgCl3-2"] + 4 * found["AgCl4-3"]
        dose = dose_of(chloride, bound)
        pair = sulfate - found["SO4-2"] - found["AgSO4-"]
        charges = (
            found["Ag+"] + found["AgCl2-"] + found["AgSO4-"] + chloride + pair
            + (sodium + dose - pair) + 4 * (found["AgCl3-2"] + found["SO4-2"])
            + 9 * found["AgCl4-3"]
        )  # fmt: skip
        return Answer(dose, silver - target, ionic_strength=strength), charges / 2.0

    return with_own_ionic_strength(water)


def _free(sulfate: float, partner: float, constant: float) -> float:
    """Free sulfate beside a 1:1 pair with a partner of given total (a quadratic)."""
    b = 1.0 + constant * (partner - sulfate)
    return (-b + math.sqrt(b * b + 4.0 * constant * sulfate)) / (2.0 * constant)


def sulfate_for_metal(
    metal: float, sodium: float, target: float, *, ksp: float, pairs: tuple[float, ...],
    chlorides: tuple[float, ...] = (), hydroxide: float = -30.0, acid: float = 0.0,
) -> Answer:  # fmt: skip
    """Sodium sulfate that leaves ``target`` of a divalent metal in a chloride water.

    ``ksp`` and the formation constants of MSO4, M(SO4)2-2, of MCl+, MCl2, MCl3-, MCl4-2 and of MOH+
    are log10; ``acid`` is the free acid of the feed, which sulfate binds in part. NaSO4- is 0.75
    (IUPAC Stability Constants Database, 0.65 to 1.03), HSO4- 1.988 (Nordstrom et al. 1990).
    """
    chloride = sodium + 2.0 * metal + acid

    def water(strength: float) -> tuple[Answer, float]:
        g = [gamma(z, strength) for z in range(3)]
        k_na, k_h = 10**0.75 * g[2], 10**1.988 * g[2]
        free_cl, proton = chloride, acid

        def forms(free: float) -> tuple[float, float, list[float], list[float]]:
            bare = 10**ksp / (g[2] * g[2] * free)
            with_oh = 10**hydroxide * bare * g[2] / (proton * g[1]) / g[1] if acid else 0.0
            bound = [10**k * bare * g[2] * (free * g[2]) ** n / g[abs(2 - 2 * n)]
                     for n, k in enumerate(pairs, start=1)]  # fmt: skip
            with_cl = [10**k * bare * g[2] * (free_cl * g[1]) ** n / g[abs(2 - n)]
                       for n, k in enumerate(chlorides, start=1)]  # fmt: skip
            return bare, with_oh, bound, with_cl

        def miss(ln_free: float) -> float:
            bare, with_oh, bound, with_cl = forms(math.exp(ln_free))
            return bare + with_oh + sum(bound) + sum(with_cl) - target

        for _ in range(40):
            free = math.exp(brentq(miss, math.log(1e-7), math.log(0.05), xtol=1e-14))
            bare, with_oh, bound, with_cl = forms(free)
            free_cl = chloride - sum(n * x for n, x in enumerate(with_cl, start=1))
            proton = (acid + with_oh) / (1.0 + k_h * free)
        rest = free * (1.0 + k_h * proton) + sum(n * x for n, x in enumerate(bound, start=1))
        rest += metal - target
        dose = rest
        for _ in range(100):  # sodium sulfate brings the sodium that pairs with it
            free_na = (sodium + 2.0 * dose) / (1.0 + k_na * free)
            dose = rest + k_na * free_na * free
        charges = 4 * bare + 4 * free + free_na + free_cl + k_na * free_na * free
        charges += proton + k_h * proton * free + with_oh
        charges += sum((2 - 2 * n) ** 2 * x for n, x in enumerate(bound, start=1))
        charges += sum((2 - n) ** 2 * x for n, x in enumerate(with_cl, start=1))
        return Answer(dose, metal - target, ionic_strength=strength), charges / 2.0

    return with_own_ionic_strength(water)


def free_acid(ph: float, salts: Callable[[float], float]) -> float:
    """Strong acid of a water of this pH; ``salts`` gives its ionic strength for an acid. [mol/L]"""
    acid = 10**-ph
    for _ in range(ROUNDS):
        acid = 10**-ph / gamma(1, salts(acid))
    return acid


def calcium_for_sulfate(sulfate: float, chloride: float, target: float) -> Answer:
    """Calcium chloride that leaves ``target`` of sulfate over gypsum in a sodium water.

    Gypsum 4.59 (Raju & Atkinson 1990: 4.597), CaSO4(aq) 2.30 (Nordstrom et al. 1990), NaSO4- 0.75.
    """
    sodium = 2.0 * sulfate + chloride

    def water(strength: float) -> tuple[Answer, float]:
        g1, g2 = gamma(1, strength), gamma(2, strength)
        k_na = 10**0.75 * g1 * g2 / g1
        pair = 10 ** (2.30 - 4.59)
        free = _free(target - pair, sodium, k_na)
        calcium = 10**-4.59 / (g2 * g2 * free)
        solid = sulfate - target
        dose = calcium + pair + solid
        bound = target - pair - free
        charges = 4 * calcium + 4 * free + bound + (sodium - bound) + chloride + 2 * dose
        return Answer(dose, solid, ionic_strength=strength), charges / 2.0

    return with_own_ionic_strength(water)


def caustic_for_metal(
    metal: float, acid: float, chloride: float, target: float, *, ks: float,
    hydroxides: tuple[float, ...], chlorides: tuple[float, ...] = (),
) -> Answer:  # fmt: skip
    """Caustic and pH that leave ``target`` of a divalent metal over its fresh hydroxide.

    ``ks`` is log10 of M+2 = M(OH)2(s) less 2 H+ as a dissolution, ``hydroxides`` those of
    M(OH)n + n H+, ``chlorides`` those of MCln, all log10. Polynuclear species are left out: below
    1e-4 mol/L of metal they are less than 1e-5 of it. ``acid`` is the free acid of the feed.
    """

    def water(strength: float) -> tuple[Answer, float]:
        g = [gamma(z, strength) for z in range(3)]
        free_cl = chloride

        def forms(ph: float) -> tuple[float, list[float], list[float]]:
            h = 10**-ph
            active = 10**ks * h * h
            with_oh = [active * 10**k / h**n / g[abs(2 - n)]
                       for n, k in enumerate(hydroxides, start=1)]  # fmt: skip
            with_cl = [active * 10**k * (free_cl * g[1]) ** n / g[abs(2 - n)]
                       for n, k in enumerate(chlorides, start=1)]  # fmt: skip
            return active / g[2], with_oh, with_cl

        def miss(ph: float) -> float:
            bare, with_oh, with_cl = forms(ph)
            return math.log((bare + sum(with_oh) + sum(with_cl)) / target)

        for _ in range(20):
            ph = brentq(miss, 7.0, 10.5, xtol=1e-13)
            bare, with_oh, with_cl = forms(ph)
            free_cl = chloride - sum(n * x for n, x in enumerate(with_cl, start=1))
        hydroxide, proton = 10 ** (ph - PKW) / g[1], 10**-ph / g[1]
        solid = metal - target
        spent = 2.0 * solid + sum(n * x for n, x in enumerate(with_oh, start=1))
        dose = acid + spent + hydroxide - proton
        sodium = chloride - 2.0 * metal - acid + dose
        charges = 4 * bare + sodium + free_cl + hydroxide + proton
        charges += sum((2 - n) ** 2 * x for n, x in enumerate(with_oh, start=1))
        charges += sum((2 - n) ** 2 * x for n, x in enumerate(with_cl, start=1))
        return Answer(dose, solid, ph, strength), charges / 2.0

    return with_own_ionic_strength(water)


def soda_for_acid(acid: float, chloride: float, ph: float) -> Answer:
    """Soda ash that brings strong acid to a pH with all carbon dioxide kept.

    HCO3- 10.329 and CO2(aq) 16.681 from CO3-2 (Plummer & Busenberg 1982), NaCO3- 1.27 (Garrels &
    Thompson), NaHCO3(aq) 10.079 (Nakayama 1971; IUPAC Stability Constants Database).
    """

    def water(strength: float) -> tuple[Answer, float]:
        g1, g2 = gamma(1, strength), gamma(2, strength)
        h = 10**-ph
        hydroxide, proton = 10 ** (ph - PKW) / g1, h / g1
        dose, free_na = acid, acid
        for _ in range(ROUNDS):
            shares = {
                "CO3-2": 1.0 / g2, "HCO3-": 10**10.329 * h / g1, "CO2": 10**16.681 * h * h,
                "NaCO3-": 10**1.27 * free_na, "NaHCO3": 10**10.079 * h * free_na * g1,
            }  # fmt: skip
            whole = sum(shares.values())
            part = {name: share / whole for name, share in shares.items()}
            taken = part["HCO3-"] + part["NaHCO3"] + 2.0 * part["CO2"]
            dose = (acid - proton + hydroxide) / taken
            sodium = 2.0 * dose + chloride - acid
            free_na = sodium - dose * (part["NaCO3-"] + part["NaHCO3"])
        charges = free_na + chloride + hydroxide + proton
        charges += dose * (4 * part["CO3-2"] + part["HCO3-"] + part["NaCO3-"])
        return Answer(dose, 0.0, ph, strength), charges / 2.0

    return with_own_ionic_strength(water)
