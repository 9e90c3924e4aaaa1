"""The interface sheet as values: what to wire to the controller, and why so."""

from dataclasses import dataclass
from typing import Literal

from porter.findings import Finding

#: The sheet's topics in their order.
TOPICS = (
    "Supply",
    "Inputs",
    "Outputs",
    "Undriven time",
    "Decoupling",
    "Current",
    "Parts",
    "Settings",
    "Pins",
)


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the sheet.

    Args:
        topic: one of `TOPICS`; item: button, output or part that it is about.
        what: what to fit, wire or set.
        why: the working with its numbers.
        source: where the figures come from; empty where the spec alone decides.
    """

    topic: str
    item: str
    what: str
    why: str
    source: str = ""


@dataclass(frozen=True, slots=True)
class Input:
    """A contact's network: resistor to the rail opposite, and at the pin.

    Args:
        to: the rail that the contact closes to, after the change.
        moved: its other wire goes to another node than in the drawing.
        pull_ohm: from the pin's side of the contact to the other rail; for a divider the lower resistor.
        top_ohm: the divider's upper resistor, 0 = no divider.
        contact_a: least current through the closed contact.
        level: level at the pin while the button is pressed.
    """

    button: str
    to: Literal["gnd", "vcc"]
    moved: bool
    pull_ohm: float
    top_ohm: float
    contact_a: float
    level: int


Stage = Literal["pin", "npn", "n-mosfet", "pnp", "npn-pnp", "npn-p-mosfet"]


@dataclass(frozen=True, slots=True)
class Driver:
    """What stands between a pin and a load.

    Args:
        stage: ``pin``: none; ``npn``, ``n-mosfet``: low side; ``pnp``: high side; ``npn-pnp`` and
            ``npn-p-mosfet``: high side on a supply above the pin's, or for a large load.
        resistor_ohm: in series with the load (``pin``) or into base or gate.
        pin_a: the most that the pin carries; load_a: the most that the load takes.
        active: level of the pin while the output is active.
        bias_ohm, bias_to: resistor that holds the pin while nothing drives it, and its rail.
        upper_ohm: resistor to base or gate of the upper transistor of the last two, else 0.
    """

    output: str
    stage: Stage
    resistor_ohm: float
    pin_a: float
    load_a: float
    active: int
    bias_ohm: float
    bias_to: Literal["gnd", "vcc"]
    upper_ohm: float = 0.0


@dataclass(frozen=True, slots=True)
class Sheet:
    """The whole sheet.

    Args:
        title: of the circuit; rows: by topic.
        inputs, drivers: the networks as numbers, in the spec's order; an output without a load has no driver.
        active: level of each output's pin while it is active.
        removed, added, kept: reference designators of the drawing; added: what to buy.
        findings: errors: ``pin-overloaded`` and ``level-not-met``.
        cautions: what the sheet doesn't know.
    """

    title: str
    rows: tuple[Row, ...]
    inputs: tuple[Input, ...]
    drivers: tuple[Driver, ...]
    active: tuple[int, ...]
    removed: tuple[str, ...]
    kept: tuple[str, ...]
    added: tuple[str, ...]
    findings: tuple[Finding, ...]
    cautions: tuple[str, ...]
