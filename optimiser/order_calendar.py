"""The weeks of a year of orders, and what is used in each of them.

Owns dates and the spreading of a year's use; nothing here knows offers.
"""

from __future__ import annotations

import datetime
import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass

from chemistry.samples import Samples
from optimiser.site import Site

WEEKS = 52
DAYS_PER_WEEK = 7
EVEN = (1.0,) * 12


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderYear:
    """52 weeks from a first day; the last one has the day or two that are left of the year.

    ``shares`` are the weeks' shares of the year's use and add up to 1; ``basis`` says where they
    come from.
    """

    starts: tuple[datetime.date, ...]
    end: datetime.date
    shares: tuple[float, ...]
    basis: str

    def ahead(self, week: int, days: float) -> float:
        """Share of the year's use that the days after the end of a week draw, round the year."""
        left, share, at = days, 0.0, week + 1
        while left > 0.0:
            k = at % WEEKS
            length = self._days(k)
            share += self.shares[k] * min(left / length, 1.0)
            left -= length
            at += 1
        return share

    def _days(self, week: int) -> int:
        after = self.starts[week + 1] if week + 1 < WEEKS else self.end
        return (after - self.starts[week]).days


def order_year(site: Site, first_day: datetime.date) -> OrderYear:
    """Spread a site's year over weeks by the flows of its months.

    The flows of the site file come first, then those of its samples (a month without a sample has
    the mean of the others), then an even year.
    """
    flows, basis = _flows(site)
    try:
        end = first_day.replace(year=first_day.year + 1)
    except ValueError:  # 29 February
        end = datetime.date(first_day.year + 1, 3, 1)
    day = datetime.timedelta(days=1)
    starts = tuple(first_day + DAYS_PER_WEEK * k * day for k in range(WEEKS))
    bounds = [*starts, end]
    weights = []
    for start, after in itertools.pairwise(bounds):
        days = [start + k * day for k in range((after - start).days)]
        weights.append(math.fsum(flows[one.month - 1] for one in days))
    whole = math.fsum(weights)
    return OrderYear(starts=starts, end=end, shares=tuple(w / whole for w in weights), basis=basis)


def _flows(site: Site) -> tuple[Sequence[float], str]:
    if site.stock.monthly_flow_m3_per_d:
        return site.stock.monthly_flow_m3_per_d, "the monthly flows of the site file"
    if site.samples is not None and site.samples.flow_is_measured:
        return _sampled(site.samples)
    return EVEN, "an even year"


def _sampled(samples: Samples) -> tuple[Sequence[float], str]:
    by_month: dict[int, list[float]] = {}
    for sample in samples.samples:
        by_month.setdefault(sample.day.month, []).append(sample.flow_m3_per_d)
    means = {month: math.fsum(flows) / len(flows) for month, flows in by_month.items()}
    usual = math.fsum(means.values()) / len(means)
    basis = "the flows of the samples"
    if len(means) < len(EVEN):
        basis += f", which know {len(means)} of twelve months; the others have their mean"
    return [means.get(month, usual) for month in range(1, 13)], basis
