"""Where a message belongs: in the sequence of samples, and in time."""

from dataclasses import dataclass

from monitord.acquire.framing import MessageError

NEW_STREAM_S = 3600.0
REPEAT_S = 1.0
"""What goes back by less than this, on the same connection, is a repetition and no restart of the sender."""


@dataclass(frozen=True, slots=True)
class Place:
    """Index of a message's first sample since its stream began, frames lost before it, number of the stream."""

    start: int
    lost: int
    stream: int


class SequenceTracker:
    """Turns the sender's numbers into ours, which begin at 0 with every stream."""

    def __init__(self, rate_hz: float) -> None:
        self._hour = NEW_STREAM_S * rate_hz
        self._repeat = REPEAT_S * rate_hz
        self._stream = -1
        self._origin = 0  # the sender's number of the stream's first sample
        self._previous = 0  # where the last message began,
        self._next = 0  # and where the next one should

    def place(self, start: int | None, frames: int, connected_anew: bool) -> Place:
        """Find the place of a message of `frames` samples.

        start: the sender's number of its first sample; None (bare): it follows on the one before.
        connected_anew: it is the first one since a connection was made; without numbers that begins a stream.
        Raises MessageError where it overlaps samples already taken.
        """
        if self._begins_stream(start, connected_anew):
            self._stream += 1
            self._origin = self._next = start or 0
        first = self._next if start is None else start
        if first < self._next:
            raise MessageError("overlap", f"sample {first} comes again, {self._next} should come next")
        place = Place(first - self._origin, first - self._next, self._stream)
        self._previous, self._next = first, first + frames
        return place

    def _begins_stream(self, start: int | None, connected_anew: bool) -> bool:
        if self._stream < 0 or start is None:
            return self._stream < 0 or connected_anew
        if start >= self._next:
            return start - self._next > self._hour
        return start < self._hour and (connected_anew or self._restarted(start))

    def _restarted(self, start: int) -> bool:
        """Tell a sender that counts from 0 again from one that repeats itself or is out of order."""
        return self._next - start > self._repeat or start == 0 < self._previous


class ArrivalClock:
    """UTC of samples whose sender gives no time, from when their messages arrive.

    The first arrival sets the clock and the samples drive it, so that jitter of the network does not show; it is
    pulled towards the arrivals with a time constant of 100 s, so that the sender's sample clock may drift.
    """

    PULL_S = 100.0
    STEP_S = 2.0

    def __init__(self, rate_hz: float) -> None:
        self._rate_hz = rate_hz
        self._utc: float | None = None  # of the sample that should come next

    def stamp(self, frames: int, arrival: float, jump: bool) -> float:
        """UTC of the first sample of a message of `frames` that arrived, whole, at UTC `arrival`.

        jump: it does not follow on the one before; the clock is then set anew, as it is when the two disagree
        by more than `STEP_S` (the system's clock was set, or data stood still somewhere).
        """
        duration = frames / self._rate_hz
        heard = arrival - duration
        if jump or self._utc is None or abs(heard - self._utc) > self.STEP_S:
            utc = heard
        else:
            utc = self._utc + (heard - self._utc) * min(duration / self.PULL_S, 1.0)
        self._utc = utc + duration
        return utc
