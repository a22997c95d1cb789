"""AM signals of known truth, in closed form, for the tests. Nothing here comes from the program under test.

Conventions: 0 dBFS is an amplitude of 1 (complex: a magnitude of 1). A modulation m(t) is a ratio: 1.0 = 100
%; the carrier is multiplied by 1 + m(t), and its phase turns where that is negative. Times are in seconds
from the first sample.
"""

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

Array = NDArray[np.float64]
Samples = NDArray[Any]  # complex64 (IQ) or float32 (real IF)
Modulation = float | Array | Callable[[Array], Array]


@dataclass(frozen=True)
class Programme:
    """A periodic modulation and its truth: true peaks (between the samples too) and rms, as ratios."""

    modulation: Array
    positive_peak: float
    negative_peak: float
    rms: float


def frames_of(rate_hz: float, seconds: float) -> int:
    """How many samples a stretch of time has."""
    return round(rate_hz * seconds)


def times(rate_hz: float, frames: int) -> Array:
    """t[n] = n / rate."""
    return np.arange(frames) / rate_hz


def tone(m: float, frequency_hz: float, t: Array, phase: float = 0.0) -> Array:
    """m cos(2 pi f t + phase): peaks +m and -m, rms m / sqrt(2)."""
    return np.asarray(m * np.cos(2 * np.pi * frequency_hz * t + phase))


def am(
    rate_hz: float,
    seconds: float,
    *,
    carrier_hz: float = 0.0,
    level_dbfs: float = -20.0,
    modulation: Modulation = 0.0,
    phase: float = 0.0,
    seed: int = 1,
    c_n0_dbhz: float = np.inf,
    real: bool = False,
    breaks: Sequence[tuple[float, float]] = (),
) -> Samples:
    """One AM transmission and the noise of its receiver.

    With A = 10^(level/20) and the envelope e(t) = 1 + m(t), 0 in each break [start, end):

        complex:  x(t) = A e(t) exp(j (2 pi f t + phase)) + n(t)
        real:     x(t) = A e(t) cos(2 pi f t + phase) + n(t)

    Complex noise is white with the density N0 = A^2 / (C/N0) per Hz all over the span of `rate_hz`, so that
    its power is N0 rate, half of it in each of the two parts.

    Real noise: brought to baseband by z = 2 LP[x exp(-j 2 pi f t)], the carrier becomes A e(t) exp(j phase),
    as above. White noise of the variance v has the two-sided density v / rate; the factor 2 makes that 4 v /
    rate per Hz of z. This must be A^2 / (C/N0) again: v = A^2 rate / (4 C/N0). (The same by power: carrier
    A^2 / 2 over the one-sided density 2 v / rate.)

    Returns complex64, or float32 if `real`; rounding lies 150 dB below the signal.
    """
    t = times(rate_hz, frames_of(rate_hz, seconds))
    amplitude = 10 ** (level_dbfs / 20)
    envelope = amplitude * (1 + _values(modulation, t)) * _on(t, breaks)
    turns = (carrier_hz * t) % 1.0 + phase / (2 * np.pi)
    density = amplitude**2 / 10 ** (c_n0_dbhz / 10)
    rng = np.random.default_rng(seed)
    if real:
        sigma = np.sqrt(density * rate_hz / 4)
        samples = envelope * np.cos(2 * np.pi * turns) + sigma * rng.standard_normal(len(t))
        return np.asarray(samples, np.float32)
    iq = envelope * np.exp(2j * np.pi * turns) + noise(rate_hz, len(t), density, rng)
    return np.asarray(iq, np.complex64)


def noise(rate_hz: float, frames: int, density: float, rng: np.random.Generator) -> NDArray[np.complex128]:
    """Complex white noise of the power `density` per Hz: variance density x rate / 2 in each of its parts."""
    parts = rng.standard_normal((frames, 2)) * np.sqrt(density * rate_hz / 2)
    return np.asarray(parts[:, 0] + 1j * parts[:, 1])


def _values(modulation: Modulation, t: Array) -> Array:
    """The modulation at the times t, whatever it was given as."""
    values = modulation(t) if callable(modulation) else modulation
    return np.broadcast_to(np.asarray(values, np.float64), t.shape)


def _on(t: Array, breaks: Sequence[tuple[float, float]]) -> Array:
    """1 where the carrier is on, 0 in the breaks [start, end)."""
    off = np.zeros(len(t), bool)
    for start_s, end_s in breaks:
        off |= (t >= start_s) & (t < end_s)
    return np.where(off, 0.0, 1.0)


def low_passed(values: Array, rate_hz: float, band_hz: float, frames: int) -> Array:
    """Periodic values, cut at `band_hz` exactly (by their Fourier series) and taken at `frames` points.

    Keeps the coefficients of 0 <= f <= band_hz, drops all others: no aliasing in either direction, as long as
    band_hz < frames / (2 duration). A step between end and beginning rings within a few 1 / band_hz of them.
    """
    coefficients = np.fft.rfft(values)
    kept = np.zeros(frames // 2 + 1, np.complex128)
    count = 1 + int(np.floor(band_hz * len(values) / rate_hz + 1e-9))
    if count >= len(kept):
        raise ValueError(f"band_hz = {band_hz:g}: must be below half the rate that is asked for")
    count = min(count, (len(values) + 1) // 2)  # what stands at half the rate has no phase to go by
    kept[:count] = coefficients[:count]
    return np.asarray(np.fft.irfft(kept, frames) * (frames / len(values)))


def cut_off(
    modulation: Callable[[Array], Array],
    rate_hz: float,
    seconds: float,
    *,
    band_hz: float,
    oversampling: int = 16,
) -> Array:
    """The modulation of a transmitter that pinches off: 1 + m'(t) = LP[max(0, 1 + m(t))], at `rate_hz`.

    The envelope is evaluated `oversampling` times as densely, cut to `band_hz` there and only then decimated.
    What folds into the band comes from above (oversampling x rate - band); the corners' harmonics fall as
    1/f^2. Choose `seconds` to hold whole periods. For a tone m > 1 the mean of m' is the carrier shift (m sin
    t0 - t0) / pi with t0 = acos(1/m), and the envelope is at zero for t0 / pi of the time.

    A transmitter that reverses instead needs nothing: give `am` a modulation below -1.
    """
    frames = frames_of(rate_hz, seconds)
    dense = np.arange(frames * oversampling) / (rate_hz * oversampling)
    envelope = np.maximum(0.0, 1 + modulation(dense))
    return low_passed(envelope, rate_hz * oversampling, band_hz, frames) - 1


def true_peaks(values: Array, oversampling: int = 32) -> tuple[float, float]:
    """(max, -min) of the band-limited periodic signal through these samples, by exact interpolation.

    x(t + s/(32 rate)) is the inverse transform of X[k] exp(j 2 pi k s / (32 N)), s = 0..31. For a component
    at half the rate, the largest of these points is at most 1 - cos(pi/64) = 0.12 % short; at a tenth of the
    rate, 0.005 %.
    """
    frames = len(values)
    spectrum = np.fft.rfft(values)
    turn = np.exp(2j * np.pi * np.arange(len(spectrum)) / (oversampling * frames))
    positive = negative = -np.inf
    for _ in range(oversampling):
        shifted = np.fft.irfft(spectrum, frames)
        positive, negative = max(positive, float(shifted.max())), max(negative, float(-shifted.min()))
        spectrum *= turn
    return positive, negative


def scaled_to_peak(values: Array, negative_peak: float) -> Programme:
    """Scale so that the true negative peak is exactly as asked; the positive one follows and is stated."""
    positive, negative = true_peaks(values)
    scale = negative_peak / negative
    scaled = values * scale
    return Programme(scaled, positive * scale, negative_peak, float(np.sqrt(np.mean(scaled**2))))


def programme_like(
    rate_hz: float, seconds: float, *, band_hz: float = 5_000.0, negative_peak: float = 0.9, seed: int = 1
) -> Programme:
    """Periodic noise that moves like programme: falling spectrum, syllables, peaks about 12 dB above its rms.

    White noise times (1 + 0.9 times a slow movement of 1.5 to 6 Hz), then shaped by 1 / sqrt(1 + (f/500
    Hz)^2) from 50 Hz on and cut at `band_hz` exactly, so that nothing lies beyond; scaled by
    `scaled_to_peak`.
    """
    rng = np.random.default_rng(seed)
    frames = frames_of(rate_hz, seconds)
    frequency = np.fft.rfftfreq(frames, 1 / rate_hz)
    slow = np.fft.rfft(rng.standard_normal(frames)) * ((frequency > 1.5) & (frequency < 6))
    movement = np.fft.irfft(slow, frames)
    movement /= max(float(np.abs(movement).max()), 1e-30)  # nothing moves in less than a fraction of a second
    spectrum = np.fft.rfft(rng.standard_normal(frames) * (1 + 0.9 * movement))
    spectrum *= (frequency >= 50) & (frequency <= band_hz)
    spectrum /= np.sqrt(1 + (frequency / 500) ** 2)
    return scaled_to_peak(np.fft.irfft(spectrum, frames), negative_peak)


def automatic_gain(
    samples: Samples, rate_hz: float, *, level_dbfs: float = -20.0, time_s: float = 0.05
) -> Samples:
    """A receiver's automatic gain: y = x a / sqrt(mean of |x|^2 over the last `time_s`), a = 10^(level/20).

    The power of the last `time_s` is so held at a^2 (for a real IF at a^2, too: a carrier comes out 3 dB
    higher). The first `time_s` take the mean over what has come.
    """
    frames = max(1, frames_of(rate_hz, time_s))
    total = np.concatenate(([0.0], np.cumsum(np.abs(samples).astype(np.float64) ** 2)))
    end = np.arange(1, len(total))
    start = np.maximum(0, end - frames)
    power = np.maximum((total[end] - total[start]) / (end - start), 1e-30)
    return np.asarray(samples * (10 ** (level_dbfs / 20) / np.sqrt(power))).astype(samples.dtype)


def data_directory() -> Path:
    """The folder of recordings: MONITORD_TEST_DATA, or beside the repository; skips where it is not there."""
    beside = Path(__file__).resolve().parents[2] / "shared" / "data"
    directory = Path(os.environ.get("MONITORD_TEST_DATA", str(beside)))
    if not directory.is_dir():
        pytest.skip(f"no test data in {directory}: set MONITORD_TEST_DATA to the folder that holds it")
    return directory


def recorded_programme(
    name: str,
    rate_hz: float,
    seconds: float,
    *,
    start_s: float = 0.0,
    band_hz: float = 5_000.0,
    negative_peak: float = 0.9,
) -> Programme:
    """Programme from a file of the test data ("speech.wav", "music.flac", "dense.ogg"), taken as one period.

    Channels are averaged, the mean is taken out, the rate is changed and the band cut by the Fourier series
    (`low_passed`); scaled by `scaled_to_peak`. The excerpt is faded over 10 ms at both ends, so that it
    closes. Raises ValueError where the file is too short.
    """
    import soundfile

    path = data_directory() / "programme" / name
    rate = soundfile.info(path).samplerate
    frames = frames_of(rate, seconds)
    start = frames_of(rate, start_s)
    audio, _ = soundfile.read(path, frames=frames, start=start, dtype="float64", always_2d=True)
    if len(audio) < frames:
        raise ValueError(f"{path}: ends {len(audio) / rate:.1f} s after start_s, {seconds:.1f} s are wanted")
    mono = audio.mean(axis=1) - audio.mean()
    mono *= np.clip(np.minimum(np.arange(frames), np.arange(frames)[::-1]) / (0.01 * rate), 0, 1)
    return scaled_to_peak(low_passed(mono, rate, band_hz, frames_of(rate_hz, seconds)), negative_peak)


def fading_path(
    rate_hz: float, frames: int, spread_hz: float, rng: np.random.Generator
) -> NDArray[np.complex128]:
    """Gain of one Rayleigh path (Watterson model; ITU-R F.1487): mean power 1, Gaussian Doppler spectrum.

    The spread is the 2-sigma width of the spectrum (CHECKS B16): sigma = spread / 2. White complex noise is shaped by
    exp(-f^2 / (4 sigma^2)), the root of the wanted spectrum. Made at a few points per second and interpolated by
    its Fourier series to `rate_hz`.
    """
    slow_hz = max(16 * spread_hz, 4.0)
    count = max(64, round(frames / rate_hz * slow_hz))
    frequency = np.fft.fftfreq(count, 1 / slow_hz)
    shape = np.exp(-(frequency**2) / spread_hz**2)
    shape *= np.sqrt(count / np.sum(shape**2))
    coefficients = np.fft.fft(rng.standard_normal((count, 2)).view(np.complex128)[:, 0] / np.sqrt(2)) * shape
    slow = np.fft.ifft(coefficients)
    at = np.arange(frames) * (slow_hz / rate_hz)
    whole = np.minimum(at.astype(int), count - 2)
    # Sixteen points to the spread's width: a straight line between two is within 1 %.
    return np.asarray(slow[whole] + (slow[whole + 1] - slow[whole]) * (at - whole))


def by_skywave(
    samples: NDArray[np.complex128], rate_hz: float, delay_s: float, spread_hz: float, seed: int
) -> NDArray[np.complex128]:
    """Samples over two equal Rayleigh paths `delay_s` apart, mean power kept; over one where the delay is 0.

    The delay is rounded to whole samples; what comes before the first sample is zero.
    """
    rng = np.random.default_rng(seed)
    direct = fading_path(rate_hz, len(samples), spread_hz, rng) * samples
    lag = round(delay_s * rate_hz)
    if lag == 0:
        return direct
    late = np.concatenate([np.zeros(lag), samples[:-lag]])
    return np.asarray((direct + fading_path(rate_hz, len(samples), spread_hz, rng) * late) / np.sqrt(2))
