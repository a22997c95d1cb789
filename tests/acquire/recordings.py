"""Recordings made for the tests, and how they are read."""

import json
import struct
from pathlib import Path
from typing import Any

import numpy as np

from monitord.acquire.recording import RecordingSource
from monitord.blocks import Block
from monitord.errors import RecordingError
from monitord.settings import Source


def source_of(path: Path, **keys: Any) -> RecordingSource:
    return RecordingSource(Source(kind="recording", path=str(path), **({"pace": "flat-out"} | keys)))


def read_all(path: Path, **keys: Any) -> tuple[list[Block], str]:
    """Every block, and the error at the end ("" where there is none)."""
    source, blocks = source_of(path, **keys), []
    try:
        source.open()
        while not source.ended:
            block = source.read(0.1)
            if block is not None:
                blocks.append(block)
    except RecordingError as error:
        assert "\n" not in str(error)
        assert path.name.partition(".")[0] in str(error)
        return blocks, str(error)
    finally:
        source.close()
    return blocks, ""


def samples_of(blocks: list[Block]) -> np.ndarray:
    return np.concatenate([block.samples for block in blocks])


def sigmf(folder: Path, data: bytes, captures: list[dict[str, Any]] | None = None, **fields: Any) -> Path:
    """Write a SigMF recording of 1000 S/s, cf32_le unless said otherwise; returns its .sigmf-meta."""
    about = {"core:datatype": "cf32_le", "core:sample_rate": 1000, "core:version": "1.0.0"}
    about |= {f"core:{key}": value for key, value in fields.items()}
    named = [{f"core:{key}": value for key, value in capture.items()} for capture in captures or []]
    meta = folder / "take.sigmf-meta"
    meta.write_text(
        json.dumps(
            {"global": {k: v for k, v in about.items() if v is not ...}, "captures": named, "annotations": []}
        )
    )
    (folder / "take.sigmf-data").write_bytes(data)
    return meta


def wav(path: Path, codes: np.ndarray, *, rate: int = 1000, kind: int = 1, promise: int = 0) -> Path:
    """Write a WAV file from numbers of shape (frames, channels), byte by byte, independently of any library.

    kind: 1 PCM, 3 float. promise: bytes that the header claims beyond those that follow.
    """
    data, width = codes.tobytes(), codes.dtype.itemsize
    channels = codes.shape[1]
    form = struct.pack("<HHIIHH", kind, channels, rate, rate * channels * width, channels * width, 8 * width)
    chunks = (
        b"fmt "
        + struct.pack("<I", len(form))
        + form
        + b"data"
        + struct.pack("<I", len(data) + promise)
        + data
    )
    path.write_bytes(b"RIFF" + struct.pack("<I", 4 + len(chunks) + promise) + b"WAVE" + chunks)
    return path


def rf64(path: Path, codes: np.ndarray, *, rate: int = 1000, promise: int = 0) -> Path:
    """The same as RF64 (EBU Tech 3306): sizes in the chunk ds64."""
    wav(path, codes, rate=rate)
    whole = path.read_bytes()
    size = len(codes.tobytes())
    sizes = b"ds64" + struct.pack("<IQQQI", 28, len(whole) + 28, size + promise, len(codes), 0)
    body = whole[12:].replace(b"data" + struct.pack("<I", size), b"data\xff\xff\xff\xff", 1)
    path.write_bytes(b"RF64\xff\xff\xff\xffWAVE" + sizes + body)
    return path
