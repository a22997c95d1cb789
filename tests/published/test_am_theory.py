"""The program against the textbooks of amplitude modulation (closed forms; numbers as in CHECKS section E).

E1 power and sidebands, E2 the product detector's cosine, E5 signal-to-noise after detection, E7 an envelope detector
with one sideband, E11 over-modulation, E12 how long a sine stays above a level. The formulas are those of the standard
texts (Proakis, Communication Systems Engineering; Haykin, Communication Systems), recomputed here where short.
"""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.stage import Bank
from tests import signals
from tests.runs import channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 12_000.0


def baseband(samples: np.ndarray, **keys: object) -> tuple[np.ndarray, Bank]:
    """The tuner's output from the second hop on, one row; and its bank."""
    channels = [channel(**keys)]
    tuner = Tuner(RATE_HZ, 0.0, False, [channels])
    block = Block(samples.astype(np.complex64), RATE_HZ, 0.0, 0, None)
    parts = [hop[0].samples[0] for hop in tuner.process(block)]
    branch = tuner.branches[0]
    bank = Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {})
    return np.concatenate(parts[1:]), bank


def detected(samples: np.ndarray, detector: str, skip: int = 12, **keys: object) -> tuple[np.ndarray, Bank]:
    """In-phase part, carrier = 1, once settled."""
    channels = [channel(detector=detector, **keys)]
    tuner = Tuner(RATE_HZ, 0.0, False, [channels])
    branch = tuner.branches[0]
    bank = Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {})
    stage = DETECTORS[detector]()
    stage.prepare(bank)
    block = Block(samples.astype(np.complex64), RATE_HZ, 0.0, 0, None)
    hops = [stage.process(hop[0]) for hop in tuner.process(block)][skip:]
    return np.concatenate([hop.in_phase[0] for hop in hops]).astype(float), bank


def line(values: np.ndarray, rate_hz: float, frequency_hz: float) -> complex:
    """Complex amplitude of a line that fits a whole number of times into the values."""
    return complex(np.mean(values * np.exp(-2j * np.pi * frequency_hz / rate_hz * np.arange(len(values)))))


@pytest.mark.parametrize(
    ("m", "power", "sideband_dbc"),
    [(0.3, 1.045, -16.4782), (0.5, 1.125, -12.0412), (0.8, 1.32, -7.9588), (1.0, 1.5, -6.0206)],
)
def test_e1_power_and_sidebands_of_a_tone_pass_the_tuner_unchanged(
    m: float, power: float, sideband_dbc: float
) -> None:
    """P_t / P_c = 1 + m^2/2; each sideband 20 log10(m/2) dBc (CHECKS E1). Pass band flat within 0.01 dB."""
    for tone_hz in (100.0, 1000.0, 4990.0):
        modulation = signals.tone(m, tone_hz, signals.times(RATE_HZ, round(1.15 * RATE_HZ)))
        wave = signals.am(RATE_HZ, 1.15, carrier_hz=CARRIER_HZ, modulation=modulation)
        z, bank = baseband(wave)
        z = z[: round(bank.rate_hz)]
        assert np.mean(np.abs(z) ** 2) / 0.01 == pytest.approx(power, rel=2e-3)
        carrier = abs(line(z, bank.rate_hz, 0))
        for side in (1, -1):
            sideband = abs(line(z, bank.rate_hz, side * tone_hz))
            assert 20 * np.log10(sideband / carrier) == pytest.approx(sideband_dbc, abs=0.01)


@pytest.mark.parametrize(("theta_deg", "loss_db"), [(10, -0.133), (30, -1.249), (45, -3.010), (60, -6.021)])
def test_e2_a_product_detector_with_a_wrong_phase_loses_its_cosine(theta_deg: float, loss_db: float) -> None:
    """Output times cos(theta) (CHECKS E2): the tuned carrier against a cosine of a phase that is wrong by theta."""
    z, _ = baseband(signals.am(RATE_HZ, 1.15, carrier_hz=CARRIER_HZ, phase=0.4, modulation=0.0))
    right = np.mean((z * np.exp(-0.4j)).real)
    wrong = np.mean((z * np.exp(-1j * (0.4 + np.radians(theta_deg)))).real)
    assert 20 * np.log10(wrong / right) == pytest.approx(loss_db, abs=0.001)


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize("m", [0.3, 0.8])
def test_e5_signal_to_noise_after_detection(detector: str, m: float) -> None:
    """SNR = CNR in 2W + 20 log10 m at high CNR, for both detectors (CHECKS E5); here CNR 30 dB in +-W."""
    settings = {"bandwidth_hz": 4500.0}
    noise_hz = baseband(np.zeros(20_000), **settings)[1].noise_hz
    c_n0_dbhz = 30 + 10 * np.log10(2 * noise_hz)
    wave = signals.am(
        RATE_HZ,
        21.2,
        carrier_hz=CARRIER_HZ,
        modulation=lambda t: signals.tone(m, 1000.0, t),
        c_n0_dbhz=c_n0_dbhz,
        seed=5,
    )
    in_phase, bank = detected(wave, detector, **settings)
    in_phase = in_phase[: len(in_phase) // 24 * 24]
    tone = line(in_phase, bank.rate_hz, 1000.0)
    index = np.arange(len(in_phase))
    rest = in_phase - in_phase.mean() - 2 * (tone * np.exp(2j * np.pi * 1000.0 / bank.rate_hz * index)).real
    measured = 10 * np.log10(2 * abs(tone) ** 2 / np.mean(rest**2))
    assert measured == pytest.approx(30 + 20 * np.log10(m), abs=0.2)


@pytest.mark.parametrize(
    ("r", "mean", "first", "second", "third"),
    [
        (0.1, 1.002502, 0.099875, 2.4969, 0.1248),
        (0.3, 1.022630, 0.296586, 7.4132, 1.1054),
        (0.5, 1.063544, 0.483844, 12.0754, 2.9648),
    ],
)
def test_e7_carrier_and_one_sideband_through_the_envelope_detector(
    r: float, mean: float, first: float, second: float, third: float
) -> None:
    """|1 + r exp(j w t)|: mean, fundamental, and harmonics in per cent of it (CHECKS E7)."""
    t = signals.times(RATE_HZ, round(3.15 * RATE_HZ))
    wave = 0.1 * np.exp(2j * np.pi * CARRIER_HZ * t) * (1 + r * np.exp(2j * np.pi * 1000.0 * t))
    envelope, bank = detected(wave, "envelope")
    envelope = envelope[: round(bank.rate_hz)]
    assert envelope.mean() == pytest.approx(mean, abs=2e-4)
    harmonics = [2 * abs(line(envelope, bank.rate_hz, k * 1000.0)) for k in (1, 2, 3)]
    assert harmonics[0] == pytest.approx(first, abs=2e-4)
    assert 100 * harmonics[1] / harmonics[0] == pytest.approx(second, abs=0.02)
    assert 100 * harmonics[2] / harmonics[0] == pytest.approx(third, abs=0.02)


@pytest.mark.parametrize(("m", "fraction"), [(1.05, 0.098627), (1.25, 0.204833), (1.5, 0.267720)])
def test_e11_time_spent_beyond_100_per_cent(m: float, fraction: float) -> None:
    """acos(1/m)/pi of the time (CHECKS E11). Counted is what is clear of the limit by 6 sigma, at least 0.002."""
    wave = signals.am(
        RATE_HZ, 6.0, carrier_hz=CARRIER_HZ, modulation=lambda t: signals.tone(m, 101.0, t), c_n0_dbhz=120
    )
    kept = run(wave, RATE_HZ)
    seconds = sum(moment.over_negative_s[0] for moment in kept.moments[10:58])
    clear = np.arccos(1.002 / m) / np.pi
    assert np.arccos(1 / m) / np.pi == pytest.approx(fraction, abs=1e-6)
    assert seconds / 4.8 == pytest.approx(clear, abs=0.003)


@pytest.mark.parametrize(
    ("m", "fraction", "shift_percent"), [(1.25, 0.204833, 3.3900), (1.5, 0.267720, 8.8161)]
)
def test_e11_a_transmitter_that_cuts_off_raises_its_mean_carrier(
    m: float, fraction: float, shift_percent: float
) -> None:
    """(m sin t0 - t0)/pi, t0 = acos(1/m) (CHECKS E11); the level reads it, re a carrier that is not cut off."""
    modulation = signals.cut_off(lambda t: signals.tone(m, 100.0, t), RATE_HZ, 4.0, band_hz=11_000.0)
    kept = run(signals.am(RATE_HZ, 4.0, carrier_hz=CARRIER_HZ, modulation=modulation), RATE_HZ)
    shift = 10 ** ((kept.readings[-2].values["carrier_level_dbfs"][0] + 20) / 20) - 1
    assert 100 * shift == pytest.approx(shift_percent, abs=0.01)
    seconds = sum(moment.over_negative_s[0] for moment in kept.moments[10:38])
    assert seconds / 2.8 == pytest.approx(fraction, abs=0.02)  # the cut-off's rounded corners count with it
