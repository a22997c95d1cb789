"""The HTTP server, asked over loopback."""

import http.client
import json
import os
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from prometheus_client.openmetrics.parser import text_string_to_metric_families as open_families
from prometheus_client.parser import text_string_to_metric_families as text_families

from monitord.errors import MonitordError
from monitord.publish.metrics import CONTENT_TYPE_OPENMETRICS, CONTENT_TYPE_TEXT
from monitord.publish.web import WebServer, wants_openmetrics
from monitord.quantities import Quantity
from tests.publish.given import reading
from tests.publish.pages import make_page

ROOT = Path(__file__).parents[2]
SCRAPER = "application/openmetrics-text;version=1.0.0,text/plain;version=0.0.4;q=0.5,*/*;q=0.1"


class Health:
    def __init__(self) -> None:
        self.status = "ok"
        self.reasons: list[str] = []

    def __call__(self) -> tuple[str, list[str]]:
        return self.status, self.reasons


@pytest.fixture
def health() -> Health:
    return Health()


@pytest.fixture
def server(health: Health) -> Iterator[WebServer]:
    web = WebServer("127.0.0.1:0", make_page(), health)
    web.start()
    yield web
    web.stop()


def ask(
    server: WebServer, path: str, method: str = "GET", headers: dict[str, str] | None = None
) -> tuple[http.client.HTTPResponse, bytes]:
    connection = http.client.HTTPConnection("127.0.0.1", server.port, timeout=5)
    try:
        connection.request(method, path, headers=headers or {})
        answer = connection.getresponse()
        return answer, answer.read()
    finally:
        connection.close()


def test_the_page_comes_in_the_format_that_was_asked_for(server: WebServer) -> None:
    answer, body = ask(server, "/metrics")
    assert (answer.status, answer.headers["Content-Type"]) == (200, CONTENT_TYPE_TEXT)
    assert "monitord_source_up" in {family.name for family in text_families(body.decode())}
    answer, body = ask(server, "/metrics", headers={"Accept": SCRAPER})
    assert (answer.status, answer.headers["Content-Type"]) == (200, CONTENT_TYPE_OPENMETRICS)
    assert "monitord_source_up" in {family.name for family in open_families(body.decode())}


@pytest.mark.parametrize(
    ("accept", "wanted"),
    [
        (SCRAPER, True),
        ("text/plain, application/openmetrics-text; version=1.0.0", True),
        ("text/plain;version=0.0.4", False),
        ("*/*", False),
        ("", False),
        ("application/openmetrics-text-not", False),
    ],
)
def test_openmetrics_is_sent_only_to_those_who_name_it(accept: str, wanted: bool) -> None:
    assert wants_openmetrics(accept) is wanted


def test_head_gives_the_headers_of_get_and_no_body(server: WebServer) -> None:
    for path in ("/metrics", "/healthz", "/"):
        answer, body = ask(server, path, "HEAD")
        assert (answer.status, body) == (200, b""), path
        assert int(answer.headers["Content-Length"]) > 0


def test_health_is_told_with_its_reasons(server: WebServer, health: Health) -> None:
    answer, body = ask(server, "/healthz")
    assert (answer.status, json.loads(body)) == (200, {"status": "ok"})
    health.status, health.reasons = "degraded", ["source lost for 12 s"]
    answer, body = ask(server, "/healthz")
    assert answer.status == 503
    assert json.loads(body) == {"status": "degraded", "reasons": ["source lost for 12 s"]}


def test_the_front_page_points_to_what_there_is(server: WebServer) -> None:
    answer, body = ask(server, "/")
    assert answer.status == 200
    assert answer.headers["Content-Type"].startswith("text/html")
    assert b'href="metrics"' in body
    assert b'href="healthz"' in body


@pytest.mark.parametrize(
    ("method", "path", "status"),
    [("GET", "/nothing", 404), ("GET", "/metrics/x", 404), ("POST", "/metrics", 405), ("DELETE", "/", 405)],
)
def test_anything_else_is_refused(server: WebServer, method: str, path: str, status: int) -> None:
    answer, _ = ask(server, path, method)
    assert answer.status == status


def test_a_change_is_on_the_page_at_the_next_scrape(server: WebServer) -> None:
    page = make_page()
    web = WebServer("127.0.0.1:0", page, Health())
    web.start()
    try:
        page.reading(reading({"carrier_level_dbfs": [-20.25, -30.0]}))
        _, body = ask(web, "/metrics")
        assert b'\nmonitord_carrier_level_dbfs{channel="mw-936"} -20.25\n' in body
    finally:
        web.stop()


def test_a_taken_port_is_told_in_one_line(server: WebServer) -> None:
    listen = f"127.0.0.1:{server.port}"
    with pytest.raises(MonitordError) as told:
        WebServer(listen, make_page(), Health()).start()
    line = str(told.value)
    assert line.startswith(f'[http].listen = "{listen}": Address already in use')
    assert "\n" not in line


@pytest.mark.parametrize("listen", ["9560", "127.0.0.1", "127.0.0.1:", "127.0.0.1:70000", ":9560", "host:x"])
def test_an_address_that_is_none_is_told_with_an_example(listen: str) -> None:
    with pytest.raises(MonitordError, match=r"must be host:port, for instance 127\.0\.0\.1:9560"):
        WebServer(listen, make_page(), Health()).start()


def test_the_port_is_free_again_after_the_stop() -> None:
    first = WebServer("127.0.0.1:0", make_page(), Health())
    first.start()
    port = first.port
    assert ask(first, "/healthz")[0].status == 200
    first.stop()
    first.stop()
    second = WebServer(f"127.0.0.1:{port}", make_page(), Health())
    second.start()
    assert ask(second, "/healthz")[0].status == 200
    second.stop()


def stopped_within(server: WebServer, limit_s: float) -> None:
    begin = time.monotonic()
    server.stop()
    assert time.monotonic() - begin < limit_s
    assert not [thread for thread in threading.enumerate() if thread.name == "http"]


def test_it_stops_at_once_while_clients_keep_their_connections() -> None:
    web = WebServer("127.0.0.1:0", make_page(), Health())
    web.start()
    idle = http.client.HTTPConnection("127.0.0.1", web.port, timeout=5)
    idle.request("GET", "/healthz")
    assert idle.getresponse().read()
    half = socket.create_connection(("127.0.0.1", web.port))
    half.sendall(b"GET /metrics HTTP/1.1\r\nHost: x\r\n")
    try:
        stopped_within(web, 1.0)
    finally:
        idle.close()
        half.close()


def test_it_stops_while_a_client_does_not_read_its_answer() -> None:
    channels = [f"mw-{row}" for row in range(2000)]
    web = WebServer("127.0.0.1:0", make_page(channels, [Quantity("x_db", "dB", "X.", "")]), Health())
    web.start()
    with socket.socket() as deaf:
        deaf.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        deaf.connect(("127.0.0.1", web.port))
        deaf.sendall(b"GET /metrics HTTP/1.1\r\nHost: x\r\n\r\n" * 4)
        assert deaf.recv(100).startswith(b"HTTP/1.1 200")
        stopped_within(web, 1.0)


def test_it_ends_with_its_process_and_writes_nothing_of_its_own() -> None:
    """Asked wrongly and stopped: no traceback, no chatter."""
    script = """
import logging, socket, sys
from tests.publish.pages import make_page
from monitord.publish.web import WebServer
logging.basicConfig(level=logging.DEBUG)
logging.getLogger("asyncio").setLevel(logging.INFO)
web = WebServer("127.0.0.1:0", make_page(), lambda: ("ok", []))
web.start()
with socket.create_connection(("127.0.0.1", web.port)) as client:
    client.sendall(b"nonsense\\r\\n\\r\\n")
    print(client.recv(100).split(b"\\r\\n")[0].decode())
web.stop()
"""
    ended = subprocess.run(
        [sys.executable, "-c", script],
        capture_output=True,
        text=True,
        timeout=20,
        env={**os.environ, "PYTHONPATH": "."},
    )
    assert (ended.returncode, ended.stdout, ended.stderr) == (0, "HTTP/1.1 400 Bad Request\n", "")
