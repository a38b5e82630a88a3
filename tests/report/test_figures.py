"""Figures for scripts: what is drawn in them, and the files they become."""

import math
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from pathplan.errors import InputError
from pathplan.report import figures
from tests.auditing.cast import made_arm, move_table, with_cell
from tests.report.conftest import ROOT

DEG = 180 / math.pi


def named(axes, gid):
    return [line for line in axes.lines if line.get_gid() == gid]


@pytest.mark.parametrize("quantity", ["position", "velocity", "acceleration", "jerk", "torque"])
def test_limits_and_peaks_of_a_quantity(pick, quantity):
    figure = figures.draw(quantity, pick)
    factor = 1.0 if quantity == "torque" else DEG
    for i, (axes, joint) in enumerate(zip(figure.axes, pick.audit.joints, strict=False)):
        limits = sorted(line.get_ydata()[0] for line in named(axes, "limit"))
        assert limits == pytest.approx(getattr(pick.arm.limits, quantity)[i] * factor)
        (line,), (ring,) = named(axes, "line"), named(axes, "peak")
        values = getattr(pick.table, quantity)[:, i] * factor
        assert (line.get_ydata().min(), line.get_ydata().max()) == pytest.approx((values.min(), values.max()))
        peak = getattr(joint, quantity)
        assert ring.get_xdata()[0] == peak.time and ring.get_ydata()[0] == pytest.approx(peak.peak * factor)
        assert axes.get_ylabel().startswith(joint.name)
    assert len(figure.axes) == 7 and figure.axes[-1].get_ylabel() == "paced by"


def test_every_quantity_at_once(pick):
    figure = figures.joints(pick)
    assert len(figure.axes) == 30 and [axes.get_title() for axes in figure.axes[:2]] == ["Position", "Velocity"]
    assert figure.get_suptitle() == pick.task.title


def test_a_table_and_its_arm():
    table = with_cell(move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 100.0), "velocity", 12_345, 1, 1.9)
    figure = figures.velocity(table, made_arm())
    (line,) = named(figure.axes[1], "line")
    assert line.get_ydata().max() == pytest.approx(1.9 * DEG) and len(line.get_ydata()) <= 2 * figures.POINTS + 2
    assert not named(figures.position(table, made_arm()).axes[2], "limit")  # bend has none
    assert len(figures.audit(table, made_arm()).axes) == 4


def test_tool_speed_and_its_caps(pick):
    speed = figures.tool(pick).axes[0]
    assert max(named(speed, "line")[0].get_ydata()) == pytest.approx(1e3 * pick.table.tool_speed.max())
    caps = {line.get_ydata()[0] for line in named(speed, "limit")}
    assert sorted(caps) == pytest.approx(sorted({1e3 * step.speed for step in pick.task.steps if step.speed}))


def test_bars_of_the_audit(pick):
    first, second = figures.audit(pick).axes[:2]
    shares = [100 * joint.velocity.share for joint in pick.audit.joints]
    assert [bar.get_width() for bar in second.patches] == pytest.approx(shares)
    assert [text.get_text() for text in first.get_yticklabels()] == [joint.name for joint in pick.arm.joints]


def test_pace_blocks(pick):
    axes = figures.pacing(pick).axes[0]
    parts = [(step.duration, part) for step in pick.audit.pacing for part in step.parts]
    paced = sum(duration * part.part for duration, part in parts if part.quantity != "none")
    assert sum(bar.get_width() for bar in axes.patches) == pytest.approx(paced)


def test_the_arm_at_a_time(pick):
    row = 700
    axes = figures.arm(pick, time=row * 0.004).axes[0]
    (path,) = named(axes, "path")
    x, y, z = path.get_data_3d()
    assert 1e3 * pick.table.pose[:, :3, 3].min(axis=0) == pytest.approx([min(x), min(y), min(z)], abs=2)
    (joints,) = named(axes, "joints")
    q = pick.table.position[row]
    frames = [pick.arm.base_from_joint(name, q)[:3, 3] for name in pick.arm.joint_names]
    assert np.array(joints.get_data_3d()).T == pytest.approx(1e3 * np.array(frames))


@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_files(tmp_path, suffix):
    one, two = tmp_path / f"one{suffix}", tmp_path / f"two{suffix}"
    table = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0)
    for file in (one, two):
        figures.save(figures.velocity(table, made_arm()), file, note="pathplan-task 123")
    content = one.read_bytes()
    assert content == two.read_bytes() and b"pathplan-task 123" in content
    assert content.startswith({".png": b"\x89PNG", ".svg": b"<?xml", ".pdf": b"%PDF"}[suffix])


def test_a_title_is_no_formula(pick, tmp_path):
    plan = replace(pick, task=replace(pick.task, title="$\\frac{1 & <b> " + "x" * 200))
    figures.save(figures.tool(plan), tmp_path / "tool.svg")
    assert "&lt;b&gt;" in (tmp_path / "tool.svg").read_text()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda plan: figures.draw("speed", plan), "kind: expected one of joints, position, "),
        (lambda plan: figures.velocity(plan.table), "arm: a table is drawn with the arm that it belongs to, got none"),
        (lambda plan: figures.arm(plan, time=99.0), "time: expected 0 to "),
        (lambda plan: figures.save(figures.tool(plan), "x.gif"), "x.gif: unknown kind of figure: expected .png or"),
    ],
)
def test_refused(pick, call, message):
    with pytest.raises(InputError) as error:
        call(pick)
    assert str(error.value).startswith(message)


def test_nothing_to_draw():
    bare = replace(move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0), velocity=None)
    with pytest.raises(InputError, match=r"^velocity: the table has none to draw$"):
        figures.velocity(bare, made_arm())
    with pytest.raises(InputError, match=r"^torque: the table has none to draw$"):
        figures.torque(bare, made_arm())


def test_matplotlib_comes_with_the_first_figure_only():
    code = (
        "import sys, pathplan.report.figures, pathplan.report.html, pathplan.report.live, pathplan.report.notebook; "
        "print('matplotlib' in sys.modules, 'selenium' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["False", "False"]
