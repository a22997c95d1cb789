"""What a message on the socket must be: frames, header, samples. No sockets here, only bytes."""

import json
from dataclasses import dataclass
from math import isclose
from typing import Any

from monitord.acquire.samples import SampleFormat, parse_time, sample_format
from monitord.settings import Source

REJECTIONS = ("frames", "header", "datatype", "rate", "frequency", "length", "non-finite", "overlap")
"""Why a message can be rejected; each is a key of `SourceCounts.rejected` from the start."""

HEADER_BYTES = 4096
LARGEST_NUMBER = 2**53
"""Beyond this not every integer survives in JSON."""


class MessageError(Exception):
    """A message is not what was agreed: `reason` is one of `REJECTIONS`, `str()` says more."""

    def __init__(self, reason: str, why: str) -> None:
        super().__init__(why)
        self.reason = reason


@dataclass(frozen=True, slots=True)
class Message:
    """Samples of one message, not yet decoded.

    data, frames, form: the samples as bytes, how many they are (at least one), and how they are stored.
    center_hz: what 0 Hz of them stands for.
    start: the sender's index of the first sample, or None where the sender does not say (bare).
    utc: UTC of the first sample, seconds since 1970, or None where the sender does not say.
    """

    data: bytes
    frames: int
    form: SampleFormat
    center_hz: float
    start: int | None = None
    utc: float | None = None


@dataclass(frozen=True, slots=True)
class _Header:
    format: SampleFormat
    center_hz: float
    start: int
    utc: float | None


class Framing:
    """Reads messages as the settings say.

    format, center_hz: what the samples are; in described framing, where the settings leave them open, the first
        good message fixes them (until then `format` is None and `center_hz` is 0).
    """

    def __init__(self, settings: Source) -> None:
        self.rate_hz = float(settings.sample_rate_hz or 0)
        self.format = sample_format(settings.datatype) if settings.datatype else None
        self.center_hz = float(settings.center_hz or 0)
        self._center_known = "center_hz" in settings.model_fields_set  # else it holds a default
        self._described = settings.framing == "described"
        self._topic = settings.topic.encode() if settings.topic else None

    def parse(self, frames: list[bytes]) -> Message:
        """Check one message, given as its frames. Raises MessageError."""
        body = frames
        if self._topic is not None:
            if not frames or frames[0] != self._topic:
                raise MessageError("frames", "the first frame is not the topic")
            body = frames[1:]
        wanted = 2 if self._described else 1
        if len(body) != wanted:
            raise MessageError("frames", f"{len(body)} frames where {wanted} were agreed")
        return self._parse_described(*body) if self._described else self._parse_bare(body[0])

    def _parse_bare(self, data: bytes) -> Message:
        if self.format is None:
            raise MessageError("datatype", "source.datatype must say what bare samples are")
        return Message(data, _whole_frames(data, self.format), self.format, self.center_hz)

    def _parse_described(self, head: bytes, data: bytes) -> Message:
        header = self._agreed(_read_header(head))
        frames = _whole_frames(data, header.format)
        self.format, self.center_hz, self._center_known = header.format, header.center_hz, True
        return Message(data, frames, header.format, header.center_hz, header.start, header.utc)

    def _agreed(self, fields: dict[str, Any]) -> _Header:
        """Hold a header against the settings and against the messages before."""
        form = sample_format(_text(fields, "core:datatype"))
        if form is None or self.format not in (None, form):
            agreed = self.format.name if self.format else "one of SigMF's datatypes"
            raise MessageError("datatype", f"{fields['core:datatype'][:40]!r} where {agreed} was agreed")
        rate_hz = _number(fields, "core:sample_rate")
        if not isclose(rate_hz, self.rate_hz, rel_tol=1e-9):
            raise MessageError("rate", f"{rate_hz:.12g} S/s where {self.rate_hz:.12g} S/s were agreed")
        center_hz = _number(fields, "core:frequency") if "core:frequency" in fields else self.center_hz
        self._check_center(center_hz, form.real)
        start = fields["core:sample_start"]
        if not isinstance(start, int):
            raise MessageError("header", "core:sample_start must be an integer")
        return _Header(form, center_hz, int(_number(fields, "core:sample_start")), _time(fields))

    def _check_center(self, center_hz: float, real: bool) -> None:
        agreed_hz = 0.0 if real else self.center_hz
        if (real or self._center_known) and not isclose(center_hz, agreed_hz, rel_tol=1e-9, abs_tol=1e-6):
            raise MessageError("frequency", f"{center_hz:.12g} Hz where {agreed_hz:.12g} Hz was agreed")


def _whole_frames(data: bytes, form: SampleFormat) -> int:
    frames, rest = divmod(len(data), form.sample_bytes)
    if rest or not frames:
        raise MessageError("length", f"{len(data)} bytes are not samples of {form.sample_bytes} bytes each")
    return frames


def _read_header(head: bytes) -> dict[str, Any]:
    if len(head) > HEADER_BYTES:
        raise MessageError("header", f"{len(head)} bytes; at most {HEADER_BYTES} are allowed")
    try:
        fields = json.loads(head)
    except (ValueError, RecursionError):
        raise MessageError("header", "not JSON") from None
    if not isinstance(fields, dict):
        raise MessageError("header", "not a JSON object")
    for key in ("core:datatype", "core:sample_rate", "core:sample_start"):
        if key not in fields:
            raise MessageError("header", f"{key} is missing")
    return fields


def _text(fields: dict[str, Any], key: str) -> str:
    value = fields[key]
    if not isinstance(value, str):
        raise MessageError("header", f"{key} must be a string")
    return value


def _number(fields: dict[str, Any], key: str) -> float:
    value = fields[key]
    if isinstance(value, bool) or not isinstance(value, int | float) or not 0 <= value <= LARGEST_NUMBER:
        raise MessageError("header", f"{key} must be a number in 0..2^53")
    return value


def _time(fields: dict[str, Any]) -> float | None:
    if "core:datetime" not in fields:
        return None
    try:
        return parse_time(_text(fields, "core:datetime"))
    except ValueError as problem:
        raise MessageError("header", f"core:datetime: {problem}") from None
