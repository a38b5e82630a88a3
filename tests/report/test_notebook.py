"""What a notebook shows of a plan."""

import base64
import re
import xml.etree.ElementTree as ET
from dataclasses import replace

from pathplan.report.text import clock


def test_summary_and_picture(pick):
    html = pick._repr_html_()
    assert len(html) < 60_000
    assert pick.task.title in html and "within limits" in html and f">{clock(pick.duration)}<" in html
    picture = re.search(r'src="data:image/svg\+xml;base64,([^"]+)"', html)[1]
    root = ET.fromstring(base64.b64decode(picture))
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    lanes = [item for item in root.iter("{http://www.w3.org/2000/svg}g") if item.get("class") == "lane"]
    assert [lane.get("data-joint") for lane in lanes] == list(pick.arm.joint_names)
    assert "Velocity over time. base: " in re.search(r'alt="([^"]+)"', html)[1]


def test_a_title_stays_text(pick):
    html = replace(pick, task=replace(pick.task, title="<script>x</script>"))._repr_html_()
    assert "<script" not in html and "&lt;script&gt;" in html


def test_a_long_plan_shows_its_summary_alone(pick, monkeypatch):
    monkeypatch.setattr("pathplan.report.notebook.WHOLE", 1000)
    assert "<img" not in pick._repr_html_() and "within limits" in pick._repr_html_()
