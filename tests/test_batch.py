"""Several tasks in one call of the command line: each as it would be alone, and a summary of all."""

import json
import os
import signal
import subprocess
import sys
import time
import tracemalloc
from pathlib import Path

import pytest

import pathplan
from pathplan.cli import main
from tests.test_cli import BROKEN, CROSS, ROOT, put_inputs

BAD = CROSS.replace("blend =", "blendd =")
FAR = CROSS.replace("[900, 500, 700]", "[900, 500, 50]")  # below what the arm reaches
MANY = CROSS + '\n[[step]]\nrepeat = 20\nstep = [\n{ motion = "joint", to = { joints = [100, 0, -10, 0] } },\n'
MANY += '{ motion = "joint", to = "home" },\n]\n'
TASKS = ("cross.toml", "bad.toml", "far.toml", "weak.toml", "again.toml")


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """The current folder, with two tasks that can be planned, one that breaks a limit, two that fail."""
    put_inputs(tmp_path)
    for name, text in {"bad": BAD, "far": FAR, "again": CROSS.replace("0.1 s", "0.3 s"), "many": MANY}.items():
        (tmp_path / f"{name}.toml").write_text(text)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def run(folder, capsys):
    """Run a command line: (status, standard output, lines of standard error)."""

    def call(*argv: str):
        status = main(argv)
        out, err = capsys.readouterr()
        return status, out, err.splitlines()

    return call


def written(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.is_file() and path.suffix != ".toml"}


@pytest.mark.parametrize("jobs", ["1", "2"])
def test_each_is_written_as_it_is_alone_and_a_failure_stops_nobody(folder, run, jobs):
    status, out, err = run("plan", *TASKS, "--jobs", jobs)
    together = written(folder)
    assert status == 2
    assert sorted(together) == ["again.audit.json", "again.csv", "cross.audit.json", "cross.csv", "weak.audit.json"]
    alone = [run("plan", task, "--remedies", "0 s") for task in TASKS]
    assert written(folder) == together
    assert [one[0] for one in alone] == [0, 2, 1, 1, 0]
    assert err == [line for one in alone for line in one[2]]
    assert err[2].startswith(f"pathplan: {BROKEN}") and len(err) == 3
    lines = out.splitlines()
    heads = [one[1].splitlines()[0] for one in alone if one[1]]
    assert [line for line in lines if line in heads] == heads
    table = lines[lines.index("") + 1 :]
    assert table[0].split("  ")[0] == "task"
    assert [line.split()[0] for line in table[1:6]] == list(TASKS)
    assert table[6] == "2 of 5 tasks within limits, 3 not"
    assert max(map(len, lines)) <= 100


def test_the_summary_tells_what_the_plans_tell(folder, run):
    _, out, _ = run("plan", *TASKS, "--no-table")
    assert written(folder) == {}
    rows = {line.split()[0]: line for line in out.splitlines() if ".toml " in line}
    for name in ("cross", "weak", "again"):
        plan = pathplan.plan(pathplan.load_task(f"{name}.toml"))
        row = rows[f"{name}.toml"]
        assert row.split()[-1] == str(len(plan.table))
        assert ("within limits" in row, "BREAKS LIMITS" in row) == (plan.audit.passed, not plan.audit.passed)
        times = [float(cell.split()[0]) for cell in row.split("  ") if cell.endswith(" s")]
        assert times[0] == pytest.approx(plan.duration) and 0 <= plan.bound - times[1] < 1e-3
        asked = {}
        for step in plan.audit.pacing:
            for part in step.parts:
                if part.quantity != "none":
                    key = f"{part.joint} {part.quantity}"
                    asked[key] = asked.get(key, 0.0) + part.part * step.duration
        assert max(asked, key=asked.get) in row
    assert "bad input: step[1].blendd: unknown key" in rows["bad.toml"]
    assert "not followed: step[2]: " in rows["far.toml"]


def test_json_is_one_document_of_all(folder, run):
    status, out, _ = run("plan", *TASKS, "--json", "--jobs", "2")
    document = json.loads(out)
    assert (status, document["status"], document["passed"]) == (2, 2, False)
    assert [task["file"] for task in document["tasks"]] == list(TASKS)
    assert [task["status"] for task in document["tasks"]] == [0, 2, 1, 1, 0]
    for task in document["tasks"]:
        assert bool(task["complaints"]) == (task["status"] != 0)
        if task["file"] in ("bad.toml", "far.toml"):
            assert task["document"] is None
        else:
            audit = Path(task["file"]).with_suffix(".audit.json")
            assert task["document"] == json.loads(audit.read_text())
    good = json.loads(run("audit", "cross.toml", "again.toml", "--json")[1])
    assert (good["status"], good["passed"]) == (0, True)


def test_a_limit_that_is_broken_counts_more_than_none(run):
    assert run("plan", "cross.toml", "weak.toml", "--no-table", "--quiet")[0] == 1


@pytest.mark.parametrize(
    ("argv", "line"),
    [
        ("cross.toml again.toml -o a.csv", "argument -o: names the table of one task, and there are 2: each is named"),
        ("cross.toml sub/cross.toml", "sub/cross.toml: would write cross.csv, as cross.toml would: plan them one "),
        ("cross.toml again.toml cross.toml", "cross.toml: would write cross.csv, and is given twice: plan them one by"),
        ("cross.toml again.toml --jobs 0", '--jobs: expected a number of processes from 1 to 256, got "0"'),
        ("cross.toml again.toml --jobs two", '--jobs: expected a number of processes from 1 to 256, got "two"'),
        ("cross.toml again.toml --pace 2", "--pace: "),
        ("cross.toml again.toml --remedies 9s", "argument --remedies: "),
        ("cross.toml --quiet again.toml --why", "unknown arguments: --why "),
    ],
)
def test_what_can_not_be_done_for_all_is_refused_before_the_work(folder, run, monkeypatch, argv, line):
    monkeypatch.setattr(pathplan, "plan", lambda *args, **options: pytest.fail("planned before looking"))
    (folder / "sub").mkdir()
    (folder / "sub" / "cross.toml").write_text(CROSS)
    status, out, (error,) = run("plan", *argv.split())
    assert (status, out) == (2, "") and error.startswith(f"pathplan: {line}")
    assert written(folder) == {}


def test_files_behind_an_option_count_too(folder, run):
    assert run("plan", "cross.toml", "--quiet", "again.toml")[:2] == (0, "")
    assert sorted(written(folder)) == ["again.audit.json", "again.csv", "cross.audit.json", "cross.csv"]


def test_a_file_that_may_not_be_replaced_stops_only_its_task(folder, run):
    (folder / "cross.csv").write_text("mine")
    status, _, (line,) = run("plan", "cross.toml", "again.toml", "--quiet")
    assert status == 2 and line.startswith("pathplan: cross.toml: cross.csv: exists and is no earlier output")
    assert (folder / "cross.csv").read_text() == "mine" and (folder / "again.csv").exists()


def test_audit_takes_tasks_together_and_tables_alone(folder, run):
    status, out, err = run("audit", "cross.toml", "again.toml")
    assert (status, err) == (0, []) and "2 of 2 tasks within limits" in out
    assert written(folder) == {}
    status, _, (line,) = run("audit", "cross.toml", "cross.csv")
    assert status == 2 and line.startswith("pathplan: cross.csv: is a table: tables are judged one at a time")
    assert run("audit", "cross.toml", "again.toml", "--to", "home")[0] == 2


def test_an_error_of_our_own_stops_only_its_task(folder, run, monkeypatch):
    plan = pathplan.plan

    def broken(task, **options):
        if task.file.name == "cross.toml":
            raise ZeroDivisionError("by zero")
        return plan(task, **options)

    monkeypatch.setattr(pathplan, "plan", broken)
    monkeypatch.delenv("PATHPLAN_DEBUG", raising=False)
    status, out, (line,) = run("plan", "cross.toml", "again.toml", "--no-table")
    assert status == 70 and line.startswith("pathplan: cross.toml: internal error: ZeroDivisionError: by zero")
    assert "1 of 2 tasks within limits, 1 not" in out


@pytest.mark.skipif(sys.platform != "linux", reason="work is done in processes on Linux only")
def test_ctrl_c_stops_all_and_leaves_nothing(folder):
    command = [sys.executable, "-m", "pathplan", "plan", "many.toml", "again.toml", "--pace", "3 %", "--jobs", "2"]
    path = os.pathsep.join([str(ROOT), *sys.path])
    options: dict = {"start_new_session": True, "env": {**os.environ, "PYTHONPATH": path}}
    heard = lambda: signal.signal(signal.SIGINT, signal.SIG_DFL)  # noqa: E731  # by tests in the background too
    with subprocess.Popen(command, **options, preexec_fn=heard) as process:
        while process.poll() is None and not list(folder.glob(".*.part")):
            time.sleep(0.01)  # until the first of them is being written
        os.killpg(process.pid, signal.SIGINT)  # as a terminal does it
        assert process.wait(timeout=30) == 130
    assert [name for name in os.listdir(folder) if not name.endswith(".toml")] == []
    with pytest.raises(ProcessLookupError):  # nobody is left in its session
        os.killpg(process.pid, 0)


def test_one_task_by_any_number_of_processes_is_the_same(folder, run, monkeypatch):
    """More stretches than are solved together, so that the processes share them."""
    made = []
    for jobs in ("1", "2"):
        assert run("plan", "many.toml", "--quiet", "--jobs", jobs)[0] == 0
        made.append(written(folder))
    assert made[0] == made[1] and len(pathplan.plan(pathplan.load_task("many.toml")).timings) > 32


def test_progress_goes_through_path_timing_and_audit(folder):
    told = []
    plan = pathplan.plan(pathplan.load_task("many.toml"), progress=lambda *line: told.append(line))
    plan.judge(progress=lambda *line: told.append(line))
    whats = list(dict.fromkeys(what for what, _, _ in told))
    assert whats == ["path", "timing", "audit"]
    for what in whats:
        shares = [done / total for name, done, total in told if name == what]
        assert shares == sorted(shares) and len(shares) >= 3 and 0 <= shares[0] and shares[-1] <= 1


def test_long_tables_are_written_and_judged_in_bounded_memory(folder, monkeypatch):
    """Five times the rows take no more memory: beyond that of a piece, nothing grows with the table."""
    monkeypatch.setattr("pathplan.export.npz_file.IN_MEMORY", 1 << 16)
    peaks = []
    for seconds in (20, 100):
        (folder / "cross.toml").write_text(CROSS.replace("0.1 s", f"{seconds} s"))
        plan = pathplan.plan(pathplan.load_task("cross.toml"))
        plan.evidence  # noqa: B018  # gathered beforehand: only the judging of the rows is measured
        tracemalloc.start()
        try:
            assert pathplan.audit(plan.rows(1024), plan.arm, plan=plan).passed
            for name in ("a.csv", "a.npz"):
                pathplan.write_table(plan.rows(1024), folder / name, overwrite=True)
            peaks.append(tracemalloc.get_traced_memory()[1])
        finally:
            tracemalloc.stop()
        assert plan.ticks > 250 * seconds
    assert peaks[1] < 1.25 * peaks[0]
