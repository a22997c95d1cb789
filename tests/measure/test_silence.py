"""Silence: judged against the channel's limit, with the reception's noise taken out."""

import numpy as np
import pytest

from monitord.errors import ConfigError
from monitord.settings import parse
from tests import signals
from tests.runs import Kept, channel, run

RATE_HZ = 12_000.0
SETTINGS = """
[source]
kind = "simulated"
[[channel]]
name = "a"
carrier_hz = 0
silence_db = {}
"""


def heard(
    modulation: signals.Modulation, c_n0_dbhz: float = np.inf, seconds: float = 6.05, **keys: object
) -> Kept:
    wave = signals.am(RATE_HZ, seconds, carrier_hz=1.3, modulation=modulation, c_n0_dbhz=c_n0_dbhz, seed=6)
    return run(wave, RATE_HZ, [channel(carrier_hz=0.0, **keys)])


@pytest.mark.parametrize(
    ("silence_db", "c_n0_dbhz"),
    [(-60.0, 110), (-50.0, 100), (-50.0, 90), (-40.0, 100), (-40.0, 80), (-20.0, 80), (-20.0, 65)],
)
@pytest.mark.parametrize(("re_limit_db", "silent"), [(-1.0, 1.0), (1.0, 0.0)])
def test_a_tone_just_below_the_limit_is_silence_and_just_above_it_is_not(
    re_limit_db: float, silent: float, silence_db: float, c_n0_dbhz: float
) -> None:
    """dB re the rms of a sine of 100 %: a sine of depth m is at 20 log10(m).

    At 80 dB-Hz the noise of 5.3 kHz is at -39.7 dB, as strong as the limit: it is subtracted. It scatters by 2.4 % a
    second (the next test), and 1 dB beside the limit is 20 % of it.
    """
    m = 10 ** ((silence_db + re_limit_db) / 20)
    kept = heard(lambda t: signals.tone(m, 700.0, t), c_n0_dbhz, silence_db=silence_db)
    assert kept.of("audio_silent")[1:].tolist() == [silent] * 5


def test_an_unmodulated_carrier_in_noise_is_silent_or_unknown_but_never_loud() -> None:
    """Noise of 5.3 kHz scatters in 1 s by sqrt(3 / 5300) = 2.4 % of itself; the limit is 5e-5 of the carrier's power.

    Three times that is 4e-6 at 80, 4e-5 at 70 and 4e-4 at 60 dB-Hz.
    """
    for c_n0_dbhz, told in ((80, True), (70, True), (60, False), (50, False)):
        silent = heard(0.0, c_n0_dbhz, seconds=20.05).of("audio_silent")[1:]
        assert np.isfinite(silent).all() == told
        assert not (silent == 0).any()


def test_programme_is_not_silent_however_weak_the_signal() -> None:
    programme = signals.programme_like(RATE_HZ, 6.05, negative_peak=0.9)
    for c_n0_dbhz in (100, 70, 55):
        assert heard(programme.modulation, c_n0_dbhz).of("audio_silent")[1:].tolist() == [0] * 5


def test_each_channel_has_its_own_limit() -> None:
    t = signals.times(RATE_HZ, round(4.05 * RATE_HZ))
    wave = sum(
        signals.am(RATE_HZ, 4.05, carrier_hz=at, modulation=signals.tone(0.03, 400.0, t))
        for at in (-3000.0, 3000.0)
    )
    channels = [
        channel(name=f"at{level}", carrier_hz=at, bandwidth_hz=1000.0, silence_db=level)
        for at, level in ((-3000.0, -25.0), (3000.0, -35.0))
    ]
    assert run(np.asarray(wave), RATE_HZ, channels).readings[-1].values["audio_silent"].tolist() == [1, 0]


def test_without_a_carrier_nothing_is_called_silent() -> None:
    noise = signals.noise(RATE_HZ, round(4.05 * RATE_HZ), 1e-8, np.random.default_rng(1))
    assert np.isnan(run(noise, RATE_HZ, [channel(carrier_hz=0.0)]).of("audio_silent")).all()


def test_the_limit_is_minus_40_db_unless_set_and_wrong_ones_are_told() -> None:
    assert channel().silence_db == -40.0
    assert parse(SETTINGS.format("-33.0"), "s.toml").channels[0].silence_db == -33.0
    with pytest.raises(ConfigError) as caught:
        parse(SETTINGS.format("3.0"), "s.toml")
    assert caught.value.problems == ("s.toml: channel[0].silence_db = 3: must be from -80 to 0 dB",)
