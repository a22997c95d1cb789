"""Loudness against ITU-R BS.1770, BS.2217 material, EBU Tech 3341 and libebur128 (CHECKS C4, C5, G).

Everything goes through a simulated transmitter and back: m is the sample value, after 3 s of bare carrier.
"""

from collections.abc import Sequence

import numpy as np
import pytest

from monitord.measure.kweighting import HIGH_PASS, SHELF, response
from tests import data, signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
LEAD_S = 3.0
Part = tuple[float | None, float]  # dBFS of a 1 kHz sine or silence, seconds


def by_radio(audio: np.ndarray, rate_hz: float = RATE_HZ, bandwidth_hz: float = 5_000.0) -> Kept:
    audio = np.concatenate([np.zeros(round(LEAD_S * rate_hz)), audio, np.zeros(round(0.3 * rate_hz))])
    keys = {"carrier_hz": 0.0, "acquire_hz": 50, "bandwidth_hz": bandwidth_hz}
    return run((0.1 * (1 + audio)).astype(np.complex64), rate_hz, [channel(**keys)], block=24_000)


def sines(parts: Sequence[Part]) -> np.ndarray:
    pieces = []
    for dbfs, seconds in parts:
        t = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
        pieces.append(0 * t if dbfs is None else 10 ** (dbfs / 20) * np.sin(2 * np.pi * 1000 * t))
    return np.concatenate(pieces)


def largest(kept: Kept, name: str) -> float:
    return float(np.nanmax(kept.of(f"audio_loudness_{name}_lufs")))


def test_c4_the_two_stages_have_the_published_gains() -> None:
    """CHECKS C4, computed from the transcribed coefficients."""
    gains = [
        (20, -13.275), (50, -3.934), (100, -1.133), (200, -0.265), (500, 0.042), (997, 0.691), (1000, 0.698),
        (1500, 2.036), (2000, 3.071), (4000, 3.968), (10_000, 4.042),
    ]  # fmt: skip
    for hz, db in gains:
        assert 20 * np.log10(abs(response(np.array([float(hz)]))[0])) == pytest.approx(db, abs=0.001)
    assert SHELF[0][0] == 1.53512485958697
    assert HIGH_PASS[1][1] == -1.99004745483398


def test_c4_a_997_hz_sine_of_full_scale_reads_minus_3_01_in_one_channel() -> None:
    """-3.010 LKFS in one channel (CHECKS C4): as dual mono 0.000."""
    t = np.arange(round(8 * RATE_HZ)) / RATE_HZ
    kept = by_radio(0.5 * np.sin(2 * np.pi * 997 * t))
    assert largest(kept, "short_term") == pytest.approx(20 * np.log10(0.5), abs=0.005)


@pytest.mark.parametrize(
    ("parts", "expected"),
    [
        ([(-23, 20)], -23.0),
        ([(-33, 20)], -33.0),
        ([(-36, 10), (-23, 60), (-36, 10)], -23.0),
        ([(-72, 10), (-36, 10), (-23, 60), (-36, 10), (-72, 10)], -23.0),
        ([(-26, 20), (-20, 20.1), (-26, 20)], -23.0),
    ],
    ids=["1", "2", "3", "4", "5"],
)
def test_c5_ebu_tech_3341_cases_1_to_5(parts: list[Part], expected: float) -> None:
    kept = by_radio(sines(parts))
    assert kept.last("audio_loudness_integrated_lufs") == pytest.approx(expected, abs=0.1)
    if len(parts) == 1:
        assert largest(kept, "momentary") == pytest.approx(expected, abs=0.1)
        assert largest(kept, "short_term") == pytest.approx(expected, abs=0.1)


def test_c5_ebu_tech_3341_case_9_short_term_is_constant() -> None:
    kept = by_radio(sines([(-20, 1.34), (-30, 1.66)] * 5))
    values = kept.of("audio_loudness_short_term_lufs")[7:17]
    np.testing.assert_allclose(values, -23.0, atol=0.1)


def test_c5_ebu_tech_3341_case_12_momentary_is_constant() -> None:
    kept = by_radio(sines([(-20, 0.18), (-30, 0.22)] * 25))
    values = kept.of("audio_loudness_momentary_lufs")[5:12]
    np.testing.assert_allclose(values, -23.0, atol=0.1)


@pytest.mark.parametrize("n", range(0, 20, 3))
def test_c5_ebu_tech_3341_case_10_short_term_wherever_the_tone_begins(n: int) -> None:
    kept = by_radio(sines([(None, 0.15 * n), (-23, 3), (None, 1)]))
    assert largest(kept, "short_term") == pytest.approx(-23.0, abs=0.1)


@pytest.mark.parametrize("n", range(0, 20, 3))
def test_c5_ebu_tech_3341_case_13_momentary_wherever_the_tone_begins(n: int) -> None:
    kept = by_radio(sines([(None, 0.02 * n), (-23, 0.4), (None, 1)]))
    assert largest(kept, "momentary") == pytest.approx(-23.0, abs=0.1)


def test_c5_ebu_tech_3341_case_11_each_tone_in_its_turn() -> None:
    """Successive tones of 3 s, each 1 LU louder: the largest so far is each one's own."""
    parts: list[Part] = []
    for n in range(0, 20, 4):
        parts += [(None, 0.15 * n), (-38 + n, 3), (None, 3 - 0.15 * n)]
    values = by_radio(sines(parts)).of("audio_loudness_short_term_lufs")
    for k, n in enumerate(range(0, 20, 4)):
        begin = round(LEAD_S) + 6 * k
        assert np.nanmax(values[begin : begin + 7]) == pytest.approx(-38 + n, abs=0.1)


def test_c5_ebu_tech_3341_case_14_each_burst_in_its_turn() -> None:
    """Bursts of 0.4 s, each 1 LU louder, 0.8 s apart."""
    parts: list[Part] = []
    for n in range(20):
        parts += [(None, 0.02 * n), (-38 + n, 0.4), (None, 0.4 - 0.02 * n)]
    kept = by_radio(sines(parts))
    assert largest(kept, "momentary") == pytest.approx(-19.0, abs=0.1)


@pytest.mark.parametrize(("name", "expected"), [("abs", -69.5), ("rel", -10.0)])
def test_bs2217_compliance_material(name: str, expected: float) -> None:
    """Noise-free through a transmitter and back, as dual mono: within 0.1 LU of what the ITU states."""
    import soundfile

    audio, rate_hz = soundfile.read(data.path(f"published/bs2217-{name}-gate-test.wav"), always_2d=True)
    channels = audio.shape[1]
    kept = by_radio(audio[:, 0] * np.sqrt(min(channels, 2) / 2), rate_hz, 5_000.0)
    assert kept.last("audio_loudness_integrated_lufs") == pytest.approx(expected, abs=0.1)


@pytest.mark.parametrize("name", ["speech.wav", "dense.ogg"])
def test_programme_reads_as_libebur128_has_it(name: str) -> None:
    import pyebur128

    made = signals.recorded_programme(name, 48_000.0, 20.0, band_hz=4_800.0, negative_peak=0.9)
    state = pyebur128.R128State(2, 48_000, pyebur128.MeasurementMode.MODE_I)
    state.add_frames(np.repeat(made.modulation[:, None], 2, axis=1).ravel(), len(made.modulation))
    expected = pyebur128.get_loudness_global(state)
    kept = by_radio(made.modulation, 48_000.0)
    assert kept.last("audio_loudness_integrated_lufs") == pytest.approx(expected, abs=0.1)


def test_a_bare_carrier_has_no_loudness() -> None:
    kept = by_radio(np.zeros(round(3 * RATE_HZ)))
    for name in ("momentary", "short_term", "integrated"):
        assert np.isnan(kept.of(f"audio_loudness_{name}_lufs")).all()
    assert kept.tally.stage_failures["LoudnessMeter"] == 0
