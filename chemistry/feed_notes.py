"""What is said about a feed: notes, and the refusal of a charge that cannot be closed.

Owns words only; every number comes from `chemistry.feed`.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, CHELATES, METALS, analyte_of
from chemistry.system import System

if TYPE_CHECKING:
    from chemistry.feed import FeedWater

FloatArray = NDArray[np.float64]

# Charge-balance error above which it is worth a word, and above which a plan leans on the
# closing ion (common practice).
WORTH_A_NOTE_PERCENT = 5.0
LEANS_ON_CLOSING_PERCENT = 10.0
O2_MG_PER_MG_FERROUS = 31.998 / 4.0 / 55.845
USUAL_ANIONS = ("Cl-", "SO4-2")
USUAL_CATIONS = ("Na+", "K+", "Ca+2")


def with_notes(water: FeedWater) -> FeedWater:
    """Return the feed with every note that applies."""
    notes = [
        *water.analysis.notes, *_charge_notes(water), *_acid_notes(water), *_solid_notes(water),
        *_chelate_notes(water), *_other_notes(water),
    ]  # fmt: skip
    return replace(water, notes=tuple(notes))


def _plain(value: float) -> str:
    """Three significant digits without an exponent for large numbers."""
    return f"{value:.0f}" if value >= 100.0 else f"{value:.3g}"


def _charge_notes(water: FeedWater) -> list[str]:
    ion = analyte_of(water.closing_ion)
    mass = 1000.0 * ANALYTES[ion].molar_mass_g_per_mol
    change = water.closing_mol_per_l * mass
    error = water.charge_balance_error_percent
    sums = f"(cations {water.cations_meq_per_l:.2f}, anions {water.anions_meq_per_l:.2f} meq/L)"
    measured = water.analysis.measurements.get(ion)
    if measured is None and change > 0.0:
        return [
            f"{ion} was not analysed: its whole {_plain(change)} mg/L follows from the charge "
            f"balance {sums}"
        ]
    done = "raised" if change >= 0.0 else "lowered"
    closed = f"{ion} was {done} by {_plain(abs(change))} mg/L to close it"
    size = f"the analysis misses electroneutrality by {error:+.1f} % {sums}"
    if abs(error) > LEANS_ON_CLOSING_PERCENT:
        return [
            f"CHECK THE ANALYSIS: {size}, more than {LEANS_ON_CLOSING_PERCENT:g} %; {closed}, "
            "and everything below leans on that choice"
        ]
    if abs(error) > WORTH_A_NOTE_PERCENT:
        return [f"{size}, more than {WORTH_A_NOTE_PERCENT:g} %; {closed}"]
    return [f"charge balance error {error:+.1f} %: {closed}"]


def _acid_notes(water: FeedWater) -> list[str]:
    acid = water.acid
    if acid is None:
        return []
    notes = [
        f"the acid is taken from the {acid.source}: {acid.demand_meq_per_l:.3g} meq/L of base to "
        f"pH {acid.end_ph:g}"
    ]
    missed, mass = acid.difference_meq_per_l, acid.difference_kg_naoh_per_m3
    if acid.ph_measured is not None and missed is not None and mass is not None:
        notes.append(
            f"the measured pH {acid.ph_measured:g} alone would give "
            f"{acid.demand_by_ph_meq_per_l:.3g} meq/L, {abs(missed):.3g} meq/L "
            f"({abs(mass):.3g} kg NaOH per m3) {'less' if missed > 0.0 else 'more'}; with the "
            f"{acid.source} the model's pH is {acid.ph_modelled:.2f}"
        )
    elif acid.ph_measured is not None:
        notes.append(
            f"the measured pH {acid.ph_measured:g} alone gives no electroneutral water with this "
            f"closing ion; with the {acid.source} the model's pH is {acid.ph_modelled:.2f}"
        )
    if len(water.analysis.titration) > 1:
        notes.append(
            f"the titration points lie within {acid.misfit_meq_per_l:.2g} meq/L of the model"
        )
    return notes


def _solid_notes(water: FeedWater) -> list[str]:
    notes = []
    above = water.supersaturation_si_log10
    if above:
        named = ", ".join(f"{name} (SI {value:.1f})" for name, value in list(above.items())[:6])
        more = f" and {len(above) - 6} more" if len(above) > 6 else ""
        notes.append(f"the feed is supersaturated as it is: {named}{more}")
    carried = water.particulate_mg_per_l
    if carried:
        named = ", ".join(f"{name} {value:.3g} mg/L" for name, value in carried.items())
        notes.append(f"on particles of unknown form in the feed: {named}")
        if 0.0 < water.analysis.tss_mg_per_l < sum(carried.values()):
            notes.append(
                f"particles carry {sum(carried.values()):.3g} mg/L of analytes, more than the "
                f"suspended solids of {water.analysis.tss_mg_per_l:g} mg/L: check both"
            )
    return notes


def _chelate_notes(water: FeedWater) -> list[str]:
    """Metals and chelates of the water that no constant joins."""
    system, there = water.system, water.totals_mol_per_l > 0.0

    def present(names: tuple[str, ...]) -> list[tuple[str, str]]:
        pairs = [(name, ANALYTES[name].component) for name in names]
        return [(n, c) for n, c in pairs if c in system.index and there[system.index[c]]]

    joined = [set(s.stoichiometry) for s in system.species]
    notes = []
    for ligand, anion in present(CHELATES):
        alone = [
            metal for metal, ion in present(METALS) if not any({anion, ion} <= s for s in joined)
        ]
        if alone:
            notes.append(
                f"no constants are known here for {', '.join(alone)} with {ligand}: more of it may "
                "stay dissolved than is shown"
            )
    return notes


def _other_notes(water: FeedWater) -> list[str]:
    notes = []
    for name, value in water.unmodelled_mg_per_l.items():
        notes.append(f"{name} {value:.3g} mg/L is not modelled: {ANALYTES[name].note}")
    if water.below_reporting_limit:
        notes.append(
            "below the reporting limit, half of it in the balance: "
            + ", ".join(water.below_reporting_limit)
        )
    ferrous = water.analysis.measurements.get("Fe(II)")
    if water.analysis.aerated and ferrous is not None and ferrous.balance_mg_per_l > 0.0:
        iron = ferrous.balance_mg_per_l
        notes.append(
            f"air turns {iron:.3g} mg/L of Fe(II) into Fe(III): {iron / 55.845:.3g} meq/L of acid "
            f"and {iron * O2_MG_PER_MG_FERROUS:.2g} mg/L of oxygen are used"
        )
    trusted = water.system.activity_model.trusted_to_mol_per_l
    if water.ionic_strength > trusted:
        notes.append(
            f"ionic strength {water.ionic_strength:.2f} mol/L is above "
            f"{trusted:g} mol/L: activity coefficients are a guide only"
        )
    off = water.analysis.temperature_degc - water.system.temperature_degc
    if abs(off) > 0.5:
        notes.append(
            f"constants are those of {water.system.temperature_degc:g} C, the water has "
            f"{water.analysis.temperature_degc:g} C"
        )
    return notes


def cannot_close(
    system: System, measured_mol_per_l: FloatArray, ion: str, surplus_mol_per_l: float
) -> str:
    """Words for a charge that the named ion cannot close: its size and what could close it."""
    excess, short = ("cations", "anions") if surplus_mol_per_l > 0.0 else ("anions", "cations")
    size = abs(surplus_mol_per_l)
    held = float(measured_mol_per_l[system.index[ion]])
    held *= abs(float(system.component_charges[system.index[ion]]))
    raise_sign = -1.0 if surplus_mol_per_l > 0.0 else 1.0
    usual = USUAL_ANIONS if surplus_mol_per_l > 0.0 else USUAL_CATIONS
    could_raise = [analyte_of(c) for c in usual if c in system.index and c != ion]
    could_lower = [
        f"{analyte_of(c)} ({1000.0 * float(amount):.3g} meq/L)"
        for c, amount in zip(
            system.components,
            measured_mol_per_l * system.component_charges * -raise_sign,
            strict=True,
        )
        if c not in ("H+", ion) and amount >= size
    ]
    name = analyte_of(ion)
    wrong_way = float(system.component_charges[system.index[ion]]) * surplus_mol_per_l > 0.0
    why = (
        f"only {1000.0 * held:.3g} meq/L of {name} can be taken away"
        if wrong_way
        else f"{name} carries too little charge at this pH"
    )
    text = (
        f"the analysis cannot be made electroneutral with {name}: {excess} exceed {short} by "
        f"{1000.0 * size:.3g} meq/L, and {why}. Close with another ion: "
        f"raise {', '.join(could_raise) or 'an ion left out'}"
    )
    if could_lower:
        text += f", or lower {', '.join(could_lower)}"
    return text + "; or look for a value that is wrong or missing"
