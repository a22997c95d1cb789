"""The carrier loop against the theory of phase-locked loops (Gardner, Phaselock Techniques; CHECKS E16).

A second-order loop of type 2 follows phase with H(s) = (2 zeta wn s + wn^2) / (s^2 + 2 zeta wn s + wn^2) and has the
one-sided noise bandwidth B_L = (wn/2)(zeta + 1/(4 zeta)) Hz.
"""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.tuner import Tuner
from monitord.detect.loop import ZETA, CarrierLoop, natural_frequency
from monitord.detect.synchronous import SynchronousDetector
from monitord.stage import Bank
from tests import signals
from tests.runs import channel

STEP_S = 1 / 240
STEPS = 2400
BANDWIDTHS = [0.5, 2.0, 5.0, 10.0]  # Hz; the default is 5


def followed(loop_bandwidth_hz: float, phase: np.ndarray) -> np.ndarray:
    """The loop's phase at the ends of its steps, when the measured phase is `phase` (STEPS,)."""
    return CarrierLoop(loop_bandwidth_hz, STEPS, STEP_S).follow(phase[None])[0][0, 1:]


def sampling_error(loop_bandwidth_hz: float) -> float:
    """How far a loop of steps may be from one without: it grows with B_L times the step, 3 % at 5 Hz."""
    return 0.005 + 0.005 * loop_bandwidth_hz


@pytest.mark.parametrize(
    ("zeta", "noise_bandwidth"), [(0.5, 0.5), (2**-0.5, 0.530330), (1, 0.625), (2, 1.0625)]
)
def test_e16_the_formula_of_the_noise_bandwidth_is_the_integral_of_the_response(
    zeta: float, noise_bandwidth: float
) -> None:
    """B_L / wn of the table, by formula and as the integral of |H|^2; the loop's own damping is one of them."""
    assert (zeta + 1 / (4 * zeta)) / 2 == pytest.approx(noise_bandwidth, abs=1e-6)
    s = 2j * np.pi * np.linspace(0, 2000, 2_000_001)  # wn = 1
    power = np.abs((2 * zeta * s + 1) / (s**2 + 2 * zeta * s + 1)) ** 2
    assert np.trapezoid(power, s.imag / (2 * np.pi)) == pytest.approx(noise_bandwidth, rel=1e-3)
    if zeta == pytest.approx(ZETA):
        assert natural_frequency(10.0) * noise_bandwidth == pytest.approx(10.0, rel=1e-5)


@pytest.mark.parametrize("loop_bandwidth_hz", BANDWIDTHS)
def test_e16_the_loop_has_the_noise_bandwidth_that_is_set(loop_bandwidth_hz: float) -> None:
    """The integral of the discrete loop's |H|^2 from 0 Hz to half its rate."""
    impulse = np.zeros(STEPS)
    impulse[0] = 1
    power = np.abs(np.fft.rfft(followed(loop_bandwidth_hz, impulse))) ** 2
    measured_hz = np.trapezoid(power, np.fft.rfftfreq(STEPS, STEP_S))
    assert measured_hz == pytest.approx(loop_bandwidth_hz, rel=sampling_error(loop_bandwidth_hz))


@pytest.mark.parametrize("loop_bandwidth_hz", BANDWIDTHS)
def test_e16_the_loop_responds_as_one_of_second_order_and_damping_0_7071(loop_bandwidth_hz: float) -> None:
    """|H(f)| throughout, and what is left of a step of phase: its poles tell natural frequency and damping."""
    impulse, step = np.zeros(STEPS), np.ones(STEPS)
    impulse[0] = 1
    error = sampling_error(loop_bandwidth_hz)
    wn = 2 * loop_bandwidth_hz / (2 * 0.530330)
    s = 2j * np.pi * np.fft.rfftfreq(STEPS, STEP_S)
    theory = (2**0.5 * wn * s + wn**2) / (s**2 + 2**0.5 * wn * s + wn**2)
    response = np.abs(np.fft.rfft(followed(loop_bandwidth_hz, impulse)))
    np.testing.assert_allclose(response, np.abs(theory), atol=error)
    left = 1 - followed(loop_bandwidth_hz, step)[:200]
    recursion = np.linalg.lstsq(np.stack([left[1:-1], left[:-2]], axis=1), left[2:], rcond=None)[0]
    pole = np.log(np.roots([1, *-recursion]).astype(complex)[0]) / STEP_S
    assert abs(pole) == pytest.approx(wn, rel=error)
    assert -pole.real / abs(pole) == pytest.approx(0.7071, rel=2 * error)


@pytest.mark.parametrize(
    ("c_n0_dbhz", "loop_bandwidth_hz"), [(40.0, 10.0), (50.0, 2.0), (50.0, 5.0), (60.0, 10.0)]
)
def test_e16_the_recovered_phase_jitters_as_much_as_theory_says(
    c_n0_dbhz: float, loop_bandwidth_hz: float
) -> None:
    """rms phase error sqrt(B_L / (C/N0)) rad: 0.0316 for 10 Hz at 40 dB-Hz (CHECKS E16). Within 10 %.

    The phase is what the detector turned the baseband by. 200 s hold at least 800 independent values: 2.5 %.
    """
    rate_hz, offset_hz = 8_000.0, 1.5
    channels = (
        channel(
            carrier_hz=1_000.0,
            bandwidth_hz=300.0,
            emission_bandwidth_hz=300.0,
            acquire_hz=20.0,
            loop_bandwidth_hz=loop_bandwidth_hz,
        ),
    )
    tuner = Tuner(rate_hz, 0.0, False, [channels])
    branch = tuner.branches[0]
    detector = SynchronousDetector()
    detector.prepare(Bank(channels, branch.rate_hz, branch.frames, branch.noise_hz, True, {}))
    wave = signals.am(rate_hz, 205.0, carrier_hz=1_000.0 + offset_hz, c_n0_dbhz=c_n0_dbhz, seed=16)
    errors = []
    for (hop,) in tuner.process(Block(wave, rate_hz, 0.0, 0, None)):
        got = detector.process(hop)
        time_s = hop.span.start / rate_hz + np.arange(branch.frames) / branch.rate_hz
        turn = hop.samples[0] * np.conj(got.in_phase[0] + 1j * got.quadrature[0])
        errors.append(np.angle(turn * np.exp(-2j * np.pi * offset_hz * time_s)))
    jitter = np.sqrt(np.mean(np.square(errors[40:])))
    assert jitter == pytest.approx(np.sqrt(loop_bandwidth_hz / 10 ** (c_n0_dbhz / 10)), rel=0.1)
