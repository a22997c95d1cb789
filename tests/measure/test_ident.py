"""Idents in Morse code: heard, missing, wrong; keyed tones and keyed carriers."""

import numpy as np
import pytest

from monitord.blocks import Block
from monitord.chain import Chain
from monitord.settings import Channel, Ident
from monitord.stream import Stream
from tests import keyer, signals
from tests.runs import Kept, channel, run

RATE_HZ = 8_000.0
AB7, AB6, B7, AB7E = ".- -... --...", ".- -... -....", "-... --...", ".- -... --... ."
DASHES, DOTS = "- -- ---", ". .. ..."  # TMO, EIS


def narrow(expected: str, period_s: float, **keys: object) -> Channel:
    ident = Ident(**({"expected": expected, "period_s": period_s} | keys))
    return channel(carrier_hz=1500.0, bandwidth_hz=1200.0, ident=ident)


def sent(
    code: str, words: float, period_s: float, seconds: float, *, depth: float = 0.95, hz: float = 1020.0
) -> np.ndarray:
    """Modulation by a tone that sends a word every `period_s`, from 2.8 s on."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, seconds))
    spans = keyer.repeated(code, 1.2 / words, period_s, seconds, 2.8)
    return np.asarray(keyer.key(t, spans) * signals.tone(depth, hz, t))


def heard(modulation: signals.Modulation, seconds: float, one: Channel, **keys: float) -> Kept:
    keys = {"c_n0_dbhz": 70.0} | keys
    kept = run(signals.am(RATE_HZ, seconds, carrier_hz=1505.0, modulation=modulation, **keys), RATE_HZ, [one])
    assert not any(kept.tally.stage_failures.values())
    return kept


@pytest.mark.parametrize("c_n0_dbhz", [60, 75, 90])
@pytest.mark.parametrize(("hz", "off_hz"), [(400, -25), (400, 0), (1020, 50)])
def test_a_beacon_s_ident_is_heard(hz: float, off_hz: float, c_n0_dbhz: float) -> None:
    """95 %, 7 words a minute, 400 Hz +-25 or 1020 Hz +-50 (CHECKS D1 to D3), three seeds each."""
    for seed in range(3):
        modulation = sent(AB7, 7, 10.0, 10.2, hz=hz + off_hz)
        kept = heard(modulation, 10.2, narrow("AB7", 8.0, tone_hz=hz), c_n0_dbhz=c_n0_dbhz, seed=seed)
        assert kept.last("ident_match") == 1
        found = kept.of("ident_tone_hertz")
        # Within a second's marks of about 0.4 s, CHECKS E15 allows 0.006 Hz at 60 dB-Hz and this depth.
        assert found[np.isfinite(found)] == pytest.approx(hz + off_hz, abs=0.1)


@pytest.mark.parametrize("words", [5, 7, 10, 14, 20])
def test_any_speed_from_5_to_20_words_a_minute_is_read(words: float) -> None:
    """ILS: 10 % (CHECKS D13), C/N0 70 dB-Hz; 33 dots and the 5 dots of space by which it is sure."""
    seconds = 3.8 + 40 * 1.2 / words
    kept = heard(sent(AB7, words, 60.0, seconds, depth=0.1), seconds, narrow("AB7", 60.0))
    assert kept.last("ident_match") == 1


@pytest.mark.parametrize("code", [AB6, B7, AB7E, DASHES, DOTS])
def test_another_ident_is_no_match(code: str) -> None:
    kept = heard(sent(code, 10, 8.0, 18.2), 18.2, narrow("AB7", 9.0))
    assert not np.any(kept.of("ident_match") == 1)
    assert kept.last("ident_match") == 0
    assert np.isfinite(kept.of("ident_tone_hertz")).any()


@pytest.mark.parametrize(("text", "code"), [("TMO", DASHES), ("EIS", DOTS)])
def test_idents_of_dashes_or_dots_alone_are_read(text: str, code: str) -> None:
    assert heard(sent(code, 10, 60.0, 8.2), 8.2, narrow(text, 60.0)).last("ident_match") == 1


def test_no_ident_is_missing_after_its_period_and_not_known_before() -> None:
    kept = heard(0.0, 9.2, narrow("AB7", 6.0))
    ages = np.array([reading.span.elapsed_s for reading in kept.readings])
    match = kept.of("ident_match")
    assert np.all(np.isnan(match[ages < 6.0]))
    assert np.all(match[ages > 7.3] == 0)  # it is listened to from 1.2 s on at the latest
    assert np.all(np.isnan(kept.of("ident_last_timestamp_seconds")))
    assert np.all(np.isnan(kept.of("ident_tone_hertz")))


def test_an_ident_that_stops_is_missed_after_its_period() -> None:
    """At 20 words a minute AB7 has 33 dots of 60 ms: it ends at 2.8 + 1.98 s."""
    kept = heard(sent(AB7, 20, 60.0, 14.2), 14.2, narrow("AB7", 5.0))
    ages = np.array([reading.span.elapsed_s for reading in kept.readings])
    match = kept.of("ident_match")
    assert np.all(match[(ages > 5.2) & (ages < 9.7)] == 1)
    assert np.all(match[ages > 4.78 + 5 + 2.7] == 0)


@pytest.mark.parametrize("words", [5, 7, 10])
def test_a_long_dash_after_the_ident_does_not_spoil_it(words: float) -> None:
    """Ident, 600 ms of space, a long dash, and so on (CHECKS D9)."""
    dot_s = 1.2 / words
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 33.2))
    length_s = 33 * dot_s + 0.6 + 4.0 + 0.6
    spans = [
        span
        for start in np.arange(2.8, 33.2, length_s)
        for span in [*keyer.marks(AB7, dot_s, start), (start + length_s - 4.6, start + length_s - 0.6)]
    ]
    modulation = keyer.key(t, spans) * signals.tone(0.95, 400.0, t)
    kept = heard(modulation, 33.2, narrow("AB7", 1.1 * length_s, tone_hz=400))
    first = int(np.argmax(kept.of("ident_match") == 1))
    assert first < 3 + length_s + 1
    assert np.all(kept.of("ident_match")[first:] == 1)


def test_the_time_of_the_ident_is_that_of_its_end() -> None:
    """It ends at 2.8 + 33 x 0.06 s; the tuner's filter and the marks' edges are good for 20 ms."""
    one = narrow("AB7", 60.0)
    samples = signals.am(
        RATE_HZ, 8.0, carrier_hz=1505.0, modulation=sent(AB7, 20, 60.0, 8.0), c_n0_dbhz=80
    ).astype(np.complex64)
    kept = Kept()
    chain = Chain([one], Stream(RATE_HZ, 0.0, False, True), [], [kept], kept.tally)
    for start in range(0, len(samples), 4000):
        utc = 1.7e9 + start / RATE_HZ
        chain.process(Block(samples[start : start + 4000], RATE_HZ, 0.0, start, utc))
    assert np.isnan(kept.of("ident_last_timestamp_seconds")[3])
    last = kept.of("ident_last_timestamp_seconds")[5:]
    assert last - 1.7e9 == pytest.approx(2.8 + 33 * 0.06, abs=0.02)


@pytest.mark.parametrize("words", [5, 7, 20])
@pytest.mark.parametrize("c_n0_dbhz", [50, 90])
def test_a_carrier_that_is_keyed_off_and_on_sends_its_ident_too(words: float, c_n0_dbhz: float) -> None:
    """The carrier loop loses the carrier in most of the spaces; its amplitude is known all the same."""
    dot_s = 1.2 / words
    seconds = 3.8 + 45 * dot_s
    modulation = sent(AB7, words, 60.0, seconds, depth=1.0, hz=0.0) - 1
    kept = heard(modulation, seconds, narrow("AB7", 60.0, on="carrier"), c_n0_dbhz=c_n0_dbhz)
    assert kept.last("ident_match") == 1
    assert np.all(np.isnan(kept.of("ident_tone_hertz")))


def test_an_ident_that_the_carrier_s_break_cuts_in_two_is_not_heard() -> None:
    modulation = sent(AB7, 7, 60.0, 12.2)
    assert heard(modulation, 12.2, narrow("AB7", 60.0)).last("ident_match") == 1
    cut = heard(modulation, 12.2, narrow("AB7", 60.0), breaks=[(5.0, 5.6)])
    assert np.isnan(cut.last("ident_match"))


def test_what_came_before_the_listening_began_is_not_taken_for_silence() -> None:
    """E is sent while the carrier is still being acquired, AB7 right after it: it may be the end of any word."""
    t = signals.times(RATE_HZ, signals.frames_of(RATE_HZ, 10.2))
    modulation = keyer.key(t, keyer.marks(f". {AB7}", 1.2 / 7, 0.3)) * signals.tone(0.95, 1020.0, t)
    assert np.all(np.isnan(heard(modulation, 10.2, narrow("AB7", 60.0)).of("ident_match")))


def test_nothing_is_said_of_an_ident_without_a_carrier() -> None:
    kept = heard(0.0, 9.2, narrow("AB7", 3.0), breaks=[(5.1, 20.0)])
    assert kept.of("ident_match")[4] == 0
    assert np.isnan(kept.last("ident_match"))


def test_channels_without_an_ident_say_nothing() -> None:
    samples = signals.am(RATE_HZ, 4.0, carrier_hz=1500.0, modulation=sent(AB7, 20, 60.0, 4.0))
    kept = run(samples, RATE_HZ, [channel(carrier_hz=1500.0, bandwidth_hz=1200)])
    for name in ("ident_match", "ident_last_timestamp_seconds", "ident_tone_hertz"):
        assert np.all(np.isnan(kept.of(name)))
