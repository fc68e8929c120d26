"""Names made safe and short."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.report.text import clean, label, listing, neutral, shorten, upper_first, width, wrap


@pytest.mark.parametrize(
    "bad", ["\x1b[31m", "\x00", "\u202e", "\u2066", "\u200f", "\n", "\r\n", "\t", "\x9b"]
)
def test_clean_lets_no_control_or_direction_mark_through(bad):
    assert all(c.isprintable() for c in clean(f"a{bad}b"))
    assert "\u202e" not in clean(f"a{bad}b")


def test_clean_keeps_joiners_that_words_need():
    assert clean("👩\u200d🌾") == "👩\u200d🌾"


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r"])
def test_formulas_are_neutralised(start):
    assert neutral(f"{start}1") == f"'{start}1"


def test_numbers_are_not_touched():
    assert neutral(-1.5) == -1.5


@given(st.text(max_size=60), st.integers(2, 30))
def test_shortened_text_fits(text, limit):
    assert width(shorten(clean(text), limit)) <= limit


@given(st.text(max_size=80), st.integers(4, 30))
def test_wrapped_lines_fit(text, columns):
    assert all(width(line) <= columns for line in wrap(clean(text), columns))


@given(st.text(alphabet="ab_- c", max_size=80), st.integers(4, 30))
def test_wrapping_loses_nothing_but_spaces(text, columns):
    text = clean(text)
    assert "".join(wrap(text, columns)).replace(" ", "") == text.replace(" ", "")


def test_wrap_breaks_at_underscores_only_when_a_word_is_too_long():
    assert wrap("left by card_lapsed", 12) == ["left by", "card_lapsed"]
    assert wrap("card_lapsed_twice", 12) == ["card_lapsed_", "twice"]


def test_wrap_keeps_to_the_lines_allowed():
    assert len(wrap("one two three four five six seven", 8, 2)) == 2


def test_label_is_short_and_keeps_both_ends():
    text = label("x" * 300 + " end")
    assert width(text) <= 40 and text.endswith("end")


@pytest.mark.parametrize(
    "names, text",
    [([], ""), (["a"], "a"), (["a", "b"], "a and b"), (list("abcdefgh"), "a, b, c, d, e, f and 2 more")],
)
def test_listing(names, text):
    assert listing(names) == text


def test_upper_first():
    assert upper_first("weekly Box") == "Weekly Box" and upper_first("") == ""
