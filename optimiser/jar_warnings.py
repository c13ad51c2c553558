"""What is said about jar tests beside their factors: few jars, changed feeds, failing theory."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from chemistry.calibration import FEW_JARS, FactorFit
from optimiser.bench_sheet import BenchSheet, JarTest
from optimiser.jar_file import JarCalibration
from optimiser.site import Site

FAR_OFF = 30.0
"""Residual factors beyond this, either way, are called a failure of the theory (own choice)."""
_TEMPERATURE_CHANGE_DEGC = 5.0


def jar_warnings(
    site: Site, sheet: BenchSheet, made: JarCalibration, feed_mg_per_l: Mapping[str, float],
    untouched: Mapping[str, Sequence[str]],
) -> list[str]:  # fmt: skip
    """Sentences on what the factors rest on.

    Parameters
    ----------
    site, sheet, made
        The site, its bench sheet and what was fitted.
    feed_mg_per_l
        Dissolved metals of the site's feed, whatever was tested.
    untouched
        Metal to the jars in which theory precipitates nothing of it.
    """
    jars = [jar for jar in sheet.jars if not jar.is_raw]
    said = _about_water(sheet, made, feed_mg_per_l, site.system.temperature_degc)
    for name, fit in (*made.dose_factors.items(), *made.residual_factors.items()):
        said += few_jars(name, fit)
    said += [
        f"{name}: less was used than theory asks for (factor {fit.factor:.3g}): check the"
        " strength of the product and the acid of the feed; plans count 1"
        for name, fit in made.dose_factors.items()
        if fit.factor < 1.0
    ]
    for metal, names in untouched.items():
        if names:
            said.append(
                f"{metal}: theory precipitates none of it in test {', '.join(names)}, which is left"
                " out of its fit"
            )
        said += _about_metal(metal, jars, made.residual_factors.get(metal))
    return said


def _about_water(
    sheet: BenchSheet, made: JarCalibration, feed_mg_per_l: Mapping[str, float],
    temperature_degc: float,
) -> list[str]:  # fmt: skip
    said = []
    if sheet.not_read:
        said.append(f"columns not read: {', '.join(sheet.not_read)}")
    if not any(jar.is_raw for jar in sheet.jars):
        said.append(
            "no jar without a dose: the feed of the site file stands for the water that was tested"
        )
    said += [
        f"{text}: test again with the feed that is planned for"
        for text in made.outside(feed_mg_per_l=feed_mg_per_l)
    ]
    tested = made.temperature_degc
    if tested is not None:
        off = max(abs(end - temperature_degc) for end in (tested.low, tested.high))
        if off > _TEMPERATURE_CHANGE_DEGC:
            said.append(
                f"tested at {tested.low:g} to {tested.high:g} C; theory and plans are at"
                f" {temperature_degc:g} C"
            )
    return said


def few_jars(name: str, fit: FactorFit) -> list[str]:
    """A warning where a factor rests on few jars."""
    if fit.jars >= FEW_JARS and not fit.scatter_assumed:
        return []
    jars = "one jar" if fit.jars == 1 else f"{fit.jars} jars"
    assumed = ", its scatter assumed" if fit.scatter_assumed else ""
    return [
        f"{name}: from {jars} only{assumed}: the interval {fit.low:.3g} to {fit.high:.3g} is wide;"
        f" {FEW_JARS} or more jars narrow it"
    ]


def _about_metal(metal: str, jars: Sequence[JarTest], fit: FactorFit | None) -> list[str]:
    said = []
    below = sum(metal in jar.filtered and jar.filtered[metal].is_below for jar in jars)
    if below:
        said.append(f"{metal}: {below} result(s) below the reporting limit take no part in the fit")
    if fit is None:
        said.append(f"{metal}: no result above the reporting limit, so no residual factor")
    elif not 1.0 / FAR_OFF <= fit.factor <= FAR_OFF:
        said.append(
            f"{metal}: measured is {fit.factor:.3g} times theory: theory does not describe this"
            " water; look for complexing matter, fine solids in the filtrate or a wrong analysis"
        )
    return said
