"""Channels that fade, as published (Watterson model; ITU-R F.1487, F.520; CHECKS B15 to B17): what may still be said.

A transmitter of 80 % modulation, mean C/N0 90 dB-Hz, by skywave.
"""

import numpy as np
import pytest

from monitord.blocks import Fault
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
SECONDS = 300.0
FADING = np.uint32(Fault.FADING)


def programme(seed: int, seconds: float) -> tuple[np.ndarray, float]:
    made = signals.programme_like(RATE_HZ, 10.0, negative_peak=0.8, seed=seed)
    return np.resize(made.modulation, round(seconds * RATE_HZ)), made.positive_peak


def tone(seconds: float, depth: float = 0.8, tone_hz: float = 400.0) -> np.ndarray:
    return signals.tone(depth, tone_hz, np.arange(round(seconds * RATE_HZ)) / RATE_HZ)


def by_skywave(modulation: np.ndarray, delay_s: float, spread_hz: float, seed: int) -> Kept:
    clean = 0.1 * (1 + modulation) * np.exp(2j * np.pi * 2.3 * np.arange(len(modulation)) / RATE_HZ)
    wave = signals.by_skywave(clean, RATE_HZ, delay_s, spread_hz, seed)
    wave += signals.noise(RATE_HZ, len(wave), 0.01 / 1e9, np.random.default_rng(seed + 50))
    return run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50, loss_after_s=30)], block=24_000)


def test_the_paths_are_rayleigh_paths_of_the_stated_spread() -> None:
    """B19: 9.5 % of the time 10 dB below the mean power; B16: the spectrum's 2-sigma width is the spread."""
    gain = signals.fading_path(50.0, 500_000, 1.0, np.random.default_rng(4))
    power = np.abs(gain) ** 2
    assert power.mean() == pytest.approx(1.0, rel=0.05)
    assert np.mean(power < 0.1 * power.mean()) == pytest.approx(0.09516, abs=0.008)
    frequency = np.fft.fftfreq(len(gain), 1 / 50.0)
    spectrum = np.abs(np.fft.fft(gain)) ** 2
    sigma_hz = np.sqrt(np.sum(spectrum * frequency**2) / np.sum(spectrum))
    assert 2 * sigma_hz == pytest.approx(1.0, rel=0.05)


@pytest.mark.parametrize(
    ("delay_s", "spread_hz"), [(0.5e-3, 0.1), (1e-3, 0.5), (2e-3, 1.0)], ids=["good", "moderate", "poor"]
)
@pytest.mark.parametrize("kind", ["programme", "tone"])
def test_selective_fading_raises_no_overmodulation_and_its_depth_is_not_trusted(
    kind: str, delay_s: float, spread_hz: float
) -> None:
    modulation, positive = programme(3, SECONDS) if kind == "programme" else (tone(SECONDS), 0.8)
    kept = by_skywave(modulation, delay_s, spread_hz, seed=3)
    assert not [kind for kind in kept.kinds() if kind.startswith("overmodulation")]
    assert np.mean([reading.faults[0] & FADING > 0 for reading in kept.readings]) > 0.9
    valid = np.array([reading.valid[0] for reading in kept.readings])
    wrong = np.abs(kept.of("modulation_positive_peak_ratio") - positive) > 0.05
    wrong |= np.abs(kept.of("modulation_negative_peak_ratio") - 0.8) > 0.05
    assert np.sum(valid & wrong) <= max(1, 0.1 * valid.sum())


def test_flat_fading_is_followed() -> None:
    """One path, 0.1 Hz: most seconds stay valid, and nine in ten of them are right."""
    kept = by_skywave(tone(SECONDS), 0.0, 0.1, seed=1)
    valid = np.array([reading.valid[0] for reading in kept.readings])
    assert valid.mean() >= 0.8
    for name in ("modulation_positive_peak_ratio", "modulation_negative_peak_ratio"):
        assert np.mean(np.abs(kept.of(name)[valid] - 0.8) <= 0.05) >= 0.9
    assert not kept.events


def test_a_passage_of_130_percent_right_after_a_fade_is_told() -> None:
    modulation = np.concatenate([tone(16.0), tone(0.3, 1.3), tone(4.0)])
    time_s = np.arange(len(modulation)) / RATE_HZ
    fade_db = -25 * np.clip(1 - np.abs(time_s - 13.5) / 2.5, 0, 1)  # over half a second before the passage
    wave = 0.1 * 10 ** (fade_db / 20) * (1 + modulation) + signals.noise(
        RATE_HZ, len(modulation), 0.01 / 1e9, np.random.default_rng(2)
    )
    kept = run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50, loss_after_s=30)])
    assert sorted(kept.kinds()) == ["overmodulation-negative", "overmodulation-positive"]
    assert all(abs(event.started_s - 16.0) < 0.3 for event in kept.events)


def test_a_transmitters_own_phase_modulation_is_no_fading() -> None:
    phase = 0.2 * tone(15.0) / 0.8
    wave = 0.1 * (1 + tone(15.0)) * np.exp(1j * phase)
    wave = wave + signals.noise(RATE_HZ, len(wave), 0.01 / 1e9, np.random.default_rng(2))
    kept = run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50)])
    assert not any(reading.faults[0] & FADING for reading in kept.readings[5:])
