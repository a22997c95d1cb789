"""One sideband beside its carrier: depth as of both, the other side dodged, its own events and noise."""

import numpy as np
import pytest

from monitord.detect.sideband import hilbert_taps, reach_for
from tests import signals
from tests.runs import channel, run

RATE_HZ = 24_000.0
SECONDS = 13.0


def received(envelope: np.ndarray, c_n0_dbhz: float = 105.0) -> np.ndarray:
    t = np.arange(len(envelope)) / RATE_HZ
    noise = signals.noise(RATE_HZ, len(envelope), 0.01 / 10 ** (c_n0_dbhz / 10), np.random.default_rng(3))
    return 0.1 * envelope * np.exp(2j * np.pi * 3.7 * t) + noise


def sides(depth: float, hz: float, upper: float, lower: float) -> np.ndarray:
    """1 + depth/2 of each sideband, times `upper` and `lower`."""
    turn = np.exp(2j * np.pi * hz * np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ)
    return 1 + depth / 2 * (upper * turn + lower * np.conj(turn))


def channels(*detectors: str) -> list[object]:
    return [channel(name=name, carrier_hz=0.0, acquire_hz=50, detector=name) for name in detectors]


ALL = ("upper-sideband", "lower-sideband", "synchronous")


@pytest.mark.parametrize("tone_hz", [150.0, 400.0, 1000.0, 4900.0])
@pytest.mark.parametrize("depth", [0.3, 0.9])
def test_depth_of_both_sidebands_reads_the_same_by_either(depth: float, tone_hz: float) -> None:
    kept = run(received(sides(depth, tone_hz, 1, 1)), RATE_HZ, channels(*ALL))
    for row in range(3):
        assert kept.last("modulation_positive_peak_ratio", row) == pytest.approx(depth, abs=0.005)
        assert kept.last("modulation_negative_peak_ratio", row) == pytest.approx(depth, abs=0.005)
        assert kept.last("modulation_rms_ratio", row) == pytest.approx(depth / np.sqrt(2), abs=0.002)


@pytest.mark.parametrize("g", [0.9, 0.7079, 0.5])
def test_e8_each_sideband_reads_its_own_depth_and_synchronous_detection_their_mean(g: float) -> None:
    """a1 = m (1 + g) / 2 for synchronous detection, pure (CHECKS E8); m and m g for the sidebands."""
    kept = run(received(sides(0.5, 1000.0, 1, g)), RATE_HZ, channels(*ALL))
    for row, depth in enumerate((0.5, 0.5 * g, 0.5 * (1 + g) / 2)):
        assert kept.last("modulation_positive_peak_ratio", row) == pytest.approx(depth, abs=0.004)


@pytest.mark.parametrize("psi_deg", [10.0, 30.0, 45.0])
def test_e9_a_turned_carrier_costs_a_sideband_nothing(psi_deg: float) -> None:
    """Carrier turned by psi against its sidebands: synchronous 0.5 cos psi (CHECKS E9); one sideband 0.5."""
    turn = np.exp(1j * np.radians(psi_deg))
    envelope = 1 + turn * (sides(0.5, 1000.0, 1, 1) - 1)
    kept = run(received(envelope), RATE_HZ, channels(*ALL))
    for row, depth in enumerate((0.5, 0.5, 0.5 * np.cos(np.radians(psi_deg)))):
        assert kept.last("modulation_rms_ratio", row) == pytest.approx(depth / np.sqrt(2), abs=0.002)


@pytest.mark.parametrize(("offset_hz", "down_db"), [(150.0, 45.0), (700.0, 60.0), (3000.0, 60.0)])
def test_what_is_on_the_other_side_is_dodged(offset_hz: float, down_db: float) -> None:
    """A lone line of 0.2 below the carrier. Near it the loop (5 Hz) follows a little, and that is on both sides.

    Type 2 loop above its bandwidth: 2 zeta wn / w = 0.014 at 150 Hz, of a phase of 0.2: sidebands of 0.0014 each.
    """
    kept = run(
        received(sides(0.4, offset_hz, 0, 1), 120.0), RATE_HZ, channels("upper-sideband", "lower-sideband")
    )
    assert kept.last("modulation_rms_ratio", 1) == pytest.approx(0.4 / np.sqrt(2), abs=0.002)
    assert kept.last("modulation_rms_ratio", 0) < 0.4 / np.sqrt(2) * 10 ** (-down_db / 20)


def test_a_beacon_of_carrier_and_one_sideband_is_measured_and_valid() -> None:
    kept = run(received(sides(0.9, 1020.0, 1, 0), 80.0), RATE_HZ, channels("upper-sideband"))
    assert all(reading.valid[0] for reading in kept.readings[1:])
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(0.9, abs=0.01)
    assert kept.last("carrier_to_noise_density_dbhz") == pytest.approx(80, abs=1)
    assert not kept.events


def test_over_modulation_is_told_at_its_time() -> None:
    t = np.arange(round(5 * RATE_HZ)) / RATE_HZ
    depth = np.where((t > 3.0) & (t < 3.2), 1.1, 0.6)
    kept = run(received(1 + depth * np.cos(2 * np.pi * 1000 * t), 90.0), RATE_HZ, channels("upper-sideband"))
    assert kept.kinds() == ["overmodulation-negative"]
    assert kept.events[0].started_s == pytest.approx(3.0, abs=0.003)
    assert kept.events[0].ended_s == pytest.approx(3.2, abs=0.003)


def test_noise_of_both_quadratures_is_taken_off() -> None:
    """White noise of N0: in phase N0 B, in one sideband's output 2 N0 B; rms 0.3 / sqrt(2) all the same."""
    kept = run(received(sides(0.3, 1000.0, 1, 1), 75.0), RATE_HZ, channels("upper-sideband", "synchronous"))
    for row in range(2):
        assert np.mean(kept.of("modulation_rms_ratio", row)[2:]) == pytest.approx(0.3 / np.sqrt(2), abs=0.002)


def test_the_transformer_is_flat_from_its_lowest_frequency_on() -> None:
    reach = reach_for(100.0, RATE_HZ)
    taps = hilbert_taps(reach)
    hz = np.linspace(100, 6000, 300)
    response = np.exp(-2j * np.pi * np.outer(hz, np.arange(-reach, reach + 1)) / RATE_HZ) @ taps
    np.testing.assert_allclose(response, -1j, atol=10 ** (-66 / 20))
