"""What a stage must be able to do. Every protocol of the project stands here and nowhere else."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol

from monitord.blocks import Baseband, Block, Detected, Event, Moment, Precise, Reading
from monitord.quantities import Quantity
from monitord.settings import Channel, Source


@dataclass(slots=True)
class SourceCounts:
    """What a source counts besides the samples it hands over. One writer (the source), any number of readers."""

    rejected: dict[str, int] = field(default_factory=dict)
    reconnects: int = 0


@dataclass(frozen=True, slots=True)
class Accuracy:
    """How well the receiver is known: half-widths that hold the truth in 95 %, 0 where nothing is stated.

    level_db: of its levels; frequency_hz: of its frequencies at each channel's carrier, Hz, in the order of the rows.
    """

    level_db: float = 0.0
    frequency_hz: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class Bank:
    """Channels that are computed together, one row each: what a detector or meter is prepared for.

    channels: in the order of the rows; they share bandwidth, acquisition range, detector and averaging.
    rate_hz, frames: of the baseband, per second and per hop.
    noise_hz: one-sided noise bandwidth of the baseband.
    fixed_gain: the receiver's gain is fixed, so levels mean something.
    learned_levels: learned reference levels, channel name -> dBFS; outlives resets of the stages.
    labels: quantity -> values of its second label over all banks, in which order its columns stand.
    accuracy: of the receiver, as the settings state it.
    """

    channels: tuple[Channel, ...]
    rate_hz: float
    frames: int
    noise_hz: float
    fixed_gain: bool
    learned_levels: dict[str, float]
    labels: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    accuracy: Accuracy = Accuracy()

    @property
    def hop_s(self) -> float:
        """Seconds per hop."""
        return self.frames / self.rate_hz


class SampleSource(Protocol):
    """Where blocks come from. `open`, then `read` until `ended`, then `close`; all from one thread."""

    settings: Source
    counts: SourceCounts

    @property
    def ended(self) -> bool:
        """Nothing more will come (a recording is over)."""
        ...

    def open(self) -> None:
        """Make ready. Raises SourceLost or RecordingError, each with one clear line."""
        ...

    def read(self, timeout_s: float, wanted: int = 1) -> Block | None:
        """Hand over the next block, or None if none came in time or the source has ended.

        wanted: samples with which the reader can do something; fewer are handed over when the time is up, or
        where the source has blocks of its own size.
        Raises RecordingError where a recording turns out damaged; what was read before stays good.
        """
        ...

    def close(self) -> None:
        """Let go of everything; may be called twice."""
        ...


class Conditioner(Protocol):
    """Blocks of any length in, hops of fixed length out: one Baseband for each bank."""

    def process(self, block: Block) -> Iterator[tuple[Baseband, ...]]:
        """Take one block, yield the hops that it completes."""
        ...

    def reset(self) -> None:
        """Forget all state: as new."""
        ...


class Detector(Protocol):
    """Baseband of one bank in, Detected out."""

    delay_s: float

    def prepare(self, bank: Bank) -> None:
        """Make ready for the hops of this bank."""
        ...

    def process(self, baseband: Baseband) -> Detected:
        """Detect one hop."""
        ...

    def reset(self) -> None:
        """Forget all state: as new."""
        ...


class Meter(Protocol):
    """Detected hops in; per hop its share of the Moment, per interval its quantities."""

    quantities: tuple[Quantity, ...]

    def prepare(self, bank: Bank) -> None:
        """Make ready for the hops of this bank."""
        ...

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """Take one hop; return the fields of Moment that this meter knows (perhaps none).

        Among them may be "faults": bits of Fault (channels,), as numbers; those of all meters are joined.
        """
        ...

    def reading(self) -> Mapping[str, Precise]:
        """Values of all its quantities over the hops since the last call; begins the next interval."""
        ...

    def reset(self) -> None:
        """Forget all state: as new."""
        ...


class Rule(Protocol):
    """Moments and readings in, events out. A rule outlives gaps of the source: an event stays open across them."""

    def prepare(self, channels: Sequence[Channel]) -> None:
        """Make ready for these channels, in this order."""
        ...

    def moment(self, moment: Moment) -> Sequence[Event]:
        """Take one hop; return what has just begun or ended."""
        ...

    def reading(self, reading: Reading) -> Sequence[Event]:
        """Take one reading; return what has just begun or ended."""
        ...

    def finish(self) -> Sequence[Event]:
        """The stream is over: return what is still open, as it stands."""
        ...

    def reset(self) -> None:
        """Forget all state: as new."""
        ...


class Outlet(Protocol):
    """A way out. Called from the chain's thread; must return at once."""

    def moment(self, moment: Moment) -> None:
        """Take one hop."""
        ...

    def reading(self, reading: Reading) -> None:
        """Take one reading."""
        ...

    def event(self, event: Event) -> None:
        """Take an event, when it opens and again when it closes."""
        ...
