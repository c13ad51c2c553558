"""Jar tests in a site: the file that the treatment block names, and what it changes.

Owns which factor wins where the site file says another, and how far a floor may fall.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path

from catalogs.problems import Spot, echo
from chemistry.feed import METALS
from optimiser.jar_file import JarCalibration, read_calibration
from optimiser.points import Points
from optimiser.site import Treatment
from optimiser.site_feed import STATES_OF_ELEMENT

LARGEST_DOSE_FACTOR = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class JarChanges:
    """A site's treatment and floors after its jar tests, and what is said about it."""

    treatment: Treatment
    floors_mg_per_l: Mapping[str, Mapping[str, float]]
    notes: tuple[str, ...]


def read_site_jar(
    name: str, spot: Spot, folder: Path, reagents: Mapping[str, object]
) -> JarCalibration | None:
    """Read the calibration that a site names; None where it names none or it is damaged.

    Parameters
    ----------
    name, spot
        The file's name as written and its place.
    folder
        Where the site file lies.
    reagents
        Reagents known to the catalog.
    """
    if not name:
        return None
    path = folder / name
    if not path.exists():
        spot.problem(
            f"no file {echo(name)} beside the site file",
            "a file that `dosewright jar` wrote",
            "Leave the key out, run `dosewright jar SITE RESULTS.csv`, then name the file.",
        )
        return None
    return read_calibration(path, spot.log, reagents, (*METALS, *STATES_OF_ELEMENT))


def with_jar(
    jar: JarCalibration, treatment: Treatment,
    floors_mg_per_l: Mapping[str, Mapping[str, float]],
) -> JarChanges:  # fmt: skip
    """Lay the factors of jar tests over a site.

    A dose factor of the site file wins over the tests; a fitted one counts at least 1, because
    what was not fed cannot react. A floor falls to what the tests reached and never rises.
    """
    factors = fitted_dose_factors(jar, treatment)
    own = treatment.dose_factors
    notes = [_first_note(jar)]
    notes += [
        f"dose factor of {name}: {own[name]:g} of the site file stands, not {factor:.3g} of the jar"
        " tests"
        for name, factor in factors.items()
        if name in own
    ]
    floors = dict(floors_mg_per_l)
    for metal, shown in jar.floors_mg_per_l.items():
        known = floors.get(metal, {})
        lowered = {family: min(floor, shown) for family, floor in known.items()}
        if lowered != known:
            floors[metal] = lowered
            notes.append(f"jar tests lower the floor of {metal} to {shown:.3g} mg/L")
    if jar.residual_factors:
        fits = ", ".join(
            f"{metal} {fit.factor:.3g} ({fit.low:.3g} to {fit.high:.3g})"
            for metal, fit in jar.residual_factors.items()
        )
        notes.append(
            f"residual factors of the jar tests multiply what theory leaves dissolved: {fits}"
        )
    return JarChanges(
        treatment=replace(treatment, dose_factors={**factors, **own}),
        floors_mg_per_l=floors, notes=tuple(notes),
    )  # fmt: skip


def fitted_dose_factors(jar: JarCalibration, treatment: Treatment) -> dict[str, float]:
    """Dose factors of jar tests as plans take them, for the reagents that the site allows."""
    return {
        name: min(max(fit.factor, 1.0), LARGEST_DOSE_FACTOR)
        for name, fit in jar.dose_factors.items()
        if name in (*treatment.reagents, *treatment.trim_reagents)
    }


def jar_cautions(
    jar: JarCalibration | None, doses_mg_per_l: Mapping[str, float], points: Points, point: int
) -> list[str]:
    """Say what of a point lies outside the range that its jar tests covered.

    Parameters
    ----------
    jar
        The calibration, or None where the site has none.
    doses_mg_per_l
        Doses of the point by key; those of the trim are not part of a jar test.
    points, point
        Where the set point is looked up; without a controller the pH is free.
    """
    if jar is None:
        return []
    held = points.controller[point] >= 0
    ph = round(float(points.ph[point]), 2) if held else None
    in_tank = {key: dose for key, dose in doses_mg_per_l.items() if "@" not in key}
    return [f"outside the jar tests: {text}" for text in jar.outside(ph=ph, doses_mg_per_l=in_tank)]


def _first_note(jar: JarCalibration) -> str:
    days = jar.first_day if jar.first_day == jar.last_day else f"{jar.first_day} to {jar.last_day}"
    plural = "" if jar.jars == 1 else "s"
    return (
        f"jar tests of {days} ({jar.results}, {jar.jars} jar{plural}) set dose factors, residual"
        " factors and floors"
    )
