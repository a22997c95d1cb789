"""Settings files (TOML) into validated, immutable settings, and every mistake at once into words.

The models are in models.py. A file is read in two passes: each table by itself
(problems.py), then what depends on more than one value (checks.py), over all that
did parse. Whatever is wrong is told in one line each: key, value, what would be right.
"""

import tomllib
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from monitord.errors import ConfigError
from monitord.settings.checks import (
    MOST_CHANNELS,
    OF_EVERY_KIND,
    Range,
    channel_problems,
    known_range,
    raster_carriers,
    raster_channels,
    raster_span_problems,
    source_problems,
)
from monitord.settings.models import (
    DETECTORS,
    MIN_RATE_HZ,
    Channel,
    Http,
    Ident,
    Journal,
    Limits,
    Raster,
    Settings,
    Source,
    Spectrum,
    Station,
    Tone,
)
from monitord.settings.problems import Model, Part, one_line, shown, take, unknown_key

__all__ = [
    "DETECTORS",
    "Channel",
    "Http",
    "Ident",
    "Journal",
    "Limits",
    "Settings",
    "Source",
    "Spectrum",
    "Station",
    "Tone",
    "built_in",
    "built_in_channels",
    "check_span",
    "load",
    "parse",
]

_SECTIONS = ("station", "source", "channel", "raster", "http", "journal")
_NOT_FOR_RECORDINGS = ("http", "journal", "notice")


def load(path: str | Path, *, recording: str | None = None) -> Settings:
    """Read a settings file. With `recording`, that recording is the source: see `parse`.

    Raises ConfigError with every problem, also where the file cannot be read.
    """
    try:
        text = Path(path).read_bytes().decode("utf-8-sig")
    except OSError as error:
        raise ConfigError([f"{path}: cannot be read: {error.strerror}; must be a settings file"]) from error
    except UnicodeDecodeError as error:
        raise ConfigError([f"{path}: byte {error.start} is not UTF-8; must be UTF-8 text"]) from error
    return parse(text, str(path), recording=recording)


def parse(text: str, where: str, *, recording: str | None = None) -> Settings:
    """Turn the text of a settings file into settings; `where` is its name in messages.

    With `recording`, that recording is the source, as fast as it goes: [source] may be missing or say only
    what the recording does not; what it says of another kind of source is passed over, as are [http],
    [journal] and [[notice]]. Whether the channels lie inside the recording is checked here where the
    settings say enough; else by `check_span` once it is open.

    Raises ConfigError with every problem.
    """
    document = _document(text, where)
    problems: list[str] = []
    if recording is not None:
        document = _for_recording(document, recording)
    settings = _settings(document, problems, ignore_state=recording is not None)
    if settings is None or problems:
        raise ConfigError([f"{where}: {problem}" for problem in problems])
    return settings


def built_in() -> Settings:
    """Settings of the built-in simulated station, for running without a settings file."""
    return Settings(source=Source(kind="simulated"), channels=built_in_channels())


def check_span(settings: Settings, rate_hz: float, center_hz: float, real: bool) -> tuple[str, ...]:
    """Lines about channels outside a stream of this rate and centre, both in Hz; `real`: it is a real IF."""
    if rate_hz < MIN_RATE_HZ:
        return (f"sample rate = {shown(rate_hz)}: must be at least {shown(MIN_RATE_HZ)} samples per second",)
    return tuple(_outside(settings.channels, Range(rate_hz, center_hz, real)))


def _document(text: str, where: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except RecursionError as error:
        raise ConfigError([f"{where}: nested too deeply; settings are tables of plain values"]) from error
    except ValueError as error:  # beside syntax errors: integers of thousands of digits
        raise ConfigError([f"{where}: not valid TOML: {one_line(str(error))}"]) from error


def _for_recording(document: Mapping[str, Any], recording: str) -> dict[str, Any]:
    kept = {key: value for key, value in document.items() if key not in _NOT_FOR_RECORDINGS}
    source = kept.get("source", {})
    if isinstance(source, dict):
        if source.get("kind", "recording") != "recording":
            passed_over = set(Source.model_fields) - OF_EVERY_KIND - {"wiring"}
            source = {key: value for key, value in source.items() if key not in passed_over}
        kept["source"] = source | {"kind": "recording", "path": recording, "pace": "flat-out"}
    return kept


def _settings(document: Mapping[str, Any], problems: list[str], *, ignore_state: bool) -> Settings | None:
    _unknown_sections(document, problems)
    source = _section(Source, document, "source", problems)
    if "source" not in document:
        problems.append("source: missing; must be a section [source] that says at least its kind")
    if source is not None:
        problems.extend(source_problems(source))
    station = _section(Station, document, "station", problems)
    channels = _channels(document, source, problems)
    http = _section(Http, document, "http", problems)
    journal = _section(Journal, document, "journal", problems)
    if problems or source is None:
        return None
    return Settings(
        source=source.model,
        channels=channels,
        station=station.model if station else Station(),
        http=http.model if http else Http(),
        journal=journal.model if journal else Journal(directory=None) if ignore_state else Journal(),
    )


def _unknown_sections(document: Mapping[str, Any], problems: list[str]) -> None:
    for key, value in document.items():
        if key == "notice":
            problems.append("notice: this version cannot send notices yet; leave [[notice]] out")
        elif key not in _SECTIONS:
            problems.append(unknown_key("", value, key, _SECTIONS))


def _section(
    model: type[Model], document: Mapping[str, Any], key: str, problems: list[str]
) -> Part[Model] | None:
    return take(model, document[key], key, problems) if key in document else None


def _tables(
    model: type[Model], document: Mapping[str, Any], key: str, problems: list[str]
) -> list[Part[Model]]:
    raw = document.get(key, [])
    if not isinstance(raw, list):
        problems.append(f"{key} = {shown(raw)}: must be a table in an array: write [[{key}]]")
        return []
    parts = (take(model, table, f"{key}[{index}]", problems) for index, table in enumerate(raw))
    return [part for part in parts if part is not None]


def _channels(
    document: Mapping[str, Any], source: Part[Source] | None, problems: list[str]
) -> tuple[Channel, ...]:
    """Channels as written, then those of the rasters; one that overrides stands in its raster's place."""
    span = _span(source)
    if not document.get("channel") and not document.get("raster"):
        return _channels_unasked(source, span, problems)
    own = _tables(Channel, document, "channel", problems)
    problems.extend(channel_problems(own, span))
    named = {part.model.name: part.model for part in own if part.sound("name")}
    of_rasters: dict[str, Channel] = {}
    for part in _tables(Raster, document, "raster", problems):
        carriers = raster_carriers(part, problems)
        channels = raster_channels(part, carriers, problems)
        _names_of_other_rasters(part, channels, of_rasters, problems)
        of_rasters.update((channel.name, named.get(channel.name, channel)) for channel in channels)
        if channels:
            carriers = [channel.carrier_hz for channel in channels if channel.name not in named]
        if span is not None:
            problems.extend(raster_span_problems(part, carriers, span))
    alone = [part.model for part in own if part.model.name not in of_rasters]
    count = len(alone) + len(of_rasters)
    if count > MOST_CHANNELS:
        problems.append(f"channel: {count} channels in all; must be at most {MOST_CHANNELS}")
    return (*alone, *of_rasters.values())


def _span(source: Part[Source] | None) -> Range | None:
    if source is None or not source.sound(
        "kind", "sample_rate_hz", "center_hz", "framing", "datatype", "wiring"
    ):
        return None
    return known_range(source.model)


def _names_of_other_rasters(
    part: Part[Raster], channels: Iterable[Channel], others: Mapping[str, Channel], problems: list[str]
) -> None:
    twice = next((channel.name for channel in channels if channel.name in others), None)
    if twice is not None:
        problems.append(part.problem("name", f"gives {shown(twice)}, which another raster gives too"))


def _channels_unasked(
    source: Part[Source] | None, span: Range | None, problems: list[str]
) -> tuple[Channel, ...]:
    if source is None or not source.sound("kind"):
        return ()
    if source.model.kind != "simulated":
        problems.append("channel: missing; must be at least one [[channel]] or [[raster]]")
        return ()
    channels = built_in_channels()
    if span is not None and any(_outside(channels, span)):
        problems.append(
            f"channel: missing; the built-in channels do not lie inside the source's span ({span}):"
            " must be [[channel]]s of your own, or no sample_rate_hz and center_hz"
        )
    return channels


def _outside(channels: Iterable[Channel], span: Range) -> Iterable[str]:
    for channel in channels:
        trouble = span.trouble(channel)
        if trouble is not None:
            key, text = trouble
            yield f'channel "{channel.name}".{key} = {shown(getattr(channel, key))}: {text}'


def built_in_channels() -> tuple[Channel, ...]:
    """The channels of the simulated station when none are named: three, with nominal carriers round 0 Hz."""
    return (
        Channel(name="alder", carrier_hz=-14_000.0),
        Channel(name="birch", carrier_hz=-1_000.0),
        Channel(name="cedar", carrier_hz=13_000.0),
    )
