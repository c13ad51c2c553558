"""The commands of buyers: contracts compared, and the sheet for negotiations.

Owns what they print; how a site is loaded and a result printed is handed in by `optimiser.cli`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from optimiser.cli_process import DONE, NO_PLAN, clear_progress, progress, write_csv

if TYPE_CHECKING:
    import argparse

Show = Callable[[Mapping[str, Any], bool, Callable[..., str]], None]


def run_contracts(options: argparse.Namespace, load: Callable[..., Any], show: Show) -> int:
    """Compare contracts and print the table."""
    import optimiser
    from optimiser.render_contracts import contracts_text
    from optimiser.render_no_plan import no_plan_data, no_plan_text

    site = load(options, use_expired=options.expired)
    try:
        found = optimiser.compare_contracts(site, options.candidate, progress())
    except optimiser.NoPlan as none:
        clear_progress()
        show(no_plan_data(site.name, none, site.currency), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    if options.csv is not None:
        write_csv(found.to_frame(), options.csv)
    show(found.to_dict(), options.json, contracts_text)
    return DONE
