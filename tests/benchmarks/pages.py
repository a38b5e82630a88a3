"""Figures of the report and the live page, measured in one run: python -m tests.benchmarks.pages

Never a test: times depend on the machine. Run on a quiet one. The page's own figures need Chromium with its driver.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import shutil
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

import pathplan
from pathplan.report.gather import picture_of, picture_of_table
from pathplan.report.html import report_html
from pathplan.report.live import LivePage
from pathplan.report.watching import Watching
from tests.benchmarks.figures import PICK, ROOT, best_of, say

SCRUB = """
const done = arguments[0], slider = document.getElementById('slider'), frames = 240;
document.getElementById('motion').scrollIntoView();
let k = 0, start = 0;
function frame(now) {
  if (k === 0) start = now;
  slider.value = Math.round(slider.max * k / frames);
  slider.dispatchEvent(new Event('input'));
  if (k++ < frames) requestAnimationFrame(frame); else done(1000 * frames / (now - start));
}
requestAnimationFrame(frame);
"""
CYCLE = "return document.querySelector('#top .facts dd')?.textContent"


def made() -> None:
    """The report of the pick-and-place against its plan: processor time, imports done."""

    def planned() -> Any:
        return pathplan.plan(pathplan.load_task(PICK))

    plan = planned()
    plan.table, plan.audit  # noqa: B018
    cost = best_of(5, lambda: report_html(picture_of(plan)))
    say("report of the pick-and-place, made: over the time of its plan", cost / best_of(5, planned), "at most 2")
    with_savings = best_of(1, lambda: report_html(picture_of(plan), plan.savings(top=3)))
    say("the same with what would buy time, which times changes of it", with_savings / best_of(3, planned), "")


def size() -> None:
    """A minute at 1 kHz of six axes that never rest, with torque."""
    text = report_html(minute())
    say("report of 60 s at 1 kHz, MB", len(text.encode()) / 1e6, "at most 3")


def minute() -> Any:
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    t = np.arange(60_001)[:, None] / 1000
    rate, phase = np.random.default_rng(6).uniform(2.0, 4.0, 6), np.arange(6)
    wave, slope = np.sin(t * rate + phase), np.cos(t * rate + phase)
    table = pathplan.JointTable(
        t[:, 0],
        0.4 * wave,
        0.4 * rate * slope,
        -0.4 * rate**2 * wave,
        60 * np.sign(np.sin(9 * t * rate)),
        torque=20 * wave + 3 * np.sign(slope),
        joint_names=arm.joint_names,
        joint_kinds=("revolute",) * 6,
        cycle=0.001,
    )
    return picture_of_table(table, arm)


@contextmanager
def browser() -> Iterator[Any]:
    """Headless Chromium with an empty profile of its own."""
    from selenium import webdriver
    from selenium.webdriver.chrome.options import Options
    from selenium.webdriver.chrome.service import Service

    from tests.report.conftest import BROWSERS, SWITCHES

    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        options = Options()
        options.binary_location = next(filter(None, map(shutil.which, BROWSERS)))
        for switch in (*SWITCHES.split(), f"--user-data-dir={profile}"):
            options.add_argument(switch)
        found = webdriver.Chrome(options=options, service=Service(shutil.which("chromedriver")))
        found.set_script_timeout(60)
        try:
            yield found
        finally:
            found.quit()


def until(page: Any, script: str, right: Callable[[Any], bool]) -> Any:
    while not right(found := page.execute_script(script)):
        time.sleep(0.005)
    return found


def scrubbing(page: Any) -> None:
    """Frames a second while the slider moves with every frame."""
    plan = pathplan.plan(pathplan.load_task(PICK))
    with tempfile.TemporaryDirectory() as folder:
        for name, picture in (("the pick-and-place", picture_of(plan)), ("60 s at 1 kHz", minute())):
            file = Path(folder) / "page.html"
            file.write_text(report_html(picture), encoding="utf-8")
            page.get(file.as_uri())
            until(page, "return document.documentElement.classList.contains('live')", bool)
            say(f"scrubbing {name}, frames a second", page.execute_async_script(SCRUB), "at least 30")


def saving(page: Any) -> None:
    """From save to the updated page, s."""
    with tempfile.TemporaryDirectory() as folder:
        shutil.copytree(ROOT / "robots", Path(folder) / "robots")
        file = Path(folder) / "tasks" / "pick.toml"
        file.parent.mkdir()
        text = PICK.read_text()
        file.write_text(text)
        watching = Watching(file, lambda: pathplan.plan(pathplan.load_task(file)))
        ended, times = threading.Event(), []
        with LivePage(watching, port=0) as live:
            looking = threading.Thread(target=watching.run, args=(ended,))
            looking.start()
            page.get(live.url)
            shown = until(page, CYCLE, bool)
            for k in range(8):
                start = time.monotonic()
                file.write_text(text.replace('speed = "200 mm/s"', f'speed = "{150 + 5 * k} mm/s"'))
                shown = until(page, CYCLE, lambda found, last=shown: found != last)
                times.append(time.monotonic() - start)
                time.sleep(0.3)
            ended.set()
            looking.join()
    say("watch: from save to updated page, s, median", float(np.median(times)), "at most 1.5")
    say("watch: from save to updated page, s, longest", max(times), "at most 1.5")


def main() -> None:
    made()
    size()
    if shutil.which("chromedriver") is None:
        print("no Chromium with its driver here: frames and the live page are not measured")
        return
    with browser() as page:
        scrubbing(page)
        saving(page)


if __name__ == "__main__":
    main()
