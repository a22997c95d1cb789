"""Tone depths against signals of known depth.

Tolerances. White noise of the one-sided density S = 1 / (C/N0) per Hz over the carrier moves the amplitude of a tone
read from a Hann second by sqrt(1.5 S) rms: 3.9e-5 at 90 dB-Hz. A tone of depth a beside, f away, that is switched hard
adds at most a / (pi f) for each edge (half the window's height of 4, over 2 pi f): 0.1 and 870 Hz: 3.7e-5, 7 wpm
has about 6 edges a second.
"""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.condition.tuner import Tuner
from monitord.detect import DETECTORS
from monitord.measure.tonedepth import ToneDepthMeter
from monitord.settings import Channel, Tone
from monitord.stage import Bank
from tests import keyer, signals
from tests.runs import Kept, channel, run

RATE_HZ = 8_000.0
CODE = ".- -... --..."  # AB7
PAIR = (Tone(hz=90), Tone(hz=150))
KEYED = (Tone(hz=1020, keyed=True),)


def narrow(**keys: object) -> Channel:
    return channel(**({"carrier_hz": 1500.0, "bandwidth_hz": 1200.0} | keys))


def heard(modulation: signals.Modulation, seconds: float, *channels: Channel, **keys: float) -> Kept:
    interval_s = keys.pop("interval_s", 1.0)
    keys = {"c_n0_dbhz": 90.0} | keys
    samples = signals.am(RATE_HZ, seconds, carrier_hz=1505.0, modulation=modulation, **keys)
    kept = run(samples, RATE_HZ, channels, interval_s=interval_s)
    assert not any(kept.tally.stage_failures.values())
    return kept


def depths(kept: Kept, column: int = 0, row: int = 0) -> np.ndarray:
    return np.array([reading.values["tone_depth_ratio"][row, column] for reading in kept.readings])


def test_tones_are_read_within_a_thousandth_and_their_difference_within_half_of_that_each_second() -> None:
    """90 and 150 Hz up to 2.5 % off (CHECKS D13), 1020 Hz keyed at 10 % beside, C/N0 90 dB-Hz, in 1 s each."""
    worst_depth = worst_difference = 0.0
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 7.2))
    down = keyer.key(t, keyer.repeated(CODE, 1.2 / 7, 7.0, 10.0))
    for seed in range(16):
        rng = np.random.default_rng(seed)
        a, b = rng.uniform(0.05, 0.4, 2)
        fa, fb = np.array([90, 150]) * (1 + rng.uniform(-0.025, 0.025, 2))
        phase = rng.uniform(0, 2 * np.pi, 3)
        tones = signals.tone(a, fa, t, phase[0]) + signals.tone(b, fb, t, phase[1])
        ident = down * signals.tone(0.1, 1020.0, t, phase[2])
        kept = heard(tones + ident, 7.2, narrow(tone=PAIR), seed=seed)
        errors = np.abs(np.array([depths(kept, 0) - a, depths(kept, 1) - b]))[:, 2:7]
        difference = kept.of("tone_depth_difference_ratio")[2:7] - (a - b)
        total = kept.of("tone_depth_sum_ratio")[2:7] - (a + b)
        assert np.all(np.abs(total) < 0.001)
        worst_depth = max(worst_depth, float(errors.max()))
        worst_difference = max(worst_difference, float(np.abs(difference).max()))
    assert worst_depth < 0.001
    assert worst_difference < 0.0005


def test_two_tones_do_not_leak_into_each_other() -> None:
    """A Hann line 50 bins away is below 1 / (pi 50^3): 3e-6 of the other. The second tone is not there at all."""
    kept = heard(lambda t: signals.tone(0.9, 93.0, t), 4.2, narrow(tone=PAIR), c_n0_dbhz=130)
    assert depths(kept, 0)[2:4] == pytest.approx(0.9, abs=5e-5)
    assert np.all(depths(kept, 1)[2:4] < 2e-5)


def test_noise_is_not_taken_for_depth() -> None:
    """C/N0 60 dB-Hz: a line's noise has the rms sqrt(1.5e-6) = 0.0012; 10 readings of 20 % stay within 4 of these."""
    kept = heard(lambda t: signals.tone(0.2, 90.0, t), 12.2, narrow(tone=PAIR), c_n0_dbhz=60)
    assert depths(kept, 0)[2:12] == pytest.approx(0.2, abs=0.005)
    assert np.mean(depths(kept, 0)[2:12]) == pytest.approx(0.2, abs=0.0016)


@pytest.mark.parametrize("depth", [0.3, 0.0])
def test_reception_noise_in_a_subcarrier_s_band_is_subtracted(depth: float) -> None:
    """800 Hz at 55 dB-Hz hold noise of the depth sqrt(2 x 800 x 10^-5.5) = 0.071, which would make 0.308 of 0.3.

    The mean of 8 s of 0.3 scatters by sqrt(1.5 x 10^-5.5) / sqrt(8) = 0.0008; the noise's square of 0.005, estimated to
    some 5 %, leaves 0.016 of nothing.
    """
    one = narrow(tone=(Tone(hz=600, band_hz=800),))
    kept = heard(lambda t: signals.tone(depth, 633.0, t), 10.2, one, c_n0_dbhz=55)
    found = np.sqrt(np.mean(np.square(depths(kept)[2:10])))
    assert found == pytest.approx(depth, abs=0.003 if depth else 0.025)


@pytest.mark.parametrize(("words", "rise_s"), [(5, 0.0), (7, 0.01), (10, 0.0)])
@pytest.mark.parametrize("off_hz", [-50.0, 3.0, 50.0])
def test_a_keyed_tone_has_the_depth_of_its_marks(words: float, rise_s: float, off_hz: float) -> None:
    """95 %, C/N0 90 dB-Hz, 1020 Hz and its 50 Hz of tolerance (CHECKS D1, D2): within 0.001 in every second."""

    def modulation(t: np.ndarray) -> np.ndarray:
        spans = keyer.repeated(CODE, 1.2 / words, 45 * 1.2 / words, 9.0, 0.3)
        return keyer.key(t, spans, rise_s) * signals.tone(0.95, 1020 + off_hz, t)

    found = depths(heard(modulation, 9.2, narrow(tone=KEYED)))[2:9]
    assert np.isfinite(found).sum() >= 5
    assert found[np.isfinite(found)] == pytest.approx(0.95, abs=0.001)


def test_a_keyed_tone_has_no_depth_while_no_mark_comes() -> None:
    def modulation(t: np.ndarray) -> np.ndarray:
        return keyer.key(t, [(0, 4.5)]) * signals.tone(0.6, 1020.0, t)

    found = depths(heard(modulation, 8.2, narrow(tone=KEYED)))
    assert found[2:4] == pytest.approx(0.6, abs=0.001)
    assert np.all(np.isnan(found[5:]))


@pytest.mark.parametrize(("hum", "left"), [(0.05, 0.0), (0.0, 0.06), (0.03, 0.04), (0.0, 0.0)])
def test_what_is_left_between_marks_is_the_residual_modulation(hum: float, left: float) -> None:
    """Hum of 100 Hz and a tone that is not quite off: sqrt(2) rms = sqrt(hum^2 + left^2).

    The mean over a stretch of at least 50 ms is taken out: of five periods and a part of one, 100 Hz keep at least
    1 - (1 / (2 pi 5))^2 x 2 of their power; and a mean square over parts of periods scatters by 1 / (4 pi 5) each.
    """

    def modulation(t: np.ndarray) -> np.ndarray:
        down = keyer.key(t, keyer.repeated(CODE, 1.2 / 7, 7.0, 12.0, 0.5))
        tone = (left + (0.9 - left) * down) * np.cos(2 * np.pi * 1020 * t)
        return np.asarray(tone + signals.tone(hum, 100.0, t))

    kept = heard(modulation, 12.2, narrow(tone=KEYED))
    found = kept.of("residual_modulation_ratio")[2:12]
    assert np.isfinite(found).sum() >= 8
    expected = np.hypot(hum, left)
    assert found[np.isfinite(found)] == pytest.approx(expected, abs=0.02 * expected + 0.002)


def test_residual_modulation_is_not_told_beside_a_steady_tone_nor_while_the_key_is_held_down() -> None:
    kept = heard(lambda t: signals.tone(0.5, 90.0, t), 4.2, narrow(tone=(*KEYED, Tone(hz=90))))
    assert np.all(np.isnan(kept.of("residual_modulation_ratio")))
    kept = heard(lambda t: signals.tone(0.5, 1020.0, t), 4.2, narrow(tone=KEYED))
    assert np.all(np.isnan(kept.of("residual_modulation_ratio")))


def test_reception_noise_is_no_residual_modulation() -> None:
    """C/N0 60: noise of 1.3 kHz has sqrt(2) times its rms at 0.051. Its estimate from 2 x 1300 x 1 s values errs by
    3 %, the density's from quadrature by as much: 0.051 x sqrt(0.04) = 0.010."""
    kept = heard(0.0, 8.2, narrow(tone=KEYED), c_n0_dbhz=60)
    found = kept.of("residual_modulation_ratio")[2:8]
    assert np.all(found < 0.02)


def test_each_channel_has_its_own_tones_in_the_columns_of_all() -> None:
    wave = signals.am(RATE_HZ, 4.2, carrier_hz=1500.0, modulation=lambda t: signals.tone(0.3, 150.0, t))
    other = signals.am(RATE_HZ, 4.2, carrier_hz=-1500.0, modulation=lambda t: signals.tone(0.4, 90.0, t))
    third = signals.am(RATE_HZ, 4.2, carrier_hz=-3500.0, modulation=lambda t: signals.tone(0.5, 90.0, t))
    channels = [
        channel(name="a", carrier_hz=-1500.0, bandwidth_hz=400, tone=(Tone(hz=90), Tone(hz=300.5))),
        channel(name="b", carrier_hz=1500.0, bandwidth_hz=600, tone=(Tone(hz=150),)),
        channel(name="c", carrier_hz=-3500.0, bandwidth_hz=400, acquire_hz=50),
    ]
    noise = 1e-5 * np.random.default_rng(1).standard_normal((len(wave), 2)).view(complex)[:, 0]
    kept = run(wave + other + third + noise, RATE_HZ, channels)
    nan = np.nan
    expected = [[0.4, 0.0, nan], [nan, nan, 0.3], [nan, nan, nan]]
    np.testing.assert_allclose(kept.readings[-1].values["tone_depth_ratio"], expected, atol=1e-4)
    assert kept.last("tone_depth_difference_ratio", 0) == pytest.approx(0.4, abs=1e-4)
    assert np.isnan(kept.last("tone_depth_difference_ratio", 1))
    (quantity,) = [one.resolved(channels) for one in ToneDepthMeter.quantities if one.label]
    assert quantity.keys == ("90", "300.5", "150")


def test_nothing_stale_stands_where_the_carrier_is_gone_or_no_second_was_complete() -> None:
    kept = heard(lambda t: signals.tone(0.3, 90.0, t), 7.0, narrow(tone=(*PAIR, *KEYED)), breaks=[(3.2, 6.0)])
    assert depths(kept)[2] == pytest.approx(0.3, abs=0.001)
    for name in ("tone_depth_ratio", "tone_depth_sum_ratio", "residual_modulation_ratio"):
        assert np.all(np.isnan(kept.readings[4].values[name]))
    kept = heard(lambda t: signals.tone(0.3, 90.0, t), 4.0, narrow(tone=PAIR), interval_s=0.5)
    assert np.isnan(depths(kept)[4]) and depths(kept)[5] == pytest.approx(0.3, abs=0.001)


CHANNELS = tuple(
    channel(name=f"c{k}", carrier_hz=hz, bandwidth_hz=600, emission_bandwidth_hz=600, tone=tone)
    for k, (hz, tone) in enumerate(
        [(-2500.0, (*PAIR, Tone(hz=400, keyed=True))), (-900.0, (Tone(hz=400, keyed=True),)), (900.0, ())]
    )
)


def air() -> np.ndarray:
    """Three transmitters, each with a tone of 90 Hz and a keyed one of 400 Hz. complex64."""
    parts = [
        signals.am(
            RATE_HZ,
            4.2,
            carrier_hz=one.carrier_hz,
            modulation=lambda t, row=row: (
                signals.tone(0.2 + 0.1 * row, 90.0, t)
                + keyer.key(t, keyer.marks(CODE, 0.12, 0.5)) * signals.tone(0.3, 400.0, t)
            ),
            c_n0_dbhz=90,
            seed=row,
        )
        for row, one in enumerate(CHANNELS)
    ]
    return np.asarray(sum(parts), np.complex64)


def bank_of(channels: tuple[Channel, ...]) -> Bank:
    branch = Tuner(RATE_HZ, 0.0, False, [list(channels)]).branches[0]
    labels = {"tone_depth_ratio": ("90", "150", "400")}
    return Bank(channels, branch.rate_hz, branch.frames, branch.noise_hz, True, {}, labels)


def reading_of(meter: ToneDepthMeter, channels: tuple[Channel, ...]) -> dict[str, np.ndarray]:
    """What a prepared meter says of the air; it must leave its input as it was, which is read-only here."""
    stage = DETECTORS["synchronous"]()
    stage.prepare(bank_of(channels))
    tuner = Tuner(RATE_HZ, 0.0, False, [list(channels)])
    for hop in tuner.process(Block(air(), RATE_HZ, 0.0, 0, None)):
        found = stage.process(hop[0])
        for field in ("in_phase", "coherent", "amplitude", "noise_density", "settled", "broken"):
            getattr(found, field).flags.writeable = False
        assert meter.process(found) == {}
    return dict(meter.reading())


def prepared(channels: tuple[Channel, ...]) -> ToneDepthMeter:
    meter = ToneDepthMeter()
    meter.prepare(bank_of(channels))
    return meter


def test_one_channel_with_tones_is_the_same_among_many() -> None:
    together = reading_of(prepared(CHANNELS), CHANNELS)
    alone = [reading_of(prepared((one,)), (one,)) for one in CHANNELS]
    assert np.isfinite(together["tone_depth_ratio"]).sum() == 4
    assert np.isfinite(together["residual_modulation_ratio"]).tolist() == [False, True, False]
    for name, value in together.items():
        np.testing.assert_allclose(value, [one[name][0] for one in alone], rtol=2e-3, atol=2e-5)


def test_a_meter_of_tones_that_was_reset_is_as_new() -> None:
    meter = prepared(CHANNELS)
    first = reading_of(meter, CHANNELS)
    meter.reset()
    again = reading_of(meter, CHANNELS)
    for name, value in first.items():
        np.testing.assert_array_equal(again[name], value)
