"""A plan held against the one before."""

import pytest

from pathplan.report.compare import Gist, changes, changes_section, signed


def gist(total, steps, verdict="within limits"):
    times = (("cycle time", total), ("motion", total - 0.5), ("waiting", 0.5), ("bound", total - 0.4))
    return Gist(verdict, times, tuple(steps))


BEFORE = gist(3.0, [("down", 1.0), ("wait", 0.5), ("lift", 0.7), ("home", 0.8)])


def told(now):
    return {change.what: change for change in changes(BEFORE, now)[4:]}


def test_a_step_that_got_faster():
    now = gist(2.75, [("down", 0.75), ("wait", 0.5), ("lift", 0.7), ("home", 0.8)])
    assert changes(BEFORE, now)[0].by == pytest.approx(-0.25)
    assert {what: change.by for what, change in told(now).items()} == pytest.approx(
        {"1 down": -0.25, "2 wait": 0, "3 lift": 0, "4 home": 0}
    )
    html = changes_section(BEFORE, now)
    assert "0.25 s shorter" in html and "3 steps as before." in html and ">-0.25 s<" in html and "lift" not in html


def test_a_step_that_came_and_one_that_went():
    now = gist(3.3, [("down", 1.0), ("wait", 0.5), ("aside", 0.3), ("lift", 0.7), ("home", 0.8)])
    assert told(now)["3 aside (new)"].before is None and told(now)["5 home"].by == 0
    gone = told(gist(2.2, [("down", 1.0), ("wait", 0.5), ("lift", 0.7)]))
    assert gone["home (gone)"].now is None and gone["home (gone)"].by == pytest.approx(-0.8)
    assert "longer" in changes_section(BEFORE, now)


def test_a_step_that_was_renamed():
    now = gist(3.0, [("down", 1.0), ("wait", 0.5), ("<b>up</b>", 0.6), ("home", 0.9)])
    assert told(now)["3 <b>up</b>"].before == 0.7
    html = changes_section(BEFORE, now)
    assert "The cycle time is the same" in html and "3 &lt;b&gt;up&lt;/b&gt;" in html


def test_a_verdict_that_changed():
    html = changes_section(BEFORE, gist(3.0, BEFORE.steps, "BREAKS LIMITS (1 exceedance)"))
    assert "Before: within limits; now: BREAKS LIMITS (1 exceedance)." in html


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.12, "+0.12 s"), (-0.0043, "-0.0043 s"), (0.0, "same"), (-4e-5, "same"), (6e-5, "+0.0001 s")],
)
def test_signed(seconds, text):
    assert signed(seconds) == text
