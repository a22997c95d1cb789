"""The writers of `monitord replay` for other programs: JSON Lines and CSV."""

import csv
import json
from collections.abc import Iterator, Mapping, Sequence
from datetime import UTC, datetime
from math import isfinite
from typing import TextIO

import numpy as np

from monitord.blocks import Event, Moment, Reading, fault_names
from monitord.quantities import Quantity

Plain = None | bool | int | float | str | list["Plain"] | dict[str, "Plain"]
Value = float | int | None


def rounded(value: float) -> float | None:
    """Round to seven significant digits or to thousandths, whichever is finer; None if not finite."""
    if not isfinite(value):
        return None
    return round(value, 3) if abs(value) >= 1e4 else float(f"{value:.7g}")


def timestamp(utc: float | None) -> str | None:
    """Write a time (seconds since 1970) as RFC 3339 UTC with milliseconds; None where it is not known."""
    if utc is None or not isfinite(utc):
        return None
    return datetime.fromtimestamp(round(utc, 3), UTC).isoformat(timespec="milliseconds")[:-6] + "Z"


def plain(value: object) -> Plain:
    """Turn a value into one that JSON knows, without NaN or infinity. Raises TypeError for other types."""
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return rounded(value)
    if isinstance(value, Mapping):
        return {str(key): plain(entry) for key, entry in value.items()}
    if isinstance(value, list | tuple):
        return [plain(entry) for entry in value]
    raise TypeError(f"{value!r} of type {type(value).__name__}: must be a number, text, list or mapping")


class OpenEvents:
    """Keeps events from their beginning to their end, so that each is written once."""

    def __init__(self) -> None:
        self._open: dict[int, Event] = {}

    def ended(self, event: Event) -> bool:
        """Take an event; tell whether it is over, and so to be written now."""
        if event.ended_s is None:
            self._open[event.id] = event
            return False
        self._open.pop(event.id, None)
        return True

    def rest(self) -> Sequence[Event]:
        """Hand over those still open, in the order in which they began."""
        rest = sorted(self._open.values(), key=lambda event: event.started_s)
        self._open.clear()
        return rest


def columns(quantity: Quantity, reading: Reading) -> list[list[Value]]:
    """Values of a quantity, a list for each channel: one value, or one for each key of its second label."""
    width = len(quantity.keys) if quantity.label else 1
    there = reading.values.get(quantity.name)
    if there is None:
        return [[None] * width for _ in reading.channels]
    rows = np.reshape(there, (len(reading.channels), width)).tolist()
    return [[_value(quantity, value) for value in row] for row in rows]


def _value(quantity: Quantity, value: float) -> Value:
    short = rounded(value)
    return int(short) if quantity.flag and short is not None else short


class JsonLines:
    """One JSON object a line: each reading and channel, each event when it is over, and last the summary."""

    def __init__(self, quantities: Sequence[Quantity], out: TextIO) -> None:
        """Write to `out`, whose errors (BrokenPipeError) go through to the caller."""
        self._quantities = tuple(quantities)
        self._out = out
        self._events = OpenEvents()

    def moment(self, moment: Moment) -> None:
        """Moments are not written."""

    def reading(self, reading: Reading) -> None:
        """Write an object for each channel."""
        values = [(quantity, columns(quantity, reading)) for quantity in self._quantities]
        head: dict[str, Plain] = {
            "time": timestamp(reading.span.utc),
            "elapsed_s": rounded(reading.span.elapsed_s),
        }
        for row, channel in enumerate(reading.channels):
            line = head | {
                "channel": channel,
                "valid": bool(reading.valid[row]),
                "faults": list(fault_names(int(reading.faults[row]))),
            }
            for quantity, of_channels in values:
                line[quantity.name] = _entry(quantity, of_channels[row])
            self._write(line)

    def event(self, event: Event) -> None:
        """Write an event once it is over."""
        if self._events.ended(event):
            self._write_event(event)

    def finish(self, summary: Mapping[str, object]) -> None:
        """Write the events that are still open, without an end, and the summary."""
        for event in self._events.rest():
            self._write_event(event)
        self._write({"summary": plain(summary)})

    def _write_event(self, event: Event) -> None:
        self._write(
            {
                "event": event.kind,
                "channel": event.channel,
                "started_s": rounded(event.started_s),
                "ended_s": None if event.ended_s is None else rounded(event.ended_s),
                "extreme": rounded(event.extreme),
                "limit": rounded(event.limit),
                "detail": event.detail,
            }
        )

    def _write(self, line: Mapping[str, Plain]) -> None:
        self._out.write(json.dumps(line, allow_nan=False) + "\n")


def _entry(quantity: Quantity, values: list[Value]) -> Plain:
    if not quantity.label:
        return values[0]
    return dict(zip(quantity.keys, values, strict=True))


class Csv:
    """A header and a row for each reading and channel; events and the summary go to `messages`."""

    def __init__(self, quantities: Sequence[Quantity], out: TextIO, messages: TextIO) -> None:
        """Write the header. A quantity with a second label has a column `name.key` for each of its values."""
        self._quantities = tuple(quantities)
        self._writer = csv.writer(out, lineterminator="\n")
        self._messages = messages
        self._events = OpenEvents()
        names = [name for quantity in self._quantities for name in _column_names(quantity)]
        self._writer.writerow(["time", "elapsed_s", "channel", "valid", "faults", *names])

    def moment(self, moment: Moment) -> None:
        """Moments are not written."""

    def reading(self, reading: Reading) -> None:
        """Write a row for each channel: an empty cell where there is no value, a space between faults."""
        values = [columns(quantity, reading) for quantity in self._quantities]
        time, elapsed_s = timestamp(reading.span.utc), rounded(reading.span.elapsed_s)
        for row, channel in enumerate(reading.channels):
            faults = " ".join(fault_names(int(reading.faults[row])))
            cells = [value for of_channels in values for value in of_channels[row]]
            self._writer.writerow([time, elapsed_s, channel, int(reading.valid[row]), faults, *cells])

    def event(self, event: Event) -> None:
        """Tell an event once it is over."""
        if self._events.ended(event):
            self._messages.write(event_line(event) + "\n")

    def finish(self, summary: Mapping[str, object]) -> None:
        """Tell the events that are still open, and the summary."""
        for event in self._events.rest():
            self._messages.write(event_line(event) + "\n")
        self._messages.write(summary_line(summary) + "\n")


def _column_names(quantity: Quantity) -> Iterator[str]:
    if not quantity.label:
        yield quantity.name
    for key in quantity.keys:
        yield f"{quantity.name}.{key}"


def event_line(event: Event) -> str:
    """Tell an event to a person in one line; depth in per cent."""
    place = event.channel or "source"
    lasted = "not over yet" if event.ended_s is None else f"for {event.ended_s - event.started_s:.3g} s"
    parts = [f"{place}: {event.kind} at {event.started_s:.3f} s, {lasted}"]
    percent = event.kind.startswith("overmodulation")
    parts += [
        f"{word} {_extent(value, percent)}"
        for word, value in (("extreme", event.extreme), ("limit", event.limit))
        if isfinite(value)
    ]
    if event.detail:
        parts.append(event.detail)
    return ", ".join(parts)


def _extent(value: float, percent: bool) -> str:
    return f"{100 * value:.1f} %" if percent else f"{value:.5g}"


def summary_line(summary: Mapping[str, object]) -> str:
    """Tell a summary to a person in one line."""
    return "summary: " + ", ".join(f"{key} {_told(plain(value))}" for key, value in summary.items())


def _told(value: Plain) -> str:
    if isinstance(value, dict):
        return " ".join(f"{key} {_told(entry)}" for key, entry in value.items()) or "none"
    return "unknown" if value is None else str(value)
