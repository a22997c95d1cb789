"""A co-channel carrier makes the level uncertain by what of its beat the carrier's mean lets through."""

import numpy as np
import pytest

from monitord.measure.cochannel import passed
from tests import signals
from tests.runs import channel, run

RATE_HZ = 16_000.0


@pytest.mark.parametrize("offset_hz", [0.0, 0.4, 1.0, 1.3, 2.5, 5.3])
def test_the_window_passes_what_its_transform_says(offset_hz: float) -> None:
    """Mean of a cosine under a Hann window of 1 s, the worst phase; summed, not from the formula."""
    t = (np.arange(100_000) + 0.5) / 100_000
    window = 1 - np.cos(2 * np.pi * t)
    truth = abs(np.mean(window * np.exp(2j * np.pi * offset_hz * t)))
    assert passed(np.array([offset_hz]), 1.0)[0] == pytest.approx(truth, abs=1e-6)


def test_the_level_beside_a_co_channel_carrier_stays_inside_its_interval() -> None:
    """-30 dB at 1.4 Hz: 0.0316 x 0.226 in amplitude, +-0.06 dB; noise of 90 dB-Hz alone 0.0005 dB."""
    frames = round(90 * RATE_HZ)
    t = np.arange(frames) / RATE_HZ
    beat = 10 ** (-30 / 20) * np.exp(2j * np.pi * 1.4 * t)
    noise = signals.noise(RATE_HZ, frames, 0.01 / 1e9, np.random.default_rng(3))
    wave = 0.1 * (1 + signals.tone(0.5, 400.0, t) + beat) + noise
    kept = run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50, bandwidth_hz=3000)], block=16_000)
    error = np.abs(kept.of("carrier_level_dbfs") + 20)[70:]
    width = kept.of("carrier_level_uncertainty_db")[70:]
    assert np.mean(error <= width) >= 0.9
    assert width.max() < 0.1
    assert error.max() > 0.01
