"""What was received and not yet read: a queue bounded in seconds that is dropped whole when it is full."""

import threading
from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass, replace

from monitord.acquire.samples import SampleFormat
from monitord.errors import SourceLost

QUEUE_S = 2.0
BLOCK_S = 0.1


@dataclass(frozen=True, slots=True)
class Entry:
    """One message that was accepted.

    data, frames, form: its samples, not yet decoded.
    center_hz: what 0 Hz of them stands for.
    start, stream: index of the first one since the stream began, and the number of the stream.
    utc: of the first one, seconds since 1970.
    gap: why samples are missing just before it ("" where none are).
    orphans: frames of earlier streams that were dropped just before it.
    """

    data: bytes
    frames: int
    form: SampleFormat
    center_hz: float
    start: int
    stream: int
    utc: float
    gap: str = ""
    orphans: int = 0

    def follows(self, other: "Entry") -> bool:
        """The samples go on from `other` without a break, so that both may be one block."""
        return not self.gap and (self.stream, self.form) == (other.stream, other.form)


class MessageQueue:
    """Between the thread that receives and the one that reads.

    Holds at most 2 s of samples (or one message, however long). When it is full all of it is dropped and the entry
    that did not fit bears the gap ("overrun"): dropping piece by piece would be a new gap each time.
    """

    def __init__(self, rate_hz: float) -> None:
        self._capacity = QUEUE_S * rate_hz
        self._most = BLOCK_S * rate_hz
        self._changed = threading.Condition()
        self._entries: deque[Entry] = deque()
        self._frames = 0
        self._wanted = 1
        self._failure = ""

    def put(self, entries: Iterable[Entry]) -> None:
        """Add what has just come."""
        with self._changed:
            for entry in entries:
                full = self._entries and self._frames + entry.frames > self._capacity
                self._entries.append(self._overrun(entry) if full else entry)
                self._frames += entry.frames
            if self._frames >= self._wanted:  # waking the reader for less would cost more than the message
                self._changed.notify_all()

    def _overrun(self, entry: Entry) -> Entry:
        ended = sum(old.frames for old in self._entries if old.stream != entry.stream)
        orphans = entry.orphans + ended + sum(old.orphans for old in self._entries)
        self._entries.clear()
        self._frames = 0
        return replace(entry, gap="overrun", orphans=orphans)

    def fail(self, line: str) -> None:
        """Nothing more will come: `take` raises SourceLost with this line once the queue is empty."""
        with self._changed:
            self._failure = line
            self._changed.notify_all()

    def clear(self) -> None:
        """Forget everything, a failure too."""
        with self._changed:
            self._entries.clear()
            self._frames, self._failure = 0, ""

    def take(self, timeout_s: float, wanted: int = 1) -> list[Entry]:
        """Wait for `wanted` samples; return those that follow each other without a break, about 0.1 s at most.

        Returns what there is when the time is up,  perhaps nothing. Raises SourceLost after `fail`.
        """
        with self._changed:
            self._wanted = min(wanted, int(self._most))
            self._changed.wait_for(lambda: self._frames >= self._wanted or self._failure, max(timeout_s, 0.0))
            if not self._entries:
                if self._failure:
                    raise SourceLost(self._failure)
                return []
            return self._run()

    def _run(self) -> list[Entry]:
        first = self._entries.popleft()
        run, frames = [first], first.frames
        while (
            self._entries
            and frames + self._entries[0].frames <= self._most
            and self._entries[0].follows(first)
        ):
            frames += self._entries[0].frames
            run.append(self._entries.popleft())
        self._frames -= frames
        return run

    def put_back(self, entries: list[Entry]) -> None:
        """Return the later part of what was taken, to be taken again next."""
        with self._changed:
            self._entries.extendleft(reversed(entries))
            self._frames += sum(entry.frames for entry in entries)
