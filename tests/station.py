"""A real daemon in a process of its own, fed over a real ZMQ socket and read over HTTP, for the tests."""

import contextlib
import os
import re
import signal
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import zmq
from prometheus_client.parser import text_string_to_metric_families

WITHIN_S = 20.0


def samples_of(page: str) -> dict[tuple[str, ...], float]:
    """The page's samples: (name without prefix, label values in the order of the labels' names) -> value."""
    found = {}
    for family in text_string_to_metric_families(page):
        for sample in family.samples:
            labels = tuple(sample.labels[key] for key in sorted(sample.labels))
            found[sample.name.removeprefix("monitord_"), *labels] = sample.value
    return found


class Daemon:
    """`monitord run` on given settings, with the port that it chose."""

    def __init__(self, directory: Path, settings: str) -> None:
        path = directory / "settings.toml"
        path.write_text(settings + '\n[http]\nlisten = "127.0.0.1:0"\n')
        self.process = subprocess.Popen(
            [sys.executable, "-m", "monitord", "run", str(path)],
            stderr=subprocess.PIPE,
            text=True,
            env=os.environ | {"PYTHONUNBUFFERED": "1"},
        )
        self.lines: list[str] = []
        self._news = threading.Condition()
        self._ended = False
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()
        listening = self.line("metrics and health on")
        self.port = int(re.search(r":(\d+)$", listening).group(1))

    def _read(self) -> None:
        for line in self.process.stderr:
            with self._news:
                self.lines.append(line.rstrip("\n"))
                self._news.notify_all()
        with self._news:
            self._ended = True
            self._news.notify_all()

    def line(self, part: str, within_s: float = WITHIN_S) -> str:
        """Wait for a log line that holds `part`."""

        def found() -> list[str]:
            return [line for line in self.lines if part in line]

        with self._news:
            self._news.wait_for(lambda: found() or self._ended, within_s)
            assert found(), f"no line with {part!r} in {self.lines}"
            return found()[0]

    def get(self, path: str) -> str:
        with urllib.request.urlopen(f"http://127.0.0.1:{self.port}{path}", timeout=5) as answer:
            return answer.read().decode()

    def status(self, path: str) -> int:
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{self.port}{path}", timeout=5) as answer:
                return answer.status
        except urllib.error.HTTPError as error:
            error.close()
            return error.code

    def metrics(self) -> dict[tuple[str, ...], float]:
        return samples_of(self.get("/metrics"))

    def wait_for(self, condition, within_s: float = WITHIN_S) -> dict[tuple[str, ...], float]:
        """Scrape until the page meets the condition."""
        end = time.monotonic() + within_s
        while True:
            page = self.metrics()
            if condition(page):
                return page
            assert time.monotonic() < end, f"not within {within_s} s; last page: {page}; log: {self.lines}"
            time.sleep(0.02)  # the pace of the scrapes

    def stop(self, number: int = signal.SIGTERM) -> int:
        self.process.send_signal(number)
        return self.process.wait(10)

    def close(self) -> None:
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait()
        self._reader.join(5)
        self.process.stderr.close()


@contextlib.contextmanager
def daemon(directory: Path, settings: str) -> Iterator[Daemon]:
    running = Daemon(directory, settings)
    try:
        yield running
    finally:
        running.close()


@contextlib.contextmanager
def publisher() -> Iterator[tuple[zmq.Socket, str]]:
    """A bound PUB socket and its endpoint; it knows when somebody has subscribed (XPUB)."""
    context = zmq.Context()
    sender = context.socket(zmq.XPUB)
    sender.setsockopt(zmq.LINGER, 0)
    port = sender.bind_to_random_port("tcp://127.0.0.1")
    try:
        yield sender, f"tcp://127.0.0.1:{port}"
    finally:
        sender.close()
        context.term()


def subscribed(sender: zmq.Socket) -> None:
    """Wait until the daemon has subscribed."""
    assert sender.poll(int(WITHIN_S * 1000)), "nobody subscribed"
    sender.recv()


def send_in_real_time(
    sender: zmq.Socket,
    samples: np.ndarray,
    rate_hz: float,
    chunk: int = 2400,
    *,
    stop: threading.Event | None = None,
) -> float:
    """Send cf32 at the pace of its rate; returns the monotonic time at which sample 0 was due."""
    begin = time.monotonic()
    for start in range(0, len(samples), chunk):
        wait_s = begin + min(start + chunk, len(samples)) / rate_hz - time.monotonic()
        if wait_s > 0:
            time.sleep(wait_s)  # real time is what is being tested
        if stop is not None and stop.is_set():
            break
        sender.send(np.ascontiguousarray(samples[start : start + chunk], np.complex64).tobytes())
    return begin
