"""Noise, estimates and windows against the literature (numbers as in CHECKS section E).

E6 Rice 1944; E15 Rife and Boorstyn 1974; E17 Harris 1978.
"""

from collections.abc import Sequence

import numpy as np
import pytest
from scipy import special

from monitord.blocks import Baseband, Block
from monitord.condition.grid import STEPS
from monitord.condition.tuner import Tuner
from monitord.detect.averaging import TaperedMean
from monitord.detect.envelope import EnvelopeDetector
from monitord.detect.noise import QuadratureNoise
from monitord.settings import Channel
from monitord.stage import Bank
from tests import signals
from tests.runs import channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 12_000.0


def tuned(wave: np.ndarray, channels: Sequence[Channel]) -> tuple[list[Baseband], Bank]:
    """The hops of one bank, and the bank."""
    tuner = Tuner(RATE_HZ, 0.0, False, [channels])
    branch = tuner.branches[0]
    hops = [hop[0] for hop in tuner.process(Block(wave.astype(np.complex64), RATE_HZ, 0.0, 0, None))]
    return hops, Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {})


def test_e6_noise_alone_has_a_rayleigh_envelope_and_the_power_of_the_stated_bandwidth() -> None:
    """Mean over rms -1.0491 dB, mean of the logarithm -2.5068 dB, median power -1.5917 dB (CHECKS E6)."""
    density = 1e-6
    noise = signals.noise(RATE_HZ, round(40 * RATE_HZ), density, np.random.default_rng(66))
    hops, bank = tuned(noise, [channel(bandwidth_hz=4500.0)])
    envelope = np.abs(np.concatenate([hop.samples[0] for hop in hops[1:]])).astype(float)
    power = np.mean(envelope**2)
    assert power == pytest.approx(2 * bank.noise_hz * density, rel=0.01)
    assert 20 * np.log10(envelope.mean()) - 10 * np.log10(power) == pytest.approx(-1.0491, abs=0.02)
    assert np.mean(20 * np.log10(envelope)) - 10 * np.log10(power) == pytest.approx(-2.5068, abs=0.04)
    assert 10 * np.log10(np.median(envelope**2) / power) == pytest.approx(-1.5917, abs=0.04)


@pytest.mark.parametrize(
    ("cnr_db", "mean", "spread"),
    [
        (0, 1.281920, 0.597229),
        (3, 1.136538, 0.457677),
        (6, 1.065401, 0.340749),
        (10, 1.025341, 0.220625),
        (15, 1.007938, 0.125237),
        (20, 1.002503, 0.070622),
        (30, 1.000250, 0.022358),
    ],
)
def test_e6_the_mean_and_spread_of_an_envelope_in_noise(cnr_db: float, mean: float, spread: float) -> None:
    """Rice: E[r]/A and std/A at CNR = A^2 / 2 sigma^2, the CNR that of the channel's own noise bandwidth (E6)."""
    channels = [channel(bandwidth_hz=4500.0)]
    c_n0_dbhz = cnr_db + 10 * np.log10(2 * tuned(np.zeros(20_000), channels)[1].noise_hz)
    hops, bank = tuned(
        signals.am(RATE_HZ, 30.0, carrier_hz=CARRIER_HZ, c_n0_dbhz=c_n0_dbhz, seed=8), channels
    )
    detector = EnvelopeDetector()
    detector.prepare(bank)
    envelope = np.concatenate([detector.process(hop).in_phase[0] for hop in hops][12:])
    x = 10 ** (cnr_db / 10)
    laguerre = (1 + x) * special.ive(0, x / 2) + x * special.ive(1, x / 2)
    assert np.sqrt(np.pi / x) / 2 * laguerre == pytest.approx(mean, abs=1e-6)
    assert envelope.mean() == pytest.approx(mean, abs=max(0.02 * spread, 1e-3))
    assert envelope.std() == pytest.approx(spread, rel=0.02)


@pytest.mark.parametrize("depth", [0.0, 0.8])
@pytest.mark.parametrize("c_n0_dbhz", [50.0, 60.0, 80.0])
def test_e15_frequency_reaches_the_cramer_rao_bound(c_n0_dbhz: float, depth: float) -> None:
    """sd f = sqrt(6 / ((2 pi)^2 (C/N0) T^3)), 0.00123 Hz at 50 dB-Hz in 1 s (CHECKS E15): within 1.25 times."""
    wave = signals.am(
        16_000.0,
        152.0,
        carrier_hz=2_003.0,
        modulation=lambda t: signals.tone(depth, 300.0, t),
        c_n0_dbhz=c_n0_dbhz,
        seed=3,
    )
    kept = run(wave, 16_000.0, [channel(carrier_hz=2_000.0, bandwidth_hz=1_000)], block=16_000)
    error = kept.of("carrier_frequency_offset_hertz")[1:-1] - 3.0
    bound = np.sqrt(6 / ((2 * np.pi) ** 2 * 10 ** (c_n0_dbhz / 10)))
    # 150 readings: the rms itself scatters by 1/sqrt(300) = 6 %. It cannot be truly below the bound.
    assert 0.85 < np.sqrt(np.mean(error**2)) / bound < 1.25


@pytest.mark.parametrize("c_n0_dbhz", [50.0, 60.0])
def test_e15_level_scatters_as_a_hann_mean_must(c_n0_dbhz: float) -> None:
    """The bound is sd A/A = 1/sqrt(2 C/N0 T); a Hann taper has sqrt(1.5) of it (its noise bandwidth, CHECKS E17)."""
    wave = signals.am(4_000.0, 302.0, carrier_hz=803.0, c_n0_dbhz=c_n0_dbhz, seed=4)
    narrow = channel(carrier_hz=800.0, bandwidth_hz=300.0, emission_bandwidth_hz=300.0)
    kept = run(wave, 4_000.0, [narrow], block=16_000)
    amplitude = 10 ** ((kept.of("carrier_level_dbfs")[1:-1] + 20) / 20)
    expected = np.sqrt(1.5 / (2 * 10 ** (c_n0_dbhz / 10)))
    assert np.std(amplitude) / expected == pytest.approx(1, abs=0.12)  # three sigma of a spread from 300
    assert np.mean(amplitude) == pytest.approx(1, abs=3 * expected / np.sqrt(300))


def test_e17_the_taper_of_the_carriers_mean_is_a_hann_window() -> None:
    """Hann: noise bandwidth 1.5 bins (CHECKS E17): the variance of the mean of white noise is 1.5 of a plain mean's."""
    rng = np.random.default_rng(6)
    mean = TaperedMean(4000, STEPS * 4, 10, STEPS)
    everywhere = np.ones(4000, bool)
    for _ in range(10):
        mean.take(rng.standard_normal((4000, STEPS * 4), dtype=np.float32), everywhere)
    assert np.var(mean.mean) * STEPS * 40 == pytest.approx(1.5, rel=0.08)
    for _ in range(11):
        mean.take(np.ones((4000, STEPS * 4), np.float32), everywhere)
    np.testing.assert_allclose(mean.mean, 1.0, atol=1e-6)


def test_e17_the_noise_meter_allows_for_its_hann_window() -> None:
    """Hann: coherent gain 0.5, noise bandwidth 1.5 bins (CHECKS E17); both stand between the spectrum and a density.

    White quadrature of the variance v has the two-sided density v / rate; in-phase noise adds as much.
    """
    rate_hz, frames, variance = 24_000.0, 2400, 0.003
    meter = QuadratureNoise(rate_hz, frames, 5_100.0)
    white = np.random.default_rng(17).standard_normal((300, frames)) * np.sqrt(variance)
    median, mean = meter.density(1j * white.astype(np.float32))
    assert np.mean(median) == pytest.approx(2 * variance / rate_hz, rel=0.02)
    assert np.mean(mean) == pytest.approx(2 * variance / rate_hz, rel=0.02)


def test_a_50_hz_tone_does_not_move_the_carriers_mean() -> None:
    """A plain mean of 1 s errs by 0.04 dB under a 50 Hz tone of 90 % (computed); the taper must not by 0.0001."""
    rate_hz, frames = 24_000.0, 2400
    mean = TaperedMean(1, frames, 10, STEPS)
    for tone_hz in (20.3, 50.0, 49.7, 240.9, 481.3):
        t = np.arange(25 * frames) / rate_hz
        wave = (1 + 0.9 * np.cos(2 * np.pi * tone_hz * t + 0.4)).astype(np.float32)
        for part in wave.reshape(25, 1, frames):
            mean.take(part, np.ones(1, bool))
        assert 20 * np.log10(mean.mean[0]) == pytest.approx(0, abs=0.002)


@pytest.mark.parametrize("quadrature_db", [-60.0, -40.0, -30.0])
def test_what_lives_in_quadrature_is_not_taken_off_the_peaks(quadrature_db: float) -> None:
    """A 3 kHz wide signal in quadrature is no reception noise: a 50 % tone stays 50 % (closed form), within 0.003."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 5.0))
    other = signals.programme_like(RATE_HZ, 5.0, band_hz=3_000, seed=9)
    wave = 1 + signals.tone(0.5, 700.0, t) + 1j * 10 ** (quadrature_db / 20) * other.modulation / other.rms
    noise = np.random.default_rng(1).standard_normal((len(t), 2)) @ [1, 1j] * np.sqrt(RATE_HZ / 1e10 / 2)
    kept = run(0.1 * (wave * np.exp(2j * np.pi * (CARRIER_HZ + 3) * t) + noise), RATE_HZ)
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(0.5, abs=0.003)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(0.5, abs=0.003)
    assert kept.last("carrier_to_noise_density_dbhz") == pytest.approx(100, abs=0.5)
