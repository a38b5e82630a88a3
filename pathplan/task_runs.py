"""Tasks planned, judged and written for the command line: one, or many in one call, which go the same way.

Many tasks are worked on by several processes, each a task at a time; what each has to say comes back as text and is
shown in the order of the tasks. A task that fails does not stop the others, and the worst exit status counts.
"""

from __future__ import annotations

import contextlib
import dataclasses
import sys
from argparse import Namespace
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pathplan import arguments
from pathplan.errors import InputError
from pathplan.streams import complain, complaints_of, json_text, show, version

if TYPE_CHECKING:
    from pathplan.planning import Plan
    from pathplan.report.batch_screen import Summary
    from pathplan.report.outputs import Job
    from pathplan.task import Task

__all__ = ["check_rows", "of_file", "run_task", "run_tasks", "task_of"]

Tell = Callable[[str, int, int], None]


@dataclass(frozen=True)
class Order:
    """A task file and what is to be written of it; `task` where it is not that of the file."""

    file: str
    names: tuple[str, ...]
    task: Task | None = None


@dataclass(frozen=True)
class Outcome:
    """What came of a task. `document` and `text` where they are to be shown; no summary without a plan."""

    file: str
    status: int
    complaints: tuple[str, ...]
    text: str = ""
    document: Mapping[str, Any] | None = None
    summary: Summary | None = None


def task_of(args: Namespace, file: str) -> Task:
    """The task of a file with what the command line changes of it. Raises PathplanError."""
    from pathplan import load_task

    for option in ("arm", "tool", "task", "near", "time", "columns", "unit"):
        if getattr(args, option, None) is not None:
            more = ", a task names its own" if option in ("arm", "tool") else ""
            raise InputError(f"argument --{option}: only for a table{more}")
    pace, cycle = arguments.pace(args), arguments.cycle(args)
    speed, turning = arguments.speed_cap(args), arguments.turning_cap(args)
    changes: dict[str, Any] = {"pace": pace} if pace is not None else {}
    changes |= {"cycle": cycle} if cycle is not None else {}
    task = load_task(file)
    if speed is not None:  # the task's own cap stays where it is the lower
        changes["speed"] = speed if task.speed is None else min(speed, task.speed)
    if turning is not None:
        changes["turning_speed"] = turning if task.turning_speed is None else min(turning, task.turning_speed)
    return dataclasses.replace(task, **changes)


def run_task(args: Namespace, names: Sequence[str], task: Task | None = None) -> int:
    """Plan, audit, write tables and the audit beside the first; without names, nothing. Default: the task named."""
    from pathplan.report.progress import Progress

    jobs = arguments.jobs(args)
    with Progress(sys.stderr, quiet=args.quiet or args.json) as tell:
        outcome = _carried_out(args, Order(args.file, tuple(names), task), tell, jobs, alone=True)
    if args.json and outcome.document is not None:
        show(json_text(outcome.document))
    elif not args.quiet:
        show(outcome.text)
    for line in outcome.complaints:
        complain(line)
    return outcome.status


def run_tasks(args: Namespace, orders: Sequence[tuple[str, Sequence[str]]]) -> int:
    """Carry out many orders, a file and the names of its tables each; returns the worst exit status.

    Raises InputError, before anything is planned, where two of them would write the same file.
    """
    from pathplan.report.batch_screen import batch_as_dict, batch_screen
    from pathplan.report.progress import Progress
    from pathplan.workers import work_through

    given = [Order(file, tuple(names)) for file, names in orders]
    for option in (arguments.writing, arguments.speed_cap, arguments.turning_cap, arguments.pace, arguments.cycle):
        option(args)  # a wrong one is wrong for all of them
    _check_apart(given)
    jobs = arguments.jobs(args)
    with Progress(sys.stderr, quiet=args.quiet or args.json) as tell:
        work = partial(_attempted, args, tell=tell, jobs=max(1, jobs // len(given)))
        outcomes = work_through(work, given, jobs, lambda done: tell("tasks", done, len(given)))
    status = max(outcome.status for outcome in outcomes)
    if args.json:
        show(json_text(batch_as_dict(outcomes, status)))
    elif not args.quiet:
        show(batch_screen(outcomes))
    for outcome in outcomes:
        for line in outcome.complaints:
            complain(line)
    return status


def _check_apart(orders: Sequence[Order]) -> None:
    """Refuse tasks that would write the same file."""
    from pathplan.report.outputs import audit_name

    taken: dict[Path, str] = {}
    for order in orders:
        files = [Path(name) for name in order.names]
        for file in [*files, *map(audit_name, files[:1])]:
            before = taken.setdefault(file.resolve(), order.file)
            if before is not order.file:
                other = f"as {before} would" if before != order.file else "and is given twice"
                raise InputError.at(order.file, f"would write {file}, {other}: plan them one by one, with -o")


def _attempted(args: Namespace, order: Order, *, tell: Tell, jobs: int) -> Outcome:
    """What came of one of many tasks, its failure included."""
    try:
        return _carried_out(args, order, tell, jobs, alone=False)
    except Exception as error:
        status, lines = complaints_of(error)
        name = Path(order.file).name
        return Outcome(order.file, status, tuple(line if name in line else f"{order.file}: {line}" for line in lines))


def _carried_out(args: Namespace, order: Order, tell: Tell, jobs: int, *, alone: bool) -> Outcome:
    """Plan, judge and write one task. Raises PathplanError where there is no plan, or nothing can be written."""
    import pathplan
    from pathplan.report import outputs as files
    from pathplan.report.plan_data import plan_as_dict
    from pathplan.report.savings_screen import savings_as_dict, savings_screen
    from pathplan.report.written import written_as_dict

    writing, file = arguments.writing(args), order.file
    task = task_of(args, file) if order.task is None else order.task
    outputs = [Path(name) for name in order.names]
    audit_file = files.audit_name(outputs[0]) if outputs else None
    meta = {"task": task.title, "task_file": Path(file).name}
    files.check_outputs(outputs, audit_file, meta, writing)
    left = [output for output in outputs if output.exists()]
    plan = pathplan.plan(task, progress=tell, jobs=jobs)
    check_rows(plan, file)
    tell("audit", 0, 1)
    if plan.ticks < files.WHOLE:
        plan.table  # noqa: B018  # evaluated once, then kept for the audit and the files
    may = plan.judge(progress=tell, jobs=jobs).passed or getattr(args, "write_anyway", False)
    with of_file(file):
        written = files.jobs_of_plan(plan, outputs, writing) if outputs and may else []
    files.check_jobs(written, meta, writing)
    document = {"pathplan": version(), **plan_as_dict(plan), **written_as_dict(written, audit_file)}
    text = "" if args.json or args.quiet else _plan_text(args, plan, written, audit_file, alone=alone)
    if getattr(args, "savings", False):
        tell("savings", 0, 1)
        savings = plan.savings()
        document["savings"] = savings_as_dict(savings)
        text += "\n\n" + "\n".join(savings_screen(plan.task, savings))
    if args.command == "audit" and args.json:
        document["targets"] = _targets(plan)
    if audit_file is not None:
        files.write_jobs(written, writing, tell, audit=(audit_file, document))
    more = ""
    if outputs:
        more = ": written all the same" if written else ": no table written"
        more += f", {', '.join(map(str, left))} is of an earlier plan" if left and not written else ""
    return Outcome(
        file,
        int(not plan.audit.passed),
        () if plan.audit.passed else (_broken(file, plan, more),),
        text,
        document if args.json else None,
        None if alone else _summary(plan),
    )


def _targets(plan: Plan) -> list[dict[str, Any]]:
    from pathplan.path import target_branches
    from pathplan.report.targets_screen import targets_as_dict

    return targets_as_dict(plan.task, target_branches(plan.task, plan.path))


def _summary(plan: Plan) -> Summary:
    from pathplan.report.batch_screen import summary_of

    return summary_of(plan)


def _broken(file: str, plan: Plan, more: str) -> str:
    from pathplan.report.judged import first_exceedance

    return f"{file}: breaks limits: {first_exceedance(plan.audit)}{more}"


@contextlib.contextmanager
def of_file(file: str) -> Iterator[None]:
    """Complaints about what a file holds name the file."""
    try:
        yield
    except InputError as error:
        raise InputError.at(file, str(error)) from None


def check_rows(plan: Plan, file: str) -> None:
    """Refuse a plan of more rows than any file may have. Raises InputError."""
    from pathplan.export.kinds import MAX_ROWS

    if plan.ticks >= MAX_ROWS:
        complaint = f"would take {plan.ticks + 1} rows, more than {MAX_ROWS}: slow it less or lengthen the cycle"
        raise InputError.at(file, complaint)


def _plan_text(args: Namespace, plan: Plan, jobs: Sequence[Job], audit_file: Path | None, *, alone: bool) -> str:
    """What the screen shows of a plan: all of it where it is the only one, the verdict where it is one of many."""
    from pathplan.path import target_branches
    from pathplan.report.plan_screen import plan_headline, plan_screen
    from pathplan.report.screen import audit_screen
    from pathplan.report.targets_screen import targets_screen
    from pathplan.report.terminal import signs_for
    from pathplan.report.written import pieces_note, written_lines

    lines = written_lines(jobs, audit_file)
    if getattr(args, "split", None) and jobs:
        lines += [note] if (note := pieces_note([Path(name) for name in args.output], len(plan.timings))) else []
    written = "\n".join(lines)
    if args.command == "audit":
        if not alone:
            return plan_headline(plan)
        return audit_screen(plan.audit, targets_screen(plan.task, target_branches(plan.task, plan.path)))
    if alone and args.command in ("plan", "retime"):
        return f"{plan_screen(plan, signs_for(sys.stdout))}\n\n{written}"
    return f"{plan_headline(plan)}\n{written}"
