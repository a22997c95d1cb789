"""Tune, filter and decimate every channel in one pass: fast convolution (overlap-save).

One forward transform per hop is shared by all channels; each channel takes the bins around its carrier
times the filter's response and goes back by an inverse transform at its bank's lower rate
(Crochiere and Rabiner, Multirate Digital Signal Processing, 1983, section 7.1, for the overlap-save
arithmetic). The response is real and symmetric, so the filter has no phase; a hop's output stands for
exactly its own samples, and comes one margin later (`Grid.margin`).
"""

import math
from collections.abc import Iterator, Sequence

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from monitord.blocks import Baseband, Block, Complex, Precise, Real, Span
from monitord.condition.grid import STOP_BAND_DB, Branch, Grid
from monitord.settings import Channel


def low_pass(grid: Grid, cutoff_hz: float) -> Precise:
    """Kaiser-windowed low-pass of 2 D + 1 taps: its response on the bins of a frame, float64 (frame,), real.

    The window's beta for the wanted attenuation is Kaiser's (1974): 0.1102 (A - 8.7).
    """
    tap = np.arange(-grid.margin, grid.margin + 1)
    turn = 2 * cutoff_hz / grid.rate_hz
    taps = turn * np.sinc(turn * tap) * np.kaiser(len(tap), 0.1102 * (STOP_BAND_DB - 8.7))
    taps /= taps.sum()
    ring = np.zeros(grid.frame)
    ring[tap] = taps
    return np.asarray(scipy.fft.fft(ring).real)


class _Bank:
    """The bins, the response and the phases of one bank of channels."""

    def __init__(self, branch: Branch, carrier_hz: Precise, real: bool) -> None:
        grid = branch.grid
        self.branch = branch
        bin_hz = grid.rate_hz / grid.frame
        center = np.rint(carrier_hz / bin_hz).astype(np.int64)
        self._half = min(branch.points // 2 - 1, math.ceil((branch.pass_hz + grid.transition_hz) / bin_hz))
        around = np.arange(-self._half, self._half + 1)
        self._bins = (center[:, None] + around) % grid.frame
        response = low_pass(grid, branch.pass_hz + grid.transition_hz / 2)[around]
        gain = (
            branch.points / grid.frame * (2 if real else 1)
        )  # a real carrier of amplitude A has a line of A/2
        self._response: Real = (gain * response).astype(np.float32)
        self._turn_per_hop = np.mod(carrier_hz * grid.hop / grid.rate_hz, 1.0)
        self._turn_of_margin = np.mod(carrier_hz * grid.margin / grid.rate_hz, 1.0)
        self._spectrum: Complex = np.zeros((len(carrier_hz), branch.points), np.complex64)
        self._residue = self._residual_rotation(carrier_hz - center * bin_hz)

    def _residual_rotation(self, residual_hz: Precise) -> Complex | None:
        """What is left of a carrier between two bins; None where every carrier lies on a bin."""
        if not np.any(np.abs(residual_hz) > 1e-6):
            return None
        branch = self.branch
        time = (branch.points // 8 + np.arange(branch.frames)) / branch.rate_hz
        return np.asarray(np.exp(-2j * np.pi * residual_hz[:, None] * time), np.complex64)

    def tune(self, spectrum: Complex, index: int) -> Complex:
        """Baseband of hop `index`, complex64 (channels, frames), from the spectrum of its frame."""
        turns = np.mod(index * self._turn_per_hop - self._turn_of_margin, 1.0)
        near = spectrum[self._bins]
        near *= self._response
        near *= np.exp(-2j * np.pi * turns).astype(np.complex64)[:, None]
        self._spectrum[:, : self._half + 1] = near[:, self._half :]
        self._spectrum[:, -self._half :] = near[:, : self._half]
        edge = self.branch.points // 8
        wave: Complex = scipy.fft.ifft(self._spectrum, axis=1)[:, edge : edge + self.branch.frames]
        if self._residue is not None:
            wave *= self._residue
        return wave


class Tuner:
    """Blocks of any length in, for each hop one Baseband per bank out.

    banks: channels that share bandwidth and acquisition range, one sequence per bank.
    real: the source's samples are a real IF (float32).

    `delay_s` is what the filter's second half adds: a hop comes out when its margin has arrived.
    """

    def __init__(
        self, rate_hz: float, center_hz: float, real: bool, banks: Sequence[Sequence[Channel]]
    ) -> None:
        self.grid = Grid.of(rate_hz)
        self.delay_s = self.grid.margin / rate_hz
        self._real = real
        self._banks = [_bank(self.grid, center_hz, real, channels) for channels in banks]
        self._frame: NDArray[np.float32 | np.complex64] = np.zeros(
            self.grid.frame, np.float32 if real else np.complex64
        )
        self.reset()

    @property
    def branches(self) -> tuple[Branch, ...]:
        """Rates and sizes of the banks, in their order."""
        return tuple(bank.branch for bank in self._banks)

    @property
    def wanted(self) -> int:
        """Samples that complete the next hop."""
        return self.grid.frame - self._filled

    def reset(self) -> None:
        """Forget all samples: as new."""
        self._index = 0
        self._expected = 0
        self._stream: int | None = None
        self._filled = 0
        self._fresh = True
        self._clipped = 0

    def process(self, block: Block) -> Iterator[tuple[Baseband, ...]]:
        """Yield each hop that `block` completes; after a gap the grid goes on at the next whole hop."""
        if block.stream != self._stream or block.start != self._expected:
            self._begin(block)
        self._expected = block.end
        self._clipped += block.clipped
        position = max(0, self._first_wanted() - block.start)
        while position < len(block.samples):
            take = min(self.grid.frame - self._filled, len(block.samples) - position)
            self._frame[self._filled : self._filled + take] = block.samples[position : position + take]
            self._filled += take
            position += take
            if self._filled == self.grid.frame:
                yield self._complete(block)

    def _begin(self, block: Block) -> None:
        """Start on the first whole hop of a stretch without gaps; what came before it is silence."""
        self._stream = block.stream
        self._index = -(-block.start // self.grid.hop)
        known = block.start - (self._index * self.grid.hop - self.grid.margin)
        self._frame[:] = 0
        self._filled = max(0, known)
        self._fresh = True

    def _first_wanted(self) -> int:
        """Index of the sample that goes next into the frame."""
        return self._index * self.grid.hop - self.grid.margin + self._filled

    def _complete(self, block: Block) -> tuple[Baseband, ...]:
        grid, index = self.grid, self._index
        end = (index + 1) * grid.hop
        utc = None if block.utc is None else block.utc + (end - block.start) / grid.rate_hz
        span = Span(index, index * grid.hop, end, grid.rate_hz, utc, self._fresh, self._clipped, block.stream)
        spectrum = _whole_spectrum(self._frame) if self._real else scipy.fft.fft(self._frame)
        hop = tuple(Baseband(bank.tune(spectrum, index), bank.branch.rate_hz, span) for bank in self._banks)
        shared = 2 * grid.margin
        self._frame[:shared] = self._frame[-shared:]
        self._filled = shared
        self._index += 1
        self._fresh = False
        self._clipped = 0
        return hop


def _whole_spectrum(frame: NDArray[np.float32 | np.complex64]) -> Complex:
    """Both sides of a real frame's spectrum; carriers lie on the positive side, filters may lean over 0 Hz."""
    half = scipy.fft.rfft(frame.real)
    return np.concatenate([half, np.conj(half[-2:0:-1])])


def _bank(grid: Grid, center_hz: float, real: bool, channels: Sequence[Channel]) -> _Bank:
    first = channels[0]
    carrier_hz = np.array([channel.carrier_hz - center_hz for channel in channels])
    return _Bank(Branch.of(grid, first.bandwidth_hz, first.acquire_hz), carrier_hz, real)
