"""Lone lines: other carriers near a carrier, told from everything that has an equal on the other side of it.

A line a exp(j 2 pi f t) beside the carrier is a cos in phase and a sin in quadrature: its spectra I and Q are equally
high, and I = j Q above the carrier (f > 0), I = -j Q below it. Modulation of the amplitude alone (the programme) leaves
quadrature empty, modulation of the phase alone (hum, incidental phase modulation) leaves in-phase empty, and both
together give I = rho Q with any rho. So lines are looked for in the averaged power of quadrature, and each is asked for
its rho: the least-squares answer over many spectra, in which each counts the more the less programme there is about.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Complex, Flags, Precise, Real
from monitord.measure.mainslines import Rows

LINE_POWER = 1.5  # sum of the squares of a Hann line of height 1: 1 + 2 (1/2)^2 (Harris 1978)
NOISE_POWER = (
    3.0  # mean power of a bin, for noise of the one-sided density 1 per Hz, in bins of 1 Hz: 2 x 1.5
)
LEAST_LEVEL_DB = -52.0
"""What is weaker is not told: -50 dB, and room for its scatter."""

_FALSE_ALARM = 1e-12  # of a bin of noise; a channel of 5 kHz judges 43 million of them a day
_CELL = 8  # bins over which programme is taken to be alike
_FLOOR_CELL = 32  # bins whose median is the floor; a line fills five
_APART = 3  # bins within which two peaks are one line
_BESIDE = np.arange(4, 12)  # bins beside a line that must lie clear below it, on either side
_HANN_SPREAD = (
    35 / 18
)  # variance of a sum over bins, correlated by 4/9 and 1/36, over that of independent ones
_LIKELIER = 5.0  # nepers by which a lone line must be likelier than one in quadrature alone
_IMAGE, _SCATTER = 0.1, 2.5  # how far rho may be from +-j: an image 26 dB below, and that many deviations
_MEMORY = 0.93  # of the evidence for the side, from block to block
_NEVER = 1e30  # times the floor


@dataclass(frozen=True, slots=True)
class Lines:
    """Lone lines in the rows of a bank, all arrays (found,). row: of the bank; offset_hz: signed; power: a^2."""

    row: Rows
    offset_hz: Precise
    power: Precise


def clear_of_noise(spectra: Precise) -> Precise:
    """How far above its mean the average of so many noise spectra does not reach but once in 10^12 bins.

    Their power is exponential, and Chernoff's bound of the tail of a mean of K is (t exp(1 - t))^K; solved for t.
    """
    reach = -np.log(_FALSE_ALARM) / np.maximum(spectra, 1)
    ratio = 1 + reach + np.sqrt(2 * reach)
    for _ in range(8):
        ratio = 1 + reach + np.log(ratio)
    return np.asarray(ratio)


class LoneLines:
    """Averages the spectra of one bank and finds the lone lines in them.

    Powers are averaged over the last `blocks` blocks; each `judge` ends one. What tells a line's side is remembered
    longer, with a time constant of fourteen blocks, since under loud programme it takes longer than to see the line.
    """

    def __init__(
        self, channels: int, bins: int, first_bin: int, bin_hz: float, *, blocks: int, fewest: int
    ) -> None:
        """With `bins` bins of `bin_hz` from `first_bin` on; whole cells of these are used.

        fewest: spectra that a row must have for its lines to be told.
        """
        self._fewest = fewest
        self.bins = bins - bins % _CELL
        self._first, self._bin_hz = first_bin, bin_hz
        self._block = 0
        self._power = np.zeros((blocks, channels, self.bins), np.float32)
        self._spectra = np.zeros((blocks, channels))
        self._noise = np.zeros((blocks, channels))
        self._cross = np.zeros(
            (channels, self.bins), np.complex64
        )  # sum of I Q* / s^2, s^2 programme's power
        self._weight = np.zeros((channels, self.bins), np.float32)  # sum of |Q|^2 / s^2

    def take(self, in_phase: Complex, quadrature: Complex, noise_density: Precise, use: Flags) -> None:
        """Add a spectrum of each row: Hann, a line of amplitude a as high as a, carrier = 1.

        in_phase, quadrature: complex64 (channels, self.bins); noise_density: reception noise, power per Hz re the
        carrier (channels,); use: rows that have one; the others may hold anything (channels,).
        """
        rows = use[:, None]
        noise = np.where(use, NOISE_POWER * self._bin_hz * noise_density, 1)
        cross = in_phase * np.conj(quadrature)
        power = np.square(quadrature.real) + np.square(quadrature.imag)
        # What of in-phase a line at this place does not explain, be it above or below the carrier.
        rest = np.square(in_phase.real) + np.square(in_phase.imag) + power - 2 * np.abs(cross.imag)
        around = rest.reshape(len(rest), -1, _CELL).mean(axis=2)
        spread = np.maximum(rest, np.repeat(around, _CELL, axis=1)) + noise.astype(np.float32)[:, None]
        counts = 1 / spread
        np.add(self._power[self._block], power, out=self._power[self._block], where=rows)
        np.add(self._cross, cross * counts, out=self._cross, where=rows)
        np.add(self._weight, power * counts, out=self._weight, where=rows)
        self._spectra[self._block] += use
        self._noise[self._block] += np.where(use, noise, 0)

    def forget(self, rows: Flags) -> None:
        """Drop what is known of some rows (channels,): what comes next is another carrier."""
        self._power[:, rows] = 0
        self._spectra[:, rows] = 0
        self._noise[:, rows] = 0
        self._cross[rows] = 0
        self._weight[rows] = 0

    @property
    def seen(self) -> Flags:
        """Rows of which there are spectra enough to be judged (channels,)."""
        return np.asarray(self._spectra.sum(axis=0) >= self._fewest)

    def judge(self) -> Lines:
        """The lone lines of the last blocks; ends the block."""
        spectra = self._spectra.sum(axis=0)
        known = np.maximum(spectra, 1)
        power = self._power.sum(axis=0) / known.astype(np.float32)[:, None]
        clear = np.where(self.seen, clear_of_noise(spectra), _NEVER)
        median = 1 - 1 / (
            3 * known
        )  # of a mean of K exponentials, re their mean: K - 1/3 of a gamma variable
        floor = np.maximum(_floor(power) / median[:, None], (self._noise.sum(axis=0) / known)[:, None])
        row, peak = _peaks(power, clear[:, None] * floor)
        beside = np.maximum(
            np.median(self._at(power, row, peak, -_BESIDE), axis=1),
            np.median(self._at(power, row, peak, _BESIDE), axis=1),
        )
        narrow = power[row, peak] > clear[row] * beside
        row, peak = row[narrow], peak[narrow]
        lines = self._measured(power, floor, row, peak)
        side = self._side(row, peak)
        kept = (side != 0) & (lines.power > 10 ** (LEAST_LEVEL_DB / 10))
        self._begin_block()
        return Lines(row[kept], (side * lines.offset_hz)[kept], lines.power[kept])

    def _begin_block(self) -> None:
        self._block = (self._block + 1) % len(self._power)
        self._power[self._block] = 0
        self._spectra[self._block] = 0
        self._noise[self._block] = 0
        self._cross *= np.float32(_MEMORY)
        self._weight *= np.float32(_MEMORY)

    def _at(self, values: Real | Complex, row: Rows, peak: Rows, away: NDArray[np.int64]) -> Precise:
        """Values of the bins `away` from the peaks (found, away); at the ends the last bin stands for those beyond."""
        bins = np.clip(peak[:, None] + away, 0, self.bins - 1)
        return np.asarray(values[row[:, None], bins])

    def _measured(self, power: Real, floor: Precise, row: Rows, peak: Rows) -> Lines:
        """Power of lines without the floor, and centre of gravity, which for a Hann line is its frequency."""
        away = np.arange(-2, 3)
        five = self._at(power, row, peak, away) - floor[row, peak][:, None]
        whole = five.sum(axis=1)
        hertz = (self._first + peak + five @ away / whole) * self._bin_hz
        return Lines(row, hertz, whole / LINE_POWER)

    def _side(self, row: Rows, peak: Rows) -> Precise:
        """+1 above the carrier, -1 below it, 0 where it is no lone line or cannot be told (found,)."""
        near = np.arange(-1, 2)
        weight = self._at(self._weight, row, peak, near).sum(axis=1, dtype=np.float64)
        rho = self._at(self._cross, row, peak, near).sum(axis=1) / weight
        variance = _HANN_SPREAD / (2 * weight)  # of each part of rho
        side = np.sign(rho.imag)
        likelier = (2 * np.abs(rho.imag) - 1) / (2 * variance)
        off = np.abs(rho - 1j * side)
        return np.where((likelier > _LIKELIER) & (off < _IMAGE + _SCATTER * np.sqrt(variance)), side, 0.0)


def _floor(power: Real) -> Precise:
    """Median of the bins about each bin: the larger of those of its cell and of the next ones (channels, bins)."""
    rows, bins = power.shape
    cells = max(1, bins // _FLOOR_CELL)
    width = min(_FLOOR_CELL, bins)
    medians = np.median(power[:, : cells * width].reshape(rows, cells, width), axis=2)
    wide = np.pad(medians, ((0, 0), (1, 1)), mode="edge")
    highest = np.maximum(np.maximum(wide[:, :-2], wide[:, 2:]), medians)
    cell = np.minimum(np.arange(bins) // width, cells - 1)
    return np.asarray(highest[:, cell], np.float64)


def _peaks(power: Real, least: Precise) -> tuple[Rows, Rows]:
    """Row and bin of what is above `least` and the highest within `_APART` bins on each side."""
    row, peak = np.nonzero(power[:, _APART:-_APART] > least[:, _APART:-_APART])
    around = power[row[:, None], peak[:, None] + np.arange(2 * _APART + 1)]
    highest = around.argmax(axis=1) == _APART
    return row[highest], peak[highest] + _APART
