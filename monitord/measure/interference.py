"""Other carriers in the channel, searched for in quadrature, where programme is 24 to 42 dB weaker than in phase.

A line a exp(j w t) beside the carrier is a cos in phase and a sin in quadrature: of the two spectra Q = -j I above the
carrier and +j I below, which tells the side when correlated over seconds. A line of phase modulation that follows a
tone has Q = k I with small k, its overtones nothing in phase: these are none. Spectra of one second are averaged over
ten, their correlation over a minute; within 20 Hz of the carrier one spectrum of a minute is taken, in which what the
carrier loop has followed is put back: of a slow line it leaves E(s) = s^2 / (s^2 + 2 zeta wn s + wn^2) in quadrature.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from monitord.blocks import Complex, Detected, Fault, Flags, Precise, Second, hann
from monitord.detect.loop import ZETA, natural_frequency
from monitord.measure.hannline import between_bins
from monitord.quantities import Quantity
from monitord.stage import Bank

RANKS = ("1", "2", "3")
SECONDS = 10
_NEAR_HZ, _NEAREST_HZ, _FAST_FROM_HZ = 20.0, 0.3, 4.0
_SLOW_PARTS = 4  # of a hop: 40 points a second
_SLOW_HOPS = 600
_STEADY = 1.7  # largest over smallest level in that minute: beyond, it fades, and fading has lines of its own
_LEAST_DB = -52.0
_CLEAR_AVERAGED, _CLEAR_SINGLE = 8.0, 40.0  # times the median of the bins around: never by noise in a year
_AROUND = 40  # bins on each side
_FOLLOWS, _COHERENT = 0.7, 0.5
_LONE = 0.5  # of what a lone line must correlate
_MEMORY = 0.85  # of the correlation, from ten seconds to the next
_FAULT_DB = -26.0  # moves peaks by 0.05

Bins = NDArray[np.int64]


@dataclass(slots=True)
class _Spectra:
    """Means over spectra, (channels, bins): powers in phase and in quadrature, and conj(I) Q."""

    in_phase: Precise
    quadrature: Precise
    cross: NDArray[np.complex128]

    @classmethod
    def of(cls, in_phase: Complex, quadrature: Complex) -> "_Spectra":
        return cls(
            np.square(np.abs(in_phase)).astype(np.float64),
            np.square(np.abs(quadrature)).astype(np.float64),
            (np.conj(in_phase) * quadrature).astype(np.complex128),
        )

    def add(self, other: "_Spectra", rows: Flags) -> None:
        self.in_phase[rows] += other.in_phase[rows]
        self.quadrature[rows] += other.quadrature[rows]
        self.cross[rows] += other.cross[rows]


def lines(spectra: _Spectra, count: Precise, bin_hz: float, clear: float) -> tuple[Precise, Precise]:
    """The three strongest lines of each row: signed offset in Hz and amplitude, (channels, 3), NaN where none.

    count: spectra in the mean of the correlation (channels,); clear: times the median around that a line must have.
    """
    power = spectra.quadrature
    rows, bins = power.shape
    blocks = max(1, bins // (2 * _AROUND))
    size = bins // blocks
    median = np.median(power[:, : blocks * size].reshape(rows, blocks, size), axis=2)
    around = np.repeat(median, size, axis=1)
    around = np.concatenate([around, np.repeat(around[:, -1:], bins - around.shape[1], axis=1)], axis=1)
    inner = power[:, 1:-1]
    top = (inner >= power[:, :-2]) & (inner > power[:, 2:]) & (inner > clear * around[:, 1:-1])
    transfer = np.abs(spectra.cross) / np.maximum(spectra.in_phase, 1e-30)
    coherence = transfer * np.abs(spectra.cross) / np.maximum(spectra.quadrature, 1e-30)
    follows = (transfer < _FOLLOWS) & (coherence > _COHERENT)
    scatter = np.sqrt(spectra.in_phase * power / np.maximum(count, 1)[:, None])
    follows |= np.abs(spectra.cross.imag) + 3 * scatter < _LONE * power
    candidates = np.where(top & ~follows[:, 1:-1] & (inner > 10 ** (_LEAST_DB / 10)), inner, 0)
    best = np.argsort(-candidates, axis=1)[:, : len(RANKS)]
    row = np.arange(rows)[:, None]
    found = candidates[row, best] > 0
    place = best + 1
    below, highest, above = (np.sqrt(np.maximum(power[row, place + k], 1e-30)) for k in (-1, 0, 1))
    away, amplitude = between_bins(below, highest, above)
    side = np.where(spectra.cross.imag[row, place] < 0, 1.0, -1.0)
    offset_hz = side * (place + away) * bin_hz
    return np.where(found, offset_hz, np.nan), np.where(found, amplitude, np.nan)


class _Averaged:
    """Ten seconds, 4 Hz from the carrier to the edge of the channel."""

    def __init__(self, bank: Bank) -> None:
        self._bin_hz = 1 / (10 * bank.hop_s)
        self._first = round(_FAST_FROM_HZ / self._bin_hz)
        self._bins = slice(self._first, int(bank.channels[0].bandwidth_hz / self._bin_hz) + 1)
        self._channels = len(bank.channels)
        self._cross: NDArray[np.complex128] | float = 0.0
        self._weight = np.zeros(self._channels)
        self._begin()

    def _begin(self) -> None:
        self._sums: _Spectra | None = None
        self._count = np.zeros(self._channels)
        self._seconds = 0

    def take(self, second: Second) -> tuple[Precise, Precise] | None:
        """Lines, with every tenth second."""
        seen = _Spectra.of(second.modulation[:, self._bins], second.quadrature[:, self._bins])
        if self._sums is None:
            empty = np.zeros_like(seen.in_phase)
            self._sums = _Spectra(empty, empty.copy(), np.zeros_like(seen.cross))
        self._sums.add(seen, second.usable)
        self._count += second.usable
        self._seconds += 1
        if self._seconds < SECONDS:
            return None
        offset_hz, amplitude = lines(self._mean(self._sums), self._weight, self._bin_hz, _CLEAR_AVERAGED)
        offset_hz += np.sign(offset_hz) * self._first * self._bin_hz
        enough = (self._count >= SECONDS / 2)[:, None]
        self._begin()
        return np.where(enough, offset_hz, np.nan), np.where(enough, amplitude, np.nan)

    def _mean(self, sums: _Spectra) -> _Spectra:
        """Means of the powers over these seconds, of the correlation over some time before too."""
        self._cross = _MEMORY * self._cross + sums.cross
        self._weight = _MEMORY * self._weight + self._count
        count, weight = np.maximum(self._count, 1)[:, None], np.maximum(self._weight, 1)[:, None]
        return _Spectra(sums.in_phase / count, sums.quadrature / count, self._cross / weight)


class _Near:
    """One minute, within 20 Hz of the carrier."""

    def __init__(self, bank: Bank) -> None:
        count = len(bank.channels)
        points = _SLOW_HOPS * _SLOW_PARTS
        self._wave: NDArray[np.complex128] = np.full((count, points), np.nan, np.complex128)
        self._bin_hz = 1 / (_SLOW_HOPS * bank.hop_s)
        self._part_s = bank.hop_s / _SLOW_PARTS
        self._level = np.full((_SLOW_HOPS, count), np.nan)
        self._hops = 0
        hz = np.arange(points // 2 + 1) * self._bin_hz
        first, last = int(_NEAREST_HZ / self._bin_hz), int(_NEAR_HZ / self._bin_hz)
        self._bins = slice(first, min(last, int(0.9 * len(hz))) + 1)
        self._first = first
        s = 2j * np.pi * hz[self._bins]
        speed = natural_frequency(bank.channels[0].loop_bandwidth_hz)
        self._left = s**2 / (s**2 + 2 * ZETA * speed * s + speed**2)
        self._droop = np.sinc(hz[self._bins] * self._part_s)

    def take(self, detected: Detected) -> tuple[Precise, Precise] | None:
        """Lines, every ten seconds once a minute has been heard."""
        parts = detected.coherent.reshape(len(self._wave), _SLOW_PARTS, -1).mean(axis=2)
        self._wave[:, :-_SLOW_PARTS] = self._wave[:, _SLOW_PARTS:]
        usable = detected.settled & ~detected.broken
        self._wave[:, -_SLOW_PARTS:] = np.where(usable[:, None], parts, np.nan)
        self._level[self._hops % _SLOW_HOPS] = detected.brief_amplitude
        self._hops += 1
        if self._hops % (10 * SECONDS):
            return None
        window = hann(self._wave.shape[1])
        mean = self._wave.mean(axis=1, keepdims=True)
        both = self._wave - mean
        in_phase = scipy.fft.rfft(both.real * window, axis=1)[:, self._bins] / self._droop
        quadrature = scipy.fft.rfft(both.imag * window, axis=1)[:, self._bins] / self._droop / self._left
        steady = np.fmax.reduce(self._level) < _STEADY * np.fmin.reduce(self._level)
        known = np.isfinite(in_phase[:, :1]) & steady[:, None]
        seen = _Spectra.of(np.where(known, in_phase, 0), np.where(known, quadrature, 0))
        offset_hz, amplitude = lines(seen, np.ones(len(mean)), self._bin_hz, _CLEAR_SINGLE)
        return offset_hz + np.sign(offset_hz) * self._first * self._bin_hz, amplitude


class InterferenceMeter:
    """The strongest three, renewed every ten seconds; offsets from the carrier as it is. Fault above -26 dB.

    Near 1 Hz and below, the carrier loop follows most of a co-channel carrier, and it may not be told, or as lines
    beside a strong tone.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "interferer_offset_hertz",
            "Hz",
            "Frequency of another carrier in the channel less that of the carrier.",
            "DESIGN 4",
            label="rank",
            keys=RANKS,
        ),
        Quantity(
            "interferer_level_db",
            "dB",
            "Level of another carrier in the channel re the carrier.",
            "DESIGN 4",
            label="rank",
            keys=RANKS,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        # One sideband alone looks like another carrier, and so does each tone of it.
        one = bank.channels[0]
        self._one_sided = one.detector.endswith("sideband") or one.carrierless
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._averaged, self._near = _Averaged(self._bank), _Near(self._bank)
        nothing = np.full((len(self._bank.channels), len(RANKS)), np.nan)
        self._far_lines = self._near_lines = (nothing, nothing)
        self._locked = np.zeros(len(self._bank.channels), bool)
        self._strong = np.zeros(len(self._bank.channels), bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        self._locked = detected.locked
        far = self._averaged.take(detected.second) if detected.second is not None else None
        near = self._near.take(detected)
        self._far_lines, self._near_lines = far or self._far_lines, near or self._near_lines
        if (far or near) and not self._one_sided:
            self._strong = np.nanmax(np.nan_to_num(self._strongest()[1]), axis=1) > 10 ** (_FAULT_DB / 20)
        return {"faults": np.where(self._strong & detected.locked, int(Fault.INTERFERENCE), 0)}

    def _strongest(self) -> tuple[Precise, Precise]:
        """Lines of both searches, each where it sees best, the strongest first."""
        far_hz, far = self._far_lines
        near_hz, near = self._near_lines
        here = np.isfinite(near).any(axis=1, keepdims=True)
        far = np.where(here & (np.abs(far_hz) < _NEAR_HZ), np.nan, far)
        offset_hz, amplitude = np.concatenate([near_hz, far_hz], axis=1), np.concatenate([near, far], axis=1)
        order = np.argsort(-np.nan_to_num(amplitude), axis=1)[:, : len(RANKS)]
        row = np.arange(len(order))[:, None]
        amplitude = amplitude[row, order]
        return np.where(np.isfinite(amplitude), offset_hz[row, order], np.nan), amplitude

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        offset_hz, amplitude = self._strongest()
        there = ~np.array(self._one_sided) & self._locked[:, None] & np.isfinite(amplitude)
        level_db = 20 * np.log10(np.where(there, amplitude, 1))
        return {
            "interferer_offset_hertz": np.where(there, offset_hz, np.nan),
            "interferer_level_db": np.where(there, level_db, np.nan),
        }
