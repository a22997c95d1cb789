"""Speech of an HF time-signal station off the air: the envelope from the recording, on a carrier of our own.

The recording's index says what was measured on it: voice in seconds 1-10, +62.7 / -87.7 %.
"""

import numpy as np
import pytest

from tests import data, signals
from tests.runs import Kept, channel, run

RATE_HZ = 48_000
CARRIER_HZ = 12_000.0
OFFSET_HZ = 43.7  # made up
SECONDS = 12
FROM_S, TO_S = 1.0, 10.0


@pytest.fixture(scope="module", params=["iq", "real-if"])
def voice(request: pytest.FixtureRequest) -> Kept:
    """What the chain makes of the first seconds."""
    envelope, rate_hz = data.hf_voice_envelope()
    wave = data.on_a_carrier(envelope[: SECONDS * rate_hz], rate_hz, RATE_HZ, CARRIER_HZ + OFFSET_HZ)
    return run(wave.real if request.param == "real-if" else wave, RATE_HZ, [channel()])


def test_voice_reads_the_peaks_that_its_index_says(voice: Kept) -> None:
    """Within 1.5 points; the 10 s of the window end with second 10, what is before second 1 stays below."""
    reading = voice.readings[9]
    assert reading.span.elapsed_s == pytest.approx(TO_S, abs=1e-6)
    assert reading.values["modulation_positive_peak_ratio"][0] == pytest.approx(0.627, abs=0.015)
    assert reading.values["modulation_negative_peak_ratio"][0] == pytest.approx(0.877, abs=0.015)


def test_every_tenth_of_a_second_reads_the_peak_that_the_recording_has_there(voice: Kept) -> None:
    """Within a point of what the recording itself says; a peak in the last 0.5 ms may be told with the next tenth."""
    chosen = [moment for moment in voice.moments if FROM_S + 0.5 < moment.span.elapsed_s <= TO_S]
    assert len(chosen) == 85
    told = np.array([[moment.positive_peak[0], moment.negative_peak[0]] for moment in chosen])
    envelope, rate_hz = data.hf_voice_envelope()
    truth = peaks_of_tenths(envelope[: SECONDS * rate_hz], rate_hz)
    least, most = (peaks[[moment.span.index for moment in chosen]] for peaks in truth)
    assert np.all(told > least - 0.01)
    assert np.all(told < most + 0.01)


def test_voice_is_on_frequency_present_valid_and_raises_nothing(voice: Kept) -> None:
    for reading in voice.readings[1:]:
        assert reading.valid[0]
        assert reading.values["carrier_present"][0] == 1
        assert reading.values["carrier_frequency_offset_hertz"][0] == pytest.approx(OFFSET_HZ, abs=0.001)
    assert voice.events == []


def peaks_of_tenths(envelope: np.ndarray, rate_hz: int) -> tuple[np.ndarray, np.ndarray]:
    """Positive and negative peak of each 0.1 s, (tenths, 2): without its last 0.5 ms, and with those before it.

    Cut to 5 kHz, at 4 times the recording's rate; re the mean over the second up to its end, Hann-weighted.
    """
    times = 4
    band = signals.low_passed(envelope, rate_hz, 5_000.0, times * len(envelope))
    step, slack = times * rate_hz // 10, times * rate_hz // 2000
    taper = np.hanning(times * rate_hz + 2)[1:-1]
    least, most = [], []
    for end in range(step, len(band) + 1, step):
        before = band[max(0, end - len(taper)) : end]
        carrier = np.average(before, weights=taper[-len(before) :])
        for peaks, start, stop in ((least, end - step, end - slack), (most, max(0, end - step - slack), end)):
            part = band[start:stop] / carrier - 1
            peaks.append((part.max(), -part.min()))
    return np.array(least), np.array(most)
