"""Moments, readings and events as the chain would hand them to an outlet."""

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Event, Moment, Reading, Span
from monitord.quantities import Quantity

RATE_HZ = 48_000.0
HOP = 4_800
UTC_0 = 1_767_225_600.0  # 2026-01-01T00:00:00Z
CHANNELS = ("mw-936", "lw-153")

LEVEL = Quantity("carrier_level_dbfs", "dBFS", "Level of the carrier alone.", "house rule")
OFFSET = Quantity("carrier_frequency_offset_hertz", "Hz", "Measured less nominal.", "house rule")
PEAK = Quantity(
    "modulation_negative_peak_ratio", "", "Largest trough of the window.", "house rule", trusted_only=True
)
SILENT = Quantity("audio_silent", "", "Whether there is no programme.", "house rule", flag=True)
WEIGHTED = Quantity(
    "audio_weighted_noise_db", "dB", "Weighted noise.", "house rule", label="weighting", keys=("a", "bs468")
)
QUANTITIES = (LEVEL, OFFSET, PEAK, SILENT, WEIGHTED)


def span(index: int, hops: int = 1, utc: float | None = UTC_0) -> Span:
    """The span that ends with hop `index`, counted from 0, and is `hops` long."""
    end = (index + 1) * HOP
    return Span(index, end - hops * HOP, end, RATE_HZ, None if utc is None else utc + end / RATE_HZ)


def moment(
    *,
    channels: tuple[str, ...] = CHANNELS,
    present: Sequence[int] | int = 1,
    locked: Sequence[bool] | bool = True,
    over_negative_s: Sequence[float] | float = 0.0,
    over_positive_s: Sequence[float] | float = 0.0,
    positive_peak: Sequence[float] | float = 0.5,
    negative_peak: Sequence[float] | float = 0.5,
    faults: Sequence[int] | int = 0,
    index: int = 0,
) -> Moment:
    """A hop of 0.1 s."""
    count = len(channels)

    def each(value: Sequence[float] | float) -> NDArray[np.float64]:
        return np.broadcast_to(np.asarray(value, np.float64), count).copy()

    nothing = np.full((count, 2), np.nan)
    return Moment(
        channels=channels,
        span=span(index),
        level_dbfs=each(-20.0),
        present=each(present).astype(np.int8),
        locked=each(locked).astype(bool),
        settled=each(locked).astype(bool),
        positive_peak=each(positive_peak),
        negative_peak=each(negative_peak),
        over_positive_s=each(over_positive_s),
        over_negative_s=each(over_negative_s),
        over_positive_span_s=nothing,
        over_negative_span_s=nothing,
        cut_off=np.zeros(count, bool),
        faults=each(faults).astype(np.uint32),
    )


def reading(
    values: Mapping[str, object] | None = None,
    *,
    channels: tuple[str, ...] = CHANNELS,
    faults: Sequence[int] | int = 0,
    index: int = 9,
    utc: float | None = UTC_0,
) -> Reading:
    """A reading of 1 s; quantities not given have no value."""
    count = len(channels)
    bits = np.broadcast_to(np.asarray(faults, np.uint32), count).copy()
    given = {name: np.asarray(value, np.float64) for name, value in (values or {}).items()}
    return Reading(channels, span(index, 10, utc), given, bits == 0, bits)


def event(
    number: int,
    kind: str,
    channel: str | None = "mw-936",
    *,
    ended_s: float | None = None,
    extreme: float = float("nan"),
    limit: float = float("nan"),
    detail: str = "",
) -> Event:
    """An event that began at 12.3 s."""
    return Event(
        number, kind, channel, 12.3, UTC_0 + 12.3, ended_s, None, extreme=extreme, limit=limit, detail=detail
    )
