"""Carrier recovery, common to the detectors: find the line, follow its phase, say honestly when it is lost.

Each hop: rotate by the phase predicted at the hop's beginning, average to a few hundred steps a second, run
the loop over the steps, and rotate the samples by the phase that the loop found. The phase error is taken
from quadrature over the *mean* carrier, so that bass and over-modulation do not upset it.
"""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Baseband, Complex, Detected, Flags, Precise, Real
from monitord.condition.grid import STEPS
from monitord.detect.averaging import TaperedMean
from monitord.detect.fading import FadingWatch
from monitord.detect.loop import CarrierLoop
from monitord.detect.noise import QuadratureNoise, with_floor
from monitord.detect.reference import DepthReference
from monitord.detect.search import LineSearch
from monitord.detect.seconds import Seconds
from monitord.stage import Bank

_LOCK_BELOW_PRESENT_DB = 3.0  # the loop may hold a carrier somewhat weaker than one that counts as present
_CONFIRMED_AFTER = 2  # hops that must show the line before the loop calls itself locked, and to give it up
_BREAK_STEPS = 5  # 20 ms at less than a tenth: longer than any trough of programme, so the carrier was cut
_BREAK_BELOW = 0.1
_NOISE_SMOOTHING = 0.2
_MOST_ANGLE = 1.0
_COHERENT = 0.08  # bass of 120 % leaves 0.58, noise alone 1/24
_OUTDONE, _DOUBT_HOPS = 0.35, 10  # a stronger line nearby for a second: search again
SETTLED_HOPS = 5  # the carrier's mean is exact from half a second on
_LEAST_AMPLITUDE = 1e-12  # -240 dBFS: keeps the divisions by an amplitude defined where there is none

Steps = NDArray[np.complex128]
InPhase = Callable[[Complex, Complex], Real]


class CarrierRecovery:
    """Recovers the carriers of one bank."""

    def __init__(
        self, bank: Bank, sideband: float = 0.0, noise_gain: float = 1.0, delay_s: float = 0.0
    ) -> None:
        """Make ready for a bank.

        sideband: which one is detected, +1 the upper, -1 the lower, 0 both; noise_gain, delay_s: as in Detected.
        """
        self._sideband = sideband
        self._noise_gain, self._delay_s = noise_gain, delay_s
        self._bank = bank
        first = bank.channels[0]
        rate_hz, frames = bank.rate_hz, bank.frames
        self._channels = len(bank.channels)
        self._rate_hz = rate_hz
        self._frames = frames
        self._hop_s = bank.hop_s
        self._acquire_hz = first.acquire_hz
        self._pass_hz = first.bandwidth_hz + first.acquire_hz
        self._noise_hz = bank.noise_hz
        self._average_hops = max(1, round(first.averaging_s / self._hop_s))
        self._enough = 10 ** (
            (np.array([channel.present_c_n0_dbhz for channel in bank.channels]) - _LOCK_BELOW_PRESENT_DB) / 10
        )
        self._loop = CarrierLoop(first.loop_bandwidth_hz, STEPS, self._hop_s / STEPS)
        self._noise = QuadratureNoise(rate_hz, frames, self._pass_hz)
        self._step_start_s = np.arange(STEPS + 1) * self._hop_s / STEPS
        self._within_step = np.arange(frames // STEPS, dtype=np.float32)
        self.reset()

    def reset(self) -> None:
        """Forget everything: as new."""
        count = self._channels
        self._search = LineSearch(count, self._rate_hz, self._frames, STEPS, self._acquire_hz)
        self._mean = TaperedMean(count, self._frames, self._average_hops, STEPS)
        self._seconds = Seconds(self._bank)
        self._fading = FadingWatch(self._bank)
        self._reference = DepthReference(self._bank)
        self._phase = np.zeros(count)
        self._speed = np.zeros(count)  # rad/s
        self._amplitude = np.zeros(count)  # of the last hops, for the loop
        self._tracking = np.zeros(count, bool)
        self._good = np.zeros(count, np.int64)
        self._bad = np.zeros(count, np.int64)
        self._doubts = np.zeros(count, np.int64)
        self._last_hop = np.zeros(count)
        self._low_run = np.zeros(count, np.int64)
        self._smooth_noise = np.full(count, np.nan)

    def process(self, baseband: Baseband, in_phase: InPhase) -> Detected:
        """Recover the carriers of one hop and detect it.

        in_phase: what the detector makes of the baseband with each carrier turned to phase 0, and of the baseband
        as it came; both complex64 (channels, frames), full scale = 1, as its result.
        """
        steps = self._averaged_steps(baseband.samples)
        path, speed_change = self._loop.follow(self._angles(steps))
        samples, phase = self._rotate(baseband.samples, path)
        steps *= np.exp(-1j * (path[:, :-1] + path[:, 1:]) / 2)
        line = steps.mean(axis=1)
        noise, disturbance = self._noise.density(samples, self._sideband)
        noise = with_floor(noise, np.abs(line))
        broken = self._breaks(steps.real)
        self._judge(line, np.square(np.abs(steps)).mean(axis=1), noise)
        self._average(samples, broken)
        self._advance(path[:, -1], speed_change, line)
        locked = self._tracking & (self._good >= _CONFIRMED_AFTER)
        settled = locked & (self._mean.heard >= min(SETTLED_HOPS, self._average_hops))
        mean = np.where(locked, self._mean.mean, np.nan)
        brief = np.where(locked, self._mean.brief, np.nan)
        modulation = _modulation(samples, mean, noise * self._noise_hz)
        amplitude = self._reference.amplitude(mean, brief, modulation, settled & ~broken)
        spread = np.maximum(np.maximum(noise, disturbance), self._smooth_noise)
        sigma = np.sqrt(spread * self._noise_gain * self._noise_hz) / amplitude
        hop_amplitude = np.where(self._tracking, np.abs(line), 0.0)
        recent_amplitude = (hop_amplitude + np.where(self._good > 1, self._last_hop, hop_amplitude)) / 2
        self._last_hop = hop_amplitude
        glimpse = self._seek(baseband.samples)
        scale = (1 / amplitude).astype(np.float32)[:, None]
        coherent = samples * scale
        detected = Detected(
            in_phase=in_phase(samples, baseband.samples) * scale,
            coherent=coherent,
            rate_hz=self._rate_hz,
            span=baseband.span,
            amplitude=amplitude,
            mean_amplitude=mean,
            hop_amplitude=hop_amplitude,
            recent_amplitude=recent_amplitude,
            brief_amplitude=brief,
            noise_density=noise,
            sigma=sigma,
            phase=phase + steps.imag / np.maximum(self._amplitude, _LEAST_AMPLITUDE)[:, None],
            step_amplitude=np.abs(steps),
            offset_hz=np.where(locked, self._speed / (2 * np.pi), np.nan),
            glimpse=glimpse,
            locked=locked,
            settled=settled,
            broken=broken,
            noise_gain=self._noise_gain,
            delay_s=self._delay_s,
            fading=self._judge_fading(samples, mean, modulation, noise),
        )
        return replace(detected, second=self._seconds.take(detected))

    def _judge_fading(self, samples: Complex, mean: Precise, modulation: Precise, noise: Precise) -> Flags:
        """One sideband alone has as much in quadrature as in phase: that is no fading there."""
        if self._sideband:
            return np.zeros(self._channels, bool)
        return self._fading.judge(samples, mean, modulation, noise)

    def _averaged_steps(self, samples: Complex) -> Steps:
        """The hop turned by the predicted phase and averaged over each step, complex128 (channels, STEPS)."""
        turn = np.exp(-1j * (self._speed / self._rate_hz)[:, None] * self._within_step).astype(np.complex64)
        parts = samples.reshape(self._channels, STEPS, -1)
        sums = np.matmul(parts, turn[:, :, None])[:, :, 0] / self._within_step.size
        predicted = self._phase[:, None] + self._speed[:, None] * self._step_start_s[:-1]
        return np.asarray(sums * np.exp(-1j * predicted))

    def _angles(self, steps: Steps) -> Precise:
        """Phase errors for the loop; none where nothing is tracked or the line has just gone (it coasts)."""
        use = self._tracking & (self._bad == 0)
        angle: Precise = steps.imag * (use / np.maximum(self._amplitude, _LEAST_AMPLITUDE))[:, None]
        return np.minimum(np.maximum(angle, -_MOST_ANGLE), _MOST_ANGLE)

    def _rotate(self, samples: Complex, path: Precise) -> tuple[Complex, Precise]:
        """Turn the samples to phase 0; also the phases at the steps' middles, float64 (channels, STEPS)."""
        edge = self._phase[:, None] + self._speed[:, None] * self._step_start_s + path
        slope = np.diff(edge, axis=1) / self._within_step.size
        start = np.remainder(edge[:, :-1], 2 * np.pi)
        angle = slope.astype(np.float32)[:, :, None] * self._within_step
        angle += start.astype(np.float32)[:, :, None]
        turn = np.empty(angle.shape, np.complex64)
        np.cos(angle, out=turn.real)
        np.sin(angle, out=turn.imag)
        np.conj(turn, out=turn)
        turn *= samples.reshape(angle.shape)
        return turn.reshape(samples.shape), (edge[:, :-1] + edge[:, 1:]) / 2

    def _breaks(self, steps: Precise) -> Flags:
        """Rows whose carrier was cut within this hop, counting a cut that began in the hop before."""
        low = steps < _BREAK_BELOW * self._amplitude[:, None]
        if not low.any():
            self._low_run[:] = 0
            return np.zeros(self._channels, bool)
        place = np.arange(1, STEPS + 1)
        last_high = np.maximum.accumulate(np.where(low, 0, place), axis=1)
        run = np.where(last_high == 0, place + self._low_run[:, None], place - last_high) * low
        self._low_run = run[:, -1]
        return np.asarray(run.max(axis=1) >= _BREAK_STEPS)

    def _judge(self, line: Steps, near: Precise, noise: Precise) -> None:
        """Count the hops that showed the line, and those that did not; give up after two of these.

        near: power of all within the steps' bandwidth; a line that has moved off leaves it incoherent.
        """
        power = np.square(np.abs(line))
        shown = (power - noise / self._hop_s > self._enough * noise) & (line.real > 0.5 * np.abs(line))
        shown &= power > _COHERENT * near
        self._good = np.where(self._tracking & shown, self._good + 1, 0)
        self._bad = np.where(self._tracking & ~shown, self._bad + 1, 0)
        away = np.abs(self._speed) / (2 * np.pi) > 1.05 * self._acquire_hz + 2
        self._doubts = np.where(self._tracking & (power < _OUTDONE * near), self._doubts + 1, 0)
        lost = self._tracking & ((self._bad >= _CONFIRMED_AFTER) | away | (self._doubts >= _DOUBT_HOPS))
        self._tracking = self._tracking & ~lost
        smooth = self._smooth_noise + _NOISE_SMOOTHING * (noise - self._smooth_noise)
        self._smooth_noise = np.where(np.isfinite(smooth), smooth, noise)

    def _average(self, samples: Complex, broken: Flags) -> None:
        self._mean.take(samples.real, self._tracking & (self._bad == 0) & ~broken)

    def _advance(self, path_end: Precise, speed_change: Precise, line: Steps) -> None:
        """Carry phase, frequency and amplitude over to the next hop."""
        self._phase = self._phase + self._speed * self._hop_s + path_end
        self._speed = self._speed + speed_change
        fresh = self._amplitude + 0.3 * (np.abs(line) - self._amplitude)
        self._amplitude = np.where(self._good > 0, fresh, self._amplitude)

    def _seek(self, samples: Complex) -> Precise:
        """Search where nothing is tracked; what is found is tracked from the next hop on. Also what is glimpsed."""
        self._search.listen(samples, ~self._tracking | (self._bad > 0))
        glimpse = self._search.glimpse()
        rows = ~self._tracking & self._search.ready
        if not rows.any():
            return glimpse
        line = self._search.find(rows)
        new = np.zeros(self._channels, bool)
        new[rows] = line.found
        self._phase[new] = line.phase[line.found]
        self._speed[new] = 2 * np.pi * line.offset_hz[line.found]
        self._amplitude[new] = line.amplitude[line.found]
        self._tracking = self._tracking | new
        self._good[new] = 0
        self._bad[new] = 0
        self._doubts[new] = 0
        self._mean.begin(new, line.in_phase[line.found], line.steady[line.found])
        return glimpse


def _modulation(samples: Complex, carrier: Precise, noise_power: Precise) -> Precise:
    """Mean square of the modulation in phase, the carrier = 1, noise subtracted (channels,)."""
    wave = samples.real
    square = np.einsum("cf,cf->c", wave, wave) / wave.shape[1]
    mean = wave.mean(axis=1, dtype=np.float64)
    return np.asarray((square - np.square(mean) - noise_power) / np.square(carrier))
