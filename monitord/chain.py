"""The stages in order: blocks in; Moments, Readings and Events out to rules and outlets.

Channels that share bandwidth, acquisition range, detector, loop and averaging form a bank and are computed
together. A meter that fails costs that meter: it is counted, its reason logged once. After a gap every stage of
the signal's way begins anew; rules and what was learned go on.
"""

import logging
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Baseband, Block, Detected, Event, Fault, Moment, Precise, Reading, Span
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.errors import ConfigError
from monitord.measure import JOINED, METERS, quantities_of
from monitord.measure.validity import FaultJudge
from monitord.notice import RULES
from monitord.publish.tally import Tally
from monitord.quantities import Quantity
from monitord.settings import Channel, Settings, check_span
from monitord.stage import Bank, Meter, Outlet, Rule
from monitord.stream import Stream

INTERVAL_S = 1.0

Scalar = TypeVar("Scalar", bound=np.generic)

_log = logging.getLogger("monitord.chain")


def banks_of(channels: Sequence[Channel]) -> list[list[Channel]]:
    """Channels grouped into banks, each in the order given."""
    banks: dict[tuple[object, ...], list[Channel]] = {}
    for channel in channels:
        key = (
            channel.detector,
            channel.sideband,
            channel.bandwidth_hz,
            channel.acquire_hz,
            channel.loop_bandwidth_hz,
            channel.averaging_s,
        )
        banks.setdefault(key, []).append(channel)
    return list(banks.values())


class _BankChain:
    """Detector and meters of one bank, each meter behind a guard."""

    def __init__(
        self, bank: Bank, meters: Sequence[type[Meter]], quantities: Sequence[Quantity], tally: Tally
    ) -> None:
        self.bank = bank
        self._quantities = quantities
        self._judge = FaultJudge(bank)
        self._tally = tally
        self._detector = DETECTORS[bank.channels[0].detector]()
        self._detector.prepare(bank)
        self._meters: dict[str, Meter] = {}
        for make in meters:
            meter = make()
            meter.prepare(bank)
            self._meters[type(meter).__name__] = meter
        self._reported: set[str] = set()
        self._unknown = _unknown_fields(len(bank.channels))

    def reset(self) -> None:
        self._detector.reset()
        for meter in self._meters.values():
            meter.reset()

    def detect(self, baseband: Baseband) -> Detected:
        return self._detector.process(baseband)

    def measure(self, detected: Detected) -> tuple[dict[str, Precise], NDArray[np.uint32]]:
        """This hop's fields of Moment, and the faults that stand against it: the judge's and the meters'."""
        fields = dict(self._unknown)
        faults = self._judge.faults(detected)
        for name, meter in self._meters.items():
            try:
                found = meter.process(detected)
                fields |= {name: value for name, value in found.items() if name != "faults"}
                faults |= found.get("faults", faults).astype(np.uint32)
            except Exception as error:  # whatever a meter does wrong must not cost the daemon
                self._failed(name, error)
        faults[(fields["present"] == 0) & detected.locked] |= np.uint32(Fault.WEAK_SIGNAL)
        return fields, faults

    def reading(self) -> dict[str, Precise]:
        """All quantities of the interval; NaN those of a meter that failed."""
        values = {
            quantity.name: np.full(_shape(quantity, len(self.bank.channels)), np.nan)
            for quantity in self._quantities
        }
        for name, meter in self._meters.items():
            try:
                values |= meter.reading()
            except Exception as error:  # as above
                self._failed(name, error)
        for join in JOINED:
            values |= join(self.bank, values)
        return values

    def _failed(self, name: str, error: Exception) -> None:
        self._tally.stage_failures[name] += 1
        if name not in self._reported:
            self._reported.add(name)
            _log.error("%s failed; its quantities are absent until it works again", name, exc_info=error)


def _shape(quantity: Quantity, channels: int) -> tuple[int, ...]:
    return (channels, len(quantity.keys)) if quantity.label else (channels,)


def _unknown_fields(count: int) -> dict[str, Precise]:
    """Fields of a Moment of which no meter knows anything."""
    return {
        "level_dbfs": np.full(count, np.nan),
        "present": np.full(count, -1.0),
        "positive_peak": np.full(count, np.nan),
        "negative_peak": np.full(count, np.nan),
        "over_positive_s": np.zeros(count),
        "over_negative_s": np.zeros(count),
        "over_positive_span_s": np.full((count, 2), np.nan),
        "over_negative_span_s": np.full((count, 2), np.nan),
        "cut_off": np.zeros(count),
    }


class Chain:
    """Runs blocks through all stages. All calls from one thread."""

    def __init__(
        self,
        channels: Sequence[Channel],
        stream: Stream,
        rules: Sequence[Rule],
        outlets: Sequence[Outlet],
        tally: Tally,
        interval_s: float = INTERVAL_S,
        more_meters: Sequence[type[Meter]] = (),
    ) -> None:
        """`more_meters`: what measures besides METERS in this run."""
        groups = banks_of(channels)
        self._tally = tally
        self._tuner = Tuner(stream.rate_hz, stream.center_hz, stream.real, groups)
        learned: dict[str, float] = {}
        meters = (*METERS, *more_meters)
        quantities = quantities_of(channels, more_meters)
        labels = {quantity.name: quantity.keys for quantity in quantities}
        self._banks = [
            _BankChain(
                Bank(
                    tuple(group),
                    branch.rate_hz,
                    branch.frames,
                    branch.noise_hz,
                    stream.fixed_gain,
                    learned,
                    labels,
                    stream.accuracy(group),
                ),
                meters,
                quantities,
                tally,
            )
            for group, branch in zip(groups, self._tuner.branches, strict=True)
        ]
        self.names = tuple(channel.name for channel in channels)
        banked = [channel.name for group in groups for channel in group]
        self._order = np.array([banked.index(name) for name in self.names])
        self._in_order = bool(np.all(self._order == np.arange(len(banked))))
        self._rules = tuple(rules)
        for rule in self._rules:
            rule.prepare(channels)
        self._outlets = tuple(outlets)
        self._interval_hops = max(1, round(interval_s / self._tuner.grid.hop_s))
        self._faults: NDArray[np.uint32] = np.zeros(len(banked), np.uint32)
        self._pending: list[Span] = []
        for make in meters:
            tally.stage_failures.setdefault(make.__name__, 0)
        for stage in ("condition", "detect", "measure", "notice", "publish"):
            tally.stage_seconds.setdefault(stage, 0.0)

    @classmethod
    def beginning_with(
        cls,
        block: Block,
        settings: Settings,
        outlets: Sequence[Outlet],
        tally: Tally,
        interval_s: float = INTERVAL_S,
        more_meters: Sequence[type[Meter]] = (),
    ) -> "Chain":
        """The chain, with all rules, for the stream that begins with `block`.

        Raises ConfigError with every channel that lies outside the stream.
        """
        stream = Stream.of(block, settings.source)
        problems = check_span(settings, stream.rate_hz, stream.center_hz, stream.real)
        if problems:
            raise ConfigError(problems)
        rules = [make() for make in RULES]
        return cls(settings.channels, stream, rules, outlets, tally, interval_s, more_meters)

    @property
    def wanted(self) -> int:
        """Samples that complete the next hop: fewer change nothing."""
        return self._tuner.wanted

    def process(self, block: Block) -> None:
        """Take one block."""
        hops = self._tuner.process(block)
        while True:
            with self._timed("condition"):
                hop = next(hops, None)
            if hop is None:
                return
            self._hop(hop)

    def finish(self) -> None:
        """The stream is over: tell the rest, if it is at least half an interval, and what is still open."""
        if len(self._pending) * 2 >= self._interval_hops:
            self._emit_reading()
        for rule in self._rules:
            self.tell(rule.finish())

    def tell(self, events: Iterable[Event]) -> None:
        """Hand events to all outlets."""
        for event in events:
            for outlet in self._outlets:
                outlet.event(event)

    def _hop(self, hop: tuple[Baseband, ...]) -> None:
        span = hop[0].span
        if span.fresh:
            self._after_gap(span)
        with self._timed("detect"):
            detected = [bank.detect(part) for bank, part in zip(self._banks, hop, strict=True)]
        with self._timed("measure"):
            moment = self._moment(span, detected)
        self._notice(lambda rule: rule.moment(moment))
        with self._timed("publish"):
            for outlet in self._outlets:
                outlet.moment(moment)
        self._pending.append(span)
        self._faults |= moment.faults
        if span.index % self._interval_hops == self._interval_hops - 1:
            self._emit_reading()

    def _after_gap(self, span: Span) -> None:
        """Tell what is left of the interval in which the gap began, and begin anew."""
        if (
            self._pending
            and self._pending[-1].index // self._interval_hops != span.index // self._interval_hops
        ):
            self._faults |= np.uint32(Fault.SOURCE_GAP)
            self._emit_reading()
        self._pending.clear()
        for bank in self._banks:
            bank.reset()

    def _moment(self, span: Span, detected: Sequence[Detected]) -> Moment:
        measured = [bank.measure(hop) for bank, hop in zip(self._banks, detected, strict=True)]
        parts, faults = zip(*measured, strict=True)
        fields = {name: self._merged([part[name] for part in parts]) for name in parts[0]}
        present, cut_off = fields.pop("present"), fields.pop("cut_off")
        return Moment(
            channels=self.names,
            span=span,
            present=present.astype(np.int8),
            cut_off=cut_off > 0,
            locked=self._merged([hop.locked for hop in detected]),
            settled=self._merged([hop.settled for hop in detected]),
            faults=self._merged(faults),
            **fields,
        )

    def _emit_reading(self) -> None:
        with self._timed("measure"):
            parts = [bank.reading() for bank in self._banks]
            values = {name: self._merged([part[name] for part in parts]) for name in parts[0]}
            span = replace(
                self._pending[-1], start=self._pending[0].start, clipped=sum(s.clipped for s in self._pending)
            )
            reading = Reading(self.names, span, values, self._faults == 0, self._faults)
        self._pending.clear()
        self._faults = np.zeros_like(self._faults)
        self._notice(lambda rule: rule.reading(reading))
        with self._timed("publish"):
            for outlet in self._outlets:
                outlet.reading(reading)

    def _notice(self, ask: Callable[[Rule], Sequence[Event]]) -> None:
        with self._timed("notice"):
            events = [event for rule in self._rules for event in ask(rule)]
        if events:
            with self._timed("publish"):
                self.tell(events)

    def _merged(self, parts: Sequence[NDArray[Scalar]]) -> NDArray[Scalar]:
        """The banks' rows as one array in the order of the settings."""
        if len(parts) == 1 and self._in_order:
            return parts[0]
        merged: NDArray[Scalar] = np.concatenate(parts)[self._order]
        return merged

    @contextmanager
    def _timed(self, stage: str) -> Iterator[None]:
        begin = time.perf_counter()
        yield
        self._tally.stage_seconds[stage] += time.perf_counter() - begin
