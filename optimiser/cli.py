"""The command line: parse, call one function of the library, print its result.

Owns the exit codes and what goes to which stream; options are in `optimiser.cli_options`.
Libraries that take time to load are imported by the commands that need them, so that ``--help``
answers at once.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from optimiser.cli_buying import run_contracts, run_negotiate
from optimiser.cli_doses import dose_problem, given_doses, unknown_reagent
from optimiser.cli_options import PROGRAM, build_parser
from optimiser.cli_orders import run_orders
from optimiser.cli_process import (
    BAD_INPUT,
    DONE,
    NO_PLAN,
    OUR_FAULT,
    PLEASE_REPORT,
    STOPPED,
    clear_progress,
    drop_output,
    drop_unwritable_output,
    own_the_process,
    progress,
    say,
    write_csv,
)
from optimiser.tables import Ink

if TYPE_CHECKING:
    import argparse

    from optimiser.site import Site


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the program and return its exit code.

    Parameters
    ----------
    arguments
        Words after the program's name; those of the process when not given, in which case an
        unforeseen error ends in one line and exit code 1 unless ``--debug`` asks for more.
    """
    parser = build_parser()
    options = parser.parse_args(arguments)
    if options.version:
        return _print_version()
    if options.command is None:
        sys.stderr.write(parser.format_help())
        return BAD_INPUT
    if arguments is None:
        own_the_process(debug=options.debug)
    # numpy is not loaded yet: matrices here are far too small for threads to help, and those that
    # wait for work burn a second core
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    try:
        code = _COMMANDS[options.command](options)
        sys.stdout.flush()
    except KeyboardInterrupt:
        clear_progress()
        say("stopped before there was a result")
        return STOPPED
    except BrokenPipeError:
        # The reader has what it wanted.
        drop_output()
        return DONE
    except _known_errors() as error:
        clear_progress()
        return _refuse(error, debug=options.debug)
    return code


def _known_errors() -> tuple[type[Exception], ...]:
    from catalogs.problems import InputFileError
    from chemistry.errors import ChemistryError
    from optimiser.errors import OptimiserError

    return (InputFileError, ChemistryError, OptimiserError, OSError)


def _refuse(error: Exception, *, debug: bool) -> int:
    import traceback

    from catalogs.problems import InputFileError
    from chemistry.errors import WaterError
    from optimiser.errors import OptimiserError

    if isinstance(error, InputFileError):
        count = len(error.problems)
        sys.stderr.write(f"{error}\n")
        say(f"{count} problem{'' if count == 1 else 's'} found, nothing was computed")
        return BAD_INPUT
    if isinstance(error, OSError):
        drop_unwritable_output()
        say(f"{error.filename or 'input or output'}: {error.strerror or error}")
        return BAD_INPUT
    code = BAD_INPUT if isinstance(error, WaterError) else OUR_FAULT
    if isinstance(error, OptimiserError):
        code = error.exit_code
    if code == OUR_FAULT and debug:
        traceback.print_exception(error)
    say(f"{error}\n    {PLEASE_REPORT}" if code == OUR_FAULT else str(error))
    return code


def _print_version() -> int:
    from importlib.metadata import PackageNotFoundError, version

    try:
        found = version(PROGRAM)
    except PackageNotFoundError:
        found = "not installed"
    sys.stdout.write(f"{PROGRAM} {found}\n")
    return DONE


def _load(options: argparse.Namespace, *, use_expired: bool = False) -> Site:
    import optimiser

    path: Path = options.site
    file = path / "site.yaml" if path.is_dir() else path
    return optimiser.load_site(file, use_expired=True) if use_expired else optimiser.load_site(file)


def _ink() -> Ink:
    plain = os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb"
    return Ink(on=sys.stdout.isatty() and not plain)


def _print_json(data: Mapping[str, Any]) -> None:
    import json

    sys.stdout.write(json.dumps(data, indent=2, allow_nan=False) + "\n")


def _plan(options: argparse.Namespace) -> int:
    from dataclasses import replace

    import optimiser
    from optimiser.render import plan_text
    from optimiser.render_no_plan import no_plan_data, no_plan_text

    site = _load(options)
    treatment, solver = site.treatment, site.solver
    if options.most_reagents is not None:
        treatment = replace(treatment, most_reagents=options.most_reagents)
    if options.solver is not None:
        solver = replace(solver, name=options.solver)
    if options.time_limit is not None:
        solver = replace(solver, time_limit_s=options.time_limit)
    site = replace(site, treatment=treatment, solver=solver)
    try:
        found = optimiser.plan(
            site, progress=progress(), prove_s=options.prove, runners_up=options.runners_up
        )
    except optimiser.NoPlan as none:
        data = no_plan_data(site.name, none, site.currency)
        clear_progress()
        _print(data, options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    _print(found.to_dict(), options.json, plan_text)
    return DONE


def _assess(options: argparse.Namespace) -> int:
    import optimiser
    from optimiser.render import assessment_text

    site = _load(options)
    doses = given_doses(options.dose) or dict(site.today)
    if not doses:
        say("no doses: give --dose REAGENT=MG_PER_L, or write them under `today` in the site file")
        return BAD_INPUT
    problem = dose_problem(doses, site)
    if problem:
        say(problem)
        return BAD_INPUT
    found = optimiser.assess(site, doses, trim=options.trim)
    _print(found.to_dict(), options.json, assessment_text)
    return DONE if found.compliant else NO_PLAN


def _trade_off(options: argparse.Namespace) -> int:
    import optimiser
    from optimiser.errors import refuse_existing_chart
    from optimiser.render_no_plan import no_plan_data, no_plan_text
    from optimiser.render_trade_off import trade_off_text

    refuse_existing_chart(options.chart, force=options.force)
    site = _load(options)
    try:
        found = optimiser.trade_off(
            site, options.against, options.points, caps=options.at, progress=progress()
        )
    except optimiser.NoPlan as none:
        clear_progress()
        _print(no_plan_data(site.name, none, site.currency), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    if options.csv is not None:
        write_csv(found.frame(), options.csv)
    if options.chart is not None:
        from optimiser.chart_trade_off import draw_trade_off

        draw_trade_off(found.to_dict(), options.chart)
    _print(found.to_dict(), options.json, trade_off_text)
    return DONE if found.points else NO_PLAN


def _curves(options: argparse.Namespace) -> int:
    from optimiser.curves import build_curves
    from optimiser.errors import refuse_existing_chart
    from optimiser.render_curves import curves_text

    refuse_existing_chart(options.chart, force=options.force)
    site = _load(options)
    doses = given_doses(options.dose)
    for name in (*options.reagent, *doses):
        if name not in site.reagents:
            say(unknown_reagent(name, site))
            return BAD_INPUT
    curves = build_curves(site, options.ph)
    if options.chart is not None:
        from optimiser.chart_curves import chart_curves

        chart_curves(site, curves, options.chart, options.reagent, doses)
    if options.csv is not None:
        write_csv(curves.to_frame(), options.csv)
    _print(curves.to_dict(), options.json, curves_text)
    return DONE


def _floors(options: argparse.Namespace) -> int:
    from optimiser.floors import explain_floors
    from optimiser.render_floors import floors_text

    floors = explain_floors(_load(options))
    if options.csv is not None:
        write_csv(floors.to_frame(), options.csv)
    _print(floors.to_dict(), options.json, floors_text)
    return DONE


def _chances(options: argparse.Namespace) -> int:
    import optimiser
    from optimiser.chances import explain_chances
    from optimiser.render_chances import chances_text, confidence_text
    from optimiser.render_no_plan import no_plan_data, no_plan_text

    site = _load(options)
    try:
        if options.confidence is None:
            found = explain_chances(
                site, draws=options.draws, seed=options.seed, progress=progress()
            )
            clear_progress()
            _print(found.to_dict(), options.json, chances_text)
            return DONE
        sure = optimiser.plan_with_confidence(
            site, options.confidence, draws=options.draws, seed=options.seed, progress=progress()
        )
    except optimiser.NoPlan as none:
        clear_progress()
        _print(no_plan_data(site.name, none), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    _print(sure.to_dict(), options.json, confidence_text)
    return DONE if sure.reached else NO_PLAN


def _explain(options: argparse.Namespace) -> int:
    import optimiser
    from optimiser.explain import explain_plan
    from optimiser.render_explain import explain_text
    from optimiser.render_no_plan import no_plan_data, no_plan_text

    site = _load(options)
    try:
        found = explain_plan(site, progress=progress())
    except optimiser.NoPlan as none:
        clear_progress()
        _print(no_plan_data(site.name, none, site.currency), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    _print(found.to_dict(), options.json, explain_text)
    return DONE


def _offers(options: argparse.Namespace) -> int:
    from optimiser.render_offers import offers_text
    from optimiser.site_comparison import compare_site_offers

    site = _load(options, use_expired=options.expired)
    if options.write is not None:
        return _write_book(site, options)
    demand = given_doses(options.demand)
    for key in demand:
        if key.partition("@")[0] not in site.reagents:
            say(f"--demand {key}: {unknown_reagent(key.partition('@')[0], site)}")
            return BAD_INPUT
    found = compare_site_offers(site, demand, of_plan=options.plan)
    if options.csv is not None:
        found.to_frame().to_csv(options.csv, index=False, lineterminator="\n")
    _print(found.to_dict(), options.json, offers_text)
    return DONE


def _write_book(site: Site, options: argparse.Namespace) -> int:
    from optimiser.book_writer import book_of_site, load_rows, write_book

    book = load_rows(book_of_site(site.path), currency=site.currency)
    write_book(options.write, book, force=options.force)
    sys.stdout.write(f"{options.write}\n")
    return DONE


def _print(
    data: Mapping[str, Any], as_json: bool, text: Callable[[Mapping[str, Any], Ink], str]
) -> None:
    if as_json:
        _print_json(data)
    else:
        sys.stdout.write(text(data, _ink()))


def _jar(options: argparse.Namespace) -> int:
    from catalogs import load_reagents
    from optimiser.bench_sheet import load_bench_sheet
    from optimiser.jar_file import calibration_text, write_calibration
    from optimiser.jar_tests import compare_jars
    from optimiser.render_jar import jar_table, jar_text
    from optimiser.whole_files import refuse_to_overwrite

    site = _load(options)
    target = site.path.parent / options.out
    refuse_to_overwrite(target, force=options.force)
    names = {key: load_reagents()[key].name for key in site.reagents}
    sheet = load_bench_sheet(options.results, names, tuple(site.analysis.measurements))
    found = compare_jars(site, sheet)
    data = found.to_dict()
    text = calibration_text(found.calibration, jar_table(data))
    write_calibration(target, text, force=options.force)
    _print({**data, "written": str(target)}, options.json, jar_text)
    return DONE


def _check(options: argparse.Namespace) -> int:
    from optimiser.render_site import site_text

    sys.stdout.write(site_text(_load(options)))
    return DONE


def _new(options: argparse.Namespace) -> int:
    from optimiser.starter import write_starter

    for path in write_starter(options.directory, workbook=options.xlsx):
        sys.stdout.write(f"{path}\n")
    return DONE


_COMMANDS: Mapping[str, Callable[[argparse.Namespace], int]] = {
    "plan": _plan,
    "assess": _assess,
    "explain": _explain,
    "tradeoff": _trade_off,
    "curves": _curves,
    "floors": _floors,
    "offers": _offers,
    "contracts": lambda options: run_contracts(options, _load, _print),
    "negotiate": lambda options: run_negotiate(options, _load, _print),
    "orders": lambda options: run_orders(options, _load, _print),
    "chances": _chances,
    "jar": _jar,
    "check": _check,
    "new": _new,
}
