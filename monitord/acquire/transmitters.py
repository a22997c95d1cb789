"""The transmitters of the built-in station and the noise of its receiver, sample after sample.

Each transmitter multiplies its carrier by an envelope, 1 plus its programme, as the story has it. All of them
are computed together, as arrays (transmitters, frames).
"""

from collections.abc import Callable, Sequence

import numpy as np

from monitord.acquire import scenario
from monitord.acquire.programme import (
    LOOP_FRAMES,
    LOOP_RATE_HZ,
    PASSAGE_FRAMES,
    PASSAGE_S,
    TAPS,
    interpolation_weights,
    make_loop,
)
from monitord.blocks import Complex, Flags, Precise, Real
from monitord.settings import Channel

_PROGRAMME_BAND_HZ = 4_500.0
_STRONGEST_DBFS = -24.0
_STRONGEST_C_N0_DBHZ = 92.0
_WEAKER_DB = 3.0  # the second of three, and twice that the third
_OFFSET_HZ = 4.0
_DRIFT_HZ = 0.3
_DRIFT_DB = 0.2
_KINDS = 3
_FINE_FRAMES = 64  # a carrier is the product of one coarse and one short fine rotation
_CHUNK_VALUES = 1 << 16  # transmitters x frames worked on at once, to stay within the caches
_SEED = 20_418
_GAINS: tuple[Callable[[Precise], Precise], ...] = (scenario.carrier_gain, scenario.programme_gain)


class Air:
    """All transmitters and the noise. `next` is the index of the next sample.

    Two channels on one carrier are one transmitter, as wide as the wider of them. The samples depend on the
    arguments and on the number of frames taken each time, on nothing else.
    """

    def __init__(self, channels: Sequence[Channel], rate_hz: float, center_hz: float) -> None:
        widths: dict[float, float] = {}
        for channel in channels:
            widths[channel.carrier_hz] = max(widths.get(channel.carrier_hz, 0.0), channel.bandwidth_hz)
        count = len(widths)
        strongest_dbfs = _STRONGEST_DBFS - 10 * np.log10(max(1.0, count / _KINDS))  # many must not overload
        self.next = 0
        self._rate_hz = rate_hz
        self._programmes = _Programmes(list(widths.values()), rate_hz)
        self._carriers = _Carriers(np.array(list(widths)) - center_hz, strongest_dbfs, rate_hz)
        self._cuts_off = np.arange(count) % 2 == 1
        self._chunk = max(1, _CHUNK_VALUES // (max(1, count) * _FINE_FRAMES)) * _FINE_FRAMES
        density = 10 ** ((strongest_dbfs - _STRONGEST_C_N0_DBHZ) / 10)
        self._noise = np.float32(np.sqrt(density * rate_hz / 2))
        self._rng = np.random.default_rng(_SEED)

    def receive(self, frames: int) -> Complex:
        """The next `frames` samples, complex64."""
        samples = self._rng.standard_normal(2 * frames, np.float32).view(np.complex64)
        samples *= self._noise
        for first in range(0, frames, self._chunk):
            count = min(self._chunk, frames - first)
            padded = -(-count // _FINE_FRAMES) * _FINE_FRAMES
            envelope = self._envelope(self.next, padded)
            samples[first : first + count] += self._carriers.modulated(envelope, self.next, count)[:count]
            self.next += count
        return samples

    def _envelope(self, start: int, frames: int) -> Real:
        """What each transmitter's carrier is multiplied by, float32 (transmitters, frames), carrier = 1."""
        story_s = self._programmes.story_s(start)
        audio = self._programmes.audio(start, frames)
        carrier, loudness = (self._gain(gain, story_s, frames) for gain in _GAINS)
        envelope = audio * loudness
        envelope += 1
        # One kind of transmitter pinches off where the other turns its phase.
        envelope[self._cuts_off] = np.maximum(envelope[self._cuts_off], 0)
        envelope *= carrier
        return envelope

    def _gain(self, gain: Callable[[Precise], Precise], story_s: Precise, frames: int) -> Real:
        """A gain of the story, float32 (transmitters, 1), or (transmitters, frames) while one is changing."""
        ends_s = story_s[:, None] + np.array((0.0, frames / self._rate_hz))
        values = gain(ends_s)
        if (values[:, 0] != values[:, 1]).any():
            values = gain(story_s[:, None] + np.arange(frames) / self._rate_hz)
        else:
            values = values[:, :1]
        return values.astype(np.float32)


class _Programmes:
    """The programme of every transmitter, led past the story."""

    def __init__(self, widths_hz: Sequence[float], rate_hz: float) -> None:
        keys = [(number % _KINDS, min(width, _PROGRAMME_BAND_HZ)) for number, width in enumerate(widths_hz)]
        loops = {key: make_loop(*key) for key in dict.fromkeys(keys)}
        tables = [loop.table for loop in loops.values()]
        self._table: Real = np.concatenate(tables) if tables else np.zeros(0, np.float32)
        size = LOOP_FRAMES + PASSAGE_FRAMES
        order = {key: number * size for number, key in enumerate(loops)}
        self._base = np.array([order[key] for key in keys], np.intp)[:, None]
        self._passage = np.array([loops[key].passage for key in keys], np.intp)[:, None]
        self._start_s = scenario.story_start_s(len(keys))
        ahead = np.round((self._start_s - scenario.PASSAGE_AT_S) * LOOP_RATE_HZ).astype(np.intp)
        self._ahead = ahead[:, None] + self._passage - 1  # of the first tap
        self._rate_hz = rate_hz

    def story_s(self, start: int) -> Precise:
        """The time of the story (transmitters,) at sample `start`, seconds."""
        return (self._start_s + start / self._rate_hz) % scenario.TURN_S

    def audio(self, start: int, frames: int) -> Real:
        """Programme at the samples from `start` on, float32 (transmitters, frames), 1.0 = 100 %."""
        step = LOOP_RATE_HZ / self._rate_hz
        position = start * step % 1.0 + np.arange(frames) * step
        whole = position.astype(np.intp)
        hot = scenario.in_passage(self.story_s(start), frames / self._rate_hz, PASSAGE_S)
        stretch = self._stretch(int(start * step), int(whole[-1]) + TAPS, hot)
        audio = np.zeros((len(stretch), frames), np.float32)
        for tap, weights in enumerate(interpolation_weights(np.asarray(position - whole, np.float64))):
            audio += stretch.take(whole + tap, axis=1) * weights
        return audio

    def _stretch(self, first: int, length: int, hot: Flags) -> Real:
        """`length` samples of each loop, float32 (transmitters, length); the passage overdriven if `hot`."""
        index = (first + self._ahead + np.arange(length)) % LOOP_FRAMES
        if hot.any():
            into = (index - self._passage) % LOOP_FRAMES
            index = np.where(hot[:, None] & (into < PASSAGE_FRAMES), into + LOOP_FRAMES, index)
        return np.asarray(self._table.take(index + self._base))


class _Carriers:
    """The carriers: each some Hz off its nominal frequency, slowly wandering in frequency and level."""

    def __init__(self, nominal_hz: Precise, strongest_dbfs: float, rate_hz: float) -> None:
        rng = np.random.default_rng(_SEED + 1)
        count = len(nominal_hz)
        self._level_dbfs = strongest_dbfs - _WEAKER_DB * (np.arange(count) % _KINDS)
        self._frequency_hz = nominal_hz + rng.uniform(-_OFFSET_HZ, _OFFSET_HZ, count)
        self._phase = rng.uniform(0, 1, count)  # of the next sample, in turns
        self._periods_s = rng.uniform(60, 180, (2, count))
        self._begin = rng.uniform(0, 1, (2, count))
        self._rate_hz = rate_hz

    def modulated(self, envelope: Real, start: int, advance: int) -> Complex:
        """The sum of all carriers times their envelopes, complex64 (frames,): a multiple of _FINE_FRAMES.

        `start` is the index of the first sample. The phase moves on by `advance` samples, with the frequency
        held till then, so that it goes on without a step.
        """
        count, frames = envelope.shape
        middle_s = (start + advance / 2) / self._rate_hz
        turns = (self._frequency_hz + _DRIFT_HZ * self._wave(0, middle_s)[:, 0]) / self._rate_hz
        coarse_at = np.arange(0, frames, _FINE_FRAMES)
        coarse = self._phase[:, None] + turns[:, None] * coarse_at % 1.0
        change_db = _DRIFT_DB * self._wave(1, (start + coarse_at) / self._rate_hz)
        amplitude = 10 ** ((self._level_dbfs[:, None] + change_db) / 20)
        slow = (amplitude * np.exp(2j * np.pi * coarse)).astype(np.complex64)
        fast = np.exp(2j * np.pi * turns[:, None] * np.arange(_FINE_FRAMES)).astype(np.complex64)
        rows = envelope.reshape(count, len(coarse_at), _FINE_FRAMES) * slow[:, :, None]
        rows *= fast[:, None, :]
        self._phase = (self._phase + turns * advance) % 1.0
        return np.asarray(rows.sum(axis=0).ravel())

    def _wave(self, which: int, at_s: Precise | float) -> Precise:
        """One of the two slow movements, -1 to 1, (transmitters, times)."""
        turns = self._begin[which][:, None] + np.atleast_1d(at_s) / self._periods_s[which][:, None]
        return np.asarray(np.sin(2 * np.pi * turns))
