"""Depth of steady tones from the spectrum of a second.

A tone is the highest line near its nominal frequency and three lines to each side: that holds all but 0.006 % of the
power of a Hann-windowed sinusoid, wherever between two lines it lies. What 90 Hz leaves at 150 Hz is below 2e-6 of it.
Reception noise in these lines is subtracted by power.
"""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Precise, Second
from monitord.settings import Tone

_ASIDE = 3  # lines to each side of the highest
_TOLERANCE = 0.025  # of the frequency: ILS Cat I (CHECKS D13), the widest of the steady tones
_LEAST_TOLERANCE_HZ = 2.0
_HANN_POWER = 1.5  # sum of the squares of a line of height 1: 1 + 2 (1/2)^2 (Harris 1978)
_NOISE = 3.0  # mean power of a line, for noise of the one-sided density 1 per Hz, in lines of 1 Hz: 2 x 1.5


class ToneLines:
    """Squares of the depths of tones, second by second, one for each of `rows` and `tones`."""

    def __init__(self, rows: Sequence[int], tones: Sequence[Tone], reach_hz: Sequence[float]) -> None:
        """With reach_hz: how far from its nominal frequency each tone is looked for (`reach_of`)."""
        self._rows = np.array(rows, np.intp)
        self._hz = np.array([tone.hz for tone in tones])
        self._band_hz = np.array([tone.band_hz or np.nan for tone in tones])
        self._reach_hz = np.array(reach_hz)

    def depth_squares(self, second: Second) -> Precise:
        """Squares of the depths, reception noise subtracted, so perhaps below 0 (tones,); NaN where not usable."""
        plain = np.isnan(self._band_hz)
        highest = self._highest(second, self._reach_hz)
        width = np.where(plain, _ASIDE, np.nan_to_num(self._band_hz) / 2 / second.bin_hz)
        middle = np.where(plain, highest, self._hz / second.bin_hz)
        first, last = np.ceil(middle - width).astype(np.intp), np.floor(middle + width).astype(np.intp)
        power, inside = self._powers(second, first, last)
        density = second.audio_noise_density / np.square(second.amplitude)
        noise = _NOISE * second.bin_hz * density[self._rows] * inside.sum(axis=1)
        square = (np.where(inside, power, 0).sum(axis=1) - noise) / _HANN_POWER
        return np.where(second.usable[self._rows], square, np.nan)

    def _highest(self, second: Second, reach_hz: Precise) -> NDArray[np.intp]:
        """Which line is the highest within reach of the nominal frequency (tones,)."""
        first = np.ceil((self._hz - reach_hz) / second.bin_hz).astype(np.intp)
        last = np.floor((self._hz + reach_hz) / second.bin_hz).astype(np.intp)
        power, inside = self._powers(second, first, last)
        return np.asarray(first + np.where(inside, power, -1).argmax(axis=1))

    def _powers(
        self, second: Second, first: NDArray[np.intp], last: NDArray[np.intp]
    ) -> tuple[Precise, NDArray[np.bool_]]:
        """Powers of the lines first..last of each tone, and which of the columns are among them (tones, widest)."""
        line = first[:, None] + np.arange(int((last - first).max()) + 1)
        inside = line <= last[:, None]
        spectrum = second.audio
        found = spectrum[self._rows[:, None], np.minimum(line, spectrum.shape[1] - 1)]
        found = np.where(second.usable[self._rows, None], found, 0).astype(np.complex128)
        return np.square(found.real) + np.square(found.imag), inside


def reach_of(tone: Tone, others: Sequence[Tone]) -> float:
    """How far from its nominal frequency a tone is looked for, in Hz: never so far that another's lines count."""
    apart = min((abs(other.hz - tone.hz) for other in others if other is not tone), default=np.inf)
    return min(max(_TOLERANCE * tone.hz, _LEAST_TOLERANCE_HZ), apart / 2 - _ASIDE)
