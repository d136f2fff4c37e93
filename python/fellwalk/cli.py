"""The command: demo, run, resume, report."""

import argparse
import signal
import sys
from collections.abc import Sequence

import numpy as np

from fellwalk import __version__
from fellwalk import run as run_function
from fellwalk.demo.show import show
from fellwalk.errors import ArgumentError, FellwalkError
from fellwalk.model import find_model
from fellwalk.motions import MOTIONS, PATHS, Jittered, Lagrangian, Leapfrog, Motion, NoUTurn, Path
from fellwalk.result import Result, load
from fellwalk.run import extra_signals, resume

__all__ = ["main"]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; the exit status is 0, 1 after an error, 2 for wrong usage, 130 after a second Ctrl-C."""
    options = _parser().parse_args(arguments)
    if signal.SIGTERM not in extra_signals:
        extra_signals.append(signal.SIGTERM)
    try:
        return options.action(options)
    except KeyboardInterrupt:
        print("fellwalk: interrupted; what was finished before is safe", file=sys.stderr)
        return 130
    except FellwalkError as error:
        if options.debug:
            raise
        _tell(error)
        return 1
    except Exception as error:
        if options.debug:
            raise
        _tell(error, f"{type(error).__name__} in the model: ")
        print("  --debug shows where", file=sys.stderr)
        return 1


def _tell(error: BaseException, before: str = "") -> None:
    print(f"fellwalk: {before}{error}", file=sys.stderr)
    for note in getattr(error, "__notes__", []):
        print(f"  {note}", file=sys.stderr)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="fellwalk",
        description="Draws from a density given by its logarithm and gradient, with a record of how they were made.")
    parser.add_argument("--version", action="version", version=f"fellwalk {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    demo = commands.add_parser("demo", help="the whole job on an invented data set, in half a minute")
    demo.add_argument("--folder", default=".", help="where the record goes (default: here)")
    demo.set_defaults(action=lambda options: show(options.folder))

    make = commands.add_parser(
        "run", help="draw from a model", formatter_class=argparse.ArgumentDefaultsHelpFormatter,
        description="Settle chains, keep draws, write the record, print the table and the verdict.")
    make.add_argument("model", help="module:object or file.py:object, a fellwalk.Density or a function that makes one")
    make.add_argument("--record", required=True, help="file to write every finished block to")
    make.add_argument("--replace", action="store_true", help="overwrite an old record of that name")
    make.add_argument("--start", help="numbers separated by commas, or a .npy file of one point or one a chain; left "
                                      "out: the model's own start")
    make.add_argument("--chains", type=int, default=4)
    make.add_argument("--keep", type=int, default=1000, help="draws kept in each chain")
    make.add_argument("--settle", default="auto", help='settling transitions, or "auto"')
    make.add_argument("--seed", type=int, help="a whole number; left out: one is drawn and recorded")
    make.add_argument("--motion", choices=sorted(MOTIONS), default="leapfrog")
    make.add_argument("--bend", type=float, default=Lagrangian.bend, help="lagrangian motion: typical L - 1")
    make.add_argument("--curvature", choices=["surrogate", "difference", "product"], default="surrogate")
    make.add_argument("--scheme", choices=["split", "semi-explicit"], default="split")
    make.add_argument("--halvings", type=int, default=0, help="a step may be done as up to 2^HALVINGS smaller ones")
    make.add_argument("--path", choices=sorted(PATHS), default="no-u-turn")
    make.add_argument("--steps", type=int, default=Jittered.steps, help="jittered path: steps drawn from 1..STEPS")
    make.add_argument("--doublings", type=int, default=NoUTurn.doublings, help="no-u-turn path: at most 2^DOUBLINGS steps")
    make.add_argument("--acceptance", type=float, default=0.8, help="rate that settling aims the step size at")
    make.add_argument("--step-size", type=float, help="where settling starts from, in units of the base metric")
    _common(make)
    make.set_defaults(action=_run)

    again = commands.add_parser("resume", help="go on with a recorded run, or add draws to it",
                                formatter_class=argparse.ArgumentDefaultsHelpFormatter)
    again.add_argument("record")
    again.add_argument("--model", help="left out: the model that the record names")
    again.add_argument("--keep", type=int, help="draws a chain in all, when more are wanted than at first")
    _common(again)
    again.set_defaults(action=_resume)

    report = commands.add_parser("report", help="print the table and the verdict of a record")
    report.add_argument("record")
    report.add_argument("--all", action="store_true", help="every parameter, however many there are")
    report.add_argument("--salvage", action="store_true", help="of a damaged record, what stands before the damage")
    report.set_defaults(action=_report)
    for command in (demo, make, again, report):
        command.add_argument("--debug", action="store_true", help="show the Python traceback of an error")
    return parser


def _common(command: argparse.ArgumentParser) -> None:
    command.add_argument("--seconds", type=float, help="stop at a block edge after so long; resume goes on")
    command.add_argument("--progress", choices=["bars", "lines", "off"], help="left out: bars for a person, else lines")
    command.add_argument("--executor", choices=["here", "threads"], help="left out: threads for compiled densities")


def _start(text: str | None) -> np.ndarray | None:
    if text is None:
        return None
    if text.endswith(".npy"):
        try:
            return np.load(text, allow_pickle=False)
        except (OSError, ValueError) as error:
            raise ArgumentError(f"the starting points cannot be read from {text}: {error}") from None
    try:
        return np.array([float(part) for part in text.split(",")])
    except ValueError:
        raise ArgumentError(f"--start must be numbers separated by commas, or a .npy file; it is {text!r}") from None


def _motion(options: argparse.Namespace) -> Motion:
    if options.motion == "leapfrog":
        return Leapfrog(halvings=options.halvings)
    return Lagrangian(bend=options.bend, curvature=options.curvature, scheme=options.scheme, halvings=options.halvings)


def _path(options: argparse.Namespace) -> Path:
    return Jittered(options.steps) if options.path == "jittered" else NoUTurn(options.doublings)


def _run(options: argparse.Namespace) -> int:
    settle = options.settle if options.settle == "auto" or not options.settle.isdigit() else int(options.settle)
    result = run_function(
        find_model(options.model), _start(options.start), motion=_motion(options), path=_path(options), settle=settle,
        keep=options.keep, chains=options.chains, seed=options.seed, acceptance=options.acceptance,
        step_size=options.step_size, executor=options.executor, record=options.record, replace=options.replace,
        progress=options.progress or True, seconds=options.seconds)
    return _finish(result, options.record)


def _resume(options: argparse.Namespace) -> int:
    name = options.model or load(options.record).plan["model"]
    if not name:
        raise ArgumentError(f"{options.record} does not name its model (it was made from Python); give --model")
    result = resume(options.record, find_model(name), keep=options.keep, executor=options.executor,
                    progress=options.progress or True, seconds=options.seconds)
    return _finish(result, options.record)


def _finish(result: Result, record: str) -> int:
    print(result)
    more = result.judgement.verdict.draws_needed if result.finished else None
    if not result.finished:
        print(f"\nNext: fellwalk resume {record}")
    elif more:
        print(f"\nNext: fellwalk resume {record} --keep {more}")
    else:
        print(f"\nNext: fellwalk report {record}, or fellwalk.load({record!r}) in Python")
    return 0


def _report(options: argparse.Namespace) -> int:
    result = load(options.record, salvage=options.salvage)
    print(result)
    if options.all:
        print(f"\n{result.judgement.table(all=True)}")
    return 0
