"""Numbers that keep the grid, and texts that cannot become lines of a deck."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from optisize.simulator.netlist import clean, comment, joined, number, part, wrapped

PREFIXES = {"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "k": 3, "meg": 6, "g": 9, "t": 12}


def value(text: str) -> float:
    """Read a number as SPICE does."""
    letters = "" if "e" in text[1:] and text[-1].isdigit() else text.lstrip("+-.0123456789")
    digits = text.removesuffix(letters)
    return float(f"{digits}e{PREFIXES[letters]}") if letters else float(digits)


@pytest.mark.parametrize(
    ("figure", "text"),
    [
        (70.48e-6, "70.48u"), (0.18e-6, "180n"), (1.03e-6, "1.03u"), (304725.0, "304.725k"), (2e6, "2meg"), (0.0, "0"),
        (1.8, "1.8"), (0.9, "0.9"), (0.052, "52m"), (347e-9, "347n"), (-0.6, "-0.6"), (5e-13, "500f"), (1e-60, "1e-60"),
    ],
)  # fmt: skip
def test_numbers_are_as_a_designer_writes_them(figure: float, text: str) -> None:
    assert number(figure) == text


@given(st.floats(1e-18, 1e15), st.booleans())
def test_numbers_keep_twelve_digits(figure: float, negative: bool) -> None:
    figure = -figure if negative else figure
    assert value(number(figure)) == pytest.approx(figure, rel=6e-12)


@given(st.integers(1, 4000))
def test_widths_on_a_grid_are_exact(steps: int) -> None:
    assert value(number(steps * 5e-9)) == pytest.approx(steps * 5e-9, rel=1e-15)


@given(st.text(max_size=300))
def test_a_text_stays_in_its_comment(text: str) -> None:
    plain = clean(text)
    assert plain.isascii()
    assert plain.isprintable() or not plain
    assert not set('\n\r"$`{}\\;@&') & set(plain)
    assert all(line.startswith("*") and len(line) < 400 for line in comment(text))


def test_long_lines_are_continued() -> None:
    words = [f"key{i}={i}" for i in range(60)]
    lines = wrapped(" ".join(words))
    assert len(lines) > 3
    assert max(len(line) for line in lines) <= 120
    assert all(line.startswith("+ ") for line in lines[1:])
    assert " ".join(lines).replace(" + ", " ").split() == words
    assert joined([["a"], [], ["b"]]) == ["a", "", "b"]
    assert part("input.cascode.p") == "input_cascode_p"
