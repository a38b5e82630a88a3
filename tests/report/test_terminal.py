"""The compact picture on a terminal."""

import io

import pytest

from pathplan.report.plan_screen import plan_screen
from pathplan.report.terminal import BAR, NAME, STRIP, signs_for, terminal_picture
from pathplan.report.text import clock


class Terminal(io.StringIO):
    """A stream that says it is a terminal, of an encoding."""

    def __init__(self, encoding):
        super().__init__()
        self.said = encoding

    encoding = property(lambda self: self.said)

    def isatty(self):
        return True


@pytest.mark.parametrize(
    ("stream", "signs"),
    [
        (Terminal("utf-8"), "blocks"),
        (Terminal("ascii"), "ascii"),
        (Terminal("latin-1"), "ascii"),
        (Terminal("nobody-knows"), None),
        (io.StringIO(), None),
        (None, None),
    ],
)
def test_what_a_stream_can_show(monkeypatch, stream, signs):
    monkeypatch.setenv("TERM", "xterm")
    assert signs_for(stream) == signs
    monkeypatch.setenv("TERM", "dumb")
    assert signs_for(stream) is None


def test_closed_stream():
    stream = io.StringIO()
    stream.close()
    assert signs_for(stream) is None


@pytest.fixture(scope="module")
def lines(pick):
    return {line[:NAME].strip(): line for line in terminal_picture(pick, "blocks")}


def test_a_line_a_joint(pick, lines):
    assert list(lines)[1:] == [*pick.arm.joint_names, "tool"]
    assert max(map(len, lines.values())) <= 100
    assert lines[""].endswith(f"sets the pace along {clock(pick.duration)}")


def test_bars_are_as_long_as_the_shares(pick, lines):
    for joint in pick.audit.joints:
        peaks = joint.peaks()
        share = max(peak.share for peak in peaks.values())
        start = NAME + 2
        bar, rest = lines[joint.name][start : start + BAR], lines[joint.name][start + BAR :]
        eighths = sum(8 - "█▉▊▋▌▍▎▏".index(char) for char in bar.strip())
        assert abs(eighths - 8 * BAR * share) <= 0.51 and rest.startswith("▏") and f"{100 * share:.1f} %" in rest


def test_strip_adds_up_to_the_pacing_time(pick, lines):
    paced = {}
    for step in pick.audit.pacing:
        for part in step.parts:
            if part.quantity != "none":
                name = part.joint or "tool"
                paced[name] = paced.get(name, 0.0) + part.part * step.duration
    for name, line in lines.items():
        if not name:
            continue
        strip = line.removesuffix("▏").rsplit("▏", 1)[1]
        assert len(strip) == STRIP
        drawn = sum(" ▁▂▃▄▅▆▇█".index(char) for char in strip) / 8 * pick.duration / STRIP
        assert drawn == pytest.approx(paced.get(name, 0.0), abs=0.15)


def test_in_ascii_and_left_out(pick):
    drawn = list(terminal_picture(pick, "ascii"))
    assert all(line.isascii() and len(line) <= 100 for line in drawn)
    plain, ascii_screen = plan_screen(pick), plan_screen(pick, "ascii")
    assert "sets the pace" not in plain and "\n".join(drawn) in ascii_screen
    assert ascii_screen.replace("\n".join(drawn) + "\n\n", "") == plain
    assert plain.isascii() and not plan_screen(pick, "blocks").isascii()


def test_too_many_rows_to_evaluate_once_more(pick, monkeypatch):
    monkeypatch.setattr("pathplan.report.terminal.WHOLE", 1000)
    assert list(terminal_picture(pick, "blocks")) == []
