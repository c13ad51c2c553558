"""The commands of buyers: contracts compared, and the sheet for negotiations.

Owns what they print; how a site is loaded and a result printed is handed in by `optimiser.cli`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any, Protocol

from optimiser.cli_process import DONE, NO_PLAN, clear_progress, progress, write_csv

if TYPE_CHECKING:
    import argparse

    import pandas as pd

    from optimiser.site import Site

Show = Callable[[Mapping[str, Any], bool, Callable[..., str]], None]


def run_contracts(options: argparse.Namespace, load: Callable[..., Any], show: Show) -> int:
    """Compare contracts and print the table."""
    from optimiser.contracts import compare_contracts
    from optimiser.render_contracts import contracts_text

    site = load(options, use_expired=options.expired)
    return _run(
        options, show, contracts_text, site,
        lambda: compare_contracts(site, options.candidate, progress()),
    )  # fmt: skip


def run_negotiate(options: argparse.Namespace, load: Callable[..., Any], show: Show) -> int:
    """Work out what to ask each supplier and print the sheet."""
    from optimiser.negotiation import negotiate
    from optimiser.render_negotiation import negotiation_text

    site = load(options, use_expired=options.expired)
    return _run(options, show, negotiation_text, site, lambda: negotiate(site, progress()))


class _Table(Protocol):
    """A result that is printed, and written as a table."""

    def to_dict(self) -> dict[str, Any]:
        """Everything as plain data."""

    def to_frame(self) -> pd.DataFrame:
        """The table."""


def _run(
    options: argparse.Namespace, show: Show, text: Callable[..., str], site: Site,
    find: Callable[[], _Table],
) -> int:  # fmt: skip
    """Find, write and print a result, or the reasons why there is no plan."""
    from optimiser.errors import NoPlan
    from optimiser.render_no_plan import no_plan_data, no_plan_text

    try:
        found = find()
    except NoPlan as none:
        clear_progress()
        show(no_plan_data(site.name, none, site.currency), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    if options.csv is not None:
        write_csv(found.to_frame(), options.csv)
    show(found.to_dict(), options.json, text)
    return DONE
