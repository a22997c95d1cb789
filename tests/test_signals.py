"""The test signals themselves, against closed forms of textbooks on amplitude modulation.

Power, sidebands and peak power: P/Pc = 1 + m^2/2, each sideband 20 log10(m/2) dBc, PEP/Pc = (1 + m)^2.
A tone that is cut off at m > 1: at zero for acos(1/m)/pi of the time, carrier shift (m sin t0 - t0)/pi.
"""

from collections.abc import Callable
from functools import partial

import numpy as np
import pytest

from tests import signals

RATE_HZ = 48_000.0
TONE_HZ = 1_000.0


def one_tone(depth: float) -> Callable[[signals.Array], signals.Array]:
    return lambda t: signals.tone(depth, TONE_HZ, t)


def line_db(samples: signals.Samples, frequency_hz: float, rate_hz: float = RATE_HZ) -> float:
    """Level of one line of a stretch that holds whole periods of it, dB re a magnitude of 1."""
    turns = signals.times(rate_hz, len(samples)) * frequency_hz
    return float(20 * np.log10(abs(np.mean(samples * np.exp(-2j * np.pi * turns)))))


def power_db(samples: signals.Samples) -> float:
    return float(10 * np.log10(np.mean(np.abs(samples.astype(np.complex128)) ** 2)))


@pytest.mark.parametrize(
    ("depth", "power", "sideband", "peak"),
    [
        (0.2, 0.0860, -20.0000, 1.5836),
        (0.3, 0.1912, -16.4782, 2.2789),
        (0.5, 0.5115, -12.0412, 3.5218),
        (0.8, 1.2057, -7.9588, 5.1055),
        (0.85, 1.3394, -7.4322, 5.3434),
        (0.95, 1.6174, -6.4661, 5.8007),
        (1.0, 1.7609, -6.0206, 6.0206),
        (1.25, 2.5072, -4.0824, 7.0437),
    ],
)
def test_power_sidebands_and_peak_power_follow_the_depth(
    depth: float, power: float, sideband: float, peak: float
) -> None:
    modulation = one_tone(depth)
    samples = signals.am(RATE_HZ, 1.0, carrier_hz=9_000, level_dbfs=-12, modulation=modulation, phase=0.7)
    assert samples.dtype == np.complex64
    assert power_db(samples) == pytest.approx(power - 12, abs=1e-4)
    assert line_db(samples, 9_000) == pytest.approx(-12, abs=1e-4)
    for side in (-TONE_HZ, TONE_HZ):
        assert line_db(samples, 9_000 + side) == pytest.approx(sideband - 12, abs=1e-4)
    assert 20 * np.log10(np.abs(samples).max()) == pytest.approx(peak - 12, abs=1e-4)


def test_a_real_carrier_of_0_dbfs_has_an_amplitude_of_1() -> None:
    samples = signals.am(RATE_HZ, 1.0, carrier_hz=12_000, level_dbfs=0, real=True)
    assert samples.dtype == np.float32
    assert np.abs(samples).max() == pytest.approx(1, abs=1e-6)
    assert power_db(samples) == pytest.approx(10 * np.log10(0.5), abs=1e-4)


@pytest.mark.parametrize("real", [False, True])
def test_at_baseband_the_carrier_stands_above_the_noise_density_as_stated(real: bool) -> None:
    carrier_hz, band_hz = 12_000.0, 5_000.0
    carrier = partial(signals.am, RATE_HZ, 10, carrier_hz=carrier_hz, level_dbfs=-20.0, real=real, seed=5)
    noisy = carrier(c_n0_dbhz=70).astype(np.complex128) - carrier()
    spectrum = np.fft.fft(noisy) / len(noisy) * (2 if real else 1)
    frequency = np.fft.fftfreq(len(noisy), 1 / RATE_HZ)
    density = np.sum(np.abs(spectrum[np.abs(frequency - carrier_hz) < band_hz]) ** 2) / (2 * band_hz)
    # 100,000 independent bins: the density is known within 0.014 dB (1 sigma).
    assert -20 - 10 * np.log10(density) == pytest.approx(70, abs=0.06)


def test_the_phase_and_a_break_are_where_they_are_asked_for() -> None:
    samples = signals.am(1_000, 1.0, carrier_hz=100, phase=0.5, level_dbfs=0, breaks=[(0.25, 0.5)])
    assert np.angle(samples[0]) == pytest.approx(0.5, abs=1e-6)
    assert np.array_equal(np.flatnonzero(samples == 0), np.arange(250, 500))


def test_a_modulation_may_be_a_number_an_array_or_a_function_of_time() -> None:
    t = signals.times(RATE_HZ, 4_800)
    from_array = signals.am(RATE_HZ, 0.1, modulation=signals.tone(0.5, TONE_HZ, t))
    assert np.array_equal(from_array, signals.am(RATE_HZ, 0.1, modulation=one_tone(0.5)))
    assert abs(signals.am(RATE_HZ, 0.1, level_dbfs=0, modulation=0.5)[7]) == pytest.approx(1.5)


def test_the_seed_alone_decides_the_noise() -> None:
    first, again, other = (signals.am(RATE_HZ, 0.1, c_n0_dbhz=50, seed=seed) for seed in (1, 1, 2))
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


@pytest.mark.parametrize("depth", [1.05, 1.1, 1.25])
def test_a_cut_off_tone_shifts_the_carrier_and_stays_at_zero_as_the_closed_forms_say(depth: float) -> None:
    modulation = signals.cut_off(one_tone(depth), RATE_HZ, 1.0, band_hz=23_000)
    at_zero = np.arccos(1 / depth)
    shift = (depth * np.sin(at_zero) - at_zero) / np.pi
    assert np.mean(modulation) == pytest.approx(shift, abs=2e-6)
    fine = signals.cut_off(one_tone(depth), RATE_HZ * 8, 1.0, band_hz=190_000)
    assert np.mean(fine < -0.999) == pytest.approx(at_zero / np.pi, abs=0.01)
    assert signals.true_peaks(modulation)[1] == pytest.approx(1, abs=0.02)


def test_a_cut_off_tone_has_nothing_beyond_its_band_and_no_alias_inside_it() -> None:
    narrow = signals.cut_off(one_tone(1.2), RATE_HZ, 1.0, band_hz=5_500)
    spectrum = np.abs(np.fft.rfft(narrow)) / len(narrow)
    assert spectrum[5_501:].max() < 1e-12
    between = np.ones(len(spectrum), bool)
    between[::1_000] = False
    assert spectrum[between].max() < 1e-12
    # Harmonics of a clipped cosine: a_n / 2 = (1/pi) integral over 0..pi of max(0, 1 + m cos u) cos n u.
    angle = (np.arange(200_000) + 0.5) * (np.pi / 200_000)
    clipped = np.maximum(0, 1 + 1.2 * np.cos(angle))
    for harmonic in range(1, 6):
        expected = np.mean(clipped * np.cos(harmonic * angle))
        assert 2 * spectrum[harmonic * 1_000] == pytest.approx(2 * abs(expected), abs=2e-6)


def test_a_reversing_tone_turns_the_phase_and_keeps_a_pure_pair_of_sidebands() -> None:
    samples = signals.am(RATE_HZ, 1.0, level_dbfs=0, modulation=one_tone(1.2))
    assert samples.real.min() == pytest.approx(-0.2, abs=1e-6)
    assert line_db(samples, 2 * TONE_HZ) < -120


def test_true_peaks_lie_between_the_samples() -> None:
    frames = 480
    quarter_rate = np.cos(2 * np.pi * np.arange(frames) / 4 + np.pi / 4)  # every sample at 0.7071
    assert np.abs(quarter_rate).max() == pytest.approx(np.sqrt(0.5))
    assert signals.true_peaks(quarter_rate) == pytest.approx((1, 1), abs=1e-12)
    t = signals.times(RATE_HZ, 4_800)
    lopsided = signals.tone(0.5, 1_000, t) + signals.tone(0.25, 2_000, t)
    # cos u / 2 + cos 2u / 4: largest 3/4 at u = 0, smallest -3/8 at cos u = -1/2.
    assert signals.true_peaks(lopsided) == pytest.approx((0.75, 0.375), abs=1e-6)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_programme_has_the_true_peaks_it_states_and_keeps_to_its_band(seed: int) -> None:
    programme = signals.programme_like(RATE_HZ, 4.0, band_hz=4_500, negative_peak=0.9, seed=seed)
    finer = np.fft.irfft(np.fft.rfft(programme.modulation), 16 * len(programme.modulation)) * 16
    assert programme.negative_peak == 0.9
    assert -finer.min() == pytest.approx(0.9, abs=2e-4)
    assert finer.max() == pytest.approx(programme.positive_peak, abs=2e-4)
    assert programme.rms == pytest.approx(np.std(programme.modulation), rel=1e-6)
    assert 9 < 20 * np.log10(max(programme.positive_peak, 0.9) / programme.rms) < 17
    spectrum = np.abs(np.fft.rfft(programme.modulation))
    assert spectrum[4 * 4_500 + 1 :].max() < 1e-9 * spectrum.max()


def test_automatic_gain_holds_the_power_and_brings_up_the_noise_when_the_carrier_goes() -> None:
    samples = signals.am(RATE_HZ, 1.0, level_dbfs=-30, c_n0_dbhz=80, breaks=[(0.5, 1.0)])
    held = signals.automatic_gain(samples, RATE_HZ, level_dbfs=-10, time_s=0.05)
    assert held.dtype == np.complex64
    assert power_db(held[:24_000]) == pytest.approx(-10, abs=0.05)
    assert power_db(held[28_800:]) == pytest.approx(-10, abs=0.2)
    assert power_db(samples[28_800:]) < -60


@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg"])
def test_recorded_programme_is_brought_to_any_rate_with_its_truth(name: str) -> None:
    programme = signals.recorded_programme(name, RATE_HZ, 4.0, start_s=2.0, band_hz=4_000, negative_peak=0.8)
    assert len(programme.modulation) == 4 * 48_000
    positive, negative = signals.true_peaks(programme.modulation)
    assert (positive, negative) == pytest.approx((programme.positive_peak, 0.8), abs=1e-9)
    assert np.abs(np.fft.rfft(programme.modulation))[4 * 4_000 + 1 :].max() < 1e-6
    assert programme.rms > 0.02


def test_a_low_pass_that_does_not_fit_under_half_the_rate_is_refused() -> None:
    with pytest.raises(ValueError, match="below half the rate"):
        signals.low_passed(np.zeros(96_000), 96_000, 5_000, 9_000)
