"""From an evaluated point to the plain data of a plan: words and numbers that people act on.

Owns the content of `Outcome.data`; the arrays come from `optimiser.evaluation`.
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from catalogs.reagents import CAUTIONS_DEFER_TO
from chemistry.burden import BURDENS, water_burden
from chemistry.state import CO2_SPECIES, H2S_SPECIES, EquilibriumState
from optimiser.assumptions import assumptions, versions
from optimiser.capacities import capacities
from optimiser.deal import Deal
from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator
from optimiser.gas_figures import gas_figures
from optimiser.held_up import HeldUp, held_up_by
from optimiser.plan_purchases import deal_of_point, exact_costs, purchase_rows
from optimiser.points import END_TEXT
from optimiser.quality import LOADS, MONTHLIES
from optimiser.quality_slopes import RULE
from optimiser.sample_figures import monthly_limit, sample_figures
from optimiser.site_jar import jar_cautions
from optimiser.site_salt import MODEL_TEXT
from optimiser.sludge_figures import sludge_data
from optimiser.surcharges import surcharge_rows

FloatArray = NDArray[np.float64]
Data = dict[str, Any]

FEED_HOURS_PER_DAY = 24.0
LEAST_SHARE_OF_RESIDUAL = 0.25  # of dissolved in total metal, for a word on what holds it up


class Describer:
    """Describes one point of an evaluation."""

    def __init__(self, evaluator: Evaluator, seen: Evaluation, point: int) -> None:
        self.evaluator = evaluator
        self.plant = evaluator.plant
        self.site = evaluator.site
        self.seen = seen
        self.point = point
        self.doses = seen.priced.doses[point]
        self.trim_doses = seen.priced.trim_doses[point]
        self.trims = any(
            part.block.trimmed[self._rows(part.block.rows)].any() for part in seen.judged
        )

    def _rows(self, rows: NDArray[np.int64]) -> NDArray[np.bool_]:
        all_rows = self.seen.rows
        mine: NDArray[np.bool_] = (all_rows.point[rows] == self.point) & all_rows.counts[rows]
        return mine

    # -- doses and money ---------------------------------------------------------------------------

    def dose_map(self) -> dict[str, float]:
        """Doses by key."""
        names = self.plant.names
        found = {names[i]: float(self.doses[i]) for i in np.flatnonzero(self.doses > 0.0)}
        for i in np.flatnonzero(self.trim_doses > 0.0):
            found[f"{names[i]}@trim"] = float(self.trim_doses[i])
        return found

    @cached_property
    def deal(self) -> Deal:
        """The cheapest purchase of the doses."""
        return deal_of_point(self.evaluator, self.seen.priced, self.point)

    def cost_map(self) -> dict[str, float]:
        """Cost by cause, with the total last."""
        return exact_costs(self.evaluator, self.seen.priced, self.point, self.deal)

    def purchases(self) -> list[Data]:
        """What is bought on each offer."""
        return purchase_rows(self.evaluator, self.deal)

    def feeding(self) -> list[Data]:
        """Every dose as it is fed: product, kg a day, litres an hour."""
        chosen = {row["reagent"]: row["offer"] for row in reversed(self.purchases())}
        offers = {o.offer: o for o in self.site.offers}
        controller = int(self.seen.points.controller[self.point])
        tolerance = self.plant.treatment.dose_tolerance_fraction
        rows = []
        for key, dose in self.dose_map().items():
            reagent, _, stage = key.partition("@")
            offer = offers[chosen[reagent]]
            pure = dose * self.site.flow_m3_per_d / 1000.0
            product = pure / offer.strength_fraction
            by_ph = stage == "trim" or self.plant.index[reagent] == controller
            low, high = self._controlled_range(stage) if by_ph else (
                dose * (1.0 - tolerance), dose * (1.0 + tolerance),
            )  # fmt: skip
            rows.append(
                {
                    "key": key, "reagent": reagent, "offer": offer.offer,
                    "product": f"{offer.product}, {offer.form}", "dose_mg_per_l": dose,
                    "pure_kg_per_d": pure, "product_kg_per_d": product,
                    "product_l_per_h": product / offer.density_kg_per_l / FEED_HOURS_PER_DAY,
                    "paced_by": "pH controller" if by_ph else "flow",
                    "alarm_low_mg_per_l": low, "alarm_high_mg_per_l": high,
                }
            )  # fmt: skip
        return rows

    def _controlled_range(self, stage: str) -> tuple[float, float]:
        """Smallest and largest dose that the controller gives over all states."""
        found: list[float] = []
        for part in self.seen.judged:
            mine = self._rows(part.block.rows) & part.block.reached
            values = part.block.trim_dose if stage else part.block.dose
            found += values[mine].tolist()
        return min(found, default=0.0), max(found, default=0.0)

    # -- limits ------------------------------------------------------------------------------------

    def limits(self) -> list[Data]:
        """Every limit in every averaging, at its worst state."""
        rows = []
        for number, check in enumerate(self.evaluator.judge.checks):
            if check.averaging == RULE:
                continue
            if check.averaging in MONTHLIES and self.plant.feeds.many:
                rows.append(monthly_limit(self.evaluator, self.seen, self.point, number))
                continue
            part, k = self._worst(number)
            value = float(part.value[k, number])
            day = self.plant.feeds.flow_ratio[self.seen.rows.sample[part.block.rows[k]]]
            flow = float(day) * self.site.flow_m3_per_d
            scale = flow / 1000.0 if check.averaging in LOADS else 1.0
            metals = list(check.metals)
            residual = part.residual[k, metals].sum() if metals else value
            theory = part.theory[k, metals].sum() if metals else value
            carried = part.carried[k, metals].sum() if metals else 0.0
            floor = part.floor[k, metals].sum() if metals else 0.0
            predicted = value * scale * check.variability
            held = self._held_up(part, k, metals)
            rows.append(
                {
                    "parameter": check.label, "averaging": check.averaging, "unit": check.unit,
                    "limit": check.limit, "source": check.source,
                    "residual": float(residual) * scale,
                    "residual_by_theory": float(theory) * scale,
                    "carry_over": float(carried) * scale,
                    "floor": float(floor) * scale, "variability_factor": check.variability,
                    "predicted": predicted, "target": check.margin * check.limit,
                    "margin_percent": 100.0 * (1.0 - predicted / check.limit),
                    "meets": bool(part.ratio[k, number] <= FEASIBLE_RATIO),
                    "worst_state": self._state_text(part.block.end, int(part.block.rows[k])),
                    "held_up_by": held.to_dict() if held else None,
                }
            )  # fmt: skip
        return rows

    def _held_up(self, part: Any, k: int, metals: list[int]) -> HeldUp | None:
        """What holds the metals of a check in solution in one state of the tank."""
        if not metals:
            return None
        return held_up_by(part.block.state, k, self.evaluator.judge.weights[metals].sum(axis=0))

    def _complexed(self) -> list[str]:
        """Say where complexing matter carries more than half of a residual that counts."""
        texts = []
        for number, check in enumerate(self.evaluator.judge.checks):
            if check.averaging in MONTHLIES and self.plant.feeds.many:
                continue
            part, k = self._worst(number)
            held = self._held_up(part, k, list(check.metals))
            if held is None or not held.is_complexed:
                continue
            metals = list(check.metals)
            residual, carried = part.residual[k, metals].sum(), part.carried[k, metals].sum()
            if residual >= LEAST_SHARE_OF_RESIDUAL * (residual + carried):
                texts.append(
                    f"{held.complexing} holds {check.label} up: "
                    f"{held.complexing_share_percent:.0f} % of what stays dissolved in the worst "
                    f"state is bound to it ({held.species} first)"
                )
        return list(dict.fromkeys(texts))

    def _worst(self, check: int) -> tuple[Any, int]:
        best: tuple[float, Any, int] | None = None
        for part in self.seen.judged:
            for k in np.flatnonzero(self._rows(part.block.rows)):
                ratio = float(part.ratio[k, check])
                if best is None or ratio > best[0]:
                    best = (ratio, part, int(k))
        assert best is not None, "a point has at least its nominal state"
        return best[1], best[2]

    def _state_text(self, end: int, row: int) -> str:
        rows = self.seen.rows
        words = [self.plant.feeds.labels[rows.sample[row]]] if self.plant.feeds.many else []
        if rows.shift[row]:
            words.append(f"set point {rows.shift[row]:+.2f}")
        words += [
            f"{self.plant.names[i]} {100.0 * (rows.factor[row, i] - 1.0):+.0f} %"
            for i in np.flatnonzero(rows.factor[row] != 1.0)
        ]
        if rows.nominal[row]:
            words.append("nominal")
        return f"{', '.join(words)}; {END_TEXT[end]}"

    def ph(self) -> Data:
        """PH at discharge over every state against the window."""
        window = self.site.ph_window
        low, high = np.inf, -np.inf
        meets = True
        for part in self.seen.judged:
            mine = self._rows(part.block.rows)
            out = self._discharge_ph(part.block)[mine]
            low, high = min(low, float(out.min())), max(high, float(out.max()))
            meets &= not part.block.trim_missing[mine].any() and bool(
                part.block.reached[mine].all()
            )
        meets &= low >= window.low - 1e-6 and high <= window.high + 1e-6
        return {
            "low": window.low, "high": window.high, "lowest": low, "highest": high,
            "meets": bool(meets), "source": window.source,
        }  # fmt: skip

    def _discharge_ph(self, block: Any) -> FloatArray:
        out = block.state.ph.copy()
        if block.trim_state is not None:
            out[block.trimmed] = block.trim_state.ph
        return np.asarray(out, dtype=float)

    # -- water -------------------------------------------------------------------------------------

    def set_points(self) -> list[Data]:
        """What the operator sets."""
        tolerance = self.plant.treatment.ph_tolerance
        controller = int(self.seen.points.controller[self.point])
        tank = self._nominal_state().ph[0]
        set_point = float(self.seen.points.ph[self.point]) if controller >= 0 else float(tank)
        rows = [
            {
                "stage": "tank",
                "controller": self.plant.names[controller] if controller >= 0 else None,
                "ph_set_point": set_point, "ph_alarm_low": set_point - tolerance,
                "ph_alarm_high": set_point + tolerance,
            }
        ]  # fmt: skip
        if self.trims:
            target = self._trim_target()
            rows.append(
                {
                    "stage": "trim",
                    "controller": self.plant.names[int(self.seen.points.trim[self.point])],
                    "ph_set_point": target, "ph_alarm_low": target - tolerance,
                    "ph_alarm_high": target + tolerance,
                }
            )  # fmt: skip
        return rows

    def _trim_target(self) -> float:
        for part in self.seen.judged:
            block = part.block
            mine = self._rows(block.rows) & block.trimmed
            if mine.any() and block.trim_state is not None:
                return float(self._discharge_ph(block)[mine][0])
        return float("nan")

    def _nominal(self) -> tuple[Any, int]:
        block = self.seen.blocks[0]
        k = self.seen.nominal_row(block, self.point)
        assert k is not None, "a point has its nominal state"
        return block, k

    def _nominal_state(self) -> EquilibriumState:
        block, k = self._nominal()
        state: EquilibriumState = block.state.row(k)
        return state

    def water(self) -> list[Data]:
        """The water at the feed, in the tank and after trim."""
        block, k = self._nominal()
        feed = self.plant.feed.state
        rows = [self._water_row("feed", feed, self.plant.totals)]
        tank = self._nominal_state()
        rows.append(self._water_row("tank", tank, block.liquid[k]))
        if block.trimmed[k] and block.trim_state is not None:
            place = int(np.flatnonzero(np.flatnonzero(block.trimmed) == k)[0])
            after = block.trim_state.row(place)
            rows.append(self._water_row("after trim", after, block.effluent[k]))
        return rows

    def _water_row(self, name: str, state: EquilibriumState, liquid: FloatArray) -> Data:
        return {
            "point": name, "ph": float(state.ph[0]),
            "ionic_strength_mol_per_l": float(state.ionic_strength[0]),
            "tds_mg_per_l": float(water_burden(liquid, self.plant.system)["TDS"]),
            "h2s_ppm": 1e6 * float(state.partial_pressure_atm(H2S_SPECIES)[0]),
            "co2_ppm": 1e6 * float(state.partial_pressure_atm(CO2_SPECIES)[0]),
        }  # fmt: skip

    def gas(self) -> Data:
        """Gas over the water, with thresholds in air."""
        return gas_figures(self.plant, self.seen, self.point, self._state_text)

    def burden(self) -> Data:
        """Burden of feed and effluent, the dearest end's."""
        feed = self.plant.feed.burden_mg_per_l
        found: Data = {}
        for name in BURDENS:
            effluent = 0.0
            for part in self.seen.judged:
                k = self.seen.nominal_row(part.block, self.point)
                if k is not None:
                    effluent = max(effluent, float(part.burden[name][k]))
            found[name] = {
                "feed_mg_per_l": feed[name], "effluent_mg_per_l": effluent,
                "added_mg_per_l": effluent - feed[name],
            }  # fmt: skip
        return found

    # -- words -------------------------------------------------------------------------------------

    def cautions(self) -> list[str]:
        """Cautions of every reagent in use, and what the states themselves call for."""
        used = np.flatnonzero((self.doses > 0.0) | (self.trim_doses > 0.0))
        texts: list[str] = []
        for i in used:
            texts += [
                f"{self.plant.reagents[i].name}: {c}" for c in self.plant.reagents[i].cautions
            ]
        strength = max(float(b.state.ionic_strength.max()) for b in self.seen.blocks)
        model = self.plant.system.activity_model
        if strength > model.trusted_to_mol_per_l:
            texts.append(
                f"ionic strength reaches {strength:.2f} mol/L: {MODEL_TEXT[model.name]} holds to "
                f"about {model.trusted_to_mol_per_l:g}, so residuals are less certain here"
            )
        texts += self._complexed()
        texts += jar_cautions(self.site.jar, self.dose_map(), self.seen.points, self.point)
        return [*dict.fromkeys(texts), CAUTIONS_DEFER_TO] if texts else []

    def certificate(self) -> Data:
        """Worst certificate of the point's states."""
        worst = {"mass_balance": 0.0, "supersaturation": 0.0, "presence": 0.0, "charge": 0.0}
        count = 0
        for part in self.seen.judged:
            states = [(part.block.state, self._rows(part.block.rows))]
            if part.block.trim_state is not None:
                trimmed = self._rows(part.block.rows)[part.block.trimmed]
                states.append((part.block.trim_state, trimmed))
            for state, mine in states:
                count += int(mine.sum())
                for name, values in state.certificate_arrays.items():
                    worst[name] = max(worst[name], float(values[mine].max(initial=0.0)))
        return {**worst, "states": count}

    def missed_rules(self) -> list[str]:
        """Safety and practice rules that do not hold."""
        rules = self.seen.rules
        missed = [r.label for r in rules if r.ratio[self.point] > FEASIBLE_RATIO]
        texts = list(dict.fromkeys(missed))
        checks = self.evaluator.judge.checks
        for number, check in enumerate(checks):
            if check.averaging == RULE:
                part, k = self._worst(number)
                if part.ratio[k, number] > FEASIBLE_RATIO:
                    texts.append(check.label)
        return texts


def describe(
    evaluator: Evaluator, seen: Evaluation, point: int, *, proof: Data, extra: Iterable[str] = ()
) -> Data:
    """Return the plain data of one point; ``proof`` is completed with its certificate."""
    one = Describer(evaluator, seen, point)
    site = evaluator.site
    cost = one.cost_map()
    return {
        "site": {
            "name": site.name, "currency": site.currency, "flow_m3_per_d": site.flow_m3_per_d,
            "operating_days_per_year": site.operating_days_per_year,
            "stands_for": site.stands_for,
            "activity_model": evaluator.plant.system.activity_model.name,
            "temperature_degc": evaluator.plant.system.temperature_degc,
        },
        "compliant": bool(seen.feasible[point]) and one.ph()["meets"],
        "set_points": one.set_points(), "doses": one.dose_map(), "feeding": one.feeding(),
        "purchases": one.purchases(), "capacities": capacities(site, one.feeding()),
        "cost": cost, "surcharges": surcharge_rows(evaluator, seen, point),
        "limits": one.limits(), "ph": one.ph(),
        "rules_missed": one.missed_rules(), "water": one.water(), "gas": one.gas(),
        "burden": one.burden(),
        "sludge": sludge_data(evaluator, seen, point), "cautions": one.cautions(),
        "assumptions": [*assumptions(evaluator), *extra],
        "proof": {**proof, "certificate": one.certificate()},
        "runners_up": [], "runners_up_left_out": [],
        "samples": sample_figures(evaluator, seen, point),
        "versions": versions(site.solver.name),
    }  # fmt: skip
