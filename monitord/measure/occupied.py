"""Bandwidth of the emission: 99 % of its power (RR 1.153, ITU-R SM.443 annex 1), and 26 dB below the carrier (annex 2).

With I and Q the spectra of what is in phase and in quadrature, the emission above the carrier is I + jQ, below it the
conjugate of I - jQ. Reception noise is subtracted, so that noise beside the emission is none of it.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import BIN_POWER, Detected, Precise, Second
from monitord.quantities import Quantity
from monitord.stage import Bank

_SHARE = 0.005  # beta / 2 on each side
_DOWN = 10**-2.6
_LINE_BINS = 6.0  # a line of amplitude a on one side: |I -+ jQ|^2 sums to 1.5 (2 a)^2
_LINE_PEAK = 4.0  # and is (2 a)^2 at its top
_CLEAR = 4.0  # of a noise bin, to be above 26 dB down
_BLOCK_SECONDS = 10


class OccupiedBandwidthMeter:
    """99 % bandwidth over the interval's seconds; 26 dB bandwidth of the spectrum held for `hold_s`.

    Only for channels with a [channel.spectrum]; both are 0 for a bare carrier.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "occupied_bandwidth_hertz",
            "Hz",
            "Bandwidth that holds 99 % of the emission's power.",
            "RR 1.153, ITU-R SM.443-4 annex 1",
        ),
        Quantity(
            "bandwidth_26db_hertz",
            "Hz",
            "Bandwidth beyond which the peak-held emission is 26 dB below the carrier.",
            "ITU-R SM.443-4 annex 2",
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        self._rows = np.flatnonzero([one.spectrum is not None for one in bank.channels])
        self._bin_hz = 1 / (10 * bank.hop_s)
        self._bins = slice(1, int(bank.channels[0].bandwidth_hz / self._bin_hz) + 1)
        holds = [one.spectrum.hold_s for one in bank.channels if one.spectrum is not None]
        self._blocks = max([1, *(round(hold_s / _BLOCK_SECONDS) for hold_s in holds)])
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        shape = (len(self._rows), 2, self._bins.stop - 1)
        self._held = np.zeros((self._blocks if len(self._rows) else 0, *shape), np.float32)
        self._noise = np.zeros(len(self._rows))
        self._seconds = 0
        self._power = np.zeros(shape)
        self._heard = np.zeros(len(self._rows))

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None and len(self._rows):
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        in_phase, quadrature = (
            second.modulation[self._rows, self._bins],
            second.quadrature[self._rows, self._bins],
        )
        sides = np.stack([in_phase + 1j * quadrature, in_phase - 1j * quadrature], axis=1)
        power = np.square(np.abs(sides))
        usable = second.usable[self._rows]
        density = (second.noise_density / np.square(second.amplitude))[self._rows]
        self._noise = np.where(usable, BIN_POWER * density * self._bin_hz, self._noise)
        self._power[usable] += power[usable] - self._noise[usable, None, None]
        self._heard += usable
        place = self._seconds // _BLOCK_SECONDS % self._blocks
        if self._seconds % _BLOCK_SECONDS == 0:
            self._held[place] = 0
        self._held[place, usable] = np.maximum(self._held[place, usable], power[usable])
        self._seconds += 1

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        occupied, down = np.full((2, self._channels), np.nan)
        heard = self._heard > 0
        if heard.any():
            mean = self._power / np.maximum(self._heard, 1)[:, None, None] / _LINE_BINS
            occupied[self._rows] = np.where(heard, self._occupied(mean), np.nan)
            down[self._rows] = np.where(heard, self._down(), np.nan)
        self._power[:], self._heard[:] = 0, 0
        return {"occupied_bandwidth_hertz": occupied, "bandwidth_26db_hertz": down}

    def _occupied(self, mean: Precise) -> Precise:
        """Between the bins beyond which half a per cent of all the power lies, the carrier's 1 in it (rows,)."""
        beyond = np.cumsum(mean[:, :, ::-1], axis=2)[:, :, ::-1]  # power from this bin on outwards
        whole = 1 + mean.sum(axis=(1, 2))
        inside = beyond > _SHARE * whole[:, None, None]
        return self._edges(inside)

    def _down(self) -> Precise:
        held = self._held.max(axis=0)
        least = np.maximum(_DOWN * _LINE_PEAK, _CLEAR * np.log(self._seconds + 2) * self._noise)
        return self._edges(held > least[:, None, None])

    def _edges(self, inside: np.ndarray) -> Precise:
        """Sum over both sides of the outermost bin that is inside, Hz; 0 where none is (rows,)."""
        bins = inside.shape[2]
        outermost = np.where(inside.any(axis=2), bins - np.argmax(inside[:, :, ::-1], axis=2), 0)
        return np.asarray(outermost.sum(axis=1) * self._bin_hz)
