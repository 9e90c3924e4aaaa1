"""Every rule that reading a spec may find broken, with what it is about."""

from collections.abc import Mapping
from typing import Final

RULES: Final[Mapping[str, str]] = {
    # the file
    "file-unreadable": "the file can't be opened",
    "file-too-large": "the file is far larger than any spec",
    "not-utf8": "the file isn't UTF-8",
    "control-character": "a character that terminals and generated code must not see",
    "spec-empty": "there is nothing in the file",
    # YAML
    "yaml-syntax": "the text isn't YAML",
    "tab-indent": "a tab where YAML allows spaces only",
    "several-documents": "more than one document in the file",
    "nested-too-deep": "nested deeper than any spec",
    "alias-refused": "an anchor, an alias or a merge key",
    "tag-refused": "a tag",
    "key-not-name": "a list or a mapping as a key",
    "key-repeated": "the same key twice in one mapping",
    # shapes
    "wrong-kind": "a list, a mapping or a value where another of them belongs",
    "value-missing": "nothing where a value belongs",
    "text-too-long": "a text longer than any that makes sense",
    "key-missing": "a key that must be there isn't",
    "key-unknown": "a key that has no meaning here",
    "choice-unknown": "a word that isn't one of those to choose from",
    "too-many": "more of something than can be handled",
    # values
    "value-unreadable": "a value that can't be read",
    "unit-mismatch": "a value with another unit than is needed",
    "value-out-of-range": "a value that is negative, zero, or beyond what such a part has",
    "tolerance-unusable": "a tolerance that can't be used",
    # the drawing
    "two-timers": "more than one timer",
    "output-on-rail": "the timer's output wired to a rail",
    "rail-misspelt": "a rail in the wrong case",
    "between-not-two": "not exactly two nodes",
    "between-same-node": "both ends on one node",
    "part-kind": "a part of no kind, or of two",
    "no-buttons": "a control without buttons",
    "ratios-crossed": "a trigger level above the threshold level",
    # names
    "name-unusable": "a name that can't be one",
    "name-repeated": "one name for two things",
    "name-unknown": "a name of nothing in the spec",
    # wishes
    "output-form": "not exactly one of lit, high and low",
    "intent-form": "a line of intent that doesn't say one thing",
    "intent-contradicts": "two wishes that can't both be met",
    "accept-repeated": "one row accepted twice",
    "reason-missing": "a deviation accepted without a reason",
    # warnings
    "node-touched-once": "a node with only one thing on it",
    "nodes-alike": "two nodes that differ by case only",
    "intent-repeated": "the same line of intent twice",
}
