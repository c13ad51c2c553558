"""Few waters that stand for many samples: extremes as they are, the rest as mixtures.

Owns the reduction of a series of samples. Whether a plan made on the few holds on every sample is
for the planner to verify.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, METALS
from chemistry.sample_waters import SampleWaters
from chemistry.samples import Samples

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_WATERS = 24
MOST_FOR_WARD = 1500
"""Above this many samples distances between all pairs take too much memory."""
SMALLEST_MOL_PER_L = 1e-9  # amounts below this look alike in the logarithm


@dataclass(frozen=True, eq=False, kw_only=True)
class Representatives:
    """Waters that stand for all samples, representatives on axis 0.

    Parameters
    ----------
    members
        Sample numbers behind each representative; an extreme stands for itself alone.
    reasons
        Why each extreme is kept; empty for mixtures.
    share
        Part of the whole volume, (representatives,); adds up to 1.
    flow_m3_per_d
        Mean flow of the members, (representatives,). [m3/d]
    totals_mol_per_l
        Totals as they enter treatment, the mixture of the members. [mol/L]
    """

    members: tuple[tuple[int, ...], ...]
    reasons: tuple[tuple[str, ...], ...]
    share: FloatArray
    flow_m3_per_d: FloatArray
    totals_mol_per_l: FloatArray


def extreme_samples(samples: Samples, waters: SampleWaters) -> Mapping[int, tuple[str, ...]]:
    """Samples that no mixture may hide, with what makes them extreme.

    Highest and lowest pH and flow, each metal's highest amount, the highest load of metals, and the
    highest alkali demand per litre and per day. Alkali demand counts TOT-H and, for each metal, the
    hydroxide of its neutral solid: a ranking, not a dose. Of equal samples the first is kept.
    """
    totals, system = waters.totals_mol_per_l, waters.system
    flow = np.array([sample.flow_m3_per_d for sample in samples.samples])
    ranked: list[tuple[str, FloatArray]] = [
        ("highest pH", waters.ph), ("lowest pH", -waters.ph),
        ("highest flow", flow), ("lowest flow", -flow),
    ]  # fmt: skip
    demand = totals[:, system.index["H+"]].copy()
    mass = np.zeros(len(flow))
    for name in METALS:
        column = system.index.get(ANALYTES[name].component)
        if column is None or not totals[:, column].any():
            continue
        amount = totals[:, column]
        ranked.append((f"highest {name}", amount))
        demand += ANALYTES[name].charge * amount
        mass += ANALYTES[name].molar_mass_g_per_mol * amount
    ranked += [
        ("highest load of metals", mass * flow), ("highest alkali demand", demand),
        ("highest alkali demand of a day", demand * flow),
    ]  # fmt: skip
    found: dict[int, list[str]] = {}
    for reason, values in ranked:
        if np.ptp(values) > 0.0:
            found.setdefault(int(np.argmax(values)), []).append(reason)
    return {number: tuple(reasons) for number, reasons in sorted(found.items())}


def representatives(
    samples: Samples, waters: SampleWaters, *, most: int = MOST_WATERS
) -> Representatives:
    """Reduce samples to few waters, the same ones every time.

    Parameters
    ----------
    samples, waters
        Complete samples and their closed waters, none failed.
    most
        Waters asked for; extremes are kept even where they are more, with one mixture of the rest.

    Returns
    -------
    Representatives
        Extremes first, in order of time, then mixtures in order of their first member.

    Notes
    -----
    Samples are grouped by Ward's method [1]_ on the logarithms of their totals, their pH and the
    logarithm of their flow, each divided by its standard deviation; above 1500 samples by k-means
    started at even ranks along the direction of largest spread. Each group is represented by its
    mixture, so volume and the load of every component are those of all samples.

    References
    ----------
    .. [1] J. H. Ward, "Hierarchical grouping to optimize an objective function", Journal of the
       American Statistical Association 58 (1963) 236-244.
    """
    count = len(samples.samples)
    flow = np.array([sample.flow_m3_per_d for sample in samples.samples])
    extremes = extreme_samples(samples, waters)
    if count <= most:
        groups = [np.array([i]) for i in range(count)]
    else:
        rest = np.array([i for i in range(count) if i not in extremes], dtype=np.int64)
        wanted = max(most - len(extremes), 1)
        groups = [np.array([i]) for i in extremes]
        groups += _groups(_features(waters, flow), rest, wanted)
    share = np.array([flow[g].sum() for g in groups]) / flow.sum()
    mixtures = [(flow[g] / flow[g].sum()) @ waters.totals_mol_per_l[g] for g in groups]
    return Representatives(
        members=tuple(tuple(int(i) for i in g) for g in groups),
        reasons=tuple(extremes.get(int(g[0]), ()) if g.size == 1 else () for g in groups),
        share=share, flow_m3_per_d=np.array([flow[g].mean() for g in groups]),
        totals_mol_per_l=np.array(mixtures),
    )  # fmt: skip


def _features(waters: SampleWaters, flow: FloatArray) -> FloatArray:
    """What samples are compared by, (samples, features), each of unit spread."""
    plain = np.delete(waters.totals_mol_per_l, waters.system.index["H+"], axis=1)
    logs = np.log10(np.maximum(plain, SMALLEST_MOL_PER_L))
    every = np.column_stack([logs, waters.ph, np.log10(flow)])
    spread = every.std(axis=0)
    kept = spread > 1e-9
    if not kept.any():
        return np.zeros((len(flow), 1))
    return np.asarray((every[:, kept] - every[:, kept].mean(axis=0)) / spread[kept])


def _groups(features: FloatArray, rest: IntArray, wanted: int) -> list[IntArray]:
    if rest.size == 0:
        return []
    if wanted == 1 or rest.size == 1:
        return [rest]
    labels = _ward if rest.size <= MOST_FOR_WARD else _k_means
    found = labels(features[rest], wanted)
    groups = [rest[found == label] for label in np.unique(found)]
    return sorted(groups, key=lambda group: int(group[0]))


def _ward(features: FloatArray, wanted: int) -> IntArray:
    from scipy.cluster.hierarchy import fcluster, linkage

    return np.asarray(fcluster(linkage(features, "ward"), wanted, "maxclust"), dtype=np.int64)


def _k_means(features: FloatArray, wanted: int) -> IntArray:
    from scipy.cluster.vq import kmeans2

    _, _, axes = np.linalg.svd(features, full_matrices=False)
    order = np.argsort(features @ axes[0], kind="stable")
    start = features[order[np.linspace(0, len(order) - 1, wanted).round().astype(np.int64)]]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # a group that loses all its members is no harm
        _, labels = kmeans2(features, start, iter=30, minit="matrix")
    return np.asarray(labels, dtype=np.int64)
