"""The text that ``check`` prints: what was read from a site and what the analysis says."""

from __future__ import annotations

from optimiser.render_samples import sample_lines
from optimiser.site import Limit, Site
from optimiser.tables import bullets, flow, given, paragraph


def site_text(site: Site) -> str:
    """Write a summary of a site that was read without a problem.

    Raises
    ------
    chemistry.errors.WaterError
        The analysis cannot be made electroneutral.
    """
    from chemistry.feed import feed_water

    feed = feed_water(site.analysis, site.system)
    lines = [f"{site.path}: no problem found"]
    lines += paragraph(
        f"{site.name}: {flow(site.flow_m3_per_d)} m3/d on {given(site.operating_days_per_year)} "
        f"days a year, {_stands_for(site)}; prices in {site.currency}."
    )
    facts = [
        f"Analysed: {', '.join(site.analysis.measurements)}.",
        f"Feed: pH {feed.ph:.2f}, ionic strength {feed.ionic_strength:.3g} mol/L, "
        f"charge-balance error {feed.charge_balance_error_percent:+.1f} % before it was closed "
        f"with {feed.closing_ion}.",
        f"Limits: {_limits(site.limits)}; pH {given(site.ph_window.low)} to "
        f"{given(site.ph_window.high)}; plans aim at {given(site.design_margin)} of each.",
        f"Reagents allowed: {', '.join(site.treatment.reagents)}; at most "
        f"{site.treatment.most_reagents} together.",
        f"Offers: {len(site.offers)} for "
        f"{', '.join(dict.fromkeys(offer.reagent for offer in site.offers))}.",
        f"Disposal classes: {', '.join(rule.sludge_class for rule in site.disposal.rules)}.",
    ]
    lines += bullets(facts)
    notes = dict.fromkeys([*site.notes, *feed.notes])
    if notes:
        lines += ["Worth knowing:", *bullets(list(notes))]
    lines += sample_lines(site)
    return "\n".join(lines) + "\n"


def _stands_for(site: Site) -> str:
    if site.samples is None:
        return f"the analysis stands for the {site.stands_for}"
    return f"the mean of {len(site.samples.samples)} samples stands for the {site.stands_for}"


def _limits(limits: tuple[Limit, ...]) -> str:
    if not limits:
        return "none"
    return f"{len(limits)} on {', '.join(dict.fromkeys(limit.label for limit in limits))}"
