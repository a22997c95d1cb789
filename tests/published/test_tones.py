"""Navigation tones and Morse code against published numbers (CHECKS D; sources beside each)."""

import numpy as np
import pytest
from scipy.special import jv

from monitord.measure import morse
from monitord.settings import Ident, Tone
from tests import keyer, signals
from tests.runs import channel, run

# ITU-R M.1677-1, from memory.
TABLE = {
    "A": ".-", "B": "-...", "C": "-.-.", "D": "-..", "E": ".", "F": "..-.", "G": "--.", "H": "....", "I": "..",
    "J": ".---", "K": "-.-", "L": ".-..", "M": "--", "N": "-.", "O": "---", "P": ".--.", "Q": "--.-", "R": ".-.",
    "S": "...", "T": "-", "U": "..-", "V": "...-", "W": ".--", "X": "-..-", "Y": "-.--", "Z": "--..",
    "0": "-----", "1": ".----", "2": "..---", "3": "...--", "4": "....-", "5": ".....", "6": "-....", "7": "--...",
    "8": "---..", "9": "----.",
}  # fmt: skip


def test_d10_paris_and_its_space_are_50_dots_and_a_dot_is_1_2_s_over_the_words_a_minute() -> None:
    """CHECKS D10 (from memory, computed): 5 wpm 240, 7 wpm 171.43, 10 wpm 120, 20 wpm 60 ms; 8.5714 s at 7 wpm."""
    dots = sum(morse.lengths("PARIS")) + morse.WORD_SPACE
    assert dots == 50
    found = [1000 * morse.dot_s(words) for words in (5, 7, 10, 20)]
    assert found == pytest.approx([240, 171.43, 120, 60], abs=0.005)
    assert dots * morse.dot_s(7) == pytest.approx(8.5714, abs=5e-5)


@pytest.mark.parametrize("letter", TABLE)
def test_each_character_is_sent_and_read_as_in_the_table(letter: str) -> None:
    """The table, dash 3, spaces 1: ITU-R M.1677-1 (from memory)."""
    spans = keyer.marks(TABLE[letter], 1.0)
    runs = np.diff(np.ravel(spans))
    assert morse.lengths(letter) == pytest.approx(runs)
    assert morse.decode(runs.tolist()) == letter


@pytest.mark.parametrize("hz", [400.0, 1020.0])
def test_d1_d2_a_beacon_of_95_per_cent_reads_95_per_cent(hz: float) -> None:
    """CHECKS D1: 400 or 1020 Hz (published text); D2: 95 %, floor 85 % (from memory); D3: 7 wpm (from memory)."""
    code, rate_hz = "-. -.. -...", 8_000.0

    def modulation(t: np.ndarray) -> np.ndarray:
        return keyer.key(t, keyer.repeated(code, 1.2 / 7, 10.0, 20.0, 2.5)) * signals.tone(0.95, hz, t)

    samples = signals.am(rate_hz, 9.2, carrier_hz=1500.0, modulation=modulation, c_n0_dbhz=80)
    one = channel(
        carrier_hz=1500.0,
        bandwidth_hz=1200.0,
        tone=(Tone(hz=hz, keyed=True),),
        ident=Ident(expected="NDB", tone_hz=hz),
    )
    kept = run(samples, rate_hz, [one])
    assert kept.readings[3].values["tone_depth_ratio"][0, 0] == pytest.approx(0.95, abs=0.001)
    assert kept.last("ident_match") == 1


def landing(first: float, second: float) -> list[float]:
    """90 and 150 Hz in sine phase: difference, sum, positive and negative peak, rms."""
    rate_hz = 8_000.0

    def modulation(t: np.ndarray) -> np.ndarray:
        return np.asarray(signals.tone(first, 90, t, -np.pi / 2) + signals.tone(second, 150, t, -np.pi / 2))

    samples = signals.am(rate_hz, 4.2, carrier_hz=1500.0, modulation=modulation, c_n0_dbhz=100)
    one = channel(carrier_hz=1500.0, bandwidth_hz=500.0, tone=(Tone(hz=90), Tone(hz=150)))
    kept = run(samples, rate_hz, [one])
    names = (
        "tone_depth_difference_ratio",
        "tone_depth_sum_ratio",
        "modulation_positive_peak_ratio",
        "modulation_negative_peak_ratio",
        "modulation_rms_ratio",
    )
    return [kept.last(name) for name in names]


def test_d13_d16_the_localizer_on_course() -> None:
    """D13: 20 % each (published text). D16 (computed): envelope 1.37140 and 0.62860, rms depth 0.20000."""
    difference, total, high, low, rms = landing(0.2, 0.2)
    assert difference == pytest.approx(0.0, abs=0.0005)
    assert total == pytest.approx(0.40, abs=0.001)
    assert high == pytest.approx(0.37140, abs=0.0005)
    assert low == pytest.approx(1 - 0.62860, abs=0.0005)
    assert rms == pytest.approx(0.2, abs=0.0005)


@pytest.mark.parametrize(
    ("first", "second", "difference", "total"),
    [
        (0.40, 0.30, 0.10, 0.70),
        (0.30, 0.40, -0.10, 0.70),
        (0.2775, 0.1225, 0.155, 0.40),
        (0.4875, 0.3125, 0.175, 0.8),
    ],
)
def test_d13_d14_d15_difference_and_sum(first: float, second: float, difference: float, total: float) -> None:
    """D15 (published text): 40 and 30 % are 0.10, without sign; here the second is taken from the first. Full scale:
    0.155 of the localizer's 40 % (D13, published text), 0.175 of the glide path's 80 % (D14, partly from memory)."""
    found = landing(first, second)
    assert found[0] == pytest.approx(difference, abs=0.0005)
    assert found[1] == pytest.approx(total, abs=0.001)


def test_d17_the_omnidirectional_range() -> None:
    """30 Hz at 30 %; 9960 Hz at 30 %, swung by 480 Hz 30 times a second: deviation ratio 16 (published text; the 30 +-
    2 % from memory). A band of 1200 Hz keeps the pairs of lines up to the 20th: power J0^2 + 2 sum Jn^2 of 1."""
    rate_hz = 32_000.0
    kept_power = jv(0, 16) ** 2 + 2 * sum(jv(n, 16) ** 2 for n in range(1, 21))
    assert kept_power > 0.995

    def modulation(t: np.ndarray) -> np.ndarray:
        swung = 0.3 * np.cos(2 * np.pi * 9960 * t + 16 * np.sin(2 * np.pi * 30 * t))
        return np.asarray(signals.tone(0.3, 30, t) + swung)

    samples = signals.am(rate_hz, 4.2, modulation=modulation, c_n0_dbhz=95)
    one = channel(carrier_hz=0.0, bandwidth_hz=10_800.0, tone=(Tone(hz=30), Tone(hz=9960, band_hz=1210)))
    kept = run(samples, rate_hz, [one])
    found = kept.readings[-1].values["tone_depth_ratio"][0]
    assert found[0] == pytest.approx(0.3, abs=0.001)
    assert found[1] == pytest.approx(0.3 * np.sqrt(kept_power), abs=0.001)
    assert np.isnan(kept.last("tone_depth_difference_ratio"))
