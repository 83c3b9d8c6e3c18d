"""The command line: the same judgements without a page.

    python -m lagscape analyse CASE.json            the standing and its margins, JSON on standard output
    python -m lagscape measure FILE --signal NAME   cycles of breathing or a tremor's peak, JSON on standard output
    python -m lagscape cohort CASES.csv             one row in, one row out, CSV on standard output

`-` reads standard input. An error is one sentence on standard error and exit code 2. Of a cohort, a row that cannot be read has its
sentence in the column `error`; the exit code is 2 only where no row could be.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import sys
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, NoReturn

from lagscape.errors import CaseFormatError, InvalidInputError, RecordingError
from lagscape.handover.plain_values import plain
from lagscape.version import VERSION

if TYPE_CHECKING:
    from lagscape.recordings.breathing_result import BreathingMeasurement

__all__ = ["CAUTION", "main"]

CAUTION = "Decision support for qualified staff. Not a medical device."

_ENDED_BY_USER = 130
"""The shell's own code for a program ended from the keyboard."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; the exit code. `arguments` are those after the program's name, those of the process if None."""
    try:
        options = _parser().parse_args(arguments)
        code = options.run(options)
        sys.stdout.flush()
        return code
    except BrokenPipeError:
        # The reader has left, as `head` does. Python would complain again when it closes standard output.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except KeyboardInterrupt:
        return _ENDED_BY_USER
    except (CaseFormatError, InvalidInputError, RecordingError) as error:
        return _failed(str(error))
    except UnicodeDecodeError:
        return _failed("The file is not UTF-8 text.")
    except OSError as error:
        return _failed(f"{error.filename or 'The file'} cannot be read: {error.strerror or error}.")


class _Parser(argparse.ArgumentParser):
    def error(self, message: str) -> NoReturn:
        self.exit(2, f"{self.prog}: {message}; try --help.\n")


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(
        prog="lagscape",
        description="Judges delayed negative-feedback loops: waxing and waning breathing, shaking limbs.",
        epilog=CAUTION + " Local protocols and licensed practice decide.",
    )
    parser.add_argument("--version", action="version", version=f"lagscape {VERSION}")
    commands = parser.add_subparsers(required=True, metavar="COMMAND")

    analyse = commands.add_parser("analyse", help="judge one case", description="Judge one case; JSON on standard output.")
    analyse.add_argument("case", metavar="CASE.json", help="a case file, or - for standard input")
    analyse.set_defaults(run=_analyse)

    measure = commands.add_parser("measure", help="measure a recording", description="Measure one signal; JSON on standard output.")
    measure.add_argument("file", metavar="FILE", help="a recording: CSV or EDF")
    measure.add_argument("--signal", required=True, action="append", metavar="NAME", help="the channel or column; for tremor, once an axis")
    measure.add_argument("--kind", choices=("breathing", "tremor"), default="breathing", help="what is looked for (breathing)")
    measure.add_argument("--window", nargs=2, type=_seconds, metavar=("START", "END"), help="seconds from the start (everything)")
    measure.add_argument("--sampling-frequency", type=_seconds, metavar="HZ", help="for a table without a time column")
    measure.add_argument("--breaths", metavar="FILE.csv", help="also write every single breath to this file")
    measure.set_defaults(run=_measure)

    cohort = commands.add_parser("cohort", help="judge a table of cases", description="Judge each row of a table; CSV on standard output.")
    cohort.add_argument("cases", metavar="CASES.csv", help="a table whose columns are numbers by name, or - for standard input")
    cohort.set_defaults(run=_cohort)
    return parser


def _analyse(options: argparse.Namespace) -> int:
    from lagscape.case.case_file import LARGEST_FILE_BYTES, case_from_json, read_case_file
    from lagscape.questions.levers import check_lever
    from lagscape.questions.standing import analyse

    if options.case == "-":
        case = case_from_json(sys.stdin.buffer.read(LARGEST_FILE_BYTES + 1), check_lever)
    else:
        case = read_case_file(options.case, check_lever)
    _print_json(analyse(case).to_json())
    return 0


def _measure(options: argparse.Namespace) -> int:
    from lagscape.recordings.reading import read_recording

    if options.kind == "tremor" and options.breaths:
        raise InvalidInputError("--breaths writes the breaths of a breathing signal; a tremor has none.")
    if options.kind == "breathing" and len(options.signal) > 1:
        raise InvalidInputError(f"Breathing is measured on one signal; got {len(options.signal)}.")
    recording = read_recording(options.file, sampling_frequency_hz=options.sampling_frequency)
    window = tuple(options.window) if options.window else None
    notes = tuple(str(note) for note in recording.notes)
    if options.kind == "tremor":
        from lagscape.handover.measurement import tremor_document
        from lagscape.recordings.tremor import measure_tremor

        _print_json(tremor_document(measure_tremor(recording, options.signal, window=window), notes))
    else:
        from lagscape.handover.measurement import breathing_document
        from lagscape.recordings.breathing import measure_breathing

        measured = measure_breathing(recording, options.signal[0], window=window)
        if options.breaths:
            _write_breaths(options.breaths, measured)
        _print_json(breathing_document(measured, notes))
    return 0


def _write_breaths(path: str, measured: BreathingMeasurement) -> None:
    from lagscape.handover.table import breaths_csv

    text = breaths_csv(measured)
    try:
        with open(path, "w", encoding="utf-8", newline="") as file:
            file.write(text)
    except OSError as error:
        raise InvalidInputError(f"{path} cannot be written: {error.strerror or error}.") from error


def _cohort(options: argparse.Namespace) -> int:
    from lagscape.cohort import analysed_rows, read_cohort, write_cohort
    from lagscape.questions.standing import analyse

    with open(0 if options.cases == "-" else options.cases, encoding="utf-8-sig", newline="", closefd=options.cases != "-") as source:
        rows = analysed_rows(read_cohort(source), lambda case: plain(analyse(case).to_json()))
        count, failed = write_cohort(rows, sys.stdout)
    if failed and failed == count:
        return _failed("No row of the cohort could be read; the column error says why for each.")
    return 0


def _print_json(value: Any) -> None:
    print(json.dumps(plain(value), indent=2, allow_nan=False))


def _failed(sentence: str) -> int:
    print(f"lagscape: {sentence}", file=sys.stderr)
    return 2


def _seconds(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value) or value < 0.0:
        raise argparse.ArgumentTypeError(f"must be a number from 0 up, got {text!r}")
    return value
