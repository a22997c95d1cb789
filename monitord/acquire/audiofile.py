"""WAV, RF64 and FLAC recordings: IQ in two audio channels, or a real IF in one."""

from pathlib import Path
from typing import Any

import numpy as np
import soundfile
from numpy.typing import NDArray

from monitord.acquire.samples import SampleFormat, integer_format
from monitord.acquire.sigmf import Piece
from monitord.errors import RecordingError

CONTAINERS = ("WAV", "WAVEX", "RF64", "FLAC")
_UNKNOWN_LENGTH = 0xFFFFFFFF
_MOST_FRAMES = 2**53
"""A container that claims more than this does not know its length."""

# Encoding -> bits, SigMF's name without byte order, and what to read it as (integers come in the upper bits).
_ENCODINGS = {
    "PCM_S8": (8, "i8", "int16"),
    "PCM_U8": (8, "u8", "int16"),
    "PCM_16": (16, "i16", "int16"),
    "PCM_24": (24, "i24", "int32"),
    "PCM_32": (32, "i32", "int32"),
    "FLOAT": (32, "f32", "float32"),
    "DOUBLE": (64, "f64", "float64"),
}


class AudioFile:
    """A WAV, RF64 or FLAC file, opened.

    path, wiring: the file; which of its audio channels hold what, or None for the usual.
    format, rate_hz: of its samples; datatype: their SigMF name without byte order.
    center_hz: None, it does not say.
    shortfall: what is missing at its end, in words; "" where it is whole.
    Raises RecordingError where it is empty, or not what it should be.
    """

    center_hz = None

    def __init__(self, path: Path, wiring: str | None) -> None:
        self._path = path
        missing = _missing_bytes(path)
        self.shortfall = (
            f"is truncated: {missing} bytes that its header promises are missing" if missing else ""
        )
        try:
            self._file = soundfile.SoundFile(str(path))
        except (soundfile.SoundFileError, TypeError):  # TypeError: a name that ends in .raw
            raise RecordingError(
                f"{path}: not a recording: must be WAV, RF64, FLAC, or SigMF (name its .sigmf-meta)"
            ) from None
        try:
            self._examine(wiring)
        except RecordingError:
            self._file.close()
            raise

    def _examine(self, wiring: str | None) -> None:
        if self._file.format not in CONTAINERS or self._file.subtype not in _ENCODINGS:
            held = f"{self._file.format} with {self._file.subtype}"
            raise RecordingError(
                f"{self._path}: holds {held}; must be WAV, RF64 or FLAC with PCM or float samples"
            )
        if self._file.frames == 0:
            raise RecordingError(f"{self._path}: holds no samples")
        self.rate_hz = float(self._file.samplerate)
        self._column = self._choose(wiring)
        bits, name, self._read_as = _ENCODINGS[self._file.subtype]
        real = self._column is not None
        self.datatype = f"{'r' if real else 'c'}{name}"
        self.format = _stored(self.datatype, self._read_as, real, bits)
        self._start = 0
        self._promised = self._file.frames if self._file.frames < _MOST_FRAMES else 0

    def _choose(self, wiring: str | None) -> int | None:
        """Return the audio channel that holds a real IF, or None for IQ in two."""
        channels = self._file.channels
        wiring = wiring or ("iq" if channels == 2 else "left")
        needed = f'wiring = "{wiring}" needs two'
        if channels > 2:
            raise RecordingError(f"{self._path}: has {channels} audio channels; must be one or two")
        if channels == 1 and wiring == "iq":
            raise RecordingError(
                f'{self._path}: has one audio channel; {needed} (a real IF: wiring = "left")'
            )
        if channels == 1 and wiring == "right":
            raise RecordingError(f'{self._path}: has one audio channel; {needed} (must be "left")')
        return {"iq": None, "left": 0, "right": 1}[wiring]

    def read(self, frames: int) -> Piece | None:
        """Read the next at most `frames` samples; None at the end."""
        try:
            columns = self._file.read(frames, dtype=self._read_as, always_2d=True)
        except soundfile.SoundFileError as error:
            self.shortfall = f"is damaged after sample {self._start}: {error}"
            return None
        if len(columns) < frames and self._start + len(columns) < self._promised and not self.shortfall:
            missing = self._promised - self._start - len(columns)
            self.shortfall = f"is truncated: {missing} samples that its header promises are missing"
        if not len(columns):
            return None
        piece = Piece(self._wired(columns), self._start, None)
        self._start += len(columns)
        return piece

    def _wired(self, columns: NDArray[Any]) -> NDArray[Any]:
        return columns.reshape(-1) if self._column is None else columns[:, self._column].copy()

    def close(self) -> None:
        """Let go of the file."""
        self._file.close()


def _stored(name: str, read_as: str, real: bool, bits: int) -> SampleFormat:
    if read_as.startswith("float"):
        return SampleFormat(name, np.dtype(read_as), real)
    return integer_format(name, read_as, real, bits)


def _missing_bytes(path: Path) -> int:
    """How many bytes of samples a WAV or RF64 header promises beyond the end of the file.

    Source: EBU Tech 3306 (RF64): a data chunk of size 0xFFFFFFFF has its true size in the chunk "ds64".
    """
    size = path.stat().st_size
    with path.open("rb") as file:
        container = file.read(12)[:4]
        if container not in (b"RIFF", b"RF64"):
            return 0
        long_size = 0
        while len(chunk := file.read(8)) == 8:
            name, length = chunk[:4], int.from_bytes(chunk[4:], "little")
            begin = file.tell()
            if name == b"data":
                if length == _UNKNOWN_LENGTH:
                    length = long_size
                return max(0, begin + length - size)
            if name == b"ds64":
                long_size = int.from_bytes(file.read(16)[8:], "little")
            file.seek(begin + length + length % 2)
    return 0
