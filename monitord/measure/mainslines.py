"""The mains frequency and its multiples in a spectrum of one second.

Lines 1 to 8 hang together: one frequency within 0.5 % of the nominal one places them all. It is found by trying: at
each frequency of a fine grid every line is fitted with the known shape of a Hann line. What a line's own five bins
hold beyond that shape tells that it stands somewhere else: then it is no multiple of this frequency and does not
count (a beat, another tone). Noise alone places no lines: one of them must stand clear of it.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Complex, Flags, Precise
from monitord.measure.hannline import line_shape
from monitord.settings import Channel

Rows = NDArray[np.int64]

NOMINAL_HZ = (50, 60)
ORDERS = np.arange(1, 9)
TRACKED_WITHIN = 0.005
_STEP_HZ = 0.02  # the 8th line is then at most 0.08 bins off, which costs 0.5 % of its power
_REACH = np.arange(-2, 3)  # bins that hold a Hann line
_MISPLACED = 0.03  # of a line's power beside its shape: it stands 0.2 bins away
_MISPLACED_NOISE = 14.0  # noise bins: what four bins of noise do not reach in a thousand seconds
_CLEAR_NOISE = 12.0  # over the mean of noise alone: exp(-12) at each of some 60 independent places
_LINE_NOISE = (
    1.3  # mean power of noise alone in a line so fitted, in bins: their correlations are 2/3 and 1/6
)
_CLEAR_OF_TONE = 10.0  # bins on each side of a test tone and its harmonics: its skirts are 70 dB down there
_NOISE_BELOW_HZ = 510.0  # the noise near the lines; they fill a tenth of these bins


@dataclass(frozen=True, slots=True)
class Hum:
    """Lines of the mains in some rows, each array (rows,).

    power: their mean square, carrier = 1, noise subtracted; means nothing by itself where no line is clear.
    known: there are bins where lines could have been seen: no test tone sits on all of them.
    clear: at least one line stands clear of the noise.
    """

    power: Precise
    known: Flags
    clear: Flags


class MainsLines:
    """Finds lines 1 to 8 of the mains in the audio spectra of the channels of one bank."""

    def __init__(self, channels: Sequence[Channel], bin_hz: float) -> None:
        """`bin_hz`: spacing of the bins of `Second.audio`."""
        tried = [
            np.linspace(-1, 1, 2 * int(np.ceil(TRACKED_WITHIN * nominal / _STEP_HZ)) + 1) * TRACKED_WITHIN
            for nominal in NOMINAL_HZ
        ]
        self._hz = np.concatenate(
            [nominal * (1 + part) for nominal, part in zip(NOMINAL_HZ, tried, strict=True)]
        )
        nominal_of = np.repeat(NOMINAL_HZ, [len(part) for part in tried])
        self._tried = np.array(
            [(nominal_of == channel.mains_hz) | (channel.mains_hz == "found") for channel in channels]
        )
        place = self._hz[:, None] * ORDERS / bin_hz
        self._bin_hz = bin_hz
        self._inside = place * bin_hz <= channels[0].bandwidth_hz
        centers = np.rint(np.where(self._inside, place, 0)).astype(np.int64)
        self._bins = np.maximum(centers[:, :, None] + _REACH, 0)
        shape = line_shape(place[:, :, None] - self._bins) * np.where(self._bins % 2, -1, 1)
        self._shape = np.where(self._inside[:, :, None], shape, 0)
        self._strength = np.square(self._shape).sum(axis=2)
        self._near = slice(
            int(np.ceil(20 / bin_hz)),
            int(min(_NOISE_BELOW_HZ, channels[0].bandwidth_hz) / bin_hz) + 1,
        )

    def find(self, audio: Complex, rows: Rows, tone_hz: Precise) -> Hum:
        """The hum in some rows of a second.

        audio: bins of `Second.audio` of these rows from 0 Hz on (rows, bins). rows: which rows of the bank they are.
        tone_hz: frequency of a test tone, NaN where there is none (rows,).
        """
        near = np.square(np.abs(audio[:, self._near]))
        noise = np.median(near, axis=1)[:, None, None] / np.log(2)
        bins = audio[:, self._bins]
        whole = np.square(np.abs(bins)).sum(axis=3)
        # Amplitude of each line by least squares, and what the bins hold beyond it.
        scale = np.where(self._inside, self._strength, 1)
        line = np.square(np.abs(np.einsum("rflb,flb->rfl", bins, self._shape) / scale))
        beyond = whole - line * self._strength
        free = self._inside & self._tried[rows][:, :, None] & self._clear_of(tone_hz)
        placed = free & (beyond < _MISPLACED * line * self._strength + _MISPLACED_NOISE * noise)
        best = (np.where(placed, line, 0).sum(axis=2)).argmax(axis=1)
        at = np.arange(len(rows)), best
        line, placed, free = line[at], placed[at], free[at]
        noise = _LINE_NOISE * noise[:, :, 0]
        clear = (placed & (line > _CLEAR_NOISE * noise)).any(axis=1)
        power = np.where(placed, line - noise, 0).sum(axis=1) / 2
        return Hum(np.maximum(power, 0), free.any(axis=1), clear)

    def _clear_of(self, tone_hz: Precise) -> Flags:
        """Which lines, (rows, frequencies, lines), no test tone or harmonic of it sits on or near to."""
        tone = np.where(np.isfinite(tone_hz), tone_hz, np.inf)[:, None, None]
        place = self._hz[:, None] * ORDERS
        harmonic = np.maximum(np.rint(place / tone), 1)
        return np.asarray(np.abs(place - harmonic * tone) > _CLEAR_OF_TONE * self._bin_hz)
