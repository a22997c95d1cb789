"""Loudness of the audio as dual mono, 100 % modulation as 0 dBFS (ITU-R BS.1770; windows as in EBU Tech 3341).

L = -0.691 + 10 log10 (sum of the channels' mean squares), and the same audio on two channels adds 3.01 LU. Momentary
is the mean over 400 ms, short-term over 3 s, both slid in steps of 4 ms, so that no alignment loses anything.
Integrated is the mean of 400 ms blocks, one every 0.1 s, above -70 LUFS and above 10 LU below the mean of those. The
K-weighted power of the reception noise is subtracted, which else reads about -40 LUFS at C/N0 80 dB-Hz in +-5 kHz.
"""

import math
from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise
from monitord.condition.grid import STEPS
from monitord.measure.kweighting import KFilter, response
from monitord.quantities import Quantity
from monitord.stage import Bank

OFFSET_DB = -0.691
_DUAL = 2.0
MOMENTARY_HOPS, SHORT_TERM_HOPS = 4, 30
ABSOLUTE_GATE = -70.0
RELATIVE_GATE = -10.0
HOUR_S = 3600.0
_BINS = np.arange(ABSOLUTE_GATE, 20.0, 0.02)  # LUFS: a block's loudness is kept to 0.01 LU


def lufs(power: Precise) -> Precise:
    """Loudness of a mean square (of one of the two channels), LUFS; -inf for 0."""
    with np.errstate(divide="ignore"):
        return np.asarray(OFFSET_DB + 10 * np.log10(_DUAL * np.maximum(power, 0)))


class LoudnessMeter:
    """Momentary and short-term: the largest in the interval; integrated: over the clock hour so far."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_loudness_momentary_lufs",
            "LUFS",
            "Largest momentary loudness (400 ms) of the interval.",
            "ITU-R BS.1770",
            trusted_only=True,
        ),
        Quantity(
            "audio_loudness_short_term_lufs",
            "LUFS",
            "Largest short-term loudness (3 s) of the interval.",
            "EBU Tech 3341",
            trusted_only=True,
        ),
        Quantity(
            "audio_loudness_integrated_lufs",
            "LUFS",
            "Gated loudness of the clock hour so far.",
            "ITU-R BS.1770",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._rows = np.arange(len(bank.channels))
        band_hz = bank.channels[0].bandwidth_hz
        hz = np.linspace(0, band_hz, 2001)
        gain = np.mean(np.square(np.abs(response(hz))), dtype=np.float64)
        self._noise_hz = float(gain) * bank.noise_hz  # of one-sided noise, K-weighted
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        bank, count = self._bank, len(self._rows)
        self._filter = KFilter(count, bank.frames, bank.rate_hz, bank.channels[0].bandwidth_hz)
        self._steps = np.full((count, (SHORT_TERM_HOPS + 1) * STEPS), np.nan)  # mean squares, the newest last
        self._hour = -1
        self._counts = np.zeros((count, len(_BINS) + 1), np.uint32)
        self._begin()

    def _begin(self) -> None:
        self._momentary = np.full(len(self._rows), -np.inf)
        self._short_term = np.full(len(self._rows), -np.inf)
        self._heard = np.zeros(len(self._rows), bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = detected.settled & ~detected.broken
        self._heard |= usable
        wave = np.where(usable[:, None], detected.in_phase - 1, np.float32(0))
        weighted = self._filter.filter(wave)
        noise = detected.audio_noise_density / np.square(detected.amplitude) * self._noise_hz
        parts = weighted.reshape(len(usable), STEPS, -1)
        square = np.einsum("csk,csk->cs", parts, parts) / parts.shape[2] - noise[:, None]
        self._steps[:, :-STEPS] = self._steps[:, STEPS:]
        self._steps[:, -STEPS:] = np.where(usable[:, None], square, np.nan)
        self._momentary = np.fmax(self._momentary, self._slid(MOMENTARY_HOPS))
        self._short_term = np.fmax(self._short_term, self._slid(SHORT_TERM_HOPS))
        self._count(detected)
        return {}

    def _slid(self, hops: int) -> Precise:
        """Largest mean over `hops` that ends within the last hop; NaN where a step is missing (channels,)."""
        length = hops * STEPS
        steps = self._steps[:, -length - STEPS + 1 :]
        total = np.cumsum(steps, axis=1)
        first = total[:, length - 1 : length]
        sums = np.concatenate([first, total[:, length:] - total[:, :-length]], axis=1)
        return np.asarray(np.fmax.reduce(sums, axis=1) / length)

    def _count(self, detected: Detected) -> None:
        """Keep the block that ends with this hop, by its loudness."""
        span = detected.span
        hour = math.floor((span.elapsed_s if span.utc is None else span.utc) / HOUR_S)
        if hour != self._hour:
            self._hour = hour
            self._counts[:] = 0
        block = self._steps[:, -MOMENTARY_HOPS * STEPS :].mean(axis=1)
        heard = np.isfinite(block)
        loudness = lufs(np.where(heard, block, 0))
        self._counts[self._rows, np.where(heard, np.searchsorted(_BINS, loudness), 0)] += heard

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        momentary, short_term = lufs(np.stack([self._momentary, self._short_term]))
        integrated = np.where(self._heard, self._integrated(), np.nan)
        self._begin()
        return {
            "audio_loudness_momentary_lufs": _told(momentary),
            "audio_loudness_short_term_lufs": _told(short_term),
            "audio_loudness_integrated_lufs": integrated,
        }

    def _integrated(self) -> Precise:
        """Mean power of the blocks above both gates; NaN where there is none (channels,)."""
        counts = self._counts[:, 1:]  # the first holds what the absolute gate leaves out
        center = _BINS + (_BINS[1] - _BINS[0]) / 2
        power = 10 ** ((center - OFFSET_DB) / 10) / _DUAL
        total = np.cumsum(counts[:, ::-1], axis=1)[:, ::-1]
        whole = np.cumsum((counts * power)[:, ::-1], axis=1)[:, ::-1]
        gated = lufs(whole[:, 0] / np.maximum(total[:, 0], 1)) + RELATIVE_GATE
        place = np.clip(np.searchsorted(_BINS, np.maximum(gated, ABSOLUTE_GATE)), 0, len(_BINS) - 1)
        number = total[self._rows, place]
        return _told(lufs(whole[self._rows, place] / np.maximum(number, 1)))


def _told(loudness: Precise) -> Precise:
    """Nothing below the absolute gate is told."""
    return np.asarray(np.where(loudness > ABSOLUTE_GATE, loudness, np.nan))
