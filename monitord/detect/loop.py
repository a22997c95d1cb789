"""The carrier loop: second order, type 2, as in the textbooks, solved for a whole hop at once.

Within a hop the loop is linear in the phase errors it is given, so its recursion

    w[k+1] = w[k] + (wn T)^2 e[k],   p[k+1] = p[k] + T w[k+1] + 2 zeta wn T e[k],   e[k] = a[k] - (p[k] + T w[k]/2)

(p phase, w frequency, a measured phase, e error, T step) is one matrix, worked out once. Loop noise
bandwidth B_L = (wn/2)(zeta + 1/(4 zeta)), one-sided, Hz (Gardner, Phaselock Techniques; CHECKS E16).
"""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Precise

Complex128 = NDArray[np.complex128]

ZETA = 1 / np.sqrt(2)


def natural_frequency(loop_bandwidth_hz: float) -> float:
    """wn in rad/s of a loop of noise bandwidth B_L, damping 1/sqrt(2): wn = 2 B_L / (zeta + 1/(4 zeta))."""
    return float(2 * loop_bandwidth_hz / (ZETA + 1 / (4 * ZETA)))


def loop_response(frequency_hz: Precise, loop_bandwidth_hz: float, step_s: float) -> Complex128:
    """H(f): how much of a phase that swings at f the samples are turned by, complex128, shape of `frequency_hz`.

    The recursion above in z = exp(j 2 pi f T): with A = a(z), E = e(z) and the loop's gains g1 = (wn T)^2 and
    g2 = 2 zeta wn T, P = E (g1 z / (z-1)^2 + g2 / (z-1)) and A = E + P + E g1 / (2 (z-1)). Samples are turned by the
    mean of P at a step's two edges, and a is a mean over the step. What stands in quadrature behind the loop is
    1 - H of what came: below wn it falls with f^2. Not for 0 Hz, where H = 1.
    """
    turn = natural_frequency(loop_bandwidth_hz) * step_s
    z = np.exp(2j * np.pi * frequency_hz * step_s)
    held = turn**2 / (z - 1)
    phase = held * z / (z - 1) + 2 * ZETA * turn / (z - 1)
    return np.asarray(np.sinc(frequency_hz * step_s) * phase * (1 + z) / 2 / (1 + phase + held / 2))


class CarrierLoop:
    """Response of the loop over one hop of `steps` steps of `step_s` seconds, starting from rest."""

    def __init__(self, loop_bandwidth_hz: float, steps: int, step_s: float) -> None:
        turn = natural_frequency(loop_bandwidth_hz) * step_s
        unit = np.eye(steps)
        phase, slope = np.zeros(steps), np.zeros(steps)
        path = [phase]
        for step in range(steps):  # over the steps of a hop, once, at the start
            error = unit[step] - (phase + slope / 2)
            slope = slope + turn**2 * error
            phase = phase + slope + 2 * ZETA * turn * error
            path.append(phase)
        self._path = np.array(path).T
        self._slope = slope / step_s

    def follow(self, angle: Precise) -> tuple[Precise, Precise]:
        """Phase at the steps' edges, (channels, steps + 1) rad, and the change of frequency, (channels,) rad/s.

        angle: measured phase less the one predicted at the hop's beginning, (channels, steps) rad.
        """
        return angle @ self._path, angle @ self._slope
