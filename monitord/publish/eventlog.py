"""Events as log lines, for the console and the system's journal."""

import logging

from monitord.blocks import Event, Moment, Reading
from monitord.notice.kinds import DAEMON_KINDS
from monitord.publish.lines import event_line

_log = logging.getLogger("monitord.event")


class EventLog:
    """Writes each event when it opens and again when it closes, or what is still open at the end."""

    def __init__(self) -> None:
        self._open: set[int] = set()

    def moment(self, moment: Moment) -> None:
        """See stage.Outlet."""

    def reading(self, reading: Reading) -> None:
        """See stage.Outlet."""

    def event(self, event: Event) -> None:
        """See stage.Outlet."""
        if event.kind in DAEMON_KINDS:
            _log.info("%s", event.kind)
        else:
            _log.warning("%s: %s", self._state(event), event_line(event))

    def _state(self, event: Event) -> str:
        if event.ended_s is not None:
            self._open.discard(event.id)
            return "closed"
        if event.id in self._open:
            return "still open"
        self._open.add(event.id)
        return "opened"
