"""The program against the textbooks of amplitude modulation (closed forms; numbers as in CHECKS section E).

E1 power and sidebands, E2 the product detector's cosine, E5 signal-to-noise after detection, E7 an envelope detector
with one sideband, E9 the carrier turned against its sidebands, E11 over-modulation, E12 how long a sine stays above a
level. The formulas are those of the standard texts (Proakis, Communication Systems Engineering; Haykin,
Communication Systems), recomputed here where short.
"""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.stage import Bank
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 48_000.0
CARRIER_HZ = 12_000.0
E5 = [(0.3, 20, 9.542), (0.3, 30, 19.542), (0.8, 20, 18.062), (0.8, 30, 28.062)]  # m, CNR dB, SNR dB


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


def turned(psi_deg: float, detector: str, m: float = 0.5) -> tuple[np.ndarray, float]:
    """Detected tone of 1 kHz whose carrier is turned by psi against its sidebands, 1 s, and its rate in Hz."""
    t = signals.times(RATE_HZ, round(3.15 * RATE_HZ))
    carrier = np.exp(2j * np.pi * CARRIER_HZ * t)
    wave = 0.1 * carrier * (np.exp(1j * np.radians(psi_deg)) + signals.tone(m, 1000.0, t))
    in_phase, bank = detected(wave, detector)
    return in_phase[: round(bank.rate_hz)], bank.rate_hz


@pytest.mark.parametrize(
    ("theta_deg", "loss_db"), [(0, 0.0), (10, -0.133), (30, -1.249), (45, -3.010), (60, -6.021)]
)
def test_e2_a_product_detector_with_a_wrong_phase_loses_its_cosine(theta_deg: float, loss_db: float) -> None:
    """Output times cos(theta) (CHECKS E2).

    The detector takes its phase from the carrier; a carrier turned by theta feeds it a wrong one for the sidebands
    (a1 = m cos psi, CHECKS E9).
    """
    in_phase, rate_hz = turned(theta_deg, "synchronous")
    tone = 2 * abs(line(in_phase, rate_hz, 1000.0))
    assert 20 * np.log10(tone / 0.5) == pytest.approx(loss_db, abs=0.001)
    assert 2 * abs(line(in_phase, rate_hz, 2000.0)) < 1e-5  # weaker, but pure


def test_e2_in_quadrature_to_the_carrier_nothing_is_left() -> None:
    """cos 90 degrees = 0 (CHECKS E2)."""
    in_phase, rate_hz = turned(90, "synchronous")
    assert 2 * abs(line(in_phase, rate_hz, 1000.0)) < 1e-4


@pytest.mark.parametrize(
    ("psi_deg", "first", "thd_percent"),
    [(10, 0.49067, 0.520), (30, 0.42163, 4.508), (45, 0.33672, 10.226), (60, 0.23359, 20.352)],
)
def test_e9_an_envelope_detector_distorts_where_the_carrier_is_turned(
    psi_deg: float, first: float, thd_percent: float
) -> None:
    """|exp(j psi) + m cos w t| at m = 0.5: fundamental, and all harmonics in per cent of it (CHECKS E9)."""
    envelope, rate_hz = turned(psi_deg, "envelope")
    harmonics = [2 * abs(line(envelope, rate_hz, k * 1000.0)) for k in range(1, 10)]
    assert harmonics[0] == pytest.approx(first, abs=5e-5)
    assert 100 * np.linalg.norm(harmonics[1:]) / harmonics[0] == pytest.approx(thd_percent, abs=0.005)


@pytest.mark.parametrize("detector", ["synchronous", "envelope"])
@pytest.mark.parametrize(("m", "cnr_db", "snr_db"), E5)
def test_e5_signal_to_noise_after_detection(detector: str, m: float, cnr_db: float, snr_db: float) -> None:
    """SNR = CNR in 2W + 20 log10 m at high CNR, for both detectors (CHECKS E5), W the channel's noise bandwidth."""
    settings = {"bandwidth_hz": 4500.0}
    noise_hz = baseband(np.zeros(20_000), **settings)[1].noise_hz
    c_n0_dbhz = cnr_db + 10 * np.log10(2 * noise_hz)
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
    assert snr_db == pytest.approx(cnr_db + 20 * np.log10(m), abs=5e-4)
    assert measured == pytest.approx(snr_db, abs=0.1)


@pytest.mark.parametrize(
    ("r", "mean", "first", "second", "third"),
    [
        (0.05, 1.000625, 0.049984, 1.2496, 0.0312),
        (0.1, 1.002502, 0.099875, 2.4969, 0.1248),
        (0.3, 1.022630, 0.296586, 7.4132, 1.1054),
        (0.5, 1.063544, 0.483844, 12.0754, 2.9648),
        (0.8, 1.167810, 0.729410, 17.9587, 6.7516),
        (1.0, 4 / np.pi, 8 / (3 * np.pi), 20.0, 8.5714),
    ],
)
def test_e7_carrier_and_one_sideband_through_the_envelope_detector(
    r: float, mean: float, first: float, second: float, third: float
) -> None:
    """|1 + r exp(j w t)|: mean, fundamental, and harmonics in per cent of it (CHECKS E7)."""
    t = signals.times(RATE_HZ, round(3.15 * RATE_HZ))
    tone_hz = 1010.0  # its high harmonics, folded at the channel's rate, fall beside the first ones
    wave = 0.1 * np.exp(2j * np.pi * CARRIER_HZ * t) * (1 + r * np.exp(2j * np.pi * tone_hz * t))
    envelope, bank = detected(wave, "envelope")
    envelope = envelope[: round(bank.rate_hz)]
    assert envelope.mean() == pytest.approx(mean, abs=1e-5)
    harmonics = [2 * abs(line(envelope, bank.rate_hz, k * tone_hz)) for k in (1, 2, 3)]
    assert harmonics[0] == pytest.approx(first, abs=2e-5)
    assert 100 * harmonics[1] / harmonics[0] == pytest.approx(second, abs=0.002)
    assert 100 * harmonics[2] / harmonics[0] == pytest.approx(third, abs=0.002)


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


def cut_off_tone(m: float, tone_hz: float) -> Kept:
    """What the chain makes of 4 s of a transmitter that pinches off, in a channel of +-5 kHz."""
    modulation = signals.cut_off(lambda t: signals.tone(m, tone_hz, t), RATE_HZ, 4.0, band_hz=11_000.0)
    return run(signals.am(RATE_HZ, 4.0, carrier_hz=CARRIER_HZ, modulation=modulation), RATE_HZ)


@pytest.mark.parametrize("tone_hz", [55.0, 300.0, 1000.0])
@pytest.mark.parametrize(("m", "shift_percent"), [(1.05, 0.3282), (1.25, 3.3900), (1.5, 8.8161)])
def test_e11_a_transmitter_that_cuts_off_raises_its_mean_carrier(
    m: float, shift_percent: float, tone_hz: float
) -> None:
    """(m sin t0 - t0)/pi, t0 = acos(1/m) (CHECKS E11); the level reads it, re a carrier that is not cut off."""
    kept = cut_off_tone(m, tone_hz)
    shift = 10 ** ((kept.readings[-2].values["carrier_level_dbfs"][0] + 20) / 20) - 1
    assert 100 * shift == pytest.approx(shift_percent, abs=0.001)
    assert kept.kinds()[0] == "overmodulation-negative"


@pytest.mark.parametrize("tone_hz", [55.0, 300.0])
@pytest.mark.parametrize(("m", "fraction"), [(1.05, 0.098627), (1.25, 0.204833), (1.5, 0.267720)])
def test_e11_time_spent_cut_off(m: float, fraction: float, tone_hz: float) -> None:
    """acos(1/m)/pi of the time (CHECKS E11).

    Counted is what is below 0.02 of the mean carrier, so the corners' last bit counts with it, in whole samples of
    24 kS/s: one a trough at most is too many or too few.
    """
    kept = cut_off_tone(m, tone_hz)
    t0 = np.arccos(1 / m)
    assert t0 / np.pi == pytest.approx(fraction, abs=1e-6)
    assert all(moment.cut_off[0] for moment in kept.moments[10:38])
    seconds = sum(moment.over_negative_s[0] for moment in kept.moments[10:38])
    shift = (m * np.sin(t0) - t0) / np.pi
    counted = np.arccos((1 - 0.02 * (1 + shift)) / m) / np.pi
    assert seconds / 2.8 == pytest.approx(counted, abs=max(0.003, tone_hz / 24_000))


@pytest.mark.parametrize(
    ("level", "fraction"),
    [(0.5, 0.333333), (0.7, 0.253183), (0.8, 0.204833), (0.9, 0.143566), (0.95, 0.101083)],
)
@pytest.mark.parametrize("m", [0.8, 1.0])
def test_e12_how_long_a_sine_stays_above_a_level(level: float, fraction: float, m: float) -> None:
    """acos(t)/pi of the time above t times its peak, one polarity (CHECKS E12); counted from 0.002 above it on."""
    wave = signals.am(
        RATE_HZ, 4.1, carrier_hz=CARRIER_HZ, modulation=lambda t: signals.tone(m, 110.0, t), c_n0_dbhz=120
    )
    kept = run(wave, RATE_HZ, [channel(limits={"positive_peak": level * m})])
    seconds = sum(moment.over_positive_s[0] for moment in kept.moments[10:40])
    assert np.arccos(level) / np.pi == pytest.approx(fraction, abs=1e-6)
    assert seconds / 3.0 == pytest.approx(np.arccos(level + 0.002 / m) / np.pi, abs=0.001)
