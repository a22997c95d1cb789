"""Other carriers in the channel: z = 1 + m + a exp(j 2 pi f t), made in closed form, each row of a bank a trial."""

import numpy as np
import pytest

from monitord.blocks import Baseband, Fault, Span
from monitord.detect.synchronous import SynchronousDetector
from monitord.measure.interference import InterferenceMeter
from monitord.stage import Bank
from tests import signals
from tests.runs import channel, run
from tests.trials import GRID, RATE_HZ, bank_of, measured, programmes, received, times

OFFSETS = np.array([0.7, 5.0, 17.0, 50.3, 300.2, 1000.0, 4500.4])
BOTH_SIDES = np.concatenate([OFFSETS, -OFFSETS])


def lines(bank: Bank, hops: int, offset_hz: np.ndarray, level_db: float, seed: int = 5) -> np.ndarray:
    """a exp(j (2 pi f t + phi)) of random phase in each row, (rows, frames)."""
    turns = offset_hz[:, None] * times(bank, hops)
    turns += np.random.default_rng(seed).uniform(0, 1, len(offset_hz))[:, None]
    return np.asarray(10 ** (level_db / 20) * np.exp(2j * np.pi * turns))


def told(
    bank: Bank, modulation: np.ndarray, c_n0_dbhz: float = 80.0, seed: int = 4
) -> tuple[np.ndarray, np.ndarray]:
    """Offsets and levels of the last reading, (rows, 3) each."""
    rng = np.random.default_rng(seed)
    offset_hz = rng.uniform(-4, 4, len(modulation))
    last = measured(bank, received(bank, modulation, offset_hz, c_n0_dbhz, rng), [InterferenceMeter])[-1]
    return last["interferer_offset_hertz"], last["interferer_level_db"]


def level_scatter_db(level_db: float, c_n0_dbhz: float) -> float:
    """Standard deviation of a level from ten Hann spectra: sum over bins of |S + N|^2, S^2 = 1.5 a^2, E N^2 = 3 N0.

    var = 2 x 1.5 a^2 x 3 N0 x 35/18 / 10, since Hann bins are correlated by 4/9 and 1/36 (Harris 1978).
    """
    noise = 3 * 10 ** (-c_n0_dbhz / 10)
    return float(4.343 * np.sqrt(2 * noise * 35 / 18 / (1.5 * 10 ** (level_db / 10) * 10)))


@pytest.mark.parametrize("tone_depth", [0.0, 0.8])
@pytest.mark.parametrize(
    ("level_db", "c_n0_dbhz"), [(-20.0, 80.0), (-35.0, 80.0), (-50.0, 80.0), (-50.0, 100.0)]
)
def test_a_carrier_is_told_with_side_offset_and_level(
    level_db: float, c_n0_dbhz: float, tone_depth: float
) -> None:
    """From 0.7 Hz to 4.5 kHz off, alone and under a tone: offset within 0.1 Hz, level within 4.5 deviations."""
    bank, hops = bank_of(len(BOTH_SIDES)), 300
    tone = signals.tone(tone_depth, 400.0, times(bank, hops))
    offset_hz, found_db = told(bank, tone + lines(bank, hops, BOTH_SIDES, level_db), c_n0_dbhz)
    np.testing.assert_allclose(offset_hz[:, 0], BOTH_SIDES, atol=0.1)
    np.testing.assert_allclose(
        found_db[:, 0], level_db, atol=0.05 + 4.5 * level_scatter_db(level_db, c_n0_dbhz)
    )
    assert np.isnan(offset_hz[:, 1:]).all()
    assert np.isnan(found_db[:, 1:]).all()


@pytest.mark.parametrize(("level_db", "hops"), [(-20.0, 200), (-40.0, 400)])
def test_a_carrier_is_told_under_loud_programme(level_db: float, hops: int) -> None:
    """At 300 Hz programme of 90 % holds -37 dB in each hertz: above the weaker of these lines."""
    bank = bank_of(len(BOTH_SIDES))
    programme, _ = programmes(bank, hops, 0.9, np.random.default_rng(2))
    offset_hz, found_db = told(bank, programme + lines(bank, hops, BOTH_SIDES, level_db))
    np.testing.assert_allclose(offset_hz[:, 0], BOTH_SIDES, atol=0.1)
    np.testing.assert_allclose(found_db[:, 0], level_db, atol=0.1 + 4.5 * level_scatter_db(level_db, 80.0))
    assert np.isnan(offset_hz[:, 1:]).all()


def test_the_side_is_right_in_95_of_100_trials_where_programme_is_stronger() -> None:
    """-45 dB, 80 to 900 Hz off, programme of 90 %; right if told, and told in most after a minute."""
    rng = np.random.default_rng(8)
    bank, hops = bank_of(60, bandwidth_hz=1000.0, emission_bandwidth_hz=1000.0), 600
    truth = rng.choice([-1, 1], 60) * np.exp(rng.uniform(np.log(80), np.log(900), 60))
    programme, _ = programmes(bank, hops, 0.9, rng)
    offset_hz, _ = told(bank, programme + lines(bank, hops, truth, -45.0))
    right = np.abs(offset_hz[:, 0] - truth) < 0.1
    known = np.isfinite(offset_hz[:, 0])
    assert right.sum() >= 0.95 * known.sum()
    assert known.sum() >= 0.5 * len(truth)


def test_three_carriers_are_ranked_and_a_fourth_is_left_out() -> None:
    bank, hops = bank_of(2), 300
    wave = sum(
        lines(bank, hops, np.array([hertz, -hertz]), level_db, seed)
        for seed, (hertz, level_db) in enumerate(
            [(730.5, -41.0), (-2400.3, -30.0), (11.2, -35.0), (60.7, -46.0)]
        )
    )
    offset_hz, level_db = told(bank, np.asarray(wave), 90.0)
    np.testing.assert_allclose(offset_hz[0], [-2400.3, 11.2, 730.5], atol=0.1)
    np.testing.assert_allclose(offset_hz[1], [2400.3, -11.2, -730.5], atol=0.1)
    np.testing.assert_allclose(level_db, [[-30, -35, -41]] * 2, atol=0.3)


@pytest.mark.parametrize("c_n0_dbhz", [50.0, 70.0, 100.0])
def test_noise_alone_is_no_carrier(c_n0_dbhz: float) -> None:
    """100 channels of 20 s: half a channel-hour of 2200 bins, each once in 10^12 by design."""
    bank = bank_of(100, bandwidth_hz=2000.0, emission_bandwidth_hz=2000.0)
    rng = np.random.default_rng(1)
    wave = received(bank, np.zeros((100, 200 * bank.frames)), rng.uniform(-9, 9, 100), c_n0_dbhz, rng)
    for reading in measured(bank, wave, [InterferenceMeter]):
        assert np.isnan(reading["interferer_offset_hertz"]).all()
        assert np.isnan(reading["interferer_level_db"]).all()


@pytest.mark.parametrize("c_n0_dbhz", [70.0, 90.0])
def test_a_test_tone_with_incidental_phase_modulation_is_no_carrier(c_n0_dbhz: float) -> None:
    """1 kHz of 95 % with 2 % of its second harmonic and 0.02 rad (0.003 rad at 2 kHz), at any phase between them."""
    bank, hops = bank_of(12), 200
    t, angle = times(bank, hops), np.linspace(0, 2 * np.pi, 12, endpoint=False)[:, None]
    envelope = 1 + signals.tone(0.95, 1000.0, t) + signals.tone(0.02, 2000.0, t, 1.0)
    phase = signals.tone(0.02, 1.0, 1000 * t + angle / 6.28) + signals.tone(
        0.003, 1.0, 2000 * t + angle / 3.14
    )
    offset_hz, _ = told(bank, envelope * np.exp(1j * phase) - 1, c_n0_dbhz)
    assert np.isnan(offset_hz).all()


@pytest.mark.parametrize("level_db", [-20.0, -40.0])
def test_hum_of_the_phase_is_no_carrier_with_and_without_programme(level_db: float) -> None:
    """Both sidebands of 50, 100 and 300 Hz in quadrature, as strong as an interferer of this level would be there."""
    bank, hops = bank_of(6, bandwidth_hz=1000.0, emission_bandwidth_hz=1000.0), 300
    programme, _ = programmes(bank, hops, 0.9, np.random.default_rng(3))
    programme[:3] = 0
    hum = 1j * signals.tone(
        10 ** (level_db / 20), 1.0, np.array([50.0, 100.0, 300.0] * 2)[:, None] * times(bank, hops)
    )
    offset_hz, _ = told(bank, programme + hum)
    assert np.isnan(offset_hz).all()


@pytest.mark.parametrize(("name", "seconds"), [("speech.wav", 30), ("music.flac", 8), ("dense.ogg", 40)])
def test_recorded_programme_is_no_carrier_even_with_incidental_phase_modulation(
    name: str, seconds: int
) -> None:
    """40 s of programme of 90 %; 0, 0.02 and 0.1 rad for each 100 % of it, and shifted by a quarter in the last row."""
    bank = bank_of(4)
    programme = signals.recorded_programme(name, bank.rate_hz, seconds, band_hz=4_900.0).modulation
    programme = np.resize(programme, 400 * bank.frames)
    spectrum = np.fft.fft(programme) * (np.fft.fftfreq(len(programme)) > 0) * 2
    shifted = np.fft.ifft(spectrum).imag
    phase = np.stack([0 * programme, 0.02 * programme, 0.1 * programme, 0.05 * shifted])
    rng = np.random.default_rng(6)
    wave = received(bank, (1 + programme) * np.exp(1j * phase) - 1, rng.uniform(-4, 4, 4), 90.0, rng)
    for reading in measured(bank, wave, [InterferenceMeter]):
        assert np.isnan(reading["interferer_offset_hertz"]).all()


def test_a_carrier_that_drifts_is_still_found() -> None:
    """0.5 Hz in 10 s, -40 dB: its offset is that of the middle of the ten seconds, told within 0.15 Hz."""
    bank, hops = bank_of(3), 200
    t = times(bank, hops)
    start_hz = np.array([[12.0], [300.0], [-2000.0]])
    modulation = 0.01 * np.exp(2j * np.pi * (start_hz * t + 0.05 * np.square(t) / 2))
    offset_hz, level_db = told(bank, modulation)
    np.testing.assert_allclose(offset_hz[:, 0], start_hz[:, 0] + 0.05 * 15, atol=0.15)
    np.testing.assert_allclose(level_db[:, 0], -40, atol=0.5)
    assert np.isnan(offset_hz[:, 1:]).all()


@pytest.mark.parametrize("offset_hz", [3.0, 5.0, 12.0])
def test_what_the_loop_makes_of_a_strong_carrier_is_not_told_as_another(offset_hz: float) -> None:
    """-14 dB: what comes up at twice its offset is at -40 dB."""
    bank, hops = bank_of(2), 400
    rng = np.random.default_rng(9)
    truth = np.array([offset_hz, -offset_hz])
    wave = received(bank, lines(bank, hops, truth, -14.0), np.zeros(2), 90.0, rng)
    for reading in measured(bank, wave, [InterferenceMeter]):
        found = reading["interferer_offset_hertz"]
        assert np.isnan(found[:, 1:]).all()
        assert np.all(np.isnan(found[:, 0]) | (np.abs(found[:, 0] - truth) < 0.1))
    np.testing.assert_allclose(found[:, 0], truth, atol=0.1)


def test_the_fault_stands_while_a_carrier_is_above_26_db_and_goes_with_it() -> None:
    """Judged every ten seconds; 25 s with a carrier of -25 (-27) dB, then none."""
    bank, hops = bank_of(2, bandwidth_hz=1000.0, emission_bandwidth_hz=1000.0), 450
    wave = lines(bank, hops, np.array([400.3, 400.3]), -25.0)
    wave[1] *= 10 ** (-2 / 20)
    wave[:, 250 * bank.frames :] = 0
    wave = received(bank, wave, np.zeros(2), 80.0, np.random.default_rng(1))
    detector, meter = SynchronousDetector(), InterferenceMeter()
    detector.prepare(bank)
    meter.prepare(bank)
    faults = []
    for index in range(hops):
        part = wave[:, index * bank.frames : (index + 1) * bank.frames]
        span = Span(index, index * GRID.hop, (index + 1) * GRID.hop, RATE_HZ, None, index == 0)
        faults.append(meter.process(detector.process(Baseband(part, bank.rate_hz, span)))["faults"])
    first, second = np.array(faults).T
    assert not second.any()
    assert np.all(first[100:250] == Fault.INTERFERENCE)
    assert not first[:98].any()
    assert not first[400:].any()


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
def test_the_chain_tells_it_with_either_detector_and_forgets_it_with_the_carrier(detector: str) -> None:
    rate_hz = 12_000.0
    wave = signals.am(
        rate_hz, 26.0, carrier_hz=2.2, modulation=lambda t: signals.tone(0.5, 400.0, t), c_n0_dbhz=85
    )
    t = signals.times(rate_hz, len(wave))
    wave = wave + 0.1 * 10 ** (-30 / 20) * np.exp(2j * np.pi * (2.2 - 731.3) * t)
    wave[round(22 * rate_hz) :] *= 1e-6
    kept = run(wave, rate_hz, [channel(carrier_hz=0.0, bandwidth_hz=1500.0, detector=detector)])
    offset_hz = np.array([one.values["interferer_offset_hertz"][0, 0] for one in kept.readings])
    level_db = np.array([one.values["interferer_level_db"][0, 0] for one in kept.readings])
    assert np.isnan(offset_hz[:8]).all()
    np.testing.assert_allclose(offset_hz[10:22], -731.3, atol=0.1)
    np.testing.assert_allclose(level_db[10:22], -30.0, atol=0.1)
    assert np.isnan(offset_hz[24:]).all()
    assert not kept.tally.stage_failures["InterferenceMeter"]
