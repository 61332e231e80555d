"""The command line: one table of verbs; each parses, calls, prints and returns an exit status.

Nothing heavy is imported here at the top: `--help` must come at once.
"""

from __future__ import annotations

import argparse
import codecs
import os
import sys
import unicodedata
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn, TypeVar

from reconcile import __version__
from reconcile.campaign.refusal import Refusal, nearest

if TYPE_CHECKING:
    from types import TracebackType

_Parsed = TypeVar("_Parsed")

DONE, REFUSED, USAGE, PROVISIONAL, INTERRUPTED = 0, 1, 2, 3, 130

EXIT_STATUSES = """exit status: 0 done; 1 input refused (verify: something changed); 2 wrong usage;
3 done, but provisional; 130 interrupted."""


class Usage(Exception):
    """The command line asks for something that there is not."""


class _Parser(argparse.ArgumentParser):
    """A parser that tells of wrong usage by an exception, so that one place prints."""

    def error(self, message: str) -> NoReturn:
        """Raise Usage with the parser's own sentence."""
        raise Usage(f"{message.rstrip('.')}. See `{self.prog} --help`.")


# ---------------------------------------------------------------------------------------------------------------------
# Consoles

# What a console that lacks a character shows instead.
_PLAIN = {"±": "+/-", "µ": "u", "μ": "u", "×": "x", "−": "-", "–": "-", "—": "-", "…": "...", "→": "->", "≤": "<="}
_PLAIN |= {"≥": ">=", "·": "*", "√": "sqrt ", "‘": "'", "’": "'", "“": '"', "”": '"', "≈": "~", "°": " deg", "π": "pi"}


def _plainer(error: UnicodeError) -> tuple[str, int]:
    """Replace what an encoding lacks by plain letters: an error handler of `codecs`."""
    if not isinstance(error, UnicodeEncodeError):
        raise error
    text = []
    for character in error.object[error.start : error.end]:
        simple = "".join(
            _PLAIN.get(part, part) for part in unicodedata.normalize("NFKD", _PLAIN.get(character, character))
        )
        text.append(simple.encode("ascii", "ignore").decode("ascii") or "?")
    return "".join(text), error.end


def _make_consoles_safe() -> None:
    """Let no output fail on a console that lacks a character."""
    codecs.register_error("reconcile.plainer", _plainer)
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):  # a captured stream may lack it, and there may be no console at all
            stream.reconfigure(errors="reconcile.plainer")


def _say(*lines: str) -> None:
    """Print results on standard output."""
    print(*lines, sep="\n", flush=True)  # a closed pipe must show here, not when the interpreter ends


def _complain(*lines: str) -> None:
    """Print on standard error."""
    print(*lines, sep="\n", file=sys.stderr)


class _Bars:
    """Progress on standard error: bars where it is a terminal, else a line where a stage begins; nothing where quiet."""

    def __init__(self, quiet: bool) -> None:
        self._quiet = quiet
        self._stage: str | None = None
        self._bar: Any = None  # a tqdm bar, once there is one

    def __call__(self, stage: str, done: int, total: int) -> None:
        if self._quiet:
            return
        if stage != self._stage:
            self._close()
            self._stage = stage
            if not sys.stderr.isatty():
                _complain(f"{stage} ...")
        if sys.stderr.isatty():
            self._draw(stage, done, total)

    def _draw(self, stage: str, done: int, total: int) -> None:
        from tqdm import tqdm

        if self._bar is None:
            plain = not (sys.stderr.encoding or "").lower().startswith("utf")
            self._bar = tqdm(
                desc=stage, total=total or None, file=sys.stderr, ascii=plain, mininterval=0.5, leave=False
            )
        self._bar.total = total or None
        self._bar.update(done - self._bar.n)

    def _close(self) -> None:
        if self._bar is not None:
            self._bar.close()
            self._bar = None

    def __enter__(self) -> _Bars:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._close()


# ---------------------------------------------------------------------------------------------------------------------
# Verbs


def verb_closeout(args: argparse.Namespace) -> int:
    """Do the whole job and print the answer."""
    _one_thread_each()
    from reconcile.closeout import closeout
    from reconcile.report.summary import close_out_lines

    with _Bars(args.quiet) as progress:
        close_out, folder, message = closeout(
            args.campaign,
            out=args.out,
            seed=args.seed,
            workers=args.workers,
            effort=args.effort,
            without=tuple(args.without),
            resume=args.resume,
            progress=progress,
        )
    _say(*close_out_lines(close_out, folder, message))
    return PROVISIONAL if close_out.status == "provisional" else DONE


def verb_measure(args: argparse.Namespace) -> int:
    """Read and measure only; print what was read and what was refused."""
    _one_thread_each()
    from tempfile import TemporaryDirectory

    from reconcile.campaign.files import check_output
    from reconcile.campaign.manifest import load
    from reconcile.gather import gather
    from reconcile.report.summary import gathered_lines
    from reconcile.report.write import write_gathered

    drawings = TemporaryDirectory(prefix="reconcile-", ignore_cleanup_errors=True)
    with _Bars(args.quiet) as progress, drawings as overlays:
        campaign = load(args.campaign)
        folder = args.out or _measured_folder(campaign.name)
        check_output(folder, campaign.folder)
        gathered = gather(campaign, workers=args.workers, progress=progress, overlays=Path(overlays))
        written = write_gathered(gathered, folder)
    _say(*gathered_lines(gathered, written))
    return DONE


def _measured_folder(name: str) -> Path:
    """Return the usual output folder, or one beside it where a close-out stands: that is not lost to a look at the readings."""
    folder = Path("reports") / name
    return folder.with_name(f"{name}-measured") if (folder / "results.json").exists() else folder


def verb_predict(args: argparse.Namespace) -> int:
    """Say what the model expects of shots not yet fired."""
    _one_thread_each()
    import numpy as np

    from reconcile.predict import predict_shots
    from reconcile.report.prediction import prediction_lines

    energies = np.array([args.energy] if args.energies is None else args.energies)
    predicted = predict_shots(args.campaign, energies, pulses=args.pulses, out=args.out, seed=args.seed)
    _say(
        *prediction_lines(predicted.prediction),
        "",
        *(f"note: {note}" for note in predicted.notes),
        *(f"written: {path.as_posix()}" for path in predicted.files),
    )
    return DONE


def verb_example(args: argparse.Namespace) -> int:
    """Write the invented example campaign into a new folder."""
    from reconcile.example import write_example

    write_example(args.campaign)
    _say(
        f"Wrote the example campaign into {args.campaign.as_posix()}.",
        f"Close it out: reconcile closeout {args.campaign.as_posix()}",
    )
    return DONE


def verb_verify(args: argparse.Namespace) -> int:
    """Recompute the checksums of a close-out and name what changed."""
    from reconcile.campaign.files import verify

    changed = verify(args.campaign)
    if not changed:
        _say(f"{args.campaign.as_posix()}: nothing has changed since it was written.")
        return DONE
    _say(f"{args.campaign.as_posix()} is not as it was written:", *(f"  {line}" for line in changed))
    return REFUSED


def _one_thread_each() -> None:
    """Keep linear algebra to one thread: sums in one order, so that one seed gives the same numbers on any number of cores."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS"):
        os.environ.setdefault(name, "1")


@dataclass(frozen=True, slots=True)
class Verb:
    """One word that the command line understands."""

    run: Callable[[argparse.Namespace], int]
    help: str
    operand: str  # what it works on, as the help names it
    operand_help: str
    add_options: Callable[[argparse.ArgumentParser], None] | None = None


def _closeout_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--resume", action="store_true", help="go on with a fit that was interrupted")
    parser.add_argument(
        "--effort",
        choices=("quick", "normal", "long"),
        default="normal",
        help="smallest effective sample size aimed at: 400, 1000 or 4000 (default: normal)",
    )
    parser.add_argument(
        "--without",
        metavar="KIND",
        action="append",
        default=[],
        type=_kind,
        help="leave out a kind of reading, or a kind of table with all that it yields; may be repeated",
    )


def _predict_options(parser: argparse.ArgumentParser) -> None:
    which = parser.add_mutually_exclusive_group(required=True)
    which.add_argument(
        "--energy", metavar="Q", type=_energy, help='logged energy of one pulse, with its unit, such as "20 uJ"'
    )
    which.add_argument(
        "--energies",
        metavar="FROM:TO:STEPS",
        type=_energies,
        help='so many energies, evenly spaced, both ends among them, such as "5 uJ:50 uJ:10"',
    )
    parser.add_argument(
        "--pulses", metavar="N", type=_whole(1), default=1, help="pulses that one place receives (default: 1)"
    )


CAMPAIGN_HELP = "a folder that holds campaign.toml, or that file"

VERBS: dict[str, Verb] = {
    "closeout": Verb(
        verb_closeout,
        "the whole job: read, measure, fit, judge, write the report",
        "CAMPAIGN",
        CAMPAIGN_HELP,
        _closeout_options,
    ),
    "measure": Verb(
        verb_measure, "read and measure only; say what was read, what was refused and why", "CAMPAIGN", CAMPAIGN_HELP
    ),
    "predict": Verb(
        verb_predict, "say what the model expects of a shot not yet fired", "CAMPAIGN", CAMPAIGN_HELP, _predict_options
    ),
    "verify": Verb(
        verb_verify, "say what changed in a close-out since it was written", "REPORT_DIR", "the folder of a close-out"
    ),
    "example": Verb(verb_example, "write the invented example campaign", "FOLDER", "a folder that does not exist yet"),
}


# ---------------------------------------------------------------------------------------------------------------------
# Parsing


def _whole(least: int) -> Callable[[str], int]:
    def whole(text: str) -> int:
        try:
            number = int(text)
        except ValueError:
            number = least - 1
        if number < least:
            raise argparse.ArgumentTypeError(f"{text!r} is not a whole number of {least} or more")
        return number

    return whole


def _energy(text: str) -> float:
    from reconcile.campaign.energies import parse_energy

    return _as_usage(lambda: parse_energy(text, "--energy"))


def _energies(text: str) -> tuple[float, ...]:
    from reconcile.campaign.energies import parse_energies

    return _as_usage(lambda: parse_energies(text, "--energies"))


def _as_usage(parse: Callable[[], _Parsed]) -> _Parsed:
    """Make of a refused word of the command line wrong usage."""
    try:
        return parse()
    except Refusal as refusal:
        raise argparse.ArgumentTypeError(refusal.reason) from None


def _kind(text: str) -> str:
    from reconcile.campaign.kinds import KINDS, TABLE_KINDS

    known = [*KINDS, *TABLE_KINDS]
    if text not in known:
        near = nearest(text, known)
        hint = f"the nearest one is {near}" if near else f"kinds are {', '.join(known)}"
        raise argparse.ArgumentTypeError(f"there is no kind {text!r}; {hint}")
    return text


def _common_options() -> _Parser:
    """Return the options that mean the same everywhere."""
    parser = _Parser(add_help=False, allow_abbrev=False)
    parser.add_argument("--out", metavar="DIR", type=Path, help="where to write (default: reports/<campaign name>)")
    parser.add_argument(
        "--seed", metavar="N", type=_whole(0), default=1, help="the same seed gives the same numbers (default: 1)"
    )
    parser.add_argument(
        "--workers",
        metavar="N",
        type=_whole(1),
        default=os.cpu_count() or 1,
        help="processes (default: the cores); never changes a number",
    )
    parser.add_argument("--quiet", action="store_true", help="no progress")
    parser.add_argument("--version", action="version", version=f"reconcile {__version__}")
    return parser


def _build_parser() -> _Parser:
    parser = _Parser(
        prog="reconcile",
        description="Close out a laser-ablation campaign: how much energy did each shot really absorb?",
        epilog=EXIT_STATUSES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"reconcile {__version__}")
    verbs = parser.add_subparsers(dest="verb", metavar="VERB", title="verbs")
    common = _common_options()
    for name, verb in VERBS.items():
        sub = verbs.add_parser(
            name,
            parents=[common],
            help=verb.help,
            description=verb.help[0].upper() + verb.help[1:] + ".",
            epilog=EXIT_STATUSES,
            formatter_class=argparse.RawDescriptionHelpFormatter,
            allow_abbrev=False,
        )
        sub.add_argument("campaign", metavar=verb.operand, type=Path, help=verb.operand_help)
        if verb.add_options is not None:
            verb.add_options(sub)
    return parser


def _parse(argv: Sequence[str]) -> argparse.Namespace:
    """Return the arguments; raise Usage, naming the nearest known word for an unknown one."""
    parser = _build_parser()
    if argv and not argv[0].startswith("-") and argv[0] not in VERBS:
        near = nearest(argv[0], VERBS)
        hint = f"did you mean {near}?" if near else f"verbs are {', '.join(VERBS)}."
        raise Usage(f"there is no verb {argv[0]!r}; {hint} See `reconcile --help`.")
    args, unknown = parser.parse_known_args(argv)
    if unknown:
        options = [option for option in unknown if option.startswith("-")]
        word = options[0].partition("=")[0] if options else unknown[0]
        near = nearest(word, _options_of(args.verb)) if options else None
        hint = f"; did you mean {near}? " if near else ". "
        raise Usage(f"{word!r} is not understood{hint}See `reconcile {args.verb or ''} --help`.".replace("  ", " "))
    if args.verb is None:
        raise Usage(f"a verb is missing; verbs are {', '.join(VERBS)}. See `reconcile --help`.")
    return args


def _options_of(verb: str | None) -> list[str]:
    parser = _common_options()
    if verb is not None and (add_options := VERBS[verb].add_options) is not None:
        add_options(parser)
    return ["--help", *(option for action in parser._actions for option in action.option_strings)]


# ---------------------------------------------------------------------------------------------------------------------


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command line and return its exit status."""
    _make_consoles_safe()
    try:
        args = _parse(sys.argv[1:] if argv is None else argv)
        return VERBS[args.verb].run(args)
    except SystemExit as stop:  # --help and --version
        return int(stop.code or 0)
    except Usage as wrong:
        _complain(f"reconcile: {wrong}")
        return USAGE
    except Refusal as refusal:
        _complain(
            f"reconcile: refused {refusal.place}",
            f"  found: {refusal.found}",
            f"  expected: {refusal.expected}",
            f"  what to do: {refusal.remedy}",
        )
        return REFUSED
    except BrokenPipeError:  # whoever read the output has left; the interpreter must not complain on closing it
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return REFUSED
    except OSError as error:
        where = error.filename if error.filename is not None else "a file"
        _complain(f"reconcile: {where}: {error.strerror or error}.")
        return REFUSED
    except KeyboardInterrupt:
        _complain("reconcile: interrupted. `reconcile closeout ... --resume` goes on with a fit that had begun.")
        return INTERRUPTED
