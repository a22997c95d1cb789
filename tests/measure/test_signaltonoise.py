"""Signal-to-noise under tone and programme, second by second."""

import numpy as np
import pytest

from tests import signals
from tests.measure.transmissions import BAND_HZ, RATE_HZ, read, times

NAME = "audio_signal_to_noise_db"


@pytest.mark.parametrize(("c_n0_dbhz", "within_db"), [(100, 0.5), (80, 0.5), (70, 0.7)])
@pytest.mark.parametrize("kind", ["tone", "programme"])
def test_nineteen_of_twenty_seconds_are_right(kind: str, c_n0_dbhz: float, within_db: float) -> None:
    seconds = 42.3
    t = times(seconds)
    m = (
        signals.tone(0.4, 700.0, t)
        if kind == "tone"
        else signals.programme_like(RATE_HZ, seconds, band_hz=BAND_HZ, seed=7).modulation
    )
    found = read(NAME, 1 + m, c_n0_dbhz)
    power = np.square(m)[: 42 * 12_000].reshape(42, -1).mean(axis=1)[2:]
    truth = 10 * np.log10(power) + c_n0_dbhz - 10 * np.log10(BAND_HZ)
    error = np.abs(found - truth)
    print(f"{kind} {c_n0_dbhz}: 95 % within {np.quantile(error, 0.95):.2f} dB, worst {error.max():.2f} dB")
    assert np.mean(error <= within_db) >= 0.95


@pytest.mark.parametrize("k", [0.01, 0.05])
def test_incidental_phase_is_not_taken_for_reception_noise(k: float) -> None:
    """Phase of k times the programme: at C/N0 100 dB-Hz it stands 8 or 22 dB above the noise."""
    m = signals.programme_like(RATE_HZ, 22.3, band_hz=BAND_HZ, seed=7).modulation
    found = read(NAME, (1 + m) * np.exp(1j * k * m), 100)
    power = np.square(m)[: 22 * 12_000].reshape(22, -1).mean(axis=1)[2:]
    error = np.abs(found - 10 * np.log10(power) - 100 + 10 * np.log10(BAND_HZ))
    print(f"k {k}: 95 % within {np.quantile(error, 0.95):.2f} dB, worst {error.max():.2f} dB")
    assert np.quantile(error, 0.95) < 0.7


def test_an_envelope_detector_has_the_same() -> None:
    m = signals.tone(0.4, 700.0, times(4.3))
    synchronous = read(NAME, 1 + m, 80)
    np.testing.assert_allclose(read(NAME, 1 + m, 80, detector="envelope"), synchronous, atol=1e-3)


def test_it_is_absent_without_programme() -> None:
    assert np.isnan(read(NAME, np.ones(len(times(6.3))), 80)).all()
