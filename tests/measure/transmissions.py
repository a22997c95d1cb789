"""Transmissions given as a complex envelope, and what the chain reads of them once it has settled."""

import numpy as np

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 12_000.0
SETTLED_S = 2
BAND_HZ = 2_400.0
KEYS = {"carrier_hz": 0.0, "bandwidth_hz": BAND_HZ, "emission_bandwidth_hz": BAND_HZ}


def times(seconds: float) -> np.ndarray:
    return signals.times(RATE_HZ, signals.frames_of(RATE_HZ, seconds))


def received(envelope: np.ndarray, c_n0_dbhz: float = 110.0, seed: int = 1) -> np.ndarray:
    """0.1 times the envelope (carrier = 1) plus white noise of the density 0.01 / (C/N0)."""
    density = 0.01 / 10 ** (c_n0_dbhz / 10)
    noise = signals.noise(RATE_HZ, len(envelope), density, np.random.default_rng(seed))
    return np.asarray(0.1 * envelope + noise, np.complex64)


def kept(envelope: np.ndarray, c_n0_dbhz: float = 110.0, **keys: object) -> Kept:
    return run(received(envelope, c_n0_dbhz), RATE_HZ, [channel(**(KEYS | keys))])


def read(quantity: str, envelope: np.ndarray, c_n0_dbhz: float = 110.0, **keys: object) -> np.ndarray:
    """The quantity of each second from the third on."""
    return kept(envelope, c_n0_dbhz, **keys).of(quantity)[SETTLED_S:]


def one_sideband(upper: float, lower: float, frequency_hz: float, t: np.ndarray) -> np.ndarray:
    """Carrier 1 and two sidebands of these amplitudes: double-sideband AM of depth m has m/2 in each."""
    turn = np.exp(2j * np.pi * frequency_hz * t)
    return np.asarray(1 + upper * turn + lower * turn.conj())
