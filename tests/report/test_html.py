"""The report as a file: whole, alone, escaped, the same for the same motion."""

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest

import pathplan
from pathplan.auditing import Finding
from pathplan.report.gather import picture_of, picture_of_table
from pathplan.report.html import report_html
from pathplan.report.markup import embedded, esc, tag
from pathplan.report.packed import unpack
from pathplan.report.savings_screen import saving_name
from pathplan.report.screen import CAUTIONS
from pathplan.savings import Saving
from tests.auditing.cast import made_arm, move_table

HOSTILE = "</script><img src=x onerror=alert(1)><!-- \u202e & \u2028 '\" ]]>"


class Elements(HTMLParser):
    """Every element with its attributes and the text right inside it."""

    def __init__(self, text):
        super().__init__()
        self.found, self.open = [], []
        self.feed(text)

    def handle_starttag(self, name, attributes):
        self.found.append((name, dict(attributes), []))
        self.open.append(self.found[-1])

    def handle_endtag(self, name):
        while self.open and self.open[-1][0] != name:
            self.open.pop()
        self.open.pop()

    def handle_data(self, data):
        if self.open:
            self.open[-1][2].append(data)

    def all(self, name):
        return [(attributes, "".join(text)) for found, attributes, text in self.found if found == name]

    def by_id(self, name):
        (found,) = [item for item in self.found if item[1].get("id") == name]
        return found


def data_of(text):
    return json.loads(re.search(r'<script type="application/json" id="data">(.*?)</script>', text)[1])


@pytest.fixture(scope="module")
def page(pick):
    return report_html(picture_of(pick))


def test_it_needs_nothing_else(page):
    elements = Elements(page)
    for name, attributes, _ in elements.found:
        for key in ("src", "href", "action", "data", "srcset", "poster"):
            value = attributes.get(key) or "#"
            assert value.startswith(("#", "data:")), (name, key, value)
    assert not re.search(r"@import|url\((?!#)|https?:", page)


def test_only_its_own_script_and_style_may_run(page):
    elements = Elements(page)
    ((policy, _),) = [(a["content"], t) for a, t in elements.all("meta") if a.get("http-equiv")]
    assert "default-src 'none'" in policy and "unsafe" not in policy and "connect-src" not in policy
    scripts = [text for attributes, text in elements.all("script") if "type" not in attributes]
    for texts, rule in ((scripts, "script-src"), ([text for _, text in elements.all("style")], "style-src")):
        (text,) = texts
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert f"{rule} 'sha256-{digest}'" in policy
    assert not [a for _, a, _ in elements.found if any(key.startswith("on") or key == "style" for key in a)]


def test_the_same_motion_gives_the_same_bytes(pick, page):
    again = pathplan.plan(pathplan.load_task(pick.task.file))
    assert report_html(picture_of(again)) == page


def test_the_page_carries_the_rows_of_the_table(pick, page):
    data = data_of(page)
    columns = dict(zip(data["columns"], unpack(data["packed"]), strict=True))
    decimals = dict(zip(data["columns"], (d for d, _ in data["packed"]["columns"]), strict=True))
    assert np.array_equal(columns["time"], pick.table.time) and data["rows"] == len(pick.table)
    for quantity in ("position", "velocity", "acceleration", "jerk"):
        for i in range(6):
            key = f"{quantity} {i}"
            exact = np.degrees(getattr(pick.table, quantity)[:, i])
            assert columns[key] == pytest.approx(np.round(exact, decimals[key]), abs=1e-9)
    low, high = data["joints"][1]["limits"]["position"]
    assert (low, high) == pytest.approx((-100, 115))


def test_what_an_engineer_signs_is_there(pick, page):
    elements = Elements(page)
    assert elements.all("h1")[0][1] == pick.task.title
    sections = [attributes["id"] for attributes, _ in elements.all("section")]
    assert sections == ["findings", "audit", "steps", "motion", "marks", "drives", "inputs", "cautions"]
    text = "".join(data for _, _, texts in elements.found for data in texts)
    for digest in pick.meta["sources"].values():
        assert digest in text
    for name, version in pick.meta["versions"].items():
        assert name in text and version in text
    assert " ".join(CAUTIONS) in text and "within limits" in text and "signature" in text
    for plot in ("pace", "position", "velocity", "acceleration", "jerk", "torque", "tool"):
        elements.by_id(f"plot-{plot}")


def test_tables_are_tables_and_pictures_have_words(page):
    elements = Elements(page)
    assert all(a.get("scope") in ("col", "row") for a, _ in elements.all("th"))
    captions = [text for _, text in elements.all("caption")]
    assert {"Shares of limits", "Steps", "Marks", "Files read"} <= set(captions)
    titles = [a for a, _ in elements.all("svg") if a.get("role") == "img"]
    assert len(titles) >= 9
    for attributes in titles:
        for key in ("aria-labelledby", "aria-describedby"):
            if key in attributes:
                assert "".join(elements.by_id(attributes[key])[2])
    for name in ("input", "select", "button", "canvas"):
        for attributes, text in elements.all(name):
            labelled = attributes.get("aria-label") or text.strip() or attributes.get("id") == "labels"
            assert labelled, (name, attributes)
    assert elements.all("html")[0][0]["lang"] == "en"


def test_text_from_files_is_escaped_everywhere(pick):
    """Title, names of joints, steps, marks, frames, files and findings: as text, in the markup and in the data."""
    picture = picture_of(pick)
    names = tuple(f"{k}{HOSTILE}" for k in range(6))
    joints = tuple(replace(joint, name=name) for joint, name in zip(picture.arm.joints, names, strict=True))
    arm = replace(picture.arm, name=HOSTILE, joints=joints, title=HOSTILE)
    audited = tuple(replace(j, name=n) for j, n in zip(picture.audit.joints, names, strict=True))
    findings = (Finding("warning", HOSTILE, time=1.0),)
    audit = replace(picture.audit, joints=audited, findings=findings, arm=HOSTILE, task=HOSTILE)
    steps = tuple(replace(step, name=HOSTILE) for step in pick.task.steps)
    frames = {f"{HOSTILE}{k}": replace(f, name=HOSTILE, parent="base") for k, f in enumerate(pick.task.frames.values())}
    task = replace(pick.task, title=HOSTILE, steps=steps, frames=frames)
    plan = replace(pick, task=task)
    plan.__dict__["audit"] = audit
    marks = tuple(replace(mark, name=HOSTILE) for mark in picture.marks)
    meta = {**picture.meta, "task": HOSTILE, "sources": {HOSTILE: HOSTILE}, "versions": {HOSTILE: HOSTILE}}
    bad = replace(
        picture, title=HOSTILE, arm=arm, audit=audit, plan=plan, meta=meta, names=names, marks=marks,
        step_names=tuple(step.name for step in steps),
    )  # fmt: skip
    savings = [Saving("limit", "jerk", HOSTILE, None, 0.1, None, 0.01)]
    text = report_html(bad, savings)
    elements = Elements(text)
    assert not elements.all("img") and len(elements.all("script")) == 2 and "<!--" not in text
    assert not any(sign in text for sign in "\u202e\u2028")
    shown = "".join(char if char.isprintable() else "?" for char in HOSTILE)
    assert elements.all("h1")[0][1] == shown
    data = data_of(text)
    assert data["joints"][0]["name"] == f"0{shown}" and shown in data["steps"][0]
    assert not any(sign in re.search(r'id="data">(.*?)</script>', text)[1] for sign in "<>&")


def test_a_minute_at_one_kilohertz_stays_small():
    """60 s at 1 kHz of six axes that never rest, jerk by steps: with everything, less than 3 MB."""
    from tests.report.conftest import ROOT

    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    time = np.arange(60_001) / 1000
    rate = np.random.default_rng(6).uniform(2.0, 4.0, 6)
    wave = np.sin(time[:, None] * rate + np.arange(6))
    table = pathplan.JointTable(
        time, 0.4 * wave, 0.4 * rate * np.cos(time[:, None] * rate + np.arange(6)), -0.4 * rate**2 * wave,
        60 * np.sign(np.sin(9 * time[:, None] * rate)), torque=20 * wave + 3 * np.sign(wave),
        joint_names=arm.joint_names, joint_kinds=("revolute",) * 6, cycle=0.001,
    )  # fmt: skip
    picture = picture_of_table(table, arm)
    text = report_html(picture)
    assert len(text.encode()) < 3e6
    assert data_of(text)["packed"]["rows"] == 60_001


def test_a_table_by_itself():
    table = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0)
    text = report_html(picture_of_table(table, made_arm()))
    sections = [attributes["id"] for attributes, _ in Elements(text).all("section")]
    assert sections == ["findings", "audit", "motion", "cautions"]


def test_what_breaks_limits_is_told(pick):
    table = move_table([0.55, 0, 0], [0.4, 0.1, 0.1], 3.0)
    text = report_html(picture_of_table(table, made_arm()))
    elements = Elements(text)
    assert "BREAKS LIMITS" in elements.all("title")[0][1]
    assert [text for a, text in elements.all("h2") if a["id"] == "findings-heading"] == ["What breaks limits"]
    assert 'class="verdict fail"' in text and "✕" in text and "110.0 %" in text


def test_what_would_buy_time(pick):
    savings = [
        Saving("limit", "jerk", "shoulder", None, 0.1, 0.04, 0.0336),
        Saving("blend", "blend", None, 3, 0.1, None, 0.00929),
    ]
    text = report_html(picture_of(pick), savings)
    for saving, saved in zip(savings, ("33.6 ms", "9.29 ms"), strict=True):
        name = esc(saving_name(pick.task, saving))
        assert f'<th scope="row">{name}</th><td class="n">+10 %</td><td class="n">{saved}</td>' in text
    assert "No single limit" in report_html(picture_of(pick), [])
    assert "What would buy time" not in report_html(picture_of(pick))


def test_markup():
    assert tag("p", "a", class_="x", data_n=1.5, hidden=True, id=None) == '<p class="x" data-n="1.5" hidden>a</p>'
    assert tag("meta", name='a"b') == '<meta name="a&quot;b">'
    assert json.loads(embedded({"a": "</script>&"})) == {"a": "</script>&"} and "<" not in embedded("</script>")
    with pytest.raises(ValueError, match="not JSON compliant"):
        embedded(float("nan"))
