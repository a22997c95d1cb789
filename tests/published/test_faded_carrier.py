"""A carrier that has faded against its sidebands (CHECKS E10), and crest factors (CHECKS E14): closed forms."""

from collections.abc import Callable

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
SECONDS = 13.1


def received(envelope: np.ndarray) -> Kept:
    t = np.arange(len(envelope)) / RATE_HZ
    noise = signals.noise(RATE_HZ, len(t), 0.01 / 10**11, np.random.default_rng(6))
    wave = (0.1 * envelope * np.exp(2j * np.pi * 2.1 * t) + noise).astype(np.complex64)
    keys = {"carrier_hz": 0.0, "acquire_hz": 50}
    return run(wave, RATE_HZ, [channel(name="s", **keys), channel(name="e", detector="envelope", **keys)])


def times() -> np.ndarray:
    return np.arange(round(SECONDS * RATE_HZ)) / RATE_HZ


@pytest.mark.parametrize(
    ("k", "apparent", "thd"), [(0.7079, 0.7063, 0.0), (0.5, 1.0, 0.0), (0.3162, 1.5813, 0.324)]
)
def test_e10_a_faded_carrier_makes_its_depth_read_too_high_and_the_envelope_distort(
    k: float, apparent: float, thd: float
) -> None:
    """Carrier at k, sidebands of m = 0.5 as they were: depth 0.5/k; above 100 % the envelope folds (THD 32.4 %)."""
    kept = received(k + signals.tone(0.5, 400.0, times()))
    assert kept.last("modulation_positive_peak_ratio", 0) == pytest.approx(apparent, abs=0.004)
    read = kept.readings[-2].values["audio_thd_ratio"]
    assert read[0] == pytest.approx(0, abs=0.002)
    assert read[1] == pytest.approx(thd, abs=0.003)


@pytest.mark.parametrize(
    ("wave", "crest_db"),
    [
        (lambda t: 0.8 * np.cos(2 * np.pi * 500 * t), 3.0103),
        (lambda t: 0.4 * (np.cos(2 * np.pi * 500 * t) + np.cos(2 * np.pi * 700 * t)), 6.0206),
        # Triangle of 50 Hz by its odd harmonics up to 4950 Hz: the tip is 0.4 % short of the full one's.
        (
            lambda t: (
                0.8 * 8 / np.pi**2 * sum(np.cos(2 * np.pi * 50 * n * t) / n**2 for n in range(1, 100, 2))
            ),
            4.7712,
        ),
    ],
    ids=["sine", "two equal tones", "triangle"],
)
def test_e14_crest_factors(wave: Callable[[np.ndarray], np.ndarray], crest_db: float) -> None:
    kept = received(1 + wave(times()))
    crest = kept.last("modulation_positive_peak_ratio") / kept.last("modulation_rms_ratio")
    assert 20 * np.log10(crest) == pytest.approx(crest_db, abs=0.05)
