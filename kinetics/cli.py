"""The commands. Each is a few lines over the library; messages go to standard error."""

import argparse
import json
import logging
import sys
from collections.abc import Callable, Sequence
from pathlib import Path

from kinetics.errors import KettlewatchError
from kinetics.version import __version__


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command and return its exit status."""
    options = _parser().parse_args(arguments)
    logging.basicConfig(level=logging.WARNING, format="%(message)s", stream=sys.stderr)
    run: Callable[[argparse.Namespace], int] = options.run
    try:
        return run(options)
    except KettlewatchError as error:
        print(error, file=sys.stderr)
        return error.exit_status
    except KeyboardInterrupt:
        return 130
    except BrokenPipeError:
        sys.stderr.close()
        return 0
    except Exception as error:
        logging.getLogger("kinetics").exception("fault")
        print(f"A fault of this program, sorry: {type(error).__name__}: {error}", file=sys.stderr)
        return 1


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m kinetics",
        description="Follow a reaction by proton NMR: from a folder of spectra to a rate constant.",
    )
    parser.add_argument("--version", action="version", version=f"Kettlewatch {__version__}")
    commands = parser.add_subparsers(required=True, metavar="COMMAND", dest="command")

    check = commands.add_parser("check", help="is the sheet right, and does it fit the spectra?")
    check.add_argument("sheet", type=Path)
    check.add_argument("run_folder", type=Path, nargs="?")
    check.set_defaults(run=_check)

    plan = commands.add_parser("plan", help="before the run: how often, how long, how well")
    plan.add_argument("sheet", type=Path)
    plan.add_argument("--half-life", type=float, required=True, metavar="S", help="expected, s")
    plan.add_argument(
        "--snr",
        type=float,
        default=100.0,
        help="amount over its noise in one spectrum, limiting species at the start (default 100)",
    )
    plan.add_argument("--spectra", type=int, default=40, help="how many (default 40)")
    plan.add_argument(
        "--acquisition", type=float, default=0.0, metavar="S", help="length of one, s"
    )
    plan.add_argument("--length", type=float, metavar="S", help="of the run, s (default: best)")
    plan.add_argument(
        "--precision", type=float, default=2.0, metavar="PERCENT", help="wanted of k (default 2)"
    )
    plan.add_argument("--json", action="store_true")
    plan.set_defaults(run=_plan)

    watch = commands.add_parser("watch", help="follow a run folder into a logbook")
    watch.add_argument("run_folder", type=Path)
    watch.add_argument("--sheet", type=Path, required=True)
    watch.add_argument("--logbook", type=Path, required=True, metavar="NAME.logbook")
    watch.add_argument(
        "--once", action="store_true", help="take what is complete, list the rest, stop"
    )
    watch.add_argument(
        "--every", type=float, default=5.0, metavar="SECONDS", help="between looks (default 5)"
    )
    watch.set_defaults(run=_watch)

    fit = commands.add_parser("fit", help="rate constants with intervals")
    fit.add_argument("logbook", type=Path)
    fit.add_argument("--law", action="append", metavar="LAW", help="instead of the sheet's laws")
    fit.add_argument("--json", action="store_true")
    fit.set_defaults(run=_fit)

    table = commands.add_parser("table", help="amounts against time as CSV")
    table.add_argument("logbook", type=Path)
    table.add_argument("--to", type=Path, metavar="FILE.csv")
    table.set_defaults(run=_table)

    report = commands.add_parser("report", help="one self-contained HTML file")
    report.add_argument("logbook", type=Path)
    report.add_argument("--to", type=Path, required=True, metavar="FILE.html")
    report.set_defaults(run=_report)

    compare = commands.add_parser("compare", help="rate constants across runs and temperatures")
    compare.add_argument("logbook", type=Path, nargs="+")
    compare.add_argument("--json", action="store_true")
    compare.set_defaults(run=_compare)

    verify = commands.add_parser("verify", help="recompute from the raw files and compare")
    verify.add_argument("logbook", type=Path)
    verify.add_argument("--raw", type=Path, metavar="RUN_FOLDER")
    verify.set_defaults(run=_verify)

    copy = commands.add_parser("copy", help="a safe copy of a logbook in use")
    copy.add_argument("logbook", type=Path)
    copy.add_argument("to", type=Path)
    copy.set_defaults(run=_copy)
    return parser


# Imports stand inside the commands: `--help` and the light ones start without scipy.


def _check(options: argparse.Namespace) -> int:
    from kinetics.check import check

    for line in check(options.sheet, options.run_folder):
        print(line)
    return 0


def _plan(options: argparse.Namespace) -> int:
    from kinetics.plan import plan_run, plan_words

    outlook = plan_run(
        options.sheet,
        half_life_s=options.half_life,
        snr=options.snr,
        spectra=options.spectra,
        acquisition_s=options.acquisition,
        length_s=options.length,
        precision=options.precision / 100,
    )
    print(json.dumps(outlook, indent=2) if options.json else "\n".join(plan_words(outlook)))
    return 0


def _watch(options: argparse.Namespace) -> int:
    from kinetics.follow import follow

    return follow(options.run_folder, options.sheet, options.logbook, options.once, options.every)


def _fit(options: argparse.Namespace) -> int:
    from kinetics.answers import fit_document, fit_words
    from kinetics.run import load_run, study_run

    run = load_run(options.logbook)
    result = study_run(run, tuple(options.law) if options.law else None)
    if options.json:
        print(json.dumps(fit_document(run, result), indent=2, allow_nan=False))
    else:
        print("\n".join(fit_words(run, result)))
    return 0


def _table(options: argparse.Namespace) -> int:
    from kinetics.run import load_run
    from kinetics.table import write_csv

    run = load_run(options.logbook)
    if options.to is None:
        write_csv(run, sys.stdout)
        return 0
    from kinetics.table import save_csv

    save_csv(run, options.to)
    return 0


def _report(options: argparse.Namespace) -> int:
    from kinetics.report import save_report
    from kinetics.run import load_run

    save_report(load_run(options.logbook), options.to)
    print(f"written: {options.to}", file=sys.stderr)
    return 0


def _compare(options: argparse.Namespace) -> int:
    from kinetics.compare import compare, compare_words

    found = compare(options.logbook)
    print(json.dumps(found, indent=2) if options.json else "\n".join(compare_words(found)))
    return 0


def _verify(options: argparse.Namespace) -> int:
    from kinetics.verify import verify

    differences = verify(options.logbook, options.raw)
    for line in differences.lines:
        print(line)
    return 1 if differences.found else 0


def _copy(options: argparse.Namespace) -> int:
    from kinetics.logbook.copying import copy_logbook

    copy_logbook(options.logbook, options.to)
    print(f"copied to {options.to}", file=sys.stderr)
    return 0
