"""Recordings from outside the project, where they are (`signals.data_directory`); tests are skipped elsewhere."""

from pathlib import Path

import numpy as np
import pytest
import soundfile

from tests import signals


def path(name: str) -> Path:
    """A file of the folder; skips the test where it is not there."""
    found = signals.data_directory() / name
    if not found.exists():
        pytest.skip(f"{name} is not in {found.parent} (MONITORD_TEST_DATA names the folder of recordings)")
    return found


def hf_voice_envelope() -> tuple[np.ndarray, int]:
    """The envelope of an HF time-signal station with speech, its carrier left in as DC, and its rate in Hz."""
    envelope, rate_hz = soundfile.read(path("off-air/hf-voice-envelope.wav"))
    return envelope, rate_hz


def on_a_carrier(envelope: np.ndarray, rate_hz: int, new_rate_hz: int, frequency_hz: float) -> np.ndarray:
    """The envelope at a whole multiple of its rate (by FFT, so exactly band-limited) on a complex carrier."""
    times = new_rate_hz // rate_hz
    spectrum = np.fft.rfft(envelope)
    wide = np.zeros(len(envelope) * times // 2 + 1, complex)
    wide[: len(spectrum)] = spectrum
    wave = times * np.fft.irfft(wide, len(envelope) * times)
    return wave * np.exp(2j * np.pi * frequency_hz / new_rate_hz * np.arange(len(wave)))
