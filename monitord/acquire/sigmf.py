"""SigMF recordings: a JSON file that says what the samples in the file beside it are.

Source: SigMF specification 1.2 (global object, captures array, Dataset format). Read directly; no library.
"""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitord.acquire.samples import FORMATS, SampleFormat, parse_time, sample_format
from monitord.errors import RecordingError

LARGEST_NUMBER = 2**53


@dataclass(frozen=True, slots=True)
class Piece:
    """Stored numbers that follow each other without a break.

    codes: shape (frames * components,), as stored.
    start: index of the first sample since the recording began, lost samples counted.
    utc: of the first sample, seconds since 1970, or None.
    """

    codes: NDArray[Any]
    start: int
    utc: float | None


@dataclass(frozen=True, slots=True)
class _Segment:
    """One capture: `frames` samples from byte `offset` on, the first of index `start`."""

    offset: int
    frames: int
    start: int
    utc: float | None


class SigmfFile:
    """A SigMF recording, opened.

    format, rate_hz: of its samples; datatype: the name of the format.
    center_hz: `core:frequency` of its captures, or None where they do not say.
    shortfall: what is missing at its end, in words; "" where it is whole.
    Raises RecordingError where it is missing, empty, or not what it should be.
    """

    def __init__(self, meta: Path) -> None:
        self._meta = meta
        fields = self._load()
        self._global = self._object(fields.get("global"), "global")
        captures = fields.get("captures", [])
        if not isinstance(captures, list):
            raise self._error("captures must be an array")
        self._captures = [self._object(capture, f"captures[{k}]") for k, capture in enumerate(captures)] or [
            {}
        ]
        self.format = self._format()
        self.datatype = self.format.name
        self._check_layout()
        self.rate_hz = self._rate()
        self.center_hz = self._center()
        self.shortfall = ""
        self._data = self._data_path()
        self._segments = self._lay_out(self._data.stat().st_size)
        if not any(segment.frames for segment in self._segments):
            raise RecordingError(f"{self._data}: holds no samples")
        self._segment, self._position = 0, 0

    def read(self, frames: int) -> Piece | None:
        """Read the next at most `frames` samples, never across a gap; None at the end."""
        while self._segment < len(self._segments) and self._position >= self._segments[self._segment].frames:
            self._segment, self._position = self._segment + 1, 0
        if self._segment == len(self._segments):
            return None
        segment, size = self._segments[self._segment], self.format.components
        wanted = min(frames, segment.frames - self._position)
        offset = segment.offset + self._position * self.format.sample_bytes
        codes = np.fromfile(self._data, self.format.component, wanted * size, offset=offset)
        got = len(codes) // size
        if got < wanted:
            self.shortfall = "became shorter while it was read; record it anew"
            self._segments = self._segments[: self._segment]
        start = segment.start + self._position
        utc = None if segment.utc is None else segment.utc + self._position / self.rate_hz
        self._position += got
        return Piece(codes[: got * size], start, utc) if got else None

    def close(self) -> None:
        """Nothing is held open between reads."""

    def _error(self, problem: str) -> RecordingError:
        return RecordingError(f"{self._meta}: {problem}")

    def _load(self) -> dict[str, Any]:
        try:
            return self._object(json.loads(self._meta.read_bytes()), "the file")
        except (ValueError, RecursionError) as error:
            raise self._error(f"not a SigMF recording: not JSON ({error})") from None
        except OSError as error:
            raise self._error(f"cannot be read: {error.strerror}") from None

    def _object(self, value: object, name: str) -> dict[str, Any]:
        if not isinstance(value, dict):
            raise self._error(f"not a SigMF recording: {name} must be a JSON object")
        return value

    def _format(self) -> SampleFormat:
        datatype = str(self._global.get("core:datatype"))
        form = sample_format(datatype)
        if form is None:
            raise self._error(f'core:datatype is "{datatype[:40]}"; must be one of {", ".join(FORMATS)}')
        return form

    def _check_layout(self) -> None:
        if self._integer(self._global, "core:num_channels", 1) != 1:
            raise self._error("core:num_channels must be 1: only one stream can be read at a time")
        if self._global.get("core:metadata_only"):
            raise self._error("core:metadata_only: there are no samples; name a recording that holds them")

    def _rate(self) -> float:
        rate_hz = self._number(self._global, "core:sample_rate", None)
        if not rate_hz:
            raise self._error("core:sample_rate is missing or 0; must be samples per second")
        return rate_hz

    def _center(self) -> float | None:
        said = {self._number(capture, "core:frequency", None) for capture in self._captures} - {None}
        if len(said) > 1:
            raise self._error(
                "core:frequency changes between captures; must be one, split the recording there"
            )
        center_hz = said.pop() if said else None
        if self.format.real and center_hz:
            raise self._error(f"core:frequency is {center_hz:.12g}; must be 0 or left out for a real IF")
        return center_hz

    def _number(self, fields: dict[str, Any], key: str, default: float | None) -> float | None:
        value = fields.get(key, default)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int | float) or not 0 <= value <= LARGEST_NUMBER:
            raise self._error(f"{key} is {str(value)[:40]}; must be a number in 0..2^53")
        return float(value)

    def _integer(self, fields: dict[str, Any], key: str, default: int) -> int:
        number = self._number(fields, key, default)
        if number is None or number != int(number):
            raise self._error(f"{key} is {str(fields[key])[:40]}; must be an integer")
        return int(number)

    def _utc(self, capture: dict[str, Any]) -> float | None:
        text = capture.get("core:datetime")
        try:
            return None if text is None else parse_time(str(text))
        except ValueError as problem:
            raise self._error(f"core:datetime: {problem}") from None

    def _data_path(self) -> Path:
        name = self._global.get("core:dataset", self._meta.with_suffix(".sigmf-data").name)
        if not isinstance(name, str) or name in ("", ".", "..") or Path(name).name != name or "\\" in name:
            raise self._error(
                f"core:dataset is {str(name)[:80]!r}; must be a plain file name in the same folder"
            )
        path = self._meta.with_name(name)
        if not path.is_file():
            raise self._error(f"its samples are missing: there is no file {path}")
        return path

    def _lay_out(self, size: int) -> list[_Segment]:
        """Find each capture's samples in the data file, of `size` bytes."""
        width, begins = self.format.sample_bytes, self._begins()
        payload = size - self._integer(self._global, "core:trailing_bytes", 0)
        indices = self._indices(begins)
        segments: list[_Segment] = []
        headers, odd = 0, 0
        for k, capture in enumerate(self._captures):
            headers += self._integer(capture, "core:header_bytes", 0)
            offset = begins[k] * width + headers
            there, odd = divmod(max(payload - offset, 0), width)
            frames = there if k + 1 == len(begins) else min(there, begins[k + 1] - begins[k])
            segments.append(_Segment(offset, frames, indices[k], self._utc(capture)))
        missing = begins[-1] - begins[0] - sum(segment.frames for segment in segments[:-1])
        if missing:
            self.shortfall = f"is truncated: {missing} samples that its captures promise are missing"
        elif odd:
            self.shortfall = f"is truncated: it ends with {odd} bytes of a sample of {width}"
        return segments

    def _begins(self) -> list[int]:
        """Where each capture begins, counted in samples from the beginning of the data."""
        first = self._integer(self._global, "core:offset", 0)
        begins = [self._integer(capture, "core:sample_start", first) - first for capture in self._captures]
        if begins != sorted(begins) or begins[0] < 0:
            raise self._error(
                "core:sample_start must not fall from capture to capture, nor be below core:offset"
            )
        return begins

    def _indices(self, begins: list[int]) -> list[int]:
        """Index of each capture's first sample since the recording began: gaps are counted in it."""
        origin = index = self._integer(self._captures[0], "core:global_index", 0)
        indices = [0]
        for k, capture in enumerate(self._captures[1:], 1):
            follows = index + begins[k] - begins[k - 1]
            index = self._integer(capture, "core:global_index", follows)
            if index < follows:
                raise self._error(f"captures[{k}]: core:global_index falls back into the capture before")
            indices.append(index - origin)
        return indices
