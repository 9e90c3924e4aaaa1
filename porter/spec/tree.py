"""YAML text to a tree of texts with exact positions; YAML guesses no types here.

PyYAML's composer is used for the syntax only: every scalar stays the text that
was written, so ``NO``, ``1e-6``, ``12:30`` and ``010`` reach the reader as they stand.
Anchors, aliases and tags are refused: a spec says each thing once, in plain sight.
"""

import re
import unicodedata
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import yaml

from porter.findings import Finding, Position, SpecError

MAX_BYTES = 256 * 1024
MAX_DEPTH = 12  # the deepest path of a spec is five levels

#: Characters that make a terminal or an editor show a text in another order than it is written.
_OVERRIDES = "\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069"
_LINE_BREAK = re.compile("\r\n|[\n\r\x85\u2028\u2029]")


def split_lines(text: str) -> list[str]:
    """Return the lines of *text*, broken where YAML counts a line break."""
    return _LINE_BREAK.split(text)


@dataclass(frozen=True, slots=True)
class Scalar:
    """A text; `plain` is False where it was quoted or a block."""

    text: str
    plain: bool
    position: Position


@dataclass(frozen=True, slots=True)
class Row:
    """A list."""

    items: tuple["Node", ...]
    position: Position


@dataclass(frozen=True, slots=True)
class Entry:
    """One ``key: value`` of a table."""

    key: Scalar
    value: "Node"


@dataclass(frozen=True, slots=True)
class Table:
    """A mapping; of repeated keys only the first is here, the others are findings."""

    entries: Mapping[str, Entry]
    position: Position


@dataclass(frozen=True, slots=True)
class Refused:
    """Where something stood that was already reported; nothing more is said about it."""

    position: Position


Node = Scalar | Row | Table | Refused


class _Loader(yaml.SafeLoader):
    """The composer, with a limit on depth, and with anchors, aliases and tags refused."""

    def __init__(self, text: str) -> None:
        super().__init__(text)
        self.depth = 0
        self.refused: list[tuple[str, yaml.Event]] = []

    def compose_node(self, parent: yaml.Node | None, index: int) -> yaml.Node | None:
        event: Any = self.peek_event()  # type: ignore[no-untyped-call]
        if isinstance(event, yaml.AliasEvent):
            self.get_event()  # type: ignore[no-untyped-call]
            return self._refuse("alias-refused", event)
        if event.anchor is not None:
            self._refuse("alias-refused", event)
            event.anchor = None
        if event.tag is not None:
            self._refuse("tag-refused", event)
            event.tag = None
        if self.depth == MAX_DEPTH:
            raise _TooDeep(None, None, "nested too deep", event.start_mark)
        self.depth += 1
        node: yaml.Node | None = super().compose_node(parent, index)
        self.depth -= 1
        return node

    def _refuse(self, rule: str, event: yaml.Event) -> yaml.Node:
        self.refused.append((rule, event))
        return yaml.ScalarNode("!refused", "", _py(event.start_mark), _py(event.end_mark))


def _py(mark: object) -> yaml.Mark:
    """Return a mark of the pure Python loader, the only one used here (for the type checker)."""
    assert isinstance(mark, yaml.Mark)
    return mark


class _TooDeep(yaml.MarkedYAMLError):
    """Raised by the composer at the depth limit."""


class _SecondDocument(yaml.MarkedYAMLError):
    """Raised where a second document begins."""


_REFUSALS = {
    "alias-refused": (
        "anchors and aliases (`&name`, `*name`) aren't used in a spec",
        "write the value out where it is used",
    ),
    "tag-refused": ("tags (`!name`) aren't used in a spec", "leave the tag out; every value is text here"),
}


class Tree:
    """Turns PyYAML's nodes into ours and collects findings on the way."""

    def __init__(self, file: str, source: str) -> None:
        self.file = file
        self.lines = split_lines(source)
        self.findings: list[Finding] = []

    def error(self, rule: str, position: Position, message: str, mend: str) -> None:
        """Note an error."""
        self.findings.append(Finding(rule, "error", position, message, mend))

    def span(self, start: yaml.Mark, end: yaml.Mark) -> Position:
        """Return the place from *start* to *end*, cut at the end of its first line."""
        line = self.lines[start.line] if start.line < len(self.lines) else ""
        stop = end.column if end.line == start.line else len(line.rstrip())
        return Position(self.file, start.line + 1, start.column + 1, max(1, stop - start.column))

    def node(self, raw: yaml.Node) -> Node:
        """Return *raw* as one of ours."""
        place = self.span(raw.start_mark, raw.end_mark)
        if isinstance(raw, yaml.ScalarNode):
            if raw.tag == "!refused":
                return Refused(place)
            self._printable(raw.value, place)
            return Scalar(raw.value, raw.style is None, place)
        if isinstance(raw, yaml.SequenceNode):
            return Row(tuple(self.node(item) for item in raw.value), place)
        return self.table(raw, place)

    def _printable(self, text: str, place: Position) -> None:
        """Note control characters and direction overrides, which quoted escapes can smuggle in.

        They would reach terminals and the comments of generated code.
        """
        for character in text:
            if _hostile(character):
                self.error("control-character", place, _unprintable(ord(character)), "delete it")
                return

    def table(self, raw: yaml.Node, place: Position) -> Table:
        """Return a mapping node; repeated and unusable keys become findings."""
        entries: dict[str, Entry] = {}
        for raw_key, raw_value in raw.value:
            key, value = self.node(raw_key), self.node(raw_value)
            if not isinstance(key, Scalar):
                self._bad_key(key)
            elif key.text in entries:
                self._repeated(key, entries[key.text])
            else:
                entries[key.text] = Entry(key, value)
        return Table(entries, place)

    def _bad_key(self, key: Node) -> None:
        if not isinstance(key, Refused):
            self.error("key-not-name", key.position, "a key must be a name", "write `name: value`")

    def _repeated(self, key: Scalar, first: Entry) -> None:
        where = first.key.position
        if key.text == "timer" and where.column == 1:
            self.error(
                "two-timers",
                key.position,
                f"a second timer (the first is on line {where.line})",
                "porter ports one timer at a time: write one spec for each",
            )
            return
        self.error(
            "key-repeated",
            key.position,
            f"`{key.text[:40]}` was given before, on line {where.line}",
            "keep one of the two",
        )


def _compose(loader: _Loader) -> yaml.Node | None:
    if not loader.check_node():
        return None
    root: yaml.Node | None = loader.get_node()
    if loader.check_node():
        raise _SecondDocument(None, None, "second document", _py(loader.peek_event().start_mark))  # type: ignore[no-untyped-call]
    return root


def _syntax(error: yaml.MarkedYAMLError) -> tuple[str, str, str]:
    """Return rule, message and mend for an error of PyYAML's scanner or parser."""
    problem = error.problem or "unreadable"
    if isinstance(error, _TooDeep):
        return (
            "nested-too-deep",
            f"nested more than {MAX_DEPTH} levels deep",
            "a spec needs five levels at most",
        )
    if isinstance(error, _SecondDocument):
        return "several-documents", "a second document begins here", "one file holds one spec: drop the `---`"
    if r"'\t'" in problem:
        return "tab-indent", "a tab where YAML allows spaces only", "indent with spaces"
    context = f" {error.context}" if error.context else ""
    return "yaml-syntax", f"not YAML:{context} {problem}".replace("  ", " "), _syntax_mend(problem)


def _syntax_mend(problem: str) -> str:
    if "mapping values" in problem or "expected ',' or" in problem:
        return "check the commas and brackets, and put a text that contains `: ` in quotes"
    if "expected <block end>" in problem:
        return "check that the entries of one level begin in the same column"
    if "cannot start any token" in problem:
        return "put the value in quotes"
    return "check brackets, quotes and the space after `:`"


def _mark_position(file: str, mark: yaml.Mark | None) -> Position:
    return Position(file, mark.line + 1, mark.column + 1) if mark else Position(file, 1, 1)


def _first_unprintable(text: str, index: int, file: str) -> Position:
    before = split_lines(text[:index])
    return Position(file, len(before), len(before[-1]) + 1)


def _hostile(character: str) -> bool:
    if character in "\n\t":
        return False
    return character in _OVERRIDES or unicodedata.category(character) in ("Cc", "Cs")


def _unprintable(character: int) -> str:
    return f"character U+{character:04X} can't stand in a spec"


def _fail(finding: Finding, source: str, before: list[Finding]) -> SpecError:
    return SpecError(tuple(sorted([*before, finding], key=lambda f: f.position)), source)


def decode(data: bytes, file: str) -> str:
    """Return the text of a spec file.

    Raises:
        SpecError: larger than `MAX_BYTES`, or not UTF-8.
    """
    if len(data) > MAX_BYTES:
        message = f"the file has {len(data)} bytes, more than the {MAX_BYTES} that a spec may have"
        raise _fail(
            Finding("file-too-large", "error", Position(file, 1, 1), message, "check that this is a spec"),
            "",
            [],
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        good = data[: error.start].decode("utf-8-sig", "replace")
        place = _first_unprintable(good, len(good), file)
        message = f"byte 0x{data[error.start]:02X} isn't UTF-8"
        mend = "save the file as UTF-8 (older editors call it Unicode)"
        source = data.decode("utf-8-sig", "replace")
        raise _fail(Finding("not-utf8", "error", place, message, mend), source, []) from None


def load(text: str, file: str) -> tuple[Node | None, list[Finding]]:
    """Return the tree of *text* and what was found on the way; None for an empty file.

    Raises:
        SpecError: where no tree can be made (syntax, depth, several documents, unprintable characters).
    """
    try:
        loader = _Loader(text)
    except yaml.reader.ReaderError as error:
        place = _first_unprintable(text, error.position, file)
        character = ord(error.character) if isinstance(error.character, str) else error.character
        finding = Finding("control-character", "error", place, _unprintable(character), "delete it")
        raise _fail(finding, text, []) from None
    tree = Tree(file, text)
    try:
        root = _compose(loader)
    except yaml.MarkedYAMLError as error:
        rule, message, mend = _syntax(error)
        place = _mark_position(file, error.problem_mark or error.context_mark)
        raise _fail(
            Finding(rule, "error", place, message, mend), text, list(_refusals(loader, tree))
        ) from None
    except (ValueError, OverflowError):  # an escape such as "\UFFFFFFFF", a version with 5000 digits
        place = _mark_position(file, _py(loader.get_mark()))
        finding = Finding(
            "yaml-syntax",
            "error",
            place,
            "not YAML: a number here is out of range",
            "check the escapes in quoted texts",
        )
        raise _fail(finding, text, list(_refusals(loader, tree))) from None
    finally:
        loader.dispose()
    tree.findings.extend(_refusals(loader, tree))
    return (None if root is None else tree.node(root)), tree.findings


def _refusals(loader: _Loader, tree: Tree) -> Iterator[Finding]:
    for rule, event in loader.refused:
        message, mend = _REFUSALS[rule]
        yield Finding(rule, "error", _refused_span(tree, event), message, mend)


def _refused_span(tree: Tree, event: yaml.Event) -> Position:
    """Return the place of the anchor, alias or tag itself, not of the value after it."""
    start = tree.span(_py(event.start_mark), _py(event.end_mark))
    word = tree.lines[start.line - 1][start.column - 1 :].split(maxsplit=1)
    return Position(start.file, start.line, start.column, max(1, len(word[0].rstrip(",]}")) if word else 1))
