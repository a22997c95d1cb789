"""Noise lifts peaks: the largest of many noisy samples stands above the truth by a multiple of sigma.

How far depends on how the true tops lie. Where all are *equal* (a steady tone), the largest of N samples stands z
sigma too high, and the samples near it tell z: with Gaussian noise, those within 3 sigma of the largest are
Q(z - 3) / Q(z - 1) times as many as those within 1 sigma, whatever N is. Where the tops are *unequal* (programme)
few compete, and the largest is mostly the true one: the lift is about one sigma, less where few come near. Steady
tones are told by their slots, the highest of each 0.1 s: these scatter by half a sigma, those of programme by far
more; and by their crest, the peak over the rms: sqrt(2) for one tone, 2 for two, 3 and more for programme.
"""

import math
from dataclasses import dataclass

import numpy as np

from monitord.blocks import Flags, Precise

NEAR_SIGMA = (1.0, 3.0)
"""Below a peak: within these multiples of sigma samples are counted."""

LEAST_NEAR = (0.2, 0.4)  # independent samples that a peak itself stands for, within 1 and 3 sigma
_EQUAL_BELOW, _UNEQUAL_ABOVE = (
    0.8,
    1.1,
)  # scatter of slot peaks in sigma; of the largest of 2 to 1000 normals 0.83 to 0.35
_EQUAL_CREST, _UNEQUAL_CREST = 2.2, 2.8
_FEWEST_SLOTS = 10
_USUAL_LIFT = 3.5  # of a tone in 10 s; enough to judge the crest by


def _tail(z: float) -> float:
    return math.erfc(z / math.sqrt(2)) / 2


_Z = np.linspace(0.3, 6, 58)
_RATIO = np.array([math.log(_tail(z - 3) / _tail(z - 1)) for z in _Z])


def lift(near: Precise, equal: Precise) -> Precise:
    """By how many sigma noise has lifted a peak.

    near: independent samples within `NEAR_SIGMA` of it, (2, ...). equal: 1 where the true tops are equal, 0 where they
    are not (...). The curve for unequal tops is a fit to noise-like programme, speech and music of known peaks at C/N0
    60 to 90 dB-Hz; the other follows from the Gaussian.
    """
    ratio = _ratio(near)
    unequal = 0.1 + 0.33 * ratio + 0.02 * np.square(ratio)
    return np.asarray(unequal + equal * (np.interp(ratio, _RATIO, _Z) - unequal))


def spread(near: Precise, equal: Precise) -> Precise:
    """Standard deviation, in sigma, of a peak that `lift` has corrected; arguments as there."""
    unequal = np.maximum(1.03 - 0.06 * _ratio(near), 0.45)
    return np.asarray(unequal + equal * (0.36 - unequal))


def _ratio(near: Precise) -> Precise:
    return np.asarray(np.log(np.maximum(near[1], 1) / np.maximum(near[0], 1)))


@dataclass(frozen=True, slots=True)
class Top:
    """The largest of the peaks of many slots. peak: as measured (...); near, equal: as `lift` takes them."""

    peak: Precise
    near: Precise
    equal: Precise


def largest(peaks: Precise, near: Precise, sigma: Precise, rms: Precise) -> Top:
    """The largest peak, with the samples of all slots that stand near it.

    peaks: (slots, ...), NaN where there is none; near: samples near each slot's own peak (slots, 2, ...); sigma: of the
    noise (...); rms: of the modulation without it (...).
    """
    peak = np.fmax.reduce(peaks, axis=0)
    crest = (peak - _USUAL_LIFT * sigma) / np.maximum(rms, 1e-6)
    equal = _equality(peaks, sigma) * _falling(crest, _EQUAL_CREST, _UNEQUAL_CREST)
    below = (peak - peaks) / sigma
    counts = np.log(near)
    lone = math.log(LEAST_NEAR[1])
    one, three = NEAR_SIGMA

    def within(reach: float) -> Precise:
        """Samples within `reach` of the largest: each slot's counts, geometrically between those it has."""
        depth = np.fmax(reach - below, 0)
        first = lone + np.minimum(depth, one) * (counts[:, 0] - lone)
        more = np.maximum(depth - one, 0) / (three - one) * (counts[:, 1] - counts[:, 0])
        return np.asarray(np.where(depth > 0, np.exp(first + more), 0).sum(axis=0))

    return Top(peak, np.array([within(one), within(three)]), equal)


def _equality(peaks: Precise, sigma: Precise) -> Precise:
    """1 where the slots' peaks scatter no more than noise alone makes them, 0 where they clearly do (...)."""
    known: Flags = np.isfinite(peaks)
    count = np.maximum(known.sum(axis=0), 1)
    mean = np.where(known, peaks, 0).sum(axis=0) / count
    scatter = np.sqrt(np.square(np.where(known, peaks - mean, 0)).sum(axis=0) / count) / sigma
    return np.asarray(np.where(count >= _FEWEST_SLOTS, _falling(scatter, _EQUAL_BELOW, _UNEQUAL_ABOVE), 0))


def _falling(value: Precise, one: float, zero: float) -> Precise:
    """1 below `one`, 0 above `zero`, straight between; 0 for NaN."""
    return np.asarray(np.fmin(np.fmax((zero - value) / (zero - one), 0), 1))
