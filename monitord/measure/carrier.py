"""The carrier: present, level, change of level, frequency offset, C/N0, locked."""

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from monitord.blocks import Detected, Flags, Precise
from monitord.detect.carrier import SETTLED_HOPS
from monitord.measure.presence import Presence
from monitord.quantities import COVERAGE, Quantity
from monitord.stage import Bank

MOST_C_N0_DBHZ = 160.0  # what single precision can tell
_DB_PER_NEPER = 20 / math.log(10)
_OWN_ERROR_DB = 0.00006  # of filter, mean and arithmetic, without noise


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
            "carrier_level_uncertainty_db",
            "dB",
            "Expanded uncertainty (95 %) of the carrier level.",
            "JCGM 100",
        ),
        Quantity(
            "carrier_frequency_uncertainty_hertz",
            "Hz",
            "Expanded uncertainty (95 %) of the frequency offset; of noise alone where no clock accuracy is stated.",
            "JCGM 100",
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
        self._carrierless = np.array([one.carrierless for one in bank.channels])
        self._average_hops = max(1, round(bank.channels[0].averaging_s / bank.hop_s))
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
        return {"level_dbfs": 20 * level, "present": np.where(self._carrierless, -1.0, self._presence.state)}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        hops = self._hops
        self._begin()
        state = self._presence.state
        locked = hops[-1].locked
        level = np.where((state == 1) & locked, self._level_dbfs(hops), np.nan)
        state = np.where(self._carrierless, -1, state)
        steady = (
            ~self._carrierless & np.all([hop.locked & ~hop.broken for hop in hops], axis=0) & (state == 1)
        )
        if not self._bank.fixed_gain:
            level = np.full(level.shape, np.nan)
        offset_hz, scatter_hz = _slope_hz(hops, steady)
        accuracy = self._bank.accuracy
        return {
            "carrier_present": np.where(state < 0, np.nan, state),
            "carrier_loop_locked": locked.astype(np.float64),
            "carrier_level_dbfs": level,
            "carrier_level_change_db": level - self._presence.reference.level_dbfs,
            "carrier_level_uncertainty_db": np.where(
                np.isfinite(level), self._level_uncertainty_db(hops), np.nan
            ),
            "carrier_frequency_offset_hertz": offset_hz,
            "carrier_frequency_uncertainty_hertz": np.hypot(
                COVERAGE * scatter_hz, accuracy.frequency_hz or 0.0
            ),
            "carrier_to_noise_density_dbhz": _c_n0_db(hops, steady),
        }

    def _level_dbfs(self, hops: list[Detected]) -> Precise:
        """Mean power of the amplitude averages that make up the interval, from its end backwards."""
        averages = [np.square(hop.mean_amplitude) for hop in hops[:: -self._average_hops]]
        return np.asarray(10 * np.log10(np.mean(averages, axis=0)))

    def _level_uncertainty_db(self, hops: list[Detected]) -> Precise:
        """Of the noise that a Hann window of T seconds passes (1.5 / T Hz, half of it in phase), and the receiver's."""
        heard_s = (np.sum([hop.settled for hop in hops], axis=0) + SETTLED_HOPS - 1) * self._bank.hop_s
        average_s = self._average_hops * self._bank.hop_s
        whole = np.where(heard_s < average_s, heard_s, average_s * max(1, len(hops) // self._average_hops))
        power = np.mean([np.square(hop.hop_amplitude) for hop in hops], axis=0)
        noise = np.mean([hop.noise_density for hop in hops], axis=0) / np.maximum(power, 1e-30)
        relative = np.sqrt(0.75 * noise / np.maximum(whole, self._bank.hop_s))
        known = math.hypot(self._bank.accuracy.level_db, _OWN_ERROR_DB)
        return np.asarray(np.hypot(COVERAGE * _DB_PER_NEPER * relative, known), np.float64)


def _without_samples(detected: Detected) -> Detected:
    """The hop without its large arrays, to be kept for an interval."""
    count = len(detected.amplitude)
    return replace(
        detected,
        in_phase=np.empty((count, 0), np.float32),
        coherent=np.empty((count, 0), np.complex64),
        second=None,
    )


def _slope_hz(hops: list[Detected], steady: Flags) -> tuple[Precise, Precise]:
    """Least-squares slope of the phase over the interval and its standard deviation, Hz; NaN where not steady.

    The deviation comes from the phases' own scatter about the line, so whatever disturbs them is in it.
    """
    phase = np.concatenate([hop.phase for hop in hops], axis=1)
    span = hops[-1].span
    step_s = (span.end - span.start) / span.rate_hz / hops[-1].phase.shape[1]
    time_s = (np.arange(phase.shape[1]) - (phase.shape[1] - 1) / 2) * step_s
    phase = phase - phase[:, :1]
    whole = np.sum(np.square(time_s))
    slope = phase @ time_s / whole
    rest = phase - phase.mean(axis=1, keepdims=True) - slope[:, None] * time_s
    deviation = np.sqrt(np.square(rest).sum(axis=1) / ((len(time_s) - 2) * whole))
    known = np.where(steady, 1 / (2 * np.pi), np.nan)
    return slope * known, deviation * known


def _c_n0_db(hops: list[Detected], steady: Flags) -> Precise:
    """Mean carrier power over mean noise density, dB-Hz."""
    power = np.mean([np.square(hop.hop_amplitude) for hop in hops], axis=0)
    noise = np.mean([hop.noise_density for hop in hops], axis=0)
    ratio = np.maximum(
        power - noise / (hops[-1].span.end - hops[-1].span.start) * hops[-1].span.rate_hz, 1e-30
    )
    return np.where(steady, np.minimum(10 * np.log10(ratio / noise), MOST_C_N0_DBHZ), np.nan)
