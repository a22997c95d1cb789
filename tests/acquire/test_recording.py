"""SigMF recordings: read as their JSON says, or refused in one line; and the pace of any recording."""

import itertools
import json
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.acquire.recordings import read_all, samples_of, sigmf, source_of

WAVE = (np.arange(1000) / 2000 - 0.1j).astype(np.complex64)  # one second


@pytest.mark.parametrize("name", ["take.sigmf-meta", "take.sigmf-data", "take"])
def test_a_recording_is_found_by_either_file_or_by_their_common_name(tmp_path: Path, name: str) -> None:
    sigmf(
        tmp_path, WAVE.tobytes(), [{"sample_start": 0, "frequency": 5e6, "datetime": "2026-01-01T00:00:00Z"}]
    )
    blocks, error = read_all(tmp_path / name)
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), WAVE)
    assert [block.start for block in blocks] == list(range(0, 1000, 100))
    assert [block.utc - 1767225600 for block in blocks] == pytest.approx(
        [k / 10 for k in range(10)], abs=1e-6
    )
    assert {(block.rate_hz, block.center_hz, block.lost, block.stream) for block in blocks} == {
        (1000, 5e6, 0, 0)
    }


def test_an_opened_recording_says_its_rate_centre_and_form(tmp_path: Path) -> None:
    source = source_of(sigmf(tmp_path, WAVE.tobytes(), [{"frequency": 5e6}]))
    source.open()
    assert (source.rate_hz, source.center_hz, source.real, source.ended) == (1000.0, 5e6, False, False)
    source.close()
    source = source_of(sigmf(tmp_path, bytes(100), datatype="ri16_be"), center_hz=0.0)
    source.open()
    assert (source.rate_hz, source.center_hz, source.real) == (1000.0, 0.0, True)
    source.close()


def test_the_settings_give_the_centre_where_the_recording_does_not(tmp_path: Path) -> None:
    blocks, _ = read_all(sigmf(tmp_path, WAVE.tobytes()), center_hz=930e3)
    assert blocks[0].center_hz == 930e3
    assert blocks[0].utc is None


def test_a_data_file_of_another_name_in_the_same_folder_is_read(tmp_path: Path) -> None:
    meta = sigmf(tmp_path, b"", dataset="samples.bin")
    (tmp_path / "samples.bin").write_bytes(WAVE.tobytes())
    np.testing.assert_array_equal(samples_of(read_all(meta)[0]), WAVE)


def test_captures_with_headers_and_a_jump_of_the_global_index_are_a_gap(tmp_path: Path) -> None:
    data = b"HEAD" + WAVE[:300].tobytes() + b"HEADER" + WAVE[300:].tobytes() + b"end"
    captures = [
        {"sample_start": 50, "global_index": 7000, "header_bytes": 4, "datetime": "2026-01-01T00:00:00Z"},
        {"sample_start": 350, "global_index": 7400, "header_bytes": 6, "datetime": "2026-01-01T00:00:02Z"},
    ]
    blocks, error = read_all(sigmf(tmp_path, data, captures, offset=50, trailing_bytes=3))
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), WAVE)
    assert [(b.start, b.lost, b.lost_reason) for b in blocks if b.lost] == [(400, 100, "sequence")]
    assert blocks[3].utc == 1767225602


@settings(max_examples=20, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(cuts=st.lists(st.integers(0, 1000), max_size=6))
def test_any_division_into_captures_gives_the_same_samples(tmp_path: Path, cuts: list[int]) -> None:
    captures = [{"sample_start": cut} for cut in [0, *sorted(cuts)]]
    blocks, error = read_all(sigmf(tmp_path, WAVE.tobytes(), captures))
    assert error == ""
    np.testing.assert_array_equal(samples_of(blocks), WAVE)
    assert all(later.start == earlier.end for earlier, later in itertools.pairwise(blocks))


@pytest.mark.parametrize(
    ("fields", "captures", "said"),
    [
        ({"datatype": "cf99_le"}, [], "core:datatype"),
        ({"datatype": ...}, [], "core:datatype"),
        ({"sample_rate": ...}, [], "core:sample_rate"),
        ({"sample_rate": 0}, [], "core:sample_rate"),
        ({"sample_rate": "fast"}, [], "core:sample_rate"),
        ({"num_channels": 2}, [], "core:num_channels"),
        ({"metadata_only": True}, [], "core:metadata_only"),
        ({"dataset": "../take.sigmf-data"}, [], "same folder"),
        ({"dataset": "/etc/hostname"}, [], "same folder"),
        ({"dataset": "gone.bin"}, [], "missing"),
        ({"trailing_bytes": 8000}, [], "no samples"),
        ({}, [{"frequency": 1e6}, {"sample_start": 500, "frequency": 2e6}], "core:frequency"),
        ({"datatype": "rf32_le"}, [{"frequency": 1e6}], "core:frequency"),
        ({}, [{"sample_start": 500}, {"sample_start": 0}], "core:sample_start"),
        ({}, [{"sample_start": -1}], "core:sample_start"),
        ({}, [{"sample_start": 1.5}], "core:sample_start"),
        ({}, [{"sample_start": 0}, {"sample_start": 500, "global_index": 499}], "core:global_index"),
        ({}, [{"datetime": "noon"}], "core:datetime"),
    ],
)
def test_what_cannot_be_read_is_refused_in_a_line_that_names_the_key(
    tmp_path: Path, fields: dict[str, Any], captures: list[dict[str, Any]], said: str
) -> None:
    blocks, error = read_all(sigmf(tmp_path, WAVE.tobytes(), captures, **fields))
    assert not blocks
    assert said in error


@pytest.mark.parametrize("text", ["", "{", "[]", '{"global": 1}', '{"global": {}, "captures": {}}', "\xff"])
def test_a_meta_file_that_is_none_is_refused(tmp_path: Path, text: str) -> None:
    meta = sigmf(tmp_path, WAVE.tobytes())
    meta.write_bytes(text.encode("latin-1"))
    blocks, error = read_all(meta)
    assert not blocks
    assert error


@pytest.mark.parametrize("name", ["gone.wav", "gone.sigmf-meta", "gone", "gone.sigmf-data"])
def test_a_missing_recording_is_one_clear_line(tmp_path: Path, name: str) -> None:
    assert "no such file" in read_all(tmp_path / name)[1]


def test_a_folder_is_no_recording(tmp_path: Path) -> None:
    assert "folder" in read_all(tmp_path)[1]


def test_an_empty_recording_is_refused(tmp_path: Path) -> None:
    assert "no samples" in read_all(sigmf(tmp_path, b""))[1]


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ({"sample_rate_hz": 1001}, "source.sample_rate_hz = 1001: must be 1000"),
        ({"datatype": "cf32_be"}, 'source.datatype = "cf32_be": must be "cf32_le"'),
        ({"center_hz": 1.0}, "source.center_hz = 1: must be 5000000"),
    ],
)
def test_settings_that_say_otherwise_are_an_error(tmp_path: Path, keys: dict[str, Any], said: str) -> None:
    meta = sigmf(tmp_path, WAVE.tobytes(), [{"frequency": 5e6}])
    assert said in read_all(meta, **keys)[1]
    assert read_all(meta, sample_rate_hz=1000, datatype="cf32_le", center_hz=5e6)[1] == ""


def test_a_truncated_recording_is_read_to_its_last_whole_sample_and_then_told(tmp_path: Path) -> None:
    blocks, error = read_all(sigmf(tmp_path, WAVE.tobytes()[:-3]))
    np.testing.assert_array_equal(samples_of(blocks), WAVE[:-1])
    assert "truncated" in error


def test_captures_beyond_the_end_of_the_data_are_told_after_what_is_there(tmp_path: Path) -> None:
    blocks, error = read_all(sigmf(tmp_path, WAVE.tobytes(), [{"sample_start": 0}, {"sample_start": 1500}]))
    np.testing.assert_array_equal(samples_of(blocks), WAVE)
    assert "500 samples" in error


@pytest.mark.parametrize("place", [0, 1, 99, 100, 250, 999])
def test_samples_before_a_bad_one_are_kept_and_its_place_is_told(tmp_path: Path, place: int) -> None:
    wave = WAVE.copy()
    wave[place:] = np.nan
    blocks, error = read_all(sigmf(tmp_path, wave.tobytes()))
    np.testing.assert_array_equal(samples_of(blocks) if blocks else [], wave[:place])
    assert f"sample {place} (at {place / 1000:g} s)" in error


def test_a_recording_can_be_opened_again_from_the_beginning(tmp_path: Path) -> None:
    source = source_of(sigmf(tmp_path, WAVE.tobytes()))
    for _ in range(2):
        source.open()
        block = source.read(0)
        assert block is not None
        assert (block.start, source.ended) == (0, False)
        source.close()
    assert source.read(0) is None


def test_real_time_pace_hands_a_block_over_when_its_last_sample_would_have_come(tmp_path: Path) -> None:
    source = source_of(sigmf(tmp_path, WAVE.tobytes()), pace="real-time")
    source.open()
    began = time.monotonic()
    assert source.read(0.02) is None
    times = []
    while len(times) < 3:
        if source.read(1.0) is not None:
            times.append(time.monotonic() - began)
    source.close()
    assert all(late >= 0.1 * (k + 1) - 0.001 for k, late in enumerate(times))
    assert times[2] < 1.5, "nor much later"


def test_a_late_reader_catches_up_without_loss(tmp_path: Path) -> None:
    source = source_of(sigmf(tmp_path, WAVE.tobytes()), pace="real-time")
    source.open()
    source.read(0)
    time.sleep(0.35)  # this reader is late
    got = [source.read(0) for _ in range(3)]
    source.close()
    assert [block.start for block in got] == [0, 100, 200]


def test_the_metadata_may_hold_more_than_is_needed(tmp_path: Path) -> None:
    meta = sigmf(tmp_path, WAVE.tobytes(), author="us")
    fields = json.loads(meta.read_text())
    meta.write_text(json.dumps(fields | {"annotations": [{"core:sample_start": 3}], "extra": [1]}))
    assert read_all(meta)[1] == ""
