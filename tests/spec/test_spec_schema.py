"""The JSON Schema takes what the reader takes, and knows the same keys."""

from functools import cache
from pathlib import Path
from typing import Any

import jsonschema
import pytest
import yaml

from porter.spec import read as reader
from porter.spec.model import LEDGER_ROWS, PINS
from porter.spec.schema import schema

ROOT = Path(__file__).parents[2]
SPECS = sorted((ROOT / "specs").glob("*.yaml"))
BAD = ROOT / "tests" / "bad"


def as_editor_reads(path: Path) -> Any:
    """Return a spec as texts, with true and false as booleans (YAML 1.2's core schema but for numbers)."""

    def convert(node: Any) -> Any:
        if isinstance(node, dict):
            return {key: convert(value) for key, value in node.items()}
        if isinstance(node, list):
            return [convert(item) for item in node]
        return {"true": True, "false": False}.get(node, node)

    return convert(yaml.load(path.read_text("utf-8"), yaml.BaseLoader))


@cache
def validator() -> jsonschema.Draft202012Validator:
    return jsonschema.Draft202012Validator(schema())


def keys(name: str) -> set[str]:
    return set(schema()["$defs"][name]["properties"])


def test_schema_is_a_schema() -> None:
    """It meets the meta-schema of JSON Schema 2020-12."""
    jsonschema.Draft202012Validator.check_schema(schema())

    assert schema()["$schema"] == "https://json-schema.org/draft/2020-12/schema"


@pytest.mark.parametrize("path", SPECS, ids=lambda p: p.stem)
def test_shipped_specs_fit(path: Path) -> None:
    """Every shipped spec validates."""
    validator().validate(as_editor_reads(path))


@pytest.mark.parametrize(
    "name",
    [
        *("key-unknown_familly", "key-missing_supply", "choice-unknown_family", "choice-unknown_row"),
        *("too-many_buttons", "part-kind_none", "part-kind_two", "output-form_two", "intent-form_two"),
        *("between-not-two_three", "wrong-kind_list", "no-buttons_empty", "name-unusable_space"),
        *("value-missing_held", "two-timers_list"),
    ],
)
def test_bad_shapes_do_not_fit(name: str) -> None:
    """What the reader refuses for its shape, an editor marks too."""
    assert not validator().is_valid(as_editor_reads(BAD / f"{name}.yaml"))


def test_schema_and_reader_know_the_same_keys() -> None:
    """No key is known to one and not to the other."""
    assert set(reader.TOP_KEYS) == set(schema()["properties"])
    assert set(reader.TIMER_KEYS) == keys("Timer")
    assert set(PINS) == keys("Pins")
    assert set(reader.VALUE_KINDS) == keys("Values")
    assert set(reader.BUTTON_KEYS) == keys("Button")
    assert set(reader.OUTPUT_KEYS) == keys("Lit") | keys("HighNode") | keys("LowNode")
    assert set(reader.INTENT_KEYS) == keys("Held") | keys("Release") | keys("PowerOn")
    assert set(reader.PORT_KEYS) == keys("Port")
    assert set(reader.ACCEPT_KEYS) == keys("Accept")
    assert list(LEDGER_ROWS) == schema()["$defs"]["Accept"]["properties"]["row"]["enum"]


@pytest.mark.parametrize("kind", reader.PART_KINDS)
def test_parts_have_the_same_extras(kind: str) -> None:
    """Each kind of part takes the same keys in both."""
    assert {kind, "between", *reader.PART_EXTRAS[kind]} == keys(kind.capitalize())


def test_every_mapping_is_closed() -> None:
    """No definition lets unknown keys through."""
    for name, definition in schema()["$defs"].items():
        if definition.get("type") == "object":
            assert definition["additionalProperties"] is False, name


def test_figures_are_those_of_the_family_room() -> None:
    """The reader lets exactly those figures be overridden that the solver uses."""
    from porter.circuit.family import KEYS

    assert set(KEYS) == set(reader.VALUE_KINDS)
