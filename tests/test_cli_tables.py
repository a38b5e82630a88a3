"""The command line on tables from anywhere, single lines and kinds of file: exit statuses, messages, files, screens."""

import dataclasses
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas
import pytest

import pathplan
from pathplan.cli import main
from tests.kills import environment
from tests.test_cli import CROSS, arm_text

COLUMNS = ("x_mm", "y_mm", "z_mm", "wrist_deg")


@pytest.fixture(scope="module")
def home(tmp_path_factory):
    """A folder with an arm and a task, planned once."""
    folder = tmp_path_factory.mktemp("home")
    (folder / "loader4.toml").write_text(arm_text("loader4"))
    (folder / "cross.toml").write_text(CROSS)
    return folder


@pytest.fixture(scope="module")
def plan(home):
    return pathplan.plan(pathplan.load_task(home / "cross.toml"))


@pytest.fixture
def folder(tmp_path, monkeypatch):
    (tmp_path / "loader4.toml").write_text(arm_text("loader4"))
    (tmp_path / "cross.toml").write_text(CROSS)
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


def logged(plan, columns=COLUMNS, time="time_s", size=1.0):
    """The plan's positions as another program would log them."""
    values = plan.table.position * [1000, 1000, 1000, 180 / np.pi]
    return pandas.DataFrame({time: plan.table.time * size, **dict(zip(columns, values.T, strict=True))})


# audit of tables from elsewhere


def test_a_table_from_elsewhere_is_audited(plan, folder, run):
    logged(plan).to_csv("log.csv", index=False)
    status, out, err = run("audit", "log.csv", "--arm", "loader4.toml", "--tool", "vacuum gripper")
    assert (status, err) == (0, [])
    assert out.splitlines()[0] == "table log.csv, judged against loader4 with tool vacuum gripper"
    assert "loader4: within limits" in out
    assert "judged by finite differences of the positions" in " ".join(out.split())
    assert "- the table states no cycle: 4 ms found from its times" in out
    assert max(map(len, out.splitlines())) <= 100 and out.isascii()


def test_options_name_columns_and_units(plan, folder, run):
    logged(plan, ("A1", "A2", "A3", "A4"), "stamp", 1000).to_csv("log.csv", index=False, sep=";")
    columns = "A1=x, A2=y, A3=z, A4=wrist"
    options = ["--arm", "loader4.toml", "--time", "stamp", "--columns", columns, "--unit", "deg, mm, ms"]
    document = json.loads(run("audit", "log.csv", *options, "--json")[1])
    assert document["passed"] is True and document["audit"]["cycle_s"] == 0.004
    assert document["columns_read"] == ["stamp", "A1", "A2", "A3", "A4"] and document["read_from"] == "log.csv"
    audit = pathplan.audit(dataclasses.replace(plan.table, **NOTHING_ELSE), plan.arm)
    for mine, other in zip(document["audit"]["joints"], audit.to_dict()["joints"], strict=True):
        assert mine["velocity"]["percent"] == pytest.approx(other["velocity"]["percent"], rel=1e-9)


NOTHING_ELSE = dict.fromkeys(("velocity", "acceleration", "jerk", "torque", "pose", "tool_speed"))


@pytest.mark.parametrize(("suffix", "separator"), [(".txt", " "), (".tsv", "\t"), (".CSV", ",")])
def test_other_names_of_text_files(plan, folder, run, suffix, separator):
    logged(plan).to_csv(f"log{suffix}", index=False, sep=separator)
    assert run("audit", f"log{suffix}", "--arm", "loader4.toml", "--quiet") == (0, "", [])
    line = f"gone{suffix}: there is no such file"
    assert run("audit", f"gone{suffix}", "--arm", "loader4.toml") == (2, "", [f"pathplan: {line}"])


def test_every_fault_is_named_with_row_and_joint(plan, folder, run):
    table = logged(plan)
    table.loc[40:, "y_mm"] += 30.0  # a jump
    table.loc[100, "z_mm"] = None
    table.loc[150, "time_s"] = table.loc[149, "time_s"]
    table.loc[200, "time_s"] += 0.001
    table.iloc[20:-20].to_csv("log.csv", index=False)
    status, out, (line,) = run("audit", "log.csv", "--arm", "loader4.toml", "--json")
    findings = json.loads(out)["audit"]["findings"]
    faults = [(f["row"], f["joint"], f["quantity"]) for f in findings if f["level"] == "exceedance"]
    assert status == 1 and line.startswith("pathplan: log.csv: breaks limits: row 81: position of z is not a finite")
    for fault in ((81, "z", "position"), (131, None, "time"), (181, None, "time"), (21, "y", "position")):
        assert fault in faults
    texts = [f["text"] for f in findings]
    assert "row 131: time repeats 0.596 s" in texts
    assert "row 181: time is 0.801 s, where the cycle of 4 ms puts 0.8 s" in texts
    assert any(text.startswith("y: position jumps by 29.14 mm from row 20 to row 21, at 0.16 s") for text in texts)
    assert any("the first row is not at rest, velocity" in text for text in texts)
    assert any("the last row is not at rest, velocity" in text for text in texts)


def test_a_position_beyond_its_limit(plan, folder, run):
    table = logged(plan)
    table["x_mm"] += 1500.0
    table.to_csv("log.csv", index=False)
    status, _, (line,) = run("audit", "log.csv", "--arm", "loader4.toml", "--quiet")
    assert status == 1
    assert " lies beyond the limit 2000 mm by " in line and "(row " in line and "x: position " in line


def test_a_cap_on_the_tool_speed(plan, folder, run):
    logged(plan).to_csv("log.csv", index=False)
    arm = ["--arm", "loader4.toml", "--tool", "vacuum gripper"]
    fastest = np.linalg.norm(np.diff(plan.table.pose[:, :3, 3], axis=0), axis=1).max() / 0.004
    assert run("audit", "log.csv", *arm, "--speed", f"{1010 * fastest} mm/s", "--quiet")[0] == 0
    status, _, (line,) = run("audit", "log.csv", *arm, "--reduced-speed", "--quiet")
    assert status == 1 and "tool: speed " in line and " exceeds the limit 250 mm/s" in line


def test_targets_of_a_task(plan, folder, run):
    logged(plan).to_csv("log.csv", index=False)
    status, out, err = run("audit", "log.csv", "--task", "cross.toml")
    assert (status, err) == (0, [])
    rows = [line.split() for line in out.splitlines()]
    assert ["1", "across", "fly-by"] in [row[:3] for row in rows] and ["2", "down", "passed"] in [
        row[:3] for row in rows
    ]
    table = logged(plan)
    table["wrist_deg"] += 1.0
    table.to_csv("log.csv", index=False)
    status, out, (line,) = run("audit", "log.csv", "--task", "cross.toml", "--json")
    targets = {target["step"]: target for target in json.loads(out)["targets"]}
    assert targets[2]["passed"] is False and targets[2]["joint"] == "wrist"
    assert targets[2]["joint_off"] == pytest.approx(-1.0) and targets[2]["unit"] == "deg"
    assert targets[2]["angle_deg"] == pytest.approx(1.0) and targets[2]["distance_mm"] < 1e-9
    assert status == 1 and "step 2 (down): its target is not passed: nearest is row " in line


def test_our_own_tables_take_a_task_too(plan, folder, run):
    pathplan.write_table(plan.table, "own.csv")
    assert run("audit", "own.csv", "--task", "cross.toml", "--quiet") == (0, "", [])


# a single line


def test_a_line_without_a_file(folder, run):
    ends = ["--from", "800 500 900 180 0 0", "--to", "1100 700 800 180 0 30"]
    status, out, err = run("audit", *ends, "--arm", "loader4.toml", "--tool", "vacuum gripper")
    assert (status, err) == (0, [])
    lines = out.splitlines()
    assert lines[0] == "line from 800 500 900 180 0 0 to 1100 700 800 180 0 30: within limits"
    assert [line.split()[0] for line in lines if line.strip()[-1:].isdigit() and "%  " in line][:3] == [
        "10",
        "20",
        "30",
    ]
    assert max(map(len, lines)) <= 100 and out.isascii() and "no safety function" in out
    document = json.loads(run("audit", *ends, "--arm", "loader4.toml", "--json", "--speed", "100")[1])
    assert document["passed"] is True and len(document["line"]["parts"]) == 10
    assert max(part["tool_speed_mm_s"] for part in document["line"]["parts"]) <= 100 * (1 + 1e-6)
    assert [joint["name"] for joint in document["line"]["start_joints"]] == ["x", "y", "z", "wrist"]
    assert {path.name for path in folder.iterdir()} == {"loader4.toml", "cross.toml"}


def test_a_line_that_can_not_be_followed(folder, run):
    ends = ["--from", "home", "--to", "1100 700 100 180 0 0"]
    status, out, (line,) = run("audit", *ends, "--arm", "loader4.toml")
    assert (status, out) == (1, "")
    assert line == "pathplan: line: loader4: the pose needs z at -1150 mm, limit -600 mm"


# exports


def test_kinds_units_and_columns(plan, folder, run):
    options = ["--write-units", "rad, m", "--write-columns", "velocity, tool speed"]
    status, out, err = run("export", "cross.toml", "-o", "a.csv", "-o", "a.jsonl", "-o", "a.parquet", *options)
    assert (status, err) == (0, []) and "written: a.csv (" in out
    frames = [
        pandas.read_csv("a.csv", comment="#", engine="python"),
        pandas.read_json("a.jsonl", lines=True, precise_float=True),
        pandas.read_parquet("a.parquet"),
    ]
    for frame in frames:
        assert set(frame.columns) - {"pathplan"} == {
            "time_s", "step", "tool_speed_m_s", "x_m", "y_m", "z_m", "wrist_rad", "x_m_s", "y_m_s", "z_m_s",
            "wrist_rad_s",
        }  # fmt: skip
        assert np.array_equal(frame["wrist_rad"].to_numpy() + 0.0, plan.table.position[:, 3] + 0.0)


def test_another_cycle_evaluates_the_timing_anew(plan, folder, run):
    assert run("export", "cross.toml", "-o", "fine.npz", "--cycle", "1 ms", "--quiet")[0] == 0
    fine = pathplan.read_table("fine.npz")
    first = next(part for part in plan.parts if part.timing is not None)
    exact = first.timing.derivatives(fine.time[: int(1000 * first.timing.duration)])
    for values, column in zip(exact, (fine.position, fine.velocity, fine.acceleration, fine.jerk), strict=True):
        assert np.array_equal(values, column[: len(values)])


def test_one_file_a_stretch(folder, run):
    for name in ("a-3.csv", "a-9.csv"):
        Path(name).write_text("mine")
    status, out, _ = run("export", "cross.toml", "-o", "a.csv", "--split", "stretch")
    assert status == 0
    assert out.splitlines()[1].startswith("written: a-1.csv (") and "a-2.csv" in out
    assert out.splitlines()[2] == "note: a-3.csv, a-9.csv are of a motion with other stretches"
    tables = [pathplan.read_table(f"a-{k}.csv") for k in (1, 2)]
    assert [table.meta["stretch"]["number"] for table in tables] == [1, 2]
    # a stretch that exists and is no earlier output is kept, and nothing else is written
    Path("b-2.csv").write_text("mine")
    status, _, (line,) = run("export", "cross.toml", "-o", "b.csv", "--split", "stretch")
    assert (status, line) == (
        2,
        "pathplan: b-2.csv: exists and is no earlier output of this task: choose another name or use --overwrite",
    )
    assert Path("b-2.csv").read_text() == "mine" and not Path("b-1.csv").exists()


def test_the_same_command_replaces_its_stretches(folder, run):
    assert run("export", "cross.toml", "-o", "a.csv", "--split", "stretch", "--quiet")[0] == 0
    before = Path("a-1.csv").read_bytes()
    assert run("export", "cross.toml", "-o", "a.csv", "--split", "stretch", "--quiet")[0] == 0
    assert Path("a-1.csv").read_bytes() == before


def test_position_velocity_time(folder, run):
    status, out, err = run("export", "cross.toml", "-o", "a.pvt.csv", "--pvt", "20 ms")
    assert (status, err) == (0, [])
    text = " ".join(out.split())
    assert (
        "position and velocity every 20 ms: cubic Hermite between the rows (measured at 40 instants a period)" in text
    )
    table = pathplan.read_table("a.pvt.csv")
    assert f"x {table.meta['pvt']['largest_error']['x_mm']:.3g} mm" in text
    document = json.loads(run("export", "cross.toml", "-o", "a.pvt.csv", "--pvt", "20 ms", "--json")[1])
    assert document["interpolation_error"] == table.meta["pvt"]["largest_error"]


@pytest.mark.parametrize(
    "options", [["--split", "stretch"], ["--pvt", "40 ms"], ["--split", "stretch", "--pvt", "40 ms"]]
)
def test_a_table_split_and_made_coarser(plan, folder, run, options):
    pathplan.write_table(plan.table, "own.npz")
    status, _, err = run("export", "own.npz", "-o", "b.csv", *options)
    assert (status, err) == (0, [])
    files = sorted(path.name for path in folder.glob("b*.csv"))
    assert files == (["b-1.csv", "b-2.csv"] if "--split" in options else ["b.csv"])
    assert all(("pvt" in pathplan.read_table(name).meta) == ("--pvt" in options) for name in files)


def test_a_table_from_elsewhere_becomes_ours(plan, folder, run):
    logged(plan).to_parquet("log.parquet")
    assert run("export", "log.parquet", "-o", "own.csv", "--arm", "loader4.toml")[0] == 0
    assert run("audit", "own.csv", "--quiet") == (0, "", [])  # its header names the arm beside it
    np.testing.assert_allclose(pathplan.read_table("own.csv").position, plan.table.position, rtol=1e-14, atol=1e-14)


# one line each


OWN = "own.csv: was written by pathplan, so its columns are known: say --time, --columns and --unit of others"
ARM = ["--arm", "loader4.toml"]


@pytest.mark.parametrize(
    ("argv", "line"),
    [
        (["audit"], "the following arguments are required: TASK|TABLE (see pathplan audit --help)"),
        (["audit", "log.csv"], "log.csv: was not written by pathplan: say whose joints these are with --arm FILE"),
        (["audit", "own.csv", *ARM, "--unit", "deg"], OWN),
        (["audit", "bare.csv", *ARM], "bare.csv: column wrist: tells no unit: say it with --unit deg (or rad)"),
        (["audit", "log.csv", *ARM, "--cycle", "4 ms"], "argument --cycle: only for a task, log.csv is a table"),
        (["audit", "cross.toml", "--time", "t"], "argument --time: only for a table"),
        (["audit", "cross.toml", "--task", "cross.toml"], "argument --task: only for a table"),
        (
            ["audit", "log.csv", "--task", "cross.toml", "--tool", "cup"],
            "argument --tool: not allowed with argument --task, which names its own tools",
        ),
        (["audit", "log.csv", *ARM, "--near", "1 mm"], "argument --near: only with --task, whose targets it is about"),
        (
            ["audit", "log.csv", "--task", "cross.toml", "--near", "1 s"],
            '--near: expected a distance and an angle above zero, such as "0.5 mm, 0.1 deg", got "1 s"',
        ),
        (
            ["audit", "log.csv", "--task", "cross.toml", "--near", "0 mm"],
            '--near: expected a distance and an angle above zero, such as "0.5 mm, 0.1 deg", got "0 mm"',
        ),
        (
            ["audit", "log.csv", "--from", "home", "--to", "home"],
            "arguments --from and --to: a single line takes no file, got log.csv",
        ),
        (["audit", "--from", "home", *ARM], "a single line takes --from, --to and --arm: --to is missing"),
        (["audit", "--to", "home", *ARM], "a single line takes --from, --to and --arm: --from is missing"),
        (
            ["audit", "--from", "home", "--to", "parked"],
            "a single line takes --from, --to and --arm: --arm is missing",
        ),
        (
            ["audit", "--from", "home", "--to", "parked", *ARM, "--unit", "deg"],
            "argument --unit: only for a table",
        ),
        (
            ["audit", "--from", "home", "--to", "nowhere", *ARM],
            '--to: expected a pose "x y z rx ry rz", joint values "joints 0 90 ..." or the name of a position, '
            'got "nowhere", positions are "home" or "parked"',
        ),
        (
            ["export", "own.csv", "-o", "a.npz", "--cycle", "1 ms"],
            "argument --cycle: rows of a table are never interpolated: export the task it comes from with --cycle",
        ),
        (
            ["export", "own.csv", "-o", "a.csv", "--pvt", "6 ms"],
            "own.csv: pvt: expected a multiple of the cycle 4 ms, got 6 ms",
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--pvt", "6 ms"],
            "cross.toml: pvt: expected a multiple of the cycle 4 ms, got 6 ms",
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--pvt", "0 s"],
            '--pvt: expected a time above zero and up to 10 s, got "0 s"',
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--pvt", "20 ms", "--write-columns", "jerk"],
            "argument --write-columns: not allowed with argument --pvt, whose columns are its own",
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--write-units", "inch"],
            '--write-units: expected deg or rad, and mm or m, such as "rad, m", got "inch"',
        ),
        (
            ["export", "cross.toml", "-o", "a.npz", "--write-units", "rad"],
            "a.npz: holds SI (rad, m) and nothing else: units can be chosen for other kinds of file",
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--write-columns", "velocty"],
            '--write-columns: expected "velocity", "acceleration", "jerk", "torque", "pose" or "tool_speed", '
            'got "velocty", did you mean "velocity"?',
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--write-columns", "torque"],
            "a.csv: the table has no torque to be written",
        ),
        (
            ["export", "log.csv", *ARM, "-o", "a.csv", "--split", "stretch"],
            "log.csv: split: the table has no velocity and acceleration, by which its stop points could be told",
        ),
        (
            ["export", "cross.toml", "-o", "a.csv", "--split", "step"],
            "argument --split: invalid choice: 'step' (choose from 'stretch') (see pathplan export --help)",
        ),
    ],
)
def test_bad_input_is_one_line(plan, folder, run, argv, line):
    logged(plan).to_csv("log.csv", index=False)
    logged(plan, (*COLUMNS[:3], "wrist")).to_csv("bare.csv", index=False)
    pathplan.write_table(plan.table, "own.csv")
    before = {path.name for path in folder.iterdir()}
    assert run(*argv) == (2, "", [f"pathplan: {line}"])
    assert {path.name for path in folder.iterdir()} == before


def test_without_pyarrow_one_line(folder, run, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    line = 'Parquet needs pyarrow, which is not installed: pip install "pathplan[parquet]"'
    assert run("export", "cross.toml", "-o", "a.parquet") == (2, "", [f"pathplan: a.parquet: {line}"])
    Path("b.parquet").write_bytes(b"PAR1")
    assert run("audit", "b.parquet", "--arm", "loader4.toml") == (2, "", [f"pathplan: b.parquet: {line}"])


# nothing lost


def test_a_full_disk_leaves_every_earlier_file(plan, folder, run, monkeypatch):
    """The second of three files meets the full disk: the first has not taken its place either."""
    for name in ("a.csv", "a.npz", "a.audit.json"):
        Path(name).write_text("old")
    import pathplan.report.outputs

    real, count = pathplan.report.outputs.write_table, []

    def full(*args, **options):
        count.append(args[1].name)
        if len(count) == 2:
            raise pathplan.PathplanError(f"{args[1]}: the disk is full: nothing was changed")
        real(*args, **options)

    monkeypatch.setattr(pathplan.report.outputs, "write_table", full)
    status, _, (line,) = run("plan", "cross.toml", "-o", "a.csv", "-o", "a.npz", "--overwrite")
    assert (status, line) == (1, "pathplan: a.npz: the disk is full: nothing was changed")
    assert {name: Path(name).read_text() for name in ("a.csv", "a.npz", "a.audit.json")} == dict.fromkeys(
        ("a.csv", "a.npz", "a.audit.json"), "old"
    )
    assert not list(folder.glob(".*.part"))


@pytest.mark.parametrize("suffix", [".csv", ".jsonl", ".npz", ".parquet"])
def test_the_same_command_gives_the_same_bytes_in_another_process(folder, run, suffix):
    options = ["export", "cross.toml", "-o", f"a{suffix}", "--quiet"]
    assert run(*options)[0] == 0
    before = Path(f"a{suffix}").read_bytes()
    Path(f"a{suffix}").unlink()
    subprocess.run([sys.executable, "-m", "pathplan", *options], check=True, env=environment(), timeout=120)
    assert Path(f"a{suffix}").read_bytes() == before
