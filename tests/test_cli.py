"""The command line, run in process: exit statuses, messages, files written, screens."""

import contextlib
import io
import json
import os
import shlex
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.cli import main
from pathplan.report.progress import Progress

ROOT = Path(__file__).parents[1]
CROSS = """\
title = "Across the portal"
arm = "loader4.toml"
cycle = "4 ms"
tool = "vacuum gripper"
start = "home"

[[step]]
name = "across"
motion = "line"
to = { xyz = [900, 500, 950], rpy = [180, 0, 40] }
blend = "30 mm"

[[step]]
name = "down"
motion = "line"
to = { xyz = [900, 500, 700], rpy = [180, 0, 40] }

[[step]]
wait = "0.1 s"
mark = "vacuum on"

[[step]]
name = "away"
motion = "joint"
to = "home"
"""
WEAK = """\
title = "Reach forward"
arm = "weak6.toml"
cycle = "4 ms"
tool = "cup"
start = "home"

[[step]]
motion = "joint"
to = { joints = [20, 5, 25, 0, 80, 0] }
"""


def arm_text(name: str) -> str:
    return (ROOT / "robots" / f"{name}.toml").read_text()


def weak_arm() -> str:
    """glazer6 with a shoulder drive too weak for the weight it carries: its plans break the continuous torque."""
    text = arm_text("glazer6")
    assert text.count("continuous_torque = 165") == 1
    return text.replace("continuous_torque = 165", "continuous_torque = 20")


def put_inputs(folder: Path) -> None:
    """Two arms and a task for each."""
    files = {"loader4.toml": arm_text("loader4"), "cross.toml": CROSS, "weak6.toml": weak_arm(), "weak.toml": WEAK}
    for name, text in files.items():
        (folder / name).write_text(text)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """The current folder, with the inputs in it."""
    put_inputs(tmp_path)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture(scope="module")
def home(tmp_path_factory):
    """A folder with the inputs, planned once: cross.csv, cross.npz, weak.csv (written anyway) and their audits."""
    folder = tmp_path_factory.mktemp("home")
    put_inputs(folder)
    with contextlib.chdir(folder):
        assert main(["plan", "cross.toml", "-o", "cross.csv", "-o", "cross.npz", "--quiet"]) == 0
        with contextlib.redirect_stderr(io.StringIO()):
            assert main(["plan", "weak.toml", "--write-anyway", "--quiet"]) == 1
    return folder


@pytest.fixture(scope="module")
def plan(home):
    """The library's plan of cross.toml."""
    return pathplan.plan(pathplan.load_task(home / "cross.toml"))


@pytest.fixture
def planned(home, folder):
    """The current folder with the files of `home`."""
    for name in made(home):
        shutil.copy(home / name, folder)
    return folder


@pytest.fixture
def run(folder, capsys):
    """Run a command line: (status, standard output, lines of standard error)."""

    def call(*argv: str):
        status = main(argv)
        out, err = capsys.readouterr()
        return status, out, err.splitlines()

    return call


def made(folder: Path) -> set[str]:
    """What is in the folder that was not put there by the fixture."""
    return {path.name for path in folder.iterdir()} - {"loader4.toml", "cross.toml", "weak6.toml", "weak.toml"}


# plan


def test_plan_writes_table_and_audit_and_shows_what_it_takes(folder, run, plan):
    status, out, err = run("plan", "cross.toml")
    assert (status, err) == (0, [])
    assert made(folder) == {"cross.csv", "cross.audit.json"}
    lines = out.splitlines()
    assert lines[0] == "Across the portal: within limits"
    assert lines[1] == "arm loader4, tool vacuum gripper"
    assert lines[2].startswith(f"cycle time {plan.duration:g} s: motion {plan.duration - 0.1:g} s, waiting 0.1 s; ")
    assert lines[2].endswith(f"; {len(plan.table)} rows at 4 ms")
    steps = [line.split("  ") for line in lines[lines.index("") + 2 :][:4]]
    assert [row[-1].strip() for row in steps] == ["30 mm", "stop", "-", "end"]
    assert any(line.split()[:2] == ["vacuum", "on"] for line in lines)
    assert "no safety function" in out and "reduced speed" in out and "risk assessment" in out
    assert lines[-1] == f"written: cross.csv ({len(plan.table)} rows), cross.audit.json"


def test_printed_bound_and_distance_are_true(folder, run, plan):
    _, out, _ = run("plan", "cross.toml", "--no-table")
    line = next(line for line in out.splitlines() if line.startswith("within"))
    percent, bound = float(line.split()[1]), float(line.split("(bound ")[1].removesuffix(" s)"))
    assert plan.bound - 1e-3 < bound <= plan.bound
    assert 0 <= percent / 100 - (plan.duration / plan.bound - 1) < 1e-3


def test_written_tables_are_the_plan(home, plan):
    assert made(home) == {"cross.npz", "cross.csv", "cross.audit.json", "weak.csv", "weak.audit.json"}
    exact, text = pathplan.read_table(home / "cross.npz"), pathplan.read_table(home / "cross.csv")
    np.testing.assert_array_equal(exact.position, plan.table.position)
    np.testing.assert_allclose(text.jerk, plan.table.jerk, rtol=1e-15)
    assert "breaks_limits" not in exact.meta
    assert [mark.name for mark in exact.marks] == ["vacuum on"]


def test_quiet_prints_nothing(planned, run):
    assert run("plan", "cross.toml", "--quiet") == (0, "", [])
    assert run("audit", "cross.csv", "--quiet") == (0, "", [])
    assert run("export", "cross.csv", "-o", "copy.npz", "--quiet") == (0, "", [])


def test_json_agrees_with_the_library_and_the_audit_file(folder, run, plan):
    status, out, err = run("plan", "cross.toml", "--json")
    assert (status, err) == (0, [])
    document = json.loads(out)
    assert document["passed"] is True
    assert document["audit"] == json.loads(json.dumps(plan.audit.to_dict()))
    assert document["plan"]["duration_s"] == plan.duration
    assert document["plan"]["bound_s"] == pytest.approx(plan.bound, rel=1e-12)
    assert document["plan"]["rows"] == len(plan.table)
    assert document["plan"]["waiting_s"] == pytest.approx(0.1)
    assert [step["motion"] for step in document["steps"]] == ["line", "line", "wait", "joint"]
    assert sum(step["duration_s"] for step in document["steps"]) == pytest.approx(plan.duration)
    assert document["steps"][0]["corner"]["asked"] == "30 mm"
    (mark,) = document["marks"]
    assert mark == {"name": "vacuum on", "time_s": plan.marks[0].time, "row": plan.marks[0].row + 1, "step": 3}
    assert document["files"] == {"tables": ["cross.csv"], "audit": "cross.audit.json"}
    assert json.loads(Path("cross.audit.json").read_text()) == document


def test_dry_run_writes_nothing(folder, run):
    status, out, _ = run("plan", "cross.toml", "--no-table")
    assert status == 0 and out.endswith("\nnothing written\n")
    assert made(folder) == set()


def test_same_input_gives_the_same_bytes(home, folder, run):
    assert run("plan", "cross.toml", "-o", "cross.csv", "-o", "cross.npz", "--quiet")[0] == 0
    for name in made(folder):
        assert (folder / name).read_bytes() == (home / name).read_bytes()


def test_a_table_too_long_to_hold_whole_is_the_same(home, folder, run, monkeypatch):
    monkeypatch.setattr("pathplan.report.outputs.WHOLE", 100)
    monkeypatch.setattr(pathplan.Plan, "table", property(lambda plan: pytest.fail("held whole")))
    assert run("plan", "cross.toml", "-o", "cross.csv", "-o", "cross.npz", "--quiet")[0] == 0
    for name in made(folder):
        assert (folder / name).read_bytes() == (home / name).read_bytes()


@pytest.mark.parametrize("command", ["plan cross.toml", "audit cross.toml", "export cross.toml -o a.csv"])
def test_screens_fit_a_hundred_columns_of_ascii(run, command):
    status, out, _ = run(*command.split())
    assert status == 0
    assert max(map(len, out.splitlines())) <= 100
    assert out.isascii()


def test_long_names_do_not_push_the_verdict_off_the_screen(folder, run):
    text = CROSS.replace("Across the portal", "Very long title " * 20)
    text = text.replace('name = "down"', f'name = "{"n" * 200}"')
    (folder / "long.toml").write_text(text.replace("vacuum on", "mark " * 50))
    status, out, _ = run("plan", "long.toml")
    assert status == 0
    assert max(map(len, out.splitlines())) <= 100
    assert out.splitlines()[0].endswith("...: within limits")


# what the command line changes of the task


def tool_speeds(table, arm, cycle):
    """Tool speeds (N-1,) from one row to the next, by forward kinematics alone."""
    points = arm.forward(table.position)[:, :3, 3]
    return np.linalg.norm(np.diff(points, axis=0), axis=1) / cycle


@pytest.mark.parametrize(
    ("options", "cap"), [(["--reduced-speed"], 0.25), (["--speed", "120 mm/s"], 0.12), (["--speed", "300"], 0.3)]
)
def test_speed_caps_the_tool(planned, run, options, cap):
    arm = pathplan.load_task("cross.toml").arm
    assert tool_speeds(pathplan.read_table("cross.npz"), arm, 0.004).max() > 1.5 * cap
    assert run("plan", "cross.toml", "-o", "slow.npz", "--quiet", *options)[0] == 0
    slow = tool_speeds(pathplan.read_table("slow.npz"), arm, 0.004).max()
    assert 0.99 * cap < slow <= cap * (1 + 1e-6)


def test_speed_leaves_a_lower_cap_of_the_task_alone(folder, run):
    (folder / "slow.toml").write_text(CROSS.replace('start = "home"', 'start = "home"\nspeed = "100 mm/s"'))
    assert run("plan", "slow.toml", "-o", "slow.npz", "--reduced-speed", "--quiet")[0] == 0
    table = pathplan.read_table("slow.npz")
    assert tool_speeds(table, pathplan.load_task("slow.toml").arm, 0.004).max() <= 0.1 * (1 + 1e-6)


@pytest.mark.parametrize("pace", [0.5, 0.2])
def test_pace_slows_in_time(planned, run, pace):
    full = json.loads(Path("cross.audit.json").read_text())
    slow = json.loads(run("plan", "cross.toml", "--no-table", "--json", "--pace", f"{100 * pace} %")[1])
    # three stretches at most, each up to one tick longer than its motion
    assert slow["plan"]["motion_s"] == pytest.approx(full["plan"]["motion_s"] / pace, abs=3 * 0.004 / pace)
    assert slow["plan"]["waiting_s"] == pytest.approx(0.1)
    assert slow["plan"]["bound_s"] == pytest.approx((full["plan"]["bound_s"] - 0.1) / pace + 0.1)
    for power, quantity in enumerate(("velocity", "acceleration", "jerk"), start=1):
        for joint, before in zip(slow["audit"]["continuous"], full["audit"]["continuous"], strict=True):
            scaled = before[quantity]["percent"] * pace**power
            assert joint[quantity]["percent"] == pytest.approx(scaled, rel=1e-3, abs=1e-6)


def test_cycle_sets_the_rows(run):
    assert run("plan", "cross.toml", "--cycle", "2 ms", "-o", "a.npz", "--quiet")[0] == 0
    table = pathplan.read_table("a.npz")
    assert table.cycle == 0.002
    np.testing.assert_allclose(np.diff(table.time), 0.002, rtol=1e-9)


# what may be overwritten


def test_own_earlier_output_is_replaced(planned, run):
    before = Path("cross.csv").read_bytes()
    assert run("plan", "cross.toml", "--quiet", "--pace", "50 %")[0] == 0
    assert Path("cross.csv").read_bytes() != before


TAKEN = "exists and is no earlier output of this task: choose another name or use --overwrite"


@pytest.mark.parametrize("name", ["out.csv", "out.audit.json"])
@pytest.mark.parametrize("content", [b"", b"my notes\n", b"{}", b'{"pathplan": "0", "audit": {}}', b"[[[[["])
def test_foreign_files_stay(folder, run, name, content):
    (folder / name).write_bytes(content)
    assert run("plan", "cross.toml", "-o", "out.csv") == (2, "", [f"pathplan: {name}: {TAKEN}"])
    assert (folder / name).read_bytes() == content
    assert made(folder) == {name}


def test_foreign_files_are_replaced_when_asked(folder, run):
    for name in ("out.csv", "out.audit.json"):
        (folder / name).write_bytes(b"my notes\n")
    assert run("plan", "cross.toml", "-o", "out.csv", "--overwrite", "--quiet") == (0, "", [])
    assert len(pathplan.read_table("out.csv")) > 100
    assert json.loads((folder / "out.audit.json").read_text())["passed"] is True


def test_output_of_another_task_stays(folder, run):
    (folder / "other.toml").write_text(CROSS.replace("Across", "Along"))
    assert run("plan", "other.toml", "-o", "out.csv", "--quiet")[0] == 0
    before = (folder / "out.csv").read_bytes()
    assert run("plan", "cross.toml", "-o", "out.csv") == (2, "", [f"pathplan: out.csv: {TAKEN}"])
    assert (folder / "out.csv").read_bytes() == before
    (folder / "out.csv").unlink()
    assert run("plan", "cross.toml", "-o", "out.csv") == (2, "", [f"pathplan: out.audit.json: {TAKEN}"])


def test_destinations_are_checked_before_the_work(run, monkeypatch):
    monkeypatch.setattr(pathplan, "plan", lambda *args, **options: pytest.fail("planned before looking"))
    for argv in (["-o", "no/where.csv"], ["-o", "a.txt"], ["-o", "."], ["-o", "a.csv", "-o", "a.csv"]):
        assert run("plan", "cross.toml", *argv)[0] == 2


# a plan that fails


BROKEN = "weak.toml: breaks limits: shoulder: root-mean-square torque "


def test_failing_plan_writes_its_audit_but_no_table(folder, run):
    status, out, (line,) = run("plan", "weak.toml")
    assert status == 1
    assert line.startswith(f"pathplan: {BROKEN}") and line.endswith(": no table written")
    for part in (" N m over the whole cycle ", " exceeds the continuous torque 20 N m"):
        assert part in line
    assert out.splitlines()[0] == "Reach forward: BREAKS LIMITS (1 exceedance)"
    assert out.splitlines()[-1] == "written: weak.audit.json"
    assert made(folder) == {"weak.audit.json"}
    document = json.loads((folder / "weak.audit.json").read_text())
    assert document["passed"] is False
    assert document["files"]["tables"] == []
    exceeded = [found["joint"] for found in document["audit"]["findings"] if found["level"] == "exceedance"]
    assert exceeded == ["shoulder"]


def test_write_anyway_marks_the_header(folder, run):
    status, _, (line,) = run("plan", "weak.toml", "--write-anyway", "-o", "weak.csv", "-o", "weak.npz")
    assert status == 1 and line.endswith(": written all the same")
    for name in ("weak.csv", "weak.npz"):
        assert pathplan.read_table(name).meta["breaks_limits"] is True
    assert (folder / "weak.csv").read_text().splitlines()[1].startswith("# THIS TABLE BREAKS LIMITS")
    # the next plan fails too and leaves the old table, saying so
    status, out, (line,) = run("plan", "weak.toml", "--quiet")
    assert (status, out) == (1, "")
    assert line.endswith(": no table written, weak.csv is of an earlier plan")


def test_failing_plan_in_audit_and_export(folder, run):
    status, out, (line,) = run("audit", "weak.toml", "--quiet")
    assert (status, out) == (1, "") and line.startswith(f"pathplan: {BROKEN}") and not line.endswith("written")
    assert made(folder) == set()
    status, _, (line,) = run("export", "weak.toml", "-o", "w.npz")
    assert status == 1 and line.endswith(": no table written")
    assert made(folder) == {"w.audit.json"}


def test_what_cannot_be_followed_is_one_line_and_status_1(folder, run):
    (folder / "far.toml").write_text(CROSS.replace("[900, 500, 700]", "[900, 500, 100]"))
    why = ["pathplan: far.toml: step[2]: loader4: the pose needs z at -970 mm, limit -600 mm"]
    for command in (["plan", "far.toml", "--quiet"], ["plan", "far.toml", "--remedies", "0 s"], ["export", "far.toml"]):
        more = ["-o", "a.csv"] if command[0] == "export" else []
        assert run(*command, *more) == (1, "", why)
    assert made(folder) == {"far.toml"}


def test_a_refused_plan_says_what_would_work(folder, run):
    """The target is 370 mm too low, which the limit tells."""
    (folder / "far.toml").write_text(CROSS.replace("[900, 500, 700]", "[900, 500, 100]"))
    status, out, (line,) = run("plan", "far.toml", "--remedies", "600 s")
    assert status == 1 and line.startswith("pathplan: far.toml: step[2]: ")
    remedy = "move the target of step 2 (down) by 370 mm along z: xyz = [900, 500, 470]"
    heading, *found = out.splitlines()
    assert heading == "would work, each change by itself and planned again:"
    assert any(text.startswith(f"- {remedy} (cycle time ") for text in found)
    document = json.loads(run("plan", "far.toml", "--json", "--remedies", "600 s")[1])
    assert document["refused"]["step"] == 2 and document["refused"]["message"] == line.removeprefix("pathplan: ")
    assert document["remedies_finished"] is True
    (one,) = [found for found in document["remedies"] if found["text"] == remedy]
    assert one["what"] == "target" and one["step"] == 2 and one["changes"]["shift"] == pytest.approx(0.37)
    assert run("plan", "far.toml", "--remedies", "soon")[2] == [
        'pathplan: --remedies: expected a time such as "0.2 s", got "soon"'
    ]


# audit and export of tables


def test_audit_of_a_table_finds_the_arm_beside_it(planned, run):
    status, out, err = run("audit", "cross.csv")
    assert (status, err) == (0, [])
    assert out.splitlines()[0].startswith("table cross.csv, judged against loader4 with tool ")
    assert "Across the portal, loader4: within limits" in out
    document = json.loads(run("audit", "cross.csv", "--json")[1])
    assert document["passed"] is True and document["notes"] == [] and document["table"] == "cross.csv"
    audit = pathplan.audit(pathplan.read_table("cross.csv"), pathplan.load_arm("loader4.toml"))
    assert document["audit"]["joints"] == json.loads(json.dumps(audit.to_dict()["joints"]))


def test_audit_of_a_table_whose_arm_has_changed(planned, run):
    arm = arm_text("loader4").replace("velocity = 1500", "velocity = 150")
    (planned / "loader4.toml").write_text(arm)
    status, out, (line,) = run("audit", "cross.csv")
    assert status == 1
    assert out.splitlines()[1] == "note: loader4.toml has changed since the table was planned"
    assert line.startswith("pathplan: cross.csv: breaks limits: x: velocity ")
    assert "exceeds the limit" in line and "150 mm/s" in line


def test_audit_of_a_table_without_its_arm(planned, run):
    (planned / "loader4.toml").rename(planned / "moved.toml")
    expected = "cross.csv: not judged, its header names loader4.toml, which is not beside it: give --arm FILE"
    assert run("audit", "cross.csv") == (2, "", [f"pathplan: {expected}"])
    assert run("audit", "cross.csv", "--arm", "moved.toml", "--tool", "vacuum gripper")[0] == 0
    assert run("audit", "cross.csv", "--arm", "moved.toml", "--tool", "cup") == (
        2,
        "",
        ['pathplan: loader4: unknown tool "cup", there is "vacuum gripper"'],
    )
    assert run("audit", "cross.csv", "--arm", "weak6.toml") == (
        2,
        "",
        ["pathplan: cross.csv: has 4 joints, glazer6 has 6"],
    )


def test_audit_takes_the_tool_that_the_header_names(planned, run):
    table = pathplan.read_table("cross.csv")
    pathplan.write_table(replace(table, meta={**table.meta, "tool": "vacuum gripper"}), "tool.csv")
    first = run("audit", "tool.csv")[1].splitlines()[0]
    assert first == "table tool.csv, judged against loader4 with tool vacuum gripper"


def test_audit_of_a_table_with_a_jump(planned, run):
    table = pathplan.read_table("cross.csv")
    position = table.position.copy()
    position[40:, 1] += 0.001
    pathplan.write_table(replace(table, position=position), "jump.csv")
    status, out, (line,) = run("audit", "jump.csv")
    assert status == 1 and "BREAKS LIMITS" in out
    assert line.startswith("pathplan: jump.csv: breaks limits: y: ")
    assert f"{table.time[40]:g} s" in line or f"{table.time[39]:g} s" in line or f"{table.time[41]:g} s" in line


def test_export_converts_a_table(planned, run):
    status, out, err = run("export", "cross.npz", "-o", "copy.csv", "-o", "copy.npz")
    assert (status, err) == (0, [])
    assert out.splitlines()[-1].startswith("written: copy.csv (")
    copy, table = pathplan.read_table("copy.npz"), pathplan.read_table("cross.npz")
    np.testing.assert_array_equal(copy.position, table.position)
    assert copy.meta == table.meta and copy.marks == table.marks
    np.testing.assert_allclose(pathplan.read_table("copy.csv").position, table.position, rtol=1e-15)


def test_export_without_an_arm_says_that_nothing_was_judged(planned, run):
    (planned / "loader4.toml").unlink()
    status, out, _ = run("export", "cross.csv", "-o", "c.npz")
    assert status == 0 and "not judged" in out and "written: c.npz" in out
    document = json.loads(run("export", "cross.csv", "-o", "c.npz", "--json")[1])
    assert document["passed"] is None and document["audit"] is None
    assert document["files"]["tables"] == ["c.npz"]


def test_export_of_a_table_that_breaks_limits(planned, run):
    status, out, (line,) = run("export", "weak.csv", "-o", "w.npz")
    assert status == 1 and line.endswith(": not written") and "nothing written" in out
    assert not (planned / "w.npz").exists()
    assert run("export", "weak.csv", "-o", "w.npz", "--write-anyway")[0] == 1
    assert pathplan.read_table("w.npz").meta["breaks_limits"] is True
    # without the arm the header's word stands
    (planned / "weak6.toml").unlink()
    expected = "pathplan: weak.csv: breaks limits: its header says so: not written"
    assert run("export", "weak.csv", "-o", "v.npz", "--quiet") == (1, "", [expected])


def test_export_overwrites_neither_its_source_nor_foreign_files(planned, run):
    before = (planned / "cross.csv").read_bytes()
    (planned / "sub").mkdir()
    source = os.path.join("sub", "..", "cross.csv")
    assert run("export", "cross.csv", "-o", source, "--overwrite") == (
        2,
        "",
        [f"pathplan: {source}: is the table that is read: choose another name"],
    )
    (planned / "mine.npz").write_bytes(b"mine")
    assert run("export", "cross.csv", "-o", "mine.npz") == (2, "", [f"pathplan: mine.npz: {TAKEN}"])
    assert (planned / "cross.csv").read_bytes() == before and (planned / "mine.npz").read_bytes() == b"mine"


def test_export_of_a_task(folder, run):
    status, out, _ = run("export", "cross.toml", "-o", "c.npz")
    assert status == 0
    assert out.splitlines()[0] == "Across the portal: within limits"
    assert made(folder) == {"c.npz", "c.audit.json"}


# bad input: status 2 and one line


@pytest.mark.parametrize(
    ("argv", "line"),
    [
        ([], "expected a command: plan, audit, export, retime, report, watch, figure or arm (see pathplan --help)"),
        (["plan"], "the following arguments are required: TASK (see pathplan plan --help)"),
        (["export", "a.csv"], "the following arguments are required: -o (see pathplan export --help)"),
        (["plan", "cross.toml", "--fast", "-x"], "unknown arguments: --fast -x (see pathplan plan --help)"),
        (["plan", "cross.toml", "--overw"], "unknown arguments: --overw (see pathplan plan --help)"),
        (["plan", "cross.toml", "-o"], "argument -o: expected one argument (see pathplan plan --help)"),
        (
            ["plan", "cross.toml", "--json", "--quiet"],
            "argument --quiet: not allowed with argument --json (see pathplan plan --help)",
        ),
        (
            ["plan", "cross.toml", "--speed", "1", "--reduced-speed"],
            "argument --reduced-speed: not allowed with argument --speed (see pathplan plan --help)",
        ),
        (
            ["plan", "cross.toml", "--no-table", "-o", "a.csv"],
            "argument -o: not allowed with argument --no-table (see pathplan plan --help)",
        ),
        (["plan", "none.toml"], "none.toml: no such file"),
        (["audit", "none.csv"], "none.csv: there is no such file"),
        (["plan", "."], ".: is a directory, expected a TOML file"),
        (["plan", "no\nline.toml"], "no?line.toml: no such file"),
        (["plan", "cross.toml", "--speed", "fast"], '--speed: expected a speed such as "250 mm/s", got "fast"'),
        (["plan", "cross.toml", "--speed", "250 mm"], '--speed: expected a speed such as "250 mm/s", got "250 mm"'),
        (["plan", "cross.toml", "--speed", "nan"], '--speed: expected a speed such as "250 mm/s", got nan'),
        (["plan", "cross.toml", "--speed", "0"], '--speed: expected a speed above zero such as "250 mm/s", got "0"'),
        (["plan", "cross.toml", "--pace", "50"], '--pace: expected a share such as "15 %", got "50"'),
        (
            ["plan", "cross.toml", "--pace", "120 %"],
            '--pace: expected more than 0 % and at most 100 %, such as "50 %", got "120 %"',
        ),
        (
            ["plan", "cross.toml", "--pace", "0 %"],
            '--pace: expected more than 0 % and at most 100 %, such as "50 %", got "0 %"',
        ),
        (["plan", "cross.toml", "--cycle", "0"], '--cycle: expected a time from 50 us to 1 s, got "0"'),
        (["plan", "cross.toml", "--cycle", "4 mm"], '--cycle: expected a time such as "0.2 s", got "4 mm"'),
        (["audit", "a.csv", "--pace", "5 %"], "argument --pace: only for a task, a.csv is a table"),
        (
            ["export", "a.npz", "-o", "b.csv", "--reduced-speed"],
            "argument --reduced-speed: only for a task, a.npz is a table",
        ),
        (["audit", "cross.toml", "--arm", "a.toml"], "argument --arm: only for a table, a task names its own"),
        (
            ["plan", "cross.toml", "-o", "a.txt"],
            'a.txt: unknown kind of table: expected .csv, .jsonl, .npz or .parquet, got ".txt"',
        ),
        (["plan", "cross.toml", "-o", "no/a.csv"], "no/a.csv: can't be written: there is no folder no"),
        (["plan", "cross.toml", "-o", "."], ".: is a directory: expected the name of a file"),
        (["plan", "cross.toml", "-o", "a.csv", "-o", "./a.csv"], "a.csv: given twice with -o"),
        (
            ["plan", "cross.toml", "--pace", "0.00001 %", "--no-table"],
            None,
        ),
    ],
)
def test_bad_input_is_one_line(folder, run, argv, line):
    status, out, err = run(*argv)
    assert (status, out, len(err)) == (2, "", 1)
    if line is None:
        assert err[0].startswith("pathplan: cross.toml: would take ")
        assert err[0].endswith(" rows, more than 20000000: slow it less or lengthen the cycle")
    else:
        assert err == [f"pathplan: {line}"]
    assert made(folder) == set()


def test_unknown_command(run):
    status, out, (line,) = run("plann", "cross.toml")
    assert (status, out) == (2, "")
    assert line.startswith("pathplan: argument COMMAND: invalid choice: 'plann'")


def test_gathered_problems_are_a_line_each(folder, run):
    text = CROSS.replace('blend = "30 mm"', 'blendd = "30 mm"').replace('wait = "0.1 s"', 'wait = "0.1 mm"')
    (folder / "bad.toml").write_text(text)
    status, out, err = run("plan", "bad.toml")
    assert (status, out) == (2, "")
    assert err == [
        'pathplan: bad.toml: step[1].blendd: unknown key, did you mean "blend"?',
        'pathplan: bad.toml: step[3].wait: expected a time such as "0.2 s", got "0.1 mm"',
    ]


# ends that nobody planned


@pytest.mark.parametrize("place", ["pathplan.plan", "pathplan.load_task", "pathplan.report.outputs.write_table"])
def test_ctrl_c_leaves_nothing(folder, run, monkeypatch, place):
    def interrupted(*args, **options):
        raise KeyboardInterrupt

    run("plan", "--help")  # so that every module is there to be patched
    monkeypatch.setattr(place, interrupted)
    assert run("plan", "cross.toml") == (130, "", [])
    assert made(folder) == set()


@pytest.mark.parametrize("earlier", [False, True])
def test_ctrl_c_in_the_middle_of_writing(folder, home, run, monkeypatch, earlier):
    if earlier:
        for name in ("cross.csv", "cross.audit.json"):
            shutil.copy(home / name, folder)
    before = {name: (folder / name).read_bytes() for name in made(folder)}

    def cut(pieces, tell, done, total):
        yield next(pieces).part(0, 100)
        raise KeyboardInterrupt

    monkeypatch.setattr("pathplan.report.outputs._told", cut)
    assert run("plan", "cross.toml", "--pace", "50 %") == (130, "", [])
    assert {name: (folder / name).read_bytes() for name in made(folder)} == before


@pytest.mark.parametrize(("debug", "lines"), [(False, 1), (True, None)])
def test_an_error_of_our_own(run, monkeypatch, debug, lines):
    def broken(*args, **options):
        raise ZeroDivisionError("division\nby zero")

    monkeypatch.setattr(pathplan, "plan", broken)
    monkeypatch.delenv("PATHPLAN_DEBUG", raising=False)
    if debug:
        monkeypatch.setenv("PATHPLAN_DEBUG", "1")
    status, out, err = run("plan", "cross.toml")
    assert (status, out) == (70, "")
    assert err[-1] == (
        "pathplan: internal error: ZeroDivisionError: division?by zero "
        "(please report; PATHPLAN_DEBUG=1 shows the traceback)"
    )
    assert len(err) == 1 if lines else err[0].startswith("Traceback")


class Gone(io.StringIO):
    """A standard output whose reader has gone, or whose disk is full."""

    def __init__(self, error: OSError) -> None:
        super().__init__()
        self.error = error

    def write(self, text: str) -> int:
        raise self.error


def test_a_reader_that_went_away_does_not_change_the_verdict(folder, capsys, monkeypatch):
    monkeypatch.setattr(sys, "stdout", Gone(BrokenPipeError(32, "Broken pipe")))
    assert main(["plan", "cross.toml"]) == 0
    assert capsys.readouterr().err == ""
    assert made(folder) == {"cross.csv", "cross.audit.json"}


def test_output_that_cannot_be_written_is_one_line(folder, capsys, monkeypatch):
    monkeypatch.setattr(sys, "stdout", Gone(OSError(28, "No space left on device")))
    assert main(["audit", "cross.toml"]) == 1
    expected = "pathplan: standard output: can't be written: No space left on device\n"
    assert capsys.readouterr().err == expected


def test_no_standard_output_at_all(folder, monkeypatch):
    monkeypatch.setattr(sys, "stdout", None)
    assert main(["plan", "cross.toml"]) == 0
    assert made(folder) == {"cross.csv", "cross.audit.json"}


def test_a_title_beyond_the_encoding_of_the_stream(folder, monkeypatch):
    (folder / "cross.toml").write_text(CROSS.replace("Across the portal", "Über die Brücke →"), encoding="utf-8")
    raw = io.BytesIO()
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(raw, encoding="latin-1"))
    assert main(["plan", "cross.toml", "--no-table"]) == 0
    assert raw.getvalue().decode("latin-1").startswith("Über die Brücke \\u2192: within limits")


# help, version, start-up


@pytest.mark.parametrize("argv", [[], ["plan"], ["audit"], ["export"]])
def test_help_teaches(run, argv):
    status, out, err = run(*argv, "--help")
    assert (status, err) == (0, [])
    assert max(map(len, out.splitlines())) <= 100
    assert out.count("\n  pathplan ") >= 2  # examples
    assert "exit status: 0 within limits; 1 " in out and "no safety function" in out


def test_help_examples_are_understood():
    """Every example of the help texts is a command line that the parser takes."""
    from pathplan import cli

    texts = (cli.EXAMPLES, cli.PLAN_EXAMPLES, cli.AUDIT_EXAMPLES, cli.EXPORT_EXAMPLES)
    examples = [line.strip() for text in texts for line in text.splitlines() if line.startswith("  pathplan ")]
    assert len(examples) >= 12
    for line in examples:
        argv = shlex.split(line.split("   ")[0].split("&&")[0])[1:]
        with contextlib.suppress(SystemExit):  # --help
            _, unknown = cli._parser().parse_known_args(argv)
            assert unknown == []


def test_version(run):
    status, out, err = run("--version")
    assert (status, err) == (0, [])
    assert out.startswith("pathplan ") and len(out.split()) == 2


def test_help_imports_no_numpy():
    command = [sys.executable, "-X", "importtime", "-m", "pathplan", "--help"]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, timeout=60)
    assert done.returncode == 0 and "usage: pathplan" in done.stdout
    imported = {line.rsplit("|", 1)[-1].strip() for line in done.stderr.splitlines()}
    assert "pathplan.cli" in imported
    assert not {"numpy", "scipy", "roboticstoolbox"} & imported


# the progress bar


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_progress_is_drawn_on_a_terminal_and_wiped(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    stream = Terminal()
    with Progress(stream, delay=0.0) as tell:
        tell("timing", 3, 4)
        while "timing  [##################......]  75 %  0 s" not in stream.getvalue():
            pass
    last = stream.getvalue().split("\r")
    assert last[-1] == "" and last[-2].strip() == ""


def test_progress_keeps_still_where_work_is_short_or_nobody_looks(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    for stream, quiet, delay in ((Terminal(), False, 60.0), (io.StringIO(), False, 0.0), (Terminal(), True, 0.0)):
        with Progress(stream, quiet=quiet, delay=delay) as tell:
            tell("timing", 1, 2)
        assert stream.getvalue() == ""


def test_progress_line_before_anything_is_done():
    tell = Progress(None)
    tell("path", 0, 1)
    assert tell.line(3.2) == "path ...  3 s"


def test_progress_survives_a_terminal_that_closes(monkeypatch):
    monkeypatch.setenv("TERM", "xterm")
    stream = Terminal()
    with Progress(stream, delay=0.0) as tell:
        tell("timing", 1, 2)
        while not stream.getvalue():
            pass
        stream.close()
    assert stream.closed


def test_savings_are_told_when_asked_for(folder, run):
    status, out, _ = run("plan", "cross.toml", "--no-table", "--savings")
    assert status == 0
    where = out.splitlines().index("what would buy time, each change by itself and timed again:")
    assert all(line.endswith(" ms") and "10 % more" in line for line in out.splitlines()[where + 1 :])
    status, out, _ = run("plan", "cross.toml", "--no-table", "--savings", "--json")
    savings = json.loads(out)["savings"]
    assert status == 0 and savings and all(saving["saved_ms"] > 0 for saving in savings)
    assert "savings" not in json.loads(run("plan", "cross.toml", "--no-table", "--json")[1])
