"""K weighting (ITU-R BS.1770, annex 1): a high shelf for the head and a high pass, as the standard's two biquads.

The standard gives them at 48 kHz. Here they act by fast convolution at any rate, by the response that they have at
48 kHz, so that no other bilinear warping enters; the response is led to zero between the audio band and half the rate.
"""

import numpy as np
import scipy.fft

from monitord.blocks import Complex, Precise, Real

STANDARD_RATE_HZ = 48_000.0
SHELF = (
    (1.53512485958697, -2.69169618940638, 1.19839281085285),
    (1.0, -1.69065929318241, 0.73248077421585),
)
HIGH_PASS = ((1.0, -2.0, 1.0), (1.0, -1.99004745483398, 0.99007225036621))
"""Coefficients b, a of both stages at 48 kHz (BS.1770, tables 1 and 2)."""


def response(hz: Precise) -> Complex:
    """Complex gain of both stages at these frequencies, below 24 kHz."""
    z = np.exp(-2j * np.pi * hz / STANDARD_RATE_HZ)
    gain = np.ones(np.shape(hz), np.complex128)
    for b, a in (SHELF, HIGH_PASS):
        gain *= (b[0] + b[1] * z + b[2] * z**2) / (a[0] + a[1] * z + a[2] * z**2)
    return gain.astype(np.complex64)


class KFilter:
    """Filters hops that follow each other: overlap-save with the hop before, 0.1 s, after which nothing rings."""

    def __init__(self, channels: int, frames: int, rate_hz: float, band_hz: float) -> None:
        """`band_hz`: up to there the response is the standard's."""
        self._frames = frames
        self._wave: Real = np.zeros((channels, 2 * frames), np.float32)
        hz = scipy.fft.rfftfreq(2 * frames, 1 / rate_hz)
        inside = np.clip((rate_hz / 2 - hz) / (rate_hz / 2 - band_hz), 0, 1)
        taper = 0.5 - 0.5 * np.cos(np.pi * inside)
        gain = response(np.minimum(hz, STANDARD_RATE_HZ / 2 - 1))
        self._gain: Complex = (taper * gain).astype(np.complex64)

    def filter(self, wave: Real) -> Real:
        """One hop, float32 (channels, frames)."""
        self._wave[:, : self._frames] = self._wave[:, self._frames :]
        self._wave[:, self._frames :] = wave
        spectrum = scipy.fft.rfft(self._wave, axis=1)
        spectrum *= self._gain
        return np.asarray(scipy.fft.irfft(spectrum, axis=1)[:, self._frames :])
