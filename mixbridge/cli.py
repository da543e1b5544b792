"""The command line: ``mixbridge check``, ``match``, ``rehearse``, ``verify`` and ``demo``."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable, Sequence
from pathlib import Path

from mixbridge.demo import apiaries
from mixbridge.demo import path as demo_path
from mixbridge.errors import DisagreementError, MixbridgeError, OptionError
from mixbridge.routes import LEDGER_ROUTES
from mixbridge.study import Study, crosscheck

__all__ = ["main"]

DONE, DIFFERS, UNUSABLE = 0, 1, 2

INTRODUCTION = """\
One random-intercept model, y = x'b + unit effect + error, is fitted by feasible generalised least
squares in one tradition and by ML or REML in another. mixbridge fits every route to the same rows
and says where they agree."""

CHECK = """\
Reads a CSV or Parquet file with one row per unit and period, fits every route, and prints one
screen: what was fitted on which rows, whether the routes agree with the primary one, where not and
by how much, and the variance components of each route.

Formulas hold the fixed part only; the grouping factor is named by --unit. Written here, a formula
may use column names, numbers, + - * / ** : comparisons, and a fixed list of transforms (log, sqrt,
exp, center, standardize, C, I, Q, bs, cr and their like; anything else is refused with the list).
It cannot run other code."""

CHECK_EXAMPLES = """\
examples:
  mixbridge check honey.csv --formula 'honey ~ forage + feeding + altitude' \\
      --unit apiary --period season
  mixbridge check visits.parquet --formula 'log(cost) ~ age + C(clinic_type)' \\
      --unit patient --primary ml
  mixbridge check honey.csv --formula 'honey ~ forage' --unit apiary --json > record.json

exit status: 0 done, and every required agreement met; 1 a required agreement is missing (the
message says which routes disagree and why); 2 the input cannot be used (the message says what,
where, and what to do)."""


MATCH = """\
Searches every route under every convention for those that are compatible with figures somebody printed:
coefficients, standard errors, components, ICC, quasi-demeaning weights, log-likelihoods, test statistics.
Figures are taken as printed, to half a unit of their last digit. A match shows compatibility, not where
the figures came from, and never intent."""

MATCH_EXAMPLES = """\
a file of figures (TOML); figures are text, so that trailing zeros count:
  "b:forage" = "0.235"
  "se:forage" = "0.025"
  icc = "0.48"

example:
  mixbridge match figures.toml honey.csv --formula 'honey ~ forage + feeding' --unit apiary

exit status: 0 some convention matches every figure; 1 none does; 2 the input cannot be used."""


REHEARSE = """\
Simulates a design under a stated truth and analyses every replicate by every route: bias, root mean
square error, coverage, size and power, with Monte Carlo errors, and a paragraph for a protocol. So a
route can be chosen and written down before the data come."""

REHEARSE_EXAMPLES = """\
a file with a design (TOML); covariates have variances [within, between]:
  units = 40
  sizes = { 3 = 20, 6 = 20 }
  covariates = { dose = [1.0, 0.5], age = [0.0, 1.0] }

  [truth]
  coefficients = { dose = 0.3 }
  icc = 0.4
  contextual = { dose = -0.5 }

exit status: 0 done; 2 the design is impossible or the file cannot be used."""


VERIFY = """\
Recomputes every figure of a record from the closed moments that it carries, without the rows: same,
differs, or needs rows (the order of periods, cluster-robust figures). So a reader without access to
confidential rows can check that printed figures follow from the moments; that the moments are those
of the data it cannot show."""

VERIFY_EXAMPLES = """\
example:
  mixbridge check honey.csv --formula 'honey ~ forage' --unit apiary --json > record.json
  mixbridge verify record.json

exit status: 0 no figure differs; 1 some figure differs; 2 the file cannot be used."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        Arguments without the program's name; those of the process unless given.

    Returns
    -------
    int
        Exit status: 0 done, 1 a required agreement is missing or a figure differs, 2 unusable input.
    """
    options = _parser().parse_args(arguments)
    action: Callable[[argparse.Namespace], int] = options.action
    try:
        return action(options)
    except MixbridgeError as error:
        print(f"mixbridge: {error}", file=sys.stderr)
        return UNUSABLE
    except BrokenPipeError:  # the reader of the output has seen enough
        sys.stderr.close()
        return DONE


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="mixbridge", description=INTRODUCTION, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)
    check = commands.add_parser(
        "check",
        help="cross-check one model on a file",
        description=CHECK,
        epilog=CHECK_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    check.add_argument(
        "file", metavar="FILE", help="CSV (.csv, .csv.gz, .tsv) or Parquet file, or a folder of Parquet files"
    )
    check.add_argument(
        "--formula", required=True, help="outcome ~ covariates, for example 'honey ~ forage + feeding'"
    )
    check.add_argument(
        "--unit", required=True, help="column of the grouping factor: apiary, firm, school, patient"
    )
    check.add_argument("--period", help="column that orders the rows of a unit; first differences need it")
    check.add_argument("--primary", default="reml", help="the route that you report (default: reml)")
    check.add_argument(
        "--routes", help=f"routes to show, separated by commas (default: all: {', '.join(LEDGER_ROUTES)})"
    )
    check.add_argument(
        "--confidence", type=float, default=0.95, help="level of the intervals (default: 0.95)"
    )
    check.add_argument(
        "--incomplete-rows",
        choices=("drop", "refuse"),
        default="drop",
        help="rows with missing values: drop them and count them by cause, or refuse the file "
        "(default: drop)",
    )
    check.add_argument(
        "--require",
        action="append",
        default=[],
        metavar="TERM=CLASS",
        help="every random-effects route must agree with the primary one in this term: identical, immaterial, "
        "or visible (no conflict); may be repeated",
    )
    check.add_argument(
        "--json", action="store_true", help="print the whole record, unrounded, instead of the screen"
    )
    check.add_argument(
        "--appendix",
        metavar="FILE",
        help="also write the methods appendix; the ending .md, .tex or .html chooses the format",
    )
    check.add_argument(
        "--audience",
        choices=("both", "economics", "biostatistics"),
        default="both",
        help="vocabulary of the appendix; its claims are the same (default: both)",
    )
    check.set_defaults(action=_check)
    match = commands.add_parser(
        "match",
        help="find which conventions are compatible with printed figures",
        description=MATCH,
        epilog=MATCH_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    match.add_argument("figures", metavar="FIGURES", help="TOML or CSV file of figures as printed")
    match.add_argument("file", metavar="FILE", help="CSV or Parquet file with the data")
    match.add_argument("--formula", required=True, help="outcome ~ covariates")
    match.add_argument("--unit", required=True, help="column of the grouping factor")
    match.add_argument("--period", help="column that orders the rows of a unit")
    match.add_argument(
        "--robust",
        choices=("auto", "always", "if_needed", "never"),
        default="auto",
        help="whether robust covariances are searched too (default: auto, all where that is quick)",
    )
    match.set_defaults(action=_match)
    rehearse = commands.add_parser(
        "rehearse",
        help="simulate a design under a stated truth, before the data come",
        description=REHEARSE,
        epilog=REHEARSE_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    rehearse.add_argument("design", metavar="DESIGN", help="TOML file with the design and the truth")
    rehearse.add_argument(
        "--replicates", type=int, default=2_000, help="number of replicates (default: 2000)"
    )
    rehearse.add_argument("--seed", type=int, default=20_061, help="seed of the draws (default: 20061)")
    rehearse.set_defaults(action=_rehearse)
    verify = commands.add_parser(
        "verify",
        help="recompute the figures of a record from its moments, without rows",
        description=VERIFY,
        epilog=VERIFY_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    verify.add_argument("record", metavar="RECORD", help="JSON file written by 'mixbridge check --json'")
    verify.add_argument(
        "--products", metavar="FILE", help="unit products of the same rows, for cluster-robust figures"
    )
    verify.set_defaults(action=_verify)
    demo = commands.add_parser(
        "demo",
        help="cross-check invented data on honey yields",
        description="Cross-checks invented data: honey by apiary and season, with forage, feeding and "
        "altitude.",
    )
    demo.add_argument(
        "--save", metavar="FILE", help="also write the data as CSV, to try 'mixbridge check' on it"
    )
    demo.add_argument(
        "--json", action="store_true", help="print the whole record, unrounded, instead of the screen"
    )
    demo.set_defaults(action=_demo)
    return parser


def _check(options: argparse.Namespace) -> int:
    study = crosscheck(
        options.formula,
        options.file,
        unit=options.unit,
        period=options.period,
        primary=options.primary,
        routes=None if options.routes is None else [key.strip() for key in options.routes.split(",")],
        confidence=options.confidence,
        incomplete_rows=options.incomplete_rows,
        trusted=False,
    )
    required = [_requirement(text) for text in options.require]
    _show(study, options.json)
    if options.appendix is not None:
        study.appendix(options.appendix, audience=options.audience)
    status = DONE
    for term, agree in required:
        try:
            study.require(term, agree)  # type: ignore[arg-type]  # checked there
        except DisagreementError as missing:
            print(f"mixbridge: {missing}", file=sys.stderr)
            status = DIFFERS
    return status


def _match(options: argparse.Namespace) -> int:
    from mixbridge.reconcile.match import match_reported
    from mixbridge.reconcile.printed_file import read_figures

    study = crosscheck(options.formula, options.file, unit=options.unit, period=options.period, trusted=False)
    found = match_reported(read_figures(options.figures), study, robust=options.robust)
    print(found)
    return DONE if found.all_matched else DIFFERS


def _rehearse(options: argparse.Namespace) -> int:
    from mixbridge.rehearse import rehearse
    from mixbridge.rehearse.design_file import read_design

    design, truth = read_design(options.design)
    found = rehearse(design, truth, options.replicates, options.seed)
    print(found)
    print()
    print(found.paragraph())
    return DONE


def _verify(options: argparse.Namespace) -> int:
    from mixbridge.moments.products import UnitProducts
    from mixbridge.study.verify import verify

    products = None if options.products is None else UnitProducts.load(options.products)
    found = verify(options.record, products)
    print(found)
    return DONE if found.passed else DIFFERS


def _requirement(text: str) -> tuple[str, str]:
    term, separator, agree = text.rpartition("=")
    if not separator or not term:
        raise OptionError(
            f"--require {text!r} is not of the form TERM=CLASS, for example 'forage=immaterial'."
        )
    return term, agree


def _demo(options: argparse.Namespace) -> int:
    study = crosscheck(
        "honey ~ forage + feeding + altitude", apiaries(), unit="apiary", period="season", trusted=False
    )
    if options.save is not None:
        try:
            Path(options.save).write_bytes(demo_path().read_bytes())
        except OSError as error:
            print(f"mixbridge: cannot write {options.save}: {error.strerror}", file=sys.stderr)
            return UNUSABLE
    _show(study, options.json)
    if not options.json:
        print(
            "\nInvented data. The same on a file of your own:\n"
            "  mixbridge check FILE --formula 'honey ~ forage + feeding + altitude' "
            "--unit apiary --period season"
        )
    return DONE


def _show(study: Study, as_json: bool) -> None:
    print(json.dumps(study.to_dict(), indent=1, ensure_ascii=False) if as_json else study)
