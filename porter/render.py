"""Findings to text: the place, what is wrong, the line with the value underlined, and how to mend it."""

import unicodedata
from collections.abc import Iterable

import click

from porter.findings import Finding, Position
from porter.spec.tree import split_lines

#: Longer lines are cut around the value; most terminals show about this much.
MAX_LINE = 120
#: More than this nobody reads; `--json` has them all.
MAX_SHOWN = 200
_COLOURS = {"error": "red", "warning": "yellow", "note": "cyan"}


def render_findings(findings: Iterable[Finding], source: str, color: bool) -> str:
    """Return findings as a person reads them, one block each, in the order given.

    Args:
        findings: of one spec.
        source: the spec's text; a place outside it is shown without its line.
        color: True adds the terminal's colours.
    """
    lines = split_lines(source)
    every = list(findings)
    more = f"… and {len(every) - MAX_SHOWN} more\n" if len(every) > MAX_SHOWN else ""
    return "".join(_block(finding, lines, color) for finding in every[:MAX_SHOWN]) + more


def render_summary(findings: Iterable[Finding]) -> str:
    """Return how many errors and warnings there are, such as ``2 errors, 1 warning``; empty for none."""
    severities: list[str] = [finding.severity for finding in findings]
    counts = [(severities.count(kind), kind) for kind in _COLOURS]
    return ", ".join(f"{count} {kind}{'' if count == 1 else 's'}" for count, kind in counts if count)


def _block(finding: Finding, lines: list[str], color: bool) -> str:
    place = finding.position
    head = f"{_safe(place.file)}:{place.line}:{place.column}:"
    severity = _paint(f"{finding.severity}:", _COLOURS[finding.severity], color)
    rows = [f"{_bold(head, color)} {severity} {_bold(_safe(finding.message), color)}"]
    if place.line <= len(lines) and lines[place.line - 1].strip():
        rows += _excerpt(place, lines[place.line - 1], _COLOURS[finding.severity], color)
    rows.append(f"  mend: {_safe(finding.mend)}  ({finding.rule})")
    return "\n".join(rows) + "\n"


def _excerpt(place: Position, line: str, colour: str, color: bool) -> list[str]:
    """Return the line with its number, and the carets under the value."""
    number = str(place.line)
    before, value, after = _cut(line, place.column - 1, place.length)
    pad = "".join("\t" if c == "\t" else " " * _width(c) for c in before)
    carets = _paint("^" * max(1, sum(map(_width, value))), colour, color)
    return [
        f"  {number} | {_safe(before + value + after).rstrip()}",
        f"  {' ' * len(number)} | {pad}{carets}",
    ]


def _cut(line: str, start: int, length: int) -> tuple[str, str, str]:
    """Return the text before, in and after the value, with a long line cut around it."""
    before, value, after = line[:start], line[start : start + length], line[start + length :]
    if len(line) <= MAX_LINE:
        return before, value, after
    if len(value) > MAX_LINE // 2:
        value, after = value[: MAX_LINE // 2], "…"
    if len(before) > MAX_LINE // 3:
        before = "…" + before[-(MAX_LINE // 3) :]
    room = MAX_LINE - len(before) - len(value)
    return before, value, after if len(after) <= room else after[:room] + "…"


def _width(character: str) -> int:
    """Return the columns that a character takes on a terminal.

    Source: Unicode Standard Annex 11, East Asian Width (wide and fullwidth take two).
    """
    if unicodedata.combining(character) or unicodedata.category(character) in ("Mn", "Me", "Cf"):
        return 0
    return 2 if unicodedata.east_asian_width(character) in "WF" else 1


def _safe(text: str) -> str:
    """Return *text* with control characters shown as pictures, so that none reaches the terminal."""
    return "".join(map(_picture, text))


def _picture(character: str) -> str:
    code = ord(character)
    if character == "\t" or unicodedata.category(character) not in ("Cc", "Cs"):
        return character
    return chr(0x2400 + code) if code < 0x20 else "\ufffd"


def _paint(text: str, colour: str, color: bool) -> str:
    return click.style(text, fg=colour, bold=True) if color else text


def _bold(text: str, color: bool) -> str:
    return click.style(text, bold=True) if color else text
