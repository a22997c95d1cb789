"""SINAD and distortion of test tones against published tables, and against an independent analyser."""

import genalyzer
import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.measure.testtone import SteadyToneMeter
from monitord.stage import Bank
from tests import data, signals
from tests.runs import channel, run

RATE_HZ = 16_000.0


def measured(
    wave: np.ndarray, detector: str = "synchronous", rate_hz: float = RATE_HZ
) -> tuple[float, float]:
    """SINAD in dB and THD of the last whole second."""
    kept = run(wave, rate_hz, [channel(carrier_hz=0.0, detector=detector)])
    return kept.last("audio_sinad_db"), kept.last("audio_thd_ratio")


def sidebands(upper: float, lower: float, tone_hz: float, carrier: complex = 1.0) -> np.ndarray:
    """Carrier and two sidebands of these amplitudes, complex, 4.05 s."""
    t = signals.times(RATE_HZ, round(4.05 * RATE_HZ))
    turn = np.exp(2j * np.pi * tone_hz * t)
    return np.asarray(0.1 * (carrier + upper * turn + lower / turn))


@pytest.mark.parametrize(
    ("r", "thd_percent"),
    [(0.1, 2.5), (0.3, 7.4981), (0.5, 12.4725), (0.8, 19.5830), (1.0, 22.7270)],
)
def test_e7_distortion_of_carrier_and_one_sideband_through_the_envelope_detector(
    r: float, thd_percent: float
) -> None:
    """THD of |1 + r exp(j w t)| (CHECKS E7), whose harmonics fall as 1/k^2: 48 of them lie inside 5 kHz."""
    _, thd = measured(sidebands(r, 0, 101.0), "envelope")
    assert 100 * thd == pytest.approx(thd_percent, abs=0.002)


@pytest.mark.parametrize(
    ("m", "g", "second_percent"),
    [
        (0.5, 0.9, 0.0328),
        (0.5, 0.7079, 0.3112),
        (0.5, 0.5, 1.0381),
        (0.5, 0.0, 6.2002),
        (0.8, 0.9, 0.0503),
        (0.8, 0.7079, 0.4866),
        (0.8, 0.5, 1.6378),
        (0.8, 0.0, 9.7893),
    ],
)
def test_e8_distortion_with_one_sideband_weakened(m: float, g: float, second_percent: float) -> None:
    """2nd harmonic of the envelope (CHECKS E8), the only one inside 5 kHz here. A synchronous detector has none."""
    wave = sidebands(m / 2, m / 2 * g, 2000.0)
    assert 100 * measured(wave, "envelope")[1] == pytest.approx(second_percent, abs=0.0005)
    assert measured(wave, "synchronous")[1] < 1e-4


@pytest.mark.parametrize(("psi_deg", "thd_percent"), [(10, 0.520), (30, 4.508), (45, 10.226), (60, 20.352)])
def test_e9_distortion_of_a_turned_carrier(psi_deg: float, thd_percent: float) -> None:
    """|exp(j psi) + m cos w t| at m = 0.5 (CHECKS E9)."""
    wave = sidebands(0.25, 0.25, 505.0, np.exp(1j * np.radians(psi_deg)))
    assert 100 * measured(wave, "envelope")[1] == pytest.approx(thd_percent, abs=0.002)


@pytest.mark.parametrize(
    ("m", "pinched_percent", "folded_percent"),
    [(1.05, 1.3504, 2.7178), (1.25, 7.0552, 14.9300), (1.5, 12.4427, 28.3765)],
)
def test_e11_distortion_of_over_modulation(m: float, pinched_percent: float, folded_percent: float) -> None:
    """THD of max(0, 1 + m cos w t) and of |1 + m cos w t| (CHECKS E11), 50 harmonics inside the band."""
    modulation = signals.cut_off(lambda t: signals.tone(m, 100.0, t), RATE_HZ, 5.0, band_hz=7_000.0)
    _, thd = measured(signals.am(RATE_HZ, 4.05, modulation=modulation[: round(4.05 * RATE_HZ)]))
    assert 100 * thd == pytest.approx(pinched_percent, abs=0.01)
    wave = signals.am(RATE_HZ, 4.05, modulation=lambda t: signals.tone(m, 100.0, t))
    assert 100 * measured(wave, "envelope")[1] == pytest.approx(folded_percent, abs=0.02)


def test_c6_a_sinad_of_12_db() -> None:
    """12 dB: N + D is 25.1189 % of all, S / (N + D) = 11.7170 dB (CHECKS C6; the definition from memory).

    Once all of it distortion, once all of it noise: N = (m^2 / 2) / 10^1.1717 in 4980 Hz; 2 % scatter a second.
    """
    of_all = 0.251189
    second = of_all / np.sqrt(1 - of_all**2)
    assert -20 * np.log10(second) == pytest.approx(11.7170, abs=1e-4)
    wave = signals.am(
        RATE_HZ,
        4.05,
        modulation=lambda t: signals.tone(0.3, 1000.0, t) + signals.tone(0.3 * second, 2000.0, t),
    )
    sinad_db, thd = measured(wave)
    assert sinad_db == pytest.approx(12.0, abs=0.001)
    assert thd == pytest.approx(second, rel=1e-4)
    c_n0_dbhz = 10 * np.log10(4980 / (0.3**2 / 2)) + 11.7170
    kept = run(
        signals.am(
            RATE_HZ, 10.05, modulation=lambda t: signals.tone(0.3, 1000.0, t), c_n0_dbhz=c_n0_dbhz, seed=8
        ),
        RATE_HZ,
        [channel(carrier_hz=0.0)],
    )
    assert kept.of("audio_sinad_db")[2:].mean() == pytest.approx(12.0, abs=0.12)


def fourth_second(wave: np.ndarray) -> tuple[dict[str, float], np.ndarray, float]:
    """What the meter reads at the end of the fourth second, that second's modulation, and its rate in Hz."""
    channels = [channel(carrier_hz=0.0)]
    tuner = Tuner(RATE_HZ, 0.0, False, [channels])
    branch = tuner.branches[0]
    bank = Bank(tuple(channels), branch.rate_hz, branch.frames, branch.noise_hz, True, {})
    detector, meter = DETECTORS["synchronous"](), SteadyToneMeter()
    detector.prepare(bank)
    meter.prepare(bank)
    block = Block(wave, RATE_HZ, 0.0, 0, None)
    for hop in tuner.process(block):
        detected = detector.process(hop[0])
        meter.process(detected)
        if hop[0].span.index == 39:
            break
    assert detected.second is not None
    audio = (detected.second.in_phase[0] - 1).astype(np.float64)
    return {name: float(value[0]) for name, value in meter.reading().items()}, audio, branch.rate_hz


@pytest.mark.parametrize(
    ("distortion", "c_n0_dbhz"), [(0.01, 95.0), (0.1, 80.0), (0.001, 110.0)], ids=["1 %", "10 %", "0.1 %"]
)
def test_an_independent_analyser_agrees_about_the_same_samples(distortion: float, c_n0_dbhz: float) -> None:
    """genalyzer 0.1.7 (CHECKS G): SINAD in 20 Hz to 5 kHz, and the harmonics 2 to 4 of 1003.3 Hz, of the same second.

    It takes whole bins of a Blackman-Harris spectrum (ENBW 2.0) where we fit lines to a Hann spectrum; the noise of one
    second, weighted otherwise, differs by 2 to 3 % (0.1 dB) and adds to the harmonics, which it does not subtract.
    """
    tone_hz = 1003.3
    wave = signals.am(
        RATE_HZ,
        4.05,
        modulation=lambda t: (
            signals.tone(0.8, tone_hz, t) + signals.tone(0.8 * distortion, 2 * tone_hz, t, 1.0)
        ),
        c_n0_dbhz=c_n0_dbhz,
        seed=4,
    )
    reading, audio, rate_hz = fourth_second(wave)
    frames = len(audio)
    spectrum = genalyzer.rfft(audio, 1, frames, genalyzer.Window.BLACKMAN_HARRIS, genalyzer.RfftScale.NATIVE)
    key = f"tone_{c_n0_dbhz:.0f}"
    genalyzer.fa_create(key)
    genalyzer.fa_analysis_band(key, (5_000 + 20) / 2, 5_000 - 20)
    genalyzer.fa_ssb(key, genalyzer.FaSsb.DEFAULT, 4)
    genalyzer.fa_max_tone(key, "A", genalyzer.FaCompTag.SIGNAL, 8)
    genalyzer.fa_hd(key, 4)
    genalyzer.fa_fsample(key, rate_hz)
    found = genalyzer.fft_analysis(key, spectrum, frames)
    assert reading["audio_tone_hertz"] == pytest.approx(tone_hz, abs=1e-4)
    assert reading["audio_sinad_db"] == pytest.approx(found["sinad"], abs=0.15)
    assert 20 * np.log10(reading["audio_thd_ratio"]) == pytest.approx(found["2A:mag_dbc"], abs=0.15)
    assert reading["audio_thd_ratio"] == pytest.approx(distortion, rel=0.02)


def test_the_off_air_voice_with_its_short_tone_is_no_steady_tone() -> None:
    """Its 1 kHz tone lasts 0.8 s (data INDEX), too short to be called steady; voice follows."""
    import soundfile

    envelope, rate = soundfile.read(data.path("off-air/hf-voice-envelope.wav"), frames=16_000 * 10)
    kept = run(envelope.astype(np.complex64) * 0.3, rate, [channel(carrier_hz=0.0)])
    assert np.isnan(kept.of("audio_tone_hertz")).all()
