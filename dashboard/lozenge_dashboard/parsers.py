"""The arguments of the commands."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import NoReturn

from lozenge_engine import __version__
from lozenge_engine.errors import InputError

__all__ = [
    "bundle_parser",
    "evidence_parser",
    "export_parser",
    "order_parser",
    "plan_parser",
    "presets_parser",
    "results_parser",
    "run_parser",
    "serve_parser",
    "verify_parser",
]

PRESET_HELP = "a preset file, or the name of one that comes with the program"
WORKERS_HELP = "processes that compute a campaign, one thread each; as many as cores if not given"


class Parser(argparse.ArgumentParser):
    """A parser that refuses in one line."""

    def error(self, message: str) -> NoReturn:
        raise InputError(f"{message}; see {self.prog} --help")


def serve_parser() -> Parser:
    """Make the arguments of the page, when no command is given."""
    parser = Parser(
        prog="lozenge",
        description="Entanglement entropy of sprinkled causal diamonds. Opens the page in the "
        "browser; only this machine can reach it.",
        epilog="Further commands: 'lozenge run PRESET' computes a preset without the page; "
        "'lozenge plan PRESET' says what its campaign will take, 'lozenge run PRESET --results "
        "FILE' runs it, 'lozenge results FILE' prints what it found, 'lozenge evidence' sets it "
        "beside independent routes; 'lozenge export' writes figures and tables; 'lozenge bundle' "
        "packs a preset or results for somebody else, 'lozenge verify' computes a bundle again; "
        "'lozenge order' computes a causal set of your own from its relations; "
        "'lozenge presets' lists the presets that come with the program. Each knows --help.",
    )
    parser.add_argument("-V", "--version", action="version", version=f"lozenge {__version__}")
    parser.add_argument("preset", metavar="PRESET", nargs="?", help=PRESET_HELP)
    parser.add_argument("--no-browser", action="store_true", help="serve without opening a tab")
    parser.add_argument(
        "--port",
        type=_port,
        metavar="N",
        help="port to serve on; if it is busy the next free one is taken, and said",
    )
    return parser


def run_parser() -> Parser:
    """Make the arguments of ``lozenge run``."""
    parser = Parser(
        prog="lozenge run",
        description="Compute a preset and print its numbers: the sprinkling of its seed, and the "
        "mean over its sprinklings; or, with --results, run its campaign, which Ctrl-C pauses and "
        "the same command goes on with.",
        epilog="Exit status: 0 done; 2 bad input; 3 computed, but the certificate is not met, a "
        "number carries a mark or a realisation failed; 130 stopped, or a campaign paused, by "
        "Ctrl-C.",
    )
    parser.add_argument("preset", metavar="PRESET", help=PRESET_HELP)
    parser.add_argument(
        "--points",
        type=Path,
        metavar="CSV",
        help="own points instead of a sprinkling: a CSV file with columns t and x",
    )
    parser.add_argument(
        "--one", action="store_true", help="only the sprinkling of the seed, no mean"
    )
    parser.add_argument(
        "--sweeps",
        action="store_true",
        help="also the sweeps of density, size and separation, with their fits",
    )
    parser.add_argument(
        "--evidence",
        action="store_true",
        help="instead: the cut study, derived thresholds, a mode, the checks of the state, mutual "
        "information against the cross ratio, and slopes beside twin and chain",
    )
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the table",
    )
    parser.add_argument(
        "--arrays",
        type=Path,
        metavar="FILE.npz",
        help="write the points, the eigenvalues and kept masks of both stages and the "
        "symplectic values as NumPy arrays",
    )
    parser.add_argument(
        "--results",
        type=Path,
        metavar="FILE",
        help="run the preset's campaign into this results file, or go on with it",
    )
    parser.add_argument("--workers", type=int, metavar="N", help=WORKERS_HELP)
    parser.add_argument(
        "--dask",
        metavar="ADDRESS",
        help="have the workers of this Dask scheduler compute the campaign",
    )
    return parser


def plan_parser() -> Parser:
    """Make the arguments of ``lozenge plan``."""
    parser = Parser(
        prog="lozenge plan",
        description="Say what a preset's campaign will take: its points, predicted time and "
        "memory, and what will be left out.",
    )
    parser.add_argument("preset", metavar="PRESET", help=PRESET_HELP)
    parser.add_argument("--workers", type=int, metavar="N", help=WORKERS_HELP)
    return parser


def results_parser() -> Parser:
    """Make the arguments of ``lozenge results``."""
    parser = Parser(
        prog="lozenge results",
        description="Print what a results file holds, finished or not, also while it is written.",
        epilog="Exit status: 0 done; 2 bad input; 3 a sample's certificate is not met, a number "
        "carries a mark or a realisation failed.",
    )
    parser.add_argument("file", type=Path, metavar="FILE", help="the results file of a campaign")
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the report",
    )
    parser.add_argument(
        "--csv",
        type=Path,
        metavar="FILE",
        help="write all samples as CSV; - for the standard output, instead of the report",
    )
    return parser


def evidence_parser() -> Parser:
    """Make the arguments of ``lozenge evidence``."""
    parser = Parser(
        prog="lozenge evidence",
        description="Print the slopes of a preset's campaign beside independent routes: data, "
        "continuum twin, harmonic chain, data minus twin, each with its error, and what the "
        "difference is due to.",
        epilog="Exit status: 0 done; 2 bad input; 3 a sample carries a mark or a realisation "
        "failed; 130 the campaign was paused by Ctrl-C.",
    )
    parser.add_argument("preset", metavar="PRESET", help=PRESET_HELP)
    parser.add_argument(
        "--results",
        type=Path,
        metavar="FILE",
        help="the campaign's results file: made, or gone on with, first; without it twin and "
        "chain alone",
    )
    parser.add_argument(
        "--as-is",
        action="store_true",
        help="read the results file as it is, finished or not",
    )
    parser.add_argument(
        "--level",
        metavar="LEVEL",
        help="how the twin is made: exact (closed form), smooth (the same, averaged over counts), "
        "or from sets: preview, refined, long",
    )
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the table",
    )
    parser.add_argument("--workers", type=int, metavar="N", help=WORKERS_HELP)
    return parser


def export_parser() -> Parser:
    """Make the arguments of ``lozenge export``."""
    parser = Parser(
        prog="lozenge export",
        description="Write figures (SVG, PDF, PNG), tables (CSV, LaTeX), sources and a methods "
        "paragraph of a preset or of a campaign's results.",
    )
    parser.add_argument("what", metavar="PRESET_OR_RESULTS", help=f"{PRESET_HELP}; or results")
    parser.add_argument("--to", type=Path, metavar="DIR", required=True, help="folder to write to")
    parser.add_argument("--views", metavar="A,B", help="only these views, by name")
    parser.add_argument(
        "--double", action="store_true", help="figures two columns wide besides those of one"
    )
    return parser


def order_parser() -> Parser:
    """Make the arguments of ``lozenge order``."""
    parser = Parser(
        prog="lozenge order",
        description="Compute a causal set of your own, of 4 to 20 000 elements, from its "
        "relations: modes, and the entropies of regions given by lists of elements. Assumes a 1+1 "
        "sprinkling, and says where the set is none.",
        epilog="Files: .npy, a square array, entry (i, j) true iff i precedes j; .mtx, Matrix "
        "Market, numbers from 1; .csv, columns earlier and later, numbers from 0. Exit status: 0 "
        "done; 2 bad input; 3 computed, but the certificate is not met, a number carries a mark, "
        "or the set does not look like what is assumed; 130 stopped by Ctrl-C.",
    )
    parser.add_argument("file", type=Path, metavar="FILE", help=".npy, .mtx or .csv")
    parser.add_argument(
        "--links", action="store_true", help="FILE holds links alone; they are checked and closed"
    )
    parser.add_argument(
        "--close",
        action="store_true",
        help="add the relations that transitivity asks for, instead of refusing",
    )
    parser.add_argument(
        "--regions",
        type=Path,
        metavar="CSV",
        help="elements of regions: columns region (A, B, ...) and element (from 0)",
    )
    parser.add_argument(
        "--alpha",
        type=float,
        metavar="A",
        default=1.0,
        help="multiple of the threshold sqrt(n)/(4 pi) in both stages, 0.05 to 20",
    )
    parser.add_argument(
        "--json",
        type=Path,
        metavar="FILE",
        help="write the numbers as JSON; - for the standard output, instead of the table",
    )
    return parser


def bundle_parser() -> Parser:
    """Make the arguments of ``lozenge bundle``."""
    parser = Parser(
        prog="lozenge bundle",
        description="Pack a preset with its own numbers, or a campaign's results with all samples, "
        "into one zip file that somebody else can check with 'lozenge verify'.",
    )
    parser.add_argument(
        "what", metavar="PRESET_OR_RESULTS", help=f"{PRESET_HELP}; or a results file"
    )
    parser.add_argument("--to", type=Path, metavar="FILE.zip", required=True, help="what to write")
    return parser


def verify_parser() -> Parser:
    """Make the arguments of ``lozenge verify``."""
    parser = Parser(
        prog="lozenge verify",
        description="Compute again what a bundle holds and say row by row: identical bits, equal "
        "within what rounding may do on another machine, or different.",
        epilog="Exit status: 0 nothing is different; 1 something is; 2 bad input.",
    )
    parser.add_argument("file", type=Path, metavar="BUNDLE", help="the zip file")
    several = parser.add_mutually_exclusive_group()
    several.add_argument(
        "--realisations",
        type=int,
        metavar="N",
        help="how many to compute again; a few if none is given",
    )
    several.add_argument("--all", action="store_true", help="compute all of them again")
    return parser


def presets_parser() -> Parser:
    """Make the arguments of ``lozenge presets``."""
    parser = Parser(
        prog="lozenge presets", description="List the presets that come with the program."
    )
    parser.add_argument(
        "name", metavar="NAME", nargs="?", help="print this one's file instead, to start from"
    )
    return parser


def _port(text: str) -> int:
    if text.isascii() and text.isdigit() and int(text) <= 65535:
        return int(text)
    raise argparse.ArgumentTypeError(f"given {text}; allowed is a whole number from 0 to 65535")
