"""The options of the commands of buyers: contracts compared, orders over a year.

Owns what can be typed; how a command is added is handed in by `optimiser.cli_options`.
"""

from __future__ import annotations

import argparse
import datetime
from collections.abc import Callable
from pathlib import Path
from typing import Any, Protocol


class AddCommand(Protocol):
    """How a command is added to the parser."""

    def __call__(
        self, commands: Any, name: str, what: str, example: str
    ) -> argparse.ArgumentParser:
        """Add a command with its site."""


def add_buying(commands: Any, add_command: AddCommand) -> None:
    """Add the commands of buyers to the parser."""
    parser = add_command(
        commands, "contracts", "compare contracts by the cheapest plan if each were signed",
        "contracts site.yaml --candidate AC-50 --candidate BH-25+BH-LB --csv contracts.csv",
    )  # fmt: skip
    parser.add_argument(
        "--candidate", metavar="OFFER", type=_offers_named, action="append", default=[],
        help="id of an offer, or of several signed together joined by +; repeat it for more "
        "(default: every offer that is not signed yet)",
    )  # fmt: skip
    parser.add_argument(
        "--expired", action="store_true", help="compare offers that do not hold today as well"
    )
    parser.add_argument("--csv", metavar="FILE", type=Path, help="write the table to FILE as well")
    parser.add_argument(
        "--json", action="store_true", help="print the result as JSON, nothing else"
    )
    sheet = add_command(
        commands, "negotiate", "tell what to ask each supplier: prices and terms, one page",
        "negotiate site.yaml",
    )  # fmt: skip
    sheet.add_argument(
        "--expired", action="store_true", help="count offers that do not hold today as well"
    )
    sheet.add_argument("--csv", metavar="FILE", type=Path, help="write the prices to FILE as well")
    sheet.add_argument("--json", action="store_true", help="print the result as JSON, nothing else")


def add_orders(
    commands: Any,
    add_command: AddCommand,
    *,
    demand: Callable[[str], tuple[str, float]],
    add_chart: Callable[[argparse.ArgumentParser], None],
) -> None:
    """Add the command of orders; how a demand is read and a chart asked for is handed in."""
    parser = add_command(
        commands, "orders", "tell when to order how much over a year, and draw the stock",
        "orders site.yaml --from 2027-01-04 --chart stock.svg",
    )  # fmt: skip
    parser.add_argument(
        "--demand", metavar="REAGENT=KG_PER_YEAR", type=demand, action="extend", nargs="+",
        default=[], help="kg of the pure compound needed in a year; repeat it for more (default: "
        "what the plan buys)",
    )  # fmt: skip
    parser.add_argument(
        "--from", metavar="DATE", type=_day, dest="first_day",
        help="first day of the year (default: the first of next month)",
    )  # fmt: skip
    parser.add_argument("--csv", metavar="FILE", type=Path, help="write the orders to FILE as well")
    add_chart(parser)
    parser.add_argument(
        "--json", action="store_true", help="print the result as JSON, nothing else"
    )


def _day(text: str) -> datetime.date:
    try:
        return datetime.date.fromisoformat(text)
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"expected a date such as 2027-01-04, found {text!r}"
        ) from None


def _offers_named(text: str) -> tuple[str, ...]:
    names = tuple(name.strip() for name in text.split("+"))
    if not all(names):
        raise argparse.ArgumentTypeError(f"expected OFFER or OFFER+OFFER, found {text!r}")
    return names
