"""Over-modulation: single excursions beyond the limits, told with the first, one event while closer than `hold_s`."""

from collections.abc import Sequence

import numpy as np

from monitord.blocks import Event, Flags, Moment, Precise, Reading
from monitord.notice.episodes import Episodes
from monitord.settings import Channel

POLARITIES = ("negative", "positive")


class OvermodulationRule:
    """Opens with the first excursion; closes `hold_s` after the last. Faulty moments raise nothing."""

    def prepare(self, channels: Sequence[Channel]) -> None:
        """See stage.Rule."""
        self._channels = tuple(channels)
        self._hold_s = np.array([channel.limits.hold_s for channel in channels])
        self.reset()

    def reset(self) -> None:
        """See stage.Rule."""
        self._episodes = Episodes()
        self._last_s = {polarity: np.full(len(self._channels), -np.inf) for polarity in POLARITIES}
        self._running = dict.fromkeys(POLARITIES, False)
        self._peaks = {polarity: np.full(len(self._channels), np.nan) for polarity in POLARITIES}
        self._stream: int | None = None

    def moment(self, moment: Moment) -> Sequence[Event]:
        """See stage.Rule."""
        events: list[Event] = []
        if moment.span.stream != self._stream:  # seconds begin anew: what was open belongs to the old stream
            self._stream = moment.span.stream
            events += self.finish()
        trusted = moment.faults == 0
        for polarity, spans, highest in (
            ("negative", moment.over_negative_span_s, moment.negative_peak),
            ("positive", moment.over_positive_span_s, moment.positive_peak),
        ):
            # An excursion across two hops is told with the second, its peak may stand in the first.
            peaks = np.fmax(highest, self._peaks[polarity])
            self._peaks[polarity] = highest
            beyond = trusted & np.isfinite(spans[:, 0])
            if not self._running[polarity] and not beyond.any():
                continue
            events += self._close(polarity, moment, spans, beyond)
            for row in np.flatnonzero(beyond):
                events += self._excursion(polarity, int(row), moment, spans[row], float(peaks[row]))
            self._running[polarity] = bool(np.isfinite(self._last_s[polarity]).any())
        return events

    def _excursion(
        self, polarity: str, row: int, moment: Moment, span_s: Precise, peak: float
    ) -> Sequence[Event]:
        channel = self._channels[row]
        kind = f"overmodulation-{polarity}"
        self._last_s[polarity][row] = span_s[1]
        negative = polarity == "negative"
        limit = channel.limits.negative_peak if negative else channel.limits.positive_peak
        detail = ("cut-off" if moment.cut_off[row] else "reversal" if peak > 1 else "") if negative else ""
        if self._episodes.is_open(kind, channel.name):
            self._episodes.worsen(kind, channel.name, peak, detail)
            return ()
        return (
            self._episodes.begin(
                kind, channel.name, moment.span, float(span_s[0]), extreme=peak, limit=limit, detail=detail
            ),
        )

    def _close(self, polarity: str, moment: Moment, spans: Precise, beyond: Flags) -> list[Event]:
        """End what has been quiet for longer than the hold, before the next excursion or by the hop's end."""
        kind = f"overmodulation-{polarity}"
        last = self._last_s[polarity]
        until = np.where(beyond, spans[:, 0], moment.span.elapsed_s)
        events = []
        for row in np.flatnonzero(np.isfinite(last) & (until - last > self._hold_s)):
            name = self._channels[row].name
            if self._episodes.is_open(kind, name):
                events.append(self._episodes.end(kind, name, moment.span, float(last[row])))
            last[row] = -np.inf
        return events

    def reading(self, reading: Reading) -> Sequence[Event]:
        """See stage.Rule."""
        return ()

    def finish(self) -> Sequence[Event]:
        """See stage.Rule."""
        for polarity in POLARITIES:
            self._last_s[polarity][:] = -np.inf
            self._running[polarity] = False
        return self._episodes.leave()
