"""Noise lifts peaks: the largest of N noisy samples stands above the truth by a known multiple of sigma.

What counts as N are the independent samples near the top. For one lone peak N is 1 and nothing is taken off; a tone
of 1 kHz has ten thousand tops in 10 s, and the largest of them stands 3.9 sigma too high.
"""

import numpy as np

from monitord.blocks import Precise

# E[max] of N independent normal variables, in sigma (Tippett 1925; CHECKS E13; N = 1, 2, 5, 10 in closed form).
_COUNT = np.log([1, 2, 5, 10, 30, 100, 1000, 1e4, 1e5, 1e6])
_LIFT = np.array([0, 0.5642, 1.1630, 1.5388, 2.0428, 2.5076, 3.2414, 3.8516, 4.3843, 4.8629])

NEAR_TOP_SIGMA = 3.0
_NEAR_WINDOW_SIGMA = 2.0


def lift(count: Precise) -> Precise:
    """Expected largest of `count` (>= 1) independent normal variables, in sigma."""
    return np.asarray(np.interp(np.log(count), _COUNT, _LIFT))


def corrected_largest(peaks: Precise, counts: Precise, sigma: Precise) -> Precise:
    """The largest of the peaks of many slots, less what noise alone lifts it.

    peaks, counts: (slots, ...), measured peak of each slot and how many independent samples stood near it; NaN
    peaks are left out. sigma: of the noise (...). Only slots whose peak could have been the largest count.
    """
    largest = np.fmax.reduce(peaks, axis=0)
    near = peaks > largest - _NEAR_WINDOW_SIGMA * sigma
    count = np.maximum(np.where(near, counts, 0).sum(axis=0), 1)
    return np.asarray(largest - lift(count) * sigma)
