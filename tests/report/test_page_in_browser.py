"""The report and the live page in a real headless Chromium."""

import base64
import http.server
import json
import threading
import time

import numpy as np
import pytest

from pathplan.report.axis import LEFT, RIGHT, WIDTH
from pathplan.report.files import write_report
from pathplan.report.gather import picture_of
from pathplan.report.html import asset, report_html
from pathplan.report.live import LivePage
from pathplan.report.page_data import page_data
from pathplan.report.scene import arm_points, scene_of
from pathplan.report.text import clock
from pathplan.report.watching import Watching
from tests.report.conftest import ROOT
from tests.report.test_html import HOSTILE, data_of

QUANTITIES = ("position", "velocity", "acceleration", "jerk", "torque")
LIVE = "return document.documentElement.classList.contains('live')"


def until(browser, script, *values, seconds=15):
    """The value of a script as soon as it is true."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        found = browser.execute_script(script, *values)
        if found:
            return found
        time.sleep(0.02)
    raise AssertionError(f"not within {seconds} s: {script}")


def open_page(browser, address):
    browser.get("about:blank")  # whatever the browser's own first page was asking for ends here
    browser.get_log("browser")
    browser.get_log("performance")
    browser.get(address)
    until(browser, LIVE)
    frame(browser)


def frame(browser):
    """What was asked for has been drawn."""
    browser.execute_async_script("requestAnimationFrame(() => requestAnimationFrame(() => arguments[0]()))")


def element(browser, name):
    return browser.find_element("id", name)


def slide(browser, row):
    """Move the slider as a hand on it does."""
    script = "const s = arguments[0]; s.value = arguments[1]; s.dispatchEvent(new Event('input'))"
    browser.execute_script(script, element(browser, "slider"), row)


def requests_of(browser):
    messages = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    sent = [m["params"]["request"]["url"] for m in messages if m["method"] == "Network.requestWillBeSent"]
    return [url for url in sent if not url.startswith(("data:", "chrome:"))]


def picture(browser):
    return browser.execute_script("return document.getElementById('view').toDataURL()")


def readings(browser):
    """{(joint, quantity): (value, share)} as texts."""
    rows = browser.execute_script(
        "return [...document.querySelectorAll('#readings tr')].map((row) => [...row.cells].map((cell) =>"
        " [cell.querySelector('.value')?.textContent ?? cell.textContent, cell.querySelector('.share')?.textContent]))"
    )
    head = [cell[0] for cell in rows[0]]
    return {(row[0][0], head[c]): tuple(row[c]) for row in rows[1:] for c in range(1, len(head))}


def facts(browser):
    script = "return [...document.getElementById('now').children].map((line) => [...line.children]"
    return dict(browser.execute_script(script + ".map((part) => part.textContent))"))


def cursors(browser):
    """Where the cursors stand, in units of their plots."""
    return browser.execute_script(
        "return [...document.querySelectorAll('#plots .cursor')].map((cursor) => { const box ="
        " cursor.parentElement.getBoundingClientRect(); const own = cursor.getBoundingClientRect();"
        " return (own.left + own.width / 2 - box.left) / box.width; })"
    )


@pytest.fixture(scope="module")
def report(pick, tmp_path_factory):
    file = tmp_path_factory.mktemp("page") / "pick.html"
    write_report(pick, file)
    return file


@pytest.fixture
def page(browser, report):
    open_page(browser, report.as_uri())
    return browser


def test_it_loads_from_disk_alone(page, report):
    assert page.get_log("browser") == []
    assert requests_of(page) == [report.as_uri()]
    assert page.title == "Tile from the belt over the kiln rail to the car: within limits"


def check_row(browser, plan, row):
    """Time, cursors, readings and tool are those of a row of the table."""
    table, data = plan.table, data_of(browser.page_source)
    decimals = dict(zip(data["columns"], (d for d, _ in data["packed"]["columns"]), strict=True))
    told = facts(browser)
    assert told["row"] == f"{row + 1} of {len(table)}" and told["time"] == f"{table.time[row]:.3f} s"
    place = (LEFT + table.time[row] / plan.duration * (RIGHT - LEFT)) / WIDTH
    assert cursors(browser) == pytest.approx([place] * 7, abs=1e-3)
    assert [float(x) for x in told["tool at"].removesuffix(" mm").split(",")] == pytest.approx(
        1e3 * table.pose[row, :3, 3], abs=6e-4
    )
    shown = readings(browser)
    limits = plan.arm.limits
    for quantity in QUANTITIES:
        values = getattr(table, quantity)[row]
        for i, joint in enumerate(plan.arm.joints):
            text, share = shown[joint.name, quantity]
            exact = values[i] if quantity == "torque" else np.degrees(values[i])
            assert float(text) == pytest.approx(exact, abs=0.51 * 10.0 ** -decimals[f"{quantity} {i}"])
            low, high = getattr(limits, quantity)[i]
            used = abs(values[i] - (low + high) / 2) / (high - low) * 2
            assert float(share.removesuffix(" %")) == pytest.approx(100 * used, abs=0.11)


def test_the_slider_moves_arm_cursors_and_readings_together(page, pick):
    check_row(page, pick, 0)
    before = picture(page)
    slide(page, 700)
    frame(page)
    check_row(page, pick, 700)
    assert picture(page) != before
    drawn = picture_of(pick)
    assert facts(page)["step"] == drawn.step_label(pick.table.step[700])
    assert facts(page)["paced by"] == (drawn.pace_label(drawn.kept_pace[700]) or "nothing")
    peak = pick.audit.joints[0].acceleration
    link = page.find_element("css selector", f"#audit a[data-time='{peak.time!r}']")
    page.execute_script("arguments[0].click()", link)
    frame(page)
    check_row(page, pick, peak.row)
    share = readings(page)["base", "acceleration"][1].removesuffix(" %")
    assert float(share) == pytest.approx(100 * peak.share, abs=0.1)


def test_a_click_on_a_plot_goes_there(page, pick):
    from selenium.webdriver import ActionChains

    plot = element(page, "plot-velocity")
    page.execute_script("arguments[0].scrollIntoView({block: 'center'})", plot)
    ActionChains(page).move_to_element(plot).click().perform()
    frame(page)
    place = (WIDTH / 2 - LEFT) / (RIGHT - LEFT) * pick.duration
    assert float(facts(page)["time"].removesuffix(" s")) == pytest.approx(place, abs=0.02)


def test_everything_by_keyboard(page, pick):
    from selenium.webdriver import ActionChains, Keys

    def press(*keys):
        ActionChains(page).send_keys(*keys).perform()
        frame(page)

    reached = []
    for _ in range(120):
        press(Keys.TAB)
        reached.append(page.switch_to.active_element.get_attribute("id"))
        if reached[-1] == "slider":
            break
    assert reached[-1] == "slider" and "view" in reached
    press(Keys.ARROW_RIGHT, Keys.ARROW_RIGHT, Keys.ARROW_RIGHT, Keys.ARROW_LEFT)
    check_row(page, pick, 2)
    said = page.switch_to.active_element.get_attribute("aria-valuetext")
    assert said.startswith("0.008 s, row 3, step 1 above the belt, paced by ")
    press(Keys.END)
    check_row(page, pick, len(pick.table) - 1)
    press(Keys.HOME)
    press(Keys.SPACE)
    assert element(page, "play").text == "Pause"
    until(page, "return document.getElementById('slider').value > 5")
    press(Keys.SPACE)
    assert element(page, "play").text == "Play"
    page.execute_script("document.getElementById('view').focus()")
    for key in (Keys.ARROW_LEFT, Keys.ARROW_UP, "+", "-"):
        before = picture(page)
        press(key)
        assert picture(page) != before
    turned = picture(page)
    press("0")
    assert picture(page) != turned


def test_the_arm_stands_where_the_library_says(page, pick):
    """The page's own kinematics against the library's, at many rows."""
    drawn = picture_of(pick)
    scene = scene_of(drawn)
    data = page_data(drawn, scene)["scene"]
    script = asset("chain.js") + "; return arguments[1].map((q) => { const s = standing(arguments[0], q, 0);"
    script += " return [...s.frames.map(origin), origin(s.flange), origin(s.tool)]; })"
    q = pick.table.position[::50]
    found = np.array(page.execute_script(script, data, q.tolist()))
    expected = np.array([arm_points(pick.arm, row, scene.tools[0])[1][1:] for row in q])
    assert found == pytest.approx(expected, abs=1e-8)
    assert found[:, -1] == pytest.approx(pick.arm.forward(q)[:, :3, 3], abs=1e-8)


def test_text_from_files_stays_text(browser, pick, tmp_path):
    from dataclasses import replace

    steps = tuple(replace(step, name=HOSTILE) for step in pick.task.steps)
    frames = {HOSTILE: replace(pick.task.frames["cell"], name=HOSTILE)}
    plan = replace(pick, task=replace(pick.task, title=HOSTILE, steps=steps, frames=frames))
    file = tmp_path / "hostile.html"
    file.write_text(report_html(picture_of(plan)), encoding="utf-8")
    open_page(browser, file.as_uri())
    shown = "".join(char if char.isprintable() else "?" for char in HOSTILE)
    assert browser.find_element("tag name", "h1").text == " ".join(shown.split())
    assert facts(browser)["step"] == f"1 {shown}"
    assert browser.find_elements("css selector", "img, iframe, object") == []
    assert browser.get_log("browser") == [] and requests_of(browser) == [file.as_uri()]


def test_light_dark_and_print(page):
    def ground():
        return page.execute_script("return getComputedStyle(document.documentElement).backgroundColor")

    seen = {}
    for scheme in ("light", "dark"):
        media = {"features": [{"name": "prefers-color-scheme", "value": scheme}]}
        page.execute_cdp_cmd("Emulation.setEmulatedMedia", media)
        frame(page)
        seen[scheme] = ground(), picture(page)
    assert seen["light"][0] != seen["dark"][0] and seen["light"][1] != seen["dark"][1]
    page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    assert ground() == "rgb(255, 255, 255)"
    assert not element(page, "slider").is_displayed() and element(page, "arm-still").is_displayed()
    page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "", "features": []})
    printed = page.execute_cdp_cmd("Page.printToPDF", {"preferCSSPageSize": True})
    pdf = base64.b64decode(printed["data"])
    assert pdf.startswith(b"%PDF") and 3 <= pdf.count(b"/Type /Page\n") <= 12
    assert pdf.count(b"/Subtype /Image") == 0  # all of it drawn as lines and text


def test_without_scripts_the_pictures_are_still_there(browser, report):
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    try:
        browser.get(report.as_uri())
        assert element(browser, "arm-still").is_displayed() and element(browser, "plot-jerk").is_displayed()
        assert not element(browser, "slider").is_displayed()
    finally:
        browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": False})


@pytest.mark.parametrize("example", ["loader4-belt-to-car", "sorter4-sort-tiles", "glazer6-bead"])
def test_every_arm(browser, tmp_path, example):
    import pathplan

    plan = pathplan.plan(pathplan.load_task(ROOT / "examples" / f"{example}.toml"))
    write_report(plan, tmp_path / "page.html")
    open_page(browser, (tmp_path / "page.html").as_uri())
    assert browser.get_log("browser") == []
    page_rows = facts(browser)["row"]
    assert page_rows == f"1 of {len(plan.table)}"


# The live page


TASK = (ROOT / "examples" / "glazer6-pick-and-place.toml").read_text()
CYCLE = "return document.querySelector('#top .facts dd')?.textContent"
TROUBLE = "return document.getElementById('trouble').hidden ? '' : document.getElementById('trouble').textContent"


@pytest.fixture
def watched(tmp_path):
    """A task that is watched and served: (its file, its page)."""
    import pathplan

    (tmp_path / "robots").mkdir()
    (tmp_path / "robots" / "glazer6.toml").write_text((ROOT / "robots" / "glazer6.toml").read_text())
    (tmp_path / "tasks").mkdir()
    file = tmp_path / "tasks" / "pick.toml"
    file.write_text(TASK)
    watching = Watching(file, lambda: pathplan.plan(pathplan.load_task(file)))
    ended = threading.Event()
    with LivePage(watching, port=0) as page:
        looking = threading.Thread(target=watching.run, args=(ended,))
        looking.start()
        yield file, page
        ended.set()
        looking.join()


def test_an_edit_shows_in_place_and_a_broken_file_is_survived(browser, watched, pick):
    file, page = watched
    open_page(browser, page.url)
    first = browser.execute_script(CYCLE)
    assert first == clock(pick.duration) and browser.execute_script(TROUBLE) == ""
    slide(browser, 700)
    browser.execute_script("document.querySelector('[data-look=side]').click(); window.mark = 1; scrollTo(0, 1500)")
    frame(browser)
    file.write_text(TASK.replace('speed = "200 mm/s"', 'speed = "150 mm/s"'))
    second = until(browser, f"const found = (() => {{ {CYCLE} }})(); return found !== '{first}' && found")
    frame(browser)
    assert float(second.removesuffix(" s")) > pick.duration
    # in place: the same document, at the same time on the slider
    assert browser.execute_script("return window.mark") == 1 and facts(browser)["time"] == "2.800 s"
    change = browser.find_element("id", "changes").text
    assert "longer than in the last plan" in change and "onto the tile" in change
    # a broken file: its one line, and the last good plan greyed
    file.write_text(TASK.replace('motion = "line"', 'motion = "lime"', 1))
    trouble = until(browser, TROUBLE)
    assert trouble.startswith("pick.toml: step[2].motion: expected ") and "\n" not in trouble
    grey = "return getComputedStyle(document.querySelector('main')).filter"
    assert browser.execute_script(grey) == "grayscale(1)" and browser.execute_script(CYCLE) == second
    assert facts(browser)["time"] == "2.800 s"
    # the arm file counts too, and all is well again
    file.write_text(TASK)
    until(browser, f"return (() => {{ {TROUBLE} }})() === '' && (() => {{ {CYCLE} }})() === '{first}'")
    assert browser.execute_script(grey) == "none"
    arm = file.parents[1] / "robots" / "glazer6.toml"
    arm.write_text(arm.read_text().replace("velocity = 180", "velocity = 60"))
    until(browser, f"return (() => {{ {CYCLE} }})() !== '{first}'")
    assert browser.get_log("browser") == []


def test_another_sites_page_can_not_read_it(browser, watched):
    _, page = watched
    open_page(browser, page.url)

    class Other(http.server.BaseHTTPRequestHandler):
        def do_GET(self):
            self.send_response(200)
            self.send_header("Content-Type", "text/html")
            self.end_headers()
            self.wfile.write(f"<title>other</title><iframe src='{page.url}'></iframe>".encode())

        def log_message(self, *_):
            pass

    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), Other) as other:
        thread = threading.Thread(target=other.serve_forever)
        thread.start()
        browser.get(f"http://127.0.0.1:{other.server_address[1]}/")
        script = (
            "const [address, done] = arguments; fetch(address).then((r) => r.text()).then(done, () => done('refused'))"
        )
        for path in ("", "state?seen=0"):
            assert browser.execute_async_script(script, page.url + path) == "refused"
        assert browser.execute_script("try { return frames[0].document.title } catch { return 'refused' }") == "refused"
        other.shutdown()
        thread.join()
    browser.get_log("browser")


def test_the_page_says_when_the_watch_has_ended(browser, watched):
    _, page = watched
    open_page(browser, page.url)
    page.close()
    assert until(browser, TROUBLE) == "The watch has ended: this is its last plan."
    browser.get("about:blank")
    browser.get_log("browser")
