"""Keyed tones: the complex amplitude of a tone 240 times a second, and when the key is down.

The audio is turned by the tone's nominal frequency and weighted by a Hann window over four steps of the carrier's
loop (16.7 ms): short enough for a dot at 20 words a minute (60 ms), and 59 dB down 400 Hz away, 79 dB at 870 Hz.
A tone off its nominal frequency by f reads too low by the window's response at f, which is known once f is.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from monitord.blocks import Complex, Detected, Flags, Precise
from monitord.condition.grid import STEPS
from monitord.stage import Bank

WINDOW_STEPS = 4
_DECIDE = 2  # steps to each side by whose majority the key is down or up
_CLEAR = 4  # steps to each side that a step well inside a mark or a space is from its ends
_REACH = _DECIDE + _CLEAR
_SUSTAINED = 6  # steps, 25 ms: a mark is held for that long
_FORGET_S = 15.0  # the level of the marks is halved in this time where none comes
_THRESHOLD = 0.5  # of the marks' level
_NOISE_CLEAR = 3.0  # times the rms of the noise: exceeded by one of 8000 independent values (Rayleigh)

Amplitudes = NDArray[np.complex128]


class ToneEnvelope:
    """Complex amplitudes of tones, one for each of `rows` and `hz`; STEPS a hop, two steps late."""

    def __init__(self, bank: Bank, rows: Sequence[int], hz: Sequence[float]) -> None:
        self._rows = np.array(rows, np.intp)
        speed = 2 * np.pi * np.array(hz)
        length = self._length = bank.frames // STEPS
        self.step_s = bank.hop_s / STEPS
        within = np.exp(-1j * speed[:, None] * np.arange(length) / bank.rate_hz)
        taper = np.hanning(WINDOW_STEPS * length + 1)[:-1]
        taper *= 2 / taper.sum()
        parts = taper.reshape(WINDOW_STEPS, length).T
        self._kernel: Complex = (within[:, :, None] * parts).astype(np.complex64)
        self._turn = np.exp(-1j * speed[:, None] * np.arange(STEPS) * self.step_s)
        self._hop_turn = np.exp(-1j * speed * bank.hop_s)
        self.reset()

    def reset(self) -> None:
        """As new."""
        count = len(self._rows)
        self._start = np.ones(count, np.complex128)
        self._sums: Amplitudes = np.full(
            (count, WINDOW_STEPS - 1 + STEPS, WINDOW_STEPS), np.nan, np.complex128
        )

    def take(self, detected: Detected) -> Amplitudes:
        """Amplitudes over the carrier, complex128 (tones, STEPS); NaN where the carrier is not surely held."""
        wave = detected.in_phase[self._rows].reshape(len(self._rows), STEPS, self._length)
        turned = (wave - 1) @ self._kernel * (self._turn * self._start[:, None])[:, :, None]
        usable = (detected.settled & ~detected.broken)[self._rows]
        self._start *= self._hop_turn / np.abs(self._hop_turn)
        self._sums[:, : WINDOW_STEPS - 1] = self._sums[:, STEPS:]
        self._sums[:, WINDOW_STEPS - 1 :] = np.where(usable[:, None, None], turned, np.nan)
        return np.asarray(sum(self._sums[:, k : k + STEPS, k] for k in range(WINDOW_STEPS)))

    def noise_power(self, detected: Detected) -> Precise:
        """Mean square of what reception noise adds to the amplitudes (tones,).

        2 x 1.5 (Hann; Harris 1978, CHECKS E17) x its one-sided density over the carrier / length of the window.
        """
        density = detected.audio_noise_density / np.square(detected.amplitude)
        return density[self._rows] * (3 / (WINDOW_STEPS * self.step_s))

    def response(self, off_hz: Precise) -> Precise:
        """What a tone of amplitude 1 reads that is off by this much: sinc(x) / (1 - x^2), x = off x window."""
        x = np.minimum(np.abs(off_hz) * WINDOW_STEPS * self.step_s, 0.999)
        return np.asarray(np.sinc(x) / (1 - np.square(x)))


@dataclass(frozen=True, slots=True)
class Keyed:
    """What the key did, `Keying.delay_steps` ago; all (tones, STEPS).

    envelope: as it came.
    down: the key is down.
    in_mark, in_space: well inside a mark, or a space.
    """

    envelope: Amplitudes
    down: Flags
    in_mark: Flags
    in_space: Flags


class Keying:
    """Tells when the key is down: above half the level of the marks heard last, and clear of the noise."""

    delay_steps = _REACH

    def __init__(self, count: int, step_s: float, least: Sequence[float]) -> None:
        """For so many tones; `least`: the lowest level that can be a mark, in the unit of the envelope."""
        self._count = count
        self._least = np.array(least, np.float64)
        self._keep = 0.5 ** (STEPS * step_s / _FORGET_S)
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._envelope: Amplitudes = np.full((self._count, 2 * _REACH + STEPS), np.nan, np.complex128)
        self._level = np.zeros(self._count)

    def take(self, envelope: Amplitudes, noise_power: Precise) -> Keyed:
        """Take one hop's envelope (tones, STEPS) and the mean square of the noise in it (tones,)."""
        self._envelope[:, : 2 * _REACH] = self._envelope[:, STEPS:]
        self._envelope[:, 2 * _REACH :] = envelope
        size = np.abs(self._envelope)
        sustained = sliding_window_view(size, _SUSTAINED, axis=1).min(axis=2)
        self._level = np.fmax(self._level * self._keep, np.fmax.reduce(sustained, axis=1))
        clear = np.fmax(self._least, _NOISE_CLEAR * np.sqrt(noise_power))
        above = size > np.maximum(_THRESHOLD * self._level, clear)[:, None]
        down = _counted(above, _DECIDE) > _DECIDE
        known = _counted(np.isfinite(size[:, _DECIDE:-_DECIDE]), _CLEAR) > 2 * _CLEAR
        marks = _counted(down, _CLEAR)
        middle = slice(_REACH, -_REACH)
        return Keyed(
            self._envelope[:, middle].copy(),
            down[:, _CLEAR:-_CLEAR],
            known & (marks > 2 * _CLEAR),
            known & (marks == 0),
        )


def _counted(flags: Flags, reach: int) -> NDArray[np.int64]:
    """How many are set among each and its neighbours up to `reach` away; shorter by 2 x reach."""
    return np.asarray(sliding_window_view(flags, 2 * reach + 1, axis=1).sum(axis=2))


class MarkFrequency:
    """Frequency of tones less nominal, from how far their phase turns from step to step within marks."""

    def __init__(self, count: int, step_s: float) -> None:
        self._step_s = step_s
        self._product: Amplitudes = np.zeros(count, np.complex128)

    def take(self, keyed: Keyed) -> None:
        """Add one hop."""
        wave = np.where(keyed.in_mark, keyed.envelope, 0)
        self._product += np.einsum("ts,ts->t", wave[:, 1:], wave[:, :-1].conj())

    def off_hz(self) -> Precise:
        """Hz (tones,); NaN where no mark was heard."""
        angle = np.angle(self._product)
        return np.where(self._product == 0, np.nan, angle / (2 * np.pi * self._step_s))
