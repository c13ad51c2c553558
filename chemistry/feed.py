"""The feed: from a water analysis to component totals that are electroneutral.

Owns the steps from mg/L to the totals that treatment starts from, and what they say about the
analysis. The equations that close the charge are in `chemistry.closure`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry import feed_notes
from chemistry.analysis import (
    ANALYTES,
    METALS,
    Analyte,
    Measurement,
    WaterAnalysis,
    analyte_of,
    component_of,
)
from chemistry.burden import BURDENS, water_burden
from chemistry.closure import (
    AcidRule,
    CannotCloseError,
    Closed,
    base_demand_mol_per_l,
    close_with_acid,
    close_with_alkalinity,
    ph_rule,
    titration_rule,
)
from chemistry.errors import WaterError
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import System
from chemistry.units import (
    meq_per_l_to_kg_naoh_per_m3,
    mg_per_l_as_caco3_to_meq_per_l,
    mg_per_l_to_mol_per_l,
)

__all__ = [
    "ANALYTES",
    "BURDENS",
    "METALS",
    "AcidComparison",
    "Analyte",
    "FeedWater",
    "Measurement",
    "WaterAnalysis",
    "analyte_of",
    "charge_balance_error_percent",
    "component_of",
    "feed_water",
    "water_burden",
]

FloatArray = NDArray[np.float64]

# Below this pH a water has no alkalinity: the carbon dioxide end point (common practice).
ALKALINITY_LEAST_PH = 4.3


def charge_balance_error_percent(cations_meq_per_l: float, anions_meq_per_l: float) -> float:
    """Charge-balance error ``100 (cations - anions) / (cations + anions)``. [%]

    Examples
    --------
    >>> charge_balance_error_percent(11.0, 9.0)
    10.0
    """
    gross = cations_meq_per_l + anions_meq_per_l
    return 100.0 * (cations_meq_per_l - anions_meq_per_l) / gross if gross else 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class AcidComparison:
    """The acid by titration beside what the measured pH alone would have given.

    Demands are NaOH to ``end_ph`` with the solids that form; the difference is titration less pH,
    so positive means that the pH alone would have bought too little. ``misfit_meq_per_l`` is the
    weighted distance of the titration points from the model.
    """

    source: str
    end_ph: float
    demand_meq_per_l: float
    misfit_meq_per_l: float
    demand_by_ph_meq_per_l: float | None
    ph_measured: float | None
    ph_modelled: float

    @property
    def difference_meq_per_l(self) -> float | None:
        """Base that the pH alone would have missed. [meq/L]"""
        if self.demand_by_ph_meq_per_l is None:
            return None
        return self.demand_meq_per_l - self.demand_by_ph_meq_per_l

    @property
    def difference_kg_naoh_per_m3(self) -> float | None:
        """The same as NaOH per volume of feed. [kg/m3]"""
        missed = self.difference_meq_per_l
        return None if missed is None else meq_per_l_to_kg_naoh_per_m3(missed)


@dataclass(frozen=True, eq=False, kw_only=True)
class FeedWater:
    """A feed ready for treatment: electroneutral totals and what was found on the way.

    Parameters
    ----------
    totals_mol_per_l
        Dissolved totals of the system's components, TOT-H among them, (components,). [mol/L]
    state
        Equilibrium of these totals without solids, a batch of one. Where Fe(II) was oxidised it is
        the water after that.
    ph_as_sampled
        pH of the water as analysed, before oxidation.
    charge_balance_error_percent, cations_meq_per_l, anions_meq_per_l
        As analysed, before closing. [%, meq/L]
    closing_ion, closing_mol_per_l
        Component moved and its change (negative: lowered). [mol/L]
    particulate_mg_per_l
        Analyte to total less dissolved: solids of the feed of unknown form. [mg/L]
    unmodelled_mg_per_l
        Dissolved analytes without a component. [mg/L]
    below_reporting_limit
        Analytes reported as below a limit; half of it is in the balance.
    supersaturation_si_log10
        Solids above saturation in the state, with their index.
    acid
        Comparison of acids where a titration or an acidity was given.
    notes
        Sentences for the reader of a plan.
    """

    analysis: WaterAnalysis
    system: System
    totals_mol_per_l: FloatArray
    state: EquilibriumState
    ph_as_sampled: float
    charge_balance_error_percent: float
    cations_meq_per_l: float
    anions_meq_per_l: float
    closing_ion: str
    closing_mol_per_l: float
    particulate_mg_per_l: Mapping[str, float]
    unmodelled_mg_per_l: Mapping[str, float]
    below_reporting_limit: tuple[str, ...]
    supersaturation_si_log10: Mapping[str, float]
    acid: AcidComparison | None
    notes: tuple[str, ...]

    @property
    def ph(self) -> float:
        """The pH of the water that enters treatment, no solids formed."""
        return float(self.state.ph[0])

    @property
    def ionic_strength(self) -> float:
        """Ionic strength. [mol/L]"""
        return float(self.state.ionic_strength[0])

    @property
    def burden_mg_per_l(self) -> dict[str, float]:
        """Burden of the feed, see `water_burden`. [mg/L]"""
        burden = water_burden(self.totals_mol_per_l, self.system)
        return {name: float(value) for name, value in burden.items()}

    @property
    def tds_mg_per_l(self) -> float:
        """Sum of ions. [mg/L]"""
        return self.burden_mg_per_l["TDS"]

    @property
    def hardness_mg_per_l_as_caco3(self) -> float:
        """Calcium and magnesium. [mg/L as CaCO3]"""
        return self.burden_mg_per_l["hardness"]

    @property
    def dissolved_mg_per_l(self) -> dict[str, float]:
        """Dissolved amount of each metal that treatment sees, after closing. [mg/L]"""
        found = {}
        for name in METALS:
            column = self.system.index.get(ANALYTES[name].component)
            if column is not None and self.totals_mol_per_l[column] > 0.0:
                mass = 1000.0 * ANALYTES[name].molar_mass_g_per_mol
                found[name] = float(self.totals_mol_per_l[column]) * mass
        return found


def feed_water(analysis: WaterAnalysis, system: System) -> FeedWater:
    """Turn an analysis into the totals of an electroneutral water.

    Parameters
    ----------
    analysis
        What the laboratory reports.
    system
        Components, species and candidate solids at the temperature of the water.

    Returns
    -------
    FeedWater

    Raises
    ------
    WaterError
        An analyte without a component in the system, an alkalinity below pH 4.3 or beside
        carbonate, or a charge that the named ion cannot close.

    Notes
    -----
    1. Dissolved concentrations (half of a ``<`` value) become component totals.
    2. The acid comes from titration points, else a measured acidity, else the pH, and is found
       together with the amount of the closing ion (`chemistry.closure`).
    3. With ``aerated`` dissolved iron(II) becomes iron(III),
       ``Fe+2 + 1/4 O2 + H+ = Fe+3 + 1/2 H2O``: TOT-H falls by one mole per mole. Titrations are
       read as made on the sample before that, its Fe(II) unoxidised.

    The charge-balance error counts cations at their full charge with the free H+ of the sample,
    and gives all other protons and hydroxide to the anions, so that bicarbonate and bisulfate
    count as single charges.
    """
    measured = measured_totals_mol_per_l(analysis, system)
    ion = component_of(analysis.close_charge_with)
    if ion not in system.index:
        raise WaterError(f"the closing ion {ion} is no component of the system")
    rule = _acid_rule(analysis, system, measured)
    closed = _close(analysis, system, measured, ion, rule)
    bare = system.narrowed(solids=())
    sampled = equilibrate(bare, closed.totals_mol_per_l[None, :])
    cations, anions = _charges_meq_per_l(system, measured, sampled, closed)
    totals, state = closed.totals_mol_per_l, sampled
    if analysis.aerated:
        totals = oxidise_iron(system, totals)
        state = equilibrate(bare, totals[None, :])
    acid = _compare_acid(analysis, system, measured, ion, rule, closed, float(sampled.ph[0]))
    above = _supersaturation(system, state)
    particulate, unmodelled = carried_by(analysis)
    water = FeedWater(
        analysis=analysis, system=system, totals_mol_per_l=totals, state=state,
        ph_as_sampled=float(sampled.ph[0]),
        charge_balance_error_percent=charge_balance_error_percent(cations, anions),
        cations_meq_per_l=cations, anions_meq_per_l=anions, closing_ion=ion,
        closing_mol_per_l=closed.added_mol_per_l,
        particulate_mg_per_l=particulate, unmodelled_mg_per_l=unmodelled,
        below_reporting_limit=tuple(
            a for a, m in analysis.measurements.items() if m.below_reporting_limit
        ),
        supersaturation_si_log10=above, acid=acid, notes=(),
    )  # fmt: skip
    return feed_notes.with_notes(water)


def measured_totals_mol_per_l(analysis: WaterAnalysis, system: System) -> FloatArray:
    """Component totals as analysed, TOT-H left at 0."""
    totals = np.zeros(len(system.components))
    missing = []
    for name, measurement in analysis.measurements.items():
        analyte = ANALYTES[name]
        amount = mg_per_l_to_mol_per_l(measurement.balance_mg_per_l, analyte.molar_mass_g_per_mol)
        if not analyte.is_modelled or amount == 0.0:
            continue
        if analyte.component in system.index:
            totals[system.index[analyte.component]] += amount
        else:
            missing.append(f"{name} ({analyte.component})")
    if missing:
        raise WaterError(f"the system has no component for {', '.join(missing)}")
    return totals


def _acid_rule(analysis: WaterAnalysis, system: System, measured: FloatArray) -> AcidRule:
    if analysis.titration:
        points = tuple((base / 1000.0, ph) for base, ph in analysis.titration)
        return titration_rule(system, measured, points)
    if analysis.acidity_meq_per_l is not None:
        point = (analysis.acidity_meq_per_l / 1000.0, analysis.acidity_end_ph)
        return titration_rule(system, measured, (point,))
    if analysis.ph is None:
        raise WaterError("no acid given: state the pH, an acidity or titration points")
    return ph_rule(system, analysis.ph)


def _close(
    analysis: WaterAnalysis, system: System, measured: FloatArray, ion: str, rule: AcidRule
) -> Closed:
    alkalinity = analysis.alkalinity_mg_per_l_as_caco3
    try:
        if not alkalinity:
            return close_with_acid(system, measured, ion, rule)
        _check_alkalinity(analysis, system)
        equivalents = mg_per_l_as_caco3_to_meq_per_l(alkalinity) / 1000.0
        return close_with_alkalinity(system, measured, ion, rule, equivalents)
    except CannotCloseError as failure:
        text = feed_notes.cannot_close(system, measured, ion, failure.surplus_mol_per_l)
        raise WaterError(text) from None


def _check_alkalinity(analysis: WaterAnalysis, system: System) -> None:
    value = analysis.alkalinity_mg_per_l_as_caco3
    if analysis.ph is not None and analysis.ph < ALKALINITY_LEAST_PH:
        raise WaterError(
            f"an alkalinity of {value:g} mg/L as CaCO3 cannot exist at pH {analysis.ph:g}: a water "
            f"below pH {ALKALINITY_LEAST_PH} has none. Leave it out or correct the pH"
        )
    if "CO3-2" not in system.index:
        raise WaterError("an alkalinity needs the component CO3-2 in the system")
    given = [a for a in ("CO3", "HCO3") if a in analysis.measurements]
    if given:
        raise WaterError(
            f"alkalinity and {' and '.join(given)} both fix the carbonate: give one of them"
        )


def _charges_meq_per_l(
    system: System, measured: FloatArray, sampled: EquilibriumState, closed: Closed
) -> tuple[float, float]:
    charges = system.component_charges
    free_h = float(sampled.species_mol_per_l[0, system.index["H+"]])
    cations = float(np.maximum(charges, 0.0) @ measured) + free_h
    return 1000.0 * cations, 1000.0 * (cations - closed.surplus_mol_per_l)


def oxidise_iron(system: System, totals_mol_per_l: FloatArray) -> FloatArray:
    """Totals after air has turned all iron(II) into iron(III), (components,). [mol/L]

    ``Fe+2 + 1/4 O2 + H+ = Fe+3 + 1/2 H2O``: one proton is used per iron.

    Raises
    ------
    WaterError
        The system has Fe+2 but no Fe+3.
    """
    totals = totals_mol_per_l.copy()
    ferrous = totals[system.index["Fe+2"]] if "Fe+2" in system.index else 0.0
    if ferrous == 0.0:
        return totals
    if "Fe+3" not in system.index:
        raise WaterError("aerated iron needs the component Fe+3 in the system")
    totals[system.index["Fe+2"]] = 0.0
    totals[system.index["Fe+3"]] += ferrous
    totals[system.index["H+"]] -= ferrous
    return totals


def _compare_acid(
    analysis: WaterAnalysis, system: System, measured: FloatArray, ion: str, rule: AcidRule,
    closed: Closed, ph_modelled: float,
) -> AcidComparison | None:  # fmt: skip
    source = "titration" if analysis.titration else "acidity"
    if source == "acidity" and analysis.acidity_meq_per_l is None:
        return None
    end_ph = analysis.acidity_end_ph
    by_ph: float | None = None
    if analysis.ph is not None:
        try:
            alone = _close(analysis, system, measured, ion, ph_rule(system, analysis.ph))
            by_ph = 1000.0 * base_demand_mol_per_l(system, alone.totals_mol_per_l, end_ph)
        except WaterError:
            by_ph = None
    return AcidComparison(
        source=source, end_ph=end_ph, demand_by_ph_meq_per_l=by_ph, ph_measured=analysis.ph,
        demand_meq_per_l=1000.0 * base_demand_mol_per_l(system, closed.totals_mol_per_l, end_ph),
        misfit_meq_per_l=1000.0 * rule.misfit_mol_per_l(closed.totals_mol_per_l),
        ph_modelled=ph_modelled,
    )  # fmt: skip


def carried_by(analysis: WaterAnalysis) -> tuple[dict[str, float], dict[str, float]]:
    """Analytes as solids of the feed, and those dissolved without a component. [mg/L]"""
    found = analysis.measurements.items()
    particulate = {n: v.particulate_mg_per_l for n, v in found if v.particulate_mg_per_l > 0.0}
    unmodelled = {n: v.dissolved_mg_per_l for n, v in found if not ANALYTES[n].is_modelled}
    return particulate, unmodelled


def _supersaturation(system: System, state: EquilibriumState) -> dict[str, float]:
    """Solids of the full system above saturation in a state found without them."""
    possible = (system.solid_formation != 0.0) @ (state.totals[0] == 0.0).astype(float) == 0.0
    ln_water = float(state.kernel.model.ln_water(state.surroundings)[0])
    ln_index = system.solid_formation @ state.log_activity[0] + system.solid_ln_k
    index = (ln_index + ln_water * system.solid_water) / np.log(10.0)
    above = [
        (float(index[i]), name)
        for i, name in enumerate(system.solid_names)
        if possible[i] and index[i] > 1e-6
    ]
    return {name: value for value, name in sorted(above, reverse=True)}
