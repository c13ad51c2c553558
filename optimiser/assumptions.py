"""What a plan rests on, in words: settings, constants kept, notes of feed and site, versions."""

from __future__ import annotations

from catalogs.constants import enthalpy_unknown
from optimiser.evaluation import Evaluator
from optimiser.sample_figures import shrunk_factors


def assumptions(evaluator: Evaluator) -> list[str]:
    """What the numbers rest on."""
    treatment, site = evaluator.plant.treatment, evaluator.site
    separator = treatment.separator
    texts = [
        f"{separator.name}: {separator.tss_mg_per_l:g} mg/L suspended solids or "
        f"{100.0 * (1.0 - separator.capture_fraction):g} % of the solids formed pass, "
        "whichever is less",
        f"design margin {site.design_margin:g}: predictions stay at or below that share of "
        "each limit",
        f"limits hold at set point +-{treatment.ph_tolerance:g} pH and doses "
        f"+-{100.0 * treatment.dose_tolerance_fraction:g} %, with gypsum and calcite formed "
        f"and held back to SI {treatment.scale_supersaturation_si:g}, and with carbon dioxide "
        "from carbonate kept and vented",
        "fresh solids control; slow and aged ones are off",
    ]
    if abs(evaluator.plant.system.temperature_degc - 25.0) > 0.5:
        kept = list(enthalpy_unknown(evaluator.plant.system))
        if kept:
            texts.append(
                f"{len(kept)} constants without a known enthalpy keep their 25 C value: "
                f"{', '.join(sorted(kept)[:6])}{' and others' if len(kept) > 6 else ''}"
            )
    return [*texts, *shrunk_factors(evaluator), *evaluator.plant.feed.notes, *site.notes]


def versions(solver: str) -> dict[str, str]:
    """Versions of the program and of what its numbers depend on."""
    from importlib.metadata import PackageNotFoundError, version

    found = {}
    for name in ("dosewright", "pulp", "highspy", "numpy", "scipy"):
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return {**found, "solver": solver}
