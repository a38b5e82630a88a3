"""Plans to draw, and a real browser to look at them with."""

import shutil
import tempfile
from pathlib import Path

import pytest

import pathplan
from pathplan.report.watching import Watching

ROOT = Path(__file__).parents[2]
ACROSS = """\
title = "Across"
arm = "loader4.toml"
cycle = "4 ms"
start = "home"

[[step]]
name = "across"
motion = "joint"
to = { joints = [900, 500, -200, 40] }
"""
BROWSERS = ("chromium", "chromium-browser", "google-chrome")
SWITCHES = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking "
    "--disable-component-update --disable-sync --window-size=1400,1000"
)


@pytest.fixture(scope="session")
def pick():
    """The six-axis pick-and-place, planned."""
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml"))


@pytest.fixture(scope="session")
def portal():
    """The gantry's task, planned: prismatic axes, and no dynamics."""
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "loader4-belt-to-car.toml"))


@pytest.fixture
def across(tmp_path):
    """A small task with its arm in a folder of their own: the task's file."""
    shutil.copy(ROOT / "robots" / "loader4.toml", tmp_path)
    file = tmp_path / "across.toml"
    file.write_text(ACROSS)
    return file


@pytest.fixture
def watching(across):
    """That task, watched and planned once. `said` holds what it told."""
    said = []
    found = Watching(across, lambda: pathplan.plan(pathplan.load_task(across)), said.append)
    found.said = said
    assert found.look()
    return found


@pytest.fixture(scope="session")
def browser():
    """Headless Chromium with an empty profile of its own."""
    selenium = pytest.importorskip("selenium.webdriver", reason="selenium is not installed")
    program = next(filter(None, map(shutil.which, BROWSERS)), None)
    driver = shutil.which("chromedriver")
    if program is None or driver is None:
        pytest.skip("no Chromium with its driver here: apt-get install chromium chromium-driver")
    from selenium.webdriver.chrome.options import Options
    from selenium.webdriver.chrome.service import Service

    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        options = Options()
        options.binary_location = program
        for switch in (*SWITCHES.split(), f"--user-data-dir={profile}"):
            options.add_argument(switch)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        found = selenium.Chrome(options=options, service=Service(driver))
        found.set_script_timeout(20)
        yield found
        found.quit()
