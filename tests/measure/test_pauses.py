"""Noise and hum of a station, in pauses of its programme: what was put in comes out, and nothing else does."""

from collections.abc import Callable

import numpy as np
import pytest

from monitord.measure.weighting import a_weighting, bs468_weighting
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 16_000.0
CARRIER_HZ = 1_003.3
BANDWIDTH_HZ = 5_000.0


def audio_noise(
    level_db: float, seconds: float, seed: int = 5, low_hz: float = 0.0, high_hz: float = 7_000.0
):
    """White noise of which the band of 20 Hz to 5 kHz holds `level_db` re the rms of a 100 % sine."""
    rng = np.random.default_rng(seed)
    frames = signals.frames_of(RATE_HZ, seconds)
    hz = np.fft.rfftfreq(frames, 1 / RATE_HZ)
    wave = np.fft.irfft(np.fft.rfft(rng.standard_normal(frames)) * ((hz >= low_hz) & (hz <= high_hz)), frames)
    in_band = min(high_hz, BANDWIDTH_HZ) - max(low_hz, 20.0)
    return wave * np.sqrt(0.5 * 10 ** (level_db / 10) * (RATE_HZ / 2) / in_band)


def lines(mains_hz: float, depths: dict[int, float], t: np.ndarray) -> np.ndarray:
    return sum((signals.tone(depth, mains_hz * order, t, order) for order, depth in depths.items()), 0 * t)


def rss_db(*depths: float) -> float:
    """Root-sum-square of amplitudes, re an amplitude of 100 %."""
    return float(10 * np.log10(np.sum(np.square(depths))))


def hear(
    modulation: Callable[[np.ndarray], np.ndarray] | np.ndarray | float,
    seconds: float = 6.0,
    c_n0_dbhz: float = 90.0,
    every_s: float = 1.0,
    seed: int = 3,
    **keys: object,
) -> Kept:
    wave = signals.am(
        RATE_HZ, seconds, carrier_hz=CARRIER_HZ + 3.1, modulation=modulation, c_n0_dbhz=c_n0_dbhz, seed=seed
    )
    return through(wave, every_s, **keys)


def through(wave: np.ndarray, every_s: float = 1.0, **keys: object) -> Kept:
    channels = [channel(carrier_hz=CARRIER_HZ, bandwidth_hz=BANDWIDTH_HZ, **keys)]
    kept = run(wave, RATE_HZ, channels, interval_s=every_s)
    assert not any(kept.tally.stage_failures.values())
    return kept


def programme(seconds: float, seed: int = 2) -> np.ndarray:
    return signals.programme_like(RATE_HZ, seconds, negative_peak=0.9, seed=seed).modulation


def spread_db(level_db: float, c_n0_dbhz: float, seconds: int) -> float:
    """Three standard deviations of a noise level measured by subtraction over some seconds, in dB.

    Noise power has the relative variance 35/18 / bins of 1 Hz (Hann) each second. In phase stand station and
    reception noise, in quadrature the latter alone: var = (P_s + P_n)^2 + P_n^2, times that.
    """
    station = 0.5 * 10 ** (level_db / 10)
    reception = 10 ** (-c_n0_dbhz / 10) * BANDWIDTH_HZ
    relative = (
        np.sqrt(((station + reception) ** 2 + reception**2) * 35 / 18 / BANDWIDTH_HZ / seconds) / station
    )
    return float(10 * np.log10(1 + 3 * relative))


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize(
    ("level_db", "c_n0_dbhz"), [(-45.0, 80.0), (-45.0, 90.0), (-45.0, 100.0), (-35.0, 80.0), (-60.0, 100.0)]
)
def test_audio_noise_in_a_pause_is_read_without_the_reception_noise(
    level_db: float, c_n0_dbhz: float, detector: str
) -> None:
    kept = hear(audio_noise(level_db, 8.2), 8.2, c_n0_dbhz, detector=detector)
    within = spread_db(level_db, c_n0_dbhz, 6)
    assert kept.last("audio_noise_db") == pytest.approx(level_db, abs=within)
    # White noise through the curves, over the band: A and BS.468-4 themselves are tested against their tables.
    hz = np.linspace(20, BANDWIDTH_HZ, 20_000)
    weighted = kept.readings[-1].values["audio_weighted_noise_db"][0]
    for got, curve in zip(weighted, (a_weighting, bs468_weighting), strict=True):
        expected = level_db + 10 * np.log10(np.mean(np.square(curve(hz))))
        # A weighted band is as good as a narrower one: sum(w)^2 / sum(w^2) bins, here not below 2/3 of them.
        assert got == pytest.approx(expected, abs=1.3 * within)


@pytest.mark.parametrize(
    ("hz", "a_db", "bs468_db"), [(100.0, -19.1, -19.8), (1000.0, 0.0, 0.0), (4000.0, 1.0, 10.5)]
)
def test_a_weak_line_is_weighted_as_the_tables_say(hz: float, a_db: float, bs468_db: float) -> None:
    """IEC 61672-1 table 3 and BS.468-4 table 1 (CHECKS C3, C1), which round to 0.1 dB."""
    kept = hear(lambda t: signals.tone(0.01, hz, t), 6.2, 120.0)
    weighted = kept.readings[-1].values["audio_weighted_noise_db"][0]
    np.testing.assert_allclose(weighted, [a_db - 40, bs468_db - 40], atol=0.1)


def test_reception_noise_alone_is_no_noise_of_the_station() -> None:
    """More than three standard deviations: at most 3 of 1000 seconds and weightings; none of these."""
    for seed, c_n0_dbhz in enumerate((65.0, 75.0, 85.0, 100.0, np.inf)):
        kept = hear(0.0, 8.0, c_n0_dbhz, seed=seed)
        assert np.isnan(kept.of("audio_noise_db")).all()
        assert np.isnan(kept.of("audio_weighted_noise_db")).all()
        assert np.isnan(kept.of("audio_hum_db")).all()


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize("mains_hz", [49.9, 50.2, 60.0, 59.75])
@pytest.mark.parametrize("tone_hz", [None, 1000.0, 400.0])
def test_three_lines_of_the_mains_are_read_in_a_pause_and_under_a_tone(
    mains_hz: float, tone_hz: float | None, detector: str
) -> None:
    """-40 dB at C/N0 80 dB-Hz, within 0.4 dB; the tone (400 Hz: near line 8 of 50 Hz) hides none of these lines."""
    depths = {1: 0.008, 2: 0.005, 3: 0.0033}

    def modulation(t: np.ndarray) -> np.ndarray:
        return lines(mains_hz, depths, t) + (0 if tone_hz is None else signals.tone(0.8, tone_hz, t))

    kept = hear(modulation, 6.2, 80.0, detector=detector)
    assert rss_db(*depths.values()) == pytest.approx(-40, abs=0.1)
    assert kept.last("audio_hum_db") == pytest.approx(rss_db(*depths.values()), abs=0.4)


@pytest.mark.parametrize("mains_hz", [49.76, 50.24])
def test_all_eight_lines_count(mains_hz: float) -> None:
    depths = dict.fromkeys(range(1, 9), 0.002)
    kept = hear(lambda t: lines(mains_hz, depths, t), 6.2, 90.0)
    assert kept.last("audio_hum_db") == pytest.approx(rss_db(*depths.values()), abs=0.2)


def test_a_lone_line_is_hum_only_as_a_multiple_of_the_mains() -> None:
    """100 Hz is what a rectifier leaves of 50 Hz; 101 Hz, 130 Hz and 240 Hz + 2 % are none of 50 or 60 Hz."""
    for hz, hum in ((100.0, True), (120.4, True), (101.0, False), (130.0, False), (244.8, False)):
        kept = hear(lambda t, hz=hz: signals.tone(0.01, hz, t), 5.2)
        if hum:
            assert kept.last("audio_hum_db") == pytest.approx(-40, abs=0.2)
        else:
            assert np.isnan(kept.of("audio_hum_db")).all()
        assert kept.last("audio_noise_db") == pytest.approx(-40, abs=0.2)


def test_a_strange_line_beside_the_hum_is_not_added_to_it() -> None:
    def modulation(t: np.ndarray) -> np.ndarray:
        return lines(50.0, {1: 0.005, 3: 0.005}, t) + signals.tone(0.01, 101.3, t)

    assert hear(modulation, 5.2).last("audio_hum_db") == pytest.approx(rss_db(0.005, 0.005), abs=0.2)


def test_the_mains_frequency_can_be_told() -> None:
    def modulation(t: np.ndarray) -> np.ndarray:
        return lines(50.0, {2: 0.01}, t) + lines(60.0, {2: 0.005}, t)

    for mains_hz, expected in (("found", 0.01), (50, 0.01), (60, 0.005)):
        kept = hear(modulation, 5.2, mains_hz=mains_hz)
        assert kept.last("audio_hum_db") == pytest.approx(rss_db(expected), abs=0.2)


@pytest.mark.parametrize("depths", [{1: 0.06, 2: 0.08, 3: 0.05}, {2: 0.08, 4: 0.04}])
def test_deep_hum_does_not_hide_the_pause(depths: dict[int, float]) -> None:
    """-19 and -21 dB: far above what counts as a pause without hum."""
    kept = hear(lambda t: lines(50.1, depths, t), 6.2)
    assert kept.last("audio_hum_db") == pytest.approx(rss_db(*depths.values()), abs=0.1)
    assert kept.last("audio_noise_db") == pytest.approx(rss_db(*depths.values()), abs=0.1)


def test_a_tone_is_no_pause_and_no_hum_even_at_a_multiple_of_the_mains() -> None:
    for hz in (100.0, 50.0, 1000.0):
        kept = hear(lambda t, hz=hz: signals.tone(0.3, hz, t), 5.2)
        assert np.isnan(kept.of("audio_noise_db")).all()
        assert np.isnan(kept.of("audio_hum_db")).all()


def test_one_second_of_pause_is_too_short_for_hum() -> None:
    def modulation(t: np.ndarray) -> np.ndarray:
        loud = np.where((t > 3.9) & (t < 5.1), 0.0, 1.0)
        return lines(50.0, {2: 0.01}, t) + loud * programme(8.2)

    kept = hear(modulation, 8.2)
    assert np.isnan(kept.of("audio_hum_db")).all()
    assert kept.last("audio_noise_db") == pytest.approx(-40, abs=0.3)


def test_programme_without_a_pause_has_neither_noise_nor_hum() -> None:
    kept = hear(programme(10.0), 10.0, 100.0)
    assert np.isnan(kept.of("audio_noise_db")).all()
    assert np.isnan(kept.of("audio_hum_db")).all()


def test_programme_that_fades_away_is_no_pause() -> None:
    """From -28 dB down by 12 dB a second: each second is below -30 dB, none is steady."""
    kept = hear(lambda t: programme(8.0) * 0.16 * 10 ** (-12 * (t % 2) / 20), 8.0, 100.0)
    assert np.isnan(kept.of("audio_noise_db")).all()


@pytest.mark.parametrize(
    ("name", "seconds"), [("speech.wav", 20.0), ("music.flac", 8.0), ("dense.ogg", 20.0)]
)
@pytest.mark.parametrize("depth", [1.0, 0.04], ids=["loud", "soft"])
def test_recorded_programme_is_not_taken_for_noise_or_hum(name: str, seconds: float, depth: float) -> None:
    """Not even when it is so soft, about -38 dB, that only its movement tells it from noise."""
    modulation = depth * signals.recorded_programme(name, RATE_HZ, seconds).modulation
    kept = hear(modulation, seconds, 100.0)
    assert np.isnan(kept.of("audio_noise_db")).all()
    assert np.isnan(kept.of("audio_hum_db")).all()


def test_values_of_a_pause_stay_while_programme_goes_on_and_are_gone_ten_minutes_later() -> None:
    """In steps of a second that all hold the same programme: time is what the meter sees, not what it hears."""
    rate_hz, bandwidth_hz = 4_000.0, 500.0
    pause_s, rest_s = 5, 605
    rng = np.random.default_rng(8)
    t = signals.times(rate_hz, round((pause_s + rest_s) * rate_hz))
    loud = 0.5 * np.cos(2 * np.pi * 333.3 * t) * (1 + 0.5 * np.cos(2 * np.pi * 3.3 * t))
    wave = signals.am(
        rate_hz,
        pause_s + rest_s,
        modulation=np.where(t < pause_s, 0.01 * np.cos(2 * np.pi * 100 * t), loud),
        c_n0_dbhz=90,
        seed=int(rng.integers(99)),
    )
    keys = {"carrier_hz": 0.0, "bandwidth_hz": bandwidth_hz, "emission_bandwidth_hz": bandwidth_hz}
    kept = run(wave, rate_hz, [channel(**keys)], interval_s=5.0, block=40_000)
    for quantity in ("audio_noise_db", "audio_hum_db"):
        values = kept.of(quantity)
        np.testing.assert_allclose(values[1:120], -40, atol=0.3)
        assert np.isnan(values[121:]).all()


def test_nothing_is_told_while_the_carrier_is_off() -> None:
    wave = signals.am(
        RATE_HZ,
        12.0,
        carrier_hz=CARRIER_HZ,
        modulation=lambda t: signals.tone(0.01, 100.0, t),
        c_n0_dbhz=90.0,
        breaks=[(5.0, 9.0)],
    )
    kept = through(wave)
    for quantity in ("audio_noise_db", "audio_hum_db"):
        values = kept.of(quantity)
        assert np.isnan(values[6:9]).all()
        np.testing.assert_allclose([values[4], values[-1]], -40, atol=0.2)


def test_impulses_and_another_station_are_not_the_noise_of_this_one() -> None:
    """A carrier 700 Hz off at -35 dB and impulses: as strong in quadrature, so not above three deviations."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 8.0))
    rng = np.random.default_rng(4)
    own = signals.am(RATE_HZ, 8.0, carrier_hz=CARRIER_HZ, c_n0_dbhz=90)
    other = 0.1 * 10 ** (-35 / 20) * np.exp(2j * np.pi * (CARRIER_HZ + 700.3) * t)
    clicks = np.where(rng.random(len(t)) < 20 / RATE_HZ, 0.03 * np.exp(2j * np.pi * rng.random(len(t))), 0)
    for disturbance in (other, clicks):
        kept = through(own + disturbance)
        assert np.isnan(kept.of("audio_noise_db")).all()


def test_phase_hum_and_phase_noise_near_the_carrier_are_not_taken_off_the_noise() -> None:
    """0.02 rad at 100 Hz are -34 dB in quadrature; in phase their square leaves 20 log10(0.02^2 / 4) = -80 dB."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 8.2))
    own = signals.am(RATE_HZ, 8.2, carrier_hz=CARRIER_HZ, modulation=audio_noise(-45, 8.2), c_n0_dbhz=100.0)
    kept = through(own * np.exp(0.02j * np.sin(2 * np.pi * 100 * t)))
    assert kept.last("audio_noise_db") == pytest.approx(-45, abs=spread_db(-45, 100.0, 6))


def test_any_interval_tells_the_same() -> None:
    noise = audio_noise(-45, 8.0)
    expected = hear(noise, 8.0).last("audio_noise_db")
    for every_s in (0.1, 0.5, 4.0):
        assert hear(noise, 8.0, every_s=every_s).last("audio_noise_db") == pytest.approx(expected, abs=1e-9)
