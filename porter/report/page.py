"""The pieces a page is made of: sections of blocks that hold finished text."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar, Literal

from markupsafe import Markup

Tone = Literal["", "good", "fair", "bad"]


@dataclass(frozen=True, slots=True)
class Cell:
    """A table cell; `tone` is shown by a mark and a word besides its colour, `code` by the typeface."""

    text: str
    tone: Tone = ""
    code: bool = False


@dataclass(frozen=True, slots=True)
class Table:
    """A table; the first cell of each row heads it. `empty` is said where there are no rows."""

    kind: ClassVar[str] = "table"
    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    empty: str = "None."


@dataclass(frozen=True, slots=True)
class Text:
    """A paragraph."""

    kind: ClassVar[str] = "text"
    text: str


@dataclass(frozen=True, slots=True)
class Items:
    """A list of sentences under a short heading."""

    kind: ClassVar[str] = "items"
    heading: str
    items: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Box:
    """A notice set apart: a heading, a paragraph and maybe a list."""

    kind: ClassVar[str] = "box"
    tone: Tone
    heading: str
    text: str
    items: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Note:
    """One finding: what is wrong, how to mend it and where it stands."""

    kind: ClassVar[str] = "note"
    tone: Tone
    heading: str
    rule: str
    message: str
    mend: str
    place: str


@dataclass(frozen=True, slots=True)
class Figure:
    """A drawing with its caption."""

    kind: ClassVar[str] = "figure"
    drawing: Markup
    caption: str


@dataclass(frozen=True, slots=True)
class Listing:
    """A file with line numbers."""

    kind: ClassVar[str] = "listing"
    name: str
    about: str
    lines: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Fold:
    """Blocks that are folded away on a screen and printed in full."""

    kind: ClassVar[str] = "fold"
    heading: str
    blocks: tuple["Block", ...]


Block = Table | Text | Items | Box | Note | Figure | Listing | Fold


@dataclass(frozen=True, slots=True)
class Section:
    """A numbered section; `key` is its anchor."""

    key: str
    title: str
    blocks: tuple[Block, ...]


def row(*cells: Cell | str) -> tuple[Cell, ...]:
    """Return a table row; plain text becomes a plain cell."""
    return tuple(cell if isinstance(cell, Cell) else Cell(cell) for cell in cells)


def together(names: Sequence[str]) -> str:
    """Return buttons held at once, such as ``SET + CLEAR``."""
    return " + ".join(names) if names else "nothing"


def listed(names: Sequence[str]) -> str:
    """Return ``A``, ``A and B`` or ``A, B and C``."""
    *first, last = names or ("none",)
    return f"{', '.join(first)} and {last}" if first else last


def sentence(text: str) -> str:
    """Return *text* with a capital letter and a full stop."""
    text = text.strip()
    return text[:1].upper() + text[1:] + ("" if text.endswith((".", "!", "?")) else ".") if text else ""
