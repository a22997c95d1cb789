"""What the chain must know of its source: from its first block, and from the settings."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from monitord.blocks import Block
from monitord.settings import Channel, Source
from monitord.stage import Accuracy


@dataclass(frozen=True, slots=True)
class Stream:
    """What the chain must know of its source: rate and center in Hz, real IF or IQ, gain fixed or automatic.

    The accuracies and `shared_clock` are those of the settings' [source].
    """

    rate_hz: float
    center_hz: float
    real: bool
    fixed_gain: bool
    level_accuracy_db: float = 0.0
    clock_accuracy_ratio: float = 0.0
    oscillator_accuracy_ratio: float = 0.0
    shared_clock: bool = False

    @classmethod
    def of(cls, block: Block, source: Source) -> "Stream":
        """What a source's first block and its settings say."""
        return cls(
            block.rate_hz,
            block.center_hz,
            not np.iscomplexobj(block.samples),
            source.gain == "fixed",
            source.level_accuracy_db,
            source.clock_accuracy_ratio,
            source.oscillator_accuracy_ratio,
            source.shared_clock,
        )

    def accuracy(self, channels: Sequence[Channel]) -> Accuracy:
        """Accuracy of levels, and of frequencies at these channels' carriers."""
        return Accuracy(
            self.level_accuracy_db, tuple(self._frequency_accuracy_hz(c.carrier_hz) for c in channels)
        )

    def _frequency_accuracy_hz(self, carrier_hz: float) -> float:
        """The sample clock acts on the distance from the centre, the oscillator on the centre; one clock on all."""
        if self.shared_clock:
            return self.clock_accuracy_ratio * abs(carrier_hz)
        distance_hz = abs(carrier_hz - self.center_hz)
        return math.hypot(
            self.clock_accuracy_ratio * distance_hz, self.oscillator_accuracy_ratio * self.center_hz
        )
