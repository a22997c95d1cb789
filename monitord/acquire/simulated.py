"""The built-in station: transmitters with programme, drift and a story, in the noise of one receiver.

It paces itself by the monotonic clock and hands over blocks of 50 ms, like a receiver would. The samples
depend on the settings alone: every start gives the same ones.
"""

import time
from collections.abc import Sequence

import numpy as np

from monitord.acquire.transmitters import Air
from monitord.blocks import Block
from monitord.errors import SourceLost
from monitord.settings import Channel, Source
from monitord.stage import SourceCounts

BLOCK_S = 0.05

_AHEAD_FRAMES = 19_200  # made at one go where blocks are short: many small steps cost more than one large one


class SimulatedSource:
    """A SampleSource with one transmitter on each carrier of `channels`.

    Complex samples at `settings.sample_rate_hz` (48 kS/s unless set) round `settings.center_hz`. Two channels
    on one carrier hear the same transmitter. With `settings.pace = "flat-out"` it does not wait. It never
    ends.
    """

    def __init__(self, settings: Source, channels: Sequence[Channel]) -> None:
        self.settings = settings
        self.counts = SourceCounts()
        self._channels = tuple(channels)
        assert settings.sample_rate_hz is not None and settings.center_hz is not None  # defaults of this kind
        self._rate_hz, self._center_hz = settings.sample_rate_hz, settings.center_hz
        self._frames = max(1, round(BLOCK_S * self._rate_hz))
        self._ahead = max(1, _AHEAD_FRAMES // self._frames) * self._frames
        self._made = np.zeros(0, np.complex64)  # samples not yet handed over, the next of them first
        self._next = 0
        self._air: Air | None = None
        self._openings = 0
        self._began_s = self._began_utc = 0.0

    @property
    def ended(self) -> bool:
        """Never: the station is on the air around the clock."""
        return False

    def open(self) -> None:
        """Make the programmes, which takes about half a second, and go on the air.

        Opened again, it is a new stream.
        """
        self._air = Air(self._channels, self._rate_hz, self._center_hz)
        self._made, self._next = np.zeros(0, np.complex64), 0
        self._openings += 1
        self._began_s, self._began_utc = time.monotonic(), time.time()

    def read(self, timeout_s: float, wanted: int = 1) -> Block | None:
        """Hand over the next 50 ms once they are over, or None if they are not within `timeout_s` seconds.

        A late reader gets all that is due, without loss. Raises SourceLost if the source is not open.
        """
        if self._air is None:
            raise SourceLost("source: the simulated station is not open; open it before reading")
        if not self._due(self._next + self._frames, timeout_s):
            return None
        if not len(self._made):
            self._made = self._air.receive(self._ahead)
        samples, self._made = np.split(self._made, [self._frames])
        start = self._next
        self._next += self._frames
        return Block(
            samples=samples,
            rate_hz=self._rate_hz,
            center_hz=self._center_hz,
            start=start,
            utc=self._began_utc + start / self._rate_hz,
            stream=self._openings - 1,
        )

    def close(self) -> None:
        """Let go of the programmes; may be called twice."""
        self._air = None

    def _due(self, end: int, timeout_s: float) -> bool:
        """Wait until sample `end` would have come, at most `timeout_s`; whether it has."""
        if self.settings.pace == "flat-out":
            return True
        wait_s = self._began_s + end / self._rate_hz - time.monotonic()
        if wait_s > 0:
            time.sleep(max(0.0, min(wait_s, timeout_s)))
        return wait_s <= timeout_s
