"""The off-air recordings open with the rate, centre and length that their index states."""

import numpy as np
import pytest

from tests import data
from tests.acquire.recordings import read_all, samples_of


@pytest.mark.parametrize(
    ("name", "rate_hz", "seconds", "utc"),
    [
        ("lf-keyed-carrier-2017", 12001.1323, 29.5, 1511779316.0),
        ("lf-keyed-carrier-2020", 12001.0842, 30.1, 1597301540.0),
    ],
)
def test_an_lf_recording_is_iq_around_its_carrier(
    name: str, rate_hz: float, seconds: float, utc: float
) -> None:
    blocks, error = read_all(data.path(f"off-air/{name}.sigmf-meta"))
    assert error == ""
    assert {(block.rate_hz, block.center_hz) for block in blocks} == {(rate_hz, 77500.0)}
    assert blocks[0].utc == utc
    wave = samples_of(blocks)
    assert len(wave) / rate_hz == pytest.approx(seconds, abs=0.05)
    stored = np.fromfile(data.path(f"off-air/{name}.sigmf-data"), "<i2")
    np.testing.assert_array_equal(wave.view(np.float32), (stored / 32768).astype(np.float32))


def test_the_hf_envelope_is_one_minute_of_floats_in_one_audio_channel() -> None:
    blocks, error = read_all(data.path("off-air/hf-voice-envelope.wav"))
    assert error == ""
    wave = samples_of(blocks)
    assert (wave.dtype, len(wave), blocks[0].rate_hz, blocks[0].center_hz) == (
        np.float32,
        960_000,
        16000.0,
        0.0,
    )
