"""The accuracy that the project promises, against signals of known truth (tests/signals.py, closed form)."""

import numpy as np
import pytest

from tests import signals
from tests.runs import channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 12_000.0


@pytest.mark.parametrize("real", [False, True], ids=["iq", "real-if"])
@pytest.mark.parametrize(
    ("depth", "tone_hz", "offset_hz"),
    [
        (0.30, 1000.0, 0.0),
        (0.30, 4999.3, 37.31),
        (0.50, 20.0, -2.4),
        (0.90, 50.0, 3.21),
        (0.95, 4000.0, -96.7),
        (1.00, 400.0, 12.3),
        (1.20, 317.0, 96.7),
        (1.20, 5000.0, -0.013),
    ],
)
def test_a_tone_reads_its_depth_level_and_offset(
    depth: float, tone_hz: float, offset_hz: float, real: bool
) -> None:
    """At C/N0 105 dB-Hz: both peaks within 0.005, rms within 0.002, level within 0.02 dB, offset within 0.005 Hz."""
    wave = signals.am(
        RATE_HZ,
        6.1,
        carrier_hz=CARRIER_HZ + offset_hz,
        level_dbfs=-23.0,
        modulation=lambda t: signals.tone(depth, tone_hz, t, 0.7),
        c_n0_dbhz=105,
        real=real,
    )
    kept = run(wave, RATE_HZ)
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(depth, abs=0.005)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(depth, abs=0.005)
    for reading in kept.readings[1:]:
        assert reading.valid[0]
        assert reading.values["modulation_rms_ratio"][0] == pytest.approx(depth / np.sqrt(2), abs=0.002)
        assert reading.values["carrier_level_dbfs"][0] == pytest.approx(-23.0, abs=0.02)
        assert reading.values["carrier_frequency_offset_hertz"][0] == pytest.approx(offset_hz, abs=0.005)
        assert reading.values["carrier_to_noise_density_dbhz"][0] == pytest.approx(105, abs=0.5)


@pytest.mark.parametrize("rate_hz", [12001.1323, 44_100.0, 96_000.0, 192_000.0, 250_000.0])
def test_any_sample_rate_reads_the_same(rate_hz: float) -> None:
    carrier_hz = 0.07 * rate_hz
    wave = signals.am(
        rate_hz,
        4.2,
        carrier_hz=carrier_hz - 13.3,
        modulation=lambda t: signals.tone(0.8, 700.0, t),
        c_n0_dbhz=105,
    )
    bandwidth_hz = min(5000.0, rate_hz / 2 - carrier_hz - 110)
    kept = run(wave, rate_hz, [channel(carrier_hz=carrier_hz, bandwidth_hz=bandwidth_hz)])
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(0.8, abs=0.005)
    assert kept.last("carrier_level_dbfs") == pytest.approx(-20.0, abs=0.02)
    assert kept.last("carrier_frequency_offset_hertz") == pytest.approx(-13.3, abs=0.005)


def test_programme_of_known_true_peaks_is_read_within_a_hundredth() -> None:
    """True peak 90 %, C/N0 100 dB-Hz, band-limited to the channel: both peaks within 0.01 in 95 % of trials."""
    good, trials = 0, 24
    for seed in range(trials):
        programme = signals.programme_like(RATE_HZ, 4.0, band_hz=5000.0, negative_peak=0.9, seed=seed)
        modulation = np.tile(programme.modulation, 2)
        wave = signals.am(
            RATE_HZ, 8.0, carrier_hz=CARRIER_HZ + 5.0, modulation=modulation, c_n0_dbhz=100, seed=100 + seed
        )
        kept = run(wave, RATE_HZ)
        errors = (
            kept.last("modulation_positive_peak_ratio") - programme.positive_peak,
            kept.last("modulation_negative_peak_ratio") - programme.negative_peak,
        )
        good += max(map(abs, errors)) < 0.01
    assert good >= 0.95 * trials


@pytest.mark.parametrize(
    ("offset_hz", "acquire_hz"), [(0.0, 100), (-99.0, 100), (61.0, 100), (-990.0, 1000), (990.0, 1000)]
)
def test_the_carrier_is_acquired_within_a_second(offset_hz: float, acquire_hz: float) -> None:
    """C/N0 50 dB-Hz, offset up to the acquisition range."""
    for seed in range(3):
        wave = signals.am(
            RATE_HZ,
            3.2,
            carrier_hz=CARRIER_HZ + offset_hz,
            modulation=lambda t: signals.tone(0.8, 400.0, t),
            c_n0_dbhz=50,
            seed=seed,
        )
        kept = run(wave, RATE_HZ, [channel(acquire_hz=acquire_hz)])
        locked = [moment.span.elapsed_s for moment in kept.moments if moment.locked[0]]
        assert locked[0] <= 1.0
        assert all(moment.locked[0] for moment in kept.moments if moment.span.elapsed_s > 1.0)
        # Six times the Cramer-Rao bound of 0.0012 Hz for 1 s (CHECKS E15).
        assert kept.last("carrier_frequency_offset_hertz") == pytest.approx(offset_hz, abs=0.0074)


def test_noise_alone_is_never_a_carrier() -> None:
    """An hour and more of noise, on thirteen channels: never locked for more than 0.1 s, nothing present."""
    rng, rate_hz = np.random.default_rng(11), 8_000.0
    channels = [
        channel(name=f"c{k}", carrier_hz=-3000 + 500 * k, bandwidth_hz=300, emission_bandwidth_hz=300)
        for k in range(13)
    ]
    noise = rng.standard_normal((round(300 * rate_hz), 2), dtype=np.float32).view(np.complex64)[:, 0]
    kept = run(0.1 * noise, rate_hz, channels, block=16_000)
    longest = run_length = np.zeros(13, int)
    for moment in kept.moments:
        run_length = np.where(moment.locked, run_length + 1, 0)
        longest = np.maximum(longest, run_length)
        assert not np.any(moment.present == 1)
    assert longest.max() <= 1
    assert kept.kinds() == ["carrier-loss"] * 13
    assert not any(reading.valid.any() for reading in kept.readings)


def test_recurring_peaks_are_absent_for_a_minute_and_a_stray_burst_is_not_recurring() -> None:
    rate_hz = 16_000.0

    def modulation(t: np.ndarray) -> np.ndarray:
        return np.where((t > 30) & (t < 30.5), 0.9, 0.5) * np.cos(2 * np.pi * 500 * t)

    wave = signals.am(rate_hz, 64.2, carrier_hz=2000.0, modulation=modulation, c_n0_dbhz=100)
    kept = run(wave, rate_hz, [channel(carrier_hz=2000.0, bandwidth_hz=3000)], block=16_000)
    recurring = kept.of("modulation_recurring_negative_peak_ratio")
    assert np.isnan(recurring[:60]).all()
    np.testing.assert_allclose(recurring[62:], 0.5, atol=0.01)
    peaks = kept.of("modulation_negative_peak_ratio")
    np.testing.assert_allclose(peaks[31:39], 0.9, atol=0.01)  # seen for ten seconds
    np.testing.assert_allclose(peaks[42:60], 0.5, atol=0.01)
