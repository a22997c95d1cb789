"""Is the carrier there? A line with enough C/N0 and, where the receiver's gain is fixed, near its usual level.

The usual level is the one in the settings, or is learned: the mean power of the first 10 s of steady carrier.
What was learned stays for the life of the process, across gaps of the source.
"""

import logging

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Flags, Precise
from monitord.stage import Bank

LEARN_S = 10.0
_JUDGE_AFTER_S = 1.0  # from a fresh start: a weak carrier may need a second search
RETURN_S = 0.3
_HYSTERESIS = 10**0.1  # 1 dB

_log = logging.getLogger("monitord.carrier")


class ReferenceLevel:
    """The reference level of each channel of a bank, given or learned."""

    def __init__(self, bank: Bank) -> None:
        self._bank = bank
        given = [channel.reference_level_dbfs for channel in bank.channels]
        self.given = np.array([np.nan if level is None else level for level in given])
        self._hops_wanted = round(LEARN_S / bank.hop_s)
        self.reset()

    def reset(self) -> None:
        """Forget what is being learned; what has been learned stays in the bank's table."""
        learned = self._bank.learned_levels
        known = np.array([learned.get(channel.name, np.nan) for channel in self._bank.channels])
        self.level_dbfs = np.where(np.isfinite(self.given), self.given, known)
        self._working_power = 10 ** (self.level_dbfs / 10)
        self._learning = ~np.isfinite(self.level_dbfs)
        self._power = np.zeros(len(known))
        self._hops = np.zeros(len(known), np.int64)

    @property
    def working_power(self) -> Precise:
        """The reference, or while it is still being learned, the mean so far, as power; NaN where there is none."""
        return self._working_power

    def learn(self, amplitude: Precise, steady: Flags) -> None:
        """Take the carriers' amplitudes of one hop, where they are steady."""
        learning = steady & self._learning
        if not learning.any():
            return
        self._power[learning] += np.square(amplitude[learning])
        self._hops[learning] += 1
        self._working_power[learning] = self._power[learning] / self._hops[learning]
        for row in np.flatnonzero(learning & (self._hops >= self._hops_wanted)):
            self._keep(int(row))

    def _keep(self, row: int) -> None:
        name, level = self._bank.channels[row].name, float(10 * np.log10(self._working_power[row]))
        self.level_dbfs[row] = level
        self._learning[row] = False
        self._bank.learned_levels[name] = level
        _log.info("%s: reference level learned: %.2f dBFS (reference_level_dbfs is not set)", name, level)


class Presence:
    """Judges presence hop by hop: 1 there, 0 lost (for `loss_after_s`), -1 not known yet."""

    def __init__(self, bank: Bank) -> None:
        self.reference = ReferenceLevel(bank)
        self._fixed_gain = bank.fixed_gain
        self._hop_s = bank.hop_s
        self._enough = 10 ** (np.array([channel.present_c_n0_dbhz for channel in bank.channels]) / 10)
        self._drop = 10 ** (-np.array([channel.loss_drop_db for channel in bank.channels]) / 10)
        self._loss_after_s = np.array([channel.loss_after_s for channel in bank.channels])
        self.reset()

    def reset(self) -> None:
        """As new, but for the learned reference levels."""
        count = len(self._enough)
        self.reference.reset()
        self.state: NDArray[np.int8] = np.full(count, -1, np.int8)
        self._absent_s = np.zeros(count)
        self._here_s = np.zeros(count)
        self._age_s = 0.0

    def process(self, detected: Detected) -> None:
        """Take one hop."""
        self._age_s += self._hop_s
        here = self._here(detected)
        if not (here & (self.state == 1)).all() or self._absent_s.any():
            self._count(here, detected)
        steady = here & (self.state == 1) & detected.settled & ~detected.broken
        self.reference.learn(detected.amplitude, steady)

    def _count(self, here: Flags, detected: Detected) -> None:
        """For how long each row has been there or not, and what follows from it.

        A line that is only glimpsed is being acquired: that is no time of absence, nor yet of presence.
        """
        glimpsed = self._at_level(np.square(detected.glimpse)) & (detected.glimpse > 0)
        hop_s, slack_s = self._hop_s, self._hop_s / 2
        self._here_s = np.where(here, self._here_s + hop_s, 0)
        self._absent_s = np.where(here, 0, self._absent_s + hop_s * ~glimpsed)
        # The first and the last hop may be absent in part only: never told early, a hop late at most.
        lost = ~glimpsed & (self._absent_s - slack_s > self._loss_after_s)
        lost &= ~here & ((self.state == 1) | (self._age_s + slack_s > _JUDGE_AFTER_S))
        back = self._here_s + slack_s > RETURN_S
        self.state = np.where(lost, 0, np.where(back, 1, self.state)).astype(np.int8)

    def _here(self, detected: Detected) -> Flags:
        """A line stands at the carrier, strong enough; the way back needs a little more than staying."""
        power = np.square(detected.hop_amplitude) - detected.noise_density / self._hop_s
        power /= np.where(self.state == 0, _HYSTERESIS, 1)
        here = power > self._enough * detected.noise_density
        return np.asarray(here & self._at_level(power))

    def _at_level(self, power: Precise) -> Flags:
        """Not too far below the reference, where the gain is fixed and there is a reference (channels,)."""
        if not self._fixed_gain:
            return np.ones(len(power), bool)
        return ~(power < self.reference.working_power * self._drop)
