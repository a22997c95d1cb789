"""The carrier's amplitude: a tapered mean of the in-phase part over the last `carrier_average_s`.

A plain mean of 1 s errs by 0.04 dB under a 50 Hz tone; a Hann taper is exact to rounding. The samples are first
brought down to a few hundred a second by triangular weights, whose response has double zeros at the multiples of
that rate, so that no tone of the programme comes down as something slow. While less than the whole window has been
heard, the taper is a shorter Hann over what there is.
"""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Flags, Precise, Real

BRIEF_HOPS = 5
"""Half a second: follows fading four times as closely, and still holds a 10 Hz tone of 100 % below 0.3 %."""


class TaperedMean:
    """Running Hann-weighted mean over whole hops; single hops can be left out of it.

    `mean`: the mean of what is in the window (channels,); NaN where that is nothing.
    `brief`: the same over the last BRIEF_HOPS hops alone.
    `heard`: hops since the row began, at most the window's length (channels,).
    """

    def __init__(self, channels: int, frames: int, hops: int, steps: int) -> None:
        length = frames // steps
        rising = (np.arange(length) + 0.5) / length
        self._ramps = (np.stack([1 - rising, rising], axis=1) / length).astype(np.float32)
        self._hops, self._steps = hops, steps
        self._tapers = np.zeros((hops + 1, hops * steps))
        for heard in range(1, hops + 1):
            self._tapers[heard, -heard * steps :] = np.hanning(heard * steps + 2)[1:-1]
        self._brief = self._tapers[min(BRIEF_HOPS, hops), -min(BRIEF_HOPS, hops) * steps :]
        self._nodes = np.zeros((channels, hops * steps))
        self._used = np.zeros((channels, hops), bool)
        self._carry = np.full(channels, np.nan)  # what the last hop adds to the next one's first node
        self.heard = np.zeros(channels, np.int64)
        self.mean = np.full(channels, np.nan)
        self.brief = np.full(channels, np.nan)

    def take(self, in_phase: Real, use: Flags) -> None:
        """Add one hop, float32 (channels, frames); rows not in `use` (channels,) leave a hole in the window."""
        sums = in_phase.reshape(len(use), self._steps, -1) @ self._ramps
        self._nodes[:, : -self._steps] = self._nodes[:, self._steps :]
        fresh = self._nodes[:, -self._steps :]
        fresh[:] = sums[:, :, 0]
        fresh[:, 1:] += sums[:, :-1, 1]
        fresh[:, 0] += np.where(np.isnan(self._carry), fresh[:, 0], self._carry)
        self._carry = sums[:, -1, 1].astype(np.float64)
        self._used[:, :-1] = self._used[:, 1:]
        self._used[:, -1] = use
        self.heard = np.minimum(self.heard + 1, self._hops)
        self._update()

    def begin(self, rows: Flags, nodes: Precise, steady: NDArray[np.int64]) -> None:
        """Begin anew for the rows of a mask (channels,).

        nodes: what has been heard of them, (rows, a whole number of hops of steps); steady: how many of these
        hops, from the last one back, belong to the carrier as it is now (rows,).
        """
        known = min(nodes.shape[1] // self._steps, self._hops)
        self._nodes[rows, -known * self._steps :] = nodes[:, -known * self._steps :]
        self.heard[rows] = np.minimum(steady, known)
        self._used[rows] = np.arange(self._hops) >= self._hops - self.heard[rows][:, None]
        self._carry[rows] = np.nan
        self._update()

    def _update(self) -> None:
        used: Precise | float = 1.0 if self._used.all() else np.repeat(self._used, self._steps, axis=1)
        last = len(self._brief)
        brief = self._brief * (used if isinstance(used, float) else used[:, -last:])
        self.mean = _weighted(self._tapers[self.heard] * used, self._nodes)
        self.brief = _weighted(np.broadcast_to(brief, (len(self.mean), last)), self._nodes[:, -last:])


def _weighted(weights: Precise, values: Precise) -> Precise:
    """Weighted mean of each row; NaN where there is no weight."""
    whole = weights.sum(axis=1)
    return np.asarray(np.einsum("ct,ct->c", weights, values) / np.where(whole > 0, whole, np.nan))
