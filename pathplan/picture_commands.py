"""Commands that make pictures: report, watch, figure. Arguments in, a call into the library, its answer shown."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pathplan.errors import InputError

if TYPE_CHECKING:
    from pathplan.auditing import Audit
    from pathplan.planning import Plan
    from pathplan.report.gather import Picture
    from pathplan.report.judged import Judged
    from pathplan.report.progress import Progress
    from pathplan.task import Task

__all__ = ["FIGURES", "Shell", "add_picture_commands"]

FIGURES = ("joints", "position", "velocity", "acceleration", "jerk", "torque", "tool", "pacing", "audit", "arm")
PAGE_PORT = 8571
COARSE, FINE = 600, 2000  # half the points of a line, on a page and in a figure

REPORT = """\
Write a report to sign: one HTML file that needs nothing else, with verdict, audit, plots, the arm and its
path to turn and play, what would buy time, inputs with their hashes. Opens from disk, prints to a PDF."""
REPORT_EXAMPLES = """\
examples:
  pathplan report examples/glazer6-pick-and-place.toml
      plan the task and write glazer6-pick-and-place.html
  pathplan report pick.toml --no-savings -o out/pick.html
      without what would buy time, which takes somewhat longer than planning the task
  pathplan report pick.csv --arm robots/glazer6.toml --tool cup
      of a table, judged against an arm

"""
WATCH = """\
Show a task on a page beside the editor: planned again whenever the task, its arm or a file that it reads is
saved, and held against the plan before. The page is served to this machine only."""
WATCH_EXAMPLES = """\
examples:
  pathplan watch pick.toml
      then open the address that it tells; Ctrl-C ends it, with exit status 0
  pathplan watch pick.toml --port 9000 --reduced-speed

"""
FIGURE = """\
Draw one picture of a motion into a file: .png, .svg or .pdf."""
FIGURE_EXAMPLES = """\
examples:
  pathplan figure pick.toml
      every quantity of every joint, as pick-joints.png
  pathplan figure pick.toml --kind velocity -o velocity.pdf
  pathplan figure pick.toml --kind arm --at "1.2 s" -o arm.svg
  pathplan figure pick.csv --arm robots/glazer6.toml --kind jerk

"""

_SAVINGS = 3  # changes that a report tells of: as many again would take as long again


@dataclass(frozen=True)
class Shell:
    """What these commands use of the command line around them."""

    command: Callable[..., Any]  # name, run, about, examples, summary -> its parser
    planning_options: Callable[[Any], object]
    arm_options: Callable[[Any], None]
    screen_options: Callable[[Any], None]
    task: Callable[[argparse.Namespace], Task]
    is_table: Callable[[argparse.Namespace], bool]
    judged: Callable[[argparse.Namespace], Judged]
    check_rows: Callable[[Plan, str], None]
    show: Callable[[str], None]
    show_json: Callable[[Mapping[str, Any]], None]
    status: Callable[[str, str, str], int]


def add_picture_commands(shell: Shell) -> None:
    """Add the three commands to the command line."""
    about = "task (.toml), or table (.csv, .npz)"
    report = shell.command("report", _with(shell, _report), REPORT, REPORT_EXAMPLES, "write a report to sign")
    report.add_argument("file", metavar="TASK|TABLE", help=about)
    report.add_argument("-o", dest="output", metavar="FILE", help="file to write (.html)")
    report.add_argument("--no-savings", action="store_true", help="leave out what would buy time")
    _drawing_options(shell, report)

    watch = shell.command("watch", _with(shell, _watch), WATCH, WATCH_EXAMPLES, "a live page of a task")
    watch.add_argument("file", metavar="TASK", help="task file (.toml)")
    watch.add_argument("--port", type=int, default=PAGE_PORT, metavar="N",
                       help=f"port of the page, 0 for any that is free (default {PAGE_PORT})")  # fmt: skip
    watch.add_argument("--address", default="127.0.0.1", metavar="ADDRESS",
                       help="loopback address to serve on: 127.0.0.1 (default), ::1 or localhost")  # fmt: skip
    shell.planning_options(watch)

    figure = shell.command("figure", _with(shell, _figure), FIGURE, FIGURE_EXAMPLES, "draw a picture into a file")
    figure.add_argument("file", metavar="TASK|TABLE", help=about)
    figure.add_argument("--kind", choices=FIGURES, default="joints", metavar="KIND",
                        help=f"what to draw: {', '.join(FIGURES)} (default joints)")  # fmt: skip
    figure.add_argument("-o", dest="output", metavar="FILE", action="append", default=[],
                        help="file to write (.png, .svg or .pdf); may be repeated")  # fmt: skip
    figure.add_argument("--at", metavar="TIME", help='of kind arm: when to show it, "1.2 s" (default the start)')
    _drawing_options(shell, figure)


def _drawing_options(shell: Shell, parser: Any) -> None:
    shell.planning_options(parser)
    shell.arm_options(parser)
    group = parser.add_argument_group("writing")
    group.add_argument("--overwrite", action="store_true",
                       help="replace a file even if it is no earlier picture of the same task")  # fmt: skip
    shell.screen_options(parser)


def _with(shell: Shell, run: Callable[[Shell, argparse.Namespace], int]) -> Callable[[argparse.Namespace], int]:
    return lambda args: run(shell, args)


def _report(shell: Shell, args: argparse.Namespace) -> int:
    from pathplan.report.files import PAGES, save_page
    from pathplan.report.html import report_html
    from pathplan.report.progress import Progress

    file = Path(args.output or f"{Path(args.file).stem}.html")
    with Progress(sys.stderr, quiet=_silent(shell, args)) as tell:
        picture, breaks = _picture(shell, args, [file], PAGES, tell, buckets=COARSE)
        savings = None
        if picture.plan is not None and not args.no_savings:
            tell("savings", 0, 1)
            savings = picture.plan.savings(top=_SAVINGS)
        tell("report", 0, 1)
        save_page(report_html(picture, savings), file)
    return _tell(shell, args, picture, breaks, [file])


def _figure(shell: Shell, args: argparse.Namespace) -> int:
    from pathplan.arguments import quantity
    from pathplan.report.files import DRAWINGS, note_of
    from pathplan.report.progress import Progress

    if args.at is not None and args.kind != "arm":
        raise InputError("argument --at: only with --kind arm (see pathplan figure --help)")
    files = [Path(name) for name in args.output or [f"{Path(args.file).stem}-{args.kind}.png"]]
    time = quantity(args.at, "time", "--at")
    with Progress(sys.stderr, quiet=_silent(shell, args)) as tell:
        picture, breaks = _picture(shell, args, files, DRAWINGS, tell, buckets=FINE)
        tell("drawing", 0, 1)
        from pathplan.report import figures  # takes matplotlib along, which nothing before it needs

        options: dict[str, Any] = {"time": time} if args.kind == "arm" else {}
        figure = figures.draw(args.kind, picture, **options)
        for file in files:
            figures.save(figure, file, note=note_of(picture.meta))
    return _tell(shell, args, picture, breaks, files)


def _silent(shell: Shell, args: argparse.Namespace) -> bool:
    """Whether there is nothing to tell of the progress: of a table the one who judges it does."""
    return bool(args.quiet or args.json or shell.is_table(args))


def _watch(shell: Shell, args: argparse.Namespace) -> int:
    from datetime import datetime

    from pathplan import plan
    from pathplan.report.live import serve

    file = Path(args.file)
    if not file.is_file():
        raise InputError.at(args.file, "no such file")

    def make() -> Plan:
        planned = plan(shell.task(args))
        shell.check_rows(planned, args.file)
        return planned

    def say(line: str) -> None:
        shell.show(f"{datetime.now():%H:%M:%S}  {line}")

    serve(file, make, port=args.port, address=args.address, say=say)
    return 0


def _picture(
    shell: Shell,
    args: argparse.Namespace,
    files: list[Path],
    suffixes: tuple[str, ...],
    tell: Progress,
    *,
    buckets: int,
) -> tuple[Picture, str]:
    """What is to be drawn, and which limit it breaks ('' for none); refused before the long work if it can't be put."""
    from pathplan.report.files import check_picture

    def check(meta: Mapping[str, Any]) -> None:
        for file in files:
            check_picture(file, meta, suffixes, overwrite=args.overwrite)

    if shell.is_table(args):
        from pathplan.report.gather import picture_of_table

        tell("audit", 0, 1)
        judged = shell.judged(args)
        if judged.arm is None:
            raise InputError(judged.notes[0])
        check(judged.table.meta)
        return picture_of_table(judged.table, judged.arm, _noted(judged), buckets=buckets), judged.breaks
    import pathplan
    from pathplan.report.gather import picture_of
    from pathplan.report.judged import first_exceedance

    task = shell.task(args)
    check({"task": task.title, "task_file": Path(args.file).name})
    plan = pathplan.plan(task, progress=tell)
    shell.check_rows(plan, args.file)
    tell("audit", 0, 1)
    picture = picture_of(plan, buckets=buckets)
    return picture, "" if plan.audit.passed else first_exceedance(plan.audit)


def _noted(judged: Judged) -> Audit | None:
    """The audit of a table with what should be known of how it was judged among its findings."""
    from dataclasses import replace

    from pathplan.auditing import Finding

    if judged.audit is None:
        return None
    notes = tuple(Finding("warning", note) for note in judged.notes)
    return replace(judged.audit, findings=(*judged.audit.findings, *notes))


def _tell(shell: Shell, args: argparse.Namespace, picture: Picture, breaks: str, files: list[Path]) -> int:
    from pathplan.report.screen import verdict
    from pathplan.report.text import clock, fit, printable

    if args.json:
        facts = {"passed": picture.audit.passed, "duration_s": picture.duration, "rows": picture.rows}
        shell.show_json({**picture.meta, **facts, "files": {"pictures": [str(file) for file in files]}})
    elif not args.quiet:
        title = printable(picture.title or picture.arm.name)
        told = fit(title, f": {verdict(picture.audit)}, cycle time {clock(picture.duration)}")
        shell.show(f"{told}\n{printable('written: ' + ', '.join(map(str, files)))}")
    return shell.status(args.file, breaks, ": the picture says so")
