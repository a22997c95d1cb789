"""Suppressed carrier: the audio of double sideband without a carrier, or of one sideband without a carrier.

Double sideband: the square of s exp(j phi) is s^2 exp(2j phi), and s^2 has a mean: a line at twice the carrier's
frequency, which is recovered like any carrier and halved (squaring loop). Which of the two phases half a turn apart is
right nothing tells; the one first found is kept. Single sideband: the carrier is taken at its nominal frequency, and
the audio is twice the real part of that side.

In phase is scaled to its peak of the last 10 s, on a carrier of 1 put in its place: m = in_phase - 1.
"""

from dataclasses import replace

import numpy as np

from monitord.blocks import Baseband, Complex, Detected, Flags, Precise, Real
from monitord.condition.grid import STEPS
from monitord.detect.carrier import CarrierRecovery
from monitord.detect.noise import QuadratureNoise, with_floor
from monitord.detect.seconds import Seconds
from monitord.detect.sideband import LOWEST_HZ, Phasing, reach_for
from monitord.detect.synchronous import in_phase
from monitord.stage import Bank

_PEAK_S = 10.0
_HEARD = 2.0  # power over that of the noise: there is a sideband
_SIDES = {"both": 0.0, "upper": 1.0, "lower": -1.0}


class SuppressedCarrierDetector:
    """See the module. Everything that is said of a carrier is NaN, or stands for the peak of the audio."""

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        first = bank.channels[0]
        self._bank = bank
        self._side = _SIDES[first.sideband]
        twice = tuple(
            one.model_copy(update={"acquire_hz": 2 * one.acquire_hz, "present_c_n0_dbhz": 25.0})
            for one in bank.channels
        )
        self._squares = CarrierRecovery(replace(bank, channels=twice))
        self._noise = QuadratureNoise(bank.rate_hz, bank.frames, first.bandwidth_hz + first.acquire_hz)
        reach = min(reach_for(min(LOWEST_HZ, first.bandwidth_hz / 10), bank.rate_hz), bank.frames // 2)
        self.delay_s = reach / bank.rate_hz if self._side else 0.0
        self._phasing = Phasing(len(bank.channels), bank.frames, reach, self._side)
        self._place = (np.arange(bank.frames) + 0.5) / bank.frames * STEPS - 0.5
        self.reset()

    def reset(self) -> None:
        """See stage.Detector."""
        count = len(self._bank.channels)
        self._squares.reset()
        self._phasing.reset()
        self._seconds = Seconds(self._bank)
        self._peaks = np.zeros((round(_PEAK_S / self._bank.hop_s), count))
        self._heard = np.zeros(count, np.int64)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        square = replace(baseband, samples=np.square(baseband.samples))
        line = self._squares.process(square, in_phase)
        turned = baseband.samples if self._side else self._turned(baseband.samples, line.phase)
        audio = self._phasing.keep(turned) if self._side else turned.real
        noise, _ = self._noise.density(turned, self._side)
        noise = with_floor(noise, np.sqrt(np.mean(np.square(audio), axis=1, dtype=np.float64)))
        gain = 2.0 if self._side else 1.0
        locked = self._judged(line.locked, audio, gain * noise * self._bank.noise_hz)
        return self._assembled(line, turned, audio, noise, locked, gain)

    def _turned(self, samples: Complex, phase: Precise) -> Complex:
        """The samples turned by half the phase of the square's line, straight between the steps' middles."""
        whole = np.clip(self._place.astype(np.int64), 0, STEPS - 2)
        away = self._place - whole
        half = phase / 2
        angle = half[:, whole] + (half[:, whole + 1] - half[:, whole]) * away
        return np.asarray(samples * np.exp(-1j * angle), np.complex64)

    def _judged(self, line: Flags, audio: Real, noise_power: Precise) -> Flags:
        """Double sideband: the line of the square is held. One sideband: there is more than noise."""
        power = np.square(audio).mean(axis=1, dtype=np.float64)
        return line if not self._side else np.asarray(power > _HEARD * noise_power)

    def _assembled(
        self, line: Detected, turned: Complex, audio: Real, noise: Precise, locked: Flags, gain: float
    ) -> Detected:
        self._heard = np.where(locked, self._heard + 1, 0)
        self._peaks[1:] = self._peaks[:-1].copy()
        self._peaks[0] = np.where(
            self._heard > 1, np.abs(audio).max(axis=1), 0
        )  # the first hop may hold an edge
        peak = self._peaks.max(axis=0)
        amplitude = np.where(locked & (peak > 0), peak, np.nan)
        scale = (1 / amplitude).astype(np.float32)[:, None]
        nothing = np.full(len(peak), np.nan)
        detected = replace(
            line,
            in_phase=1 + audio * scale,
            coherent=(1 + turned * scale).astype(np.complex64),
            amplitude=amplitude,
            mean_amplitude=nothing,
            brief_amplitude=amplitude,
            hop_amplitude=peak,
            recent_amplitude=peak,
            noise_density=noise,
            sigma=np.sqrt(gain * noise * self._bank.noise_hz) / amplitude,
            offset_hz=line.offset_hz / 2,
            glimpse=np.zeros(len(peak)),
            locked=locked,
            settled=locked & (self._heard > STEPS // 6),
            broken=np.zeros(len(peak), bool),
            fading=np.zeros(len(peak), bool),
            noise_gain=gain,
            delay_s=self.delay_s,
            second=None,
        )
        return replace(detected, second=self._seconds.take(detected))
