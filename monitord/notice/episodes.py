"""Events that are open: begun, extended while they last, ended."""

import itertools
import math
from dataclasses import replace

from monitord.blocks import Event, Span

_numbers = itertools.count(1)  # unique within the process, across rules


def utc_at(span: Span, elapsed_s: float) -> float | None:
    """UTC of a time given in seconds since the stream began, or None where time is not known."""
    return None if span.utc is None else span.utc - (span.elapsed_s - elapsed_s)


class Episodes:
    """The open events of one rule, by kind and channel."""

    def __init__(self) -> None:
        self._open: dict[tuple[str, str | None], Event] = {}

    def is_open(self, kind: str, channel: str | None) -> bool:
        """True while such an event is open."""
        return (kind, channel) in self._open

    def begin(
        self,
        kind: str,
        channel: str | None,
        span: Span | None,
        started_s: float,
        *,
        started_utc: float | None = None,
        extreme: float = math.nan,
        limit: float = math.nan,
        detail: str = "",
    ) -> Event:
        """Open an event. UTC is that of `started_s` by `span`, or given."""
        utc = started_utc if span is None else utc_at(span, started_s)
        event = Event(next(_numbers), kind, channel, started_s, utc, None, None, extreme, limit, detail)
        self._open[kind, channel] = event
        return event

    def worsen(self, kind: str, channel: str | None, extreme: float, detail: str = "") -> None:
        """Keep the worse of the extremes met so far (the larger)."""
        event = self._open[kind, channel]
        self._open[kind, channel] = replace(
            event, extreme=max(event.extreme, extreme), detail=event.detail or detail
        )

    def end(self, kind: str, channel: str | None, span: Span | None, ended_s: float) -> Event:
        """Close an event; `span` gives the UTC of `ended_s`, without it the event's own start does."""
        event = self._open.pop((kind, channel))
        if span is not None:
            utc = utc_at(span, ended_s)
        else:
            utc = None if event.started_utc is None else event.started_utc + ended_s - event.started_s
        return replace(event, ended_s=ended_s, ended_utc=utc)

    def leave(self) -> list[Event]:
        """All that is open, as it stands; nothing is open afterwards."""
        events = list(self._open.values())
        self._open.clear()
        return events
