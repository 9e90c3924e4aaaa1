"""The circuit as drawn: what `read` returns and every other room takes.

All values are SI (volt, ampere, ohm, farad, second).  Every value is a
`Spread`: nominal, least and most.  Nothing in here knows how to solve.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from porter.findings import Finding, Position

PartKind = Literal["resistor", "capacitor", "led", "diode", "load"]
Family = str
Hazard = Literal["stop", "interlock", "heater", "motion"]
RAILS = ("vcc", "gnd")
#: Order of the timer's pins wherever they are listed.
PINS = ("trigger", "threshold", "reset", "output", "control", "discharge")

#: The rows of the parity ledger, which ``accept`` may name.
LEDGER_ROWS = (
    "held-table",
    "priority",
    "release-order",
    "power-on",
    "shortest-press",
    "re-arm-after-tap",
    "re-arm-after-hold",
    "stray-gap",
    "timed-output",
    "output-chatter",
    "supply-extremes",
    "supply-loss",
    "output-level",
    "start-up-time",
)


@dataclass(frozen=True, slots=True)
class Spread:
    """A value with the range that the drawing allows; ``least <= nominal <= most``."""

    nominal: float
    least: float
    most: float

    @staticmethod
    def exact(value: float) -> "Spread":
        """Return *value* without tolerance."""
        return Spread(value, value, value)

    @property
    def toleranced(self) -> bool:
        """True where the least and the most differ."""
        return self.least != self.most


@dataclass(frozen=True, slots=True)
class Leak:
    """Leakage across a part: a current (A) or a resistance (ohm); one of them is None."""

    current: Spread | None
    resistance: Spread | None


@dataclass(frozen=True, slots=True)
class Part:
    """A two-terminal part.

    Args:
        name: as in the spec.
        kind: what it is; for a ``load`` exactly one of `value` (ohm) and `current` (A) counts.
        nodes: the two nodes; anode and cathode for ``led`` and ``diode``; a load current
            flows from the first to the second.
        value: ohm, farad, or forward voltage in volt.
        slope: slope resistance of an LED or diode, ohm.
        leak: leakage of a capacitor, if given.
        current: the current of a ``load`` given in ampere.
        relay: True where a load is marked as the coil of a relay (``coil: true``).
        text: the value as written, for reports.
        position: of the value.
    """

    name: str
    kind: PartKind
    nodes: tuple[str, str]
    value: Spread
    slope: Spread | None
    leak: Leak | None
    current: Spread | None
    relay: bool
    text: str
    position: Position


@dataclass(frozen=True, slots=True)
class Button:
    """A contact that a person works.

    Args:
        normally: ``open`` closes when pressed; ``closed`` opens when pressed.
        resistance: of the closed contact, ohm.
        leak: resistance across the open contact (ohm), None = perfect.
        bounce_s: longest total contact bounce, seconds, None = not stated.
        hazard: set where the spec marks the button as a stop, interlock, heater or motion control.
    """

    name: str
    nodes: tuple[str, str]
    normally: Literal["open", "closed"]
    resistance: Spread
    leak: Spread | None
    bounce_s: float | None
    hazard: Hazard | None
    position: Position


@dataclass(frozen=True, slots=True)
class Timer:
    """The timer chip: its family, which node each connected pin is on, and overridden figures."""

    family: Family
    pins: Mapping[str, str]
    values: Mapping[str, Spread]
    position: Position
    pin_positions: Mapping[str, Position]
    value_positions: Mapping[str, Position]


@dataclass(frozen=True, slots=True)
class Output:
    """A named output: ``lit`` names an LED; ``high`` and ``low`` name a node."""

    name: str
    kind: Literal["lit", "high", "low"]
    target: str
    hazard: Hazard | None
    position: Position


@dataclass(frozen=True, slots=True)
class Intent:
    """One line of what the designer means.

    Exactly one of `held` (all held together), `release` (all held, then released in this
    order) and `power_on` is used; `output` is what the timer's output should be.
    """

    kind: Literal["held", "release", "power_on"]
    buttons: tuple[str, ...]
    output: Literal["low", "high"]
    position: Position


@dataclass(frozen=True, slots=True)
class PortWishes:
    """What the user wants of the port; None = porter chooses."""

    supply: Spread
    tick_s: float | None
    clock: float  # relative tolerance of the controller's clock, 0.02 = ±2 %
    style: Literal["auto", "count", "charge"]
    power_on: Literal["low", "high"] | None
    pin_drive_a: float
    position: Position


@dataclass(frozen=True, slots=True)
class Acceptance:
    """A deviation taken on purpose: the ledger row, the reason, and optionally the values accepted.

    `circuit` and `port` are the ledger's texts at the time of acceptance (None = not recorded).
    """

    row: str
    because: str
    circuit: str | None
    port: str | None
    position: Position


@dataclass(frozen=True, slots=True)
class Circuit:
    """A spec, read and checked.

    Args:
        name: the spec file's stem as an identifier (``lamp_latch``).
        title: the ``circuit`` line.
        file: the spec's file name without its folder.
        source: the spec's text, for rendering findings and hashing.
        nodes: all node names but the rails, in order of first mention.
        positions: dotted path of a spec item (``parts.R1``, ``port.tick``) to its place.
        warnings: what the reader found odd but usable, by position.
    """

    name: str
    title: str
    file: str
    source: str
    supply: Spread
    supply_position: Position
    timer: Timer
    parts: tuple[Part, ...]
    buttons: tuple[Button, ...]
    outputs: tuple[Output, ...]
    intent: tuple[Intent, ...]
    port: PortWishes
    accept: tuple[Acceptance, ...]
    nodes: tuple[str, ...]
    positions: Mapping[str, Position] = field(default_factory=dict)
    warnings: tuple[Finding, ...] = ()
