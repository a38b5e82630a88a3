"""A task that is planned again when its files change; without a browser and without a server."""

import os
import shutil
import threading

import pytest

import pathplan
from pathplan.errors import InputError
from pathplan.report.watching import Watching, files_of
from tests.report.conftest import ACROSS, ROOT


def test_first_look(watching):
    state = watching.state
    assert state.planned == state.version and state.trouble == "" and not state.doing
    assert "Across" in state.parts["headline"] and state.parts["changes"] == ""
    assert watching.said[0].startswith("cycle time ") and watching.said[0].endswith(": within limits")
    assert not watching.look()  # nothing has changed


def test_an_edit(across, watching):
    before = watching.state
    across.write_text(ACROSS.replace("900, 500", "500, 500"))
    assert watching.look()
    state = watching.state
    assert state.version > before.version and state.planned > before.planned
    assert "longer than in the last plan" in state.parts["changes"] and "(+" in watching.said[-1]
    news = state.news(before.version)
    assert set(news) == {"version", "trouble", "doing", "title", "sections", "data"}
    assert set(state.news(state.version)) == {"version", "trouble", "doing"}


def test_the_arm_is_watched_too(across, watching):
    arm = across.with_name("loader4.toml")
    arm.write_text(arm.read_text().replace("velocity = ", "velocity = 0.5 * ", 1))
    assert watching.look() and "not TOML" in watching.state.trouble
    shutil.copy(ROOT / "robots" / "loader4.toml", arm)
    assert watching.look() and watching.state.trouble == ""


def test_a_broken_file_keeps_the_last_plan(across, watching):
    good = watching.state
    across.write_text(ACROSS.replace('"joint"', '"jiont"'))
    assert watching.look()
    state = watching.state
    with pytest.raises(InputError) as error:
        pathplan.load_task(across)
    assert state.trouble == str(error.value) == watching.said[-1] and '"jiont"' in state.trouble
    assert state.parts is good.parts and state.planned == good.planned and state.version > good.version
    across.write_text("[[[")
    assert watching.look() and "not TOML" in watching.state.trouble
    across.write_text(ACROSS)
    assert watching.look() and watching.state.trouble == "" and watching.state.planned > good.planned


def test_a_file_that_is_gone_and_comes_back(across, watching):
    across.unlink()
    assert watching.look() and "no such file" in watching.state.trouble
    assert not watching.look()
    across.write_text(ACROSS)
    assert watching.look() and watching.state.trouble == ""


def test_saved_as_it_was(across, watching):
    os.utime(across, (1, 1))
    assert not watching.look()


def test_an_error_of_our_own_is_survived(across):
    def make():
        raise ZeroDivisionError("oops\n<b>")

    watching = Watching(across, make)
    assert watching.look() and watching.state.trouble == "internal error: ZeroDivisionError: oops?<b>"
    across.write_text(ACROSS + "\n")
    assert watching.look()


def test_who_waits_is_told(across, watching):
    seen = watching.state.version
    assert watching.wait(seen, 0.01) is None
    got = []
    thread = threading.Thread(target=lambda: got.append(watching.wait(seen, 10)))
    thread.start()
    across.write_text(ACROSS.replace("900", "600"))
    assert watching.look()
    thread.join(10)
    assert got[0].version > seen


def test_run_until_it_is_ended(across, watching):
    ended = threading.Event()
    thread = threading.Thread(target=watching.run, args=(ended,))
    thread.start()
    seen = watching.state
    across.write_text(ACROSS.replace("900", "700"))
    state = watching.wait(seen.version, 10)
    while state is not None and state.planned == seen.planned:
        state = watching.wait(state.version, 10)
    ended.set()
    thread.join(10)
    assert not thread.is_alive() and state.planned > seen.planned


def test_files_of_a_task(tmp_path):
    (tmp_path / "parts").mkdir()
    main, part = tmp_path / "main.toml", tmp_path / "parts" / "part.toml"
    main.write_text(
        'arm = "arm.toml"\ntitle = "main.toml"\nnote = "notes"\n'
        '[[step]]\ninclude = "parts/part.toml"\n[[step]]\ncurve = { file = "points.csv" }\n'
    )
    part.write_text('points = "more.csv"\nback = "../main.toml"\n')
    (tmp_path / "notes").write_text("anything")
    found = {os.path.relpath(os.path.normpath(path), tmp_path) for path in files_of(main)}
    assert found == {"main.toml", "arm.toml", "notes", "parts/part.toml", "points.csv", "parts/more.csv"}
    main.write_text("[[[")
    assert files_of(main) == {main} == files_of(main)
    assert files_of(tmp_path / "none.toml") == {tmp_path / "none.toml"}
