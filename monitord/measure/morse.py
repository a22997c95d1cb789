"""Morse code: the table, its timing, and a reader that waits for one expected ident.

Timing is counted in dots: a dash is 3, the space inside a character 1, between characters 3, between words 7; a
dot is 1.2 s over the words a minute (PARIS with its space is 50 dots). The length of the dot is fitted anew to every
ident, so that any speed from 5 to 20 words a minute is read.
"""

from collections import deque
from collections.abc import Sequence

CODE = {
    "A": ".-", "B": "-...", "C": "-.-.", "D": "-..", "E": ".", "F": "..-.", "G": "--.", "H": "....", "I": "..",
    "J": ".---", "K": "-.-", "L": ".-..", "M": "--", "N": "-.", "O": "---", "P": ".--.", "Q": "--.-", "R": ".-.",
    "S": "...", "T": "-", "U": "..-", "V": "...-", "W": ".--", "X": "-..-", "Y": "-.--", "Z": "--..",
    "0": "-----", "1": ".----", "2": "..---", "3": "...--", "4": "....-", "5": ".....", "6": "-....", "7": "--...",
    "8": "---..", "9": "----.",
}  # fmt: skip
"""Letters and figures (ITU-R M.1677-1, from memory)."""

_LETTERS = {code: letter for letter, code in CODE.items()}
DASH, LETTER_SPACE, WORD_SPACE = 3, 3, 7

# Where one length is told from the next, in dots: half way.
_DASH_FROM, _LETTER_FROM, _WORD_FROM = 2.0, 2.0, 5.0
LONG_DASH_FROM = 4.5
"""A mark from here on, in dots, is no dash of a character but the long dash that some stations send beside."""

# 5 to 20 words a minute are 240 to 60 ms; a sixth of leeway for keyers that run slow or fast.
SHORTEST_DOT_S, LONGEST_DOT_S = 0.050, 0.280


def dot_s(words_a_minute: float) -> float:
    """Length of the dot: PARIS and its space are 50 dots, so it is 60 s / 50 / words a minute (CHECKS D10)."""
    return 1.2 / words_a_minute


def lengths(text: str) -> list[int]:
    """Marks and spaces of a word by turns, in dots, from its first mark to its last."""
    found: list[int] = []
    for letter in text:
        for sign in CODE[letter]:
            found += [DASH if sign == "-" else 1, 1]
        found[-1] = LETTER_SPACE
    return found[:-1]


def decode(runs: Sequence[float]) -> str:
    """What a word says whose marks and spaces have these lengths in dots; "?" for what is no character."""
    code = ""
    for mark, space in zip(runs[::2], [*runs[1::2], LETTER_SPACE], strict=True):
        code += _sign(mark) + ("" if space < _LETTER_FROM else " " if space < _WORD_FROM else " ? ")
    return "".join(_LETTERS.get(letter, "?") for letter in code.split())


def _sign(mark: float) -> str:
    return "." if mark < _DASH_FROM else "-" if mark < LONG_DASH_FROM else "?"


def fitted_dot_s(runs_s: Sequence[float], pattern: Sequence[int]) -> float:
    """The dot that brings lengths in s nearest to those of a pattern in dots, by least squares."""
    across = sum(run * count for run, count in zip(runs_s, pattern, strict=True))
    return across / sum(count * count for count in pattern)


class IdentReader:
    """Takes the moments at which a key goes down and up; tells when it has sent the expected ident.

    The ident must stand alone: with the space of a word before and after it, or with a long dash there that a
    letter's space at least parts from it (CHECKS D9).
    """

    def __init__(self, expected: str) -> None:
        self._expected = expected
        self._pattern = lengths(expected)
        self._runs: deque[float] = deque(maxlen=len(self._pattern) + 2)
        self.begin(0.0)

    def begin(self, time_s: float) -> None:
        """Forget what was heard; the key counts as up from here on."""
        self._runs.clear()
        self._runs.append(0.0)  # no mark before
        self._since_s, self._is_down = time_s, False
        self._found: tuple[float, float] | None = None  # the end of what may be the ident, its dot

    @property
    def sure_from_s(self) -> float:
        """When `heard` will say more, if the key stays as it is until then; inf where it will not."""
        if self._found is None:
            return float("inf")
        return self._since_s + (LONG_DASH_FROM if self._is_down else _WORD_FROM) * self._found[1]

    def heard(self, time_s: float) -> float | None:
        """The ident's end, where the space of a word or a long dash has now followed; told once."""
        if self._found is None or time_s < self.sure_from_s:
            return None
        end_s, self._found = self._found[0], None
        return end_s

    def down(self, time_s: float) -> float | None:
        """The key goes down. Returns what `heard` would have said just before."""
        end_s = self.heard(time_s)
        if self._found is not None and time_s - self._since_s < _LETTER_FROM * self._found[1]:
            self._found = None
        self._turn(time_s, True)
        return end_s

    def up(self, time_s: float) -> float | None:
        """The key goes up. Returns what `heard` would have said just before."""
        end_s = self.heard(time_s)
        self._turn(time_s, False)
        self._found = self._candidate(time_s)
        return end_s

    def _turn(self, time_s: float, down: bool) -> None:
        self._runs.append(time_s - self._since_s)
        self._since_s, self._is_down = time_s, down

    def _candidate(self, end_s: float) -> tuple[float, float] | None:
        if len(self._runs) < len(self._pattern) + 2:
            return None
        mark_before_s, space_before_s, *runs_s = self._runs
        dot = fitted_dot_s(runs_s, self._pattern)
        if not SHORTEST_DOT_S <= dot <= LONGEST_DOT_S:
            return None
        after_dash = mark_before_s >= LONG_DASH_FROM * dot
        if space_before_s < (_LETTER_FROM if after_dash else _WORD_FROM) * dot:
            return None
        return (end_s, dot) if decode([run / dot for run in runs_s]) == self._expected else None
