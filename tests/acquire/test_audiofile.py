"""WAV, RF64 and FLAC recordings, written byte by byte or by libsndfile, and damaged in every way."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

from tests.acquire.recordings import read_all, rf64, samples_of, source_of, wav

CODES = np.stack([np.arange(-500, 500) * 60, np.arange(1000) * -30], axis=1).astype("<i2")
IQ = (CODES[:, 0] / 32768 + 1j * CODES[:, 1] / 32768).astype(np.complex64)


@pytest.mark.parametrize("write", [wav, rf64])
def test_two_audio_channels_are_iq(tmp_path: Path, write: Any) -> None:
    blocks, error = read_all(write(tmp_path / "take.wav", CODES), center_hz=930e3)
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), IQ)
    assert {(block.rate_hz, block.center_hz, block.utc) for block in blocks} == {(1000, 930e3, None)}


@pytest.mark.parametrize(("wiring", "column"), [("left", 0), ("right", 1)])
def test_either_of_two_audio_channels_can_be_a_real_if(tmp_path: Path, wiring: str, column: int) -> None:
    blocks, _ = read_all(wav(tmp_path / "take.wav", CODES), wiring=wiring)
    np.testing.assert_array_equal(samples_of(blocks), (CODES[:, column] / 32768).astype(np.float32))


def test_one_audio_channel_is_a_real_if(tmp_path: Path) -> None:
    source = source_of(wav(tmp_path / "take.wav", CODES[:, :1]))
    source.open()
    assert (source.real, source.rate_hz, source.center_hz) == (True, 1000.0, 0.0)
    source.close()


@pytest.mark.parametrize(("subtype", "bits"), [("PCM_U8", 8), ("PCM_16", 16), ("PCM_24", 24), ("PCM_32", 32)])
def test_integers_of_every_width_have_full_scale_1_and_count_their_rails(
    tmp_path: Path, subtype: str, bits: int
) -> None:
    step = 2.0 ** (1 - bits)
    wave = np.array([-1.0, -0.5, 0.0, 0.25, 1 - step, 0.75, 1 - 2 * step, -1 + step])
    soundfile.write(tmp_path / "take.wav", wave, 1000, subtype=subtype)
    blocks, error = read_all(tmp_path / "take.wav")
    assert error == ""
    np.testing.assert_allclose(samples_of(blocks), wave, rtol=0, atol=2.0 ** (1 - min(bits, 24)))
    assert sum(block.clipped for block in blocks) == 2


@pytest.mark.parametrize("subtype", ["FLOAT", "DOUBLE"])
def test_floats_may_go_beyond_full_scale(tmp_path: Path, subtype: str) -> None:
    soundfile.write(tmp_path / "take.wav", np.array([0.5, -1.5, 2.0, 0.0]), 1000, subtype=subtype)
    blocks, _ = read_all(tmp_path / "take.wav")
    np.testing.assert_array_equal(samples_of(blocks), np.array([0.5, -1.5, 2.0, 0.0], np.float32))
    assert blocks[0].clipped == 2


def test_flac_is_read(tmp_path: Path) -> None:
    soundfile.write(tmp_path / "take.flac", CODES, 1000, subtype="PCM_16")
    blocks, error = read_all(tmp_path / "take.flac", datatype="ci16_le", sample_rate_hz=1000)
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), IQ)


@pytest.mark.parametrize(
    ("columns", "keys", "said"),
    [
        (1, {"wiring": "iq"}, 'wiring = "iq" needs two'),
        (1, {"wiring": "right"}, 'wiring = "right" needs two'),
        (3, {}, "3 audio channels"),
        (2, {"datatype": "cf32_le"}, "source.datatype"),
        (1, {"datatype": "ci16_le"}, "source.datatype"),
        (2, {"sample_rate_hz": 2000}, "source.sample_rate_hz"),
        (1, {"center_hz": 930e3}, "source.center_hz"),
    ],
)
def test_a_file_that_is_not_as_said_is_refused(
    tmp_path: Path, columns: int, keys: dict[str, Any], said: str
) -> None:
    codes = np.repeat(CODES[:, :1], columns, axis=1)
    blocks, error = read_all(wav(tmp_path / "take.wav", codes), **keys)
    assert not blocks
    assert said in error


@pytest.mark.parametrize("content", [b"", b"RIFF", b"nothing of the kind " * 50, b"RIFF\0\0\0\0WAVEdata"])
@pytest.mark.parametrize("name", ["take.wav", "take.raw", "take"])
def test_what_is_no_recording_is_refused(tmp_path: Path, name: str, content: bytes) -> None:
    (tmp_path / name).write_bytes(content)
    assert "not a recording" in read_all(tmp_path / name)[1]


def test_a_lossy_encoding_is_refused(tmp_path: Path) -> None:
    soundfile.write(tmp_path / "take.wav", CODES, 8000, subtype="ULAW")
    assert "ULAW" in read_all(tmp_path / "take.wav")[1]
    soundfile.write(tmp_path / "take.ogg", CODES, 8000)
    assert "OGG" in read_all(tmp_path / "take.ogg")[1]


def test_an_empty_file_is_refused(tmp_path: Path) -> None:
    assert "no samples" in read_all(wav(tmp_path / "take.wav", CODES[:0]))[1]


@pytest.mark.parametrize("write", [wav, rf64])
def test_a_header_that_promises_more_is_told_after_what_is_there(tmp_path: Path, write: Any) -> None:
    blocks, error = read_all(write(tmp_path / "take.wav", CODES, promise=4000))
    np.testing.assert_array_equal(samples_of(blocks), IQ)
    assert "truncated" in error
    assert "4000 bytes" in error


def test_a_file_cut_within_a_sample_is_read_up_to_it_and_then_told(tmp_path: Path) -> None:
    path = wav(tmp_path / "take.wav", CODES)
    path.write_bytes(path.read_bytes()[:-3])
    blocks, error = read_all(path)
    np.testing.assert_array_equal(samples_of(blocks), IQ[:-1])
    assert "truncated" in error


def test_a_header_that_does_not_know_the_length_promises_nothing(tmp_path: Path) -> None:
    path = wav(tmp_path / "take.wav", CODES)
    whole = bytearray(path.read_bytes())
    whole[4:8] = whole[40:44] = b"\xff\xff\xff\xff"
    path.write_bytes(whole)
    blocks, error = read_all(path)
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), IQ)


def test_a_truncated_flac_is_read_as_far_as_it_goes_and_then_told(tmp_path: Path) -> None:
    path = tmp_path / "take.flac"
    noise = np.random.default_rng(5).integers(-20000, 20000, (40000, 2)).astype(np.int16)
    soundfile.write(path, noise, 8000, subtype="PCM_16")
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    blocks, error = read_all(path)
    got = samples_of(blocks)
    assert 10_000 < len(got) < 25_000
    np.testing.assert_array_equal(got.real, (noise[: len(got), 0] / 32768).astype(np.float32))
    assert "truncated" in error or "damaged" in error


def test_samples_before_a_bad_float_are_kept_and_its_place_is_told(tmp_path: Path) -> None:
    wave = np.full((1000, 2), 0.25, "<f4")
    wave[321, 1] = np.inf
    blocks, error = read_all(wav(tmp_path / "take.wav", wave, kind=3))
    assert sum(len(block.samples) for block in blocks) == 321
    assert "sample 321 (at 0.321 s)" in error


def test_chunks_of_odd_length_before_the_samples_are_stepped_over(tmp_path: Path) -> None:
    path = wav(tmp_path / "take.wav", CODES, promise=4000)
    whole = path.read_bytes()
    path.write_bytes(whole[:12] + b"note\x03\0\0\0abc\0" + whole[12:])
    blocks, error = read_all(path)
    np.testing.assert_array_equal(samples_of(blocks), IQ)
    assert "4000 bytes" in error
