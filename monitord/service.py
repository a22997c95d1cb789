"""The daemon: builds source, chain and outlets from the settings, runs them, and stops cleanly."""

import logging
import signal
import threading
import time
from collections.abc import Sequence
from types import FrameType

import numpy as np

from monitord import __version__
from monitord.acquire import make_source
from monitord.blocks import LOSS_REASONS, Block, Event
from monitord.chain import Chain
from monitord.errors import SourceLost
from monitord.measure import quantities_of
from monitord.notice.source import SourceRule
from monitord.publish.eventlog import EventLog
from monitord.publish.metrics import MetricsPage
from monitord.publish.tally import Tally
from monitord.publish.web import WebServer
from monitord.settings import Settings
from monitord.stage import Outlet, SampleSource

TICK_S = 0.5
RETRY_FIRST_S = 0.5
RETRY_LONGEST_S = 30.0
LAG_UNHEALTHY_S = 5.0

_log = logging.getLogger("monitord.service")


class Pace:
    """How far the chain is behind its source, by the monotonic clock against the count of samples.

    The earliest arrival seen is the reference; it gives way by 200 ppm, so that a slow sample clock is not
    taken for a chain that falls behind.
    """

    _GIVE = 2e-4

    def __init__(self) -> None:
        self._anchor_s: float | None = None
        self._seen_s = 0.0

    def lag_s(self, elapsed_s: float, now_s: float) -> float:
        """Lag when sample time `elapsed_s` has just been processed at `now_s`."""
        due_s = now_s - elapsed_s
        if self._anchor_s is None:
            self._anchor_s, self._seen_s = due_s, now_s
        self._anchor_s = min(self._anchor_s + self._GIVE * (now_s - self._seen_s), due_s)
        self._seen_s = now_s
        return due_s - self._anchor_s

    def begin(self) -> None:
        """A new stream: count anew."""
        self._anchor_s = None


class Service:
    """One source, its chain and its outlets. `run` returns when stopped, or when a recording is over."""

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._tally = Tally(lost=dict.fromkeys(LOSS_REASONS, 0))
        names = [channel.name for channel in settings.channels]
        self._page = MetricsPage(names, quantities_of(settings.channels), self._tally, __version__)
        self._web = WebServer(settings.http.listen, self._page, self.health)
        self._watch = SourceRule()
        self._outlets: tuple[Outlet, ...] = (self._page, EventLog())
        self._chain: Chain | None = None
        self._stop = threading.Event()
        self._pace = Pace()
        self._stream: int | None = None
        self._heard_s = time.monotonic()
        self._last_s = 0.0
        self._last_utc: float | None = None
        self._busy_s, self._busy_since_s = 0.0, time.monotonic()

    def stop(self) -> None:
        """Ask `run` to return."""
        self._stop.set()

    def health(self) -> tuple[str, list[str]]:
        """Is the daemon doing its job now? ("ok", []) or another word with the reasons."""
        reasons = []
        if not self._tally.up:
            reasons.append("the source delivers no samples")
        if self._tally.lag_s > LAG_UNHEALTHY_S:
            reasons.append(f"the chain is {self._tally.lag_s:.1f} s behind its source")
        return ("ok", []) if not reasons else ("failing", reasons)

    def run(self) -> None:
        """Run until stopped or until the source ends. Raises MonitordError with one clear line."""
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, self._on_signal)
        self._web.start()
        host = self._settings.http.listen.rpartition(":")[0]
        _log.info("metrics and health on http://%s:%d", host, self._web.port)
        source = make_source(self._settings.source, self._settings.channels)
        self._tally.rejected = source.counts.rejected
        self._tell(self._watch.started())
        try:
            if self._opened(source):
                self._loop(source)
        finally:
            source.close()
            if self._chain is not None:
                self._chain.finish()
            self._tell(self._watch.stopped())
            self._web.stop()
        _log.info("stopped")

    def _on_signal(self, number: int, frame: FrameType | None) -> None:
        self._stop.set()

    def _opened(self, source: SampleSource) -> bool:
        """Open the source, trying again with growing pauses; False if stopped meanwhile."""
        pause_s = RETRY_FIRST_S
        while not self._stop.is_set():
            try:
                source.open()
            except SourceLost as error:
                _log.warning("%s; trying again in %g s", error, pause_s)
                self._stop.wait(pause_s)
                pause_s = min(2 * pause_s, RETRY_LONGEST_S)
            else:
                return True
        return False

    def _loop(self, source: SampleSource) -> None:
        self._heard_s = self._busy_since_s = time.monotonic()
        while not self._stop.is_set():
            block = source.read(TICK_S, self._chain.wanted if self._chain else 1)
            self._tally.reconnects = source.counts.reconnects
            if block is not None:
                self._take(block)
            elif source.ended:
                _log.info("the source has ended")
                return
            else:
                self._silence()

    def _take(self, block: Block) -> None:
        begin_s = self._heard_s = time.monotonic()
        tally = self._tally
        if not tally.up:
            tally.up = True
            self._page.source_back()
        if block.stream != self._stream:
            self._stream = block.stream
            self._pace.begin()
        self._tell(self._watch.block(block))
        count_block(tally, block)
        if self._chain is None:
            self._chain = Chain.beginning_with(block, self._settings, self._outlets, self._tally)
        self._chain.process(block)
        self._last_s, self._last_utc = block.end / block.rate_hz, _end_utc(block)
        now_s = time.monotonic()
        tally.lag_s = self._pace.lag_s(self._last_s, now_s)
        self._count_busy(now_s - begin_s, now_s)

    def _count_busy(self, spent_s: float, now_s: float) -> None:
        self._busy_s += spent_s
        if now_s - self._busy_since_s >= 1.0:
            self._tally.busy_ratio = self._busy_s / (now_s - self._busy_since_s)
            self._busy_s, self._busy_since_s = 0.0, now_s

    def _silence(self) -> None:
        """Nothing came: the clock goes on without the source."""
        age_s = time.monotonic() - self._heard_s
        events = self._watch.silent(age_s, self._last_s, self._last_utc or time.time() - age_s)
        if events:
            self._tally.up = False
            self._page.source_lost()
            self._tell(events)

    def _tell(self, events: Sequence[Event]) -> None:
        for event in events:
            for outlet in self._outlets:
                outlet.event(event)


def _end_utc(block: Block) -> float | None:
    return None if block.utc is None else block.utc + len(block.samples) / block.rate_hz


def count_block(tally: Tally, block: Block) -> None:
    """Enter a block into the tally: samples, losses, clipping, level (0 dBFS: a sinusoid of amplitude 1)."""
    tally.samples += len(block.samples)
    tally.clipped += block.clipped
    if block.lost:
        tally.lost[block.lost_reason] = tally.lost.get(block.lost_reason, 0) + block.lost
    tally.last_sample_utc = _end_utc(block) or float("nan")
    if len(block.samples):
        power = float(np.vdot(block.samples, block.samples).real) / len(block.samples)
        power *= 1 if np.iscomplexobj(block.samples) else 2
        tally.level_dbfs = 10 * float(np.log10(max(power, 1e-30)))
