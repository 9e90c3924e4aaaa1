"""Where findings are collected while a spec is read.

Every getter notes what is wrong and then returns a harmless stand-in, so that
one run finds everything; a spec with an error is never used further.
"""

import re
from collections.abc import Callable, Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from difflib import get_close_matches

from porter.findings import Finding, Position
from porter.spec.model import Spread
from porter.spec.tree import Entry, Node, Refused, Row, Scalar, Table
from porter.spec.units import TOLERANCE, Kind, QuantityError, relative, spread, three

NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
NODE = re.compile(r"[A-Za-z0-9_][A-Za-z0-9_+\-]*")
MAX_NAME = 40
MAX_VALUE = 80
MAX_TEXT = 500

_WHAT = {Scalar: "a single value", Row: "a list", Table: "a mapping"}


def near(word: str, known: Iterable[str]) -> str:
    """Return the known word nearest to *word* regardless of case, or an empty text."""
    by_lower = {k.lower(): k for k in known}
    found = get_close_matches(word.lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[found[0]] if found else ""


def short(word: str) -> str:
    """Return *word* for a message, cut where it is far too long, on one line."""
    flat = " ".join(word.split())
    return flat if len(flat) <= MAX_NAME else flat[:MAX_NAME] + "…"


def listing(words: Iterable[str]) -> str:
    """Return words as ``a, b or c``."""
    *most, last = [f"`{w}`" for w in words] or ["nothing"]
    return f"{', '.join(most)} or {last}" if most else last


def did_you_mean(word: str, known: Collection[str]) -> str:
    """Return the mend for an unknown word."""
    if not known:
        return "there is nothing of the kind in this spec"
    guess = near(word, known) if len(word) <= MAX_NAME else ""
    if guess:
        return f"did you mean `{guess}`?"
    return f"use {listing(known)}" if len(known) <= 12 else "check the spelling"


@dataclass(slots=True)
class Desk:
    """The findings and positions of one run."""

    file: str
    findings: list[Finding] = field(default_factory=list)
    positions: dict[str, Position] = field(default_factory=dict)

    def error(self, rule: str, where: Position, message: str, mend: str) -> None:
        """Note an error."""
        self.findings.append(Finding(rule, "error", where, message, mend))

    def warn(self, rule: str, where: Position, message: str, mend: str) -> None:
        """Note a warning."""
        self.findings.append(Finding(rule, "warning", where, message, mend))

    @property
    def failed(self) -> bool:
        """True once an error was noted."""
        return any(f.severity == "error" for f in self.findings)

    # --- shapes -------------------------------------------------------------------------

    def _wrong_kind(self, node: Node, wanted: str, example: str) -> None:
        if isinstance(node, Refused):
            return
        if isinstance(node, Scalar) and node.plain and node.text in ("", "~", "null"):
            self.error("value-missing", node.position, f"{wanted} is missing here", f"write {example}")
            return
        message = f"{wanted} is needed here, not {_WHAT[type(node)]}"
        self.error("wrong-kind", node.position, message, f"write {example}")

    def table(self, node: Node, wanted: str, example: str) -> dict[str, Entry]:
        """Return the entries of a mapping, empty where it isn't one."""
        if isinstance(node, Table):
            return dict(node.entries)
        self._wrong_kind(node, wanted, example)
        return {}

    def row(self, node: Node, wanted: str, example: str) -> Sequence[Node]:
        """Return the items of a list, empty where it isn't one."""
        if isinstance(node, Row):
            return node.items
        self._wrong_kind(node, wanted, example)
        return ()

    def fields(
        self, node: Node, path: str | None, known: Collection[str], needed: Sequence[str], example: str
    ) -> dict[str, Node]:
        """Return the values of a mapping with a fixed set of keys.

        Args:
            node: the mapping; path: its dotted path, for `positions`; None = not kept.
            known: keys it may have; needed: keys it must have.
            example: what such a mapping looks like, for hints.
        """
        entries = self.table(node, "a mapping", example)
        strangers = [entry.key for name, entry in entries.items() if name not in known]
        for key in strangers:
            self._unknown_key(key, known)
        if path is not None:
            for name, entry in entries.items():
                self.remember(f"{path}.{name}" if path else name, entry)
        if isinstance(node, Table):
            meant = {near(key.text, known) for key in strangers if len(key.text) <= MAX_NAME}
            self._missing(
                node, [name for name in needed if name not in entries and name not in meant], example
            )
        return {name: entry.value for name, entry in entries.items() if name in known}

    def _missing(self, node: Table, names: Sequence[str], example: str) -> None:
        place = Position(node.position.file, node.position.line, node.position.column)
        for name in names:
            self.error("key-missing", place, f"`{name}` is missing", f"add it, as in {example}")

    def _unknown_key(self, key: Scalar, known: Collection[str]) -> None:
        word = short(key.text)
        if key.text == "<<":
            self.error(
                "alias-refused",
                key.position,
                "merge keys (`<<`) aren't used in a spec",
                "write the values out where they are used",
            )
        elif re.match(r"\d+\s?[fpnumkKM]?\b", key.text):
            self.error(
                "value-unreadable",
                key.position,
                f"the comma before `{word}` ends the value",
                "write decimals with a point, as in `4.7k`",
            )
        else:
            self.error(
                "key-unknown", key.position, f"`{word}` isn't a key here", did_you_mean(key.text, known)
            )

    def remember(self, path: str, entry: Entry) -> None:
        """Keep the place of an item: the value where it is a single one, else the key."""
        single = isinstance(entry.value, Scalar) and entry.value.text != ""
        self.positions[path] = entry.value.position if single else entry.key.position

    # --- single values ------------------------------------------------------------------

    def text(self, node: Node, wanted: str, example: str) -> str:
        """Return a text that isn't empty; an empty text where there is none."""
        if isinstance(node, Scalar) and len(node.text) > MAX_TEXT:
            self.error(
                "text-too-long",
                node.position,
                f"{wanted} of {len(node.text)} characters",
                f"shorten it to {MAX_TEXT} at most",
            )
            return ""
        if isinstance(node, Scalar) and node.text.strip() and not (node.plain and node.text in ("~", "null")):
            return node.text.strip()
        if isinstance(node, Scalar) and not node.plain:
            self.error("value-missing", node.position, f"{wanted} is empty", f"write {example}")
            return ""
        self._wrong_kind(node, wanted, example)
        return ""

    def name(self, node: Node, wanted: str, pattern: re.Pattern[str] = NAME) -> str:
        """Return a usable name; an empty text where there is none."""
        found = self.text(node, wanted, "a name, such as `SET`")
        if found and not self.name_fits(found, node.position, wanted, pattern):
            return ""
        return found

    def name_fits(self, name: str, where: Position, wanted: str, pattern: re.Pattern[str] = NAME) -> bool:
        """Note a name that can't be used; True where it can."""
        if pattern.fullmatch(name) and len(name) <= MAX_NAME:
            return True
        shown = short(name)
        starts = "a letter or `_`" if pattern is NAME else "a letter or a digit"
        self.error(
            "name-unusable",
            where,
            f"`{shown}` can't be {wanted}",
            f"use letters a-z, digits and `_`, beginning with {starts}, {MAX_NAME} at most",
        )
        return False

    def choice(self, node: Node, wanted: str, known: Collection[str], default: str) -> str:
        """Return one of the *known* words, *default* where it is none of them."""
        found = self.text(node, wanted, f"{listing(known)}")
        if found in known:
            return found
        if found:
            self.error(
                "choice-unknown",
                node.position,
                f"`{short(found)}` isn't {wanted}",
                did_you_mean(found, known),
            )
        return default

    def boolean(self, node: Node) -> bool:
        """Return ``true`` or ``false``."""
        return self.choice(node, "true or false", ("true", "false"), "false") == "true"

    # --- quantities ---------------------------------------------------------------------

    def quantity(self, node: Node, kind: Kind) -> Spread:
        """Return a value with its spread; 1 where it can't be read."""
        if isinstance(node, Table):
            return self._three(node, kind)
        found = self.value(node, kind)
        return self._guard({"": node.position}, lambda: spread(found, kind)) if found else Spread.exact(1.0)

    def _three(self, node: Table, kind: Kind) -> Spread:
        keys = ("nominal", "least", "most")
        example = "`{nominal: 3.33 V, least: 2.4 V, most: 4.2 V}`"
        found = self.fields(node, None, keys, ("nominal",), example)
        texts = {key: self.value(value, kind) for key, value in found.items()}
        if "nominal" not in texts or not all(texts.values()):
            return Spread.exact(1.0)
        places = {"": node.position} | {key: value.position for key, value in found.items()}
        return self._guard(places, lambda: three(texts, kind))

    def value(self, node: Node, kind: Kind) -> str:
        """Return the text of a value; an empty text where there is none, or far too much."""
        found = self.text(node, kind.noun, f"`{kind.example}`")
        if len(found) > MAX_VALUE:
            self.error(
                "text-too-long",
                node.position,
                f"{len(found)} characters can't be {kind.noun}",
                f"write it like `{kind.example}`",
            )
            return ""
        return found

    def _guard(self, where: Mapping[str, Position], read: Callable[[], Spread]) -> Spread:
        """Return what *read* returns; its complaint is noted at the part of the value that it is about."""
        try:
            return read()
        except QuantityError as error:
            self.error(error.rule, where[error.part], error.message, error.mend)
            return Spread.exact(1.0)

    def tolerance(self, node: Node) -> float:
        """Return a relative tolerance as a fraction."""
        found = self.value(node, TOLERANCE)
        if not found:
            return 0.0
        return self._guard({"": node.position}, lambda: Spread.exact(relative(found))).nominal
