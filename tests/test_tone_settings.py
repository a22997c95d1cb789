"""Settings of tones and idents: tables within a channel's table, and what is wrong in them."""

import pytest

from monitord.errors import ConfigError
from monitord.settings import Ident, Tone, parse

START = '[source]\nkind = "simulated"\n'
CHANNEL = '[[channel]]\nname = "{}"\ncarrier_hz = 0\n'
TWO = START + CHANNEL.format("a") + CHANNEL.format("b")


def problem(text: str) -> str:
    with pytest.raises(ConfigError) as caught:
        parse(TWO + text, "s.toml")
    (line,) = caught.value.problems
    return line.removeprefix("s.toml: ")


def test_tones_and_ident_are_taken() -> None:
    text = """
[[channel.tone]]
hz = 30
[[channel.tone]]
hz = 3960.5
band_hz = 1200
[[channel.tone]]
hz = 1020
keyed = true
[channel.ident]
expected = "AB7"
"""
    first, second = parse(TWO + text, "s.toml").channels
    assert first.tone == () and first.ident is None
    assert second.tone == (Tone(hz=30), Tone(hz=3960.5, band_hz=1200), Tone(hz=1020, keyed=True))
    assert [tone.label for tone in second.tone] == ["30", "3960.5", "1020"]
    assert second.ident == Ident(expected="AB7", period_s=30, tone_hz=1020, on="tone")


def test_a_raster_hands_its_tones_and_ident_on() -> None:
    text = """
[[raster]]
first_hz = 0
last_hz = 1000
step_hz = 1000
name = "r-{khz}"
[[raster.tone]]
hz = 400
[raster.ident]
expected = "X"
on = "carrier"
"""
    for one in parse(START + text, "s.toml").channels:
        assert one.tone == (Tone(hz=400),)
        assert one.ident == Ident(expected="X", on="carrier")


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("[[channel.tone]]\nhz = 6000", "tone[0].hz = 6000: must lie within bandwidth_hz: 5000 Hz"),
        (
            "[[channel.tone]]\nhz = 90\n[[channel.tone]]\nhz = 4500\nband_hz = 1200",
            "tone[1].hz = 4500: must lie, with its band_hz, within bandwidth_hz: 5000 Hz",
        ),
        ("[[channel.tone]]\nhz = 9", "tone[0].hz = 9: must be at least 10 Hz"),
        ('[[channel.tone]]\nhz = "x"', 'tone[0].hz = "x": must be a number'),
        ("[[channel.tone]]\nhz = 90\nkeyed = 1", "tone[0].keyed = 1: must be true or false"),
        ("[[channel.tone]]\nkeyed = true", "tone[0].hz: missing; must be the tone's frequency in Hz"),
        ("[[channel.tone]]\nhz = 90\nband = 9", "tone[0].band = 9: unknown key; did you mean band_hz?"),
        (
            "[[channel.tone]]\nhz = 90\n[[channel.tone]]\nhz = 95",
            "tone[1].hz = 95: must be at least 10 Hz from the other tones (90 Hz)",
        ),
        (
            "[[channel.tone]]\nhz = 900\nband_hz = 50\nkeyed = true",
            "tone[0].band_hz = 50: must be left out of a tone with keyed = true",
        ),
        ("tone = 5", "tone = 5: must be an array of tables"),
        ("tone = [5]", "tone[0] = 5: must be a table"),
        ("[channel.tone]\nhz = 90", "tone = {...}: must be an array of tables"),
        (
            "".join(f"[[channel.tone]]\nhz = {100 + 20 * k}\n" for k in range(17)),
            "tone = [...]: must be at most 16 tables [[channel.tone]]",
        ),
        ("ident = 3", "ident = 3: must be a table"),
        (
            "[channel.ident]\nperiod_s = 9",
            "ident.expected: missing; must be the letters and digits of the ident",
        ),
        (
            '[channel.ident]\nexpected = "ab"',
            'ident.expected = "ab": must be 1 to 16 capital letters and digits',
        ),
        (
            '[channel.ident]\nexpected = "A"\nperiod_s = 0',
            "ident.period_s = 0: must be from 1 to 3600 s",
        ),
        (
            '[channel.ident]\nexpected = "A"\non = "x"',
            'ident.on = "x": must be "tone" or "carrier"',
        ),
        (
            '[channel.ident]\nexpected = "A"\ntone_hz = 6000',
            "ident.tone_hz = 6000: must lie within bandwidth_hz: 5000 Hz",
        ),
    ],
)
def test_what_is_wrong_is_told_with_its_place(text: str, told: str) -> None:
    assert problem(text + "\n") == f"channel[1].{told}"


def test_a_keyed_carrier_needs_no_tone_in_the_band() -> None:
    text = 'bandwidth_hz = 500\n[channel.ident]\nexpected = "A"\non = "carrier"\n'
    assert parse(TWO + text, "s.toml").channels[1].ident is not None
