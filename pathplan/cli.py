"""The command line: arguments in, a call into the library, its answer on the screen. Computes nothing itself.

Exit status: 0 within limits; 1 a limit is broken, a task can't be followed or the work can't be finished; 2 bad
input; 70 an error of our own; 130 ended by Ctrl-C; of many tasks the highest. Errors are one line each on the
standard error stream.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

from pathplan import arguments
from pathplan.errors import InputError, LimitError, UnreachableError
from pathplan.streams import complain, complaints_of, flush, json_text, show, version
from pathplan.task_runs import check_rows, of_file, run_task, run_tasks, task_of

if TYPE_CHECKING:
    from pathplan.report.judged import Judged
    from pathplan.report.outputs import Job

__all__ = ["main"]

INTERRUPTED = 130  # 128 + SIGINT, as shells count

ABOUT = """\
From tool poses to an audited, synchronized joint table at the controller's cycle."""
STATUS = """\
exit status: 0 within limits; 1 a limit is broken or a step can't be followed; 2 bad input;
             70 an error of pathplan's own; 130 ended by Ctrl-C; of many tasks the highest

A plan is no safety function. Prove it at reduced speed first (--reduced-speed); clearance is not
checked; the risk assessment, the local codes and licensed practice apply."""
EXAMPLES = """\
examples:
  pathplan plan pick.toml                      plan the task, show what it takes, write pick.csv
  pathplan audit pick.csv --arm glazer6.toml   judge a table against the limits of an arm
  pathplan export pick.csv -o pick.npz         write a table as another kind of file
  pathplan report pick.toml                    write a report to sign, as one HTML file
  pathplan watch pick.toml                     a live page that follows the task as it is edited
  pathplan arm glazer6.toml                    what an arm can do, and how its inverse is solved
  pathplan plan --help                         more on one command, with examples

"""
PLAN = """\
Plan a task: path, branch, near time-optimal timing within every joint's limits, rows at the cycle.
Writes TASK's name + .csv into the current folder, and the audit beside it (.audit.json).
A plan that breaks a limit writes its audit but no table. Where a step can't be followed, the
nearest changes that would make it work are searched for, each planned again. Of several tasks each
is written as it is alone, whatever becomes of the others; a table sums them up, and the worst exit
status counts."""
PLAN_EXAMPLES = """\
examples:
  pathplan plan examples/glazer6-pick-and-place.toml
      plan, show what it takes, write glazer6-pick-and-place.csv and its audit beside it
  pathplan plan pick.toml --reduced-speed -o slow/pick.csv
      the tool at no more than 250 mm/s (ISO 10218-1), to prove the plan on the arm
  pathplan plan pick.toml --pace "50 %" -o pick.csv -o pick.npz
      the whole motion at half speed, as two kinds of file
  pathplan plan pick.toml --no-table --json
      a dry run for scripts: one JSON document, nothing written
  pathplan plan pick.toml --remedies "60 s"
      if a step is refused, take a minute to find what would make it work
  pathplan plan tasks/pick.toml tasks/place.toml tasks/return.toml
      each of them into the current folder, and a summary of all

"""
RETIME = """\
Time a joint table of any source anew: along its own path, as fast as the arm's limits allow. Where the table
rests the arm waits as long; how far the path passes the rows is told. Writes like plan."""
RETIME_EXAMPLES = """\
examples:
  pathplan retime old.csv --arm robots/glazer6.toml -o new.csv
      the path of old.csv within every limit of the arm, and its audit beside it
  pathplan retime old.npz --arm glazer6.toml --tool cup --reduced-speed --tolerance "0.02 deg" -o slow.npz

"""
AUDIT = """\
Judge a motion against the limits of its arm: position, velocity, acceleration, jerk and torque of
every joint. A task (.toml) is planned first, and the branches that reach its targets are shown,
also where it is refused; a table (.csv, .jsonl, .npz, .parquet) is read, of any source if its
columns can be told; a single line needs no file. Nothing is written."""
AUDIT_EXAMPLES = """\
examples:
  pathplan audit pick.toml
      plan the task and show the audit
  pathplan audit pick.csv --arm robots/glazer6.toml --tool cup
      judge a table against an arm; without --arm the arm file that it names is taken from beside it
  pathplan audit pick.csv --arm robots/glazer6.toml --quiet && echo within limits
  pathplan audit log.csv --arm loader4.toml --time t_ms --columns "A1=x, A2=y, A3=z, A4=wrist"
      a table of another source; names such as wrist_deg, x_mm, wrist_deg_s or t_ms are recognised
  pathplan audit log.npz --arm robots/glazer6.toml --unit "rad, s" --task pick.toml
      columns that tell no unit; and whether the table passes every target of a task
  pathplan audit --from "500 -300 400 180 0 0" --to "580 300 300 180 0 30" --arm robots/glazer6.toml
      a straight line from pose to pose, x y z in mm and turns about x, y, z in deg

"""
EXPORT = """\
Write a table as another kind of file (.csv, .jsonl, .parquet: mm and deg, or as chosen; .npz: SI,
exact), or plan a task and write its table. With --cycle a task's rows are evaluated anew from its
timing; a table's rows are never interpolated. A table is judged against its arm first: that of
--arm, or the arm file that it names if that lies beside it. Without an arm it is converted as it
is, and the screen says so."""
EXPORT_EXAMPLES = """\
examples:
  pathplan export pick.csv -o pick.npz --arm robots/glazer6.toml
  pathplan export pick.toml -o pick.csv -o pick.npz
  pathplan export pick.toml -o pick.parquet --cycle "1 ms" --write-units "rad, m"
  pathplan export pick.toml -o pick.csv --write-columns "velocity, torque" --split stretch
      one file a stretch, from stop to stop: pick-1.csv, pick-2.csv, ...
  pathplan export pick.toml -o pick.pvt.csv --pvt "20 ms"
      position and velocity at a coarser period; the error of interpolation is stated

"""


def main(argv: Sequence[str] | None = None) -> int:
    """Run a command line (default: this process's) and return its exit status. Raises nothing."""
    try:
        try:
            args, unknown = _parser().parse_known_args(argv)
            if hasattr(args, "files"):  # those behind an option are left over
                args.files += [one for one in unknown if not one.startswith("-")]
                unknown = [one for one in unknown if one.startswith("-")]
            if unknown:
                raise InputError(f"unknown arguments: {' '.join(unknown)} (see {args.prog} --help)")
            return int(args.run(args))
        finally:
            flush(sys.stdout)
    except SystemExit as done:  # --help
        return int(done.code or 0)
    except KeyboardInterrupt:
        return INTERRUPTED
    except Exception as error:
        status, lines = complaints_of(error)
        for line in lines:
            complain(line)
        return status


class _Parser(argparse.ArgumentParser):
    """argparse with errors as everywhere here: one line, no usage before it."""

    def __init__(self, **options: Any) -> None:
        options.setdefault("formatter_class", _formatter)
        super().__init__(allow_abbrev=False, **options)

    def error(self, message: str) -> NoReturn:
        raise InputError(f"{message} (see {self.prog} --help)")


def _formatter(prog: str) -> argparse.HelpFormatter:
    width = min(100, max(60, _columns()))
    return argparse.RawDescriptionHelpFormatter(prog, width=width, max_help_position=28)


def _columns() -> int:
    import shutil

    return shutil.get_terminal_size((100, 24)).columns


def _parser() -> argparse.ArgumentParser:
    parser = _Parser(prog="pathplan", description=ABOUT, epilog=EXAMPLES + STATUS)
    parser.add_argument("--version", action="store_true", help="show the version and end")
    parser.set_defaults(run=_no_command, prog="pathplan")
    commands = parser.add_subparsers(metavar="COMMAND", title="commands", prog="pathplan")

    def command(name: str, run: Any, about: str, examples: str, summary: str) -> _Parser:
        added: _Parser = commands.add_parser(name, help=summary, description=about, epilog=examples + STATUS)
        added.set_defaults(run=run, prog=added.prog, command=name)
        return added

    _plan_command(command)
    _audit_command(command)
    _export_command(command)
    _retime_command(command)
    _picture_commands(command)
    return parser


def _plan_command(command: Any) -> None:
    plan = command("plan", _run_plan, PLAN, PLAN_EXAMPLES, "plan a task, audit it, write its table")
    plan.usage = "pathplan plan [options] TASK [TASK ...]"
    plan.add_argument("files", metavar="TASK", nargs="+", help="task files (.toml)")
    plan.add_argument("-o", dest="output", metavar="FILE", action="append", default=[],
                      help="table of a single task (.csv, .jsonl, .npz or .parquet); may be repeated")  # fmt: skip
    plan.add_argument("--no-table", action="store_true", help="a dry run: write nothing at all")
    plan.add_argument(
        "--savings",
        action="store_true",
        help="what would buy time, each change timed again: takes two to three times as long",
    )
    plan.add_argument(
        "--remedies",
        metavar="TIME",
        help='how long to search for what would make a refused task work (default "10 s"; "0 s": not at all)',
    )
    _jobs_option(_planning_options(plan))
    _writing_options(plan)
    _screen_options(plan)


def _audit_command(command: Any) -> None:
    audit = command("audit", _run_audit, AUDIT, AUDIT_EXAMPLES, "judge a task's plan, a table or a line")
    audit.usage = (
        "pathplan audit [options] TASK|TABLE\n       pathplan audit [options] TASK TASK [TASK ...]\n"
        "       pathplan audit [options] --from PLACE --to PLACE --arm ARM"
    )
    audit.add_argument("files", metavar="TASK|TABLE", nargs="*", help="tasks (.toml), or a table of any source")
    _jobs_option(_planning_options(audit))
    _arm_options(audit)
    _reading_options(audit)
    group = audit.add_argument_group("targets of a task in a table")
    group.add_argument("--task", metavar="TASK", help="whether the table passes every target of this task")
    group.add_argument("--near", metavar="SIZE", help='how near, "0.5 mm, 0.1 deg" (default 0.1 mm, 0.1 deg)')
    group = audit.add_argument_group("a single line without a file")
    place = '"x y z rx ry rz" in mm and deg, "joints ..." or the name of a position'
    group.add_argument("--from", dest="start", metavar="PLACE", help=f"where it starts: {place}")
    group.add_argument("--to", dest="goal", metavar="PLACE", help="where it ends")
    _screen_options(audit)


def _export_command(command: Any) -> None:
    export = command("export", _run_export, EXPORT, EXPORT_EXAMPLES, "write another kind of file")
    export.usage = "pathplan export [options] TASK|TABLE -o FILE [-o FILE ...]"
    export.add_argument("file", metavar="TASK|TABLE", help="task (.toml), or table of any source")
    export.add_argument("-o", dest="output", metavar="FILE", action="append", required=True,
                        help="file to write (.csv, .jsonl, .npz or .parquet); may be repeated")  # fmt: skip
    _jobs_option(_planning_options(export))
    _arm_options(export)
    _reading_options(export)
    group = _writing_options(export)
    group.add_argument("--write-units", metavar="UNITS", help='"rad, m" in place of "deg, mm"')
    group.add_argument("--write-columns", metavar="NAMES",
                       help="of velocity, acceleration, jerk, torque, pose, tool_speed only these")  # fmt: skip
    group.add_argument("--pvt", metavar="PERIOD", help='position and velocity at a coarser period, "20 ms"')
    group.add_argument("--split", choices=["stretch"], help="one file for each stretch from stop to stop")
    _screen_options(export)


def _retime_command(command: Any) -> None:
    retime = command("retime", _run_retime, RETIME, RETIME_EXAMPLES, "time a table anew along its own path")
    retime.add_argument("file", metavar="TABLE", help="table of any source")
    retime.add_argument("--arm", metavar="ARM", required=True, help="arm file (.toml)")
    retime.add_argument("-o", dest="output", metavar="FILE", action="append", required=True,
                        help="table to write (.csv, .jsonl, .npz or .parquet); may be repeated")  # fmt: skip
    group = retime.add_argument_group("how the path is taken from the table")
    group.add_argument("--tolerance", metavar="SIZE",
                       help='how far it may pass the rows, "0.01 deg" or "0.1 mm" (default 0.0001 rad)')  # fmt: skip
    group.add_argument("--rest", metavar="TIME", help='rests of this length are kept, "50 ms" (default)')
    group.add_argument("--tool", metavar="NAME", help="tool of the arm that is carried")
    group.add_argument("--payload", metavar="NAME", help="payload that is carried")
    _jobs_option(_planning_options(retime))
    _reading_options(retime)
    _writing_options(retime)
    _screen_options(retime)


def _picture_commands(command: Any) -> None:
    from pathplan.arm_command import add_arm_command
    from pathplan.picture_commands import Shell, add_picture_commands

    shell = Shell(
        command=command,
        planning_options=_planning_options,
        arm_options=_arm_options,
        screen_options=_screen_options,
        task=lambda args: task_of(args, args.file),
        is_table=_is_table,
        judged=_judged,
        check_rows=check_rows,
        show=show,
        show_json=lambda document: show(json_text(document)),
        status=_status,
    )
    add_picture_commands(shell)
    add_arm_command(shell)


def _planning_options(parser: argparse.ArgumentParser) -> argparse._ArgumentGroup:
    group = parser.add_argument_group("how a task is planned")
    speed = group.add_mutually_exclusive_group()
    speed.add_argument("--speed", metavar="SPEED", help='cap the tool speed of the whole task, "250 mm/s"')
    speed.add_argument("--reduced-speed", action="store_true",
                       help="cap the tool speed at 250 mm/s (ISO 10218-1)")  # fmt: skip
    group.add_argument("--turning-speed", metavar="SPEED", help='cap how fast the tool turns, "90 deg/s"')
    group.add_argument("--pace", metavar="SHARE",
                       help='slow the whole motion in time, "50 %%": speeds by it, accelerations by its square, '
                       "jerks by its cube")  # fmt: skip
    group.add_argument("--cycle", metavar="TIME", help="the controller's cycle in place of the task's, \"2 ms\"")
    return group


def _jobs_option(group: argparse._ArgumentGroup) -> None:
    group.add_argument("--jobs", metavar="N",
                       help="processes that work at once (default: one a core); the results are the same")  # fmt: skip


def _arm_options(parser: argparse.ArgumentParser) -> None:
    group = parser.add_argument_group("what a table is judged against")
    group.add_argument("--arm", metavar="ARM", help="arm file (.toml)")
    group.add_argument("--tool", metavar="NAME", help="tool of the arm that is carried")


def _reading_options(parser: argparse.ArgumentParser) -> None:
    group = parser.add_argument_group("how a table of another source is read")
    group.add_argument("--time", metavar="NAME|TIME",
                       help='its column of time; or the time from row to row, "4 ms", if it has none')  # fmt: skip
    group.add_argument("--columns", metavar="PAIRS", help='"NAME=joint, NAME=joint velocity, ..."')
    group.add_argument("--unit", metavar="UNITS", help='of columns that tell none: "deg, mm, ms"')


def _writing_options(parser: argparse.ArgumentParser) -> argparse._ArgumentGroup:
    group = parser.add_argument_group("writing")
    group.add_argument("--overwrite", action="store_true",
                       help="replace files even if they are no earlier output of the same task")  # fmt: skip
    group.add_argument("--write-anyway", action="store_true",
                       help="write a table that breaks limits; its header says so")  # fmt: skip
    return group


def _screen_options(parser: argparse.ArgumentParser) -> None:
    group = parser.add_argument_group("screen").add_mutually_exclusive_group()
    group.add_argument("--json", action="store_true", help="one JSON document in place of the screen")
    group.add_argument("--quiet", action="store_true", help="nothing but errors")


# Commands


def _no_command(args: argparse.Namespace) -> int:
    if not args.version:
        commands = "plan, audit, export, retime, report, watch, figure or arm"
        raise InputError(f"expected a command: {commands} (see pathplan --help)")
    show(f"pathplan {version()}")
    return 0


def _run_plan(args: argparse.Namespace) -> int:
    if args.no_table and args.output:
        raise InputError("argument -o: not allowed with argument --no-table (see pathplan plan --help)")
    if len(args.files) > 1:
        if args.output:
            complaint = f"names the table of one task, and there are {len(args.files)}: each is named after its task"
            raise InputError(f"argument -o: {complaint}")
        if args.remedies is not None:
            raise InputError("argument --remedies: only for a single task")
        return run_tasks(args, [(file, [] if args.no_table else [_table_name(file)]) for file in args.files])
    from pathplan.refused import show_remedies

    args.file = args.files[0]
    seconds, task = arguments.remedies(args), task_of(args, args.file)
    try:
        return run_task(args, [] if args.no_table else args.output or [_table_name(args.file)], task)
    except (UnreachableError, LimitError) as refusal:
        complain(str(refusal))
        show_remedies(args, task, refusal, seconds, show)
        return refusal.exit_status


def _table_name(task: str) -> str:
    return f"{Path(task).stem}.csv"


def _run_audit(args: argparse.Namespace) -> int:
    if len(args.files) > 1:
        return _audit_many(args)
    args.file = args.files[0] if args.files else None
    if args.file is None or args.start is not None or args.goal is not None:
        return _audit_line(args)
    if not _is_table(args):
        return _audit_task(args)
    judged = _judged(args)
    if judged.arm is None:
        raise InputError(judged.notes[0])
    _show_judged(args, judged, None)
    return _status(args.file, judged.breaks, "")


def _audit_many(args: argparse.Namespace) -> int:
    """Several tasks, planned and judged; a table needs its own arm and tool, and comes alone."""
    for file in args.files:
        args.file = file
        if _is_table(args):
            raise InputError.at(file, "is a table: tables are judged one at a time, tasks (.toml) together too")
    if args.start is not None or args.goal is not None:
        raise InputError(f"arguments --from and --to: a single line takes no file, got {args.files[0]}")
    return run_tasks(args, [(file, []) for file in args.files])


def _audit_task(args: argparse.Namespace) -> int:
    """The plan of a task, judged, and the branches at its targets; these also where it is refused."""
    from pathplan.refused import show_targets

    task = task_of(args, args.file)
    try:
        return run_task(args, [], task)
    except (UnreachableError, LimitError) as refusal:
        complain(str(refusal))
        show_targets(args, task, refusal, show)
        return refusal.exit_status


def _audit_line(args: argparse.Namespace) -> int:
    """A single line, planned and judged without a file."""
    if args.file is not None:
        raise InputError(f"arguments --from and --to: a single line takes no file, got {args.file}")
    if args.start is None and args.goal is None:
        raise InputError(f"the following arguments are required: TASK|TABLE (see {args.prog} --help)")
    from pathplan.report.judged import first_exceedance
    from pathplan.report.line_screen import line_as_dict, line_screen
    from pathplan.report.progress import Progress

    with Progress(sys.stderr, quiet=args.quiet or args.json) as tell:
        tell("line", 0, 1)
        line = arguments.line_audit(args)
        audit = line.plan.audit
    if args.json:
        show(json_text(line_as_dict(line)))
    elif not args.quiet:
        show(line_screen(line))
    return 0 if audit.passed else _status("line", first_exceedance(audit), "")


def _run_retime(args: argparse.Namespace) -> int:
    for name in args.output:
        if Path(name).exists() and Path(args.file).exists() and Path(name).samefile(args.file):
            raise InputError.at(name, "is the table that is read: choose another name")
    return run_task(args, args.output, arguments.retimed(args))


def _run_export(args: argparse.Namespace) -> int:
    if not _is_table(args):
        return run_task(args, args.output)
    from pathplan.report.outputs import check_jobs, check_outputs, jobs_of_table, marked, write_jobs
    from pathplan.report.progress import Progress

    writing = arguments.writing(args)
    judged = _judged(args)
    outputs = [Path(name) for name in args.output]
    check_outputs(outputs, None, judged.table.meta, writing)
    with of_file(args.file):
        jobs = jobs_of_table(marked(judged.table) if judged.breaks else judged.table, outputs, writing)
    check_jobs(jobs, judged.table.meta, writing)
    for job in jobs:
        if job.file.exists() and job.file.samefile(args.file):
            raise InputError.at(str(job.file), "is the table that is read: choose another name")
    written = [] if judged.breaks and not args.write_anyway else jobs
    with Progress(sys.stderr, quiet=args.quiet or args.json) as tell:
        write_jobs(written, writing, tell)
    _show_judged(args, judged, written)
    return _status(args.file, judged.breaks, ": written all the same" if written else ": not written")


# Tables


def _is_table(args: argparse.Namespace) -> bool:
    from pathplan.export.foreign import SUFFIXES
    from pathplan.export.kinds import kinds

    if Path(args.file).suffix.lower() not in (*kinds(), *SUFFIXES):
        return False
    if args.cycle and args.command == "export":
        complaint = "rows of a table are never interpolated: export the task it comes from with --cycle"
        raise InputError(f"argument --cycle: {complaint}")
    capped = args.command == "audit"  # which judges a table against a cap on the tool speed too
    for option in ("pace", "cycle") if capped else ("speed", "reduced_speed", "turning_speed", "pace", "cycle"):
        if getattr(args, option):
            raise InputError(f"argument --{option.replace('_', '-')}: only for a task, {args.file} is a table")
    return True


def _judged(args: argparse.Namespace) -> Judged:
    from pathplan.report.judged import judge_file
    from pathplan.report.progress import Progress

    how = arguments.judging(args)
    with Progress(sys.stderr, quiet=args.quiet or args.json) as tell:
        tell("audit", 0, 1)
        return judge_file(args.file, how)


def _show_judged(args: argparse.Namespace, judged: Judged, jobs: Sequence[Job] | None) -> None:
    from pathplan.report.judged import judged_as_dict, judged_screen

    if args.json:
        show(json_text(judged_as_dict(judged, jobs or ())))
    elif not args.quiet:
        show(judged_screen(judged, jobs))


def _status(file: str, breaks: str, more: str) -> int:
    """1, with one line of why, for what breaks a limit."""
    if breaks:
        complain(f"{file}: breaks limits: {breaks}{more}")
    return int(bool(breaks))
