"""Emission mask: by how much the emission stays below its limits, segment by segment.

Level in a bandwidth of `resolution_hz` re the unmodulated carrier (here the carrier's mean line), the highest of every
few milliseconds, held for ten minutes, the worse of both sides: the method of 47 CFR 73.44(a). A Hann window whose
noise bandwidth is the resolution takes the place of the analyser's filter: 1.5 rate / frames (Harris 1978).
"""

import itertools
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import scipy.fft

from monitord.blocks import Detected, Precise
from monitord.quantities import Quantity
from monitord.settings import Channel, Spectrum
from monitord.stage import Bank

_BLOCK_HOPS = 100
_PADDING = 2


@dataclass(frozen=True, slots=True)
class Segment:
    """From `first_hz` to `last_hz` on each side the emission is to be this much below the carrier, linear between."""

    first_hz: float
    last_hz: float
    first_db: float
    last_db: float

    @property
    def label(self) -> str:
        """Its value of the label `segment`."""
        return f"{self.first_hz:g}-{self.last_hz:g}"


def beyond_75_khz_db(power_w: float) -> float:
    """47 CFR 73.44(b): lesser of 43 + 10 log10 P and 80 dB, 65 dB below 158 W (CHECKS A9)."""
    return 65.0 if power_w < 158 else float(min(43 + 10 * np.log10(power_w), 80.0))


def cfr_segments(power_w: float) -> tuple[Segment, ...]:
    """47 CFR 73.44(b) (CHECKS A5 to A9)."""
    last_db = beyond_75_khz_db(power_w)
    return (
        Segment(10_200, 20_000, 25, 25),
        Segment(20_000, 30_000, 35, 35),
        Segment(30_000, 60_000, 35, 65),
        Segment(60_000, 75_000, 65, 65),
        Segment(75_000, 200_000, last_db, last_db),
    )


def segments_of(spectrum: Spectrum | None) -> tuple[Segment, ...]:
    """The segments that a channel's settings name."""
    if spectrum is None or spectrum.mask is None:
        return ()
    if isinstance(spectrum.mask, str):
        return cfr_segments(spectrum.power_w)
    points = spectrum.mask
    steps = itertools.pairwise(points)
    return tuple(Segment(a[0], b[0], a[1], b[1]) for a, b in steps if b[0] > a[0])


def _labels(channel: Channel) -> Iterable[str]:
    return [segment.label for segment in segments_of(channel.spectrum)]


class EmissionMaskMeter:
    """Margin of each segment, dB: positive inside the mask. What lies outside the channel's bandwidth is absent.

    Reception noise counts as emission: for a sample of the transmitter it is far below the mask.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "emission_mask_margin_db",
            "dB",
            "Limit of the emission mask less the highest level in the segment.",
            "47 CFR 73.44",
            label="segment",
            keys_of=_labels,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._columns = {label: k for k, label in enumerate(bank.labels.get("emission_mask_margin_db", ()))}
        self._rows = np.flatnonzero([bool(segments_of(one.spectrum)) for one in bank.channels])
        if len(self._rows):
            self._prepare_frames()
        self.reset()

    def _prepare_frames(self) -> None:
        bank = self._bank
        chosen = [bank.channels[row].spectrum for row in self._rows]
        resolution_hz = min(one.resolution_hz for one in chosen if one is not None)
        hold_s = max(one.hold_s for one in chosen if one is not None)
        length = round(1.5 * bank.rate_hz / resolution_hz)
        self._frame = max(8, min(length, bank.frames))
        starts = np.arange(0, bank.frames - self._frame + 1, max(1, self._frame // 2))
        self._at = starts[:, None] + np.arange(self._frame)
        taper = np.hanning(self._frame + 1)[:-1]
        self._window = (taper / taper.sum()).astype(np.float32)
        hz = scipy.fft.fftfreq(_PADDING * self._frame, 1 / bank.rate_hz)
        self._hz = np.abs(hz)
        self._blocks = max(1, round(hold_s / (_BLOCK_HOPS * bank.hop_s)))

    def reset(self) -> None:
        """See stage.Meter."""
        bins = _PADDING * self._frame if len(self._rows) else 0
        blocks = self._blocks if len(self._rows) else 0
        self._held = np.zeros((blocks, len(self._rows), bins), np.float32)
        self._hops = 0

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if len(self._rows):
            usable = (detected.settled & ~detected.broken)[self._rows]
            frames = detected.coherent[self._rows][:, self._at] * self._window
            spectrum = scipy.fft.fft(frames, _PADDING * self._frame, axis=2)
            power = np.square(np.abs(spectrum)).max(axis=1)
            place = self._hops // _BLOCK_HOPS % self._blocks
            if self._hops % _BLOCK_HOPS == 0:
                self._held[place] = 0
            self._held[place, usable] = np.maximum(self._held[place, usable], power[usable])
            self._hops += 1
        return {}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        margins = np.full((len(self._bank.channels), len(self._columns)), np.nan)
        if self._hops:
            held = self._held.max(axis=0)
            for index, row in enumerate(self._rows):  # few: transmitters' samples
                for segment in segments_of(self._bank.channels[row].spectrum):
                    margins[row, self._columns[segment.label]] = self._margin(segment, held[index])
        return {"emission_mask_margin_db": margins}

    def _margin(self, segment: Segment, held: np.ndarray) -> float:
        """The least margin of the segment within the channel's bandwidth; NaN where it lies outside."""
        last_hz = min(segment.last_hz, self._bank.channels[0].bandwidth_hz)
        inside = (self._hz >= segment.first_hz) & (self._hz <= last_hz)
        if not inside.any() or not held.any():
            return float("nan")
        width_hz = segment.last_hz - segment.first_hz
        share = (self._hz[inside] - segment.first_hz) / width_hz
        limit_db = -(segment.first_db + share * (segment.last_db - segment.first_db))
        level_db = 10 * np.log10(np.maximum(held[inside], 1e-30))
        return float(np.min(limit_db - level_db))
