"""The waters that a plan is judged on: one analysis, or dated samples with their shares of volume.

Owns samples as arrays, alone or mixed into few, and what they show of a feed's variability.
States and limits of these waters are `optimiser.plant` and `optimiser.quality`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.feed import FeedWater, carried_by
from chemistry.samples import Sample
from optimiser.site import Site

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
Groups = Sequence[IntArray]

SUMMED_STATES = {"Fe": ("Fe(II)", "Fe(III)"), "Cr": ("Cr(III)", "Cr(VI)")}


@dataclass(frozen=True, eq=False, kw_only=True)
class Feeds:
    """Waters of one feed, samples on axis 0.

    Parameters
    ----------
    totals_mol_per_l
        Totals of the components, (samples, components). [mol/L]
    weight
        Share of the volume, (samples,); adds up to 1. A water of weight 0 is shown and not judged:
        the mean of many samples, which stands first.
    particulate_mg_per_l, unmodelled_mg_per_l
        Analyte to what no equilibrium touches: solids of the feed, dissolved without a component,
        (samples,) each. [mg/L]
    particle_mass_mg_per_l
        Solids of the feed, (samples,). [mg/L]
    flow_ratio
        Flow of the sample's day over that of the site, (samples,).
    labels
        What each water is called; empty for a feed of one analysis.
    members
        Numbers of the samples that are mixed in each water.
    months, month_share
        Calendar months, and the share of each water in their volumes, (months, samples).
    month_flow_ratio
        Mean flow of a month's samples over that of the site, (months,).
    peaks
        Analyte to highest sample and highest monthly mean over the mean of all.
    hidden
        What mixtures hide of each check's worst month, added to its logarithm; empty: nothing.
    """

    totals_mol_per_l: FloatArray
    weight: FloatArray
    particulate_mg_per_l: Mapping[str, FloatArray]
    unmodelled_mg_per_l: Mapping[str, FloatArray]
    particle_mass_mg_per_l: FloatArray
    flow_ratio: FloatArray
    labels: tuple[str, ...]
    members: tuple[tuple[int, ...], ...] = ()
    months: tuple[str, ...] = ()
    month_share: FloatArray | None = None
    month_flow_ratio: FloatArray | None = None
    peaks: Mapping[str, tuple[float, float]] | None = None
    hidden: tuple[float, ...] = ()

    def __len__(self) -> int:
        return int(self.weight.size)

    @property
    def many(self) -> bool:
        """Whether there is more than one water to be judged."""
        return len(self) > 1

    @property
    def counted(self) -> BoolArray:
        """Which waters are judged and priced, (samples,)."""
        return self.weight > 0.0

    def by_part(self, values: Mapping[str, FloatArray], parts: Sequence[str]) -> FloatArray:
        """Sum of some analytes' values, (samples,)."""
        none = np.zeros(len(self))
        return np.asarray(sum((values.get(part, none) for part in parts), none), dtype=float)


def mean_feed(site: Site, feed: FeedWater) -> Feeds:
    """The feed as one water: its analysis, or the mean of its samples."""
    particles = {m: np.array([v]) for m, v in feed.particulate_mg_per_l.items()}
    mass = max(site.analysis.tss_mg_per_l, sum(feed.particulate_mg_per_l.values(), 0.0))
    return Feeds(
        totals_mol_per_l=np.asarray(feed.totals_mol_per_l, dtype=float)[None, :],
        weight=np.ones(1), particulate_mg_per_l=particles,
        unmodelled_mg_per_l={m: np.array([v]) for m, v in feed.unmodelled_mg_per_l.items()},
        particle_mass_mg_per_l=np.array([mass]), flow_ratio=np.ones(1), labels=("",),
    )  # fmt: skip


def distinct_samples(site: Site) -> list[IntArray]:
    """Numbers of the site's samples, those that are alike in water, flow and month together."""
    assert site.samples is not None
    assert site.sample_waters is not None
    found: dict[object, list[int]] = {}
    totals = site.sample_waters.totals_mol_per_l
    for number, sample in enumerate(site.samples.samples):
        particulate, unmodelled = carried_by(sample.analysis)
        key = (
            totals[number].tobytes(), tuple(particulate.items()), tuple(unmodelled.items()),
            sample.analysis.tss_mg_per_l, sample.flow_m3_per_d, _month(sample),
        )  # fmt: skip
        found.setdefault(key, []).append(number)
    return [np.array(group, dtype=np.int64) for group in found.values()]


def mixed_feeds(site: Site, feed: FeedWater, groups: Groups) -> Feeds:
    """Waters of a site's samples, each the mixture of a group; the mean of all stands first.

    Parameters
    ----------
    site
        A site with samples.
    feed
        Its mean.
    groups
        Numbers of the samples of each water; every sample is in one group.
    """
    assert site.samples is not None
    assert site.sample_waters is not None
    samples = site.samples.samples
    flow = np.array([s.flow_m3_per_d for s in samples])
    share = np.zeros((len(groups), flow.size))
    for row, group in enumerate(groups):
        share[row, group] = flow[group] / flow[group].sum()
    carried = [carried_by(s.analysis) for s in samples]
    particles = _table([one for one, _ in carried])
    unmodelled = _table([one for _, one in carried])
    mass = np.maximum(
        np.array([s.analysis.tss_mg_per_l for s in samples]),
        sum(particles.values(), np.zeros(flow.size)),
    )
    weight = np.array([flow[group].sum() for group in groups]) / flow.sum()
    months = tuple(sorted({_month(s) for s in samples}))
    volume = np.array([[f * (_month(s) == m) for s, f in zip(samples, flow, strict=True)]
                       for m in months])  # fmt: skip
    mean = mean_feed(site, feed)
    by_group = np.array([[row[group].sum() for group in groups] for row in volume])
    month_share = np.concatenate([np.zeros((len(months), 1)), by_group], axis=1)

    def with_mean(values: FloatArray) -> FloatArray:
        return np.concatenate([[flow @ values / flow.sum()], share @ values])

    return replace(
        mean,
        totals_mol_per_l=np.concatenate(
            [mean.totals_mol_per_l, share @ site.sample_waters.totals_mol_per_l]
        ),
        weight=np.concatenate([[0.0], weight]),
        particulate_mg_per_l={m: with_mean(v) for m, v in particles.items()},
        unmodelled_mg_per_l={m: with_mean(v) for m, v in unmodelled.items()},
        particle_mass_mg_per_l=with_mean(mass),
        flow_ratio=_flow_ratio(site, flow, groups),
        labels=("mean of the samples", *(_label(samples, group) for group in groups)),
        members=((), *(tuple(int(i) for i in group) for group in groups)),
        months=months, month_share=month_share / month_share.sum(axis=1, keepdims=True),
        month_flow_ratio=_month_flow(site, volume),
        peaks=_peaks(site, particles, unmodelled, flow, volume),
    )  # fmt: skip


def _month(sample: Sample) -> str:
    return f"{sample.day:%Y-%m}"


def _label(samples: Sequence[Sample], group: IntArray) -> str:
    first = samples[int(group[0])].name
    return first if group.size == 1 else f"{first} and {group.size - 1} more"


def _flow_ratio(site: Site, flow: FloatArray, groups: Groups) -> FloatArray:
    """Flow of the day over the site's: 1 where no flow was measured."""
    assert site.samples is not None
    if not site.samples.flow_is_measured:
        return np.ones(1 + len(groups))
    mean = np.array([flow[group].mean() for group in groups])
    return np.concatenate([[1.0], mean / site.flow_m3_per_d])


def _month_flow(site: Site, volume: FloatArray) -> FloatArray:
    assert site.samples is not None
    if not site.samples.flow_is_measured:
        return np.ones(len(volume))
    days = np.maximum((volume > 0.0).sum(axis=1), 1)
    return np.asarray(volume.sum(axis=1) / days / site.flow_m3_per_d, dtype=float)


def _table(rows: Sequence[Mapping[str, float]]) -> dict[str, FloatArray]:
    names = dict.fromkeys(name for row in rows for name in row)
    return {name: np.array([row.get(name, 0.0) for row in rows]) for name in names}


def _peaks(
    site: Site, particles: Mapping[str, FloatArray], unmodelled: Mapping[str, FloatArray],
    flow: FloatArray, volume: FloatArray,
) -> dict[str, tuple[float, float]]:  # fmt: skip
    """Highest sample and highest monthly mean over the mean, by metal."""
    assert site.sample_waters is not None
    system, totals = site.system, site.sample_waters.totals_mol_per_l
    none = np.zeros(flow.size)
    amounts: dict[str, FloatArray] = {}
    for name in METALS:
        column = system.index.get(ANALYTES[name].component)
        mass = 1000.0 * ANALYTES[name].molar_mass_g_per_mol
        dissolved = totals[:, column] * mass if column is not None else none
        amounts[name] = dissolved + particles.get(name, none) + unmodelled.get(name, none)
    for name, parts in SUMMED_STATES.items():
        amounts[name] = np.sum([amounts.get(part, none) for part in parts], axis=0)
    found = {}
    for name, amount in amounts.items():
        mean = float(flow @ amount / flow.sum())
        if mean > 0.0:
            monthly = (volume @ amount) / volume.sum(axis=1)
            found[name] = (float(amount.max()) / mean, float(monthly.max()) / mean)
    return found
