"""Interference: other carriers in the channel, how far off and how strong.

They are looked for in quadrature, where there is no programme, and told from hum and phase modulation by standing on
one side of the carrier only (`lonelines`). Farther than 5 Hz off, the spectra of ten seconds are averaged, and what
the loop takes of them is given back by its response; within 20 Hz of the carrier also the spectra of a minute, each
of ten seconds (`nearcarrier`), which tell lines down to 0.5 Hz off. Where both see a line, the finer one counts.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Fault, Flags, Precise, Second
from monitord.condition.grid import STEPS
from monitord.detect.loop import loop_response
from monitord.measure.lonelines import Lines, LoneLines
from monitord.measure.nearcarrier import NearCarrier
from monitord.quantities import Quantity
from monitord.stage import Bank

RANKS = ("1", "2", "3")
FAULT_ABOVE_DB = -26.0
"""A carrier this strong moves the peaks by 0.05."""

BLOCK_SECONDS = 10
"""Seconds from one judgement to the next; the time over which levels are averaged."""

LOWEST_HZ, FINE_BELOW_HZ = 0.5, 20.0
_COARSE_FROM_HZ = 5.0
_EDGE_HZ = 3.0  # beyond the ends of the search, so that a peak there is seen as one
_FEWEST_SECONDS = 5  # of the ten: fading that stands still for less is no line
_FINE_BLOCKS = 6  # a minute
_FINE_EVERY_HOPS = 50  # segments of ten seconds overlap by half
_DOUBLE = 4.0  # times its power: 6 dB
_MOVED = 1.3  # times the power of the fine lines; at -50 dB and 80 dB-Hz powers scatter by 3 %
_SAME_HZ = 1.5  # two coarse lines cannot be closer


class InterferenceMeter:
    """The three strongest other carriers within the channel's bandwidth, each told for 10 s from its judgement on.

    Offsets are from the measured carrier, positive above it; levels re the carrier. Down to -50 dB at a C/N0 of
    80 dB-Hz; absent where there is none, or where its side cannot be told yet: where programme is stronger than the
    line within the same hertz, that takes longer than to see it, by as many times as it is stronger in power.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "interferer_offset_hertz",
            "Hz",
            "Frequency of another carrier in the channel less that of the carrier, strongest first.",
            "DESIGN 4",
            label="rank",
            keys=RANKS,
        ),
        Quantity(
            "interferer_level_db",
            "dB",
            "Level of another carrier in the channel re the carrier, strongest first.",
            "DESIGN 4",
            label="rank",
            keys=RANKS,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        # One sideband alone looks like another carrier, and so does each tone of it.
        one = bank.channels[0]
        self._one_sided = one.detector.endswith("sideband") or one.carrierless
        self._bandwidth_hz = bank.channels[0].bandwidth_hz
        self._bin_hz = 1 / (10 * bank.hop_s)
        self._first = max(1, int((_COARSE_FROM_HZ - _EDGE_HZ) / self._bin_hz))
        self._end = int((self._bandwidth_hz + _EDGE_HZ) / self._bin_hz) + 9  # whole cells are used
        hertz = np.arange(self._first, self._end, dtype=np.float64) * self._bin_hz
        self._loop_hz = bank.channels[0].loop_bandwidth_hz
        step_s = bank.hop_s / STEPS
        followed = loop_response(hertz, self._loop_hz, step_s)
        self._unfollowed = (1 / (1 - followed)).astype(np.complex64)
        self._fine_bin_hz = self._bin_hz / 10
        self._fine_first = max(1, int((LOWEST_HZ - 0.3) / self._fine_bin_hz))
        fine_hz = min(FINE_BELOW_HZ, self._bandwidth_hz)
        self._fine_bins = int((fine_hz + _EDGE_HZ) / self._fine_bin_hz) // 8 * 8
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._coarse = LoneLines(
            count, self._end - self._first, self._first, self._bin_hz, blocks=1, fewest=_FEWEST_SECONDS
        )
        self._fine = LoneLines(
            count, self._fine_bins, self._fine_first, self._fine_bin_hz, blocks=_FINE_BLOCKS, fewest=2
        )
        self._near = NearCarrier(self._bank, self._fine_first, self._fine.bins)
        self._held = np.zeros(count, bool)
        self._locked = np.zeros(count, bool)
        self._seconds = self._hops = 0
        self._offset_hz = np.full((count, len(RANKS)), np.nan)
        self._level_db = np.full((count, len(RANKS)), np.nan)
        self._begin()

    def _begin(self) -> None:
        self._heard = np.zeros(len(self._bank.channels), bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if self._one_sided:
            return {}
        self._heard |= detected.settled & ~detected.broken
        self._drop(self._locked & ~detected.locked)
        self._locked = detected.locked
        self._near.take(detected)
        self._hops += 1
        if self._hops % _FINE_EVERY_HOPS == 0:
            near = self._near.spectra()
            self._fine.take(near.in_phase, near.quadrature, near.noise_density, near.usable)
        if detected.second is not None:
            self._take(detected.second)
        strong = self._level_db[:, 0] > FAULT_ABOVE_DB
        return {"faults": np.where(strong, float(Fault.INTERFERENCE), 0.0)}

    def _drop(self, gone: Flags) -> None:
        if gone.any():
            self._offset_hz[gone] = self._level_db[gone] = np.nan
            self._coarse.forget(gone)
            self._fine.forget(gone)

    def _take(self, second: Second) -> None:
        use = second.usable & self._held  # what has just come on the air is still settling
        self._held = second.usable
        band = slice(self._first, self._first + self._coarse.bins)
        quadrature = second.quadrature[:, band] * self._unfollowed[: self._coarse.bins]
        density = second.noise_density / np.square(second.amplitude)
        self._coarse.take(second.modulation[:, band], quadrature, density, use)
        self._seconds += 1
        if self._seconds % BLOCK_SECONDS == 0:
            self._judge()

    def _judge(self) -> None:
        seen = self._fine.seen
        coarse = _within(self._coarse.judge(), _COARSE_FROM_HZ, self._bandwidth_hz)
        coarse = _those(coarse, seen[coarse.row] | (np.abs(coarse.offset_hz) > 2 * FINE_BELOW_HZ))
        fine = _within(self._fine.judge(), LOWEST_HZ, min(FINE_BELOW_HZ, self._bandwidth_hz))
        lines = self._without_doubles(_joined(fine, coarse))
        order = np.lexsort((-lines.power, lines.row))
        row = lines.row[order]
        rank = np.arange(len(row)) - np.searchsorted(row, row)
        told = rank < len(RANKS)
        place = row[told], rank[told]
        self._offset_hz[:] = self._level_db[:] = np.nan
        self._offset_hz[place] = lines.offset_hz[order][told]
        self._level_db[place] = 10 * np.log10(lines.power[order][told])

    def _without_doubles(self, lines: Lines) -> Lines:
        """Those that the loop has not made itself.

        It follows a line of amplitude a at f by the phase |H| a sin(2 pi f t), and turns the line itself by that:
        at 2 f, on the same side, a line of a^2 |H| / 2 comes up.
        """
        followed = np.abs(loop_response(np.abs(lines.offset_hz), self._loop_hz, self._bank.hop_s / STEPS))
        double = np.square(followed * lines.power / 2)
        made = lines.row[:, None] == lines.row
        made &= np.abs(lines.offset_hz[:, None] - 2 * lines.offset_hz) < _SAME_HZ
        made &= lines.power[:, None] < _DOUBLE * double
        return _those(lines, ~made.any(axis=1))

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        known = self._heard[:, None]
        self._begin()
        return {
            "interferer_offset_hertz": np.where(known, self._offset_hz, np.nan),
            "interferer_level_db": np.where(known, self._level_db, np.nan),
        }


def _within(lines: Lines, least_hz: float, most_hz: float) -> Lines:
    """Those whose distance from the carrier is from `least_hz` to `most_hz`."""
    away = np.abs(lines.offset_hz)
    return _those(lines, (away >= least_hz) & (away <= most_hz))


def _joined(fine: Lines, coarse: Lines) -> Lines:
    """Both together; a line that both have found counts as the fine one, unless it has moved within the minute.

    Then its power is spread over more of the fine bins than a line has, and the coarse one shows more of it.
    """
    same = coarse.row[:, None] == fine.row
    same &= np.abs(np.abs(coarse.offset_hz)[:, None] - np.abs(fine.offset_hz)) < _SAME_HZ
    moved = coarse.power > _MOVED * (same @ fine.power)
    whole = _those(fine, ~(same & moved[:, None]).any(axis=0))
    other = _those(coarse, moved)
    return Lines(
        np.concatenate([whole.row, other.row]),
        np.concatenate([whole.offset_hz, other.offset_hz]),
        np.concatenate([whole.power, other.power]),
    )


def _those(lines: Lines, which: Flags) -> Lines:
    return Lines(lines.row[which], lines.offset_hz[which], lines.power[which])
