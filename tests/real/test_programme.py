"""Real programme on a simulated transmitter: speech, music and dense music, their true peaks known exactly."""

import numpy as np
import pytest

from tests import data, signals
from tests.runs import run

RATE_HZ = 48_000.0


@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg"])
def test_peaks_of_real_programme_are_read_within_a_hundredth(name: str) -> None:
    """Band-limited to 5 kHz by FFT, negative true peak 90 % by 32-times interpolation; C/N0 100 dB-Hz."""
    data.path(f"programme/{name}")
    programme = signals.recorded_programme(name, RATE_HZ, 8.0, negative_peak=0.9)
    modulation = np.roll(programme.modulation, round(4 * RATE_HZ))
    wave = signals.am(
        RATE_HZ, 16.0, carrier_hz=11_990.0, modulation=np.tile(modulation, 2), c_n0_dbhz=100, seed=12
    )
    kept = run(wave, RATE_HZ)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(programme.negative_peak, abs=0.01)
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(programme.positive_peak, abs=0.01)
    rms = np.sqrt(np.nanmean(kept.of("modulation_rms_ratio")[8:] ** 2))
    assert rms == pytest.approx(programme.rms, rel=0.03)
