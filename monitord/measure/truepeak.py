"""True peaks: the largest and the smallest value between samples too.

Each hop is cut into short segments; around the extreme sample of the most extreme segments the wave is
interpolated at sixteenths of a sample by a Kaiser-windowed sinc, and the top refined by a parabola. The
baseband is sampled at more than four times its bandwidth, so a peak is never far from a large sample, and
images lie so far out that 17 taps reject them by 100 dB.
"""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Precise, Real
from monitord.condition.grid import STEPS

_REACH = 8  # taps on each side
_FINE = 8  # interpolated points per sample
_CANDIDATES = 8

_TAP = np.arange(-_REACH - 1, _REACH + 2)
_SHIFT = np.arange(-_FINE - 1, _FINE + 2) / _FINE


def _interpolator() -> Real:
    """Kernel (taps, points) of the points from one sample before to one after the middle."""
    away = _SHIFT[None, :] - _TAP[:, None]
    inside = np.clip(1 - np.square(away / (_REACH + 0.5)), 0, 1)
    taper = np.where(inside > 0, np.i0(10.0 * np.sqrt(inside)) / np.i0(10.0), 0)
    kernel = np.sinc(away) * taper
    return np.asarray(kernel / kernel.sum(axis=0), np.float32)


class TruePeaks:
    """Largest and smallest value of each row, hop by hop, across hops without a seam.

    A hop's peaks are those of the wave up to `_REACH` + 1 samples before its end; the rest comes with the next.
    """

    _kernel = _interpolator()

    def __init__(self, channels: int, frames: int) -> None:
        self._margin = len(_TAP) // 2
        self._wave: Real = np.full((channels, frames + 2 * self._margin), np.nan, np.float32)
        self._frames = frames
        self._row = np.arange(channels)[:, None]
        self._row_of_both = np.concatenate([self._row, self._row])

    @property
    def fresh(self) -> Real:
        """Where to put the next hop, float32 (channels, frames), before `find`."""
        return self._wave[:, 2 * self._margin :]

    @property
    def seam(self) -> Real:
        """What is left of the hop before, float32 (channels, samples): to be brought to the units of the next."""
        return self._wave[:, : 2 * self._margin]

    def advance(self) -> None:
        """Make room for the next hop."""
        edge = 2 * self._margin
        self._wave[:, :edge] = self._wave[:, -edge:]

    def find(self) -> tuple[Precise, Precise, Precise]:
        """Largest and smallest value of the hop, float64 (channels,) each, and where they are, (2, channels).

        Values are NaN where the wave has NaN. A place is a part of the hop: 0 its beginning, 1 its end.
        """
        rows, margin = len(self._row), self._margin
        parts = self._wave[:, margin : margin + self._frames].reshape(rows, STEPS, -1)
        extreme = np.concatenate([parts.max(axis=2), -parts.min(axis=2)])  # then both polarities go one way
        chosen = extreme.argpartition(-_CANDIDATES, axis=1)[:, -_CANDIDATES:]
        pieces = parts[self._row_of_both, chosen]
        pieces[rows:] *= -1
        place = chosen * parts.shape[2] + pieces.argmax(axis=2) + margin
        around = self._wave[self._row_of_both[:, :, None], place[:, :, None] + _TAP]
        around[rows:] *= -1
        peak, candidate = _refined(around @ self._kernel)
        where = place[self._row_of_both[:, 0], candidate].reshape(2, rows)
        return peak[:rows], -peak[rows:], (where - self._margin) / self._frames


def _refined(fine: Real) -> tuple[Precise, NDArray[np.int64]]:
    """Top of the highest of the interpolated stretches (rows, candidates, points), by a parabola, and which it is."""
    rows, candidates, points = fine.shape
    flat = fine.reshape(rows, candidates * points)
    inner = fine[:, :, 1:-1].reshape(rows, candidates * (points - 2))
    best = inner.argmax(axis=1)
    place = best + 1 + best // (points - 2) * 2
    row = np.arange(rows)
    low, mid, high = (flat[row, place + step].astype(np.float64) for step in (-1, 0, 1))
    bend = 2 * mid - low - high
    lift = np.square(high - low) / (8 * np.where(bend > 0, bend, np.inf))
    return np.asarray(mid + np.minimum(lift, np.maximum(bend, 0))), best // (points - 2)
