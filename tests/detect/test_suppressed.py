"""Suppressed carrier: audio of known truth, the phase recovered from the sidebands, no word about a carrier."""

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
SECONDS = 12.2


def received(wave: np.ndarray, snr_density_db: float, offset_hz: float, seed: int = 3) -> np.ndarray:
    """0.1 of `wave`, `offset_hz` off; noise of a density that far below the power of its peak."""
    t = np.arange(len(wave)) / RATE_HZ
    noise = signals.noise(RATE_HZ, len(wave), 0.01 / 10 ** (snr_density_db / 10), np.random.default_rng(seed))
    return (0.1 * wave * np.exp(2j * np.pi * (offset_hz * t + 0.2)) + noise).astype(np.complex64)


def measured(wave: np.ndarray, **keys: object) -> Kept:
    one = channel(carrier_hz=0.0, acquire_hz=50, detector="suppressed-carrier", **keys)
    return run(wave, RATE_HZ, [one])


def tone(hz: float) -> np.ndarray:
    return signals.tone(1.0, hz, np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ)


def nothing_of_a_carrier(kept: Kept) -> None:
    names = [
        name for name in kept.readings[-1].values if name.startswith("carrier_") and "locked" not in name
    ]
    for name in names:
        assert np.isnan(kept.of(name)).all(), name
    assert not kept.events


@pytest.mark.parametrize("offset_hz", [0.0, 3.3, -48.0])
@pytest.mark.parametrize("snr_density_db", [70.0, 90.0])
def test_double_sideband_is_demodulated_with_the_phase_of_its_sidebands(
    offset_hz: float, snr_density_db: float
) -> None:
    """A tone scaled to its peak reads rms 1 / sqrt(2), within what its peak is lifted by noise: 4 sigma."""
    kept = measured(received(tone(1000.0), snr_density_db, offset_hz))
    sigma = np.sqrt(5300 / 10 ** (snr_density_db / 10))
    assert kept.last("modulation_rms_ratio") == pytest.approx(np.sqrt(0.5), abs=0.005 + 4 * sigma)
    assert all(reading.valid[0] for reading in kept.readings[2:-1])
    if snr_density_db > 80:
        assert kept.readings[-2].values["audio_thd_ratio"][0] < 0.003
        assert kept.readings[-2].values["audio_tone_hertz"][0] == pytest.approx(1000, abs=0.01)
    nothing_of_a_carrier(kept)


def test_programme_without_a_carrier_keeps_its_shape() -> None:
    made = signals.programme_like(RATE_HZ, 12.0, negative_peak=1.0, seed=4)
    kept = measured(received(made.modulation, 90.0, 7.0))
    truth = made.rms / max(made.positive_peak, made.negative_peak)
    assert np.mean(kept.of("modulation_rms_ratio")[8:11]) == pytest.approx(truth, rel=0.35)  # seconds differ
    peak = np.fmax(kept.of("modulation_positive_peak_ratio"), kept.of("modulation_negative_peak_ratio"))[-1]
    assert peak == pytest.approx(1.0, abs=0.01)
    nothing_of_a_carrier(kept)


@pytest.mark.parametrize(("sideband", "sign"), [("upper", 1), ("lower", -1)])
def test_one_sideband_without_a_carrier_is_taken_at_the_nominal_frequency(sideband: str, sign: int) -> None:
    t = np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ
    wave = np.exp(sign * 2j * np.pi * 700 * t)
    kept = measured(received(wave, 90.0, 0.0), sideband=sideband)
    assert kept.readings[-2].values["audio_tone_hertz"][0] == pytest.approx(700, abs=0.01)
    assert kept.readings[-2].values["audio_thd_ratio"][0] < 0.003
    nothing_of_a_carrier(kept)
    other = measured(received(np.conj(wave), 90.0, 0.0), sideband=sideband)
    assert np.isnan(other.of("audio_tone_hertz")).all()


def test_noise_alone_is_no_suppressed_carrier() -> None:
    noise = signals.noise(RATE_HZ, round(60 * RATE_HZ), 1e-7, np.random.default_rng(5))
    for sideband in ("both", "upper"):
        kept = measured(noise.astype(np.complex64), sideband=sideband)
        assert not any(moment.settled[0] for moment in kept.moments)
        assert not kept.events
