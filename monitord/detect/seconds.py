"""Ten hops put together again, for the meters that need the resolution of a second."""

import numpy as np

from monitord.blocks import Complex, Detected, Precise, Real, Second, hann
from monitord.stage import Bank

HOPS = 10


class Seconds:
    """Gathers the hops of one bank; gives a Second with every tenth since the stream began."""

    def __init__(self, bank: Bank) -> None:
        count, frames = len(bank.channels), bank.frames
        self._frames = frames
        self._rate_hz = bank.rate_hz
        self._in_phase: Real = np.zeros((count, HOPS * frames), np.float32)
        self._coherent: Complex = np.zeros((count, HOPS * frames), np.complex64)
        self._noise = np.zeros((HOPS, count))
        self._usable = np.zeros((HOPS, count), bool)

    def take(self, detected: Detected) -> Second | None:
        """Add a hop; hops that are missing (before the first one after a gap) leave the second unusable."""
        place = detected.span.index % HOPS
        if place == 0 or detected.span.fresh:
            self._usable[:] = False
        part = slice(place * self._frames, (place + 1) * self._frames)
        scale = detected.amplitude.astype(np.float32)[:, None]
        np.multiply(detected.in_phase, scale, out=self._in_phase[:, part])
        np.multiply(detected.coherent, scale, out=self._coherent[:, part])
        self._noise[place] = detected.noise_density
        self._usable[place] = detected.settled & ~detected.broken
        return self._whole(detected.noise_gain) if place == HOPS - 1 else None

    def _whole(self, noise_gain: float) -> Second:
        usable = np.asarray(self._usable.all(axis=0))
        amplitude = _hann_mean(self._coherent.real)
        scale = (1 / np.where(usable, amplitude, np.nan)).astype(np.float32)[:, None]
        self._in_phase *= scale
        self._coherent *= scale
        noise = self._noise.mean(axis=0)
        return Second(self._in_phase, self._coherent, self._rate_hz, amplitude, noise, usable, noise_gain)


def _hann_mean(wave: Real) -> Precise:
    return np.asarray(wave @ hann(wave.shape[1]) / 2, np.float64)
