"""Breaks long lines of code where a reader would: outside in, after a comma or before an operator."""

import re

WIDTH = 100
_BREAK = re.compile(r"(?<=,) | (?=(?:&&|\|\||\+|-|\?|:|or|and) )")


def fold(lines: list[str], indent: int) -> list[str]:
    """Return *lines*, which will stand *indent* columns in, with long ones broken inside brackets."""
    return [piece for line in lines for piece in _pieces(line, WIDTH - indent)]


def _pieces(line: str, width: int, deep: int = 0) -> list[str]:
    """Break *line*, which starts inside *deep* open brackets."""
    place = _place(line, width, deep) if len(line) > width else None
    if place is None:
        return [line]
    margin = len(line) - len(line.lstrip())
    hang = 0 if deep else 4
    rest = " " * (margin + hang) + line[place + 1 :]
    return [line[:place], *_pieces(rest, width, deep + _open(line[:place]))]


def _open(text: str) -> int:
    return text.count("(") - text.count(")")


def _place(line: str, width: int, deep: int) -> int | None:
    """Return where to break: the outermost place within *width*, of these the last; None for nowhere."""
    places = [found.start() for found in _BREAK.finditer(line) if line[: found.start()].strip()]
    depths = {at: deep + _open(line[:at]) for at in places}
    inside = [at for at, depth in depths.items() if depth > 0 and at <= width]
    return max(inside, key=lambda at: (-depths[at], at)) if inside else None
