"""Bytes become samples as SigMF's datatype names say; the expectation is computed by struct, number by number."""

import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitord.acquire.samples import FORMATS, parse_time, sample_format

CODES = {"f32": "f", "f64": "d", "i8": "b", "u8": "B", "i16": "h", "u16": "H", "i32": "i", "u32": "I"}


def parts(name: str) -> tuple[str, bool, str]:
    """struct's format, whether the format is real, and the number's name, from a datatype's name."""
    number, _, order = name[1:].partition("_")
    return (">" if order == "be" else "<") + CODES[number], name[0] == "r", number


def expected(name: str, data: bytes) -> list[complex] | list[float]:
    form, real, number = parts(name)
    values = [value for (value,) in struct.iter_unpack(form, data)]
    half = 1 if number[0] == "f" else 2 ** (int(number[1:]) - 1)
    values = [(value - (half if number[0] == "u" else 0)) / half for value in values]
    return values if real else [complex(i, q) for i, q in zip(values[::2], values[1::2], strict=True)]


def some_bytes(name: str) -> bytes:
    form, _, number = parts(name)
    rng = np.random.default_rng(1)
    if number[0] == "f":
        return b"".join(struct.pack(form, value) for value in rng.uniform(-0.9, 0.9, 64))
    bits, signed = int(number[1:]), number[0] == "i"
    low = -(2 ** (bits - 1)) if signed else 0
    numbers = [low, low + 1, low + 2**bits - 1, *rng.integers(low, low + 2**bits, 61)]
    return b"".join(struct.pack(form, int(value)) for value in numbers)


@pytest.mark.parametrize("name", FORMATS)
def test_every_datatype_decodes_as_struct_reads_it(name: str) -> None:
    data = some_bytes(name)
    samples = FORMATS[name].decode(data).samples
    assert samples.dtype == (np.float32 if name[0] == "r" else np.complex64)
    np.testing.assert_allclose(samples, expected(name, data), rtol=0, atol=6e-8)


@pytest.mark.parametrize("name", ["cf32", "ci16", "rf32", "ri16", "cf64", "ri32", "cu16"])
def test_both_byte_orders_of_the_same_numbers_give_the_same_samples(name: str) -> None:
    little = some_bytes(f"{name}_le")
    size = FORMATS[f"{name}_le"].component.itemsize
    big = b"".join(little[k : k + size][::-1] for k in range(0, len(little), size))
    one, other = FORMATS[f"{name}_le"].decode(little), FORMATS[f"{name}_be"].decode(big)
    np.testing.assert_array_equal(one.samples, other.samples)
    assert one.clipped == other.clipped


def test_the_required_datatypes_are_known_and_bytes_may_bear_an_idle_byte_order() -> None:
    for name in (
        "cf32_le",
        "cf32_be",
        "ci16_le",
        "ci16_be",
        "ci8",
        "cu8",
        "rf32_le",
        "rf32_be",
        "ri16_le",
        "ri16_be",
    ):
        assert sample_format(name) is FORMATS[name]
    assert sample_format("ci8_le") is FORMATS["ci8"]
    for name in ("ci16", "cf32", "cf16_le", "ci24_le", "", "ci16_le ", "CI16_LE", "xf32_le"):
        assert sample_format(name) is None


@pytest.mark.parametrize(
    ("name", "low", "high"), [("ci16_le", -32768, 32767), ("ci8", -128, 127), ("cu8", 0, 255)]
)
def test_a_sample_with_a_component_at_either_rail_counts_once_as_clipped(
    name: str, low: int, high: int
) -> None:
    middle = (low + high) // 2
    numbers = np.array([[middle, middle], [low, middle], [middle, high], [low, high], [low + 1, high - 1]])
    decoded = FORMATS[name].interpret(numbers.astype(FORMATS[name].component).reshape(-1))
    assert decoded.clipped == 3


def test_a_float_sample_of_one_or_more_counts_as_clipped_and_keeps_its_value() -> None:
    values = np.array([0.5, 1.0, -1.0, 1.7, 0.999], np.float32)
    decoded = FORMATS["rf32_le"].interpret(values)
    assert decoded.clipped == 3
    np.testing.assert_array_equal(decoded.samples, values)


@given(st.integers(0, 39), st.sampled_from([np.nan, np.inf, -np.inf, 3e38]), st.sampled_from("cr"))
def test_the_first_bad_float_is_found_wherever_it_stands(place: int, bad: float, letter: str) -> None:
    values = np.full(40, 0.25, np.float32)
    values[place:] = bad
    decoded = FORMATS[f"{letter}f32_le"].decode(values.tobytes())
    assert decoded.first_bad == place // (2 if letter == "c" else 1)


def test_a_double_too_large_for_single_precision_is_bad() -> None:
    assert FORMATS["cf64_be"].decode(struct.pack(">4d", 0.1, 0.2, 1e300, 0.0)).first_bad == 1


def test_samples_are_read_only() -> None:
    for name in FORMATS:
        assert not FORMATS[name].decode(some_bytes(name)).samples.flags.writeable


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("1970-01-01T00:00:00Z", 0.0),
        ("2026-01-01T00:00:00.250Z", 1767225600.25),
        ("2017-11-27t10:41:56.5z", 1511779316.5),
        ("2016-12-31T23:59:60Z", 1483228800.0),
        ("2020-02-29T12:00:00+00:00", 1582977600.0),
    ],
)
def test_times_are_seconds_since_1970(text: str, seconds: float) -> None:
    assert parse_time(text) == seconds


@pytest.mark.parametrize(
    "text",
    ["", "2026-01-01", "2026-01-01T00:00:00", "2026-02-29T00:00:00Z", "2026-13-01T00:00:00Z", "2026-01-01T24:00:00Z",
     "2026-01-01T00:00:00+01:00", "0000-01-01T00:00:00Z", "yesterday"],
)  # fmt: skip
def test_what_is_not_a_time_in_utc_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"is not a time|year|month|day|hour"):
        parse_time(text)
