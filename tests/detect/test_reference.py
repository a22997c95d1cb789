"""What depth refers to: a carrier that moves with the programme, and the unmodulated one of the last pause."""

import numpy as np
import pytest

from tests import signals
from tests.runs import channel, run
from tests.test_settings import channel_with, only_problem

RATE_HZ = 24_000.0


def received(envelope: np.ndarray, seed: int = 1, c_n0_dbhz: float = 95.0) -> np.ndarray:
    noise = signals.noise(RATE_HZ, len(envelope), 0.01 / 10 ** (c_n0_dbhz / 10), np.random.default_rng(seed))
    return 0.1 * envelope * np.exp(2j * np.pi * 3.0 * np.arange(len(envelope)) / RATE_HZ) + noise


def times(seconds: float) -> np.ndarray:
    return np.arange(round(seconds * RATE_HZ)) / RATE_HZ


@pytest.mark.parametrize("depth", [0.3, 0.8])
def test_depth_refers_to_the_carrier_that_moves_with_the_programme(depth: float) -> None:
    """Carrier between 100 and 60 % once in four seconds, a tone whose depth over that carrier stays the same.

    Within 0.1 s the carrier moves by 0.05 at most, so depth is exact to (1 + m) 0.03.
    """
    t = times(12.0)
    carrier = 0.8 + 0.2 * np.cos(2 * np.pi * t / 4)
    wave = received(carrier * (1 + signals.tone(depth, 1000.0, t)))
    kept = run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50, carrier_control=True)])
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(depth, abs=(1 + depth) * 0.035)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(depth, abs=(1 - depth) * 0.035 + 0.01)
    assert all(reading.valid[0] for reading in kept.readings[1:])
    assert not kept.events


def test_overmodulation_of_a_carrier_that_moves_is_told() -> None:
    t = times(8.0)
    carrier = 0.8 + 0.2 * np.cos(2 * np.pi * t / 4)
    depth = np.where((t > 5.0) & (t < 5.3), 1.1, 0.8)
    wave = received(carrier * (1 + depth * np.cos(2 * np.pi * 1000 * t)))
    kept = run(wave, RATE_HZ, [channel(carrier_hz=0.0, acquire_hz=50, carrier_control=True)])
    assert kept.kinds() == ["overmodulation-negative"]


@pytest.mark.parametrize("depth", [1.25, 1.5])
def test_e11_depth_of_a_transmitter_that_cuts_off_refers_to_the_carrier_of_the_pause(depth: float) -> None:
    """Pinched off, the mean carrier rises by 3.39 or 8.82 % (CHECKS E11); the positive peak is m all the same."""
    t = times(16.0)
    envelope = np.where(t < 3.0, 1.0, 1 + signals.tone(depth, 200.0, t, -np.pi / 2))
    envelope = signals.low_passed(np.maximum(envelope, 0), RATE_HZ, 5000.0, len(t))
    keys = {"carrier_hz": 0.0, "acquire_hz": 50}
    channels = [
        channel(name="unmodulated", depth_reference="unmodulated", **keys),
        channel(name="present", **keys),
    ]
    kept = run(received(envelope), RATE_HZ, channels)
    shift = {1.25: 0.033900, 1.5: 0.088161}[depth]
    assert kept.last("modulation_positive_peak_ratio", 0) == pytest.approx(depth, abs=0.01)
    assert kept.last("modulation_positive_peak_ratio", 1) == pytest.approx(
        (1 + depth) / (1 + shift) - 1, abs=0.01
    )
    assert kept.last("modulation_negative_peak_ratio", 0) == pytest.approx(1.0, abs=0.02)
    level_db = 20 * np.log10(0.1 * (1 + shift))
    assert kept.last("carrier_level_dbfs", 0) == pytest.approx(level_db, abs=0.02)
    assert kept.last("carrier_level_dbfs", 1) == pytest.approx(level_db, abs=0.02)


def test_a_carrier_that_moves_has_no_unmodulated_level_to_refer_to() -> None:
    text = channel_with('carrier_control = true\ndepth_reference = "unmodulated"')
    assert only_problem(text).startswith('channel[0].depth_reference = "unmodulated": must be "present"')
