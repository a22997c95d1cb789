"""The largest of N normal variables (Tippett 1925; CHECKS E13) and the peaks that are corrected by it."""

import numpy as np
import pytest

from monitord.measure.noiselift import corrected_largest, lift
from tests import signals
from tests.runs import run

RATE_HZ = 48_000.0


@pytest.mark.parametrize(
    ("count", "expected"),
    [
        (1, 0.0),
        (2, 1 / np.sqrt(np.pi)),
        (100, 2.5076),
        (1000, 3.2414),
        (1e4, 3.8516),
        (1e5, 4.3843),
        (1e6, 4.8629),
    ],
)
def test_e13_expected_largest_of_n(count: float, expected: float) -> None:
    assert lift(np.array([count]))[0] == pytest.approx(expected, abs=1e-4)


@pytest.mark.parametrize("count", [3, 7, 20, 300, 3000])
def test_between_the_tabled_counts_it_is_right_within_a_twentieth_of_sigma(count: int) -> None:
    rng = np.random.default_rng(count)
    simulated = np.mean([rng.standard_normal(count).max() for _ in range(8000)])
    assert lift(np.array([float(count)]))[0] == pytest.approx(simulated, abs=0.05)


def test_a_lone_peak_is_left_as_it_is() -> None:
    peaks = np.full((100, 1), 0.5)
    peaks[40] = 0.9
    assert corrected_largest(peaks, np.ones((100, 1)), np.array([0.01]))[0] == 0.9


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
