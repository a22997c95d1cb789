"""A day of noise alone: the loop must never claim a carrier for longer than 0.1 s, nor may one be present.

    python -m tests.bench.noise_day [CHANNEL-HOURS]

Thirteen channels of 300 Hz share one stream, which is as good as thirteen times the hours on one.
"""

import sys
import time

import numpy as np

from monitord.blocks import Block, Event, Moment, Reading
from monitord.chain import Chain
from monitord.notice import RULES
from monitord.publish.tally import Tally
from monitord.settings import Channel
from monitord.stream import Stream

RATE_HZ = 8_000.0
BLOCK = 16_000
CHANNELS = tuple(
    Channel(name=f"noise-{k}", carrier_hz=-3000 + 500 * k, bandwidth_hz=300, emission_bandwidth_hz=300)
    for k in range(13)
)


class Watch:
    """Longest stretch of claimed lock, in hops, and how often a carrier was called present."""

    def __init__(self) -> None:
        self.run = np.zeros(len(CHANNELS), np.int64)
        self.longest = self.present = self.returns = 0

    def moment(self, moment: Moment) -> None:
        self.run = np.where(moment.locked, self.run + 1, 0)
        self.longest = max(self.longest, int(self.run.max()))
        self.present += int(np.sum(moment.present == 1))

    def reading(self, reading: Reading) -> None:
        pass

    def event(self, event: Event) -> None:
        self.returns += event.ended_s is not None


def main(hours: float) -> None:
    """Run the noise through the chain and print what was claimed."""
    rng, watch, begin = np.random.default_rng(1), Watch(), time.process_time()
    chain = Chain(CHANNELS, Stream(RATE_HZ, 0.0, False, True), [make() for make in RULES], [watch], Tally())
    blocks = round(hours * 3600 * RATE_HZ / BLOCK / len(CHANNELS))
    for index in range(blocks):
        samples = 0.1 * rng.standard_normal(2 * BLOCK, dtype=np.float32).view(np.complex64)
        chain.process(Block(samples, RATE_HZ, 0.0, index * BLOCK, None))
    print(
        f"channel-hours of noise                      {blocks * BLOCK / RATE_HZ * len(CHANNELS) / 3600:8.1f}"
    )
    print(f"longest stretch of claimed lock             {watch.longest / 10:8.1f} s")
    print(f"hops with a carrier called present          {watch.present:8d}")
    print(f"carrier returns told                        {watch.returns:8d}")
    print(f"time                                        {time.process_time() - begin:8.0f} s of one core")


if __name__ == "__main__":
    main(float(sys.argv[1]) if len(sys.argv) > 1 else 24.0)
