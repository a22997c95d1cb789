"""Carrier loss and return, where a carrier is expected. Loss of the source is another thing (source.py)."""

from collections.abc import Sequence

import numpy as np

from monitord.blocks import Event, Flags, Moment, Reading, Span
from monitord.measure.presence import RETURN_S
from monitord.notice.episodes import Episodes
from monitord.settings import Channel

KIND = "carrier-loss"


class CarrierLossRule:
    """Opens when presence has been judged lost, dated back to where it went; closes when it is there again.

    Across a gap of the source an open loss stays open until the carrier has been seen again.
    """

    def prepare(self, channels: Sequence[Channel]) -> None:
        """See stage.Rule."""
        self._channels = tuple(channels)
        self._expected = np.array([channel.expect == "carrier" for channel in channels], bool)
        self._after_s = np.array([channel.loss_after_s for channel in channels])
        self.reset()

    def reset(self) -> None:
        """See stage.Rule."""
        self._episodes = Episodes()
        self._lost = np.zeros(len(self._channels), bool)
        self._span: Span | None = None

    def moment(self, moment: Moment) -> Sequence[Event]:
        """See stage.Rule."""
        if self._span is not None and moment.span.stream != self._span.stream:
            # Seconds begin anew: the old stream's losses end with it, and what is still lost is told again.
            ended = self._end(self._lost, self._span, self._span.elapsed_s)
            self._lost[:] = False
            self._span = moment.span
            return [*ended, *self.moment(moment)]
        self._span = moment.span
        if not (moment.present == 0).any() and not self._lost.any():
            return ()
        lost = self._expected & (moment.present == 0) & ~self._lost
        back = self._lost & (moment.present == 1)
        events: list[Event] = []
        hop_s = (moment.span.end - moment.span.start) / moment.span.rate_hz
        for row in np.flatnonzero(lost):
            channel = self._channels[row]
            started_s = max(0.0, moment.span.elapsed_s - hop_s - float(self._after_s[row]))
            events.append(self._episodes.begin(KIND, channel.name, moment.span, started_s))
        events += self._end(back, moment.span, moment.span.elapsed_s - RETURN_S)
        self._lost = (self._lost | lost) & ~back
        return events

    def _end(self, rows: Flags, span: Span, ended_s: float) -> list[Event]:
        names = [self._channels[row].name for row in np.flatnonzero(rows)]
        return [self._episodes.end(KIND, name, span, ended_s) for name in names]

    def reading(self, reading: Reading) -> Sequence[Event]:
        """See stage.Rule."""
        return ()

    def finish(self) -> Sequence[Event]:
        """See stage.Rule."""
        self._lost[:] = False
        return self._episodes.leave()
