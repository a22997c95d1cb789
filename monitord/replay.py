"""Recordings through the very chain of the daemon, as fast as it goes."""

import logging
import sys
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Protocol, TextIO

import numpy as np
import scipy.fft
from tqdm import tqdm

from monitord.acquire import make_source
from monitord.blocks import Block, Event, Moment, Reading
from monitord.chain import Chain
from monitord.errors import ConfigError, MonitordError, RecordingError
from monitord.measure import quantities_of
from monitord.publish.lines import Csv, JsonLines
from monitord.publish.table import Table
from monitord.publish.tally import Tally
from monitord.service import count_block
from monitord.settings import Channel, Settings, Source, load
from monitord.stage import Meter, Outlet, SampleSource

_SEARCH_S = 2.0
_CLEAR_OF_MEDIAN = 100.0
_ROUND_HZ, _ROUND_WITHIN_HZ = 100.0, 25.0  # broadcast and standard carriers stand on round frequencies
MIN_BANDWIDTH_HZ = 100.0
_NEAR_ZERO_HZ = 20.0  # of a real IF, where only an offset or hum can be

_log = logging.getLogger("monitord.replay")


class Writer(Outlet, Protocol):
    """An outlet that ends with a summary."""

    def finish(self, summary: Mapping[str, object]) -> None:
        """Write the rest, and the summary."""
        ...


def writer_for(
    form: str, channels: Sequence[Channel], out: TextIO, more_meters: Sequence[type[Meter]] = ()
) -> Writer:
    """The writer of a format (json, csv or table) for the quantities of these channels."""
    quantities = quantities_of(channels, more_meters)
    if form == "json":
        return JsonLines(quantities, out)
    if form == "csv":
        return Csv(quantities, out, sys.stderr)
    return Table(quantities, out)


def channels_named(settings_path: Path | None, recording: str) -> tuple[Channel, ...]:
    """The channels that a settings file names; none without one (then each recording's strongest is taken)."""
    return () if settings_path is None else load(settings_path, recording=recording).channels


class Counter:
    """Counts what went out, for the summary."""

    def __init__(self) -> None:
        self.readings = 0
        self.valid = 0
        self.events: dict[str, int] = {}
        self._seen: set[int] = set()

    def moment(self, moment: Moment) -> None:
        """See stage.Outlet."""

    def reading(self, reading: Reading) -> None:
        """See stage.Outlet."""
        self.readings += len(reading.channels)
        self.valid += int(np.sum(reading.valid))

    def event(self, event: Event) -> None:
        """See stage.Outlet."""
        if event.id not in self._seen:
            self._seen.add(event.id)
            self.events[event.kind] = self.events.get(event.kind, 0) + 1


class Replay:
    """Runs recordings one after the other into one writer."""

    def __init__(
        self,
        writer: Writer,
        settings_path: Path | None,
        every_s: float,
        more_meters: Sequence[type[Meter]] = (),
    ) -> None:
        """`more_meters`: what measures besides the daemon's meters; the writer must know them too."""
        self._writer = writer
        self._settings_path = settings_path
        self._every_s = every_s
        self._more_meters = more_meters
        self._counter = Counter()
        self._tally = Tally()
        self._seconds = 0.0

    def run(self, recordings: Sequence[str]) -> bool:
        """Replay all; False if one of them failed (each failure has been told in one line)."""
        good = True
        for recording in recordings:
            try:
                self._one(recording)
            except KeyboardInterrupt:
                print(f"monitord: stopped within {recording}", file=sys.stderr)  # noqa: T201 - the way to the user
                good = False
                break
            except ConfigError:
                raise
            except MonitordError as error:
                print(f"monitord: {error}", file=sys.stderr)  # noqa: T201 - the way to the user
                good = False
        tally, counter = self._tally, self._counter
        self._writer.finish(
            {
                "recordings": len(recordings),
                "seconds": self._seconds,
                "samples": tally.samples,
                "lost_samples": sum(tally.lost.values()),
                "clipped_samples": tally.clipped,
                "readings": counter.readings,
                "valid_readings": counter.valid,
                "events": counter.events,
                "complete": good,
            }
        )
        return good

    def _settings(self, recording: str) -> Settings:
        if self._settings_path is not None:
            return load(self._settings_path, recording=recording)
        return Settings(source=Source(kind="recording", path=recording, pace="flat-out"), channels=())

    def _one(self, recording: str) -> None:
        settings = self._settings(recording)
        if not settings.channels:
            with _opened(settings) as source:
                found = strongest_carrier(source, recording)
            settings = settings.model_copy(update={"channels": (found,)})
        with _opened(settings) as source:
            self._through(source, settings)

    def _through(self, source: SampleSource, settings: Settings) -> None:
        outlets = (self._writer, self._counter)
        chain: Chain | None = None
        end_s = 0.0
        try:
            with tqdm(unit="s", unit_scale=True, disable=not sys.stderr.isatty(), leave=False) as progress:
                for block in _blocks(source):
                    chain = chain or Chain.beginning_with(
                        block, settings, outlets, self._tally, self._every_s, self._more_meters
                    )
                    count_block(self._tally, block)
                    chain.process(block)
                    progress.update(block.end / block.rate_hz - end_s)
                    end_s = block.end / block.rate_hz
            if end_s * 2 < self._every_s:
                _log.warning("%s: %.3f s are too short for a reading", settings.source.path, end_s)
        finally:
            if chain is not None:
                chain.finish()
            self._seconds += end_s


def _blocks(source: SampleSource) -> Iterator[Block]:
    while not source.ended:
        block = source.read(1.0)
        if block is not None:
            yield block


@contextmanager
def _opened(settings: Settings) -> Iterator[SampleSource]:
    source = make_source(settings.source)
    source.open()
    try:
        yield source
    finally:
        source.close()


def strongest_carrier(source: SampleSource, name: str) -> Channel:
    """One synchronous channel on the strongest line of the first seconds of recording `name`; tells which."""
    pieces: list[Block] = []
    for block in _blocks(source):
        pieces.append(block)
        if block.end >= _SEARCH_S * block.rate_hz:
            break
    if not pieces:
        raise RecordingError(f"{name}: holds no samples to look for a carrier in")
    first = pieces[0]
    wave = np.concatenate([block.samples for block in pieces])
    power = np.abs(scipy.fft.fft(wave * np.hanning(len(wave)))) ** 2
    if power.max() <= _CLEAR_OF_MEDIAN * np.median(power):
        raise RecordingError(
            f"{name}: no carrier stands out of its first {_SEARCH_S:g} s; name a channel in --settings"
        )
    offset_hz = scipy.fft.fftfreq(len(wave), 1 / first.rate_hz)
    if not np.iscomplexobj(wave):
        power[offset_hz < _NEAR_ZERO_HZ] = 0
    measured_hz = first.center_hz + float(offset_hz[np.argmax(power)])
    nearest_hz = round(measured_hz / _ROUND_HZ) * _ROUND_HZ
    carrier_hz = (
        nearest_hz if abs(nearest_hz - measured_hz) <= _ROUND_WITHIN_HZ else float(round(measured_hz))
    )
    channel = _widest_fit(carrier_hz, first)
    _log.info(
        "%s: no channel set: one synchronous channel, %g Hz each side, on the strongest carrier, taken as %.10g Hz",
        name,
        channel.bandwidth_hz,
        carrier_hz,
    )
    return channel


def _widest_fit(carrier_hz: float, block: Block) -> Channel:
    """The channel with the default bandwidth, or with as much of it as the recording has round the carrier."""
    offset_hz = carrier_hz - block.center_hz
    room_hz = block.rate_hz / 2 - abs(offset_hz)
    if not np.iscomplexobj(block.samples):
        room_hz = min(room_hz, offset_hz)
    name = f"carrier-{carrier_hz / 1000:g}-khz"
    channel = Channel(name=name, carrier_hz=carrier_hz)
    bandwidth_hz = min(channel.bandwidth_hz, float(np.floor(room_hz - channel.acquire_hz - 1)))
    if bandwidth_hz < MIN_BANDWIDTH_HZ:
        raise RecordingError(
            f"strongest carrier at {carrier_hz:.10g} Hz: too near the edge of the recording to be measured; "
            "name a channel in --settings"
        )
    return Channel(name=name, carrier_hz=carrier_hz, bandwidth_hz=bandwidth_hz)
