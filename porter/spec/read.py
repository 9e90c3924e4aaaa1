"""Read a spec file into a `Circuit`; everything wrong with it is found in one run."""

import keyword
import re
import unicodedata
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Final, Literal, cast

from porter.findings import Finding, Position, SpecError
from porter.spec import units
from porter.spec.cross import cross_check
from porter.spec.desk import NODE, Desk
from porter.spec.model import (
    LEDGER_ROWS,
    PINS,
    RAILS,
    Acceptance,
    Button,
    Circuit,
    Hazard,
    Intent,
    Leak,
    Output,
    Part,
    PartKind,
    PortWishes,
    Spread,
    Timer,
)
from porter.spec.tree import MAX_BYTES, Entry, Node, Row, Scalar, Table, decode, load

MAX_BUTTONS: Final = 8
MAX_PARTS: Final = 64
MAX_OUTPUTS: Final = 8
MAX_LINES: Final = 100  # of intent and of accept

TOP_KEYS: Final = ("circuit", "supply", "timer", "parts", "buttons", "outputs", "intent", "port", "accept")
TIMER_KEYS: Final = ("family", "pins", "values")
BUTTON_KEYS: Final = ("between", "normally", "resistance", "bounce", "leak", "hazard")
OUTPUT_KEYS: Final = ("lit", "high", "low", "hazard")
INTENT_KEYS: Final = ("held", "release", "power_on", "output")
PORT_KEYS: Final = ("supply", "tick", "clock", "style", "power_on", "pin_drive")
ACCEPT_KEYS: Final = ("row", "because", "circuit", "port")
HAZARDS: Final = ("stop", "interlock", "heater", "motion")
LEVELS: Final = ("low", "high")
STYLES: Final = ("auto", "count", "charge")
PART_KINDS: Final = ("resistor", "capacitor", "led", "diode", "load")
#: Keys that a part may have besides its kind and `between`.
PART_EXTRAS: Final[Mapping[str, tuple[str, ...]]] = {
    "resistor": (),
    "capacitor": ("leak",),
    "led": ("slope",),
    "diode": ("slope",),
    "load": ("coil",),
}
_PART_VALUES: Final = {
    "resistor": units.RESISTANCE,
    "capacitor": units.CAPACITANCE,
    "led": units.FORWARD,
    "diode": units.FORWARD,
}

#: The timer's figures that a spec may override, and what each measures.
VALUE_KINDS: Final[Mapping[str, units.Kind]] = {
    "high_drop": units.LEVEL,
    "high_resistance": units.SERIES,
    "low_level": units.LEVEL,
    "low_resistance": units.SERIES,
    "trigger_ratio": units.RATIO,
    "threshold_ratio": units.RATIO,
    "reset_level": units.LEVEL,
    "trigger_current": units.CURRENT,
    "threshold_current": units.CURRENT,
    "reset_current": units.CURRENT,
    "reset_high_current": units.CURRENT,
    "divider": units.RESISTANCE,
    "discharge_resistance": units.RESISTANCE,
    "shortest_pulse": units.TIME,
}

#: A closed contact, a diode's slope and a factory RC clock (±10 %): common practice, taken where a
#: spec says nothing.
CONTACT: Final = Spread.exact(0.1)
SLOPE: Final = Spread.exact(10.0)
CLOCK: Final = 0.10
PIN_DRIVE_A: Final = 0.010
#: The highest supply that small controllers commonly take, and what they get where the circuit has more.
PORT_SUPPLY_MOST: Final = 5.5
PORT_SUPPLY: Final = Spread.exact(5.0)

#: Stems that would hide a header of C or a file of the job.
_TAKEN_STEMS: Final = frozenset(
    [
        *("assert", "complex", "ctype", "errno", "fenv", "float", "inttypes", "limits", "locale", "math"),
        *("setjmp", "signal", "stdarg", "stdbool", "stddef", "stdint", "stdio", "stdlib", "string", "time"),
        *(
            "auto",
            "bool",
            "case",
            "char",
            "const",
            "default",
            "do",
            "double",
            "enum",
            "extern",
            "goto",
            "inline",
        ),
        *("int", "long", "register", "restrict", "short", "signed", "sizeof", "static", "struct", "switch"),
        *(
            "typedef",
            "union",
            "unsigned",
            "void",
            "volatile",
            "board",
            "main",
            "machine",
            "micropython",
            "utime",
        ),
    ]
)


def families() -> tuple[str, ...]:
    """Return the names of the timer families that can be asked for."""
    from porter.circuit.family import FAMILIES  # late: the spec room stands alone until a timer is read

    return tuple(FAMILIES)


def identifier(stem: str) -> str:
    """Return a file's stem as a name that C, Python and a file system take.

    >>> identifier("Glue lamp-2")
    'Glue_lamp_2'
    """
    plain = unicodedata.normalize("NFKD", stem).encode("ascii", "ignore").decode()
    name = re.sub(r"\W+", "_", plain).strip("_") or "spec"
    if name[0].isdigit():
        name = f"spec_{name}"
    return f"{name}_port" if keyword.iskeyword(name) or name.lower() in _TAKEN_STEMS else name


def read(path: str | Path) -> Circuit:
    """Return the circuit of a spec file.

    Args:
        path: the file; findings name it as given here.

    Raises:
        SpecError: the file can't be read, or has errors; carries every finding of the run.
    """
    file = str(path)
    try:
        with Path(path).open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        why = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        finding = Finding(
            "file-unreadable",
            "error",
            Position(file, 1, 1),
            f"can't read the file: {why}",
            "check the name, and that it is a readable file",
        )
        raise SpecError((finding,), "") from None
    return read_text(decode(data, file), file)


def read_text(text: str, file_name: str) -> Circuit:
    """Return the circuit of a spec's *text*; `file_name` names it in findings and gives the circuit its name.

    Raises:
        SpecError: with every finding of the run.
    """
    text = text.removeprefix("\ufeff")
    if len(text) > MAX_BYTES:
        decode(text.encode("utf-8", "replace"), file_name)
    root, found = load(text, file_name)
    desk = Desk(file_name, list(found))
    if root is None or (isinstance(root, Scalar) and root.text == ""):
        desk.error(
            "spec-empty",
            Position(file_name, 1, 1),
            "there is no spec in this file",
            "begin with `circuit:`, `supply:` and `timer:`, or copy a shipped spec",
        )
        raise _spec_error(desk, text)
    circuit = _circuit(desk, root, text)
    if desk.failed:
        raise _spec_error(desk, text)
    return circuit


def _sorted(findings: Sequence[Finding]) -> tuple[Finding, ...]:
    return tuple(sorted(dict.fromkeys(findings), key=lambda f: (f.position, f.rule, f.message)))


def _spec_error(desk: Desk, text: str) -> SpecError:
    return SpecError(_sorted(desk.findings), text)


def _circuit(desk: Desk, root: Node, text: str) -> Circuit:
    if not isinstance(root, Table):
        desk.error(
            "wrong-kind",
            root.position,
            "a spec is a mapping of keys to values",
            "begin with `circuit: My latch`",
        )
        raise _spec_error(desk, text)
    known = (*TOP_KEYS, *_second_timers(desk, root))
    found = desk.fields(root, "", known, ("circuit", "supply", "timer", "buttons"), "the shipped specs")
    title = desk.text(found["circuit"], "a title", "`My latch`") if "circuit" in found else ""
    supply = desk.quantity(found["supply"], units.SUPPLY) if "supply" in found else Spread.exact(5.0)
    timer = _timer(desk, found["timer"]) if "timer" in found else _no_timer(desk)
    parts = _parts(desk, found["parts"]) if "parts" in found else ()
    buttons = _buttons(desk, found["buttons"]) if "buttons" in found else ()
    outputs = _outputs(desk, found["outputs"]) if "outputs" in found else _default_output(timer)
    home = Position(desk.file, 1, 1)
    draft = Circuit(
        name=identifier(Path(desk.file).stem),
        title=" ".join(title.split()),
        file=Path(desk.file).name,
        source=text,
        supply=supply,
        supply_position=desk.positions.get("supply", home),
        timer=timer,
        parts=parts,
        buttons=buttons,
        outputs=outputs,
        intent=_intents(desk, found["intent"]) if "intent" in found else (),
        port=_port(desk, found.get("port"), supply),
        accept=_accepts(desk, found["accept"]) if "accept" in found else (),
        nodes=(),
    )
    return cross_check(desk, draft, _sorted)


# --- timer ----------------------------------------------------------------------------------


def _second_timers(desk: Desk, root: Table) -> list[str]:
    """Note keys such as ``timer2`` and return them."""
    names = [name for name in root.entries if re.fullmatch(r"timers|timer_?\d+", name)]
    for name in names:
        where = root.entries[name].key.position
        mend = "porter ports one timer at a time: write one spec for each"
        desk.error("two-timers", where, f"`{name}`: a spec has one `timer`", mend)
    return names


def _no_timer(desk: Desk) -> Timer:
    return Timer("bipolar", {}, {}, Position(desk.file, 1, 1), {}, {})


def _timer(desk: Desk, node: Node) -> Timer:
    if isinstance(node, Row):
        desk.error(
            "two-timers",
            node.position,
            "a list of timers; a spec has one",
            "porter ports one timer at a time: write one spec for each",
        )
        return _no_timer(desk)
    example = "`{family: cmos, pins: {trigger: set, output: out}}`"
    found = desk.fields(node, "timer", TIMER_KEYS, ("family", "pins"), example)
    known = families()
    family = (
        desk.choice(found["family"], "a timer family", known, known[0]) if "family" in found else known[0]
    )
    pins = _pins(desk, found["pins"]) if "pins" in found else {}
    values = (
        desk.fields(found["values"], "timer.values", VALUE_KINDS, (), "`{high_drop: 1.4 V}`")
        if ("values" in found)
        else {}
    )
    return Timer(
        family=family,
        pins={name: pins[name][0] for name in PINS if name in pins},
        values={name: desk.quantity(value, VALUE_KINDS[name]) for name, value in values.items()},
        position=desk.positions.get("timer", node.position),
        pin_positions={name: pins[name][1] for name in PINS if name in pins},
        value_positions={name: value.position for name, value in values.items()},
    )


def _pins(desk: Desk, node: Node) -> dict[str, tuple[str, Position]]:
    found = desk.fields(node, "timer.pins", PINS, ("output",), "`{trigger: set, reset: clear, output: out}`")
    pins = {name: (_node_name(desk, value), value.position) for name, value in found.items()}
    if "output" in pins and pins["output"][0] in RAILS:
        desk.error(
            "output-on-rail",
            pins["output"][1],
            f"the timer's output is wired to {pins['output'][0]}",
            "give the output a node of its own, such as `out`",
        )
    return {name: pin for name, pin in pins.items() if pin[0]}


def _node_name(desk: Desk, node: Node) -> str:
    """Return a node's name; an empty text where there is none."""
    name = desk.name(node, "a node name", NODE)
    rail = name.lower()
    if rail in RAILS and name != rail:
        mend = f"write `{rail}`; node names are case-sensitive"
        desk.error("rail-misspelt", node.position, f"`{name}` isn't the rail `{rail}`", mend)
        return rail
    return name


def _between(desk: Desk, found: Mapping[str, Node], path: str) -> tuple[str, str]:
    """Return the two nodes of a part or button; empty names where they can't be read."""
    if "between" not in found:
        return "", ""
    node = found["between"]
    items = desk.row(node, "a list of two nodes", "`[vcc, out]`")
    names = [_node_name(desk, item) for item in items]
    desk.positions.update({f"{path}.between.{n}": item.position for n, item in enumerate(items)})
    if isinstance(node, Row) and len(items) != 2:
        desk.error(
            "between-not-two", node.position, f"{len(items)} nodes where two are needed", "write `[vcc, out]`"
        )
        return "", ""
    if len(names) == 2 and names[0] == names[1] != "":
        desk.error(
            "between-same-node",
            node.position,
            f"both ends are on `{names[0]}`",
            "name two different nodes, or leave the part out",
        )
    return (names[0], names[1]) if len(names) == 2 else ("", "")


# --- parts and buttons ----------------------------------------------------------------------


def _entries(desk: Desk, node: Node, section: str, most: int, example: str) -> dict[str, Entry]:
    """Return the named entries of a section; names and their number are checked."""
    entries = desk.table(node, f"a mapping of {section}", example)
    if len(entries) > most:
        extra = list(entries.values())[most].key.position
        desk.error(
            "too-many",
            extra,
            f"{len(entries)} {section}, and at most {most} can be handled",
            "split the drawing into several specs",
        )
    for name, entry in entries.items():
        desk.name_fits(name, entry.key.position, f"a name among the {section}")
        desk.remember(f"{section}.{name}", entry)
    return entries


def _parts(desk: Desk, node: Node) -> tuple[Part, ...]:
    entries = _entries(desk, node, "parts", MAX_PARTS, "`R1: {resistor: 10k, between: [vcc, set]}`")
    return tuple(_part(desk, name, entry.value, entry.key.position) for name, entry in entries.items())


def _part(desk: Desk, name: str, node: Node, where: Position) -> Part:
    example = "`{resistor: 10k, between: [vcc, set]}`"
    kinds = [k for k in PART_KINDS if isinstance(node, Table) and k in node.entries]
    extras = PART_EXTRAS[kinds[0]] if kinds else ("leak", "slope", "coil")
    found = desk.fields(
        node, f"parts.{name}", (*(kinds or PART_KINDS), "between", *extras), ("between",), example
    )
    nodes = _between(desk, found, f"parts.{name}")
    if len(kinds) != 1:
        _part_kind(desk, node, kinds, where)
        return Part(name, "resistor", nodes, Spread.exact(1.0), None, None, None, False, "", where)
    kind = cast(PartKind, kinds[0])
    value = found[kind]
    size, current = _load(desk, value) if kind == "load" else (desk.quantity(value, _PART_VALUES[kind]), None)
    slope = desk.quantity(found["slope"], units.SERIES) if "slope" in found else SLOPE
    return Part(
        name=name,
        kind=kind,
        nodes=nodes,
        value=size,
        slope=slope if kind in ("led", "diode") else None,
        leak=_leak(desk, found["leak"]) if "leak" in found else None,
        current=current,
        relay="coil" in found and desk.boolean(found["coil"]),
        text=_written(value),
        position=value.position,
    )


def _part_kind(desk: Desk, node: Node, kinds: Sequence[str], where: Position) -> None:
    if not isinstance(node, Table):
        return
    if kinds:
        place = node.entries[kinds[1]].key.position
        desk.error(
            "part-kind", place, f"a part can't be {kinds[0]} and {kinds[1]} at once", "make two parts of it"
        )
    else:
        desk.error(
            "part-kind",
            where,
            "what kind of part is this?",
            "add one of `resistor`, `capacitor`, `led`, `diode`, `load`",
        )


def _written(node: Node) -> str:
    """Return a value as it was written, for reports."""
    if isinstance(node, Scalar):
        return " ".join(node.text.split())
    if isinstance(node, Table):
        return ", ".join(f"{key} {_written(entry.value)}" for key, entry in node.entries.items())
    return ""


def _current_or_resistance(desk: Desk, node: Node) -> tuple[Spread | None, Spread | None]:
    """Return (current, resistance), one of them None; the unit decides, a bare number above 1 is ohms."""
    inner = node.entries["nominal"].value if isinstance(node, Table) and "nominal" in node.entries else node
    written = inner.text if isinstance(inner, Scalar) else ""
    if units.unit_of(written) == "A":
        return desk.quantity(node, units.LOAD_CURRENT), None
    before = len(desk.findings)
    resistance = desk.quantity(node, units.RESISTANCE)
    if written and len(desk.findings) == before and resistance.nominal < 1 and not units.unit_of(written):
        desk.error(
            "unit-mismatch",
            inner.position,
            f"`{written}` could be a current or a resistance",
            f"write `{written}A` or `{written}ohm`",
        )
    return None, resistance


def _load(desk: Desk, node: Node) -> tuple[Spread, Spread | None]:
    current, resistance = _current_or_resistance(desk, node)
    return resistance or Spread.exact(1.0), current


def _leak(desk: Desk, node: Node) -> Leak:
    current, resistance = _current_or_resistance(desk, node)
    return Leak(current, resistance)


def _buttons(desk: Desk, node: Node) -> tuple[Button, ...]:
    entries = _entries(desk, node, "buttons", MAX_BUTTONS, "`SET: {between: [set, gnd]}`")
    if isinstance(node, Table) and not node.entries:
        desk.error(
            "no-buttons", node.position, "there are no buttons", "add one: `SET: {between: [set, gnd]}`"
        )
    return tuple(_button(desk, name, entry.value, entry.key.position) for name, entry in entries.items())


def _button(desk: Desk, name: str, node: Node, where: Position) -> Button:
    found = desk.fields(node, f"buttons.{name}", BUTTON_KEYS, ("between",), "`{between: [set, gnd]}`")
    normally = (
        desk.choice(found["normally"], "a contact's rest", ("open", "closed"), "open")
        if ("normally" in found)
        else "open"
    )
    return Button(
        name=name,
        nodes=_between(desk, found, f"buttons.{name}"),
        normally=cast(Literal["open", "closed"], normally),
        resistance=desk.quantity(found["resistance"], units.RESISTANCE) if "resistance" in found else CONTACT,
        leak=desk.quantity(found["leak"], units.RESISTANCE) if "leak" in found else None,
        bounce_s=desk.quantity(found["bounce"], units.BOUNCE).most if "bounce" in found else None,
        hazard=_hazard(desk, found),
        position=where,
    )


def _hazard(desk: Desk, found: Mapping[str, Node]) -> Hazard | None:
    if "hazard" not in found:
        return None
    return cast(Hazard, desk.choice(found["hazard"], "a hazard", HAZARDS, "stop"))


# --- outputs and wishes ---------------------------------------------------------------------


def _default_output(timer: Timer) -> tuple[Output, ...]:
    place = timer.pin_positions.get("output", timer.position)
    return (Output("out", "high", timer.pins.get("output", ""), None, place),)


def _outputs(desk: Desk, node: Node) -> tuple[Output, ...]:
    entries = _entries(desk, node, "outputs", MAX_OUTPUTS, "`lamp: {lit: D1}`")
    if isinstance(node, Table) and not node.entries:
        desk.error(
            "value-missing",
            node.position,
            "no outputs are named",
            "leave `outputs` out, or add `lamp: {lit: D1}`",
        )
    return tuple(_output(desk, name, entry) for name, entry in entries.items())


def _output(desk: Desk, name: str, entry: Entry) -> Output:
    found = desk.fields(
        entry.value, f"outputs.{name}", OUTPUT_KEYS, (), "`{lit: D1}`, `{high: out}` or `{low: out}`"
    )
    forms = [form for form in ("lit", "high", "low") if form in found]
    hazard = _hazard(desk, found)
    if len(forms) != 1:
        if isinstance(entry.value, Table):
            desk.error(
                "output-form",
                entry.key.position,
                f"`{name}` needs exactly one of `lit`, `high` and `low`",
                "write `{lit: D1}`, `{high: out}` or `{low: out}`",
            )
        return Output(name, "high", "", hazard, entry.key.position)
    form = forms[0]
    value = found[form]
    target = desk.name(value, "a part's name") if form == "lit" else _node_name(desk, value)
    return Output(name, form, target, hazard, value.position)


def _intents(desk: Desk, node: Node) -> tuple[Intent, ...]:
    items = desk.row(node, "a list", "`- {held: [SET], output: high}`")
    few = _few(desk, items, "lines of intent")
    return tuple(_intent(desk, item, f"intent.{n}") for n, item in enumerate(few))


def _few(desk: Desk, items: Sequence[Node], noun: str) -> Sequence[Node]:
    if len(items) > MAX_LINES:
        desk.error(
            "too-many",
            items[MAX_LINES].position,
            f"{len(items)} {noun}, and at most {MAX_LINES} can be handled",
            "keep the ones that matter",
        )
    return items[:MAX_LINES]


def _intent(desk: Desk, node: Node, path: str) -> Intent:
    example = "`{held: [SET], output: high}`"
    found = desk.fields(node, path, INTENT_KEYS, (), example)
    forms = [form for form in ("held", "release", "power_on") if form in found]
    if len(forms) != 1 or ("output" in found) == (forms == ["power_on"]):
        if isinstance(node, Table):
            desk.error(
                "intent-form",
                node.position,
                "a line of intent says one thing and the output it leads to",
                f"write {example}, `{{release: [A, B], output: low}}` or `{{power_on: low}}`",
            )
        return Intent("held", (), "low", node.position)
    form = forms[0]
    level_node = found["power_on" if form == "power_on" else "output"]
    level = cast(Literal["low", "high"], desk.choice(level_node, "an output level", LEVELS, "low"))
    names = () if form == "power_on" else _held(desk, found[form], f"{path}.{form}")
    return Intent(form, names, level, node.position)


def _held(desk: Desk, node: Node, path: str) -> tuple[str, ...]:
    items = desk.row(node, "a list of buttons", "`[SET]`")
    if isinstance(node, Row) and not items:
        desk.error("value-missing", node.position, "no button is named", "name one at least: `[SET]`")
    names = [desk.name(item, "a button's name") for item in items]
    desk.positions.update({f"{path}.{n}": item.position for n, item in enumerate(items)})
    for n, (name, item) in enumerate(zip(names, items, strict=True)):
        if name and name in names[:n]:
            desk.error(
                "name-repeated", item.position, f"`{name}` is named twice here", "name each button once"
            )
    return tuple(names)


def _port(desk: Desk, node: Node | None, supply: Spread) -> PortWishes:
    found = {} if node is None else desk.fields(node, "port", PORT_KEYS, (), "`{tick: 1 ms}`")
    own = supply if supply.nominal <= PORT_SUPPLY_MOST else PORT_SUPPLY
    style = desk.choice(found["style"], "a style", STYLES, "auto") if "style" in found else "auto"
    power_on = (
        desk.choice(found["power_on"], "an output level", LEVELS, "low") if "power_on" in found else None
    )
    return PortWishes(
        supply=desk.quantity(found["supply"], units.SUPPLY) if "supply" in found else own,
        tick_s=_tick(desk, found["tick"]) if "tick" in found else None,
        clock=desk.tolerance(found["clock"]) if "clock" in found else CLOCK,
        style=cast(Literal["auto", "count", "charge"], style),
        power_on=cast(Literal["low", "high"] | None, power_on),
        pin_drive_a=desk.quantity(found["pin_drive"], units.DRIVE).nominal
        if "pin_drive" in found
        else PIN_DRIVE_A,
        position=desk.positions.get("port", Position(desk.file, 1, 1)),
    )


def _tick(desk: Desk, node: Node) -> float | None:
    if isinstance(node, Scalar) and node.text == "auto":
        return None
    tick = desk.quantity(node, units.TICK)
    if tick.toleranced:
        desk.error(
            "tolerance-unusable",
            node.position,
            "the tick takes no tolerance",
            "state the clock's tolerance as `clock: ±2%`",
        )
    return tick.nominal


def _accepts(desk: Desk, node: Node) -> tuple[Acceptance, ...]:
    example = '`- {row: shortest-press, because: "operators press for 80 ms or more"}`'
    items = _few(desk, desk.row(node, "a list", example), "accepted rows")
    found = [_accept(desk, item, f"accept.{n}") for n, item in enumerate(items)]
    for n, line in enumerate(found):
        if line.row and line.row in [other.row for other in found[:n]]:
            desk.error(
                "accept-repeated", line.position, f"`{line.row}` is accepted twice", "keep one reason for it"
            )
    return tuple(found)


def _accept(desk: Desk, node: Node, path: str) -> Acceptance:
    found = desk.fields(node, path, ACCEPT_KEYS, ("row",), '`{row: re-arm-after-tap, because: "…"}`')
    row = desk.choice(found["row"], "a row of the ledger", LEDGER_ROWS, "") if "row" in found else ""
    texts = {key: desk.text(found[key], "a text", '`"…"`') for key in ("circuit", "port") if key in found}
    return Acceptance(
        row=row,
        because=_reason(desk, node, found),
        circuit=texts.get("circuit"),
        port=texts.get("port"),
        position=node.position,
    )


def _reason(desk: Desk, node: Node, found: Mapping[str, Node]) -> str:
    """Return the reason of an acceptance; one without letters is none."""
    given = found.get("because")
    words = given.text.strip() if isinstance(given, Scalar) else ""
    if isinstance(node, Table) and not re.search(r"[^\W\d_]{2}", words):
        desk.error(
            "reason-missing",
            (given or node).position,
            "a deviation is accepted without a reason",
            'say why: `because: "operators press for 80 ms or more"`',
        )
    return words
