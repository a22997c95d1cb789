"""Reception noise from the quadrature channel.

With the carrier recovered, programme is in phase only; what is left in quadrature, more than 100 Hz from
the carrier, has the density of the reception noise. The median over the bins is deaf to lines.
"""

import numpy as np
import scipy.fft

from monitord.blocks import Complex, Precise, Real

_CLEAR_OF_CARRIER_HZ = 100.0
_QUARTERS = 4
_LEAST_BINS = 64  # fewer scatter too much for their medians to be compared
_FLOAT32_FLOOR = 1e-16  # density re carrier power below which only single-precision rounding is measured


class QuadratureNoise:
    """Noise density of each row of quadrature, per hop."""

    def __init__(self, rate_hz: float, frames: int, pass_hz: float) -> None:
        self._window = np.hanning(frames).astype(np.float32)
        bin_hz = rate_hz / frames
        lowest = min(_CLEAR_OF_CARRIER_HZ, 0.4 * pass_hz)
        self._bins = slice(int(np.ceil(lowest / bin_hz)) + 2, max(int(pass_hz / bin_hz), 4) + 1)
        # Quadrature alone has half the complex density; the median of an exponential is ln 2 of its mean.
        power = float(np.sum(np.square(self._window, dtype=np.float64)))
        self._scale = 2 / (rate_hz * power * np.log(2))

    def density(self, samples: Complex, sideband: float = 0.0) -> tuple[Precise, Precise]:
        """Power per Hz of the complex baseband, full scale = 1, float64 (channels,): reception noise, and all there is.

        The first comes from medians over the bins; the second, their mean, has impulses and lines in it too.
        samples: turned to the carrier's phase, complex64 (channels, frames), full scale = 1; sideband: the one that is
        detected, +1 or -1. Programme on one side alone stands in quadrature too: then the other side tells, where
        it is the quieter, and nothing else can be told from programme.
        """
        spectrum = self._spectrum(samples.imag)
        if sideband:
            noise = self._reception(spectrum)
            other = self._reception(self._spectrum(samples.real) - 1j * sideband * spectrum) / 2
            return np.minimum(noise, other), np.zeros(len(noise))
        power = np.square(spectrum.real) + np.square(spectrum.imag)
        mean = power.mean(axis=1, dtype=np.float64) * (self._scale * np.log(2))
        return self._reception(spectrum), mean

    def _spectrum(self, wave: Real) -> Complex:
        return np.asarray(scipy.fft.rfft(wave * self._window, axis=1)[:, self._bins])

    def _reception(self, spectrum: Complex) -> Precise:
        power = np.square(spectrum.real) + np.square(spectrum.imag)
        return np.asarray(_reception(power) * self._scale, np.float64)


def _reception(power: Real) -> Real:
    """Mean of the medians of the band's quarters; where these differ by 3 dB, that of the quietest (channels,).

    Reception noise is flat. What is not (phase modulation that follows the programme, another station's
    sidebands) must not be taken for it, or peaks are corrected for noise that is not there.
    """
    rows, bins = power.shape
    each = bins // _QUARTERS
    if each < _LEAST_BINS:
        return np.asarray(np.partition(power, bins // 2, axis=1)[:, bins // 2])
    quarters = power[:, : each * _QUARTERS].reshape(rows, _QUARTERS, each)
    medians = np.partition(quarters, each // 2, axis=2)[:, :, each // 2]
    quietest = medians.min(axis=1)
    return np.asarray(np.where(medians.max(axis=1) > 2 * quietest, quietest, medians.mean(axis=1)))


def with_floor(density: Precise, amplitude: Precise) -> Precise:
    """The density, not below what arithmetic in single precision can tell from zero."""
    return np.maximum(density, _FLOAT32_FLOOR * np.square(amplitude) + 1e-30)
