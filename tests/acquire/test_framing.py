"""What is not an agreed message is rejected with its reason; what is gives its samples."""

import json
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitord.acquire.framing import REJECTIONS, Framing, MessageError
from monitord.settings import Source

SAMPLES = np.arange(8, dtype=np.float32).tobytes()  # four cf32
HEADER = {
    "core:datatype": "cf32_le",
    "core:sample_rate": 48000,
    "core:frequency": 930000,
    "core:sample_start": 123456,
    "core:datetime": "2026-01-01T00:00:00.000Z",
}


def source(**keys: Any) -> Source:
    kept = {"framing": "described", "datatype": "cf32_le", "center_hz": 930000.0} | keys
    return Source(
        kind="socket",
        endpoint="tcp://127.0.0.1:5555",
        sample_rate_hz=48000,
        **{key: value for key, value in kept.items() if value is not ...},
    )


def head(**changes: Any) -> bytes:
    fields = HEADER | {f"core:{key}": value for key, value in changes.items()}
    return json.dumps({key: value for key, value in fields.items() if value is not ...}).encode()


def reason(framing: Framing, frames: list[bytes]) -> str:
    with pytest.raises(MessageError) as caught:
        framing.parse(frames)
    assert str(caught.value)
    assert "\n" not in str(caught.value)
    return caught.value.reason


def test_a_described_message_tells_where_and_when_its_samples_are() -> None:
    message = Framing(source()).parse([head(), SAMPLES])
    assert (message.frames, message.start, message.utc) == (4, 123456, 1767225600.0)
    assert (message.data, message.form.name, message.center_hz) == (SAMPLES, "cf32_le", 930000.0)


def test_frequency_and_time_may_be_left_out_of_a_header() -> None:
    message = Framing(source()).parse([head(frequency=..., datetime=...), SAMPLES])
    assert (message.center_hz, message.utc) == (930000.0, None)


@pytest.mark.parametrize("number", [0, 2**53])
def test_indices_from_0_to_2_to_the_53_are_taken(number: int) -> None:
    assert Framing(source()).parse([head(sample_start=number), SAMPLES]).start == number


@pytest.mark.parametrize(
    ("wanted", "frames"),
    [
        ("frames", [SAMPLES]),
        ("frames", [head(), SAMPLES, b""]),
        ("frames", []),
        ("header", [b"", SAMPLES]),
        ("header", [b"\xff\xfe{", SAMPLES]),
        ("header", [b"[" * 4000, SAMPLES]),
        ("header", [b"[1]", SAMPLES]),
        ("header", [head(note="x" * 4096), SAMPLES]),
        ("header", [head(datatype=...), SAMPLES]),
        ("header", [head(sample_rate=...), SAMPLES]),
        ("header", [head(sample_start=...), SAMPLES]),
        ("header", [head(sample_start=-1), SAMPLES]),
        ("header", [head(sample_start=2**53 + 1), SAMPLES]),
        ("header", [head(sample_start=1.5), SAMPLES]),
        ("header", [head(sample_start=True), SAMPLES]),
        ("header", [head(sample_start="7"), SAMPLES]),
        ("header", [head(sample_rate=float("nan")), SAMPLES]),
        ("header", [head(sample_rate=10**400), SAMPLES]),
        ("header", [head(datatype=7), SAMPLES]),
        ("header", [head(datetime="noon"), SAMPLES]),
        ("header", [head(datetime=None), SAMPLES]),
        ("datatype", [head(datatype="ci16_le"), SAMPLES]),
        ("datatype", [head(datatype="cf99"), SAMPLES]),
        ("rate", [head(sample_rate=48001), SAMPLES]),
        ("frequency", [head(frequency=930001), SAMPLES]),
        ("length", [head(), SAMPLES[:-1]]),
        ("length", [head(), b""]),
    ],
)
def test_a_described_message_that_is_wrong_is_rejected_for_its_reason(
    wanted: str, frames: list[bytes]
) -> None:
    framing = Framing(source())
    assert reason(framing, frames) == wanted
    assert framing.parse([head(), SAMPLES]).frames == 4, "the next good one must be taken all the same"


def test_what_the_settings_leave_open_is_fixed_by_the_first_good_message() -> None:
    framing = Framing(source(datatype=..., center_hz=...))
    assert framing.format is None
    assert reason(framing, [head(datatype="ci16_le", frequency=5000), SAMPLES[:-1]]) == "length"
    assert framing.parse([head(datatype="ci16_le", frequency=7000), SAMPLES]).frames == 8
    assert framing.center_hz == 7000
    assert reason(framing, [head(datatype="cf32_le", frequency=7000), SAMPLES]) == "datatype"
    assert reason(framing, [head(datatype="ci16_le", frequency=8000), SAMPLES]) == "frequency"


def test_a_real_if_has_no_centre_frequency() -> None:
    framing = Framing(source(datatype="rf32_le", center_hz=0.0))
    assert reason(framing, [head(datatype="rf32_le"), SAMPLES]) == "frequency"
    assert framing.parse([head(datatype="rf32_le", frequency=0), SAMPLES]).frames == 8


def test_a_bare_message_is_one_frame_of_whole_samples() -> None:
    framing = Framing(source(framing="bare"))
    assert framing.parse([SAMPLES]).frames == 4
    assert framing.parse([SAMPLES]).start is None
    assert reason(framing, [SAMPLES[:-3]]) == "length"
    assert reason(framing, [head(), SAMPLES]) == "frames"


def test_a_topic_stands_in_a_frame_of_its_own_in_front() -> None:
    framing = Framing(source(topic="am", framing="bare"))
    assert framing.parse([b"am", SAMPLES]).frames == 4
    for frames in ([SAMPLES], [b"am2", SAMPLES], [b"am"], [b"am", SAMPLES, SAMPLES]):
        assert reason(framing, frames) == "frames"
    described = Framing(source(topic="am"))
    assert described.parse([b"am", head(), SAMPLES]).start == 123456


ANYTHING = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=12),
    st.sampled_from([[], {}, [[1]], {"core:datatype": 1}, 2**53, 10**400, "cf32_le", "2026-01-01T00:00:00Z"]),
)


@given(st.dictionaries(st.sampled_from(sorted(HEADER)), ANYTHING), st.binary(max_size=40))
def test_no_header_whatever_it_holds_does_worse_than_being_rejected(
    fields: dict[str, Any], data: bytes
) -> None:
    try:
        Framing(source()).parse([json.dumps(HEADER | fields).encode(), data])
    except MessageError as problem:
        assert problem.reason in REJECTIONS


@given(st.lists(st.binary(max_size=30), max_size=4))
def test_no_bytes_do_worse_than_being_rejected(frames: list[bytes]) -> None:
    with pytest.raises(MessageError):
        Framing(source()).parse(frames)
