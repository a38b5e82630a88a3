"""The command that shows an arm."""

import json
from pathlib import Path

import pytest

from pathplan.cli import main

ROBOTS = Path(__file__).parents[2] / "robots"


def run(capsys, *words: str) -> tuple[int, str, str]:
    status = main(["arm", *words])
    said = capsys.readouterr()
    return status, said.out, said.err


def test_an_arm_is_shown(capsys):
    status, out, err = run(capsys, str(ROBOTS / "glazer6.toml"))
    assert (status, err) == (0, "")
    assert out.startswith("glazer6: Glazing arm: six axes with a spherical wrist\n")
    assert "inverse    closed form" in out


def test_as_data(capsys):
    status, out, _ = run(capsys, str(ROBOTS / "stacker6.toml"), "--json")
    arm = json.loads(out)["arm"]
    assert status == 0
    assert arm["structure"] == "three parallel axes" and len(arm["branches"]) == 8
    assert arm["joints"][5]["position"] == [None, None]


def test_a_urdf_file_and_its_template(capsys):
    file = str(ROBOTS / "stacker6.urdf")
    assert "missing" in run(capsys, file, "--base-link", "column", "--tip-link", "hand")[1]
    status, out, _ = run(capsys, file, "--template")
    assert status == 0 and 'acceleration = "fill in"' in out
    assert run(capsys, file, "--quiet")[1] == ""


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["none.urdf"], "none.urdf: no such file, expected a URDF file"),
        (["none.toml"], "none.toml: no such file"),
        (
            [str(ROBOTS / "stacker6.urdf"), "--tip-link", "hnad"],
            'stacker6.urdf: tip_link: no link "hnad", did you mean "hand"?',
        ),
        ([str(ROBOTS / "glazer6.toml"), "--tip-link", "hand"], "argument --tip-link: only for a URDF file"),
        (
            [str(ROBOTS / "glazer6.toml"), "--template", "--json"],
            "argument --json: not allowed with argument --template",
        ),
    ],
)
def test_bad_input_is_one_line(words, message, capsys):
    status, out, err = run(capsys, *words)
    assert (status, out) == (2, "")
    assert err.startswith(f"pathplan: {message}") and err.count("\n") == 1
