"""What quadrature tells: incidental phase, sideband balance, disagreement, signal to noise; and carrier shift."""

import numpy as np
import pytest

from monitord.measure.carriershift import CarrierShiftMeter
from monitord.measure.disagreement import DisagreementMeter
from monitord.measure.quadrature import QuadratureMeter
from monitord.measure.sidebandbalance import SidebandBalanceMeter
from tests import signals
from tests.runs import channel, run
from tests.trials import bank_of, measured, programmes, received, times, tones

ROWS, HOPS = 20, 50
METERS = (QuadratureMeter, SidebandBalanceMeter, DisagreementMeter)


def last_of(name: str, envelope: np.ndarray, c_n0_dbhz: float, detector: str = "synchronous") -> np.ndarray:
    bank = bank_of(len(envelope))
    wave = received(bank, envelope - 1, np.full(len(envelope), 3.0), c_n0_dbhz, np.random.default_rng(8))
    return np.asarray(measured(bank, wave, METERS, detector)[-1][name])


def one_tone(depth: float, hz: float, lower: float = 1.0, upper: float = 1.0) -> np.ndarray:
    """Envelope with sidebands of depth/2 each, times `lower` and `upper`: complex (1, frames)."""
    turn = np.exp(2j * np.pi * hz * times(bank_of(1), HOPS))
    return (1 + depth / 2 * (upper * turn + lower * np.conj(turn)))[None]


@pytest.mark.parametrize("kind", ["tone", "programme"])
@pytest.mark.parametrize(("c_n0_dbhz", "floor"), [(100.0, 2e-4), (80.0, 8e-4)])
@pytest.mark.parametrize("k", [0.0, 0.02, 0.1])
def test_phase_in_proportion_to_the_programme_reads_k_times_its_rms(
    kind: str, c_n0_dbhz: float, floor: float, k: float
) -> None:
    """phi = k m. Beside noise it may err by what goes with m^2: skewed programme has some of that along m."""
    bank, rng = bank_of(ROWS), np.random.default_rng(5)
    m = tones(bank, HOPS, 0.8, rng) if kind == "tone" else programmes(bank, HOPS, 0.8, rng)[0]
    last = m[:, -10 * bank.frames :]
    truth = k * np.sqrt(np.mean(last**2, axis=1))
    read = last_of("incidental_phase_radians", (1 + m) * np.exp(1j * k * m), c_n0_dbhz)
    np.testing.assert_allclose(read, truth, atol=floor, rtol=0.02 if kind == "tone" else 0.15)


@pytest.mark.parametrize("theta", [0.0, 1.0, np.pi / 2])
def test_a_phase_that_lags_behind_the_tone_reads_its_own_rms(theta: float) -> None:
    t = times(bank_of(1), HOPS)
    turn = 2 * np.pi * 700 * t
    envelope = (1 + 0.6 * np.cos(turn)) * np.exp(0.1j * np.cos(turn - theta))
    assert last_of("incidental_phase_radians", envelope[None], 100.0)[0] == pytest.approx(
        0.1 / np.sqrt(2), rel=0.01
    )


def test_e19_phase_of_a_tenth_of_a_radian_has_sidebands_26_db_down_in_quadrature() -> None:
    """Carrier rotated by 0.1 cos: first sidebands 0.05 each (CHECKS E19, from memory), rms of the phase 0.0707."""
    t = times(bank_of(1), HOPS)
    turn = 2 * np.pi * 1000 * t
    envelope = (1 + 0.3 * np.cos(turn)) * (1 + 2j * 10 ** (-26.02 / 20) * np.cos(turn))
    assert last_of("incidental_phase_radians", envelope[None], 110.0)[0] == pytest.approx(0.0707, rel=0.02)


def test_phase_that_follows_nothing_is_not_incidental() -> None:
    t = times(bank_of(1), HOPS)
    envelope = (1 + 0.5 * np.cos(2 * np.pi * 700 * t)) * np.exp(0.05j * np.cos(2 * np.pi * 1234 * t))
    assert last_of("incidental_phase_radians", envelope[None], 100.0)[0] < 0.001


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize("g", [0.9, 0.7079, 0.5])
def test_e8_a_weakened_sideband_reads_20_log_g(g: float, detector: str) -> None:
    upper = last_of("sideband_balance_db", one_tone(0.5, 1000, lower=g), 100.0, detector)[0]
    lower = last_of("sideband_balance_db", one_tone(0.5, 1000, upper=g), 100.0, detector)[0]
    assert upper == pytest.approx(-20 * np.log10(g), abs=0.01)
    assert lower == pytest.approx(20 * np.log10(g), abs=0.01)


def test_a_missing_sideband_is_told_as_at_least_its_distance_from_the_noise() -> None:
    assert last_of("sideband_balance_db", one_tone(0.5, 1000, lower=0), 100.0)[0] > 40


def test_without_programme_there_is_no_balance() -> None:
    assert np.isnan(last_of("sideband_balance_db", np.ones((1, len(times(bank_of(1), HOPS)))), 70.0)[0])


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
def test_e7_disagreement_of_a_missing_sideband(detector: str) -> None:
    """Carrier and one sideband r = 0.3: envelope less |1 + r cos| by its definition, over a period (CHECKS E7)."""
    turn = np.linspace(0, 2 * np.pi, 4096, endpoint=False)
    z = 1 + 0.3 * np.exp(1j * turn)
    truth = np.sqrt(np.mean((np.abs(z) - np.abs(z.real)) ** 2))
    read = last_of("detector_disagreement_ratio", one_tone(0.6, 1000, lower=0), 100.0, detector)[0]
    assert read == pytest.approx(truth, rel=0.01)


def test_the_detectors_agree_on_over_modulation_but_for_the_sign() -> None:
    assert last_of("detector_disagreement_ratio", one_tone(1.3, 400), 100.0)[0] < 0.001


@pytest.mark.parametrize("kind", ["tone", "programme"])
@pytest.mark.parametrize(("c_n0_dbhz", "within"), [(100.0, 0.5), (80.0, 0.5), (70.0, 0.7)])
def test_signal_to_noise_under_programme(kind: str, c_n0_dbhz: float, within: float) -> None:
    """E5: power of m over N0 2W / 2 = CNR in 2W times m^2, W the audio bandwidth; 95 % of trials."""
    bank, rng = bank_of(40), np.random.default_rng(6)
    m = tones(bank, HOPS, 0.8, rng) if kind == "tone" else programmes(bank, HOPS, 0.8, rng)[0]
    power = np.mean(m[:, -10 * bank.frames :] ** 2, axis=1)
    truth = 10 * np.log10(power / (10 ** (-c_n0_dbhz / 10) * 5000))
    error = last_of("audio_signal_to_noise_db", 1 + m, c_n0_dbhz) - truth
    assert np.quantile(np.abs(error), 0.95) < within
    assert np.mean(error) == pytest.approx(0, abs=0.1)


@pytest.mark.parametrize(("depth", "shift"), [(1.05, 0.003282), (1.25, 0.033900), (1.5, 0.088161)])
def test_e11_a_transmitter_that_cuts_off_shifts_its_carrier(depth: float, shift: float) -> None:
    """(m sin t0 - t0) / pi, t0 = acos(1/m) (CHECKS E11); the pause before is the reference."""
    rate_hz = 16_000.0

    def modulation(t: np.ndarray) -> np.ndarray:
        return np.where(t < 3, 0, signals.tone(depth, 200.0, t, -np.pi / 2))

    cut = signals.cut_off(modulation, rate_hz, 9.0, band_hz=3000.0)
    wave = signals.am(rate_hz, 9.0, carrier_hz=2.0, modulation=cut, c_n0_dbhz=100)
    kept = run(wave, rate_hz, [channel(carrier_hz=0.0, bandwidth_hz=3000, acquire_hz=50)])
    assert kept.tally.stage_failures[CarrierShiftMeter.__name__] == 0
    assert np.isnan(kept.of("carrier_shift_ratio")[:2]).all()
    assert kept.last("carrier_shift_ratio") == pytest.approx(shift, abs=0.0005)
    automatic = run(
        wave, rate_hz, [channel(carrier_hz=0.0, bandwidth_hz=3000, acquire_hz=50)], fixed_gain=False
    )
    assert np.isnan(automatic.of("carrier_shift_ratio")).all()
