"""What happens at the built-in station: a story of four minutes, each transmitter at its own point of it.

In every turn a transmitter is over-modulated for half a second, falls silent for a while with its carrier on,
and loses its carrier for a moment.
"""

import numpy as np

from monitord.blocks import Flags, Precise

TURN_S = 240.0  # a whole number of programme loops, so that the passage meets the same programme every time
PASSAGE_AT_S = 20.0
SILENCE_AT_S = 110.0
SILENCE_S = 45.0
BREAK_AT_S = 200.0
BREAK_S = 3.0

_FADE_S = 0.1  # of programme into silence
_KEYING_S = 0.004  # of a carrier going off or on, so that it does not click into its neighbours
_TELLERS = 3
_APART_S = TURN_S / _TELLERS
_DELAY_S = 7.0  # between those that are at the same point


def story_start_s(transmitters: int) -> Precise:
    """The time of the story, in seconds (transmitters,), at which each transmitter stands at the beginning.

    The first is over-modulated 20 s after the start, the second falls silent at 30 s, the third breaks off at
    40 s.
    """
    number = np.arange(transmitters)
    return (_APART_S * number - _DELAY_S * (number // _TELLERS)) % TURN_S


def _away(story_s: Precise, start_s: float, length_s: float, ramp_s: float) -> Precise:
    """0 outside [start, start + length), 1 inside, with straight ramps inside its two ends."""
    since, until = story_s - start_s, start_s + length_s - story_s
    return np.clip(np.minimum(since, until) / ramp_s, 0.0, 1.0)


def carrier_gain(story_s: Precise) -> Precise:
    """Factor of the carrier's amplitude (0..1) at times of the story, any shape; 0 in a break."""
    return 1.0 - _away(story_s, BREAK_AT_S, BREAK_S, _KEYING_S)


def programme_gain(story_s: Precise) -> Precise:
    """Factor of the programme (0..1) at times of the story, any shape; 0 in a silence."""
    return 1.0 - _away(story_s, SILENCE_AT_S, SILENCE_S, _FADE_S)


def in_passage(story_s: Precise, length_s: float, passage_s: float) -> Flags:
    """Whether a stretch of `length_s` from each time of the story touches the over-modulated passage."""
    return (story_s + length_s > PASSAGE_AT_S) & (story_s < PASSAGE_AT_S + passage_s)
