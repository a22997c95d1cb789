"""Metric families of the channels: thousands of lines, written from prefixes made once.

A general-purpose writer forms every line anew, and took five times as long for 120 channels.
"""

from collections.abc import Sequence
from itertools import product

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Precise

PREFIX = "monitord_"

Numbers = NDArray[np.int64] | Precise
Rows = slice | NDArray[np.intp]


def escape(text: str) -> str:
    """Escape text for a label value (and for HELP in OpenMetrics)."""
    return text.replace("\\", "\\\\").replace("\n", "\\n").replace('"', '\\"')


class ChannelFamily:
    """One family: a line for each channel, or for each channel and key of a second label.

    It keeps the lines it wrote last and writes anew only when a value has changed. Not for use by several
    threads at once.
    """

    def __init__(
        self,
        name: str,
        meaning: str,
        channels: Sequence[str],
        *,
        label: str = "",
        keys: Sequence[str] = (),
        whole: bool = False,
    ) -> None:
        """Make the prefixes.

        name: without `monitord_`; a counter's ends in `_total`.
        label, keys: the second label and its fixed values, if there is one.
        whole: the values are whole numbers and are written so.
        """
        self.name = name
        self.shape: tuple[int, ...] = (len(channels), len(keys)) if label else (len(channels),)
        full = PREFIX + name
        kind = "counter" if name.endswith("_total") else "gauge"
        plain_help = meaning.replace("\\", "\\\\").replace("\n", "\\n")
        self._plain_head = f"# HELP {full} {plain_help}\n# TYPE {full} {kind}\n".encode()
        family = full.removesuffix("_total")
        self._open_head = f"# HELP {family} {escape(meaning)}\n# TYPE {family} {kind}\n".encode()
        labels = [f'channel="{escape(channel)}"' for channel in channels]
        if label:
            seconds = [f'{label}="{escape(key)}"' for key in keys]
            labels = [f"{first},{second}" for first, second in product(labels, seconds)]
        self._prefixes = [f"{full}{{{pair}}} " for pair in labels]
        self.whole = whole
        self._values: Numbers | None = None
        self._lines = b""

    def text(self, values: Numbers, openmetrics: bool) -> bytes:
        """Write the family: its head and a line for each finite value; nothing where there is none.

        values: shape `self.shape`; they must not be changed afterwards.
        """
        if self._values is None or not np.array_equal(self._values, values, equal_nan=True):
            self._lines = self._write(values)
            self._values = values
        if not self._lines:
            return b""
        return (self._open_head if openmetrics else self._plain_head) + self._lines

    def _write(self, values: Numbers) -> bytes:
        flat = values.ravel()
        there = np.isfinite(flat)
        prefixes = self._prefixes
        if not there.all():
            prefixes = [self._prefixes[index] for index in np.flatnonzero(there)]
            flat = flat[there]
        numbers = (flat.astype(np.int64) if self.whole else flat).tolist()
        lines = [f"{prefix}{number!r}\n" for prefix, number in zip(prefixes, numbers, strict=True)]
        return "".join(lines).encode()


class HistogramFamily:
    """A histogram for each channel and key of a second label; lines as of `ChannelFamily`."""

    def __init__(
        self,
        name: str,
        meaning: str,
        channels: Sequence[str],
        *,
        label: str,
        keys: Sequence[str],
        bounds: Sequence[float],
    ) -> None:
        """Make the prefixes; `bounds`: upper bounds of the buckets, ascending, without +Inf."""
        self.name = name
        self.bounds = np.array(bounds)
        self.shape = (len(channels), len(keys), len(bounds) + 2)
        full = PREFIX + name
        self._head = f"# HELP {full} {escape(meaning)}\n# TYPE {full} histogram\n".encode()
        marks = [*(f"{bound:g}" if bound % 1 else f"{bound:.1f}" for bound in bounds), "+Inf"]
        self._prefixes: list[str] = []
        for channel, key in product(channels, keys):
            labels = f'channel="{escape(channel)}",{label}="{escape(key)}"'
            self._prefixes += [f'{full}_bucket{{{labels},le="{mark}"}} ' for mark in marks]
            self._prefixes += [f"{full}_count{{{labels}}} ", f"{full}_sum{{{labels}}} "]

    def observe(self, table: Precise, rows: Rows, values: Precise) -> None:
        """Count values (channels, keys) in `table`, of `shape`: counts by bucket, and last the sum. NaN is no value."""
        known = np.isfinite(values)
        bucket = np.searchsorted(self.bounds, np.where(known, values, 0))
        counted = (np.arange(len(self.bounds) + 1) == bucket[:, :, None]) & known[:, :, None]
        table[rows, :, :-1] += counted
        table[rows, :, -1] += np.where(known, values, 0)

    def text(self, table: Precise) -> bytes:
        """Write the family, its buckets cumulative."""
        counts = np.cumsum(table[:, :, :-1], axis=2).astype(np.int64)
        lines = []
        prefixes = iter(self._prefixes)
        sums = table[:, :, -1].ravel().tolist()
        for row, total in zip(counts.reshape(-1, counts.shape[2]).tolist(), sums, strict=True):
            lines += [f"{next(prefixes)}{count}\n" for count in row]
            lines += [f"{next(prefixes)}{row[-1]}\n", f"{next(prefixes)}{total!r}\n"]
        return self._head + "".join(lines).encode()
