"""The metrics page: Prometheus text 0.0.4 and OpenMetrics 1.0."""

import threading
import time
from collections.abc import Sequence

import numpy as np

from monitord.blocks import FAULT_NAMES, Event, Fault, Moment, Precise, Reading
from monitord.notice.kinds import CHANNEL_KINDS, SOURCE_ALARMS, SOURCE_KINDS
from monitord.publish.daemon import END, DaemonFamilies
from monitord.publish.families import ChannelFamily, HistogramFamily, Numbers, Rows
from monitord.publish.tally import Tally
from monitord.quantities import Quantity

CONTENT_TYPE_TEXT = "text/plain; version=0.0.4; charset=utf-8"
CONTENT_TYPE_OPENMETRICS = "application/openmetrics-text; version=1.0.0; charset=utf-8"

POLARITIES = ("negative", "positive")
_FAULT_BITS = np.array([int(fault) for fault in Fault], np.uint32)
_OVERMODULATION = {f"overmodulation-{polarity}": row for row, polarity in enumerate(POLARITIES)}


SLOT_PEAKS = (*(tenth / 10 for tenth in range(1, 10)), 0.95, 1.0, 1.05, 1.1, 1.25, 1.5)
"""Upper bounds of the histogram of slot peaks, ratios: finer where the limits are."""


def _state_families(channels: Sequence[str]) -> tuple[ChannelFamily, ...]:
    """Make the 0/1 gauges and counters, which are on the page from the first scrape on."""

    def whole(name: str, meaning: str, label: str = "", keys: Sequence[str] = ()) -> ChannelFamily:
        return ChannelFamily(name, meaning, channels, label=label, keys=keys, whole=True)

    return (
        whole("carrier_present", "Whether the carrier is there."),
        whole("carrier_loop_locked", "Whether the carrier loop holds a carrier."),
        whole("reading_valid", "Whether no fault stands against the last reading."),
        whole(
            "reading_fault",
            "Why the last reading is not to be trusted.",
            "fault",
            tuple(FAULT_NAMES.values()),
        ),
        whole("alarm_active", "Whether an event of this kind is open.", "alarm", CHANNEL_KINDS),
        whole("events_total", "Events begun, by kind.", "kind", CHANNEL_KINDS),
        whole("overmodulation_events_total", "Over-modulation events begun.", "polarity", POLARITIES),
        ChannelFamily(
            "overmodulation_seconds_total",
            "Time beyond the limit of modulation.",
            channels,
            label="polarity",
            keys=POLARITIES,
        ),
        whole("carrier_loss_events_total", "Carrier losses begun."),
        ChannelFamily("carrier_absent_seconds_total", "Time without a carrier.", channels),
    )


class MetricsPage:
    """The outlet behind /metrics.

    The chain's thread hands over moments, readings and events, which costs a few small array operations; the
    text is written by whoever asks for it, and only where something has changed.
    """

    def __init__(
        self,
        channels: Sequence[str],
        quantities: Sequence[Quantity],
        tally: Tally,
        version: str,
        renewal_s: float = 0.1,
    ) -> None:
        """Make the families of these channels.

        renewal_s: a page this young is served again as it is, so that many scrapers cannot starve the chain.
        """
        self._channels = tuple(channels)
        self._row_of = {channel: row for row, channel in enumerate(self._channels)}
        self._states = _state_families(self._channels)
        self._table: dict[str, Numbers] = {family.name: _zeros(family) for family in self._states}
        # What a moment says at once is not said again, later, by the reading.
        own = [quantity for quantity in quantities if quantity.name not in self._table]
        self._quantities = tuple((quantity, _family(quantity, self._channels)) for quantity in own)
        self._slot_peaks = HistogramFamily(
            "modulation_slot_peak_ratio",
            "Peaks of the modulation in each 0.1 s, less what noise lifts them.",
            self._channels,
            label="polarity",
            keys=POLARITIES,
            bounds=SLOT_PEAKS,
        )
        self._slots = np.zeros(self._slot_peaks.shape)
        self._reading: Reading | None = None
        self._open: dict[int, Event] = {}
        self._daemon = DaemonFamilies(tally, version)
        self._lock = threading.Lock()
        self._render_lock = threading.Lock()
        self._renewal_s = renewal_s
        self._pages: dict[bool, tuple[float, bytes]] = {}

    def moment(self, moment: Moment) -> None:
        """Take one hop."""
        rows = self._rows(moment.channels)
        over_s = np.nan_to_num(np.column_stack((moment.over_negative_s, moment.over_positive_s)))
        trusted = (moment.faults == 0)[:, np.newaxis]
        peaks = np.where(trusted, np.column_stack((moment.negative_peak, moment.positive_peak)), np.nan)
        hop_s = (moment.span.end - moment.span.start) / moment.span.rate_hz
        table = self._table
        with self._lock:
            # Not known yet, after a gap: what was known stands until it is.
            table["carrier_present"][rows] = np.where(
                moment.present < 0, table["carrier_present"][rows], moment.present == 1
            )
            table["carrier_loop_locked"][rows] = moment.locked
            self._slot_peaks.observe(self._slots, rows, peaks)
            table["overmodulation_seconds_total"][rows] += over_s
            table["carrier_absent_seconds_total"][rows] += hop_s * (moment.present == 0)

    def reading(self, reading: Reading) -> None:
        """Take one reading."""
        rows = self._rows(reading.channels)
        faults = (reading.faults[:, np.newaxis] & _FAULT_BITS) != 0
        with self._lock:
            self._reading = reading
            self._table["reading_valid"][rows] = reading.valid
            self._table["reading_fault"][rows] = faults

    def event(self, event: Event) -> None:
        """Take an event: counted when first told, its alarm active until it is told with its end.

        Raises ValueError for a kind that is not listed, or that does not belong to a channel (or does).
        """
        kinds = SOURCE_KINDS if event.channel is None else CHANNEL_KINDS
        if event.kind not in kinds:
            where = "without a channel" if event.channel is None else "of a channel"
            raise ValueError(f"event kind {event.kind!r} {where}: must be one of {', '.join(kinds)}")
        with self._lock:
            if event.id not in self._open:
                self._count(event)
            if event.ended_s is None:
                self._open[event.id] = event
            else:
                self._open.pop(event.id, None)
            self._set_alarm(event)

    def source_lost(self) -> None:
        """Take back everything that was measured: there is nothing to measure until `source_back`."""
        with self._lock:
            self._daemon.lost = True
            self._reading = None
            for name in ("carrier_present", "carrier_loop_locked", "reading_valid", "reading_fault"):
                self._table[name][:] = 0

    def source_back(self) -> None:
        """The source delivers again; quantities return with the next reading."""
        with self._lock:
            self._daemon.lost = False

    def render(self, openmetrics: bool) -> bytes:
        """Write the whole page as it stands, at most `renewal_s` old. From any thread."""
        with self._render_lock:
            made, page = self._pages.get(openmetrics, (-np.inf, b""))
            now = time.monotonic()
            if now - made >= self._renewal_s:
                page = self._write(openmetrics)
                self._pages[openmetrics] = now, page
            return page

    def _write(self, openmetrics: bool) -> bytes:
        with self._lock:
            table = {name: values.copy() for name, values in self._table.items()}
            slots = self._slots.copy()
            reading = self._reading
            lost = self._daemon.lost
        # Outside the lock: it reads files of the process, and the chain must not wait for that.
        parts = [self._daemon.text(openmetrics)]
        # Why a reading is not to be trusted means nothing while there is none.
        states = [family for family in self._states if not (lost and family.name == "reading_fault")]
        parts += [family.text(table[family.name], openmetrics) for family in states]
        for quantity, family in self._quantities:
            parts.append(family.text(self._values(quantity, family, reading, lost), openmetrics))
        parts.append(self._slot_peaks.text(slots))
        if openmetrics:
            parts.append(END)
        return b"".join(parts)

    def _values(
        self, quantity: Quantity, family: ChannelFamily, reading: Reading | None, lost: bool
    ) -> Precise:
        """Values of one quantity, NaN where its gauge is to be absent."""
        if reading is None:
            # A 0/1 gauge is there from the first scrape on.
            return np.full(family.shape, 0.0 if quantity.flag and not lost else np.nan)
        values = np.full(family.shape, np.nan)
        if quantity.name in reading.values:
            measured = reading.values[quantity.name]
            if quantity.trusted_only:
                measured = measured.copy()
                measured[~reading.valid] = np.nan
            values[self._rows(reading.channels)] = measured
        return values

    def _count(self, event: Event) -> None:
        if event.channel is None:
            self._daemon.events[event.kind] += 1
            return
        row = self._row_of[event.channel]
        self._table["events_total"][row, CHANNEL_KINDS.index(event.kind)] += 1
        if event.kind in _OVERMODULATION:
            self._table["overmodulation_events_total"][row, _OVERMODULATION[event.kind]] += 1
        if event.kind == "carrier-loss":
            self._table["carrier_loss_events_total"][row] += 1

    def _set_alarm(self, event: Event) -> None:
        active = any(
            other.kind == event.kind and other.channel == event.channel for other in self._open.values()
        )
        if event.channel is not None:
            row = self._row_of[event.channel]
            self._table["alarm_active"][row, CHANNEL_KINDS.index(event.kind)] = active
        elif event.kind in SOURCE_ALARMS:
            self._daemon.alarms[event.kind] = int(active)

    def _rows(self, channels: tuple[str, ...]) -> Rows:
        if channels == self._channels:
            return slice(None)
        return np.array([self._row_of[channel] for channel in channels], np.intp)


def _zeros(family: ChannelFamily) -> Numbers:
    return np.zeros(family.shape, np.int64) if family.whole else np.zeros(family.shape, np.float64)


def _family(quantity: Quantity, channels: Sequence[str]) -> ChannelFamily:
    unit = "" if quantity.flag or not quantity.unit else f" ({quantity.unit})"
    return ChannelFamily(
        quantity.name,
        quantity.meaning.rstrip(".") + unit + ".",
        channels,
        label=quantity.label,
        keys=quantity.keys,
        whole=quantity.flag,
    )
