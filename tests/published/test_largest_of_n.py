"""The largest of N normal variables (Tippett 1925; CHECKS E13) and the peaks that are corrected by it."""

from math import erfc, sqrt

import numpy as np
import pytest

from monitord.measure.noiselift import largest, lift
from tests import signals
from tests.runs import run

RATE_HZ = 48_000.0
EQUAL, UNEQUAL = np.array([1.0]), np.array([0.0])


def tail(z: float) -> float:
    return erfc(z / sqrt(2)) / 2


@pytest.mark.parametrize(("count", "expected"), [(1000, 3.2414), (1e4, 3.8516), (1e5, 4.3843), (1e6, 4.8629)])
def test_e13_equal_tops_are_lifted_by_the_expected_largest_of_n(count: float, expected: float) -> None:
    """Of N normals, N Q(z - k) stand within k sigma of a largest at z."""
    near = np.array([[count * tail(expected - 1)], [count * tail(expected - 3)]])
    assert lift(near, EQUAL)[0] == pytest.approx(expected, abs=0.005)


@pytest.mark.parametrize("count", [300, 3000, 30_000])
def test_equal_tops_are_brought_back_to_their_height(count: int) -> None:
    """Simulated: N normals, of which the largest is taken and those near it are counted."""
    rng, errors = np.random.default_rng(count), []
    for _ in range(400):
        noise = rng.standard_normal(count)
        near = np.array([[np.sum(noise > noise.max() - k)] for k in (1.0, 3.0)], float)
        errors.append(noise.max() - lift(near, EQUAL)[0])
    # Four standard errors, and a quarter of sigma: the ratio of two counts is biased where the first is small.
    assert np.mean(errors) == pytest.approx(0, abs=0.25 + 4 * np.std(errors) / 20)


def test_a_lone_peak_is_left_nearly_as_it_is() -> None:
    peaks, near = np.full((100, 1), 0.5), np.ones((100, 2, 1))
    peaks[40] = 0.9
    top = largest(peaks, near, np.array([0.01]), np.array([0.2]))
    assert (top.peak[0], top.equal[0]) == (0.9, 0.0)
    assert lift(top.near, top.equal)[0] < 0.2


def test_slots_that_scatter_by_noise_alone_and_have_a_tones_crest_are_a_tones() -> None:
    rng = np.random.default_rng(1)
    slots = 0.9 + 0.01 * rng.standard_normal((100, 40, 100)).max(axis=2)
    near = np.ones((100, 2, 40))
    sigma, tone, programme = np.full(40, 0.01), np.full(40, 0.9 / sqrt(2)), np.full(40, 0.2)
    assert largest(slots, near, sigma, tone).equal.min() == 1
    assert largest(slots, near, sigma, programme).equal.max() == 0
    assert largest(slots * np.linspace(0.9, 1, 100)[:, None], near, sigma, tone).equal.max() == 0


@pytest.mark.parametrize(("c_n0_dbhz", "within"), [(100.0, 0.003), (80.0, 0.01), (70.0, 0.03)])
@pytest.mark.parametrize("tone_hz", [50.0, 400.0, 1000.0])
def test_noise_is_taken_off_the_peaks_of_a_tone(tone_hz: float, c_n0_dbhz: float, within: float) -> None:
    wave = signals.am(
        RATE_HZ,
        12.0,
        carrier_hz=12_003.0,
        modulation=lambda t: signals.tone(0.8, tone_hz, t),
        c_n0_dbhz=c_n0_dbhz,
    )
    kept = run(wave, RATE_HZ)
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(0.8, abs=within)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(0.8, abs=within)
