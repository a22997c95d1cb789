"""Spectra of the few hertz about a carrier, as it came: free of what the carrier loop did to it.

Behind the loop a line within a few hertz is partly gone from quadrature: the loop follows it. So the turn that the
loop gave the samples is put back, and only the smooth course of the phase over ten seconds (a parabola) is taken out.
In between the samples are brought down to 120 a second by cubic splines, whose response sinc(f / 120 Hz)^4 keeps what
would come down to 20 Hz at -57 dB.
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft

from monitord.blocks import Complex, Detected, Flags, Precise, hann
from monitord.condition.grid import STEPS
from monitord.stage import Bank

SEGMENT_HOPS = 100
"""Hops in a segment: ten seconds, bins of 0.1 Hz."""

_NODES = STEPS // 2  # points per hop
_SPLINE = 4  # points that a spline reaches over


@dataclass(frozen=True, slots=True)
class NearSpectra:
    """Hann spectra of a segment: carrier = 1, a line of amplitude a as high as a.

    in_phase, quadrature: complex64 (channels, bins), bins `first` and on. noise_density: per Hz re the carrier
    (channels,). usable: the carrier was held, settled and unbroken throughout (channels,); the rest means nothing.
    """

    in_phase: Complex
    quadrature: Complex
    noise_density: Precise
    usable: Flags


class NearCarrier:
    """Gathers the hops of one bank; gives the spectra of the last ten seconds whenever asked."""

    def __init__(self, bank: Bank, first: int, bins: int) -> None:
        """With `bins` bins from `first` on."""
        count = len(bank.channels)
        self.bin_hz = 1 / (SEGMENT_HOPS * bank.hop_s)
        self._bins = slice(first, first + bins)
        frames = bank.frames // _NODES
        inside = (np.arange(frames) + 0.5) / frames
        # The spline's four pieces, last one first: what a sample adds to the point it is the last stretch of, ...
        self._weights = (_spline(inside[:, None] + np.arange(_SPLINE)[::-1]) / frames).astype(np.complex64)
        middle = (np.arange(-STEPS, STEPS) + 0.5) * _NODES / STEPS
        path = _spline(middle[:, None] - np.arange(_NODES) + _SPLINE - 1)
        self._path_weights = path / path.sum(axis=0)
        points = SEGMENT_HOPS * _NODES
        time = np.linspace(-1, 1, points)
        course = np.stack([np.ones(points), time, np.square(time)], axis=1)
        taper = hann(points).astype(np.float64)
        self._fit = np.linalg.solve((course.T * taper) @ course, course.T * taper).T
        self._course = course
        self._taper = taper
        hertz = np.arange(first, first + bins) * self.bin_hz
        self._gain = (1 / np.sinc(hertz * bank.hop_s / _NODES) ** _SPLINE).astype(np.float32)
        self._place = 0
        self._wave = np.zeros((count, SEGMENT_HOPS, _NODES), np.complex64)
        self._turn = np.zeros((count, SEGMENT_HOPS, _NODES))
        self._noise = np.zeros((SEGMENT_HOPS, count))
        self._good = np.zeros(count, np.int64)
        self._last_sums = np.zeros((count, _SPLINE - 1, _SPLINE), np.complex64)
        self._last_path = np.zeros((count, STEPS))

    def take(self, detected: Detected) -> None:
        """Add a hop."""
        coherent, amplitude = detected.coherent, detected.amplitude
        count = len(coherent)
        sums = np.matmul(coherent.reshape(count, _NODES, -1), self._weights)
        sums *= amplitude.astype(np.float32)[:, None, None]
        both = np.concatenate([self._last_sums, sums], axis=1)
        place = self._place = (self._place + 1) % SEGMENT_HOPS
        self._wave[:, place] = sum(
            both[:, _SPLINE - 1 - k : _SPLINE - 1 - k + _NODES, k] for k in range(_SPLINE)
        )
        aside = (
            coherent.imag.reshape(count, STEPS, -1).mean(axis=2)
            * (amplitude / detected.mean_amplitude)[:, None]
        )
        path = detected.phase - aside
        self._turn[:, place] = np.concatenate([self._last_path, path], axis=1) @ self._path_weights
        self._noise[place] = detected.noise_density
        self._last_sums, self._last_path = both[:, -(_SPLINE - 1) :], path
        self._good = np.where(detected.settled & ~detected.broken, self._good + 1, 0)

    def spectra(self) -> NearSpectra:
        """Of the last ten seconds."""
        usable = self._good > SEGMENT_HOPS  # and one more, in which the first spline begins
        rows = np.flatnonzero(usable)
        order = (self._place + 1 + np.arange(SEGMENT_HOPS)) % SEGMENT_HOPS
        wave = self._wave[rows[:, None], order].reshape(len(rows), len(self._taper))
        turn = self._turn[rows[:, None], order].reshape(wave.shape)
        amplitude = (wave.real @ self._taper / 2)[:, None]
        phase = turn + wave.imag / amplitude
        wave = wave * np.exp(1j * (turn - (phase @ self._fit) @ self._course.T)) / amplitude
        wave *= self._taper
        shape = (len(usable), self._gain.size)
        in_phase, quadrature = np.zeros(shape, np.complex64), np.zeros(shape, np.complex64)
        in_phase[rows] = scipy.fft.rfft(wave.real - self._taper, axis=1)[:, self._bins] * self._gain
        quadrature[rows] = scipy.fft.rfft(wave.imag, axis=1)[:, self._bins] * self._gain
        noise = np.zeros(len(usable))
        noise[rows] = self._noise[:, rows].mean(axis=0) / np.square(amplitude[:, 0])
        return NearSpectra(in_phase, quadrature, noise, usable)


def _spline(at: Precise) -> Precise:
    """The cubic B-spline on [0, 4], 0 elsewhere: a box of length 1 convolved four times with itself."""
    away = np.abs(at - 2)
    return np.where(away < 1, 2 / 3 - np.square(away) + away**3 / 2, np.maximum(2 - away, 0) ** 3 / 6)
