"""Silence: is there any modulation in this interval, or only what the reception's noise makes?

The noise's own power is subtracted before the rms is judged. What cannot be judged is not told: the difference of two
noise powers scatters, and where it scatters by as much as the limit itself, silence looks like quiet programme.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise
from monitord.quantities import Quantity
from monitord.stage import Bank

SINE_POWER = 0.5  # mean square of a sine of 100 %
_SIGMAS = 3.0
# Relative variance, times bandwidth and time: 1 of the noise's power in phase, 2 of the median that foretells it.
_SCATTER = 3.0


class SilenceMeter:
    """1 where the rms of the interval's modulation lies below the channel's `silence_db` re a sine of 100 %.

    What is slower than 10 Hz (fading) is no modulation here: each hop's mean is taken out. Absent where the noise
    scatters too much to tell silence from quiet programme; with the default of -40 dB and readings each second that
    is below a C/N0 of about 65 dB-Hz in 5 kHz. How long silence must last for an alarm is the alarm's matter.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_silent",
            "",
            "The modulation of the interval is below the limit of silence, reception noise subtracted.",
            "DESIGN 4",
            flag=True,
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._limit = silent_power(bank)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._power = np.zeros(count)
        self._noise = np.zeros(count)
        self._hops = np.zeros(count)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = detected.settled & ~detected.broken
        wave = detected.in_phase - detected.in_phase.mean(axis=1, keepdims=True)
        power = np.einsum("cf,cf->c", wave, wave) / self._bank.frames
        noise = detected.audio_noise_density * self._bank.noise_hz / np.square(detected.amplitude)
        self._power += np.where(usable, power, 0)
        self._noise += np.where(usable, noise, 0)
        self._hops += usable
        return {}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        heard = self._hops > 0
        hops = np.where(heard, self._hops, 1)
        noise = self._noise / hops
        modulation = self._power / hops - noise
        scatter = noise * np.sqrt(_SCATTER / (self._bank.noise_hz * hops * self._bank.hop_s))
        silent = modulation < self._limit
        told = (_SIGMAS * scatter < self._limit) | (modulation > self._limit + _SIGMAS * scatter)
        self.reset()
        return {"audio_silent": np.where(heard & told, silent, np.nan)}


def silent_power(bank: Bank) -> Precise:
    """Mean square of the modulation below which a channel is silent (channels,)."""
    return np.array([SINE_POWER * 10 ** (channel.silence_db / 10) for channel in bank.channels])
