"""The reader of idents, from the moments at which the key moves."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitord.measure.morse import IdentReader, decode, lengths
from tests import keyer

AB7 = ".- -... --..."


def ends(reader: IdentReader, spans: list[tuple[float, float]], until_s: float) -> list[float]:
    """All that the reader says to these marks, and at last to silence."""
    said: list[float | None] = []
    for start, end in spans:
        said += [reader.down(start), reader.up(end)]
    said.append(reader.heard(until_s))
    return [end for end in said if end is not None]


def test_it_waits_for_the_space_of_a_word_after_the_ident() -> None:
    reader = IdentReader("AB7")
    reader.begin(0.0)
    end = 2.0 + 33 * 0.1
    assert ends(reader, keyer.marks(AB7, 0.1, 2.0), end + 0.49) == []
    assert reader.sure_from_s == pytest.approx(end + 0.5)
    assert reader.heard(end + 0.51) == pytest.approx(end)
    assert reader.heard(end + 9) is None  # told once


@settings(max_examples=60, deadline=None)
@given(st.floats(0.055, 0.26), st.floats(-0.2, 0.2), st.integers(0, 2**31))
def test_uneven_keying_is_read(dot_s: float, heavy: float, seed: int) -> None:
    """Marks a fifth of a dot longer or shorter at the cost of the spaces, and each edge up to 0.15 dots off."""
    rng = np.random.default_rng(seed)
    spans = [
        (start + rng.uniform(-0.15, 0.15) * dot_s, end + (heavy + rng.uniform(-0.15, 0.15)) * dot_s)
        for start, end in keyer.marks(AB7, dot_s, 3.0)
    ]
    reader = IdentReader("AB7")
    reader.begin(0.0)
    assert len(ends(reader, spans, 20.0)) == 1


@pytest.mark.parametrize("dot_s", [0.02, 0.5])
def test_what_is_far_too_fast_or_slow_is_not_read(dot_s: float) -> None:
    reader = IdentReader("AB7")
    reader.begin(0.0)
    assert ends(reader, keyer.marks(AB7, dot_s, 4.0), 60.0) == []


def test_a_part_of_a_longer_word_is_no_ident() -> None:
    for code in (". .- -... --...", ".- -... --... -", ".- -... --... .- -... --..."):
        reader = IdentReader("AB7")
        reader.begin(0.0)
        assert ends(reader, keyer.marks(code, 0.1, 2.0), 60.0) == []


def test_a_long_dash_after_a_letter_s_space_proves_the_ident_as_soon_as_it_is_too_long_for_a_dash() -> None:
    reader = IdentReader("AB7")
    reader.begin(0.0)
    spans, end = keyer.marks(AB7, 0.1, 2.0), 2.0 + 3.3
    assert ends(reader, spans, end + 0.3) == []
    assert reader.down(end + 0.3) is None
    assert reader.heard(end + 0.3 + 0.44) is None
    assert reader.heard(end + 0.3 + 0.46) == pytest.approx(end)


def test_each_repetition_is_heard() -> None:
    reader = IdentReader("AB7")
    reader.begin(0.0)
    assert len(ends(reader, list(keyer.repeated(AB7, 0.1, 4.0, 11.0, 2.0)), 60.0)) == 3


def test_what_was_heard_before_a_beginning_anew_does_not_count() -> None:
    reader = IdentReader("AB7")
    reader.begin(0.0)
    spans = keyer.marks(AB7, 0.1, 2.0)
    assert ends(reader, spans[:4], 3.0) == []
    reader.begin(3.0)
    assert ends(reader, spans[4:], 60.0) == []


def test_what_is_no_character_is_shown_as_such() -> None:
    assert decode([1, 1, 3]) == "A"
    assert decode([1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1]) == "?"  # six dots
    assert decode([6]) == "?"
    assert decode(lengths("W1AW")) == "W1AW"
