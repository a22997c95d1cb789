"""Flat tops: the time at a repeated extreme, for sines, clipped programme and programme that is not clipped."""

from functools import cache

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 24_000.0
SECONDS = 7.0
DENSE = 8  # the clipper works at this many times the rate


def heard(modulation: signals.Modulation, c_n0_dbhz: float = np.inf, seconds: float = SECONDS) -> Kept:
    wave = signals.am(
        RATE_HZ, seconds, carrier_hz=0.7, modulation=modulation, c_n0_dbhz=c_n0_dbhz, phase=0.4, seed=2
    )
    return run(wave, RATE_HZ, [channel(carrier_hz=0.0)])


def mean_share(kept: Kept) -> float:
    return float(kept.of("audio_flat_top_ratio")[2:].mean())


@cache
def programme(name: str) -> signals.Array:
    """Programme held to 4.5 kHz, `DENSE` times as dense."""
    if name == "like programme":
        return signals.programme_like(RATE_HZ * DENSE, SECONDS, band_hz=4_500).modulation
    return signals.recorded_programme(name, RATE_HZ * DENSE, SECONDS, band_hz=4_500).modulation


def clipped(name: str, share: float) -> signals.Array:
    """Clipped for this share of the time at a level that becomes 90 % of the carrier, then held to 5 kHz."""
    wave = programme(name)
    level = np.quantile(np.abs(wave), 1 - share)
    held = np.clip(wave / level, -1, 1) * 0.9
    return signals.low_passed(held, RATE_HZ * DENSE, 5_000, round(RATE_HZ * SECONDS))


@pytest.mark.parametrize("m", [0.2, 0.5, 0.95])
@pytest.mark.parametrize("frequency_hz", [101.3, 1003.7])
def test_a_sine_reads_the_time_that_theory_gives_it(m: float, frequency_hz: float) -> None:
    """acos(0.995) / pi for each polarity, 0.0637 for both (CHECKS E12).

    The histogram's bins are a tenth of the 0.5 %: up to one of the ten is lost above the peak, 1 - sqrt(0.9) = 5 % of
    the time.
    """
    theory = 2 * np.arccos(0.995) / np.pi
    kept = heard(lambda t: signals.tone(m, frequency_hz, t), seconds=4.05)
    read = kept.of("audio_flat_top_ratio")[2:]
    assert (read > 0.94 * theory).all()
    assert (read < 1.02 * theory).all()


@pytest.mark.parametrize("share", [0.95, 0.9, 0.5])
@pytest.mark.parametrize(("c_n0_dbhz", "within"), [(np.inf, 0.015), (90, 0.015), (80, 0.03)])
def test_a_clipped_sine_reads_the_time_it_is_clipped(share: float, c_n0_dbhz: float, within: float) -> None:
    """2 acos(c) / pi of the time (CHECKS E12), of 101.3 Hz, whose harmonics beyond 5 kHz ripple little.

    In addition comes what lies less than 0.5 % below the plateau (0.007 at 0.9), and with noise less than sigma.
    """
    kept = heard(lambda t: np.clip(0.9 / share * np.cos(2 * np.pi * 101.3 * t), -0.9, 0.9), c_n0_dbhz)
    assert mean_share(kept) == pytest.approx(2 * np.arccos(share) / np.pi, abs=within)


def test_one_polarity_counts_alone() -> None:
    """Clipped above only, at half the peak: acos(1/2)/pi; the other polarity adds its natural acos(0.995)/pi."""
    kept = heard(lambda t: np.minimum(signals.tone(0.8, 101.3, t), 0.4))
    assert mean_share(kept) == pytest.approx((np.arccos(0.5) + np.arccos(0.995)) / np.pi, abs=0.015)


@pytest.mark.parametrize("share", [0.03, 0.1])
@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg", "like programme"])
def test_clipped_programme_reads_the_share_that_is_still_flat_behind_the_filter(
    name: str, share: float
) -> None:
    """The truth is counted in the wave without noise: within 0.5 % of the level at which it was clipped.

    The filter's ripple leaves between a tenth (noise-like) and four fifths (music) of the time clipped in it.
    With noise the band is sigma wide instead (0.8 % at 80 dB-Hz): the truth is counted within that.
    """
    wave = clipped(name, share)
    near = np.abs(np.abs(wave[2 * round(RATE_HZ) :]) / 0.9 - 1)
    assert mean_share(heard(wave, 100)) == pytest.approx(np.mean(near < 0.005), rel=0.25, abs=0.001)
    noisy = mean_share(heard(wave, 80))
    assert 0.9 * np.mean(near < 0.005) < noisy < 1.5 * np.mean(near < 0.0082) + 0.002


@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg", "like programme"])
def test_programme_that_is_not_clipped_has_no_flat_tops(name: str) -> None:
    wave = programme(name)[::DENSE]
    assert mean_share(heard(wave, 100)) < 0.0035
    assert mean_share(heard(wave, 80)) < 0.008


@pytest.mark.parametrize(("times", "share"), [(1, 0.0), (6, 6 * 0.00857)])
def test_an_extreme_counts_only_if_it_is_repeated(times: int, share: float) -> None:
    """So many trapezoids of 70 % each second, 8 ms long at the top, 2 ms for each slope, clipped at 60 %.

    They are clipped for 8 + 2 x 2 x (1/7) ms each; a tone beside them keeps the rest of the time from being flat.
    """

    def modulation(t: signals.Array) -> signals.Array:
        near = np.abs((t * times) % 1 - 0.45) / times
        return np.minimum(0.7 * np.clip((0.006 - near) / 0.002, 0, 1) + signals.tone(0.05, 300.0, t), 0.6)

    kept = heard(modulation, seconds=4.05)
    assert kept.last("audio_flat_top_ratio") == pytest.approx(share, abs=0.003)


def test_nothing_is_told_where_there_is_nothing_to_tell() -> None:
    for modulation, c_n0_dbhz in ((0.0, 90.0), (0.05, 90.0), (0.2, 70.0)):
        kept = heard(lambda t, m=modulation: signals.tone(m, 400.0, t), c_n0_dbhz, seconds=4.05)
        assert np.isnan(kept.of("audio_flat_top_ratio")).all()
