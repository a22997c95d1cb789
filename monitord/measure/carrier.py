"""The carrier: present, level, change of level, frequency offset, C/N0, locked."""

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from monitord.blocks import Detected, Flags, Precise
from monitord.measure.presence import Presence
from monitord.quantities import Quantity
from monitord.stage import Bank

MOST_C_N0_DBHZ = 160.0  # what single precision can tell


class CarrierMeter:
    """Per hop: level and presence. Per interval: the carrier's quantities.

    The frequency is the slope of a least-squares line through the phases of the interval, which reaches the
    Cramer-Rao bound for a line in white noise (Rife and Boorstyn 1974; CHECKS E15).
    """

    quantities: tuple[Quantity, ...] = (
        Quantity("carrier_present", "", "The carrier is on the air.", "DESIGN 4", flag=True),
        Quantity("carrier_loop_locked", "", "The carrier loop holds the carrier.", "DESIGN 4", flag=True),
        Quantity("carrier_level_dbfs", "dBFS", "Level of the carrier alone, re full scale.", "DESIGN 4"),
        Quantity("carrier_level_change_db", "dB", "Carrier level re its reference level.", "DESIGN 4"),
        Quantity(
            "carrier_frequency_offset_hertz",
            "Hz",
            "Carrier frequency, measured less nominal.",
            "Rife and Boorstyn 1974",
        ),
        Quantity(
            "carrier_to_noise_density_dbhz",
            "dB-Hz",
            "Carrier power over reception-noise power density, C/N0.",
            "DESIGN 4",
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._average_hops = max(1, round(bank.channels[0].carrier_average_s / bank.hop_s))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter. Learned reference levels stay: they are not this stage's state."""
        self._presence = Presence(self._bank)
        self._begin()

    def _begin(self) -> None:
        self._hops: list[Detected] = []

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        self._presence.process(detected)
        self._hops.append(_without_samples(detected))
        amplitude = detected.hop_amplitude
        level = np.full(amplitude.shape, -np.inf)
        np.log10(amplitude, out=level, where=amplitude > 0)
        return {"level_dbfs": 20 * level, "present": self._presence.state.astype(np.float64)}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        hops = self._hops
        self._begin()
        state = self._presence.state
        locked = hops[-1].locked
        level = np.where((state == 1) & locked, self._level_dbfs(hops), np.nan)
        steady = np.all([hop.locked & ~hop.broken for hop in hops], axis=0) & (state == 1)
        if not self._bank.fixed_gain:
            level = np.full(level.shape, np.nan)
        return {
            "carrier_present": np.where(state < 0, np.nan, state),
            "carrier_loop_locked": locked.astype(np.float64),
            "carrier_level_dbfs": level,
            "carrier_level_change_db": level - self._presence.reference.level_dbfs,
            "carrier_frequency_offset_hertz": _slope_hz(hops, steady),
            "carrier_to_noise_density_dbhz": _c_n0_db(hops, steady),
        }

    def _level_dbfs(self, hops: list[Detected]) -> Precise:
        """Mean power of the amplitude averages that make up the interval, from its end backwards."""
        averages = [np.square(hop.amplitude) for hop in hops[:: -self._average_hops]]
        return np.asarray(10 * np.log10(np.mean(averages, axis=0)))


def _without_samples(detected: Detected) -> Detected:
    """The hop without its large arrays, to be kept for an interval."""
    count = len(detected.amplitude)
    return replace(
        detected,
        in_phase=np.empty((count, 0), np.float32),
        coherent=np.empty((count, 0), np.complex64),
        second=None,
    )


def _slope_hz(hops: list[Detected], steady: Flags) -> Precise:
    """Least-squares slope of the phase over the interval, Hz; NaN where the carrier was not steady."""
    phase = np.concatenate([hop.phase for hop in hops], axis=1)
    span = hops[-1].span
    step_s = (span.end - span.start) / span.rate_hz / hops[-1].phase.shape[1]
    time_s = (np.arange(phase.shape[1]) - (phase.shape[1] - 1) / 2) * step_s
    slope = (phase - phase[:, :1]) @ time_s / np.sum(np.square(time_s))
    return np.where(steady, slope / (2 * np.pi), np.nan)


def _c_n0_db(hops: list[Detected], steady: Flags) -> Precise:
    """Mean carrier power over mean noise density, dB-Hz."""
    power = np.mean([np.square(hop.hop_amplitude) for hop in hops], axis=0)
    noise = np.mean([hop.noise_density for hop in hops], axis=0)
    ratio = np.maximum(
        power - noise / (hops[-1].span.end - hops[-1].span.start) * hops[-1].span.rate_hz, 1e-30
    )
    return np.where(steady, np.minimum(10 * np.log10(ratio / noise), MOST_C_N0_DBHZ), np.nan)
