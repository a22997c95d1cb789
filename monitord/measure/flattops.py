"""Flat tops: how much of the time the modulation is held at one extreme, as clipped audio is.

The samples near the top of each polarity go into a histogram over log |m|, whose bins are the same part of any
level. The repeated extreme is where the time is densest in the upper 30 %: what lies at or just below a level counts
whole, what lies just above it half, so that a sine's extreme is its peak and that of a rippling plateau its middle.
"""

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Flags, Precise
from monitord.measure.validity import peaks_mean_something
from monitord.quantities import Quantity
from monitord.stage import Bank

HELD = 0.005  # DESIGN 4: within 0.5 % of the extreme
LEAST_DEPTH, MOST_DEPTH = 0.1, 2.0
_UPPER = 0.7  # clipped programme that is held to 5 kHz afterwards overshoots its plateaus by up to a third
_MOST_NOISE = 0.03  # sigma re the extreme; beyond it nothing flat can be told
_BIN = 0.0005  # of the level
_BINS = int(np.ceil(np.log(MOST_DEPTH / (_UPPER * LEAST_DEPTH)) / _BIN))
_COARSE = 10  # bins in which excursions are counted together
_REPEATED = 3  # excursions that reach an extreme; one across two hops is counted as two
_SPAN = int(np.ceil(-np.log(_UPPER * (1 - 2 * _MOST_NOISE)) / _BIN))


def _part_in_band(width: float) -> float:
    """Part of a plateau in noise that the band about the extreme found holds, +-`width` sigma wide.

    The density that is sought rises with an extreme x above the plateau (in sigma) as long as
    phi(x) / 2 + phi(x + width) / 2 is above phi(x - width): that is where the extreme is found.
    """
    x = np.linspace(0, width, 1000)
    below, at, above = (np.exp(-np.square(x + shift) / 2) for shift in (-width, 0, width))
    found = float(x[np.argmax(at / 2 + above / 2 < below)])
    return (math.erf((found + width) / math.sqrt(2)) - math.erf((found - width) / math.sqrt(2))) / 2


_WIDTHS = np.arange(1.0, 12.0, 0.125)
_PARTS = np.array([_part_in_band(float(width)) for width in _WIDTHS])


class FlatTopMeter:
    """Share of the interval's time within 0.5 % of the repeated extreme of either polarity, both together.

    Repeated means reached by three excursions of the interval. A pure sine is not excluded: it reads
    2 acos(0.995) / pi = 0.064, the time it spends there. Programme that is not clipped reads some tenths of a per cent
    at most. What a filter after the clipper makes ripple is counted as far as it stays within 0.5 %: the true share of
    what is received, which is between a tenth (noise-like programme) and four fifths (music) of the time that the
    clipper was at work.

    Where sigma of the noise is more than 0.5 % of the extreme, the band is as wide as sigma, and in any case the
    share is divided by the part of a normal distribution that the band holds: a plateau keeps its share, rounded and
    rippling tops gain (a sine of 90 % at a C/N0 of 80 dB-Hz in 5 kHz reads 0.11). Without noise the histogram's bins
    may make a sine read up to 5 % of its share too low. Absent below a depth of 10 %, and where sigma is above 3 % of
    the extreme.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_flat_top_ratio",
            "",
            "Share of time that the modulation is held within 0.5 % of a repeated extreme.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._polarity = np.arange(2 * len(bank.channels))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        rows = 2 * len(self._bank.channels)  # positive tops of all channels, then negative ones
        self._samples = np.zeros(rows * _BINS, np.int32)
        self._excursions = np.zeros((rows, _BINS // _COARSE + 1), np.int32)  # by the highest level of each
        self._begin()

    def _begin(self) -> None:
        count = len(self._bank.channels)
        self._samples[:] = 0
        self._excursions[:] = 0
        self._top = np.full(2 * count, LEAST_DEPTH)
        self._noise = np.zeros(count)
        self._hops = np.zeros(count)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = detected.settled & ~detected.broken & peaks_mean_something(detected, self._bank)
        noise = detected.audio_noise_density * self._bank.noise_hz / np.square(detected.amplitude)
        self._noise += np.where(usable, noise, 0)
        self._hops += usable
        if usable.any():
            self._add(detected, usable)
        return {}

    def _add(self, detected: Detected, usable: Flags) -> None:
        """Add this hop's samples near the tops to the histogram."""
        count = len(usable)
        wave = detected.in_phase - np.float32(1)
        tops = np.concatenate([wave.max(axis=1), -wave.min(axis=1)])
        self._top = np.fmax(self._top, np.where(np.tile(usable, 2), tops, LEAST_DEPTH))
        # Rows that are not usable may hold NaN, which is never above anything, or numbers, which must not count.
        least = np.where(np.tile(usable, 2), _UPPER * self._top, np.inf).astype(np.float32)[:, None]
        for first, near in ((0, wave > least[:count]), (count, wave < -least[count:])):
            place = np.flatnonzero(near)
            level = np.abs(wave.reshape(-1)[place])
            bins = (np.log(level / np.float32(_UPPER * LEAST_DEPTH)) / np.float32(_BIN)).astype(np.int64)
            self._count(np.clip(bins, 0, _BINS - 1), place // wave.shape[1] + first, place)

    def _count(self, bins: NDArray[np.int64], row: NDArray[np.int64], place: NDArray[np.int64]) -> None:
        """Count samples, and the excursions they form: those in one row without a sample between them."""
        if not len(bins):
            return
        np.add.at(self._samples, row * _BINS + bins, 1)
        begins = np.ones(len(bins), bool)
        begins[1:] = (np.diff(place) > 1) | (np.diff(row) > 0)
        begin = np.flatnonzero(begins)
        np.add.at(self._excursions, (row[begin], np.maximum.reduceat(bins, begin) // _COARSE), 1)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        heard = self._hops > 0
        hops = np.where(heard, self._hops, 1)
        sigma = np.tile(np.sqrt(self._noise / hops), 2)
        held = self._held(sigma) / np.tile(hops * self._bank.frames, 2)
        judged = (self._top > LEAST_DEPTH) & (sigma < _MOST_NOISE * self._top)
        known = heard & judged.reshape(2, -1).any(axis=0)
        share = np.where(judged, held, 0).reshape(2, -1).sum(axis=0)
        self._begin()
        return {"audio_flat_top_ratio": np.where(known, np.minimum(share, 1), np.nan)}

    def _held(self, sigma: Precise) -> Precise:
        """Samples held at the repeated extreme, corrected for noise, for each channel and polarity."""
        band = np.maximum(HELD, np.minimum(sigma / self._top, _MOST_NOISE))
        top = np.floor(np.log(self._top / (_UPPER * LEAST_DEPTH)) / _BIN).astype(np.int64) + 2
        above = self._above(top)
        level = np.arange(_SPAN + 1)  # bins from the lowest edge looked at up to the top
        upper, lower = (self._between(above, level - sign * band[:, None] / _BIN) for sign in (-1, 1))
        density = lower - (above + upper) / 2
        best = density.argmax(axis=1)
        inside = (lower - upper)[self._polarity, best]
        reached = self._reached(top - _SPAN + best - np.ceil(band / _BIN).astype(np.int64))
        inside = np.where(reached < _REPEATED, 0, inside)
        width = band * self._top / np.where(sigma > 0, sigma, 1)
        return np.asarray(inside / np.where(sigma > 0, np.interp(width, _WIDTHS, _PARTS), 1))

    def _reached(self, bins: NDArray[np.int64]) -> NDArray[np.int64]:
        """How many excursions reached this bin, for each channel and polarity."""
        coarse = np.clip(bins // _COARSE, 0, self._excursions.shape[1] - 1)
        above = self._excursions[:, ::-1].cumsum(axis=1)[:, ::-1]
        return np.asarray(above[self._polarity, coarse], np.int64)

    def _above(self, top: NDArray[np.int64]) -> Precise:
        """Samples above each edge of the bins from `_SPAN` below the top up to it (rows, _SPAN + 1)."""
        bins = np.clip(top[:, None] + np.arange(-_SPAN, 0), 0, _BINS - 1)
        samples = self._samples.reshape(-1, _BINS)[self._polarity[:, None], bins].astype(np.float64)
        samples[:, 1:][np.diff(bins, axis=1) == 0] = 0  # beyond the histogram's ends bins repeat
        above = np.zeros((len(top), _SPAN + 1))
        above[:, :-1] = samples[:, ::-1].cumsum(axis=1)[:, ::-1]
        return above

    def _between(self, above: Precise, edge: Precise) -> Precise:
        """`above` at edges that lie between those of the bins."""
        edge = np.clip(edge, 0, _SPAN)
        whole = np.minimum(edge.astype(np.int64), _SPAN - 1)
        part = edge - whole
        row = self._polarity[:, None]
        return np.asarray((1 - part) * above[row, whole] + part * above[row, whole + 1])
