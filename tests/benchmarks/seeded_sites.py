"""Twenty invented sites, one per seed, for the optimality benchmark: the same seed, the same files.

`write_site` puts ``site.yaml`` and ``offers.csv`` into a folder, to be read like any user's files.
Each seed has a kind, which fixes the feed's character and what is likely to bind (`KINDS`, in
turn), and draws the rest uniformly from the ranges of `tests.benchmarks.seeded_ranges` and of the
methods below: two to six metals with their limits, four to eight reagents, two or three of them at
most in a plan, offers, equipment, tariffs, flows, set points and separators.

Feeds of `PEAK_SEEDS` stand for peaks. All others stand for averages and have metal limits
`AVERAGE_LIMITS` times as high, because published ratios of peak to mean apply to them. Salt caps
follow from the feed: sulfate at 0.80 to 0.98 of what comes in, the load of all ions at 0.96 to 1.06
of what caustic would leave, the sum of metals at 0.35 to 0.60 of its single limits. Seeds of
`CONTRACT_SEEDS` have three offers per reagent with different packs, least orders, freights and
strengths, two in three with price breaks by the year (each 3 to 14 % below the one before), one
bulk offer in three with take-or-pay; other seeds have one or two plain offers.

The ranges were set once so that every seed has a plan; no seed was left out or drawn again.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import yaml

from tests.benchmarks.seeded_ranges import (
    DRY_PRICE,
    EQUIPMENT,
    FORMS,
    METALS,
    PACKS,
    PLAIN_EQUIPMENT,
    POOLS,
    SALTS,
    SET_POINTS,
    SULFIDE_TAKEN,
    SULFIDES,
    SUPPLIERS,
    TIER_WIDTH_T,
)

Row = dict[str, Any]

SEEDS = range(1, 21)
PEAK_SEEDS = frozenset({3, 5, 9, 12, 14, 20})
CONTRACT_SEEDS = frozenset(range(15, 21))
KINDS = (
    "metal limits", "sum of metals", "sulfate cap", "chloride cap", "TDS load",
    "monthly averages", "sulfide", "pH window", "sludge tariff", "barium",
)  # fmt: skip
AVERAGE_LIMITS = 2.4
MARGIN = 0.8
SALT_RATIO = 1.1  # highest day over the mean of the salts, in every seeded site


@dataclass(frozen=True, slots=True)
class SeededSite:
    """What a seed made: the site file as a tree, its offers and what it promises."""

    seed: int
    kind: str
    metals: tuple[str, ...]
    reagents: tuple[str, ...]
    tree: Mapping[str, Any]
    offers: tuple[Row, ...]  # of the price book; further tiers are rows of their own

    @property
    def name(self) -> str:
        """The instance's name in results: ``seed_07``."""
        return f"seed_{self.seed:02d}"


def seeded_site(seed: int) -> SeededSite:
    """Draw the site of a seed."""
    return _Draw(seed).site()


def write_site(seed: int, folder: Path) -> Path:
    """Write the files of a seed's site into a folder and return the path of its site file."""
    made = seeded_site(seed)
    folder.mkdir(parents=True, exist_ok=True)
    columns = list(dict.fromkeys(name for row in made.offers for name in row))
    with (folder / "offers.csv").open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, columns, lineterminator="\n")
        writer.writeheader()
        writer.writerows(made.offers)
    path = folder / "site.yaml"
    path.write_text(yaml.safe_dump(dict(made.tree), sort_keys=False), encoding="utf-8")
    return path


class _Draw:
    """The draws of one seed, in a fixed order."""

    def __init__(self, seed: int) -> None:
        self.seed = seed
        self.rng = np.random.default_rng(9000 + seed)
        self.kind = KINDS[(seed - 1) % len(KINDS)]
        self.pool = POOLS.get(self.kind, POOLS["acid"])
        self.peak = seed in PEAK_SEEDS
        self.contracts = seed in CONTRACT_SEEDS
        self.metals = self._metals()
        self.reagents = self._reagents()
        self.flow = self.between(40, 320, 10)
        self.days = self.between(200, 300, 10)
        self.analysis: dict[str, float] = {}

    def between(self, low: float, high: float, step: float) -> float:
        """Uniform draw, rounded to a step."""
        value = round(float(self.rng.uniform(low, high)) / step) * step
        return round(value, 6)

    def some(self, names: Sequence[str], count: int) -> list[str]:
        """So many of the names, in their order."""
        chosen = self.rng.choice(len(names), size=min(count, len(names)), replace=False)
        return [names[i] for i in sorted(int(i) for i in chosen)]

    def _metals(self) -> tuple[str, ...]:
        names = self.pool[0]
        count = int(self.rng.integers(2, 7))
        if self.pool is POOLS["acid"]:
            return tuple(self.some(names, count))
        return (names[0], *self.some(names[1:], count - 1))

    def _reagents(self) -> tuple[str, ...]:
        _, always, others = self.pool
        first = list(always)
        if self.pool is POOLS["acid"] and SULFIDE_TAKEN & set(self.metals):
            first += ["soda_ash", str(self.rng.choice(SULFIDES))]
        rest = [name for name in others if name not in first]
        count = max(int(self.rng.integers(4, 9)), len(first))
        return (*first, *self.some(rest, count - len(first)))

    def site(self) -> SeededSite:
        """Draw everything else and put the site together."""
        tree = {
            "site": f"Invented works {self.seed}, {self.kind}",
            "currency": "EUR",
            "feed": self._feed(),
            "limits": self._limits(),
            "treatment": self._treatment(),
            "disposal": self._disposal(),
            "offers": "offers.csv",
        }
        if self.rng.random() < 0.4:
            tree["burden_charges_per_kg"] = {"SO4": self.between(0.01, 0.06, 0.01)}
        return SeededSite(
            self.seed, self.kind, self.metals, self.reagents, tree, tuple(self._offers())
        )

    # -- feed --------------------------------------------------------------------------------------

    def _feed(self) -> dict[str, Any]:
        metals = {name: self.between(*METALS[name][:2], 0.1) for name in self.metals}
        ph, base, closing = self._water()
        self.analysis = {**metals, **base}
        if closing in ("SO4", "Cl"):
            self.analysis[closing] = round(self._missing_anion(closing, ph), 0)
        return {
            "stands_for": "peak" if self.peak else "average",
            "flow_m3_per_d": self.flow,
            "operating_days_per_year": self.days,
            "temperature_degc": self.between(12, 25, 1),
            "ph": ph,
            "tss_mg_per_l": self.between(2, 15, 1),
            "close_charge_with": closing,
            "analysis": {name: f"{value:g} mg/L" for name, value in self.analysis.items()},
        }

    def _water(self) -> tuple[float, dict[str, float], str]:
        """The pH, the salts and the ion that closes the charge."""
        if self.kind == "barium":
            salts = {"Ca": self.between(8, 25, 1), "Cl": self.between(100, 200, 5)}
            return self.between(11.7, 12.1, 0.05), {**salts, "Na": 250.0}, "Na"
        salts = {"Ca": self.between(20, 90, 5), "Mg": self.between(3, 15, 1),
                 "Na": self.between(60, 250, 10)}  # fmt: skip
        if self.kind == "chloride cap":
            return self.between(4.2, 6.0, 0.1), {**salts, "Cl": 0.3}, "SO4"
        if self.kind == "sulfate cap":
            salts = {**salts, "Na": self.between(400, 900, 50), "Cl": self.between(50, 150, 10)}
            return self.between(1.5, 1.9, 0.05), salts, "SO4"
        if self.kind == "sum of metals" and "Pb" not in self.metals:
            return self.between(1.9, 3.0, 0.1), {**salts, "SO4": self.between(50, 250, 10)}, "Cl"
        salts["Cl"] = self.between(40, 200, 10)
        return self.between(2.0, 3.2, 0.1), salts, "SO4"

    def _missing_anion(self, anion: str, ph: float) -> float:
        """About what closes the charge, mg/L; bisulfate's constant is 1.6 at this strength."""
        free = 10.0**-ph / 0.85
        charge = free + self._metal_equivalents()
        charge += sum(self.analysis.get(n, 0.0) * z / m for n, z, m in SALTS) / 1000.0
        if anion == "Cl":
            return max(1000.0 * 35.45 * charge, 1.0)
        share = free / 10.0**-1.6
        return max(1000.0 * 96.06 * charge * (1.0 + share) / (2.0 + share), 1.0)

    def _metal_equivalents(self) -> float:
        return sum(
            self.analysis[name] * METALS[name][4] / METALS[name][5] / 1000.0
            for name in self.metals
        )  # fmt: skip

    # -- limits ------------------------------------------------------------------------------------

    def _limits(self) -> dict[str, Any]:
        scale = 1.0 if self.peak else AVERAGE_LIMITS
        own: list[dict[str, Any]] = []
        for metal in self.metals:
            low, high = METALS[metal][2:4]
            day = round(scale * self.between(low, high, 0.01), 3)
            row: dict[str, Any] = {"parameter": metal.split("(")[0], "daily_mg_per_l": day}
            if self.kind == "monthly averages":
                row["monthly_mg_per_l"] = round(day * self.between(0.3, 0.5, 0.05), 3)
            own.append(row)
        own += self._caps(own)
        low, high = (6.0, 10.0)
        if self.kind == "pH window":
            low, high = 6.5, self.between(8.2, 8.8, 0.1)
        salts = ("SO4", "Cl", "TDS")
        return {
            "own": [{**row, "source": "invented consent"} for row in own],
            "ph": {"low": low, "high": high, "source": "invented consent"},
            "design_margin": MARGIN,
            "variability": {n: {"daily": SALT_RATIO, "monthly": 1.05} for n in salts},
        }

    def _caps(self, metals: Sequence[Mapping[str, Any]]) -> list[dict[str, Any]]:
        """The limits beside those of the metals."""
        caps: list[dict[str, Any]] = []
        if any(name in SULFIDES for name in self.reagents):
            day = self.between(1.0, 3.0, 0.1) * (1.0 if self.peak else 1.5)
            caps.append({"parameter": "sulfide", "daily_mg_per_l": round(day, 2)})
        stated = SALT_RATIO / MARGIN if not self.peak else 1.0 / MARGIN
        if self.kind == "sum of metals":
            total = sum(float(row["daily_mg_per_l"]) for row in metals)
            day = round(total * self.between(0.35, 0.6, 0.01), 2)
            names = [row["parameter"] for row in metals]
            caps.append({"parameter": "sum", "of": names, "daily_mg_per_l": day})
        if self.kind == "sulfate cap":
            target = self.analysis["SO4"] * self.between(0.8, 0.98, 0.01)
            caps.append({"parameter": "SO4", "daily_mg_per_l": round(target * stated, 0)})
        if self.kind == "chloride cap":
            caps.append({"parameter": "Cl", "daily_mg_per_l": self.between(70, 200, 5)})
        if self.kind == "barium":
            caps.append({"parameter": "SO4", "daily_mg_per_l": self.between(200, 500, 10)})
            caps.append({"parameter": "Cl", "daily_mg_per_l": self.between(350, 500, 10)})
        if self.kind == "TDS load":
            target = self._salt_after_caustic() * self.between(0.96, 1.06, 0.01)
            load = target * stated * self.flow / 1000.0
            caps.append({"parameter": "TDS", "daily_load_kg_per_d": round(load, 1)})
        return caps

    def _salt_after_caustic(self) -> float:
        """Ions left when sodium has taken the place of metals and acid, roughly. [mg/L]"""
        ions = sum(v for name, v in self.analysis.items() if name not in METALS)
        sulfate = 2.0 * self.analysis.get("SO4", 0.0) / 96.06
        balance = sulfate - sum(self.analysis.get(n, 0.0) * z / m for n, z, m in SALTS)
        return ions + 22.99 * max(balance, 0.0)

    # -- treatment, disposal -----------------------------------------------------------------------

    def _treatment(self) -> dict[str, Any]:
        drawn = (self.between(7.0, 8.0, 0.25), self.between(9.75, 10.5, 0.25))
        low, high = SET_POINTS.get(self.kind, drawn)
        trims = ["sulfuric_acid", "hydrochloric_acid"] if self.kind == "pH window" else []
        priced = [*self.reagents, *trims]
        costs = {name: EQUIPMENT.get(name, PLAIN_EQUIPMENT) for name in priced}
        ligands = [n for n in self.reagents if n in SULFIDES]
        made: dict[str, Any] = {
            "reagents": list(self.reagents),
            "most_reagents": 2 if self.seed % 4 == 0 else 3,
            "least_doses_mg_per_l": {
                **{n: self.between(2, 4, 0.5) for n in ligands},
                **{n: 20.0 for n in self.reagents if n in ("soda_ash", "sodium_bicarbonate")},
            },
            "equipment_cost_per_year": {n: self.between(*c, 50) for n, c in costs.items()},
            "ph_set_point": {"low": low, "high": high},
            "separator": {
                "name": "clarifier and filter", "tss_mg_per_l": self.between(0.5, 2.5, 0.1),
                "capture_fraction": 0.996, "cost_per_year": self.between(3000, 9000, 100),
            },
            "polymer_g_per_kg_solids": self.between(2, 5, 0.5),
            "polymer_price_per_kg": self.between(4, 5.5, 0.1),
        }  # fmt: skip
        if self.kind == "sulfate cap":
            made["vent_pco2_atm"] = 0.03  # a covered tank: the acid drives less carbonate out
        if trims:
            made["trim_reagents"] = trims
        return made

    def _disposal(self) -> dict[str, Any]:
        dear = self.kind == "sludge tariff"
        hazardous = self.between(450, 800, 10) if dear else self.between(180, 300, 5)
        return {
            "cake_solids_fraction": self.between(0.22, 0.45, 0.01),
            "bound_water_factor": self.between(1.1, 1.3, 0.05),
            "rules": [
                {
                    "sludge_class": "hazardous",
                    "metals": [self.metals[0].split("(")[0]],
                    "above_mg_per_kg_dry": self.between(2000, 60000, 1000),
                    "tariff_per_wet_t": hazardous,
                    "pickup_fee": self.between(100, 250, 10),
                    "tonnes_per_pickup": self.between(6, 14, 1),
                    "yearly_fee": self.between(0, 900, 50),
                },
                {
                    "sludge_class": "ordinary",
                    "tariff_per_wet_t": self.between(140, 260, 5) if dear else
                    self.between(60, 130, 5),
                },
            ],
        }  # fmt: skip

    # -- offers ------------------------------------------------------------------------------------

    def _offers(self) -> list[Row]:
        trims = ("sulfuric_acid", "hydrochloric_acid") if self.kind == "pH window" else ()
        rows: list[Row] = []
        for reagent in (*self.reagents, *trims):
            dry = self.between(*DRY_PRICE[reagent], 5)
            for pack in [0, 1, 2] if self.contracts else self._few_packs():
                first = self._offer(reagent, pack, dry)
                rows += [first, *self._further_tiers(first, pack)] if self.contracts else [first]
        return rows

    def _offer(self, reagent: str, pack: int, dry: float) -> Row:
        form, strengths, density = FORMS[reagent]
        factor, freight, least = (self.between(*r, 0.01) for r in PACKS[pack])
        return {
            "offer": f"{reagent}_{pack + 1}",
            "supplier": SUPPLIERS[int(self.rng.integers(len(SUPPLIERS)))],
            "reagent": reagent,
            "product": reagent.replace("_", " "),
            "form": form,
            "strength_percent": strengths[pack],
            "density_kg_per_l": density,
            "price": round(dry * factor * strengths[pack] / 100.0, 1),
            "price_per": "t",
            "freight_per_t": round(freight, 0),
            "least_order_t": round(least, 1),
            "valid_until": "2029-12-31",
            "note": "invented",
        }

    def _further_tiers(self, first: Row, pack: int) -> list[Row]:
        """Price breaks by the year of two offers in three, and a commitment of one bulk in three.

        The terms that belong to the whole offer go into its first row.
        """
        further: list[Row] = []
        if self.rng.random() < 2 / 3:
            first["tier_kind"] = ("all_units", "incremental")[int(self.rng.integers(2))]
            first["tier_per"] = "year"
            edge, price = 0.0, float(first["price"])
            for _ in range(int(self.rng.integers(1, 3))):
                edge = round(edge + self.between(*TIER_WIDTH_T[pack], 0.5), 1)
                price = round(price * self.between(0.86, 0.97, 0.01), 1)
                further.append({"offer": first["offer"], "tier_from_t": edge, "price": price})
        if pack == 0 and self.rng.random() < 1 / 3:
            first["take_or_pay_t"] = round(float(first["least_order_t"]) * 1.5, 0)
        return further

    def _few_packs(self) -> list[int]:
        count = int(self.rng.integers(1, 3))
        return [int(i) for i in sorted(self.rng.choice(3, size=count, replace=False))]
