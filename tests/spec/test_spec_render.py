"""Findings as a person reads them."""

import pytest

from porter.findings import Finding, Position
from porter.render import MAX_LINE, render_findings, render_summary


def finding(line: int, column: int, length: int, message: str = "wrong") -> Finding:
    return Finding("some-rule", "error", Position("a.yaml", line, column, length), message, "write it right")


def carets(source: str, place: Finding) -> tuple[str, str]:
    """Return the line shown and the line of carets, without their margins."""
    rows = render_findings([place], source, color=False).splitlines()
    return rows[1].split(" | ", 1)[1], rows[2].split(" | ", 1)[1]


def test_the_whole_block() -> None:
    """Place, severity, message; line and carets; mend and rule."""
    text = render_findings([finding(2, 4, 3)], "one\na: two\n", color=False)

    assert text == (
        "a.yaml:2:4: error: wrong\n  2 | a: two\n    |    ^^^\n  mend: write it right  (some-rule)\n"
    )


@pytest.mark.parametrize(
    ("line", "column", "length", "expected"),
    [
        ("\tx: bad", 5, 3, "\t   ^^^"),  # a tab stays a tab, whatever its width
        ("漢字: bad", 5, 3, "      ^^^"),  # wide characters take two columns
        ("e\u0301: bad", 5, 3, "   ^^^"),  # a combining accent takes none
        ("x: 漢字", 4, 2, "   ^^^^"),
        ("x:", 3, 1, "  ^"),  # just past the end
    ],
)
def test_carets_stand_under_the_value(line: str, column: int, length: int, expected: str) -> None:
    """Measured in columns of a terminal, not in characters."""
    assert carets(line, finding(1, column, length))[1] == expected


def test_a_long_line_is_cut_around_the_value() -> None:
    """The value stays in sight, and the carets under it."""
    source = "x" * 5000 + " BAD " + "y" * 5000
    shown, below = carets(source, finding(1, 5002, 3))

    assert len(shown) <= MAX_LINE + 2
    assert shown[below.index("^") : below.rindex("^") + 1] == "BAD"


def test_no_control_character_reaches_the_terminal() -> None:
    """Neither from the source nor from a message."""
    text = render_findings([finding(1, 1, 1, "\x1b[31m\x07")], "a\x1b[2J\x00b", color=False)

    assert not any(ord(character) < 0x20 and character != "\n" for character in text)


def test_a_place_outside_the_source_is_shown_without_a_line() -> None:
    """For files that couldn't be read."""
    text = render_findings([finding(1, 1, 1)], "", color=False)

    assert text == "a.yaml:1:1: error: wrong\n  mend: write it right  (some-rule)\n"


def test_colour_changes_nothing_but_colour() -> None:
    """Taking the escapes away gives the plain text."""
    import click

    place = finding(1, 1, 3)
    coloured = render_findings([place], "bad", color=True)

    assert "\x1b[" in coloured
    assert click.unstyle(coloured) == render_findings([place], "bad", color=False)


def test_the_summary_counts() -> None:
    """Errors first; nothing for nothing."""
    warning = Finding("w", "warning", Position("a", 1, 1), "m", "m")

    assert render_summary([finding(1, 1, 1), warning, finding(1, 1, 1)]) == "2 errors, 1 warning"
    assert render_summary([]) == ""


def test_a_flood_is_cut() -> None:
    """Two hundred findings are shown, and how many more there are."""
    text = render_findings([finding(1, 1, 1)] * 205, "bad", color=False)

    assert text.count("some-rule") == 200
    assert text.endswith("… and 5 more\n")
