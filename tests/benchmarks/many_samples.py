"""Planning on a year of samples: seconds for each phase, states, and what was certified.

Run with ``python -m tests.benchmarks.many_samples [SAMPLES [SEED]]``. The site is the plating demo
with less lead and cadmium, because one dose of sulfide per litre cannot serve samples that differ
as much as these, and with samples drawn around its analysis.
"""

from __future__ import annotations

import datetime
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

import catalogs
from optimiser import load_site, plan

DEMO = Path(catalogs.__file__).parent / "sites" / "plating_rinse"
FIRST_DAY = datetime.date(2025, 1, 1)
# Means in mg/L and spreads of the logarithm: metals move together by COMMON, and each by its own.
MEANS = {
    "Cu": (34.0, 0.12), "Ni": (11.0, 0.12), "Zn": (41.0, 0.12),
    "Pb": (0.1, 0.12), "Cd": (0.04, 0.12),
    "Cr(III)": (18.0, 0.12), "Fe(II)": (3.0, 0.12), "Ca": (48.0, 0.05), "Mg": (9.0, 0.05),
    "Na": (105.0, 0.1), "NH4": (15.0, 0.15), "Cl": (62.0, 0.1), "SO4": (905.0, 0.05),
}  # fmt: skip
SALTS = ("Ca", "Mg", "Na", "NH4", "Cl", "SO4")
COMMON, FLOW_M3_PER_D, FLOW_SPREAD, PH, PH_SPREAD = 0.12, 180.0, 0.15, 2.4, 0.08


def write_site(folder: Path, count: int, seed: int = 1) -> Path:
    """Write the site with ``count`` daily samples; returns the path of its file."""
    random = np.random.default_rng(seed)
    header = ["Date", "Flow (m3/d)", "pH", *(f"{name} mg/L" for name in MEANS)]
    lines = [",".join(header)]
    for day in range(count):
        strength = float(np.exp(COMMON * random.standard_normal()))
        values = [
            mean * np.exp(spread * random.standard_normal())
            * (strength if name not in SALTS else np.sqrt(strength))
            for name, (mean, spread) in MEANS.items()
        ]  # fmt: skip
        flow = FLOW_M3_PER_D * np.exp(FLOW_SPREAD * random.standard_normal())
        ph = PH + PH_SPREAD * random.standard_normal() - 0.2 * np.log10(strength)
        date = FIRST_DAY + datetime.timedelta(days=day)
        lines.append(",".join([date.isoformat(), *(f"{v:.4g}" for v in (flow, ph, *values))]))
    (folder / "samples.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / "offers.csv").write_bytes((DEMO / "offers.csv").read_bytes())
    text = (DEMO / "site.yaml").read_text(encoding="utf-8")
    begin, end = text.index("  analysis:"), text.index("\nlimits:")
    text = text[:begin] + "  samples: samples.csv\n" + text[end:]
    kept = [x for x in text.splitlines() if not x.startswith(("  flow_m3_per_d:", "  ph: 2.4"))]
    # the demo's load of salt holds at its mean flow: days of high flow carry more
    kept = [x.replace("daily_load_kg_per_d: 650", "daily_load_kg_per_d: 1300") for x in kept]
    path = folder / "site.yaml"
    path.write_text("\n".join(kept) + "\n", encoding="utf-8")
    return path


def _say(text: str) -> None:
    sys.stdout.write(f"{text}\n")


def main(count: int = 365, seed: int = 1) -> None:
    """Plan and print."""
    with tempfile.TemporaryDirectory() as folder:
        begun = time.perf_counter()
        site = load_site(write_site(Path(folder), count, seed), on_day=datetime.date(2026, 6, 1))
        read = time.perf_counter() - begun
        cpu = time.process_time()
        found = plan(site, progress=lambda text: _say(f"  {text}"))
        cpu = time.process_time() - cpu
    data = found.to_dict()
    proof = data["proof"]
    _say(f"{count} samples, seed {seed}: {'complies' if found.compliant else 'does not comply'}")
    _say(f"  cost {found.cost['total']:,.0f} a year, reagents {', '.join(found.doses)}")
    _say(f"  reading {read:.1f} s, planning {proof['seconds']['total']:.1f} s ({cpu:.1f} s of CPU)")
    for name, seconds in proof["seconds"].items():
        _say(f"    {name:22} {seconds:6.1f} s")
    _say(f"  {proof['states_examined']} states examined; certified: {proof['certificate']}")
    for key, value in data.get("samples", {}).items():
        _say(f"  {key}: {value}")


if __name__ == "__main__":
    main(*(int(text) for text in sys.argv[1:3]))
