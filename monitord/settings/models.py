"""The settings as immutable types. Every attribute bears the name of its key in the settings file.

Each value is checked by itself here; what depends on two values is checked in checks.py.
"""

import itertools
import os
import re
import socket
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationInfo,
    field_validator,
)

DETECTORS = (
    *("synchronous", "envelope", "rectifier"),
    *("upper-sideband", "lower-sideband", "suppressed-carrier"),
)
"""Names of the detectors that this version has."""

KINDS = ("socket", "recording", "simulated")
"""Kinds of source that this version has."""

DATATYPES = tuple(
    f"{form}{number}{order}"
    for form in "cr"
    for number, orders in (
        *((number, ("_le", "_be")) for number in ("f32", "f64", "i32", "u32", "i16", "u16")),
        *((number, ("",)) for number in ("i8", "u8")),
    )
    for order in orders
)
"""SigMF names of the sample formats that are understood; those that begin with "r" are a real IF."""

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")
NAME_RULE = "1 to 64 letters, digits, dots, hyphens and underscores, the first a letter or digit"
BUILT_IN_RATE_HZ = 48_000.0
MIN_RATE_HZ, MAX_RATE_HZ = 1_000.0, 50e6
MIN_BANDWIDTH_HZ = 100.0
CFR_MASK = "47-cfr-73.44"
DEFAULT_BANDWIDTH_HZ = 5_000.0
CONTROLLED_AVERAGE_S = 0.1

MOST_TONES = 16
_IDENT_TEXT = re.compile(r"[A-Z0-9]{1,16}")

_HOST = r"\*|[A-Za-z0-9][A-Za-z0-9._-]*|\[[0-9A-Fa-f:.]+(?:%[A-Za-z0-9._-]+)?\]"
_HOST_PORT = re.compile(rf"(?P<host>{_HOST}):(?P<port>[0-9]{{1,5}})")


def quoted(names: tuple[str, ...]) -> str:
    """Names in quotes, as a person lists them."""
    return ", ".join(f'"{name}"' for name in names)


def host_port(text: str) -> tuple[str, int] | None:
    """Split "host:port" (IPv6: "[::1]:port"); None where it is not that."""
    match = _HOST_PORT.fullmatch(text)
    if match is None or int(match["port"]) > 65535:
        return None
    return match["host"], int(match["port"])


def _within(low: float, high: float, unit: str = "") -> AfterValidator:
    def check(value: float) -> float:
        if not low <= value <= high:
            raise ValueError(f"must be from {low:.12g} to {high:.12g} {unit}".rstrip())
        return value

    return AfterValidator(check)


def _above(low: float, high: float, unit: str = "") -> AfterValidator:
    def check(value: float) -> float:
        if not low < value <= high:
            raise ValueError(f"must be more than {low:.12g} and at most {high:.12g} {unit}".rstrip())
        return value

    return AfterValidator(check)


def _at_least(low: float, unit: str) -> AfterValidator:
    def check(value: float) -> float:
        if value < low:
            raise ValueError(f"must be at least {low:.12g} {unit}")
        return value

    return AfterValidator(check)


def _positive(value: float) -> float:
    if value <= 0:
        raise ValueError("must be more than 0 Hz")
    return value


def _not_yet(value: bool) -> bool:
    if value:
        raise ValueError("is not available in this version; leave the key out")
    return value


def _not_empty(value: str) -> str:
    if not value.strip() or not value.isprintable():
        raise ValueError("must be text of at least one character, without control characters")
    return value


def _name(value: str) -> str:
    if NAME.fullmatch(value) is None:
        raise ValueError(f"must be {NAME_RULE}")
    return value


def _name_pattern(value: str) -> str:
    if NAME.fullmatch(value.replace("{khz}", "0")) is None:
        raise ValueError(f"must be {NAME_RULE}; {{khz}} stands for the carrier in kHz")
    return value


def _detector(value: str) -> str:
    if value not in DETECTORS:
        raise ValueError(f"must be one of the detectors of this version: {quoted(DETECTORS)}")
    return value


def _kind(value: str) -> str:
    if value == "soundcard":
        raise ValueError(f"this version cannot use a sound card yet; must be one of {quoted(KINDS)}")
    if value not in KINDS:
        raise ValueError(f"must be one of {quoted(KINDS)}")
    return value


def _datatype(value: str) -> str:
    if value not in DATATYPES:
        raise ValueError(f"must be one of {quoted(DATATYPES)}")
    return value


def _endpoint(value: str) -> str:
    scheme, _, rest = value.partition("://")
    if (scheme == "tcp" and host_port(rest)) or (scheme == "ipc" and rest and value.isprintable()):
        return value
    raise ValueError('must be "tcp://host:port" or "ipc://path"')


def _listen(value: str) -> str:
    address = host_port(value)
    if address is None or address[0] == "*":
        raise ValueError('must be "host:port", such as "127.0.0.1:9560" or "[::1]:9560", the port 0 to 65535')
    return value


def _device(value: object) -> object:
    if value is None or (isinstance(value, str) and value.strip()):
        return value
    if isinstance(value, int) and not isinstance(value, bool) and 0 <= value < 1000:
        return value
    raise ValueError("must be the name of a sound input, a part of it, or its index")


def _ident_text(value: str) -> str:
    if _IDENT_TEXT.fullmatch(value) is None:
        raise ValueError("must be 1 to 16 capital letters and digits")
    return value


Text = Annotated[str, AfterValidator(_not_empty)]


class _Section(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class Station(_Section):
    """Who measures: `name` is free text; default: the host's name."""

    name: Text = Field(default_factory=socket.gethostname)


class Source(_Section):
    """Where the samples come from. Keys of another kind than `kind` hold their defaults and mean nothing.

    sample_rate_hz: samples per second; None only where a recording says it itself.
    center_hz: what 0 Hz of the stream stands for; None only for a recording (it says it itself, or it is 0).
        Described messages say it too where it is not set.
    gain: the receiver's gain is "fixed" or "automatic".
    level_accuracy_db, clock_accuracy_ratio, oscillator_accuracy_ratio: within which (95 %) levels, the sample clock and
        the receiver's oscillator are known to be right; 0: not stated, and the uncertainties are those of noise alone.
    shared_clock: sample clock and oscillator come from one reference, so that `clock_accuracy_ratio` holds for both.
    remove_dc: take the mean away before anything else (not available yet: always False).
    endpoint, pattern, attach, framing, topic: of the ZMQ socket; topic None: none.
    datatype: SigMF name of the sample format; None where the stream or recording says it.
    device: of the sound card; None: the default input.
    wiring: what the audio channels hold; None: "iq" where there are two, a real IF where there is one.
    path, pace: of the recording; pace serves the simulated source too.
    """

    kind: Annotated[str, AfterValidator(_kind)] = Field(description=f"must be one of {quoted(KINDS)}")
    sample_rate_hz: Annotated[float, _within(MIN_RATE_HZ, MAX_RATE_HZ, "Hz")] | None = Field(
        default=None, validate_default=True
    )
    center_hz: float | None = Field(default=None, validate_default=True)
    gain: Literal["fixed", "automatic"] = "fixed"
    level_accuracy_db: Annotated[float, _within(0, 20, "dB")] = 0.0
    clock_accuracy_ratio: Annotated[float, _within(0, 0.01)] = 0.0
    oscillator_accuracy_ratio: Annotated[float, _within(0, 0.01)] = 0.0
    shared_clock: bool = False
    remove_dc: Annotated[bool, AfterValidator(_not_yet)] = False
    endpoint: Annotated[str, AfterValidator(_endpoint)] | None = None
    pattern: Literal["sub", "pull"] = "sub"
    attach: Literal["connect", "bind"] = "connect"
    framing: Literal["bare", "described"] = "bare"
    topic: Text | None = None
    datatype: Annotated[str, AfterValidator(_datatype)] | None = None
    device: Annotated[str | int | None, BeforeValidator(_device)] = None
    wiring: Literal["iq", "left", "right"] | None = None
    path: Text | None = None
    pace: Literal["real-time", "flat-out"] = "real-time"

    @field_validator("sample_rate_hz", mode="before")
    @classmethod
    def _own_rate(cls, value: object, info: ValidationInfo) -> object:
        return BUILT_IN_RATE_HZ if value is None and info.data.get("kind") == "simulated" else value

    @field_validator("center_hz", mode="before")
    @classmethod
    def _own_center(cls, value: object, info: ValidationInfo) -> object:
        return 0.0 if value is None and info.data.get("kind") != "recording" else value

    @property
    def real(self) -> bool | None:
        """The stream is a real IF (True) or IQ (False); None where only the stream itself can say."""
        if self.kind == "simulated":
            return False
        if self.datatype is not None:
            return self.datatype.startswith("r")
        return None if self.wiring is None else self.wiring != "iq"


class Limits(_Section):
    """Limits of modulation: peaks as ratios (1.0 = 100 %); excursions closer than `hold_s` are one event."""

    negative_peak: Annotated[float, _above(0, 2)] = 1.00
    positive_peak: Annotated[float, _above(0, 5)] = 1.25
    hold_s: Annotated[float, _within(0, 60, "s")] = 0.2


class Tone(_Section):
    """A tone whose depth is measured.

    hz: nominal frequency.
    band_hz: of a subcarrier with frequency modulation: the width of the band, `hz` in its middle, that holds it;
        its depth is sqrt(2) times the rms in there. None: a plain tone.
    keyed: the tone comes and goes (an ident); its depth is that while it is on.
    """

    hz: Annotated[float, _at_least(10, "Hz")] = Field(description="must be the tone's frequency in Hz")
    band_hz: Annotated[float, _at_least(10, "Hz")] | None = None
    keyed: bool = False

    @property
    def plain(self) -> bool:
        """Neither keyed nor a subcarrier."""
        return self.band_hz is None and not self.keyed

    @property
    def label(self) -> str:
        """The tone's value of the label `tone_hertz`."""
        return f"{self.hz:g}"


class Ident(_Section):
    """The ident in Morse code that is to be heard.

    expected: its letters and digits.
    period_s: it comes at least once in this time.
    on: what is keyed, a "tone" or the "carrier" itself.
    tone_hz: nominal frequency of the tone.
    """

    expected: Annotated[str, AfterValidator(_ident_text)] = Field(
        description="must be the letters and digits of the ident"
    )
    period_s: Annotated[float, _within(1, 3600, "s")] = 30.0
    on: Literal["tone", "carrier"] = "tone"
    tone_hz: Annotated[float, _at_least(100, "Hz")] = 1020.0


def _tones(value: tuple[Tone, ...]) -> tuple[Tone, ...]:
    if len(value) > MOST_TONES:
        raise ValueError(f"must be at most {MOST_TONES} tables [[channel.tone]]")
    return value


Points = tuple[tuple[float, float], ...]


def _mask(value: object) -> object:
    """Breakpoints as pairs of floats, ascending, or the name of a mask."""
    if value is None or value == CFR_MASK:
        return value
    wrong = f'must be "{CFR_MASK}" or breakpoints [[offset_hz, attenuation_db], ...], two or more, offsets ascending'
    if not isinstance(value, list | tuple) or len(value) < 2:
        raise ValueError(wrong)
    points = []
    for pair in value:
        good = isinstance(pair, list | tuple) and len(pair) == 2
        if not good or not all(isinstance(one, int | float) and not isinstance(one, bool) for one in pair):
            raise ValueError(wrong)
        points.append((float(pair[0]), float(pair[1])))
    offsets = [offset for offset, _ in points]
    if offsets[0] < 0 or any(low > high for low, high in itertools.pairwise(offsets)):
        raise ValueError(wrong)
    return tuple(points)


class Spectrum(_Section):
    """What of a transmitter's emission is measured; meant for a sample of the transmitter, not for reception.

    mask: limits of the emission, "47-cfr-73.44" or breakpoints (offset_hz, attenuation_db); None: no mask.
    power_w: of the transmitter, for the limit beyond 75 kHz of "47-cfr-73.44".
    resolution_hz: noise bandwidth in which the emission is compared with the mask.
    hold_s: for how long the highest levels are held.
    """

    mask: Annotated[Points | Literal["47-cfr-73.44"] | None, BeforeValidator(_mask)] = None
    power_w: Annotated[float, _above(0, 10_000_000, "W")] = 50_000.0
    resolution_hz: Annotated[float, _within(100, 3000, "Hz")] = 300.0
    hold_s: Annotated[float, _within(1, 3600, "s")] = 600.0


class ChannelKeys(_Section):
    """What a channel and a raster of channels share. Frequencies in Hz, times in s, levels in dBFS.

    bandwidth_hz: audio bandwidth measured, each side of the carrier.
    emission_bandwidth_hz: audio bandwidth that the station transmits; unless given, that of `bandwidth_hz`.
    sideband: of the detector "suppressed-carrier": "both", or the one that is transmitted.
    time_constant_s: RC of the rectifier detector.
    acquire_hz: how far off the carrier may be.
    loop_bandwidth_hz: noise bandwidth of the carrier loop.
    carrier_average_s: over how long the carrier's amplitude is averaged.
    carrier_control: the station's carrier moves with its programme; depth then refers to the carrier of each 0.1 s.
    depth_reference: depth refers to the carrier that is "present", or to the "unmodulated" one of the last pause.
    reference_level_dbfs: the usual level of the carrier; None: learned.
    present_c_n0_dbhz, loss_drop_db, loss_after_s: what counts as a carrier, and as its loss.
    expect: a "carrier" is expected here, "none", or "any" (neither alarms).
    tone: the tones whose depth is measured.
    ident: the ident that is to be heard; None: none is.
    spectrum: what of the emission is measured; None: nothing.
    silence_db: rms of the modulation below which a channel is silent, re a sine of 100 %.
    mains_hz: mains frequency at the transmitter, for its hum: 50, 60, or "found" (whichever fits).
    """

    bandwidth_hz: Annotated[float, _at_least(MIN_BANDWIDTH_HZ, "Hz")] = DEFAULT_BANDWIDTH_HZ
    emission_bandwidth_hz: float = Field(default=None, validate_default=True)
    detector: Annotated[str, AfterValidator(_detector)] = "synchronous"
    sideband: Literal["both", "upper", "lower"] = "both"
    time_constant_s: Annotated[float, _within(1e-6, 0.1, "s")] = 1e-4
    acquire_hz: Annotated[float, _at_least(0, "Hz")] = 100.0
    loop_bandwidth_hz: Annotated[float, _within(0.5, 20, "Hz")] = 5.0
    carrier_average_s: Annotated[float, _within(0.1, 10, "s")] = 1.0
    carrier_control: bool = False
    depth_reference: Literal["present", "unmodulated"] = "present"
    reference_level_dbfs: Annotated[float, _within(-200, 20, "dBFS")] | None = None
    present_c_n0_dbhz: Annotated[float, _within(10, 150, "dB-Hz")] = 35.0
    loss_drop_db: Annotated[float, _above(0, 100, "dB")] = 10.0
    loss_after_s: Annotated[float, _within(0, 3600, "s")] = 0.5
    expect: Literal["carrier", "none", "any"] = "carrier"
    silence_db: Annotated[float, _within(-80, 0, "dB")] = -40.0
    mains_hz: Literal[50, 60, "found"] = "found"
    limits: Limits = Limits()
    tone: Annotated[tuple[Tone, ...], Field(strict=False), AfterValidator(_tones)] = ()
    ident: Ident | None = None
    spectrum: Spectrum | None = None

    @property
    def carrierless(self) -> bool:
        """There is no carrier to be measured."""
        return self.detector == "suppressed-carrier"

    @property
    def averaging_s(self) -> float:
        """Over how long the carrier's amplitude is averaged: 0.1 s where it moves with the programme."""
        return CONTROLLED_AVERAGE_S if self.carrier_control else self.carrier_average_s

    @field_validator("emission_bandwidth_hz", mode="before")
    @classmethod
    def _as_measured(cls, value: object, info: ValidationInfo) -> object:
        return info.data.get("bandwidth_hz", DEFAULT_BANDWIDTH_HZ) if value is None else value


class Channel(ChannelKeys):
    """One carrier to be measured. `carrier_hz`: nominal; in a real IF stream, the IF. Else as ChannelKeys."""

    name: Annotated[str, AfterValidator(_name)] = Field(description=f"must be {NAME_RULE}")
    carrier_hz: float = Field(description="must be the nominal carrier in Hz")


class Raster(ChannelKeys):
    """Many channels at once: carriers from `first_hz` up, `last_hz` included where met."""

    first_hz: float = Field(description="must be the lowest carrier in Hz")
    last_hz: float = Field(description="must be the highest carrier in Hz")
    step_hz: Annotated[float, AfterValidator(_positive)] = Field(description="must be the spacing in Hz")
    name: Annotated[str, AfterValidator(_name_pattern)] = Field(description='must be a pattern: "mw-{khz}"')

    def shared(self) -> dict[str, Any]:
        """Keys and values that every channel of the raster takes over."""
        return {key: getattr(self, key) for key in ChannelKeys.model_fields}


class Http(_Section):
    """Where the pages are served: "host:port"."""

    listen: Annotated[str, AfterValidator(_listen)] = "127.0.0.1:9560"


def _state_directory() -> str | None:
    # The service manager may list several directories; the first is the one for the journal.
    return os.environ.get("STATE_DIRECTORY", "").split(":")[0] or None


class Journal(_Section):
    """Where the station log is kept: a directory; None: it is not kept."""

    directory: Text | None = Field(default_factory=_state_directory)


class Settings(_Section):
    """All settings, complete and checked."""

    station: Station = Field(default_factory=Station)
    source: Source
    channels: tuple[Channel, ...]
    http: Http = Field(default_factory=Http)
    journal: Journal = Field(default_factory=Journal)
