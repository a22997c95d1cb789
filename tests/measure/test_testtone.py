"""A steady test tone: found, measured, and told from everything else that may be modulated."""

from collections.abc import Callable

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 14_000.0
BAND_HZ = 5_000.0
QUANTITIES = ("audio_tone_hertz", "audio_sinad_db", "audio_thd_ratio")


def heard(
    modulation: signals.Modulation,
    *,
    seconds: float = 4.05,
    c_n0_dbhz: float = np.inf,
    detector: str = "synchronous",
    interval_s: float = 1.0,
    seed: int = 1,
) -> Kept:
    """Readings of a carrier 3.4 Hz off its nominal frequency; those of the first two seconds are lock-in."""
    wave = signals.am(
        RATE_HZ,
        seconds,
        carrier_hz=3.4,
        phase=1.1,
        modulation=modulation,
        c_n0_dbhz=c_n0_dbhz,
        seed=seed,
    )
    return run(wave, RATE_HZ, [channel(carrier_hz=0.0, detector=detector)], interval_s=interval_s)


def tone(m: float, frequency_hz: float) -> Callable[[signals.Array], signals.Array]:
    return lambda t: signals.tone(m, frequency_hz, t, 0.3)


def nothing(kept: Kept) -> bool:
    return all(np.isnan(kept.of(name)).all() for name in QUANTITIES)


@pytest.mark.parametrize(("detector", "least_db"), [("synchronous", 80.0), ("envelope", 70.0)])
@pytest.mark.parametrize("frequency_hz", [20.0, 20.3, 31.5, 50.0, 123.45, 400.0, 1000.0, 1020.7, 2400.0])
def test_the_tool_adds_no_distortion_of_its_own(frequency_hz: float, detector: str, least_db: float) -> None:
    """A pure tone of 95 %: all that is beside it in the band, harmonics among it, is below the asked -80 and -70 dB."""
    kept = heard(tone(0.95, frequency_hz), detector=detector)
    assert kept.last("audio_tone_hertz") == pytest.approx(frequency_hz, abs=1e-6)
    assert kept.last("audio_sinad_db") > least_db + 40  # arithmetic in single precision
    assert kept.last("audio_thd_ratio") < 10 ** (-least_db / 20)
    noisy = heard(tone(0.95, frequency_hz), detector=detector, c_n0_dbhz=120)
    assert noisy.last("audio_thd_ratio") < 10 ** (-least_db / 20)


@pytest.mark.parametrize(("m", "c_n0_dbhz"), [(0.95, 110), (0.3, 70), (0.3, 60), (0.3, 54)])
def test_sinad_counts_reception_noise_as_noise(m: float, c_n0_dbhz: float) -> None:
    """(m^2/2 + N) / N, where N = (band) / (C/N0) is the noise in phase, 20 Hz to 5 kHz.

    A second scatters by sqrt(1.94 / 4980) = 2 % of N (bins of a Hann spectrum overlap): 0.085 dB; 8 seconds by 0.03 dB.
    """
    kept = heard(tone(m, 1000.0), seconds=10.05, c_n0_dbhz=c_n0_dbhz)
    noise = (BAND_HZ - 20) / 10 ** (c_n0_dbhz / 10)
    expected = 10 * np.log10((m**2 / 2 + noise) / noise)
    assert kept.of("audio_sinad_db")[2:].mean() == pytest.approx(expected, abs=0.12)
    assert kept.of("audio_sinad_db")[2:] == pytest.approx(expected, abs=0.4)


def test_the_frequency_is_as_exact_as_noise_lets_it() -> None:
    """Sd from the phases of two seconds: 1.61 times the Cramer-Rao bound of both together (CHECKS E15).

    Bound, tone of power P in noise of density N per Hz: sqrt(6 N / (P (2 pi)^2 T^3)) with T = 2 s. The two phases, each
    from a Hann window squared (ENBW 35/18), give sqrt(2 x 35/18 x N / (2 P)) / (2 pi): 1.61 times the bound.
    48 values that overlap tell an sd within some 12 % (1 sigma).
    """
    c_n0 = 10**6.5
    errors = [
        heard(tone(0.3, 1000.0), seconds=14.05, c_n0_dbhz=65, seed=seed).of("audio_tone_hertz")[2:] - 1000
        for seed in range(4)
    ]
    bound = np.sqrt(6 / c_n0 / (0.045 * 4 * np.pi**2 * 2**3))
    assert 1.61 * 0.65 * bound < np.std(errors) < 1.61 * 1.35 * bound
    assert abs(np.mean(errors)) < 3 * bound / np.sqrt(48 / 2)


@pytest.mark.parametrize("orders", [(2,), (3,), (2, 3, 5)])
@pytest.mark.parametrize("frequency_hz", [23.7, 400.0, 940.0])
def test_distortion_is_the_harmonics_over_the_fundamental(
    frequency_hz: float, orders: tuple[int, ...]
) -> None:
    """THD_F = root-sum-square of the harmonics over the fundamental; without noise SINAD is (1 + THD^2) / THD^2."""

    def modulation(t: signals.Array) -> signals.Array:
        parts = [signals.tone(0.6 * 0.01 * k, k * frequency_hz, t, float(k)) for k in orders]
        return signals.tone(0.6, frequency_hz, t) + np.sum(parts, axis=0)

    kept = heard(modulation)
    thd = 0.01 * np.sqrt(sum(k**2 for k in orders))
    assert kept.last("audio_thd_ratio") == pytest.approx(thd, rel=1e-4)
    assert kept.last("audio_sinad_db") == pytest.approx(10 * np.log10((1 + thd**2) / thd**2), abs=0.001)


def test_harmonics_beyond_the_bandwidth_do_not_count_and_without_one_there_is_no_distortion() -> None:
    assert heard(lambda t: signals.tone(0.6, 1700.0, t) + signals.tone(0.06, 5100.0, t)).last(
        "audio_thd_ratio"
    ) == pytest.approx(0, abs=1e-4)
    kept = heard(tone(0.6, 2600.0))
    assert kept.last("audio_tone_hertz") == pytest.approx(2600)
    assert kept.last("audio_sinad_db") > 100
    assert np.isnan(kept.last("audio_thd_ratio"))


def test_reception_noise_is_no_distortion() -> None:
    """At 62 dB-Hz noise alone puts sqrt(4 x 1.3 x 3 N / m^2) = 1 % into the four harmonics of 1 kHz; it is subtracted.

    What is left of 20 s is the scatter of 80 exponential powers: 1/sqrt(80) of that in power, a third in amplitude.
    """
    c_n0 = 10**6.2
    unsubtracted = np.sqrt(4 * 1.3 * 3 / c_n0 / 0.3**2)
    kept = heard(tone(0.3, 1000.0), seconds=22.05, c_n0_dbhz=62, interval_s=22.0)
    assert kept.last("audio_thd_ratio") < 0.6 * unsubtracted
    real = heard(
        lambda t: signals.tone(0.3, 1000.0, t) + signals.tone(0.03, 2000.0, t),
        seconds=22.05,
        c_n0_dbhz=62,
        interval_s=22.0,
    )
    assert real.last("audio_thd_ratio") == pytest.approx(0.1, abs=0.006)


@pytest.mark.parametrize(
    "modulation",
    [
        lambda t: signals.tone(0.2, 90.0, t) + signals.tone(0.2, 150.0, t),
        lambda t: signals.tone(0.4, 400.0, t) + signals.tone(0.4, 1020.0, t),
        lambda t: signals.tone(0.02, 100.0, t),
        lambda t: signals.tone(0.5, 18.6, t),
        lambda t: signals.tone(0.5, 5040.0, t),
        lambda t: signals.tone(0.9, 1020.0, t) * (t % 0.7 < 0.35),
        lambda t: signals.tone(0.5, 440.0, t) * (1 + 0.1 * np.sin(2 * np.pi * 3 * t)),
        lambda t: 0.5 * np.cos(2 * np.pi * 440 * t + 0.2 * np.sin(2 * np.pi * 5 * t)),
        lambda t: signals.tone(0.8, 440.0, t) * np.exp(-t / 20),
        lambda t: 0.5 * np.cos(2 * np.pi * (440 * t + 0.05 * t**2)),
        lambda t: 0.5 * np.cos(2 * np.pi * (440 + 2 * np.floor(t)) * t),
        0.0,
    ],
    ids=[
        "90 and 150 Hz",
        "400 and 1020 Hz",
        "hum alone",
        "below 20 Hz",
        "beyond the bandwidth",
        "keyed",
        "tremolo",
        "vibrato",
        "fading 0.4 dB a second",
        "sweeping 0.1 Hz a second",
        "another each second",
        "nothing",
    ],
)
def test_what_is_not_one_steady_tone_is_none(modulation: signals.Modulation) -> None:
    assert nothing(heard(modulation, c_n0_dbhz=90))


@pytest.mark.parametrize("name", ["speech.wav", "music.flac", "dense.ogg"])
@pytest.mark.parametrize("band_hz", [5_000.0, 500.0])
def test_programme_is_no_tone(name: str, band_hz: float) -> None:
    """Held to 500 Hz, too, where few notes are left."""
    programme = signals.recorded_programme(name, RATE_HZ, 8.0, band_hz=band_hz)
    assert nothing(heard(programme.modulation, seconds=8.0, c_n0_dbhz=90))


@pytest.mark.parametrize("c_n0_dbhz", [46, 60, 100])
def test_noise_is_no_tone(c_n0_dbhz: float) -> None:
    assert nothing(heard(0.0, seconds=15.0, c_n0_dbhz=c_n0_dbhz))
    noise = 0.3 * np.random.default_rng(3).standard_normal(round(RATE_HZ * 8))
    assert nothing(heard(noise, seconds=8.0, c_n0_dbhz=c_n0_dbhz))


def test_a_tone_beside_a_weaker_one_counts_and_the_weaker_one_as_disturbance() -> None:
    """A second tone 10 dB down: SINAD = 10 lg(1 + 10) = 10.41 dB; hum 40 dB down: 40.0 dB."""
    kept = heard(lambda t: signals.tone(0.6, 1020.0, t) + signals.tone(0.6 * 10**-0.5, 400.0, t))
    assert kept.last("audio_tone_hertz") == pytest.approx(1020)
    assert kept.last("audio_sinad_db") == pytest.approx(10.414, abs=0.001)
    kept = heard(lambda t: signals.tone(0.5, 1000.0, t) + signals.tone(0.005, 50.0, t))
    assert kept.last("audio_sinad_db") == pytest.approx(10 * np.log10(1 + 1e4), abs=0.001)


def test_a_tone_is_told_after_two_whole_seconds_of_it_and_gone_with_it() -> None:
    kept = heard(
        lambda t: np.where((t >= 2.5) & (t < 6.5), signals.tone(0.5, 1000.0, t), 0.0),
        seconds=9.05,
        c_n0_dbhz=90,
    )
    assert np.isfinite(kept.of("audio_tone_hertz")).tolist() == [False] * 4 + [True] * 2 + [False] * 3


def test_a_long_interval_has_the_mean_of_the_last_run_of_the_tone() -> None:
    def modulation(t: signals.Array) -> signals.Array:
        return np.where(t < 6, signals.tone(0.5, 400.0, t), signals.tone(0.5, 1000.0, t))

    assert heard(modulation, seconds=12.05, interval_s=12.0).last("audio_tone_hertz") == pytest.approx(1000)
    gone = heard(lambda t: signals.tone(0.5, 400.0, t) * (t < 8), seconds=12.05, interval_s=12.0)
    assert nothing(gone)
