"""Loss of the source and gaps in it: told apart from loss of a carrier, which nobody can see meanwhile."""

import time
from collections.abc import Sequence

from monitord.blocks import Block, Event
from monitord.notice.episodes import Episodes

LOST_AFTER_S = 2.0
GAP_HOLD_S = 10.0
LOST, GAP = "source-lost", "source-gap"


class SourceRule:
    """Fed with blocks and, when none come, with the time that has passed without one."""

    def __init__(self) -> None:
        self._episodes = Episodes()
        self._last_gap_s = 0.0
        self._stream = 0
        self._lost_at_s = self._silent_since = 0.0

    @property
    def lost(self) -> bool:
        """The source has delivered nothing for too long."""
        return self._episodes.is_open(LOST, None)

    def block(self, block: Block) -> Sequence[Event]:
        """Take a block that came."""
        events: list[Event] = []
        start_s = block.start / block.rate_hz
        if self.lost:
            # By the clock: the count of samples may have stood still, or begun anew.
            away_s = time.monotonic() - self._silent_since
            events.append(self._episodes.end(LOST, None, None, self._lost_at_s + away_s))
        if block.stream != self._stream:
            self._stream = block.stream
            if self._episodes.is_open(GAP, None):
                events.append(self._episodes.end(GAP, None, None, self._last_gap_s))
        if block.lost:
            events += self._gap(block, start_s)
        elif self._episodes.is_open(GAP, None) and start_s - self._last_gap_s > GAP_HOLD_S:
            events.append(self._episodes.end(GAP, None, None, self._last_gap_s))
        return events

    def _gap(self, block: Block, start_s: float) -> Sequence[Event]:
        """Gaps closer than the hold are one event: a link that stutters all day is not a thousand of them."""
        self._last_gap_s = start_s
        lost_s = block.lost / block.rate_hz
        if self._episodes.is_open(GAP, None):
            self._episodes.worsen(GAP, None, lost_s)
            return ()
        utc = None if block.utc is None else block.utc - lost_s
        return (
            self._episodes.begin(
                GAP, None, None, start_s - lost_s, started_utc=utc, extreme=lost_s, detail=block.lost_reason
            ),
        )

    def silent(self, age_s: float, last_s: float, last_utc: float | None) -> Sequence[Event]:
        """Nothing has come for `age_s`; the last sample was `last_s` seconds into the stream, at `last_utc`."""
        if age_s < LOST_AFTER_S or self.lost:
            return ()
        self._lost_at_s, self._silent_since = last_s, time.monotonic() - age_s
        return (self._episodes.begin(LOST, None, None, last_s, started_utc=last_utc, limit=LOST_AFTER_S),)

    def started(self) -> Sequence[Event]:
        """The daemon has started: over as soon as it is told."""
        return self._at_once("daemon-started")

    def stopped(self) -> Sequence[Event]:
        """The daemon stops: what is open is left as it stands."""
        return (*self._episodes.leave(), *self._at_once("daemon-stopped"))

    def _at_once(self, kind: str) -> Sequence[Event]:
        self._episodes.begin(kind, None, None, 0.0, started_utc=time.time())
        return (self._episodes.end(kind, None, None, 0.0),)
