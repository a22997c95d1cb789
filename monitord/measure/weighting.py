"""How an ear weighs noise: the curves of IEC 61672-1 (A) and ITU-R BS.468-4, and the quasi-peak detector of BS.468-4.

The curves are the analog networks' own responses, evaluated where they are wanted: no filter is approximated, and a
weighted level is a weighted sum over a spectrum.
"""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Precise

_A_POLES_HZ = (
    20.598997,
    107.65265,
    737.86223,
    12194.217,
)  # IEC 61672-1 annex E, from its equations; from memory
_A_ORDER = (2, 1, 1, 2)
# rad/s, of the passive network of BS.468-4 figure 1a (CHECKS C1); one zero at 0.
_BS468_POLES = np.array(
    [
        -25903.701,
        -23615.535 + 36379.909j,
        -23615.535 - 36379.909j,
        -18743.747 + 62460.156j,
        -18743.747 - 62460.156j,
        -62675.170,
    ]
)
_BS468_REFERENCE_HZ, _BS468_REFERENCE_DB = 6300.0, 12.2  # BS.468-4 table 1: the point without tolerance

# |x| -> a charge that rises and falls at its own rates -> smoothing: what meets tables 2 and 3 (CHECKS C2).
_RISE_S, _FALL_S, _SMOOTH_S = 1.41e-3, 293e-3, 140e-3
_SINE_CHARGE = 0.98029508  # where a rectified sine of amplitude 1 holds the charge: as much flows in as out


def a_weighting(frequency_hz: Precise) -> Precise:
    """Amplitude response of frequency weighting A, 1 at 1 kHz, same shape (IEC 61672-1:2013, 5.5.7 and annex E)."""
    return np.asarray(_a_shape(np.asarray(frequency_hz, np.float64)) / _a_shape(np.array(1000.0)))


def _a_shape(hz: Precise) -> Precise:
    square = np.square(hz)
    shape = square**2
    for pole_hz, order in zip(_A_POLES_HZ, _A_ORDER, strict=True):
        shape = shape / (square + pole_hz**2) ** (order / 2)
    return np.asarray(shape)


def bs468_weighting(frequency_hz: Precise) -> Precise:
    """Amplitude response of the weighting network of ITU-R BS.468-4, about 1 at 1 kHz, same shape."""
    return np.asarray(np.abs(bs468_network(frequency_hz)))


def bs468_network(frequency_hz: Precise) -> NDArray[np.complex128]:
    """Complex response of that network, same shape, scaled to the table's reference: 12.2 dB at 6.3 kHz."""
    reference = 10 ** (_BS468_REFERENCE_DB / 20) / abs(_bs468_shape(np.array(_BS468_REFERENCE_HZ)))
    return np.asarray(reference * _bs468_shape(np.asarray(frequency_hz, np.float64)))


def _bs468_shape(hz: Precise) -> NDArray[np.complex128]:
    s = 2j * np.pi * hz[..., None]
    return np.asarray(s[..., 0] / (1 - s / _BS468_POLES).prod(axis=-1))


def quasi_peak(wave: Precise, rate_hz: float) -> Precise:
    """What the quasi-peak meter of ITU-R BS.468-4 shows over time, in units of the wave: a steady sine reads its rms.

    wave: (rows, frames), weighted or not; `rate_hz` at least 20 kHz or so, for the charge of 1.4 ms to be smooth.
    Returns (rows, frames); the pointer begins at 0. Steps through the samples one by one: not for the live chain.
    Dynamics: BS.468-4 section 2 (tables 2 and 3); the detector's form and its times: CHECKS C2.
    """
    rise, fall, smooth = (-np.expm1(-1 / (time_s * rate_hz)) for time_s in (_RISE_S, _FALL_S, _SMOOTH_S))
    charge = np.zeros(len(wave))
    pointer = np.zeros(len(wave))
    shown = np.empty(wave.shape)
    for frame, level in enumerate(np.abs(wave).T):
        lack = level - charge
        charge = charge + np.maximum(rise * lack, fall * lack)
        pointer = pointer + smooth * (charge - pointer)
        shown[:, frame] = pointer
    return np.asarray(shown * (np.sqrt(0.5) / _SINE_CHARGE))
