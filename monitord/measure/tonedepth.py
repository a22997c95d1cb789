"""Depth of the tones that a channel's settings name: navigation tones, subcarriers, keyed idents.

The depth of a tone is its peak over the carrier. Steady tones and subcarriers are read from the spectrum of a second.
A keyed tone is read from the steps well inside its marks, what is left between them from those well inside its spaces.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Precise, Second
from monitord.condition.grid import STEPS
from monitord.measure.keying import Keyed, Keying, MarkFrequency, ToneEnvelope
from monitord.measure.tonelines import ToneLines, reach_of
from monitord.quantities import Quantity
from monitord.settings import Channel, Tone
from monitord.stage import Bank

LEAST_DEPTH = 0.01
"""Below this depth a keyed tone counts as off."""

_LEAST_STEPS = STEPS // 2  # of spaces in a hop, 50 ms: fewer do not tell hum from the mean


def _labels(channel: Channel) -> Iterable[str]:
    return (tone.label for tone in channel.tone)


class ToneDepthMeter:
    """Tone depths, and what follows from them: difference and sum of a pair, residual modulation."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "tone_depth_ratio",
            "",
            "Depth of a tone, its peak over the carrier; of a keyed tone while it is on.",
            "DESIGN 4",
            trusted_only=True,
            label="tone_hertz",
            keys_of=_labels,
        ),
        Quantity(
            "tone_depth_difference_ratio",
            "",
            "Depth of the first less that of the second of a channel's two steady tones.",
            "ICAO Annex 10 Vol. I, difference in depth of modulation",
            trusted_only=True,
        ),
        Quantity(
            "tone_depth_sum_ratio",
            "",
            "Sum of the depths of a channel's two steady tones.",
            "ICAO Annex 10 Vol. I, sum of the depths of modulation",
            trusted_only=True,
        ),
        Quantity(
            "residual_modulation_ratio",
            "",
            "Depth of what modulates the carrier while its keyed tones are off, reception noise subtracted.",
            "ICAO Annex 10 Vol. I, 3.4 (from memory); sqrt(2) times rms: DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._count = len(bank.channels)
        self._keys = bank.labels.get("tone_depth_ratio", ())
        pairs = [(row, tone) for row, channel in enumerate(bank.channels) for tone in channel.tone]
        self._steady = _Steady(bank, [(row, tone) for row, tone in pairs if not tone.keyed])
        self._keyed = _KeyedTones(bank, [(row, tone) for row, tone in pairs if tone.keyed])
        plain = [[tone.label for tone in channel.tone if tone.plain] for channel in bank.channels]
        self._pair_rows = np.array([row for row, labels in enumerate(plain) if len(labels) == 2], np.intp)
        columns = [[self._keys.index(label) for label in plain[row]] for row in self._pair_rows]
        self._pair_columns = np.array(columns, np.intp).reshape(-1, 2)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._steady.begin()
        self._keyed.reset()

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None:
            self._steady.take(detected.second)
        self._keyed.take(detected)
        return {}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        depth = np.full((self._count, len(self._keys)), np.nan)
        residual = np.full(self._count, np.nan)
        for place, value in (self._steady.depths(), self._keyed.depths()):
            depth[place.row, [self._keys.index(label) for label in place.labels]] = value
        rows, value = self._keyed.residuals()
        residual[rows] = value
        first, second = depth[self._pair_rows[:, None], self._pair_columns].T
        difference, total = np.full((2, self._count), np.nan)
        difference[self._pair_rows] = first - second
        total[self._pair_rows] = first + second
        self._steady.begin()
        self._keyed.begin()
        return {
            "tone_depth_ratio": depth,
            "tone_depth_difference_ratio": difference,
            "tone_depth_sum_ratio": total,
            "residual_modulation_ratio": residual,
        }


@dataclass(frozen=True, slots=True)
class _Places:
    """Where tones belong: rows of the bank and labels."""

    row: NDArray[np.intp]
    labels: tuple[str, ...]

    @classmethod
    def of(cls, pairs: list[tuple[int, Tone]]) -> "_Places":
        return cls(np.array([row for row, _ in pairs], np.intp), tuple(tone.label for _, tone in pairs))


class _Steady:
    """Steady tones and subcarriers: the mean power over the interval's seconds."""

    def __init__(self, bank: Bank, pairs: list[tuple[int, Tone]]) -> None:
        self._places = _Places.of(pairs)
        reach_hz = [reach_of(tone, bank.channels[row].tone) for row, tone in pairs]
        self._lines = ToneLines([row for row, _ in pairs], [tone for _, tone in pairs], reach_hz)
        self.begin()

    def begin(self) -> None:
        self._square = np.zeros(len(self._places.row))
        self._seconds = np.zeros(len(self._places.row))

    def take(self, second: Second) -> None:
        if len(self._places.row):
            square = self._lines.depth_squares(second)
            self._square += np.nan_to_num(square)
            self._seconds += np.isfinite(square)

    def depths(self) -> tuple[_Places, Precise]:
        return self._places, np.sqrt(np.maximum(_mean(self._square, self._seconds), 0))


class _KeyedTones:
    """Keyed tones, and what is left on their carriers between the marks."""

    def __init__(self, bank: Bank, pairs: list[tuple[int, Tone]]) -> None:
        self._bank = bank
        self._places = _Places.of(pairs)
        self._envelope = ToneEnvelope(bank, [row for row, _ in pairs], [tone.hz for _, tone in pairs])
        self._keying = Keying(len(pairs), self._envelope.step_s, [LEAST_DEPTH] * len(pairs))
        # With a steady tone beside, or a programme that belongs there, what is left is no fault.
        rows, self._first_tone = np.unique(self._places.row, return_index=True)
        self._alone = np.array([all(t.keyed for t in bank.channels[row].tone) for row in rows], bool)
        self._rows = rows[self._alone]
        self.reset()

    def reset(self) -> None:
        self._envelope.reset()
        self._keying.reset()
        self._waves = np.full((2, len(self._rows), 2 * self._keying.delay_steps + STEPS), np.nan)
        self.begin()

    def begin(self) -> None:
        count = len(self._places.row)
        self._square, self._steps = np.zeros(count), np.zeros(count)
        self._frequency = MarkFrequency(count, self._envelope.step_s)
        self._left, self._left_steps = np.zeros(len(self._rows)), np.zeros(len(self._rows))

    def take(self, detected: Detected) -> None:
        if not len(self._places.row):
            return
        noise = self._envelope.noise_power(detected)
        keyed = self._keying.take(self._envelope.take(detected), noise)
        self._frequency.take(keyed)
        size = np.square(np.abs(np.where(keyed.in_mark, keyed.envelope, 0)))
        steps = keyed.in_mark.sum(axis=1)
        self._square += size.sum(axis=1) - steps * np.nan_to_num(noise)
        self._steps += steps
        if len(self._rows):
            self._take_rest(detected, keyed)

    def _take_rest(self, detected: Detected, keyed: Keyed) -> None:
        """Add the variance of m over the steps of this hop in which all keyed tones of a row are off."""
        margin = 2 * self._keying.delay_steps
        wave = detected.in_phase[self._rows].reshape(len(self._rows), STEPS, -1).astype(np.float64) - 1
        self._waves[:, :, :margin] = self._waves[:, :, STEPS:]
        self._waves[0, :, margin:] = wave.mean(axis=2)
        self._waves[1, :, margin:] = np.square(wave).mean(axis=2)
        # The envelope comes two steps late itself; a space has four to spare.
        begin = self._keying.delay_steps - 2
        off = np.logical_and.reduceat(keyed.in_space, self._first_tone, axis=0)[self._alone]
        mean, square = np.where(off, self._waves[:, :, begin : begin + STEPS], 0).sum(axis=2)
        steps = off.sum(axis=1)
        use = steps >= _LEAST_STEPS
        noise = (detected.audio_noise_density * self._bank.noise_hz / np.square(detected.amplitude))[
            self._rows
        ]
        variance = square - np.square(mean) / np.maximum(steps, 1) - noise * steps
        self._left += np.where(use, variance, 0)
        self._left_steps += np.where(use, steps, 0)

    def depths(self) -> tuple[_Places, Precise]:
        """The level of the marks, less what the frequency's error takes from it."""
        level = np.sqrt(np.maximum(_mean(self._square, self._steps), 0))
        return self._places, np.asarray(level / self._envelope.response(self._frequency.off_hz()))

    def residuals(self) -> tuple[NDArray[np.intp], Precise]:
        return self._rows, np.asarray(np.sqrt(2 * np.maximum(_mean(self._left, self._left_steps), 0)))


def _mean(total: Precise, count: Precise) -> Precise:
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)
