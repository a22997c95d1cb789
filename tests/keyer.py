"""Keyed signals for the tests, from codes written out as dots and dashes: nothing here comes from the program."""

from collections.abc import Iterator

import numpy as np

from tests.signals import Array


def marks(code: str, dot_s: float, start_s: float = 0.0) -> list[tuple[float, float]]:
    """Beginning and end of each mark of one word: ".- -..." is AB. Dash 3 dots, spaces 1 and 3 (CHECKS D10)."""
    found, at = [], start_s
    for sign in code:
        if sign == " ":
            at += 2 * dot_s  # one has passed after the mark before
            continue
        length = dot_s * (3 if sign == "-" else 1)
        found.append((at, at + length))
        at += length + dot_s
    return found


def repeated(
    code: str, dot_s: float, period_s: float, until_s: float, start_s: float = 0.0
) -> Iterator[tuple[float, float]]:
    """Marks of a word that comes again every `period_s`."""
    for start in np.arange(start_s, until_s, period_s):
        yield from marks(code, dot_s, float(start))


def key(
    t: Array, spans: Iterator[tuple[float, float]] | list[tuple[float, float]], rise_s: float = 0.0
) -> Array:
    """1 while the key is down, else 0; with `rise_s` it goes up and down as a raised cosine of this length."""
    down = np.zeros(len(t))
    for start, end in spans:
        if rise_s:
            down += np.clip((t - start) / rise_s + 0.5, 0, 1) - np.clip((t - end) / rise_s + 0.5, 0, 1)
        else:
            down[(t >= start) & (t < end)] = 1
    return np.asarray((1 - np.cos(np.pi * down)) / 2)
