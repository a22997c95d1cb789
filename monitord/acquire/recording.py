"""Samples from a recording, as fast as they are taken or at the pace at which they came."""

import time
from math import isclose
from pathlib import Path
from typing import TYPE_CHECKING

from monitord.acquire.samples import Decoded
from monitord.acquire.sigmf import Piece, SigmfFile
from monitord.blocks import Block
from monitord.errors import RecordingError
from monitord.settings import Source
from monitord.stage import SourceCounts

if TYPE_CHECKING:
    from monitord.acquire.audiofile import AudioFile

BLOCK_S = 0.1
MOST_FRAMES = 2**20
"""No block is longer, however high the rate."""


def open_recording(path: Path, wiring: str | None) -> "SigmfFile | AudioFile":
    """Open what `path` names: a WAV, RF64 or FLAC file, either file of a SigMF recording, or their common name.

    wiring: as in the settings; None for the usual. Raises RecordingError.
    """
    meta = path.with_name(f"{path.name}.sigmf-meta")
    if path.suffix in (".sigmf-meta", ".sigmf-data"):
        meta = path.with_suffix(".sigmf-meta")
    elif path.is_file():
        from monitord.acquire.audiofile import AudioFile  # loads libsndfile: only where it is needed

        return AudioFile(path, wiring)
    if path.is_dir() or not meta.is_file():
        missing = meta if path.suffix == ".sigmf-data" and path.is_file() else path
        problem = "is a folder" if path.is_dir() else "there is no such file"
        raise RecordingError(f"{missing}: {problem}; must be WAV, RF64, FLAC or SigMF")
    return SigmfFile(meta)


class RecordingSource:
    """A SigMF, WAV, RF64 or FLAC recording.

    rate_hz, center_hz, real: of its samples, known once it is open.
    """

    rate_hz: float
    center_hz: float
    real: bool

    def __init__(self, settings: Source) -> None:
        self.settings = settings
        self.counts = SourceCounts()
        self._path = Path(settings.path or "")
        self._file: SigmfFile | AudioFile | None = None
        self._ended = False
        self._failure = ""  # told once the good samples before it are handed over
        self._waiting: Block | None = None
        self._end = 0
        self._began: float | None = None

    @property
    def ended(self) -> bool:
        """All of it has been handed over, or it turned out damaged."""
        return self._ended

    def open(self) -> None:
        """Open it and hold it against the settings. Raises RecordingError."""
        self.close()
        try:
            file = open_recording(self._path, self.settings.wiring)
        except OSError as error:
            raise RecordingError(f"{self._path}: cannot be read: {error.strerror}") from None
        self._file = file
        self._ended, self._failure, self._waiting, self._end, self._began = False, "", None, 0, None
        self.rate_hz, self.real = file.rate_hz, file.format.real
        self.center_hz = file.center_hz or 0.0
        if file.center_hz is None and self.settings.center_hz is not None:
            self.center_hz = self.settings.center_hz
        try:
            self._check_agreement(file)
        except RecordingError:
            self.close()
            raise

    def _check_agreement(self, file: "SigmfFile | AudioFile") -> None:
        said = self.settings
        if said.sample_rate_hz is not None and not isclose(said.sample_rate_hz, self.rate_hz, rel_tol=1e-9):
            raise self._disagreement("sample_rate_hz", f"{said.sample_rate_hz:.12g}", f"{self.rate_hz:.12g}")
        orders = ("", "_le", "_be")  # an audio file's byte order is its own affair: its datatype bears none
        if said.datatype is not None and said.datatype not in [f"{file.datatype}{order}" for order in orders]:
            raise self._disagreement("datatype", f'"{said.datatype}"', f'"{file.datatype}"')
        right_hz = 0.0 if self.real else self.center_hz
        if said.center_hz is not None and not isclose(said.center_hz, right_hz, rel_tol=1e-9, abs_tol=1e-6):
            raise self._disagreement("center_hz", f"{said.center_hz:.12g}", f"{right_hz:.12g}")

    def _disagreement(self, key: str, said: str, right: str) -> RecordingError:
        return RecordingError(
            f"{self._path}: source.{key} = {said}: must be {right} for this recording, or left out"
        )

    def close(self) -> None:
        """Let go of the file."""
        file, self._file = self._file, None
        if file is not None:
            file.close()

    def read(self, timeout_s: float, wanted: int = 1) -> Block | None:
        """Hand over the next block, about 0.1 s; None where it is not due in time or nothing is left.

        Raises RecordingError where the recording is damaged, after all good samples before that place.
        """
        if self._waiting is None:
            self._waiting = self._next()
        if self._waiting is None or not self._due(self._waiting, timeout_s):
            return None
        block, self._waiting = self._waiting, None
        return block

    def _due(self, block: Block, timeout_s: float) -> bool:
        """Wait until the last sample of the block would have come, counted from the first read on."""
        if self.settings.pace == "flat-out":
            return True
        now = time.monotonic()
        if self._began is None:
            self._began = now
        wait_s = self._began + block.end / self.rate_hz - now
        time.sleep(min(max(wait_s, 0.0), max(timeout_s, 0.0)))
        return wait_s <= timeout_s

    def _next(self) -> Block | None:
        if self._ended or self._file is None:
            return None
        piece = None if self._failure else self._piece(self._file)
        if piece is None:
            self._finish(self._file.shortfall)
            return None
        decoded = self._file.format.interpret(piece.codes)
        if decoded.first_bad is not None:
            at = piece.start + decoded.first_bad
            self._failure = (
                f"sample {at} (at {at / self.rate_hz:.6g} s) is not a usable number; must be finite"
            )
            if decoded.first_bad == 0:
                self._finish("")
            decoded = self._file.format.interpret(
                piece.codes[: decoded.first_bad * self._file.format.components]
            )
        return self._block(piece, decoded)

    def _piece(self, file: "SigmfFile | AudioFile") -> Piece | None:
        try:
            return file.read(max(1, min(round(BLOCK_S * self.rate_hz), MOST_FRAMES)))
        except OSError as error:
            self._failure = f"cannot be read on: {error.strerror}"
            return None

    def _finish(self, shortfall: str) -> None:
        """Come to the end. Raises RecordingError where it is not the end that it should have."""
        self._ended = True
        failure = self._failure or shortfall
        if failure:
            raise RecordingError(f"{self._path}: {failure}")

    def _block(self, piece: Piece, decoded: Decoded) -> Block:
        lost, self._end = piece.start - self._end, piece.start + len(decoded.samples)
        return Block(
            samples=decoded.samples,
            rate_hz=self.rate_hz,
            center_hz=self.center_hz,
            start=piece.start,
            utc=piece.utc,
            lost=lost,
            lost_reason="sequence" if lost else "",
            clipped=decoded.clipped,
        )
