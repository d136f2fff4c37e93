"""The command: demo, audit, run, resume, report."""

import argparse
import dataclasses
import os
import shlex
import signal
import sys
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from fellwalk import __version__
from fellwalk.audit import audit
from fellwalk.cli_json import audit_document, print_document, result_document
from fellwalk.cli_settings import read_settings
from fellwalk.demo.show import show
from fellwalk.errors import ArgumentError, FellwalkError
from fellwalk.interrupts import watching
from fellwalk.model import find_model
from fellwalk.motions import MOTIONS, PATHS, Jittered, Lagrangian, Motion, NoUTurn, Path
from fellwalk.result import Result, load
from fellwalk.run import resume, run

__all__ = ["main"]


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command.

    The exit status is 0 when all is done (or `--seconds` have passed), 1 after an error, 2 for wrong usage, 130 when
    Ctrl-C and 143 when SIGTERM ended the run early.
    """
    typed = list(sys.argv[1:] if arguments is None else arguments)
    parser, make = _parser()
    options = parser.parse_args(typed)
    try:
        options = _with_file(options, typed, parser, make)
        with watching(signal.SIGTERM):
            status = int(options.action(options))
        sys.stdout.flush()
        return status
    except KeyboardInterrupt:
        print("fellwalk: interrupted; the blocks finished before are safe in the record", file=sys.stderr)
        return 130
    except BrokenPipeError:
        # whoever read the output has enough; Python would complain once more when it closes stdout
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1
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


def _with_file(options: argparse.Namespace, typed: list[str], parser: argparse.ArgumentParser,
               make: argparse.ArgumentParser) -> argparse.Namespace:
    """Options again, with a settings file's values in the place of the defaults of `make`, the parser of `run`."""
    if options.command == "run":
        given = read_settings(options.settings, make) if options.settings else {}
        if given:
            make.set_defaults(**given)
            options = parser.parse_args(typed)
        missing = [name for name, there in (("MODEL", options.model), ("--record", options.record)) if not there]
        if missing:
            make.error(f"the following arguments are required: {', '.join(missing)}")
        options.notes = {"command": shlex.join(["fellwalk", *typed])}
        if given:
            options.notes["settings file"] = options.settings
            options.notes["settings"] = {key: np.asarray(value).tolist() for key, value in given.items()}
    return options


def _tell(error: BaseException, before: str = "") -> None:
    print(f"fellwalk: {before}{error}", file=sys.stderr)
    for note in getattr(error, "__notes__", []):
        print(f"  {note}", file=sys.stderr)


class _Help(argparse.HelpFormatter):
    """Tells defaults, where there are any."""

    def _get_help_string(self, action: argparse.Action) -> str | None:
        told = action.default not in (None, False, argparse.SUPPRESS)
        return f"{action.help} (default: %(default)s)" if told else action.help


def _parser() -> tuple[argparse.ArgumentParser, argparse.ArgumentParser]:
    """The parser of the command, and that of `run`."""
    parser = argparse.ArgumentParser(
        prog="fellwalk", allow_abbrev=False, formatter_class=argparse.RawDescriptionHelpFormatter,
        description="Draws from a density given by its logarithm and gradient, with a record of how\nthey were made.",
        epilog="The usual course, for a density in model.py:\n"
               "  fellwalk audit model.py:density                      is the gradient right?\n"
               "  fellwalk run model.py:density --record walk.fell     draws, table, verdict\n"
               "  fellwalk report walk.fell                            and a page with figures\n"
               "`fellwalk COMMAND --help` tells what a command takes.")
    parser.add_argument("--version", action="version", version=f"fellwalk {__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND", dest="command")

    demo = commands.add_parser("demo", help="the whole job on an invented data set, in half a minute",
                               description="Run the whole job on an invented data set: a density, four chains, a "
                                           "record, the table and the verdict.", allow_abbrev=False)
    demo.add_argument("--folder", default=".", help="where the record goes (default: here)")
    demo.set_defaults(action=lambda options: show(options.folder))

    make = commands.add_parser(
        "run", help="draw from a model", formatter_class=_Help, allow_abbrev=False,
        usage="fellwalk run MODEL --record FILE [options]",
        description="Settle chains, keep draws, write the record, print the table and the verdict.")
    add = make.add_argument
    add("model", metavar="MODEL", nargs="?",
        help="module:object or file.py:object; the object is a fellwalk.Density or a function without arguments that "
             "makes one")
    add("--record", metavar="FILE", help="file to write every finished block to")
    add("--settings", metavar="TOML", help="a TOML file of settings, named as these options are without the dashes in "
                                           "front, also model; an option typed here counts before the file")
    add("--replace", action="store_true", help="overwrite an old record of that name")
    add("--start", metavar="X", help="numbers separated by commas, or a .npy file of one point or one a chain; left "
                                     "out: the model's own start")
    add("--chains", type=_whole(1), metavar="N", default=4, help="chains, each from its own start")
    add("--keep", type=_whole(1), metavar="N", default=1000, help="draws kept in each chain")
    add("--no-audit", action="store_true", help="do not look at the gradient first")
    add("--settle", type=_settle, metavar="N", default="auto", help='settling transitions, or "auto"')
    add("--seed", type=_whole(0), metavar="N", help="a whole number; left out: one is drawn and recorded")
    add("--motion", choices=[*sorted(MOTIONS), "auto"],
        help="what moves a point; auto: a trial finds motion and path. Left out: auto, or leapfrog where an option "
             "says what a trial would find")
    add("--bend", type=float, metavar="B", default=Lagrangian.bend, help="lagrangian motion: typical L - 1")
    add("--curvature", choices=["surrogate", "difference", "product"], default="surrogate",
        help="lagrangian motion: where Hessian products come from")
    add("--scheme", choices=["split", "semi-explicit"], default="split",
        help="lagrangian motion: the integrator")
    add("--halvings", type=_whole(0), metavar="N", default=0, help="a step may be done as up to 2^N smaller ones")
    add("--path", choices=sorted(PATHS), help="how far it is moved; left out: no-u-turn, without a trial")
    add("--steps", type=_steps, metavar="N", default=Jittered.steps,
        help='jittered path: steps drawn from 1..N, or "auto": settling finds N')
    add("--doublings", type=_whole(1), metavar="N", default=NoUTurn.doublings,
        help="no-u-turn path: at most 2^N steps")
    add("--acceptance", type=float, metavar="RATE", default=0.8, help="rate that settling aims the step size at")
    add("--step-size", type=float, metavar="SIZE", help="where settling starts from, in units of the base metric")
    add("--product-cost", type=float, metavar="C", default=1.0,
        help="gradients that a Hessian product counts as in a trial")
    _common(make)
    make.set_defaults(action=_run)

    again = commands.add_parser("resume", help="go on with a recorded run, or add draws to it",
                                description="Go on with a recorded run, or add draws to it; the draws are those of a "
                                            "run never interrupted.", allow_abbrev=False)
    again.add_argument("record", metavar="FILE", help="the record of the run")
    again.add_argument("--model", help="as for run; left out: the model that the record names")
    again.add_argument("--keep", type=_whole(1), metavar="N",
                       help="draws a chain in all, when more are wanted than at first")
    _common(again)
    again.set_defaults(action=_resume)

    look = commands.add_parser("audit", help="look for mistakes in a model before it runs", allow_abbrev=False,
                               description="Compare gradient and Hessian product with differences, see what happens "
                                           "far out, time the calls. The exit status is 1 when a mistake is found.")
    look.add_argument("model", metavar="MODEL", help="as for run")
    look.add_argument("--start", help="numbers separated by commas: the point to look at; left out: the model's own")
    look.add_argument("--seed", type=_whole(0), metavar="N", default=0, help="of the other points, which are random")
    look.set_defaults(action=_audit)

    report = commands.add_parser(
        "report", help="the table, the verdict and a page with figures of a record", allow_abbrev=False,
        description="Print the table and the verdict of a record, also while it is written, and make a page of it: one "
                    "HTML file with figures, costs and settings. A part of the page needs the model that the record "
                    "names, which is imported and called for it.")
    report.add_argument("record", metavar="FILE", help="the record of a run")
    report.add_argument("-o", "--output", metavar="PAGE", help="where the page goes; left out: beside the record, with "
                                                               "the ending .html")
    report.add_argument("--no-page", action="store_true", help="only print")
    report.add_argument("--model", help="as for run; left out: the model that the record names")
    report.add_argument("--no-model", action="store_true", help="leave the model out: run none of its code")
    report.add_argument("--raw", action="store_true", help="print the numbers of the draws alone, not sharpened by the "
                                                           "gradients at them; the page has both")
    report.add_argument("--all", action="store_true", help="print every parameter, however many there are")
    report.add_argument("--salvage", action="store_true", help="of a damaged record, what stands before the damage")
    report.set_defaults(action=_report)
    for command in (make, again, look, report):
        command.add_argument("--json", action="store_true", help="print one JSON document in place of text")
    for command in (demo, make, again, look, report):
        command.add_argument("--debug", action="store_true", help="show the Python traceback of an error")
    return parser, make


def _common(command: argparse.ArgumentParser) -> None:
    command.add_argument("--seconds", type=float, metavar="S",
                         help="stop at a block edge after so long; resume goes on")
    command.add_argument("--progress", choices=["bars", "lines", "off"], help="left out: bars for a person, else lines")
    command.add_argument("--executor", choices=["here", "threads", "processes"],
                         help="who makes the blocks; left out: what suits the model")


def _whole(least: int) -> Callable[[str], int]:
    def convert(text: str) -> int:
        try:
            number = int(text)
        except ValueError:
            raise argparse.ArgumentTypeError(f"it must be a whole number, not {text!r}") from None
        if number < least:
            raise argparse.ArgumentTypeError(f"it must be at least {least}, not {number}")
        return number

    return convert


def _settle(text: str) -> int | str:
    return text if text == "auto" else _whole(0)(text)


def _steps(text: str) -> int | str:
    return text if text == "auto" else _whole(1)(text)


def _start(text: str | np.ndarray | None) -> np.ndarray | None:
    if text is None or isinstance(text, np.ndarray):  # a settings file gives numbers as they are
        return text
    if text.endswith(".npy"):
        try:
            return np.asarray(np.load(text, allow_pickle=False))
        except (OSError, ValueError) as error:
            raise ArgumentError(f"the starting points cannot be read from {text}: {error}") from None
    try:
        return np.array([float(part) for part in text.split(",")])
    except ValueError:
        raise ArgumentError(f"--start must be numbers separated by commas, or a .npy file; it is {text!r}") from None


def _moved(options: argparse.Namespace) -> tuple[Motion | str, Path | None]:
    """Motion and path. Left out, they are for a trial to find, unless another option says something of them."""
    motion, path = options.motion, None if options.path is None else _made(PATHS[options.path], options)
    usual = {"halvings": 0, "steps": Jittered.steps, "doublings": NoUTurn.doublings, "bend": Lagrangian.bend,
             "curvature": "surrogate", "scheme": "split"}
    typed = [name for name, value in usual.items() if getattr(options, name) != value]
    if motion is None:
        said = path or options.step_size is not None or options.settle != "auto"
        motion = "leapfrog" if said or {"halvings", "steps", "doublings"}.intersection(typed) else "auto"
    if motion == "auto":
        if typed and path is None:  # with a path, run says that it is too much
            raise ArgumentError(f"a trial of motions finds what --{typed[0]} would fix; leave it out, or say with "
                                "--motion which motion it is for")
        return motion, path
    return _made(MOTIONS[motion], options), path or _made(NoUTurn, options)


def _made(kind: Any, options: argparse.Namespace) -> Any:
    """A motion or a path from the options named as its fields; a field without an option keeps its default."""
    there = [field.name for field in dataclasses.fields(kind) if hasattr(options, field.name)]
    return kind(**{name: getattr(options, name) for name in there})


def _run(options: argparse.Namespace) -> int:
    motion, path = _moved(options)
    result = run(
        find_model(options.model), _start(options.start), motion=motion, path=path, product_cost=options.product_cost,
        settle=options.settle, keep=options.keep, chains=options.chains, seed=options.seed,
        acceptance=options.acceptance, step_size=options.step_size, executor=options.executor,
        record=options.record, replace=options.replace, progress=options.progress or True,
        seconds=options.seconds, audit=not options.no_audit, notes=options.notes)
    return _finish(result, options)


def _resume(options: argparse.Namespace) -> int:
    density = find_model(options.model) if options.model else None
    result = resume(options.record, density, keep=options.keep, executor=options.executor,
                    progress=options.progress or True, seconds=options.seconds)
    return _finish(result, options)


def _finish(result: Result, options: argparse.Namespace) -> int:
    record = shlex.quote(options.record)
    more = result.judgement.verdict.draws_needed if result.finished and result.judged else None
    following = f"fellwalk report {record}"
    if not result.finished:
        following = f"fellwalk resume {record}"
    elif more:
        following = f"fellwalk resume {record} --keep {more}"
    if options.json:
        print_document(result_document(result, following))
    else:
        print(result)
        ready = result.finished and not more
        print(f"\nNext: {following}{f', or fellwalk.load({options.record!r}) in Python' if ready else ''}")
    return {"Ctrl-C": 130, "SIGTERM": 143}.get(result.ended, 0)


def _audit(options: argparse.Namespace) -> int:
    found = audit(find_model(options.model), _start(options.start), seed=options.seed)
    if options.json:
        print_document(audit_document(found))
    else:
        print(found)
    return 0 if found.ok else 1


def _report(options: argparse.Namespace) -> int:
    if options.no_page and options.output:
        raise ArgumentError("--no-page and -o contradict each other: leave one of them out")
    result = load(options.record, salvage=options.salvage)
    wanted = bool(options.output) or not (options.no_page or options.json)
    page = (options.output or f"{os.path.splitext(options.record)[0]}.html") if wanted else ""
    if not options.json:
        judgement = result.judgement if result.judged else None
        if judgement and options.raw:
            judgement = judgement.raw
        print(result.heading() + (f"\n\n{judgement}" if judgement else ""))
        if options.all and judgement:
            print(f"\n{judgement.table(all=True)}")
        sys.stdout.flush()
    if page and not _write_page(result, page, options):
        page = ""
    if options.json:
        print_document(result_document(result, page=page))
    elif page:
        print(f"\nPage: {page}")
    return 0


def _write_page(result: Result, page: str, options: argparse.Namespace) -> bool:
    """Write the page; where it was not asked for by name, a page that cannot be made is no error."""
    density = find_model(options.model) if options.model else None
    try:
        from fellwalk import report  # matplotlib takes a second to load, so only where a page is made
    except ArgumentError as error:
        if options.output:
            raise
        print(f"fellwalk: no page: {error}", file=sys.stderr)
        return False
    report.write(result, page, density, find=not options.no_model, replace=bool(options.output))
    return True
