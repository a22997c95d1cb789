"""Drives the chain with samples and keeps what comes out, for the tests."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from monitord.blocks import Block, Event, Moment, Reading
from monitord.chain import Chain
from monitord.notice import RULES
from monitord.publish.tally import Tally
from monitord.settings import Channel
from monitord.stream import Stream


@dataclass
class Kept:
    """An outlet that keeps everything, events also by id as they stood last."""

    moments: list[Moment] = field(default_factory=list)
    readings: list[Reading] = field(default_factory=list)
    told: list[tuple[float, Event]] = field(default_factory=list)  # (stream time when told, event)
    tally: Tally = field(default_factory=Tally)

    def moment(self, moment: Moment) -> None:
        self.moments.append(moment)

    def reading(self, reading: Reading) -> None:
        self.readings.append(reading)

    def event(self, event: Event) -> None:
        self.told.append((self.moments[-1].span.elapsed_s if self.moments else 0.0, event))

    @property
    def events(self) -> list[Event]:
        """Each event once, as it was told last."""
        return list({event.id: event for _, event in self.told}.values())

    def kinds(self) -> list[str]:
        return [event.kind for event in self.events]

    def last(self, quantity: str, row: int = 0) -> float:
        return float(self.readings[-1].values[quantity][row])

    def of(self, quantity: str, row: int = 0) -> np.ndarray:
        return np.array([reading.values[quantity][row] for reading in self.readings])


def channel(**keys: object) -> Channel:
    """A channel named "air" on 12 kHz unless told otherwise."""
    return Channel(**({"name": "air", "carrier_hz": 12_000.0} | keys))


def run(
    samples: np.ndarray,
    rate_hz: float,
    channels: Sequence[Channel] | None = None,
    *,
    center_hz: float = 0.0,
    fixed_gain: bool = True,
    block: int = 4801,
    interval_s: float = 1.0,
) -> Kept:
    """Run samples through a new chain."""
    kept = Kept()
    stream = Stream(rate_hz, center_hz, not np.iscomplexobj(samples), fixed_gain)
    chain = Chain(channels or [channel()], stream, [make() for make in RULES], [kept], kept.tally, interval_s)
    samples = samples.astype(np.complex64 if np.iscomplexobj(samples) else np.float32)
    samples.flags.writeable = False
    for start in range(0, len(samples), block):
        chain.process(Block(samples[start : start + block], rate_hz, center_hz, start, None))
    chain.finish()
    return kept
