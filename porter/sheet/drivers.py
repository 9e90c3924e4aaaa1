"""The stage between a pin and its load, and the resistor that holds it while nothing drives."""

from porter.findings import Finding
from porter.port.model import Port
from porter.sheet import figures as fig
from porter.sheet.contacts import ohm_text
from porter.sheet.loads import String, strings
from porter.sheet.model import Driver, Row, Stage
from porter.sheet.resistors import e24_at_least, e24_at_most, least, most
from porter.spec.model import Circuit, Output, Spread


def stage(circuit: Circuit, port: Port, at: int) -> tuple[Driver | None, list[Row], list[Finding]]:
    """Return an output's driver (None: the drawing shows no load), its lines, and what is wrong."""
    output = circuit.outputs[at]
    hung = _driven(circuit, output)
    safe = port.answer[port.start_q][0] >> at & 1
    if not hung:
        return None, _bare_rows(circuit, output, safe), []
    load = max(hung, key=lambda string: string.current(circuit.supply.most))
    total = sum(string.current(circuit.supply.most) for string in hung)
    driver = _direct(circuit, output, load, safe) if len(hung) == 1 else None
    driver = driver or _driver(circuit, output, load, total, safe)
    return driver, _rows(circuit, output, load, driver, safe), _overloaded(circuit, output, driver)


def _driven(circuit: Circuit, output: Output) -> tuple[String, ...]:
    """Return the loads that take current while an output is active."""
    found = strings(circuit, output)
    if output.kind == "lit":
        return found
    rail = "gnd" if output.kind == "high" else "vcc"
    return tuple(s for s in found if s.rail == rail)


# --- straight from the pin ---


def _direct(circuit: Circuit, output: Output, load: String, safe: int) -> Driver | None:
    """Drive an LED from the pin, where its current and voltage allow; None where they don't.

    The current is that of the drawing, so that the lamp is as bright as before, as far as the pin gives it.
    """
    supply = circuit.port.supply
    lamps = [p for p in load.parts if p.kind == "led"]
    wanted = load.current(circuit.supply.nominal, most=False)
    if not lamps or load.coil or load.current_a is not None:
        return None
    drop = pin_drop(wanted)
    if wanted > circuit.port.pin_drive_a or supply.least < load.drop_v + drop + 0.3:
        return None
    ohm = e24_at_least((supply.nominal - load.drop_v - drop) / wanted)
    most_a = (supply.most - sum(p.value.least for p in lamps)) / least(ohm)
    if most_a > circuit.port.pin_drive_a:
        return None
    sinks = load.rail == "vcc" and circuit.supply.most <= supply.most
    return _placed(output, "pin", ohm, most_a, most_a, int(not sinks), safe, fig.BIAS_OHM)


def pin_drop(amperes: float) -> float:
    """Return what a pin loses at a current: in proportion to its drop at 20 mA."""
    return fig.DROP_AT_20_MA.value * amperes / 20e-3


def _placed(
    output: Output,
    kind: Stage,
    ohm: float,
    pin_a: float,
    load_a: float,
    active: int,
    safe: int,
    bias: float,
    upper: float = 0.0,
) -> Driver:
    level = active if safe else 1 - active
    return Driver(output.name, kind, ohm, pin_a, load_a, active, bias, "vcc" if level else "gnd", upper)


# --- through a transistor ---


def _driver(circuit: Circuit, output: Output, load: String, load_a: float, safe: int) -> Driver:
    if load.rail == "gnd":
        return _high_side(circuit, output, load_a, safe)
    return _low_side(circuit, output, load_a, safe)


def _low_side(circuit: Circuit, output: Output, load_a: float, safe: int) -> Driver:
    supply, drive = circuit.port.supply, circuit.port.pin_drive_a
    ohm, pin_a = base_resistor(supply, load_a)
    if load_a <= fig.SMALL_TRANSISTOR_A and pin_a <= drive:
        return _placed(output, "npn", ohm, pin_a, load_a, 1, safe, fig.BIAS_OHM)
    pin_a = supply.most / least(fig.GATE_BIAS_OHM)
    return _placed(output, "n-mosfet", fig.GATE_OHM, pin_a, load_a, 1, safe, fig.GATE_BIAS_OHM)


def base_resistor(supply: Spread, load_a: float) -> tuple[float, float]:
    """Return the base resistor of a transistor for a load, and the most that the pin then carries.

    A tenth of the load's current flows even at the least supply; never less than 0.1 mA.
    """
    wanted = max(load_a / fig.FORCED_GAIN.value, 0.1e-3)
    across = max(supply.least - fig.BASE_MOST_V - pin_drop(wanted), 0.1)
    ohm = e24_at_most(across / wanted / most(1.0))
    return ohm, (supply.most - fig.BASE_LEAST_V) / least(ohm)


def _high_side(circuit: Circuit, output: Output, load_a: float, safe: int) -> Driver:
    own, supply, drive = circuit.supply, circuit.port.supply, circuit.port.pin_drive_a
    if own.most <= supply.most:
        ohm, pin_a = base_resistor(supply, load_a)
        if pin_a <= drive:
            return _placed(output, "pnp", ohm, pin_a, load_a, 0, safe, fig.BIAS_OHM)
    upper, upper_a = base_resistor(own, load_a)
    ohm, pin_a = base_resistor(supply, upper_a)
    if load_a > fig.SMALL_TRANSISTOR_A or pin_a > drive:
        ohm, pin_a = base_resistor(supply, own.most / least(fig.BIAS_OHM))
        bias, gate = fig.BIAS_OHM, fig.GATE_OHM
        return _placed(output, "npn-p-mosfet", ohm, pin_a, load_a, 1, safe, bias, gate)
    return _placed(output, "npn-pnp", ohm, pin_a, load_a, 1, safe, fig.BIAS_OHM, upper)


# --- words ---

_STAGE = {
    "pin": "straight from the pin",
    "npn": "NPN transistor on the low side",
    "n-mosfet": "logic-level N-channel MOSFET on the low side",
    "pnp": "PNP transistor on the high side",
    "npn-pnp": "NPN transistor that turns on a PNP on the high side",
    "npn-p-mosfet": "NPN transistor that turns on a P-channel MOSFET on the high side",
}


def _rows(circuit: Circuit, output: Output, load: String, driver: Driver, safe: int) -> list[Row]:
    names = " and ".join(p.name for p in load.parts)
    rows = [
        Row(
            "Outputs",
            output.name,
            f"{_STAGE[driver.stage]}: {_wiring(load, driver)}",
            _why(circuit, driver),
            _source(driver),
        ),
        Row(
            "Outputs",
            output.name,
            f"active is {'high' if driver.active else 'low'}: BOARD_ACTIVE {driver.active}",
            f"drives {names}",
        ),
    ]
    if load.coil:
        rows.append(_flyback(circuit, output, load))
    return [*rows, _bias(output, driver, safe)]


def _wiring(load: String, driver: Driver) -> str:
    first = load.parts[0].name
    if driver.stage == "pin":
        old = [p.name for p in load.parts if p.kind == "resistor"]
        instead = f" (in place of {', '.join(old)})" if old else ""
        rail = "ground" if driver.active else "the supply"
        return f"pin, {ohm_text(driver.resistor_ohm)}{instead}, {first}, {rail}"
    if driver.stage == "npn":
        return f"base through {ohm_text(driver.resistor_ohm)}, emitter to ground, load from the circuit's supply to the collector"
    if driver.stage == "n-mosfet":
        return f"gate through {ohm_text(driver.resistor_ohm)}, source to ground, load from the circuit's supply to the drain"
    if driver.stage == "pnp":
        return f"base through {ohm_text(driver.resistor_ohm)}, emitter to the supply, load from the collector to ground"
    upper, control, far = (
        ("PNP", "base", "collector") if driver.stage == "npn-pnp" else ("MOSFET", "gate", "drain")
    )
    return (
        f"NPN base through {ohm_text(driver.resistor_ohm)}; its collector pulls the {upper}'s {control} through "
        f"{ohm_text(driver.upper_ohm)}, 10 kohm from that {control} to the circuit's supply; load from the {upper}'s "
        f"{far} to ground"
    )


def _why(circuit: Circuit, driver: Driver) -> str:
    supply = circuit.port.supply
    text = f"the load takes at most {driver.load_a * 1e3:.3g} mA; the pin carries at most {driver.pin_a * 1e3:.3g} mA of its {circuit.port.pin_drive_a * 1e3:g} mA"
    if driver.stage == "pin":
        return f"{text}; with {driver.resistor_ohm:g} ohm the lamp gets the current it had, at {supply.nominal:g} V"
    if driver.stage == "n-mosfet":
        return f"{text}: its gate takes current only while it changes"
    return f"{text}: ({supply.most:g} V - {fig.BASE_LEAST_V:g} V) / (0.95 * {driver.resistor_ohm:g} ohm)"


def _source(driver: Driver) -> str:
    return (
        fig.DROP_AT_20_MA.source
        if driver.stage == "pin"
        else f"{fig.FORCED_GAIN.source}; junction voltages from memory"
    )


def _flyback(circuit: Circuit, output: Output, load: String) -> Row:
    coil = next(p for p in load.parts if p.relay)
    have = [p.name for p in circuit.parts if p.kind == "diode" and set(p.nodes) == set(coil.nodes)]
    what = f"flyback diode across {coil.name}: {'keep ' + have[0] if have else 'add one, 1 A, cathode to the positive end'}"
    return Row(
        "Outputs",
        output.name,
        what,
        "the coil's current must go on when the transistor opens",
        "common practice",
    )


def _bias(output: Output, driver: Driver, safe: int) -> Row:
    to = "the port's supply" if driver.bias_to == "vcc" else "ground"
    off = fig.LEAK.value * most(driver.bias_ohm)
    why = (
        f"holds {output.name} {'active' if safe else 'inactive'}, as the port starts, from power-up until the firmware "
        f"drives the pin and during every reset; {fig.LEAK.value * 1e6:g} uA of leakage moves it by {off:.3g} V"
    )
    return Row(
        "Undriven time",
        output.name,
        f"{ohm_text(driver.bias_ohm)} from the pin to {to}",
        why,
        fig.LEAK.source,
    )


def _bare_rows(circuit: Circuit, output: Output, safe: int) -> list[Row]:
    drive = circuit.port.pin_drive_a
    active = 1 if output.kind != "low" else 0
    level = active if safe else 1 - active
    what = f"the drawing shows no load: a load of up to {drive * 1e3:g} mA at {circuit.port.supply.nominal:g} V may hang on the pin"
    why = f"the pin is {'high' if active else 'low'} while {output.name} is active, as the timer's output was: BOARD_ACTIVE {active}"
    bias = f"{ohm_text(fig.BIAS_OHM)} from the pin to {'the port supply' if level else 'ground'}"
    held = f"holds {output.name} {'active' if safe else 'inactive'}, as the port starts, until the firmware drives the pin"
    return [
        Row("Outputs", output.name, what, why, fig.DROP_AT_20_MA.source),
        Row("Undriven time", output.name, bias, held, fig.LEAK.source),
    ]


def _overloaded(circuit: Circuit, output: Output, driver: Driver) -> list[Finding]:
    supply, drive = circuit.port.supply, circuit.port.pin_drive_a
    if driver.pin_a > drive:
        message = (
            f"the driver of {output.name} takes {driver.pin_a * 1e3:.3g} mA from its pin, which may give "
            f"{drive * 1e3:.3g} mA, for a load of {driver.load_a * 1e3:.3g} mA"
        )
        return [
            Finding(
                "pin-overloaded",
                "error",
                output.position,
                message,
                "take a controller with stronger pins (`port.pin_drive`), or a driver chip",
            )
        ]
    if driver.stage == "n-mosfet" and supply.least < fig.LOGIC_GATE_V:
        message = f"{supply.least:g} V don't turn on the MOSFET that {output.name} needs, whose gate wants {fig.LOGIC_GATE_V:g} V"
        return [
            Finding(
                "level-not-met",
                "error",
                output.position,
                message,
                "raise the port's supply, or drive the load by a driver chip",
            )
        ]
    return []
