"""The commands and options of the command line, and how their values are read.

Owns what can be typed and the refusals of what cannot; running the commands is `optimiser.cli`.
"""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any, NoReturn

from optimiser.cli_buying_options import add_buying, add_orders

BAD_USAGE = 2
PROGRAM = "dosewright"
DEFAULT_PROVE_S = 60.0
CHART_FORMATS = (".svg", ".png")
MOST_POINTS = 60

_DESCRIPTION = """\
Pick precipitation reagents, doses and supplier offers that bring the dissolved metals
of a wastewater under every limit at the least yearly cost.
"""
_EXIT_CODES = """\
exit codes:
  0  a plan, or doses that meet every limit
  1  a fault of the program
  2  a mistake in the input or in the command
  3  no plan meets every limit, or the doses assessed miss one
  4  stopped before a verified plan was found
"""


class _Parser(argparse.ArgumentParser):
    """A parser whose refusals are one line with a remedy."""

    def error(self, message: str) -> NoReturn:
        """Refuse the command line."""
        hint = f"`{self.prog} --help` lists what it takes."
        self.exit(BAD_USAGE, f"{self.prog}: {message}\n    {hint}\n")


def _positive(text: str) -> float:
    value = _finite(text)
    if value <= 0.0:
        raise argparse.ArgumentTypeError(f"expected a number above 0, found {text!r}")
    return value


def _count(text: str) -> int:
    if not text.isdecimal() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"expected a whole number from 1, found {text!r}")
    return int(text)


def _chance(text: str) -> float:
    value = _finite(text.strip().removesuffix("%"))
    value = value / 100.0 if text.strip().endswith("%") else value
    if not 0.5 <= value < 1.0:
        raise argparse.ArgumentTypeError(
            f"expected a chance from 0.5 to below 1 such as 0.95, found {text!r}"
        )
    return value


def _whole(text: str) -> int:
    if not text.isdecimal():
        raise argparse.ArgumentTypeError(f"expected a whole number from 0, found {text!r}")
    return int(text)


def _curve_points(text: str) -> int:
    if not text.isdecimal() or not 2 <= int(text) <= MOST_POINTS:
        raise argparse.ArgumentTypeError(
            f"expected a whole number from 2 to {MOST_POINTS}, found {text!r}"
        )
    return int(text)


def _chart_file(text: str) -> Path:
    path = Path(text)
    if path.suffix.lower() not in CHART_FORMATS:
        raise argparse.ArgumentTypeError(f"a chart ends in .svg or .png, found {text!r}")
    return path


def _ph(text: str) -> float:
    value = _finite(text)
    if not 0.0 <= value <= 14.0:
        raise argparse.ArgumentTypeError(f"expected a pH from 0 to 14, found {text!r}")
    return value


def _finite(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = float("nan")
    if value - value != 0.0:
        raise argparse.ArgumentTypeError(f"expected a number, found {text!r}")
    return value


def _demand(text: str) -> tuple[str, float]:
    key, equals, amount = text.partition("=")
    if not key or not equals:
        raise argparse.ArgumentTypeError(
            f"expected REAGENT=KG_PER_YEAR such as caustic_soda=18000, found {text!r}"
        )
    return key.strip(), _positive(amount.strip())


def _dose(text: str) -> tuple[str, float]:
    key, equals, amount = text.partition("=")
    if not key or not equals:
        raise argparse.ArgumentTypeError(
            f"expected REAGENT=MG_PER_L such as caustic_soda=420, found {text!r}"
        )
    value = _finite(amount.strip().removesuffix("mg/L").strip())
    if value < 0.0:
        raise argparse.ArgumentTypeError(f"a dose is 0 mg/L or more, found {text!r}")
    return key.strip(), value


def build_parser() -> argparse.ArgumentParser:
    """Build the parser of all commands."""
    parser = _Parser(
        prog=PROGRAM,
        description=_DESCRIPTION,
        epilog=_EXIT_CODES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="store_true", help="print the version and leave")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", parser_class=_Parser)
    _add_plan(commands)
    _add_assess(commands)
    _add_explain(commands)
    _add_trade_off(commands)
    _add_curves(commands)
    _add_floors(commands)
    _add_offers(commands)
    add_buying(commands, _add_command)
    add_orders(commands, _add_command, demand=_demand, add_chart=_add_chart)
    _add_chances(commands)
    _add_jar(commands)
    _add_command(commands, "check", "read a site and report every problem found", "check site.yaml")
    new = _add_command(
        commands, "new", "write a commented starter site with its price book", "new my-plant",
        site=False,
    )  # fmt: skip
    new.add_argument("directory", metavar="DIR", type=Path, help="folder to write; made if absent")
    new.add_argument(
        "--xlsx", action="store_true", help="write the price book as a workbook with drop-downs"
    )
    return parser


_Commands = Any  # argparse keeps the type of its sub-parsers private


def _add_command(
    commands: _Commands,
    name: str,
    what: str,
    example: str,
    *,
    site: bool = True,
) -> argparse.ArgumentParser:
    parser: argparse.ArgumentParser = commands.add_parser(
        name,
        help=what,
        description=f"{what[0].upper()}{what[1:]}.",
        epilog=f"example:\n  {PROGRAM} {example}",
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--debug", action="store_true", help="show the traceback of a fault")
    if site:
        parser.add_argument(
            "site", metavar="SITE", type=Path, help="site file (YAML) or its folder"
        )
    return parser


def _add_json(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--json", action="store_true", help="print the result as JSON, nothing else"
    )


def _add_plan(commands: _Commands) -> None:
    parser = _add_command(
        commands, "plan", "find the cheapest plan that the equilibrium confirms",
        "plan catalogs/sites/DEMO/site.yaml --most-reagents 2",
    )  # fmt: skip
    _add_json(parser)
    parser.add_argument(
        "--most-reagents", metavar="N", type=_count, help="at most N reagents (default: the site's)"
    )
    parser.add_argument(
        "--runners-up", metavar="N", type=_whole, default=5,
        help="tell of the N next cheapest recipes, and why they cost more (default: 5)",
    )  # fmt: skip
    parser.add_argument(
        "--solver", choices=("highs", "cbc"), help="mixed-integer solver (default: the site's)"
    )
    parser.add_argument(
        "--time-limit", metavar="S", type=_positive, help="seconds to search (default: the site's)"
    )
    parser.add_argument(
        "--prove", metavar="S", type=_positive, nargs="?", const=DEFAULT_PROVE_S,
        help="then bound from below what any plan costs, for at most S seconds "
        f"(default: {DEFAULT_PROVE_S:g})",
    )  # fmt: skip


def _add_assess(commands: _Commands) -> None:
    parser = _add_command(
        commands, "assess", "verify and price doses that you give",
        "assess site.yaml --dose caustic_soda=420 --dose soda_ash=150",
    )  # fmt: skip
    parser.add_argument(
        "--dose", metavar="REAGENT=MG_PER_L", type=_dose, action="extend", nargs="+", default=[],
        help="dose in mg/L of the pure compound as fed, REAGENT or REAGENT@trim; repeat it for "
        "more (default: the doses under `today` in the site file)",
    )  # fmt: skip
    parser.add_argument(
        "--trim", choices=("auto", "none"), default="auto",
        help="whether the discharge pH is trimmed where it needs it (default: auto)",
    )  # fmt: skip
    _add_json(parser)


def _add_explain(commands: _Commands) -> None:
    parser = _add_command(
        commands, "explain", "tell what binds a plan, where each dose goes and why the rest lost",
        "explain catalogs/sites/DEMO/site.yaml",
    )  # fmt: skip
    _add_json(parser)


def _add_trade_off(commands: _Commands) -> None:
    parser = _add_command(
        commands, "tradeoff", "trade the cost against TDS, sludge, design margin or pH set point",
        "tradeoff site.yaml --against TDS --points 7 --chart tds.svg",
    )  # fmt: skip
    parser.add_argument(
        "--against", choices=("TDS", "sludge", "margin", "ph"), required=True,
        help="TDS of the mean discharge (mg/L), wet sludge (t a year), design margin (share of "
        "every limit), or pH set point of the tank",
    )  # fmt: skip
    parser.add_argument(
        "--points", metavar="N", type=_curve_points, default=7,
        help="how many points between the ends (default: 7)",
    )  # fmt: skip
    parser.add_argument(
        "--at", metavar="VALUE", type=_positive, action="extend", nargs="+", default=[],
        help="look at these values instead; repeat it for more",
    )  # fmt: skip
    parser.add_argument("--csv", metavar="FILE", type=Path, help="write the points to FILE as well")
    _add_chart(parser)
    _add_json(parser)


def _add_chart(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--chart", metavar="FILE", type=_chart_file,
        help="draw a chart into FILE as well, .svg or .png",
    )  # fmt: skip
    parser.add_argument("--force", action="store_true", help="write over a chart that is there")


def _add_curves(commands: _Commands) -> None:
    parser = _add_command(
        commands, "curves",
        "tabulate residual against dose, residual against pH, and alkali demand",
        "curves site.yaml --ph 9 --csv curves.csv",
    )  # fmt: skip
    parser.add_argument(
        "--ph", metavar="PH", type=_ph,
        help="pH held while other reagents are swept (default: middle of the set-point window)",
    )  # fmt: skip
    parser.add_argument(
        "--csv", metavar="FILE", type=Path, help="write every state to FILE as well"
    )
    _add_chart(parser)
    parser.add_argument(
        "--reagent", metavar="NAME", action="extend", nargs="+", default=[],
        help="draw these reagents alone, with envelopes around their residuals",
    )  # fmt: skip
    parser.add_argument(
        "--dose", metavar="REAGENT=MG_PER_L", type=_dose, action="extend", nargs="+", default=[],
        help="mark a dose in the chart, such as a plan's",
    )  # fmt: skip
    _add_json(parser)


def _add_floors(commands: _Commands) -> None:
    parser = _add_command(
        commands, "floors", "tell how low each metal comes with each ligand and what stops it",
        "floors site.yaml --csv floors.csv",
    )  # fmt: skip
    parser.add_argument(
        "--csv", metavar="FILE", type=Path, help="write every floor to FILE as well"
    )
    _add_json(parser)


def _add_chances(commands: _Commands) -> None:
    parser = _add_command(
        commands, "chances",
        "tell how likely the plan meets each limit when constants and analysis are not exact",
        "chances site.yaml --confidence 0.95",
    )  # fmt: skip
    parser.add_argument(
        "--draws", metavar="N", type=_count, default=400, help="draws to solve (default: 400)"
    )
    parser.add_argument(
        "--seed", metavar="N", type=_count, default=1, help="start of the random numbers"
    )
    parser.add_argument(
        "--confidence", metavar="CHANCE", type=_chance,
        help="tighten targets until all limits hold together with this chance, and tell its cost",
    )  # fmt: skip
    _add_json(parser)


def _add_offers(commands: _Commands) -> None:
    parser = _add_command(
        commands, "offers", "compare contracts at given volumes, without chemistry",
        "offers site.yaml --demand caustic_soda=18000 --demand soda_ash=2500",
    )  # fmt: skip
    parser.add_argument(
        "--demand", metavar="REAGENT=KG_PER_YEAR", type=_demand, action="extend", nargs="+",
        default=[], help="kg of the pure compound needed in a year; repeat it for more (default: "
        "the doses under `today` in the site file, or the plan's where there are none)",
    )  # fmt: skip
    parser.add_argument(
        "--plan", action="store_true", help="take the plan's demand, also where `today` is given"
    )
    parser.add_argument(
        "--expired", action="store_true", help="compare offers that do not hold today as well"
    )
    parser.add_argument(
        "--csv", metavar="FILE", type=Path, help="write the ranking to FILE as well"
    )
    parser.add_argument(
        "--write", metavar="BOOK", type=_book_name,
        help="write the site's price book to BOOK (.xlsx or .csv) and leave: a workbook has "
        "drop-downs and tells what each column means",
    )  # fmt: skip
    parser.add_argument("--force", action="store_true", help="replace BOOK if it is there")
    _add_json(parser)


def _add_jar(commands: _Commands) -> None:
    parser = _add_command(
        commands, "jar", "hold jar tests against theory and write the factors that follow",
        "jar site.yaml bench.csv",
    )  # fmt: skip
    parser.add_argument(
        "results", metavar="RESULTS", type=Path,
        help="bench results (CSV or XLSX), one row a jar: date, doses in mg/L pure, pH, metals "
        "filtered and unfiltered, sludge; a row without doses is the raw water",
    )  # fmt: skip
    parser.add_argument(
        "--out", metavar="NAME", type=_file_name, default="jar.yaml",
        help="file to write into the site's folder (default: jar.yaml)",
    )  # fmt: skip
    parser.add_argument("--force", action="store_true", help="replace that file if it is there")
    _add_json(parser)


def _book_name(text: str) -> Path:
    if Path(text).suffix.lower() not in (".xlsx", ".csv"):
        raise argparse.ArgumentTypeError(f"expected a name ending in .xlsx or .csv, found {text!r}")
    return Path(text)


def _file_name(text: str) -> str:
    if Path(text).name != text or not text.endswith((".yaml", ".yml")):
        raise argparse.ArgumentTypeError(
            f"expected the name of a .yaml file without a folder, found {text!r}"
        )
    return text
