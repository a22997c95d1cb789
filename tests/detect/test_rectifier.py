"""Rectifier with R and C: exact recursion, diagonal clipping where handbooks put it, rectifier means on a real IF."""

import numpy as np
import pytest

from monitord.detect.rectifier import PeakFollower
from tests import signals
from tests.runs import channel, run


def by_the_book(envelope: np.ndarray, keep: float) -> np.ndarray:
    """y[n] = max(x[n], a y[n-1]), sample by sample."""
    out, charge = np.empty_like(envelope), 0.0
    for index, value in enumerate(envelope):
        charge = out[index] = max(value, keep * charge)
    return out


def test_the_running_maximum_is_the_recursion_across_hops_and_through_zero() -> None:
    rng, rate_hz, frames = np.random.default_rng(2), 24_000.0, 600
    envelope = np.abs(rng.standard_normal((3, 5 * frames))).astype(np.float32)
    envelope[1, 700:900] = 0
    time_constants_s = np.array([1e-5, 1e-3, 0.05])
    follower = PeakFollower(time_constants_s, rate_hz, frames)
    hops = [follower.follow(part) for part in np.split(envelope, 5, axis=1)]
    for row, tau in enumerate(time_constants_s):
        expected = by_the_book(envelope[row].astype(float), np.exp(-1 / (rate_hz * tau)))
        np.testing.assert_allclose(np.concatenate(hops, axis=1)[row], expected, rtol=2e-6)


@pytest.mark.parametrize(
    ("depth", "tone_hz", "limit_us"),
    [
        (0.5, 1000, 275.664),
        (0.8, 5000, 23.873),
        (0.3, 1020, 496.157),
        (0.95, 1020, 51.286),
        (0.9, 5000, 15.416),
    ],
)
def test_e3_diagonal_clipping_begins_where_rc_exceeds_the_limit(
    depth: float, tone_hz: float, limit_us: float
) -> None:
    """RC <= sqrt(1 - m^2) / (m w); above it the capacitor stands above the envelope (CHECKS E3)."""
    assert np.sqrt(1 - depth**2) / (depth * 2 * np.pi * tone_hz) * 1e6 == pytest.approx(limit_us, abs=0.001)
    rate_hz = (
        4000 * tone_hz
    )  # many samples a period: the follower then loses at most 1/4000 of one between two
    turn = 2 * np.pi * np.arange(12_000) / 4000
    envelope = np.tile((1 + depth * np.cos(turn)).astype(np.float32), (2, 1))
    follower = PeakFollower(np.array([1.0, 1.2]) * limit_us * 1e-6, rate_hz, envelope.shape[1])
    excess = (follower.follow(envelope) - envelope)[:, 4000:].max(axis=1)
    assert excess[0] < 1e-4
    assert excess[1] > 0.005


def test_e3_how_far_the_capacitor_stands_above_the_envelope() -> None:
    """Excess at 1.00, 1.01, 1.05 and 1.20 times the limit: 0, 0.00065, 0.0065, 0.0407 (CHECKS E3, m = 0.5)."""
    limit_s, rate_hz = np.sqrt(1 - 0.5**2) / (0.5 * 2 * np.pi * 1000), 4e6
    turn = 2 * np.pi * np.arange(12_000) / 4000
    envelope = np.tile((1 + 0.5 * np.cos(turn)).astype(np.float32), (4, 1))
    follower = PeakFollower(np.array([1.0, 1.01, 1.05, 1.2]) * limit_s, rate_hz, envelope.shape[1])
    excess = (follower.follow(envelope) - envelope)[:, 4000:].max(axis=1)
    np.testing.assert_allclose(excess, [0, 0.00065, 0.0065, 0.0407], atol=1e-5, rtol=0.005)


def test_e4_rectifier_means_of_a_real_if() -> None:
    """Half wave 1/pi, fundamental 1/2, second 2/(3 pi); full wave 2/pi, 4/(3 pi), 4/(15 pi) (CHECKS E4)."""
    wave = signals.am(1_000_000.0, 0.02, carrier_hz=1000.0, level_dbfs=0.0, real=True).astype(float)
    turn = np.exp(-2j * np.pi * 1000 * np.arange(len(wave)) / 1e6)
    half, full = np.maximum(wave, 0), np.abs(wave)
    lines = [2 * abs(np.mean(half * turn)), 2 * abs(np.mean(half * turn**2))]
    np.testing.assert_allclose([half.mean(), *lines], [1 / np.pi, 0.5, 2 / (3 * np.pi)], atol=1e-5)
    lines = [2 * abs(np.mean(full * turn**2)), 2 * abs(np.mean(full * turn**4))]
    np.testing.assert_allclose(
        [full.mean(), *lines], [2 / np.pi, 4 / (3 * np.pi), 4 / (15 * np.pi)], atol=1e-5
    )


def test_a_long_time_constant_shows_as_distortion_and_a_short_one_does_not() -> None:
    """m = 0.8 at 1 kHz: the limit is 119 us."""
    wave = signals.am(
        24_000.0, 6.1, carrier_hz=1.0, modulation=lambda t: signals.tone(0.8, 1000.0, t), c_n0_dbhz=110
    )
    keys = {"carrier_hz": 0.0, "acquire_hz": 50, "detector": "rectifier"}
    channels = [
        channel(name="short", time_constant_s=1e-5, **keys),
        channel(name="long", time_constant_s=3e-4, **keys),
    ]
    kept = run(wave, 24_000.0, channels)
    assert kept.last("audio_thd_ratio", 0) < 0.003
    assert kept.last("audio_thd_ratio", 1) > 0.05
    assert kept.last("modulation_positive_peak_ratio", 0) == pytest.approx(0.8, abs=0.01)
    assert kept.last("modulation_negative_peak_ratio", 1) < 0.7
