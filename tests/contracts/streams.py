"""Short streams with everything in them, and the parts of the chain alone, for the contract tests."""

from collections.abc import Iterator, Sequence

import numpy as np

from monitord.blocks import Baseband, Block
from monitord.condition.tuner import Tuner
from monitord.settings import Channel
from monitord.stage import Bank
from tests import signals

RATE_HZ = 6_000.0
CHANNELS = tuple(
    Channel(
        name=f"c{k}",
        carrier_hz=carrier_hz,
        bandwidth_hz=500,
        emission_bandwidth_hz=500,
        acquire_hz=60,
        loss_after_s=0.3,
    )
    for k, carrier_hz in enumerate((-2000.3, -700.0, 700.7, 2100.0))
)


def stream(seconds: float = 2.4) -> np.ndarray:
    """Four transmitters: a tone, over-modulation, one that breaks, one that is not there; and noise. complex64."""
    parts = [
        signals.am(
            RATE_HZ,
            seconds,
            carrier_hz=channel.carrier_hz + 3.1 * row,
            modulation=lambda t, depth=depth: signals.tone(depth, 130.0, t),
            phase=row,
            seed=row,
            c_n0_dbhz=75.0,
            breaks=[(0.9, 1.9)] if row == 2 else [],
        )
        for row, (channel, depth) in enumerate(zip(CHANNELS[:3], (0.5, 1.15, 0.8), strict=True))
    ]
    return np.asarray(sum(parts), np.complex64)


def blocks(samples: np.ndarray, size: int, gap: tuple[int, int] | None = None) -> Iterator[Block]:
    """The samples in read-only blocks of `size`; those of `gap` (first, end) are lost."""
    first, end = gap or (len(samples), len(samples))
    for low, high, lost in ((0, first, 0), (end, len(samples), end - first)):
        for start in range(low, high, size):
            piece = samples[start : min(start + size, high)].copy()
            piece.flags.writeable = False
            gone = lost if start == low else 0
            yield Block(piece, RATE_HZ, 0.0, start, 1e9 + start / RATE_HZ, gone, "overrun" if gone else "")


def hops(samples: np.ndarray, channels: Sequence[Channel] = CHANNELS, size: int = 4096) -> list[Baseband]:
    """The baseband of one bank, read-only."""
    tuner = Tuner(RATE_HZ, 0.0, False, [list(channels)])
    found = [hop[0] for block in blocks(samples, size) for hop in tuner.process(block)]
    for hop in found:
        hop.samples.flags.writeable = False
    return found


def bank(channels: Sequence[Channel] = CHANNELS) -> Bank:
    branch = Tuner(RATE_HZ, 0.0, False, [list(channels)]).branches[0]
    return Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {})
