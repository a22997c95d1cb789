"""What raises an event and what must not, end to end through the chain, in sentences."""

from collections.abc import Callable

import numpy as np
import pytest

from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 12_003.7


def transmitted(
    modulation: signals.Modulation, seconds: float, c_n0_dbhz: float = 90.0, **keys: object
) -> np.ndarray:
    return signals.am(
        RATE_HZ, seconds, carrier_hz=CARRIER_HZ, modulation=modulation, c_n0_dbhz=c_n0_dbhz, **keys
    )


def toned(depth: float, tone_hz: float, seconds: float) -> np.ndarray:
    return signals.tone(depth, tone_hz, signals.times(RATE_HZ, signals.frames_of(RATE_HZ, seconds)))


def over(kept: Kept) -> list[tuple[str, str]]:
    return [(event.kind, event.detail) for event in kept.events]


@pytest.mark.parametrize("tone_hz", [20.0, 50.0, 200.0, 1000.0, 3000.0])
@pytest.mark.parametrize("c_n0_dbhz", [90.0, 72.0])
def test_a_tone_of_exactly_100_per_cent_is_not_over_modulation(tone_hz: float, c_n0_dbhz: float) -> None:
    assert run(transmitted(toned(1.0, tone_hz, 30.0), 30.0, c_n0_dbhz), RATE_HZ).events == []


def test_a_noise_free_tone_of_exactly_100_per_cent_is_not_over_modulation() -> None:
    assert run(transmitted(toned(1.0, 1000.0, 5.0), 5.0, np.inf), RATE_HZ).events == []


@pytest.mark.parametrize("tone_hz", [50.0, 200.0, 1000.0])
def test_reversal_of_105_per_cent_is_one_negative_event(tone_hz: float) -> None:
    kept = run(transmitted(toned(1.05, tone_hz, 6.0), 6.0), RATE_HZ)
    assert over(kept) == [("overmodulation-negative", "reversal")]
    assert kept.events[0].extreme == pytest.approx(1.05, abs=0.012)  # noise lifts it: 5 sigma


@pytest.mark.parametrize("tone_hz", [50.0, 200.0, 1000.0])
def test_cut_off_of_110_per_cent_is_one_negative_event(tone_hz: float) -> None:
    """Made at 16 times the rate, then band-limited. In 5 kHz the short cut-offs of 1 kHz look like a reversal."""
    modulation = signals.cut_off(lambda t: signals.tone(1.1, tone_hz, t), RATE_HZ, 6.0, band_hz=11_000.0)
    kept = run(transmitted(modulation, 6.0), RATE_HZ)
    assert over(kept) == [("overmodulation-negative", "reversal" if tone_hz == 1000.0 else "cut-off")]


def test_a_burst_is_one_negative_event_told_within_300_ms() -> None:
    for begin_s in (4.0, 4.037, 4.09):
        t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 7.0))
        depth = np.where((t >= begin_s) & (t < begin_s + 0.5), 1.1, 0.5)
        kept = run(transmitted(depth * np.cos(2 * np.pi * 1000 * t), 7.0), RATE_HZ)
        assert over(kept) == [("overmodulation-negative", "reversal")]
        told_s, event = kept.told[0]
        assert told_s + 0.017 - begin_s < 0.3  # the tuner's delay comes on top of the hop's end
        assert event.started_s == pytest.approx(begin_s, abs=0.002)
        assert kept.events[0].ended_s == pytest.approx(begin_s + 0.5, abs=0.002)


def test_positive_peaks_of_124_per_cent_are_allowed_and_of_130_are_not() -> None:
    def one_sided(peak: float) -> np.ndarray:
        t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 5.0))
        shape = np.cos(2 * np.pi * 500 * t) + 0.5 * np.cos(2 * np.pi * 1000 * t)  # +1.5 / -0.75
        return peak / 1.5 * shape

    assert run(transmitted(one_sided(1.24), 5.0), RATE_HZ).events == []
    assert over(run(transmitted(one_sided(1.30), 5.0), RATE_HZ)) == [("overmodulation-positive", "")]


def test_programme_of_97_per_cent_in_noise_raises_nothing() -> None:
    """C/N0 82 dB-Hz: 42 dB in +-5 kHz."""
    programme = signals.programme_like(RATE_HZ, 60.0, negative_peak=0.97, seed=4)
    assert run(transmitted(programme.modulation, 60.0, 82.0), RATE_HZ).events == []


@pytest.mark.parametrize("c_n0_dbhz", [np.inf, 100.0, 70.0, 45.0])
@pytest.mark.parametrize("begin_s", [4.0, 4.031, 4.085])
def test_a_cut_carrier_is_one_loss_within_a_second_and_nothing_else(c_n0_dbhz: float, begin_s: float) -> None:
    breaks = [(begin_s, 6.52)]
    kept = run(transmitted(toned(0.9, 300.0, 9.0), 9.0, c_n0_dbhz, breaks=breaks), RATE_HZ)
    assert kept.kinds() == ["carrier-loss"]
    told_s, event = kept.told[0]
    assert told_s - begin_s < 0.9
    assert event.started_s == pytest.approx(begin_s, abs=0.11)
    assert kept.events[0].ended_s == pytest.approx(6.52, abs=0.35)
    assert [moment.present[0] for moment in kept.moments if 5.0 < moment.span.elapsed_s < 6.5] == [0] * 14
    for reading in kept.readings:
        if 5.0 < reading.span.elapsed_s <= 6.01:
            assert not reading.valid[0]
            values = {name: value[0] for name, value in reading.values.items()}
            assert values.pop("carrier_present") == values.pop("carrier_loop_locked") == 0
            assert all(np.isnan(value).all() for value in values.values())


@pytest.mark.parametrize("low", [0.0, 0.1, 0.15])
def test_dips_of_a_keyed_carrier_are_no_loss(low: float) -> None:
    """Keyed down for 0.1 and 0.2 s each second, as time-signal stations do."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 12.0))
    keyed = np.where(np.mod(t, 1.0) < np.where(np.mod(t, 2.0) < 1, 0.1, 0.2), low - 1.0, 0.0)
    kept = run(transmitted(keyed, 12.0, 80.0), RATE_HZ, [channel()])
    assert "carrier-loss" not in kept.kinds()


def test_a_loss_behind_automatic_gain_is_one_event_and_levels_are_absent() -> None:
    wave = transmitted(toned(0.8, 600.0, 9.0), 9.0, 80.0, breaks=[(4.03, 6.5)])
    kept = run(signals.automatic_gain(wave, RATE_HZ), RATE_HZ, fixed_gain=False)
    assert kept.kinds() == ["carrier-loss"]
    assert np.isnan(kept.of("carrier_level_dbfs")).all()
    assert np.isfinite(kept.of("carrier_to_noise_density_dbhz")[2:4]).all()


@pytest.mark.parametrize(("expect", "kinds"), [("carrier", ["carrier-loss"]), ("none", []), ("any", [])])
def test_no_carrier_from_the_start_is_a_loss_where_one_is_expected(expect: str, kinds: list[str]) -> None:
    rng = np.random.default_rng(2)
    noise = rng.standard_normal(150_000) + 1j * rng.standard_normal(150_000)
    kept = run(0.01 * noise, RATE_HZ, [channel(expect=expect)])
    assert kept.kinds() == kinds
    assert all(0.5 <= told_s <= 2.0 for told_s, _ in kept.told[:1])


def test_a_carrier_that_moves_within_reach_is_not_lost() -> None:
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 6.0))
    phase = 2 * np.pi * np.cumsum(np.where(t < 3.0, 12_003.0, 12_043.0)) / RATE_HZ
    noise = np.random.default_rng(3).standard_normal((len(t), 2)) @ [1e-5, 1e-5j]
    kept = run(0.1 * (1 + toned(0.5, 700.0, 6.0)) * np.exp(1j * phase) + noise, RATE_HZ)
    assert kept.events == []
    assert kept.last("carrier_frequency_offset_hertz") == pytest.approx(43.0, abs=0.005)


def test_digital_silence_is_a_loss_and_no_trouble() -> None:
    kept = run(np.zeros(150_000, complex), RATE_HZ)
    assert kept.kinds() == ["carrier-loss"]
    assert set(kept.tally.stage_failures.values()) == {0}


@pytest.mark.parametrize(
    "level_db",
    [
        lambda t: np.where(t > 4.03, 6.0, 0.0),
        lambda t: np.where(t > 4.03, -6.0, 0.0),
        lambda t: 3 * np.sin(2 * np.pi * 0.2 * t),
        lambda t: -8 * np.clip(np.minimum(t - 4, 7 - t), 0, 1),
    ],
    ids=["up 6 dB", "down 6 dB", "6 dB in 5 s", "8 dB in 1 s"],
)
def test_a_carrier_that_changes_level_is_not_over_modulated(
    level_db: Callable[[np.ndarray], np.ndarray],
) -> None:
    """The carrier's mean lags by half a second; 97 % must not be told as more meanwhile."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 10.0))
    envelope = 10 ** (level_db(t) / 20) * (1 + signals.tone(0.97, 700.0, t))
    kept = run(transmitted(envelope - 1, 10.0), RATE_HZ)
    assert kept.events == []
    assert np.nanmax(kept.of("modulation_positive_peak_ratio")) < 1.3
    assert np.nanmax(kept.of("modulation_negative_peak_ratio")) < 1.0


def test_a_carrier_far_below_its_level_is_lost_and_its_readings_are_invalid() -> None:
    """15 dB down with plenty of C/N0 left: a driver without its final stage."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 9.0))
    envelope = np.where(t > 4.0, 10 ** (-15 / 20), 1.0) * (1 + signals.tone(0.5, 700.0, t))
    kept = run(transmitted(envelope - 1, 9.0), RATE_HZ)
    assert kept.kinds() == ["carrier-loss"]
    assert kept.events[0].started_s == pytest.approx(4.0, abs=0.15)
    for reading in kept.readings[5:]:
        assert not reading.valid[0]
        assert reading.values["carrier_present"][0] == 0
        assert np.isnan(reading.values["carrier_level_dbfs"][0])


@pytest.mark.parametrize("loss_after_s", [0.2, 0.3, 0.5])
@pytest.mark.parametrize("begin_s", [3.0, 3.025, 3.05, 3.075])
def test_a_break_shorter_than_its_time_is_no_loss_and_a_longer_one_is(
    loss_after_s: float, begin_s: float
) -> None:
    for length_s, kinds in ((loss_after_s - 0.05, []), (loss_after_s + 0.25, ["carrier-loss"])):
        breaks = [(begin_s, begin_s + length_s)]
        kept = run(
            transmitted(toned(0.6, 500.0, 5.5), 5.5, 60.0, breaks=breaks),
            RATE_HZ,
            [channel(loss_after_s=loss_after_s)],
        )
        assert kept.kinds() == kinds
