"""The shipped limit sets: columns, checksums, sources."""

from __future__ import annotations

import pytest

from catalogs.limit_sets import load_limit_sets

SETS = load_limit_sets()


def columns(name: str) -> dict[str, tuple[float | None, float | None]]:
    return {r.parameter: (r.daily_mg_per_l, r.monthly_mg_per_l) for r in SETS[name].limits}


@pytest.mark.parametrize(
    ("name", "rows", "daily_sum", "monthly_sum"),
    [
        ("metal_finishing_existing", 8, 15.75, 9.22),
        ("metal_finishing_new", 8, 15.17, 9.03),
        ("waste_treatment_metals", 9, 88.37634, 37.636039),
        ("waste_treatment_metals_new", 7, 0.0, 12.3354),
        ("sewer_general", 0, 0.0, 0.0),
    ],
)
def test_no_row_and_no_digit_was_lost(
    name: str, rows: int, daily_sum: float, monthly_sum: float
) -> None:
    limits = SETS[name].limits
    assert len(limits) == rows
    assert sum(r.daily_mg_per_l or 0.0 for r in limits) == pytest.approx(daily_sum, abs=1e-9)
    assert sum(r.monthly_mg_per_l or 0.0 for r in limits) == pytest.approx(monthly_sum, abs=1e-9)


def test_there_are_five_sets_and_each_row_has_a_source() -> None:
    assert len(SETS) == 5
    assert all(s.source and s.title for s in SETS.values())
    assert all(row.source for s in SETS.values() for row in s.limits)


def test_new_and_existing_metal_finishing_differ_in_cadmium_only() -> None:
    existing, new = columns("metal_finishing_existing"), columns("metal_finishing_new")
    assert {p for p in existing if existing[p] != new[p]} == {"Cd"}
    assert existing["Cd"] == (0.69, 0.26)
    assert new["Cd"] == (0.11, 0.07)


def test_a_month_never_allows_more_than_a_day() -> None:
    for limit_set in SETS.values():
        for row in limit_set.limits:
            if row.daily_mg_per_l is not None and row.monthly_mg_per_l is not None:
                assert row.monthly_mg_per_l < row.daily_mg_per_l, (limit_set.title, row)


def test_a_column_that_the_source_lacks_stays_empty() -> None:
    assert all(row.daily_mg_per_l is None for row in SETS["waste_treatment_metals_new"].limits)
    assert SETS["waste_treatment_metals_new"].not_covered


def test_sets_for_the_sewer_carry_its_lowest_ph() -> None:
    floors = {name: s.ph_low for name, s in SETS.items() if s.ph_low is not None}
    assert floors == {
        "metal_finishing_existing": 5.0,
        "metal_finishing_new": 5.0,
        "sewer_general": 5.0,
    }
    assert all("403.5(b)" in SETS[name].ph_source for name in floors)
