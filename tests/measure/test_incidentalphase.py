"""Incidental phase against z = (1 + m) exp(j phi) of known phi."""

import numpy as np
import pytest

from tests import signals
from tests.measure.transmissions import BAND_HZ, RATE_HZ, kept, read, times

NAME = "incidental_phase_radians"
T = times(5.3)


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize("depth", [0.3, 0.9, 1.1])
@pytest.mark.parametrize("angle", [0.0, 1.0, 2.5])
def test_a_phase_at_the_programmes_tone_is_read_whatever_its_angle_to_it(
    detector: str, depth: float, angle: float
) -> None:
    """Rms p / sqrt(2); the mean carrier's own turn, which takes m^2/2 off, is put back."""
    phi = signals.tone(0.05, 700.0, T, angle)
    found = read(NAME, (1 + signals.tone(depth, 700.0, T)) * np.exp(1j * phi), detector=detector)
    np.testing.assert_allclose(found, 0.05 / np.sqrt(2), rtol=0.005)


def test_from_50_hz_on_the_carrier_loop_hardly_matters() -> None:
    """The loop's error response is 1 - j sqrt(2) fn/f, fn = 1.5 Hz: 0.04 rad of turn at 50 Hz, and no loss."""
    for angle in (0.0, 1.0, 2.5):
        phi = signals.tone(0.05, 50.0, T, angle)
        found = read(NAME, (1 + signals.tone(0.9, 50.0, T)) * np.exp(1j * phi))
        np.testing.assert_allclose(found, 0.05 / np.sqrt(2), rtol=0.03)


@pytest.mark.parametrize("c_n0_dbhz", [80, 100])
def test_a_phase_that_follows_a_programme_is_k_times_its_rms(c_n0_dbhz: float) -> None:
    m = signals.programme_like(RATE_HZ, 5.3, band_hz=BAND_HZ, seed=4).modulation
    found = read(NAME, (1 + m) * np.exp(0.1j * m), c_n0_dbhz)
    for second, value in enumerate(found, start=2):
        part = m[round(second * RATE_HZ) : round((second + 1) * RATE_HZ)]
        assert value == pytest.approx(0.1 * rms(part), rel=0.05)


def test_a_phase_delayed_by_a_millisecond_still_follows() -> None:
    """The turn over a band of 100 Hz loses 1 - sinc(0.1)^2 = 3 % of the power."""
    m = signals.programme_like(RATE_HZ, 5.3, band_hz=BAND_HZ, seed=4).modulation
    phi = 0.1 * np.roll(m, 12)
    found = read(NAME, (1 + m) * np.exp(1j * phi), 100)
    assert rms(found) == pytest.approx(rms(phi[24_000:60_000]), rel=0.06)


def test_noise_alone_leaves_a_floor_that_falls_with_it() -> None:
    """Each of K bands holds noise of one degree of freedom, b = 35/18 Hz x density; the sum scatters by b sqrt(K)."""
    m = signals.programme_like(RATE_HZ, 12.3, band_hz=BAND_HZ, seed=4).modulation
    for c_n0_dbhz in (80, 100):
        density = 10 ** (-c_n0_dbhz / 10)
        floor = np.sqrt(35 / 18 * density * np.sqrt(BAND_HZ / 100))
        found = read(NAME, 1 + m, c_n0_dbhz)
        assert np.all(found < 2.5 * floor)
    assert np.all(found < 1e-4)


def test_phase_noise_that_does_not_follow_is_not_counted() -> None:
    """0.03 rad of unrelated phase up to 1 kHz: chance leaves some sqrt(b sqrt(K)) of it, below a tenth."""
    m = signals.programme_like(RATE_HZ, 8.3, band_hz=BAND_HZ, seed=4).modulation
    other = signals.programme_like(RATE_HZ, 8.3, band_hz=1000.0, seed=99).modulation
    found = read(NAME, (1 + m) * np.exp(0.03j * other / rms(other)), 100)
    assert rms(found) < 0.1 * 0.03


def test_it_is_absent_without_programme_and_nothing_where_none_of_the_phase_follows_it() -> None:
    assert np.isnan(read(NAME, np.exp(signals.tone(0.01, 700.0, T) * 1j), 80)).all()
    other = read(NAME, (1 + signals.tone(0.5, 1500.0, T)) * np.exp(signals.tone(0.01, 700.0, T) * 1j), 80)
    assert np.all(other < 1e-3)


def test_it_is_absent_where_the_programme_takes_the_whole_carrier() -> None:
    """1 - P at most 0.2: a tone deeper than 126 %."""
    found = kept(1 + signals.tone(1.4, 700.0, T), 100)
    assert np.isnan(found.of(NAME)).all()
    assert np.isfinite(found.of("modulation_rms_ratio")[2:]).all()
