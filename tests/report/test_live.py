"""Who may see the live page: this machine and nobody else."""

import http.client
import json
import os
import signal
import socket
import subprocess
import sys
import time

import pytest

import pathplan
from pathplan.errors import InputError
from pathplan.report.live import LivePage
from pathplan.report.watching import Watching
from tests.report.conftest import ROOT


@pytest.fixture
def page(watching):
    with LivePage(watching, port=0) as found:
        yield found


def port_of(page):
    return int(page.url.rsplit(":", 1)[1].rstrip("/"))


def ask(page, path="/", method="GET", host=None, **headers):
    """Status, headers and body of a request."""
    connection = http.client.HTTPConnection("127.0.0.1", port_of(page), timeout=10)
    connection.putrequest(method, path, skip_host=True)
    for name, value in ({} if host == "" else {"Host": host or f"127.0.0.1:{port_of(page)}"} | headers).items():
        connection.putheader(name.replace("_", "-"), value)
    connection.endheaders()
    answer = connection.getresponse()
    body = answer.read().decode()
    connection.close()
    return answer.status, dict(answer.getheaders()), body


@pytest.mark.parametrize("host", ["127.0.0.1", "localhost", "LOCALHOST", "[::1]"])
def test_the_loopback_by_its_names(page, host):
    status, headers, body = ask(page, host=f"{host}:{port_of(page)}")
    assert status == 200 and "Across" in body and headers["Content-Type"] == "text/html; charset=utf-8"


@pytest.mark.parametrize(
    "host", ["", "127.0.0.1", "127.0.0.1:1", "tiles.example", "tiles.example:{port}", "0.0.0.0:{port}"]
)
@pytest.mark.parametrize("path", ["/", "/state?seen=0"])
def test_any_other_host_is_refused(page, host, path):
    """A name that another site points at 127.0.0.1 comes with that name as its host."""
    status, _, body = ask(page, path, host=host.format(port=port_of(page)))
    assert status in (400, 403) and "Across" not in body


def test_nothing_may_be_kept_or_read_by_others(page):
    for path in ("/", "/state?seen=0", "/nothing"):
        _, headers, _ = ask(page, path)
        assert headers["Cache-Control"] == "no-store" and headers["X-Content-Type-Options"] == "nosniff"
        assert headers["Cross-Origin-Resource-Policy"] == "same-origin" and headers["X-Frame-Options"] == "DENY"
        assert "frame-ancestors 'none'" in headers["Content-Security-Policy"]
        assert not [name for name in headers if name.lower().startswith("access-control")]


@pytest.mark.parametrize(
    "headers",
    [
        {"Origin": "http://tiles.example"},
        {"Origin": "null"},
        {"Origin": "http://127.0.0.1:1"},
        {"Sec_Fetch_Site": "cross-site", "Sec_Fetch_Dest": "empty"},
        {"Sec_Fetch_Site": "same-site", "Sec_Fetch_Dest": "iframe"},
    ],
)
def test_pages_of_other_sites_are_refused(page, headers):
    for path in ("/", "/state?seen=0"):
        status, _, body = ask(page, path, **headers)
        assert status == 403 and "Across" not in body


def test_a_link_from_elsewhere_opens_the_page_alone(page):
    headers = {"Sec_Fetch_Site": "cross-site", "Sec_Fetch_Dest": "document"}
    assert ask(page, "/", **headers)[0] == 200 and ask(page, "/state?seen=0", **headers)[0] == 403


@pytest.mark.parametrize("method", ["POST", "PUT", "DELETE", "OPTIONS", "PATCH"])
def test_nothing_but_reading(page, method):
    assert ask(page, "/", method)[0] == 405


def test_what_there_is(page):
    assert ask(page, "/", "HEAD")[2] == "" and ask(page, "/etc/passwd")[0] == 404
    status, headers, body = ask(page, "/state?seen=junk")
    news = json.loads(body)
    assert status == 200 and headers["Content-Type"] == "application/json"
    assert news["data"]["rows"] > 100 and news["trouble"] == ""


def test_a_task_that_is_broken_from_the_start(across):
    across.write_text("[[[")
    watching = Watching(across, lambda: pathplan.plan(pathplan.load_task(across)))
    watching.look()
    with LivePage(watching, port=0) as page:
        _, _, body = ask(page)
        news = json.loads(ask(page, "/state?seen=0")[2])
    assert '<main id="sections" hidden>' in body and 'role="alert">across.toml: line 1: not TOML' in body
    assert news["trouble"].startswith("across.toml: line 1: not TOML") and "sections" not in news


def test_news_wait_until_there_are_some(page, watching, across):
    seen = watching.state.version
    connection = http.client.HTTPConnection("127.0.0.1", port_of(page), timeout=10)
    connection.request("GET", f"/state?seen={seen}")
    across.write_text("[[[")
    watching.look()
    news = json.loads(connection.getresponse().read())
    assert news["version"] > seen and "sections" not in news
    connection.close()


def test_only_the_loopback_listens(page):
    other = socket.gethostbyname(socket.gethostname())
    if other.startswith("127."):
        pytest.skip("this machine has no address but the loopback")
    with pytest.raises(ConnectionRefusedError):
        socket.create_connection((other, port_of(page)), timeout=5)


@pytest.mark.parametrize("address", ["0.0.0.0", "::", "192.168.1.4", "tiles.example", ""])
def test_any_other_address_is_refused(watching, address):
    with pytest.raises(InputError, match=r"^address: expected the loopback \(127\.0\.0\.1, ::1, localhost\), got "):
        LivePage(watching, port=0, address=address)


def test_a_port_in_use(page, watching):
    number = port_of(page)
    with pytest.raises(InputError, match=f"^port: {number} is in use: end what uses it or choose another with --port$"):
        LivePage(watching, port=number)


@pytest.mark.parametrize("number", [-1, 65536])
def test_a_port_that_is_none(watching, number):
    with pytest.raises(InputError, match=f"^port: expected a number from 0 to 65535, got {number}$"):
        LivePage(watching, port=number)


def test_it_stops_with_requests_open(watching):
    with LivePage(watching, port=0) as page:
        connection = http.client.HTTPConnection("127.0.0.1", port_of(page), timeout=10)
        connection.request("GET", f"/state?seen={watching.state.version}")
        time.sleep(0.2)
    assert connection.getresponse().status == 503
    connection.close()
    with pytest.raises(ConnectionRefusedError):
        socket.create_connection(("127.0.0.1", port_of(page)), timeout=5)


@pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_command_ends_cleanly(across, number):
    command = [sys.executable, "-u", "-m", "pathplan", "watch", str(across), "--port", "0"]
    with subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        try:
            first, second = process.stdout.readline(), process.stdout.readline()
            process.send_signal(number)
            out, errors = process.communicate(timeout=20)
        finally:
            process.kill()
    assert "http://127.0.0.1:" in first and "Ctrl-C" in first and "cycle time" in second
    assert (process.returncode, errors) == (0, "") and out.rstrip().endswith("ended")


@pytest.mark.skipif(os.name == "nt", reason="signals of POSIX")
def test_a_signal_in_the_middle_of_a_wait_is_heard():
    """The lock of the event is held then, by the thread that the handler runs in."""
    code = (
        "import signal; from pathplan.report.live import _ending\n"
        "with _ending() as ended:\n"
        "    with ended._cond: signal.raise_signal(signal.SIGINT)\n"
        "    assert ended.wait(10)\n"
    )
    subprocess.run([sys.executable, "-c", code], cwd=ROOT, check=True, timeout=60)
