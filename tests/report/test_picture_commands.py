"""The commands report, watch and figure, run in process."""

import json

import pytest

from pathplan.cli import main
from pathplan.picture_commands import COARSE, FIGURES, PAGE_PORT
from pathplan.report import figures, gather, live
from tests.report.conftest import ACROSS


@pytest.fixture
def run(across, tmp_path, monkeypatch, capsys):
    """Run a command line in the folder of a small task: (status, standard output, lines of standard error)."""
    monkeypatch.chdir(tmp_path)

    def call(*argv):
        status = main(list(argv))
        out, err = capsys.readouterr()
        return status, out, err.splitlines()

    return call


def test_report(run, tmp_path):
    status, out, errors = run("report", "across.toml")
    page = tmp_path / "across.html"
    assert (status, errors) == (0, []) and out.splitlines()[1] == "written: across.html"
    text = page.read_text(encoding="utf-8")
    assert "What would buy time" in text and text.startswith("<!DOCTYPE html>")
    assert run("report", "across.toml", "--no-savings", "--quiet") == (0, "", [])  # its own earlier output
    assert "What would buy time" not in page.read_text(encoding="utf-8")
    before = page.read_bytes()
    assert run("report", "across.toml", "--no-savings", "--quiet")[0] == 0 and page.read_bytes() == before


def test_report_of_a_table(run, tmp_path):
    assert run("plan", "across.toml", "--quiet")[0] == 0
    status, out, _ = run("report", "across.csv", "-o", "table.html", "--json")
    assert status == 0 and json.loads(out)["files"] == {"pictures": ["table.html"]} and json.loads(out)["passed"]
    assert "Limit audit" in (tmp_path / "table.html").read_text(encoding="utf-8")


def test_a_table_whose_arm_has_changed(run, tmp_path):
    assert run("plan", "across.toml", "--quiet")[0] == 0
    with open(tmp_path / "loader4.toml", "a") as arm:
        arm.write("\n# touched\n")
    assert run("report", "across.csv", "-o", "table.html", "--quiet")[0] == 0
    assert "loader4.toml has changed since the table was planned" in (tmp_path / "table.html").read_text(
        encoding="utf-8"
    )


def test_nothing_else_is_overwritten(run, tmp_path):
    other = tmp_path / "other.html"
    other.write_text("mine")
    status, _, errors = run("report", "across.toml", "-o", "other.html")
    taken = "exists and is no earlier picture of this task: choose another name or ask to overwrite"
    assert (status, errors) == (2, [f"pathplan: other.html: {taken}"]) and other.read_text() == "mine"
    (tmp_path / "second.toml").write_text(ACROSS.replace("Across", "Another"))
    assert run("report", "second.toml", "-o", "s.html", "--no-savings", "--quiet")[0] == 0
    assert run("report", "across.toml", "-o", "s.html", "--no-savings")[0] == 2
    assert run("report", "across.toml", "-o", "s.html", "--no-savings", "--overwrite", "--quiet")[0] == 0


def test_figure(run, tmp_path):
    status, out, errors = run("figure", "across.toml", "--kind", "velocity", "-o", "v.svg", "-o", "v.pdf")
    assert (status, errors) == (0, []) and out.splitlines()[1] == "written: v.svg, v.pdf"
    assert run("figure", "across.toml", "--kind", "velocity", "-o", "v.svg", "--quiet") == (0, "", [])
    assert run("figure", "across.toml", "--kind", "arm", "--at", "0.2 s", "--quiet") == (0, "", [])
    assert (tmp_path / "across-arm.png").read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("argv", "complaint"),
    [
        (["figure", "across.toml", "-o", "x.gif"], 'x.gif: unknown kind: expected .png or .svg or .pdf, got ".gif"'),
        (["report", "across.toml", "-o", "x"], "x: unknown kind: expected .html or .htm, got none"),
        (["report", "across.toml", "-o", "no/x.html"], "no/x.html: can't be written: there is no folder no"),
        (["figure", "across.toml", "--at", "1 s"], "argument --at: only with --kind arm (see pathplan figure --help)"),
        (["figure", "across.toml", "--kind", "torque"], "torque: the table has none to draw"),
        (["watch", "none.toml"], "none.toml: no such file"),
        (["watch", "across.toml", "--address", "0.0.0.0"],
         "address: expected the loopback (127.0.0.1, ::1, localhost), got 0.0.0.0: the page is for this machine only"),
        (["watch", "across.toml", "--port", "70000"], "port: expected a number from 0 to 65535, got 70000"),
    ],
)  # fmt: skip
def test_refused(run, argv, complaint):
    status, out, errors = run(*argv)
    assert (status, out) == (2, "") and errors == [f"pathplan: {complaint}"]


def test_a_time_that_is_none_of_the_motion(run):
    status, _, errors = run("figure", "across.toml", "--kind", "arm", "--at", "99 s")
    assert status == 2 and errors[0].startswith("pathplan: time: expected 0 to ") and errors[0].endswith(" s, got 99")


def test_kinds_are_all_there(run):
    assert tuple(figures.KINDS) == FIGURES and PAGE_PORT == live.PORT and COARSE == gather.BUCKETS
    assert "{" not in run("figure", "--help")[1]


def test_what_breaks_limits_is_drawn_and_told(run, tmp_path):
    text = (tmp_path / "loader4.toml").read_text()
    assert run("plan", "across.toml", "--quiet")[0] == 0
    (tmp_path / "slow4.toml").write_text(text.replace("velocity = ", "velocity = 1 # ", 1))
    status, out, errors = run("report", "across.csv", "--arm", "slow4.toml", "-o", "bad.html")
    assert status == 1 and "BREAKS LIMITS" in out and errors[0].startswith("pathplan: across.csv: breaks limits: ")
    assert "BREAKS LIMITS" in (tmp_path / "bad.html").read_text(encoding="utf-8")
