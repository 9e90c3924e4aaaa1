"""The section on the circuit as it was read."""

from porter.report.numbers import percent, quantity, seconds, spread
from porter.report.page import Block, Cell, Section, Table, Text, row, together
from porter.spec.model import PINS, Button, Circuit, Intent, Leak, Part, Spread

_UNITS = {"resistor": "ohm", "capacitor": "F", "led": "V", "diode": "V", "load": "ohm"}
_RATIOS = ("trigger_ratio", "threshold_ratio")
_FIGURE_UNITS = {"current": "A", "resistance": "ohm", "divider": "ohm", "pulse": "s"}


def circuit_section(circuit: Circuit) -> Section:
    """Return parts, buttons, timer, outputs and intent as tables."""
    blocks: list[Block] = [
        Text("Check these tables against the drawing and the product: everything below rests on them."),
        _parts(circuit),
        _buttons(circuit),
        _pins(circuit),
        _outputs(circuit),
        _nodes(circuit),
    ]
    if circuit.timer.values:
        blocks.append(_figures(circuit))
    if circuit.intent:
        blocks.append(_intent(circuit))
    return Section("circuit", "The circuit as read", tuple(blocks))


def _parts(circuit: Circuit) -> Table:
    rows = tuple(
        row(p.name, p.kind, Cell(p.text, code=True), part_value(p), _between(p.nodes), _extras(p))
        for p in circuit.parts
    )
    heads = ("Part", "Kind", "As written", "Value (least to most)", "Between", "Also")
    return Table("Parts", heads, rows, "No parts.")


def part_value(part: Part) -> str:
    """Return a part's value with its range and unit."""
    if part.current is not None:
        return spread(part.current, "A")
    return spread(part.value, _UNITS[part.kind])


def _extras(part: Part) -> str:
    said = []
    if part.slope is not None:
        said.append(f"slope {spread(part.slope, 'ohm')}")
    if part.leak is not None:
        said.append(f"leakage {_leak(part.leak)}")
    if part.relay:
        said.append("relay coil")
    return ", ".join(said) or "–"


def _leak(leak: Leak) -> str:
    if leak.current is not None:
        return spread(leak.current, "A")
    return spread(leak.resistance, "ohm") if leak.resistance is not None else "–"


def _between(nodes: tuple[str, str]) -> str:
    return f"{nodes[0]} and {nodes[1]}"


def _buttons(circuit: Circuit) -> Table:
    heads = ("Button", "Contact", "Between", "Closed", "Open", "Bounce", "Hazard")
    return Table("Buttons", heads, tuple(map(_button, circuit.buttons)), "No buttons.")


def _button(button: Button) -> tuple[Cell, ...]:
    leak = spread(button.leak, "ohm") if button.leak is not None else "perfect"
    bounce = seconds(button.bounce_s) if button.bounce_s is not None else "not stated"
    hazard = Cell(button.hazard, "bad") if button.hazard else Cell("not marked")
    contact = f"normally {button.normally}"
    return row(
        button.name, contact, _between(button.nodes), spread(button.resistance, "ohm"), leak, bounce, hazard
    )


def _pins(circuit: Circuit) -> Table:
    rows = tuple(row(pin, circuit.timer.pins.get(pin, "not connected")) for pin in PINS)
    return Table(f"Timer pins ({circuit.timer.family} family)", ("Pin", "Node"), rows)


def _outputs(circuit: Circuit) -> Table:
    says = {"lit": "LED {} is lit", "high": "node {} is high", "low": "node {} is low"}
    rows = tuple(
        row(o.name, says[o.kind].format(o.target), Cell(o.hazard, "bad") if o.hazard else Cell("not marked"))
        for o in circuit.outputs
    )
    return Table("Outputs", ("Output", "Active when", "Hazard"), rows, "No outputs.")


def _nodes(circuit: Circuit) -> Table:
    ends = [(n, f"timer {pin}") for pin, n in circuit.timer.pins.items()]
    ends += [(n, part.name) for part in circuit.parts for n in part.nodes]
    ends += [(n, button.name) for button in circuit.buttons for n in button.nodes]
    names = ("vcc", "gnd", *circuit.nodes)
    rows = tuple(row(name, ", ".join(e for n, e in ends if n == name) or "nothing") for name in names)
    return Table("Connections, node by node", ("Node", "Connected to"), rows)


def _figures(circuit: Circuit) -> Table:
    rows = tuple(
        row(key.replace("_", " "), timer_figure(key, value)) for key, value in circuit.timer.values.items()
    )
    return Table("Timer figures given in the spec", ("Figure", "Value (least to most)"), rows)


def timer_figure(key: str, value: Spread) -> str:
    """Return one of the timer's overridden figures in its unit."""
    if key in _RATIOS:
        return f"{_ratio(value)} of the supply"
    unit = next((u for word, u in _FIGURE_UNITS.items() if word in key), "V")
    return spread(value, unit)


def _ratio(value: Spread) -> str:
    nominal = f"{value.nominal:.4g}"
    return f"{nominal} ({value.least:.4g} to {value.most:.4g})" if value.toleranced else nominal


def _intent(circuit: Circuit) -> Table:
    rows = tuple(row(_situation(item), item.output) for item in circuit.intent)
    return Table("What the designer means", ("Situation", "Output"), rows)


def _situation(intent: Intent) -> str:
    if intent.kind == "power_on":
        return "supply comes up"
    if intent.kind == "held":
        return f"held: {together(intent.buttons)}"
    return f"all of {together(intent.buttons)} held, then released in the order {', '.join(intent.buttons)}"


def wishes_table(circuit: Circuit) -> Table:
    """Return what the spec asks of the port."""
    port = circuit.port
    rows = (
        row("supply", spread(port.supply, "V")),
        row("tick", seconds(port.tick_s) if port.tick_s is not None else "left to porter"),
        row("clock", f"±{percent(port.clock)}"),
        row("style", port.style),
        row("power-on", port.power_on or "as the circuit"),
        row("drive of a pin", quantity(port.pin_drive_a, "A")),
    )
    return Table("What the spec asks of the port", ("Item", "Value"), rows)
