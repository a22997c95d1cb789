"""The carrier's amplitude: a tapered mean of the in-phase part over the last `carrier_average_s`.

A plain mean of 1 s errs by 0.04 dB under a 50 Hz tone; a Hann taper is exact to rounding. Each hop
contributes one weighted sum to each of the windows it is part of, so no sample is kept.
"""

import numpy as np

from monitord.blocks import Flags, Precise, Real


class TaperedMean:
    """Running Hann-weighted mean over whole hops; hops can be left out of it."""

    def __init__(self, channels: int, frames: int, hops: int) -> None:
        taper = np.hanning(frames * hops + 2)[1:-1].reshape(hops, frames)
        self._weights = np.ascontiguousarray(
            taper[::-1].T.astype(np.float32)
        )  # column j: window ending j hops later
        self._share = taper[::-1].sum(axis=1)
        self._whole = self._share.sum()
        self._sums = np.zeros((hops, channels))
        self._taken = np.zeros((hops, channels))

    def take(self, in_phase: Real, use: Flags) -> None:
        """Add one hop, float32 (channels, frames), of the rows in `use` (channels,)."""
        sums = np.where(use[:, None], in_phase @ self._weights, 0.0)
        for window in (self._sums, self._taken):
            window[:-1] = window[1:]
            window[-1] = 0
        self._sums += sums.T
        self._taken += use * self._share[:, None]

    def forget(self, rows: Flags) -> None:
        """Begin anew for these rows."""
        self._sums[:, rows] = 0
        self._taken[:, rows] = 0

    @property
    def mean(self) -> Precise:
        """The mean of what is in the window (channels,); NaN where that is nothing."""
        taken = self._taken[0]
        mean: Precise = np.divide(self._sums[0], taken, out=np.full(taken.shape, np.nan), where=taken > 0)
        return mean

    @property
    def filled(self) -> Precise:
        """Share of the window's weight that has been taken, 0..1 (channels,)."""
        return np.asarray(self._taken[0] / self._whole)
