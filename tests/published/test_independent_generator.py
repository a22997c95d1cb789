"""Depth against a second generator that shares nothing with this project: liquid-dsp's AM modulator, by ctypes.

Debian has it as libliquid-dev. Its modulator was found exact (CHECKS G): s = 1 + m x for DSB with carrier.
"""

import ctypes
import ctypes.util

import numpy as np
import pytest

from tests.runs import channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 936_000.0
DSB, WITH_CARRIER = 0, 0


def library() -> ctypes.CDLL:
    """The library; skips where it is not installed."""
    name = ctypes.util.find_library("liquid")
    if name is None:
        pytest.skip("liquid-dsp is not installed (Debian: libliquid-dev)")
    found = ctypes.CDLL(name)
    found.ampmodem_create.restype = ctypes.c_void_p
    found.ampmodem_create.argtypes = [ctypes.c_float, ctypes.c_int, ctypes.c_int]
    found.ampmodem_modulate_block.argtypes = [
        ctypes.c_void_p,
        ctypes.c_void_p,
        ctypes.c_uint,
        ctypes.c_void_p,
    ]
    found.ampmodem_destroy.argtypes = [ctypes.c_void_p]
    return found


def modulated(m: float, audio: np.ndarray) -> np.ndarray:
    """Complex baseband of a carrier at 0 Hz, modulated to the depth m by audio in -1..1."""
    liquid = library()
    samples = np.ascontiguousarray(audio, np.float32)
    out = np.empty(len(samples), np.complex64)
    modem = liquid.ampmodem_create(m, DSB, WITH_CARRIER)
    assert modem
    assert liquid.ampmodem_modulate_block(modem, samples.ctypes.data, len(samples), out.ctypes.data) == 0
    liquid.ampmodem_destroy(modem)
    return out


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize("m", [0.3, 0.8, 0.95])
@pytest.mark.parametrize("tone_hz", [400.0, 1000.0, 4100.0])
def test_a_tone_from_another_modulator_reads_its_depth(m: float, tone_hz: float, detector: str) -> None:
    tone = np.cos(2 * np.pi * tone_hz / RATE_HZ * np.arange(round(4.1 * RATE_HZ)) + 0.3)
    channels = [channel(carrier_hz=CARRIER_HZ, detector=detector)]
    kept = run(0.25 * modulated(m, tone), RATE_HZ, channels, center_hz=CARRIER_HZ)
    assert kept.last("modulation_positive_peak_ratio") == pytest.approx(m, abs=0.001)
    assert kept.last("modulation_negative_peak_ratio") == pytest.approx(m, abs=0.001)
    assert kept.last("modulation_rms_ratio") == pytest.approx(m / np.sqrt(2), abs=0.0005)
    assert kept.last("carrier_level_dbfs") == pytest.approx(20 * np.log10(0.25), abs=0.001)
    assert kept.last("carrier_frequency_offset_hertz") == pytest.approx(0, abs=1e-4)


def test_over_modulation_from_another_modulator_is_seen_as_reversal() -> None:
    tone = np.cos(2 * np.pi * 300.0 / RATE_HZ * np.arange(round(4.1 * RATE_HZ)))
    channels = [channel(carrier_hz=CARRIER_HZ)]
    kept = run(0.25 * modulated(1.1, tone), RATE_HZ, channels, center_hz=CARRIER_HZ)
    assert [(event.kind, event.detail) for event in kept.events] == [("overmodulation-negative", "reversal")]
    assert kept.events[0].extreme == pytest.approx(1.1, abs=0.002)
