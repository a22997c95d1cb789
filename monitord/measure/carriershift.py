"""Carrier shift: the mean carrier under modulation against that of programme pauses (47 CFR 73.14, from memory).

An ideal transmitter has none. One that cuts off raises its mean, one whose supply gives way lowers it.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise
from monitord.detect.averaging import BRIEF_HOPS
from monitord.detect.reference import PAUSE_POWER
from monitord.quantities import Quantity
from monitord.stage import Bank

_MODULATED_POWER = 0.2**2
_MEMORY_S = 60.0


class CarrierShiftMeter:
    """Mean of the interval's modulated half seconds over that of the last minute's pauses, less 1; positive = rise.

    A half second counts, with the carrier's tapered mean over it, where all of its hops are modulated, or all a pause.
    Absent without modulation or without a pause, while fading, with automatic gain, and with carrier control.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "carrier_shift_ratio",
            "",
            "Mean carrier under modulation over that in the pauses of the last minute, less 1.",
            "47 CFR 73.14",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._defined = np.array([bank.fixed_gain and not one.carrier_control for one in bank.channels])
        self._hops = round(_MEMORY_S / bank.hop_s)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._pauses = np.full((self._hops, count), np.nan)
        self._runs = np.zeros((2, count), np.int64)  # hops of pause, and of modulation, up to now
        self._place = 0
        self._begin()

    def _begin(self) -> None:
        count = len(self._bank.channels)
        self._carrier, self._modulated = np.zeros(count), np.zeros(count)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = self._defined & detected.settled & ~detected.broken & ~detected.fading
        wave = detected.coherent.real
        mean = wave.mean(axis=1, dtype=np.float64)
        noise = detected.noise_density * self._bank.noise_hz / np.square(detected.amplitude)
        power = np.einsum("cf,cf->c", wave, wave) / wave.shape[1] - np.square(mean) - noise
        alike = usable & np.array([power < PAUSE_POWER, power > _MODULATED_POWER])
        self._runs = np.where(alike, self._runs + 1, 0)
        pausing, modulated = self._runs >= BRIEF_HOPS
        carrier = detected.brief_amplitude
        self._place = (self._place + 1) % self._hops
        self._pauses[self._place] = np.where(pausing, carrier, np.nan)
        self._carrier += np.where(modulated, carrier, 0)
        self._modulated += modulated
        return {}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        known = np.isfinite(self._pauses)
        heard = known.sum(axis=0)
        pause = np.where(known, self._pauses, 0).sum(axis=0) / np.maximum(heard, 1)
        there = (heard > 0) & (self._modulated > 0)
        under = self._carrier / np.maximum(self._modulated, 1)
        self._begin()
        return {"carrier_shift_ratio": np.where(there, under / np.where(there, pause, 1) - 1, np.nan)}
