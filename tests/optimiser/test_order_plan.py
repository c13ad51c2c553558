"""The orders of a year follow use, store, lead time and shelf life, and add up to the purchases."""

from __future__ import annotations

import datetime
import json
import math
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import pytest

import optimiser
from chemistry.samples import Sample, Samples
from optimiser import cli
from optimiser.chart_orders import draw_orders
from optimiser.errors import NoOrderPlan
from optimiser.offer import Offer, Tier
from optimiser.order_calendar import WEEKS, order_year
from optimiser.order_plan import plan_orders
from optimiser.render_orders import orders_text
from optimiser.site import Dosing, Site, StockKeeping
from tests.optimiser.cli_runs import write_site
from tests.optimiser.small_sites import small_site
from tests.optimiser.test_charts import drawn, group, line_points, scale, texts

FIRST = datetime.date(2027, 1, 4)
MONTHS = (80.0, 90.0, 100.0, 120.0, 100.0, 90.0, 60.0, 20.0, 110.0, 120.0, 100.0, 70.0)
CAUSTIC = Offer(
    offer="NA", supplier="Larkspur Supplies", reagent="caustic_soda", product="50 %",
    form="solution", strength_fraction=0.5, density_kg_per_l=1.5, price=400.0, price_per="t",
    freight_per_t=20.0, freight_per_drop=90.0, order_size_t=12.0, least_order_t=4.0,
    lead_time_d=10.0,
)  # fmt: skip
LIME = Offer(
    offer="LI", supplier="Alder Minerals", reagent="hydrated_lime", product="lime in bags",
    form="powder", strength_fraction=0.95, density_kg_per_l=0.5, price=210.0, price_per="t",
    freight_per_t=35.0, pack_t=1.0, shelf_life_d=60.0,
)  # fmt: skip
BIG_ORDERS = replace(CAUSTIC, least_order_t=10.0, order_size_t=0.0, freight_per_drop=0.0)
DOSING = {"caustic_soda": Dosing(store_m3=9.0), "hydrated_lime": Dosing(store_t=10.0)}
STOCK = StockKeeping(order_fee=60.0, monthly_flow_m3_per_d=MONTHS)
DEMAND = {"caustic_soda": 40000.0, "hydrated_lime": 28500.0}


@cache
def base() -> Site:
    return small_site()


def site_of(*offers: Offer, dosing: Mapping[str, Dosing] = DOSING, **stock: Any) -> Site:
    return replace(base(), offers=offers, dosing=dosing, stock=replace(STOCK, **stock))


@cache
def planned() -> dict[str, Any]:
    return plan_orders(site_of(CAUSTIC, LIME), DEMAND, first_day=FIRST).to_dict()


def rows_of(data: Mapping[str, Any], offer: str) -> list[dict[str, Any]]:
    return [row for row in data["orders"] if row["offer"] == offer]


def test_the_year_adds_up_to_what_is_bought() -> None:
    for row in planned()["offers"]:
        orders = rows_of(planned(), row["offer"])
        ordered = math.fsum(one["ordered_t"] for one in orders)
        assert ordered == pytest.approx(row["ordered_t_per_year"], abs=1e-6)
        assert ordered == pytest.approx(row["plan_bought_t_per_year"], abs=1e-6)
        assert row["goods_per_year"] == pytest.approx(row["plan_goods_per_year"])
        assert row["closing_t"] == pytest.approx(row["opening_t"], abs=1e-6)
        assert row["written_off_t_per_year"] == 0.0
    total = planned()["cost"]["total"]
    causes = ("goods", "freight", "fees", "holding", "written_off")
    summed = math.fsum(row[f"{cause}_per_year"] for row in planned()["offers"] for cause in causes)
    assert total == pytest.approx(summed)


@pytest.mark.parametrize(("offer", "per_t"), [("NA", 1.0 / 1.5), ("LI", 1.0)])
def test_the_stock_balances_every_week_between_floor_and_store(offer: str, per_t: float) -> None:
    (store,) = [one for one in planned()["stores"] if one["offers"] == [offer]]
    (total,) = [row for row in planned()["offers"] if row["offer"] == offer]
    shares = order_year(site_of(CAUSTIC), FIRST).shares
    level = total["opening_t"] * per_t
    assert store["opening"] == pytest.approx(level)
    came = {row["delivered"]: row["ordered_t"] * per_t for row in rows_of(planned(), offer)}
    for week, share in zip(store["weeks"], shares, strict=True):
        level += came.get(week["from"], 0.0)
        assert week["after_delivery"] == pytest.approx(level, abs=1e-6)
        assert level <= store["store"] + 1e-6
        level -= total["used_t_per_year"] * share * per_t
        assert week["end"] == pytest.approx(level, abs=1e-6)
        assert level >= week["least"] - 1e-6


def test_the_floor_is_the_use_of_the_lead_time() -> None:
    (store,) = [one for one in planned()["stores"] if one["reagent"] == "caustic_soda"]
    shares = order_year(site_of(CAUSTIC), FIRST).shares
    used = 80.0 / 1.5
    for week in (0, 20, 49):
        length = 8.0 if week == 49 else 7.0  # the year's last week
        expected = used * (shares[week + 1] + 3.0 / length * shares[week + 2])
        assert store["weeks"][week]["least"] == pytest.approx(expected)
    (first, *_) = rows_of(planned(), "NA")
    assert (first["delivered"], first["order_by"]) == ("2027-01-04", "2026-12-25")


def test_orders_keep_loads_packs_and_least_amounts() -> None:
    for row in rows_of(planned(), "NA"):
        assert 4.0 * row["drops"] - 1e-6 <= row["ordered_t"] <= 12.0 * row["drops"] + 1e-6
        assert row["freight"] == pytest.approx(20.0 * row["ordered_t"] + 90.0 * row["drops"])
    for row in rows_of(planned(), "LI"):
        assert row["ordered_t"] == pytest.approx(row["packs"], abs=1e-6)


def test_nothing_is_older_than_its_shelf_life() -> None:
    (store,) = [one for one in planned()["stores"] if one["offers"] == ["LI"]]
    shares = order_year(site_of(LIME), FIRST).shares
    for week, row in enumerate(store["weeks"]):
        ahead = sum(shares[k % WEEKS] for k in range(week, week + 60 // 7))
        assert row["after_delivery"] <= 30.0 * ahead + 1e-6


def test_weeks_cover_the_year_and_follow_the_months() -> None:
    year = order_year(site_of(CAUSTIC), datetime.date(2027, 3, 1))
    assert (year.end, len(year.starts)) == (datetime.date(2028, 3, 1), WEEKS)
    assert math.fsum(year.shares) == pytest.approx(1.0)
    assert year.shares[23] / year.shares[2] == pytest.approx(20.0 / 100.0)  # August over March
    even = order_year(replace(base(), stock=StockKeeping()), FIRST)
    assert even.shares[0] == pytest.approx(7.0 / 365.0)
    assert even.shares[-1] == pytest.approx(8.0 / 365.0)
    assert even.ahead(-1, 365.0) == pytest.approx(1.0)
    leap = order_year(replace(base(), stock=StockKeeping()), datetime.date(2028, 2, 29))
    assert leap.end == datetime.date(2029, 3, 1)


def test_without_monthly_flows_those_of_the_samples_count() -> None:
    analysis = base().analysis
    taken = [
        Sample(day=datetime.date(2026, month, 10), time="", label="", flow_m3_per_d=flow,
               analysis=analysis)
        for month, flow in ((1, 50.0), (1, 70.0), (2, 120.0))
    ]  # fmt: skip
    sampled = replace(
        base(), stock=StockKeeping(), samples=Samples(source="lab.csv", samples=tuple(taken))
    )
    year = order_year(sampled, FIRST)
    assert year.shares[4] / year.shares[0] == pytest.approx(120.0 / 60.0)
    assert year.shares[20] / year.shares[0] == pytest.approx(90.0 / 60.0)
    assert "know 2 of twelve months" in year.basis
    given = order_year(replace(sampled, stock=STOCK), FIRST)
    assert given.basis == "the monthly flows of the site file"


def test_a_surplus_of_the_purchase_stays_in_stock() -> None:
    site = site_of(replace(CAUSTIC, lead_time_d=0.0))
    data = plan_orders(site, {"caustic_soda": 1500.0}, first_day=FIRST).to_dict()
    (row,) = data["offers"]
    assert (row["ordered_t_per_year"], row["used_t_per_year"]) == pytest.approx((4.0, 3.0))
    assert row["closing_t"] - row["opening_t"] == pytest.approx(1.0)
    assert any("1 t that are bought beyond the year's use" in note for note in data["notes"])


def test_a_store_too_small_for_the_least_order_is_refused() -> None:
    site = site_of(CAUSTIC, dosing={"caustic_soda": Dosing(store_m3=2.9)})
    with pytest.raises(NoOrderPlan) as caught:
        plan_orders(site, {"caustic_soda": 40000.0}, first_day=FIRST)
    (reason,) = caught.value.reasons
    assert reason == (
        "caustic soda: the store takes 4.35 t of NA, its least order of 4 t does not fit while "
        "0.497 t must be in stock; a larger store, a smaller least order or another offer is needed"
    )
    assert caught.value.exit_code == 3


@pytest.mark.parametrize(
    ("offer", "store_t", "text"),
    [
        (replace(CAUSTIC, least_order_t=0.0), 4.0, "the use of the heaviest week and the stock"),
        (replace(CAUSTIC, shelf_life_d=14.0, lead_time_d=30.0), 90.0, "would be older before"),
        (replace(CAUSTIC, shelf_life_d=5.0), 90.0, "keeps 5 days; orders are planned by the week"),
        (BIG_ORDERS, 11.5, "in some week no order on"),
    ],
)
def test_stock_that_cannot_be_kept_is_refused(offer: Offer, store_t: float, text: str) -> None:
    site = site_of(offer, dosing={"caustic_soda": Dosing(store_t=store_t)})
    with pytest.raises(NoOrderPlan, match=text):
        plan_orders(site, {"caustic_soda": 40000.0}, first_day=FIRST)


def test_whole_orders_that_bring_more_say_so_and_where_it_stays() -> None:
    offer = replace(CAUSTIC, least_order_t=9.0, order_size_t=10.0, shelf_life_d=90.0)
    site = site_of(offer, dosing={})
    data = plan_orders(site, {"caustic_soda": 6000.0}, first_day=FIRST).to_dict()
    (row,) = data["offers"]
    assert row["ordered_t_per_year"] >= 27.0  # 12 t are used; 90 days of them are 3 t
    left = row["ordered_t_per_year"] - row["used_t_per_year"]
    kept = row["closing_t"] - row["opening_t"]
    assert row["written_off_t_per_year"] + kept == pytest.approx(left, abs=1e-6)
    assert row["written_off_t_per_year"] > 5.0
    assert any("more than the plan's year buys" in note for note in data["notes"])
    assert any("written off at the price" in note for note in data["notes"])
    assert any("no store is given for caustic soda" in note for note in data["notes"])


def test_a_fixed_number_of_orders_comes_in_equal_sizes() -> None:
    offer = replace(CAUSTIC, orders_per_year=8.0, order_size_t=0.0, least_order_t=0.0)
    site = site_of(offer, dosing={"caustic_soda": Dosing(store_t=40.0)})
    data = plan_orders(site, {"caustic_soda": 40000.0}, first_day=FIRST).to_dict()
    assert [row["ordered_t"] for row in data["orders"]] == pytest.approx([10.0] * 8)


def test_a_price_break_by_the_order_is_ordered_for() -> None:
    offer = replace(
        CAUSTIC, tiers=(Tier(from_t=8.0, price=340.0),), tier_kind="all_units", tier_per="order"
    )
    site = site_of(offer, dosing={"caustic_soda": Dosing(store_t=16.0)})
    data = plan_orders(site, {"caustic_soda": 40000.0}, first_day=FIRST).to_dict()
    assert all(row["ordered_t"] >= 8.0 - 1e-6 for row in data["orders"])
    assert data["cost"]["goods"] == pytest.approx(340.0 * 80.0)


def test_no_even_schedule_is_cheaper() -> None:
    """Equal orders, each as late as the stock allows, for every number of orders."""
    site = site_of(replace(CAUSTIC, lead_time_d=0.0), dosing={"caustic_soda": Dosing(store_t=30.0)})
    year = order_year(site, FIRST)
    found = plan_orders(site, {"caustic_soda": 40000.0}, first_day=FIRST).to_dict()["cost"]
    tried = 0
    for count in range(7, 21):
        size, stock, kept, orders = 80.0 / count, 0.0, 0.0, 0
        for share in year.shares:
            if stock < 80.0 * share - 1e-9 and orders < count:
                stock, orders = stock + size, orders + 1
            kept += stock - 40.0 * share
            stock -= 80.0 * share
            if stock < -1e-6:
                break
        else:
            tried += 1
            cost = orders * (90.0 + 60.0) + kept * 0.1 * 400.0 / WEEKS
            mine = found["freight"] - 80.0 * 20.0 + found["order fees"] + found["holding"]
            assert mine <= cost * (1.0 + 2e-3), count
    assert tried >= 3


def test_the_text_says_dates_sums_and_basis() -> None:
    text = orders_text(planned())
    assert "the use follows the monthly flows of the site file" in " ".join(text.split())
    assert "2026-12-25" in text
    assert all(len(line) <= 100 for line in text.splitlines())
    count = len([line for line in text.splitlines() if line.startswith("  202")])
    assert count == len(planned()["orders"])


def test_the_chart_carries_the_stock_it_claims(tmp_path: Path) -> None:
    draw_orders(planned(), tmp_path / "stock.svg")
    draw_orders(planned(), tmp_path / "again.svg")
    assert (tmp_path / "stock.svg").read_bytes() == (tmp_path / "again.svg").read_bytes()
    root = drawn(tmp_path / "stock.svg")
    panels = [g for g in root.iter() if g.get("id", "").startswith("axes_")]
    for store, panel in zip(planned()["stores"], panels, strict=True):
        up = scale(panel, "y")
        points = line_points(group(panel, f"stock-{store['reagent']}"))
        claimed = [store["opening"]]
        for week in store["weeks"]:
            claimed += [week["after_delivery"], week["end"]]
        assert [up(y) for _, y in points] == pytest.approx(claimed, abs=0.02)
    words = texts(root)
    count = len(rows_of(planned(), "LI"))
    assert any(f"hydrated lime (LI): {count} deliveries" in word for word in words)
    assert "store takes 9 m3" in words
    assert "must be there" in words


def test_the_command_plans_prints_and_writes(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    site = write_site(
        tmp_path / "site",
        {"dosing": {"caustic_soda": {"store_m3": 12}}, "stock": {"order_fee": 70}},
    )
    table, chart = tmp_path / "orders.csv", tmp_path / "stock.png"
    words = ["orders", str(site), "--from", "2027-01-04", "--csv", str(table)]
    words += ["--chart", str(chart)]
    assert cli.main([*words, "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert data["demand_from"] == "the plan's doses"
    (bought,) = optimiser.plan(optimiser.load_site(site)).to_dict()["purchases"]
    (row,) = data["offers"]
    assert row["offer"] == bought["offer"]
    assert row["ordered_t_per_year"] == pytest.approx(bought["bought_t_per_year"], rel=1e-6)
    assert row["goods_per_year"] == pytest.approx(bought["goods_per_year"], rel=1e-6)
    assert data["order_fee"] == 70.0
    assert len(table.read_text("utf-8").splitlines()) == 1 + len(data["orders"])
    assert chart.read_bytes().startswith(b"\x89PNG")
    assert cli.main(words) == cli.BAD_INPUT
    assert "--force" in capsys.readouterr().err
    small = ["orders", str(site), "--demand", "caustic_soda=4000", "--from", "2027-01-04"]
    assert cli.main(small) == 0
    assert "For volumes given" in capsys.readouterr().out
    assert cli.main(["orders", str(site), "--demand", "caustik_soda=4000"]) == cli.BAD_INPUT
    assert "did you mean `caustic_soda`" in capsys.readouterr().err
