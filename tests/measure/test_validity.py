"""Faults that say why a reading is not to be trusted."""

import numpy as np

from monitord.blocks import Fault
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
KEYS = {"carrier_hz": 0.0, "acquire_hz": 50}


def times(seconds: float) -> np.ndarray:
    return np.arange(round(seconds * RATE_HZ)) / RATE_HZ


def received(envelope: np.ndarray, gain: np.ndarray | float = 1.0, c_n0_dbhz: float = 85.0) -> Kept:
    noise = signals.noise(RATE_HZ, len(envelope), 0.01 / 10 ** (c_n0_dbhz / 10), np.random.default_rng(3))
    return run((gain * (0.1 * envelope + noise)).astype(np.complex64), RATE_HZ, [channel(**KEYS)])


def seconds_with(kept: Kept, fault: Fault) -> list[int]:
    return [index for index, one in enumerate(kept.readings) if one.faults[0] & np.uint32(fault)]


def test_another_programme_in_quadrature_is_told() -> None:
    """Stereo in quadrature: programme of 10 % of its own, up to 3 kHz."""
    t = times(8.0)
    other = signals.programme_like(RATE_HZ, 8.0, band_hz=3000.0, seed=5).modulation
    main = signals.tone(0.5, 700.0, t)
    kept = received(1 + main + 1j * 0.1 * other / other.std())
    assert seconds_with(kept, Fault.QUADRATURE_SIGNAL)[-4:] == [4, 5, 6, 7]


def test_incidental_phase_is_no_signal_in_quadrature() -> None:
    m = signals.programme_like(RATE_HZ, 8.0, negative_peak=0.9, seed=6).modulation
    kept = received((1 + m) * np.exp(0.1j * m))
    assert not seconds_with(kept, Fault.QUADRATURE_SIGNAL)
    assert all(reading.valid[0] for reading in kept.readings[1:])


def test_a_step_of_gain_is_told_and_a_fade_is_none() -> None:
    t = times(8.0)
    m = signals.tone(0.6, 400.0, t)
    stepped = received(1 + m, gain=np.where(t < 4.04, 1.0, 0.5))
    assert set(seconds_with(stepped, Fault.GAIN_CHANGED)) <= {4, 5}
    assert seconds_with(stepped, Fault.GAIN_CHANGED)
    faded = received(np.where(t < 4.04, 1.0, 0.5) * (1 + m))
    assert not seconds_with(faded, Fault.GAIN_CHANGED)
    assert not seconds_with(received(1 + m), Fault.GAIN_CHANGED)


def test_noise_and_programme_alone_raise_no_fault() -> None:
    for c_n0_dbhz in (65.0, 80.0, 100.0):
        m = signals.programme_like(RATE_HZ, 10.0, negative_peak=0.9, seed=8).modulation
        kept = received(1 + np.tile(m, 2), c_n0_dbhz=c_n0_dbhz)
        assert all(reading.valid[0] for reading in kept.readings[1:])
