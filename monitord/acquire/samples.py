"""What the bytes of a stream mean: the datatypes and times of SigMF.

Source: SigMF specification, "Dataset Format" (datatype names) and RFC 3339 (times).
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Complex, Real

LARGEST = 1e12
"""A float sample beyond this is as good as infinite: the power of its spectrum would overflow float32."""


@dataclass(frozen=True, slots=True)
class Decoded:
    """Samples ready to travel.

    samples: complex64 or float32, shape (frames,), read-only; full scale is 1.0.
    clipped: how many samples have a component at full scale.
    first_bad: index of the first sample that is not a usable number (NaN, infinite, or beyond `LARGEST`), or
        None. Where there is one, `samples` is not to be used from there on, and `clipped` is 0.
    """

    samples: Complex | Real
    clipped: int = 0
    first_bad: int | None = None


@dataclass(frozen=True, slots=True)
class SampleFormat:
    """How one sample is stored.

    name: its SigMF datatype name.
    component: type and byte order of one component (a complex sample has two).
    real: a real IF, else IQ.
    low, high: the integer codes that stand for full scale ("the rails"); unused for floats.
    """

    name: str
    component: np.dtype[Any]
    real: bool
    low: int = 0
    high: int = 0

    @property
    def components(self) -> int:
        """Numbers in one sample."""
        return 1 if self.real else 2

    @property
    def sample_bytes(self) -> int:
        """Bytes of one sample."""
        return self.components * self.component.itemsize

    def decode(self, data: bytes | memoryview) -> Decoded:
        """Turn bytes, a whole number of samples, into samples."""
        return self.interpret(np.frombuffer(data, self.component))

    def interpret(self, codes: NDArray[Any]) -> Decoded:
        """Turn stored numbers, shape (frames * components,), into samples."""
        if codes.size == 0:
            return Decoded(self._samples(np.empty(0, np.float32)))
        return self._floats(codes) if self.component.kind == "f" else self._integers(codes)

    def _integers(self, codes: NDArray[Any]) -> Decoded:
        wide = self.component.itemsize > 2  # more digits than float32 holds
        half = 2.0 ** (8 * self.component.itemsize - 1)
        values: NDArray[np.floating[Any]] = codes.astype(np.float64 if wide else np.float32)
        if self.component.kind == "u":
            values -= half
        values *= 1 / half
        clipped = 0
        if codes.min() <= self.low or codes.max() >= self.high:
            clipped = self._count((codes <= self.low) | (codes >= self.high))
        return Decoded(self._samples(values.astype(np.float32, copy=False)), clipped)

    def _floats(self, codes: NDArray[Any]) -> Decoded:
        with np.errstate(all="ignore"):  # NaN and overflow are looked for below
            values = codes.astype(np.float32, copy=False)
            if values.min() > -1 and values.max() < 1:  # false for NaN
                return Decoded(self._samples(values))
            size = np.abs(values)
            usable = size <= LARGEST
        if not usable.all():
            return Decoded(self._samples(values), 0, int(np.argmin(usable)) // self.components)
        return Decoded(self._samples(values), self._count(size >= 1))

    def _count(self, components: NDArray[np.bool_]) -> int:
        """Count the samples of which any component is set."""
        return int(np.count_nonzero(components.reshape(-1, self.components).any(axis=1)))

    def _samples(self, values: Real) -> Complex | Real:
        samples: Complex | Real = values if self.real else values.view(np.complex64)
        samples.flags.writeable = False
        return samples


def integer_format(name: str, component: str, real: bool, bits: int | None = None) -> SampleFormat:
    """Return the format of integers whose `bits` significant bits (default: all) stand at the upper end."""
    kind = np.dtype(component)
    spare = 0 if bits is None else 8 * kind.itemsize - bits
    limits = np.iinfo(kind)
    return SampleFormat(name, kind, real, int(limits.min), (int(limits.max) >> spare) << spare)


def _formats() -> dict[str, SampleFormat]:
    formats = {}
    for letter, real in (("c", False), ("r", True)):
        for kind, size in ((kind, size) for kind in "iu" for size in (1, 2, 4)):
            for suffix, order in (("_le", "<"), ("_be", ">")) if size > 1 else (("", "|"),):
                name = f"{letter}{kind}{8 * size}{suffix}"
                formats[name] = integer_format(name, f"{order}{kind}{size}", real)
        for size in (4, 8):
            for suffix, order in (("_le", "<"), ("_be", ">")):
                name = f"{letter}f{8 * size}{suffix}"
                formats[name] = SampleFormat(name, np.dtype(f"{order}f{size}"), real)
    return formats


FORMATS: Mapping[str, SampleFormat] = _formats()
"""Every datatype that can be read, by its SigMF name."""


def sample_format(datatype: str) -> SampleFormat | None:
    """Look a SigMF datatype up; None where there is none of that name. Bytes may bear a byte order, idly."""
    return FORMATS.get(re.sub(r"(?<=[iu]8)_[lb]e$", "", datatype))


_TIME = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)[Tt ](\d\d):([0-5]\d):([0-5]\d|60)(\.\d{1,30})?([Zz]|[+-]00:00)", re.ASCII
)


def parse_time(text: str) -> float:
    """UTC of an RFC 3339 time with offset zero, seconds since 1970; second 60 is the next minute's first.

    Raises ValueError where it is not one.
    """
    match = _TIME.fullmatch(text)
    if match is None:
        raise ValueError(f"{text[:40]!r} is not a time like 2026-01-01T00:00:00.000Z")
    year, month, day, hour, minute, second = (int(part) for part in match.groups()[:6])
    whole = datetime(year, month, day, hour, minute, tzinfo=UTC).timestamp() + second
    return whole + float(match[7] or 0)
