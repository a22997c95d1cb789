"""Carrier loss and return, where a carrier is expected. Loss of the source is another thing (source.py)."""

from collections.abc import Sequence

import numpy as np

from monitord.blocks import Event, Moment, Reading
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

    def moment(self, moment: Moment) -> Sequence[Event]:
        """See stage.Rule."""
        if not (moment.present == 0).any() and not self._lost.any():
            return ()
        lost = self._expected & (moment.present == 0) & ~self._lost
        back = self._lost & (moment.present == 1)
        events: list[Event] = []
        hop_s = (moment.span.end - moment.span.start) / moment.span.rate_hz
        for row in np.flatnonzero(lost):
            channel = self._channels[row]
            started_s = max(0.0, moment.span.elapsed_s - max(float(self._after_s[row]), hop_s))
            events.append(self._episodes.begin(KIND, channel.name, moment.span, started_s))
        returned_s = moment.span.elapsed_s - RETURN_S
        names = [self._channels[row].name for row in np.flatnonzero(back)]
        events += [self._episodes.end(KIND, name, moment.span, returned_s) for name in names]
        self._lost = (self._lost | lost) & ~back
        return events

    def reading(self, reading: Reading) -> Sequence[Event]:
        """See stage.Rule."""
        return ()

    def finish(self) -> Sequence[Event]:
        """See stage.Rule."""
        self._lost[:] = False
        return self._episodes.leave()
