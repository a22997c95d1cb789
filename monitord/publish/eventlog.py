"""Events as log lines, for the console and the system's journal."""

import logging

from monitord.blocks import Event, Moment, Reading
from monitord.notice.kinds import DAEMON_KINDS
from monitord.publish.lines import event_line

_log = logging.getLogger("monitord.event")


class EventLog:
    """Writes each event when it opens and again when it closes."""

    def moment(self, moment: Moment) -> None:
        """See stage.Outlet."""

    def reading(self, reading: Reading) -> None:
        """See stage.Outlet."""

    def event(self, event: Event) -> None:
        """See stage.Outlet."""
        if event.kind in DAEMON_KINDS:
            _log.info("%s", event.kind)
        else:
            _log.warning("%s %s", "opened:" if event.ended_s is None else "closed:", event_line(event))
