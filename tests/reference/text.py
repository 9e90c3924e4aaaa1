"""Write a `Net` as the text of a spec, so that the package's reader is under test as well."""

from __future__ import annotations

from tests.reference.network import Net


def spec_text(net: Net, title: str = "Checked circuit") -> str:
    """Return the YAML spec of *net*, every figure of the timer overridden and without tolerance."""
    lines = [f"circuit: {title}", f"supply: {_plain(net.supply)} V", "timer:", f"  family: {net.chip.family}"]
    pins = ", ".join(f"{pin}: {node}" for pin, node in net.chip.pins.items())
    values = ", ".join(f"{k}: {_plain(v)}" for k, v in net.chip.figures.items())
    lines += [f"  pins: {{{pins}}}", f"  values: {{{values}}}", "parts:", *_parts(net), "buttons:"]
    for name, c in net.contacts.items():
        leak = f", leak: {_plain(c.leak)}" if c.leak else ""
        ends = f"between: [{c.nodes[0]}, {c.nodes[1]}]"
        lines.append(
            f"  {name}: {{{ends}, normally: {c.normally}, resistance: {_plain(c.resistance)}{leak}}}"
        )
    return "\n".join(lines) + "\n"


def _parts(net: Net) -> list[str]:
    rows = [(f"R{k}: {{resistor: {_plain(v)}", a, b) for k, (a, b, v) in enumerate(net.resistors)]
    rows += [(f"C{k}: {{capacitor: {_plain(v)}", a, b) for k, (a, b, v) in enumerate(net.capacitors)]
    rows += [(f"I{k}: {{load: {_plain(v)} A", a, b) for k, (a, b, v) in enumerate(net.currents)]
    rows += [
        (f"D{k}: {{led: {_plain(v)} V, slope: {_plain(r)}", a, b) for k, (a, b, v, r) in enumerate(net.diodes)
    ]
    return [f"  {head}, between: [{a}, {b}]}}" for head, a, b in rows]


def _plain(value: float) -> str:
    """Return *value* exactly, without an exponent wherever that is short."""
    text = repr(value)
    return f"{value:.30f}".rstrip("0").rstrip(".") if "e" in text and value < 1 else text
