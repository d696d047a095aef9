# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
The command `prioritized-tracking VERB …`.

Exit codes: 0 pass, 1 a criterion failed, 2 bad input, 130 interrupted (what was finished is kept), 141 the
reader of the output left.
Results go to standard output, progress and errors to standard error. What a verb needs is imported when it
runs, so that `--help` is quick.

"""

from __future__ import annotations

import argparse
import io
import os
import sys
from collections.abc import Sequence

PROGRAM = "prioritized-tracking"
BAD_INPUT, INTERRUPTED = 2, 130
READER_LEFT = 141
"""What a shell reports for a program that SIGPIPE ended."""

LAWS = ("prioritized", "joint_impedance", "cartesian_impedance", "inverse_jacobian", "damped_inverse")

_EPILOG = "Exit code: 0 pass, 1 a criterion failed, 2 bad input, 130 interrupted (finished results are kept)."

_REHEARSE = """Run a stack in closed loop with a simulated arm: full dynamics, the stack's rate, the
deviations of its plant block. Writes summary.json, signals_LAW.npz and a copy of the stack to DIR."""

_COMPANION = """Compute the joint reference that agrees with a pose path of the stack, the whole path at once,
within the joint limits and through singularities. Writes a joints file: t and one column for each joint."""

_BENCH = """Measure the control law on this machine: one cycle by part, against a textbook version in NumPy,
the bare terms of the dynamics library and Cartesian impedance; branches, growth with joints and rows,
rehearsals, batches, memory, starting. Times are compared in turns, so their ratios mean more than the times.
Takes a minute; writes bench.json and bench.png to DIR."""


def main(arguments: Sequence[str] | None = None) -> int:
    """
    Run the command line and return its exit code.

    Parameters
    ----------
    arguments : sequence of str or None
        Without the program's name; None: those of the process.

    """
    from prioritized_tracking.errors import InputError

    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:  # closed by the caller; results go to files all the same
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115
    for stream in (sys.stdout, sys.stderr):
        # A file name of the user's or a unit sign may not exist in the terminal's encoding.
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")
    options = _parser().parse_args(arguments)
    for library in ("OPENBLAS", "OMP", "MKL"):
        # Matrices of an arm are too small to share among threads: starting them takes longer than the work.
        os.environ.setdefault(f"{library}_NUM_THREADS", "1")
    try:
        code: int = options.run(options)
        sys.stdout.flush()
        return code
    except InputError as error:
        print(f"{PROGRAM}: error: {error}", file=sys.stderr)
        return BAD_INPUT
    except BrokenPipeError:
        # The reader of our output (head, less) has left; keep Python from complaining while it shuts down.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return READER_LEFT
    except OSError as error:
        print(f"{PROGRAM}: error: {_system_error(error)}", file=sys.stderr)
        return BAD_INPUT
    except KeyboardInterrupt:
        print(f"{PROGRAM}: interrupted", file=sys.stderr)
        return INTERRUPTED


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog=PROGRAM,
        description="Prioritised multi-chart tracking for torque-controlled arms.",
        epilog=_EPILOG,
        allow_abbrev=False,
    )
    verbs = parser.add_subparsers(title="verbs", metavar="VERB", required=True)
    _add_rehearse(verbs)
    _add_companion(verbs)
    _add_bench(verbs)
    return parser


def _add_rehearse(verbs: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = verbs.add_parser(
        "rehearse",
        help="closed loop on the full dynamics of the simulated arm",
        description=_REHEARSE,
        epilog="The first law decides the verdict, the others are there to compare with. " + _EPILOG,
        allow_abbrev=False,
    )
    _add_stack(parser)
    parser.add_argument("--out", metavar="DIR", required=True, help="folder for the results")
    parser.add_argument(
        "--law",
        metavar="NAME",
        nargs="+",
        action="extend",
        default=[],
        help=f"laws to run in turn, repeatable: {', '.join(LAWS)}; default: the stack's own",
    )
    parser.add_argument(
        "--seconds",
        metavar="S",
        type=_positive,
        help="length of each run; default: the path and 1 s; an endless path twice; 5 s if nothing moves",
    )
    parser.add_argument(
        "--settle",
        metavar="S",
        type=_duration,
        help="errors and torque count from here on; default: 2 s, or half of a shorter run",
    )
    parser.set_defaults(run=_rehearse)


def _add_companion(verbs: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = verbs.add_parser(
        "companion",
        help="joint path that goes with a tool path, through singularities",
        description=_COMPANION,
        epilog=_EPILOG,
        allow_abbrev=False,
    )
    _add_stack(parser)
    parser.add_argument("--out", metavar="FILE.csv", required=True, help="joints file to write")
    parser.add_argument(
        "--channel",
        metavar="NAME",
        help="pose channel to accompany; default: the stack's only one from a file",
    )
    parser.set_defaults(run=_companion)


def _add_bench(verbs: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    parser = verbs.add_parser(
        "bench",
        help="how fast the control law is on this machine, and against what",
        description=_BENCH,
        epilog=_EPILOG,
        allow_abbrev=False,
    )
    _add_stack(parser, nargs="?")
    parser.add_argument(
        "--out", metavar="DIR", default="bench", help="folder for the results; default: bench"
    )
    parser.add_argument(
        "--seconds", metavar="S", type=_positive, help="length of each comparison; default: 3 s"
    )
    parser.add_argument(
        "--quick",
        action="store_true",
        help="see that everything runs, in seconds; its figures mean little",
    )
    parser.set_defaults(run=_bench)


def _add_stack(parser: argparse.ArgumentParser, nargs: str | None = None) -> None:
    ending = "" if nargs is None else "; default: that of the seven-axis demo"
    parser.add_argument(
        "stack", metavar="STACK.yaml", nargs=nargs, help=f"stack file (a ROS 2 parameter file){ending}"
    )
    parser.add_argument(
        "--set",
        metavar="KEY=VALUE",
        action="append",
        default=[],
        dest="overrides",
        help="change a key for this call, e.g. --set plant.seed=3; repeatable",
    )


def _duration(text: str) -> float:
    """
    Return a time in s: a finite number, at least 0.

    """
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not 0.0 <= value < float("inf"):
        raise argparse.ArgumentTypeError(f"expected a time in seconds, at least 0, got {text!r}")
    return value


def _positive(text: str) -> float:
    """
    Return a time in s: a finite number above 0.

    """
    if (value := _duration(text)) == 0.0:
        raise argparse.ArgumentTypeError(f"expected a time in seconds above 0, got {text!r}")
    return value


def _rehearse(options: argparse.Namespace) -> int:
    from prioritized_tracking.offline import rehearse_command

    return rehearse_command.run(
        options.stack,
        options.out,
        laws=options.law,
        known_laws=LAWS,
        seconds=options.seconds,
        settle=options.settle,
        overrides=options.overrides,
    )


def _companion(options: argparse.Namespace) -> int:
    from prioritized_tracking.offline import companion_command

    return companion_command.run(
        options.stack, options.out, channel=options.channel, overrides=options.overrides
    )


def _bench(options: argparse.Namespace) -> int:
    from prioritized_tracking.offline import bench_command

    return bench_command.run(
        options.stack,
        options.out,
        seconds=options.seconds,
        quick=options.quick,
        overrides=options.overrides,
    )


def _system_error(error: OSError) -> str:
    """
    Return what the operating system refused (disk full, permission) in one line.

    """
    reason = error.strerror or str(error) or type(error).__name__
    return f"{error.filename}: {reason}" if error.filename else reason
