"""Audio bandwidth: how far up the transmitted audio reaches.

Spectra of a second (`Second.audio`) are averaged over some 24 Hz, which makes noise smooth enough to be told from
programme, less the reception noise; the largest of the last minute is held in each of these cells.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise, Second
from monitord.measure.silence import silent_power
from monitord.quantities import Quantity
from monitord.stage import Bank

LOWEST_HZ = 20.0
REACH_DB = -40.0
_BLOCK_SECONDS, _BLOCKS = 5, 12
_STEP = 8  # bins from one cell to the next
_CELL = 3  # steps that a cell is wide
# Cell over mean noise: 24 bins of a Hann spectrum are chi-square with 25 degrees of freedom (variance x 1.94 for the
# overlap of neighbours); noise alone goes beyond 4 times its mean once in 10^10 cells, a month of one channel.
_CLEAR = 4.0
_LINE_POWER = 3.0  # bins of a Hann line of amplitude a: sum of squares 1.5 a^2, power a^2 / 2


class AudioBandwidthMeter:
    """Highest frequency where the peak-held audio spectrum of 60 s is above -40 dB re its maximum.

    The spectrum's resolution is 24 Hz; the lower edge of the last cell is told, so a tone reads its own frequency
    within 10 Hz. A cell counts only if it stands 6 dB clear of the reception noise: at a C/N0 of 70 dB-Hz weak treble
    is lost in noise and the bandwidth reads narrower, never wider. Seconds that are silent (`silence_db`) do not
    count; absent when all were. The 60 s are kept in blocks of 5 s.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_bandwidth_hertz",
            "Hz",
            "Highest frequency where the 60 s peak-held audio spectrum is above -40 dB re its maximum.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._bin_hz = bank.rate_hz / (10 * bank.frames)
        self._low = int(np.ceil(LOWEST_HZ / self._bin_hz))
        high = int(bank.channels[0].bandwidth_hz / self._bin_hz)
        self._steps = (high + 1 - self._low) // _STEP
        self._silent = silent_power(bank)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._held = np.zeros((_BLOCKS, count, self._steps - _CELL + 1), np.float32)
        self._seconds = 0
        self._heard = np.zeros(count, bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        self._heard |= detected.settled & ~detected.broken
        if detected.second is not None:
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        place, within = divmod(self._seconds, _BLOCK_SECONDS)
        block = self._held[place % _BLOCKS]
        if within == 0:
            block[:] = 0
        self._seconds += 1
        band = second.audio[:, self._low : self._low + self._steps * _STEP]
        power = np.square(band.real) + np.square(band.imag)
        steps = power.reshape(len(power), self._steps, _STEP).mean(axis=2)
        cells = sum(steps[:, shift : shift + block.shape[1]] for shift in range(_CELL)) / _CELL
        noise = _LINE_POWER * second.audio_noise_density / np.square(second.amplitude) * second.bin_hz
        modulation = (power.sum(axis=1, dtype=np.float64) - noise * power.shape[1]) / _LINE_POWER
        loud = second.usable & (modulation > self._silent)
        counts = loud[:, None] & (cells > _CLEAR * noise[:, None])
        np.maximum(block, np.where(counts, cells - noise[:, None], 0), out=block, casting="same_kind")

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        held = self._held.max(axis=0)
        most = held.max(axis=1, keepdims=True)
        above = held > most * np.float32(10 ** (REACH_DB / 10))
        highest = above.shape[1] - 1 - above[:, ::-1].argmax(axis=1)
        hertz = (self._low + highest * _STEP) * self._bin_hz
        known = self._heard & (most[:, 0] > 0)
        self._heard = np.zeros_like(self._heard)
        return {"audio_bandwidth_hertz": np.where(known, hertz, np.nan)}
