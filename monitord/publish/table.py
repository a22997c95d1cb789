"""The writer of `monitord replay` for people: an aligned table."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import isfinite
from typing import TextIO

from monitord.blocks import Event, Moment, Reading, fault_names
from monitord.publish.lines import OpenEvents, event_line, summary_line, timestamp
from monitord.quantities import Quantity

# Words of a name that the unit beside the column says already.
_UNIT_WORDS = {"dbfs", "db", "dbm", "dbhz", "hertz", "ratio", "radians", "lufs", "seconds"}
_SHORT = {
    "modulation": "mod.",
    "frequency": "freq.",
    "recurring": "recur.",
    "positive": "pos.",
    "negative": "neg.",
}
_DECIMALS = {"Hz": 3, "%": 1}
_NARROWEST = 7


@dataclass(frozen=True, slots=True)
class _Column:
    """How a quantity stands in the table: heading, one word below the other, unit, scale and decimals."""

    name: str
    words: tuple[str, ...]
    unit: str
    scale: float
    decimals: int
    flag: bool

    @property
    def width(self) -> int:
        return max(_NARROWEST, len(self.unit), *(len(word) for word in self.words))

    def cell(self, value: float) -> str:
        if not isfinite(value):
            return "-"
        if self.flag:
            return "yes" if value else "no"
        return f"{self.scale * value:.{self.decimals}f}"


def _column(quantity: Quantity) -> _Column:
    words = [word for word in quantity.name.split("_") if word not in _UNIT_WORDS]
    percent = quantity.name.endswith("_ratio")
    unit = "%" if percent else quantity.unit
    return _Column(
        quantity.name,
        tuple(_SHORT.get(word, word) for word in words),
        unit,
        100.0 if percent else 1.0,
        _DECIMALS.get(unit, 2),
        quantity.flag,
    )


COLUMNS = (
    *(
        "carrier_present",
        "carrier_level_dbfs",
        "carrier_frequency_offset_hertz",
        "carrier_to_noise_density_dbhz",
    ),
    *("modulation_positive_peak_ratio", "modulation_negative_peak_ratio", "modulation_rms_ratio"),
    *(
        "audio_signal_to_noise_db",
        "audio_loudness_short_term_lufs",
        "audio_silent",
        "audio_tone_hertz",
        "audio_thd_ratio",
    ),
)
"""What a person reads in one line; all quantities are in the other formats."""


class Table:
    """Aligned columns with their units, ratios in per cent, events as lines of their own.

    To fit a screen it has the quantities of `COLUMNS` only; CSV and JSON have all of them.
    """

    def __init__(self, quantities: Sequence[Quantity], out: TextIO) -> None:
        """Write to `out`; the heading comes with the first reading."""
        self._columns = [_column(quantity) for quantity in quantities if quantity.name in COLUMNS]
        self._out = out
        self._events = OpenEvents()
        self._timed = False
        self._channel_width = 0

    def moment(self, moment: Moment) -> None:
        """Moments are not written."""

    def reading(self, reading: Reading) -> None:
        """Write a row for each channel."""
        if not self._channel_width:
            self._begin(reading)
        values = [reading.values.get(column.name) for column in self._columns]
        for row, channel in enumerate(reading.channels):
            cells = [
                column.cell(float("nan") if of_channels is None else float(of_channels[row]))
                for column, of_channels in zip(self._columns, values, strict=True)
            ]
            faults = " ".join(fault_names(int(reading.faults[row])))
            remark = faults or ("ok" if reading.valid[row] else "invalid")
            time = timestamp(reading.span.utc) or "-"
            self._row(time, f"{reading.span.elapsed_s:.1f}", channel, cells, remark)

    def event(self, event: Event) -> None:
        """Write an event once it is over."""
        if self._events.ended(event):
            self._out.write(f"* {event_line(event)}\n")

    def finish(self, summary: Mapping[str, object]) -> None:
        """Write the events that are still open, and the summary."""
        for event in self._events.rest():
            self._out.write(f"* {event_line(event)}\n")
        self._out.write(summary_line(summary) + "\n")

    def _begin(self, reading: Reading) -> None:
        self._timed = reading.span.utc is not None
        self._channel_width = max(len("channel"), *(len(channel) for channel in reading.channels))
        depth = max((len(column.words) for column in self._columns), default=1)
        for level in range(depth):
            words = [_word(column, level - depth) for column in self._columns]
            self._row("", "", "", words, "")
        units = [column.unit for column in self._columns]
        self._row("time (UTC)", "elapsed s", "channel", units, "faults")

    def _row(self, time: str, elapsed: str, channel: str, cells: Sequence[str], remark: str) -> None:
        lead = f"{time:24}  " if self._timed else ""
        body = "  ".join(f"{cell:>{column.width}}" for cell, column in zip(cells, self._columns, strict=True))
        line = f"{lead}{elapsed:>9}  {channel:{self._channel_width}}  {body}  {remark}"
        self._out.write(line.rstrip() + "\n")


def _word(column: _Column, from_below: int) -> str:
    return column.words[from_below] if -from_below <= len(column.words) else ""
