"""The JSON Schema of a spec, so that editors complete and check as people type.

Made from pydantic models that stand for the shapes only; values are read by
`porter.spec.units` and agreement between sections by `porter.spec.cross`, which
no schema can say.  Import this module late: nothing else needs pydantic.
"""

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, StringConstraints, create_model
from pydantic.json_schema import SkipJsonSchema

from porter.spec import read as reader
from porter.spec.model import LEDGER_ROWS, PINS
from porter.spec.units import Kind

DIALECT = "https://json-schema.org/draft/2020-12/schema"

_UNITS = {"ohm": "ohms", "V": "volts", "A": "amperes", "F": "farads", "s": "seconds", "": "no unit"}
_FIGURES = {
    "high_drop": "supply less the unloaded high output",
    "high_resistance": "slope resistance of the high output",
    "low_level": "unloaded low output",
    "low_resistance": "slope resistance of the low output",
    "trigger_ratio": "trigger level as a part of the supply",
    "threshold_ratio": "threshold level as a part of the supply",
    "reset_level": "reset level, an absolute voltage",
    "trigger_current": "current out of the trigger pin",
    "threshold_current": "current into the threshold pin",
    "reset_current": "current out of the reset pin held at 0 V",
    "reset_high_current": "current into the reset pin held at the supply",
    "divider": "each of the three resistors of the internal divider",
    "discharge_resistance": "discharge switch when closed",
    "shortest_pulse": "shortest input pulse that the chip is sure to notice",
}


class Closed(BaseModel):
    """A mapping with no keys but its own."""

    model_config = ConfigDict(extra="forbid", use_attribute_docstrings=True)


class Three(Closed):
    """A value with its range: least <= nominal <= most."""

    nominal: str | float
    least: str | float | SkipJsonSchema[None] = None
    most: str | float | SkipJsonSchema[None] = None


Quantity = Annotated[
    str | float | Three,
    Field(
        description="a value such as 10k, 4k7, 0.1 µF, 12 V ±10%, 100n +80% -20%, or {nominal, least, most}"
    ),
]
Name = Annotated[str, StringConstraints(pattern="^[A-Za-z_][A-Za-z0-9_]*$", max_length=40)]
NodeName = Annotated[str, StringConstraints(pattern=r"^[A-Za-z0-9_][A-Za-z0-9_+\-]*$", max_length=40)] | int
Between = Annotated[
    list[NodeName], Field(min_length=2, max_length=2, description="the two nodes; vcc and gnd are the rails")
]
Level = Literal["low", "high"]
Hazard = Annotated[
    Literal["stop", "interlock", "heater", "motion"],
    Field(description="something that may hurt; the report then carries its cautions"),
]
Text = Annotated[str, Field(min_length=1, max_length=500)]
Given = SkipJsonSchema[None]


class Resistor(Closed):
    """A resistor."""

    resistor: Quantity
    between: Between


class Capacitor(Closed):
    """A capacitor; between the rails only it is decoupling."""

    capacitor: Quantity
    between: Between
    leak: Quantity | Given = None
    """Leakage: a current (2 uA) or a resistance (10M)."""


class Led(Closed):
    """An LED: forward voltage, anode first."""

    led: Quantity
    between: Between
    slope: Quantity | Given = None
    """Slope resistance, 10 ohm where nothing is said."""


class Diode(Closed):
    """A diode: forward voltage, anode first."""

    diode: Quantity
    between: Between
    slope: Quantity | Given = None
    """Slope resistance, 10 ohm where nothing is said."""


class Load(Closed):
    """What else draws current: a resistance (390 ohm), or a current (20 mA, first to second node)."""

    load: Quantity
    between: Between
    coil: bool | Given = None
    """True for the coil of a relay or valve, which needs a diode across it."""


class Button(Closed):
    """A contact that a person works."""

    between: Between
    normally: Literal["open", "closed"] | Given = None
    """What the contact is when nobody presses; open where nothing is said."""
    resistance: Quantity | Given = None
    """Of the closed contact, 100 milliohm where nothing is said."""
    bounce: Quantity | Given = None
    """Longest total contact bounce."""
    leak: Quantity | Given = None
    """Resistance across the open contact."""
    hazard: Hazard | Given = None


class Lit(Closed):
    """An output that is active while an LED is lit."""

    lit: Name
    hazard: Hazard | Given = None


class HighNode(Closed):
    """An output that is active while a node is high."""

    high: NodeName
    hazard: Hazard | Given = None


class LowNode(Closed):
    """An output that is active while a node is low."""

    low: NodeName
    hazard: Hazard | Given = None


class Held(Closed):
    """All of these held together lead to this level of the timer's output."""

    held: Annotated[list[Name], Field(min_length=1)]
    output: Level


class Release(Closed):
    """All of these held, then released in this order, lead to this level of the timer's output."""

    release: Annotated[list[Name], Field(min_length=1)]
    output: Level


class PowerOn(Closed):
    """The timer's output once the supply is on."""

    power_on: Level


class Port(Closed):
    """What is wanted of the port; everything has a default."""

    supply: Quantity | Given = None
    """The controller's supply; the circuit's own where that is 5.5 V at most, else 5 V."""
    tick: Quantity | Given = None
    """How often the firmware steps, or auto."""
    clock: Quantity | Given = None
    """Tolerance of the controller's clock, ±10% where nothing is said (a factory RC clock)."""
    style: Literal["auto", "count", "charge"] | Given = None
    """How the port keeps time: by counters, or by integer copies of the capacitors."""
    power_on: Level | Given = None
    """The output at power-on; needed where the circuit leaves it undetermined."""
    pin_drive: Quantity | Given = None
    """Current that a pin of the controller can drive, 10 mA where nothing is said."""


class Accept(Closed):
    """A deviation taken on purpose."""

    row: Annotated[str, Field(json_schema_extra={"enum": list(LEDGER_ROWS)})]
    because: Text
    """The reason; it goes into the change notice."""
    circuit: Text | Given = None
    """The ledger's text for the circuit when this was accepted."""
    port: Text | Given = None
    """The ledger's text for the port when this was accepted."""


def _values() -> type[BaseModel]:
    fields: dict[str, Any] = {
        key: (Quantity | Given, _figure(key, kind)) for key, kind in reader.VALUE_KINDS.items()
    }
    return create_model("Values", __base__=Closed, **fields)


def _figure(key: str, kind: Kind) -> Any:
    return Field(default=None, description=f"{_FIGURES[key]}, in {_UNITS[kind.unit]}")


def _pins() -> type[BaseModel]:
    fields: dict[str, Any] = {
        pin: (NodeName | Given, Field(default=None, description="its node")) for pin in PINS
    }
    fields["output"] = (NodeName, Field(description="its node"))
    return create_model("Pins", __base__=Closed, **fields)


def _spec() -> type[BaseModel]:
    family = Annotated[str, Field(json_schema_extra={"enum": list(reader.families())})]
    fields: dict[str, Any] = {
        "family": (family, Field(description="whose published figures apply")),
        "pins": (_pins(), Field(description="the node of each connected pin")),
        "values": (_values() | Given, Field(default=None, description="figures of the fitted chip")),
    }
    timer = create_model("Timer", __base__=Closed, **fields)
    part = Resistor | Capacitor | Led | Diode | Load
    return create_model(
        "Spec",
        __base__=Closed,
        circuit=(Text, Field(description="the title")),
        supply=(Quantity, Field(description="the supply voltage, such as 12 V ±10%")),
        timer=(timer, Field(description="the timer chip")),
        parts=(
            dict[Name, part] | Given,
            Field(default=None, max_length=reader.MAX_PARTS, description="by name"),
        ),
        buttons=(
            dict[Name, Button],
            Field(min_length=1, max_length=reader.MAX_BUTTONS, description="by name"),
        ),
        outputs=(
            dict[Name, Lit | HighNode | LowNode] | Given,
            Field(
                default=None,
                max_length=reader.MAX_OUTPUTS,
                description="by name; the timer's output if left out",
            ),
        ),
        intent=(
            list[Held | Release | PowerOn] | Given,
            Field(default=None, description="what the designer means"),
        ),
        port=(Port | Given, Field(default=None, description="wishes for the port")),
        accept=(list[Accept] | Given, Field(default=None, description="deviations taken on purpose")),
    )


def schema() -> dict[str, Any]:
    """Return the JSON Schema (2020-12) of a spec, closed: no keys but the known ones."""
    raw = _spec().model_json_schema()
    head = {
        "$schema": DIALECT,
        "title": "porter spec",
        "description": "A latch around a timer chip, to be ported.",
    }
    raw.pop("title", None)
    return {**head, **_tidy(raw)}


def _tidy(node: Any) -> Any:
    """Return *node* without pydantic's titles for fields and its empty defaults, and with names closed."""
    if isinstance(node, list):
        return [_tidy(item) for item in node]
    if not isinstance(node, Mapping):
        return node
    kept = {key: value for key, value in node.items() if not _noise(key, value, node)}
    if "patternProperties" in kept:
        kept["additionalProperties"] = False  # names of another form are refused, not ignored
    return {key: _tidy(value) for key, value in kept.items()}


def _noise(key: str, value: Any, node: Mapping[str, Any]) -> bool:
    if key == "default":
        return value is None
    return key == "title" and isinstance(value, str) and "properties" not in node
