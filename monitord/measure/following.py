"""What in quadrature follows the programme, and what is left: incidental phase, and reception noise.

With z = (1 + m) exp(j phi) the quadrature part is q = (1 + m) phi for small phi. In bands of 100 Hz the cross-spectrum
of q and m gives the response H of the phase to the programme. What does not follow (reception noise, phase noise,
other lines) only leaves |sum of cross products|^2 a little too large, by its own power over the number of independent
bins, which is taken off (Bendat and Piersol, Random Data, on the bias of coherent output power).

The carrier loop turns the *mean* carrier to phase 0, and with incidental phase that mean is itself turned, by
psi = <m phi> (<x> for means). So q = (1 + m)(phi - psi), and with K, the mean of H over the programme, and P = <m^2>:

    q = h * m + K m^2 - psi m,    psi = K P,    K = <q m> / (P + <m^3> - P^2):

without it a tone of 90 % would read 40 % low, and speech, whose squares are coherent with it, wrong by a tenth. The
loop follows psi as the programme comes and goes, within about a hop; so P is the mean of the squared hop powers over
the mean of the hop powers. Of m times phi only the part in phase with the programme (K) is taken off.

Seen from 20 Hz on (2.5 loop bandwidths where that is more): below, the loop takes phase for carrier. Delays up to some
milliseconds are seen. Phase that follows the *square* of the programme is seen in part only: it has a term m^3 in q,
which the response to m takes for its own. Bands with less than a thousandth of the programme are left out, since
harmonics of a tone would show there the product m phi.

The noise left is the median over the bands, which is deaf to lines; where the quarters of the channel differ by more
than noise can, that of the quietest.
"""

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from monitord.blocks import BIN_POWER, Complex, Flags, Precise, Real, Second, hann
from monitord.detect.noise import with_floor
from monitord.stage import Bank

Number = TypeVar("Number", bound=np.generic)

_HOPS = 10
_LEAST_HZ = 20.0
_CLEAR_OF_LOOP = 2.5  # at 2.5 loop bandwidths the loop takes out less than 0.1 % of the phase
_BAND_HZ = 100.0  # a delay of 1 ms turns the phase by 36 degrees over a band, and loses 3 % of its power
_BINS_PER_FREEDOM = 35 / 18  # of a Hann window: mean of w^4 over the square of the mean of w^2 (Harris 1978)
_LEAST_SHARE = 0.5  # of programme in what a band holds
_LEAST_OF_WHOLE = 1e-3  # of the whole programme in a band
_LINE_BINS = 2  # on each side of a line
_LEAST_DIVISOR = 0.2  # the programme takes nearly all of the carrier: nothing can be told
_MOST_OUTSIDE = 2.0  # what little is seen in the middle of a second does not stand for all at its edges
_LINE_POWER = 3.0  # sum over the bins of a line of amplitude a, 1.5 a^2, over its mean square
_LEAST_BANDS = 8  # in a quarter of the channel: the median then has a standard deviation of 6 %
_UNEVEN = 1.5


@dataclass(frozen=True, slots=True)
class Split:
    """A second of one bank, taken apart. All arrays (channels,), in units of the carrier; NaN where nothing is known.

    phase: mean square of the phase that follows the programme, rad^2; NaN also where there is no programme.
    programme: mean square of m, reception noise subtracted.
    density: what does not follow, power per Hz of the complex baseband (also of one part of it, f >= 0 only).
    rest: mean square of all that is in quadrature and does not follow, lines too.
    """

    phase: Precise
    programme: Precise
    density: Precise
    rest: Precise


class Following:
    """Takes the seconds of one bank apart; keeps nothing from one to the next."""

    def __init__(self, bank: Bank) -> None:
        first = bank.channels[0]
        bin_hz = bank.rate_hz / bank.frames / _HOPS
        lowest_hz = max(_LEAST_HZ, _CLEAR_OF_LOOP * first.loop_bandwidth_hz)
        low, high = (round(edge_hz / bin_hz) for edge_hz in (lowest_hz, first.bandwidth_hz))
        low, high = max(low - _LINE_BINS, _LINE_BINS + 1), high + _LINE_BINS + 1
        bands = max(1, round((high - low) * bin_hz / _BAND_HZ))
        edges = np.linspace(low, high, bands + 1).round().astype(np.int64)
        self._bins = slice(low, high)
        self._starts = edges[:-1] - low
        self._count = np.diff(edges)
        self._noise_per_density = BIN_POWER / 2 * bin_hz
        self._noise_hz = bank.noise_hz
        self._hop_weight = np.square(hann(_HOPS * bank.frames)).reshape(_HOPS, -1).sum(axis=1)
        self._hop_weight /= self._hop_weight.sum()
        self._channels = len(bank.channels)

    def split(self, second: Second) -> Split:
        """Take a second apart."""
        density = second.noise_density / np.square(second.amplitude)
        audio, quadrature = second.modulation[:, self._bins], second.quadrature[:, self._bins]
        heard = np.maximum(self._banded(_power(audio)), np.float32(1e-30))
        programme = heard - np.outer(density, self._count * self._noise_per_density)
        follows = programme > _LEAST_SHARE * heard
        follows &= programme > _LEAST_OF_WHOLE * np.where(follows, programme, 0).sum(axis=1, keepdims=True)
        programme = np.where(follows, programme, 0.0)
        squared = np.square(second.coherent.real - 1)
        power = squared.reshape(self._channels, _HOPS, -1).mean(axis=2, dtype=np.float64)
        seen, evenly = self._weighed(power - density[:, None] * self._noise_hz)
        quadrature, known = self._without_products(audio, quadrature, squared, programme, seen)
        coherent = np.square(np.abs(self._banded(quadrature * audio.conj()))) / heard
        rest = np.maximum(self._banded(_power(quadrature)) - coherent, 0) / (self._count - _BINS_PER_FREEDOM)
        # The cross products hold by chance some of what does not follow; the programme is less than what is heard.
        phase = (coherent - rest * _BINS_PER_FREEDOM) * heard / np.where(follows, programme, 1.0)
        phase = np.where(follows, phase, 0).sum(axis=1) / _LINE_POWER * evenly
        left = with_floor(_typical(rest) / self._noise_per_density, np.ones(self._channels))
        aside = (rest * self._count).sum(axis=1) / _LINE_POWER
        programme_power = power.mean(axis=1) - left * self._noise_hz
        return Split(np.where(known, phase, np.nan), programme_power, left, aside)

    def _without_products(
        self, audio: Complex, quadrature: Complex, squared: Real, programme: Precise, seen: Precise
    ) -> tuple[Complex, Flags]:
        """Spectrum of q - K m^2 + K P m, that is of phi; and where K can be told (channels,).

        squared: m^2; programme: its power in the bands that count, 0 in others; seen: P.
        """
        squares = scipy.fft.rfft(squared * hann(squared.shape[1]), axis=1)[:, self._bins]
        whole = programme.sum(axis=1)
        both = [self._banded((one * audio.conj()).real) for one in (quadrature, squares)]
        along, skew = np.where(programme > 0, both, 0).sum(axis=2)
        divisor = whole * (1 - seen) + skew
        known = (whole > 0) & (divisor > _LEAST_DIVISOR * whole)
        mean = np.where(known, along / np.where(known, divisor, 1.0), 0)
        turned = np.where(known, mean * seen, 0)
        mean, turned = (value.astype(np.float32)[:, None] for value in (mean, turned))
        return quadrature - mean * squares + turned * audio, known

    def _weighed(self, power: Precise) -> tuple[Precise, Precise]:
        """P as the loop sees it; and the mean power over the mean weighted as the spectra are (channels,).

        power: of each hop, noise subtracted, (channels, hops).
        """
        weighted = power @ self._hop_weight
        there = weighted > 0
        weighted = np.where(there, weighted, 1.0)
        seen = np.where(there, np.square(power) @ self._hop_weight / weighted, 0)
        evenly = np.where(there, power.mean(axis=1) / weighted, 1.0)
        return seen, np.minimum(evenly, _MOST_OUTSIDE)

    def _banded(self, values: NDArray[Number]) -> NDArray[Number]:
        """Sums over each band (channels, bands)."""
        return np.asarray(np.add.reduceat(values, self._starts, axis=1))


def _power(spectrum: Complex) -> Real:
    return np.square(spectrum.real) + np.square(spectrum.imag)


def _typical(rest: Precise) -> Precise:
    """Mean of the medians of the quarters; where these are uneven, the least (channels,)."""
    rows, bands = rest.shape
    each = bands // 4
    if each < _LEAST_BANDS:
        return np.asarray(np.median(rest, axis=1))
    medians = np.median(rest[:, : 4 * each].reshape(rows, 4, each), axis=2)
    least = medians.min(axis=1)
    return np.asarray(np.where(medians.max(axis=1) > _UNEVEN * least, least, medians.mean(axis=1)))
