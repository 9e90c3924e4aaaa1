"""Small circuits of our own, as texts, and the carrying out of mends on them."""

import re
from collections.abc import Iterable, Mapping
from functools import cache

import yaml

import porter
from porter.behaviour.model import Behaviour
from porter.findings import Finding
from porter.spec.read import read_text

#: A timer without any spread and with rails for output levels: limits can then be written down by hand.
IDEAL = (
    "{trigger_ratio: 1/3, threshold_ratio: 2/3, reset_level: 1 V, high_drop: 0 V, low_level: 0 V, "
    "high_resistance: 1m, low_resistance: 1m, trigger_current: 0 A, threshold_current: 0 A, "
    "reset_current: 0 A, reset_high_current: 0 A}"
)

LATCH_PARTS = {
    "R1": "{resistor: 10k, between: [vcc, set]}",
    "R2": "{resistor: 10k, between: [vcc, clear]}",
    "R3": "{resistor: 1k, between: [out, lamp]}",
    "D1": "{led: 2.0 V, between: [lamp, gnd]}",
    "C1": "{capacitor: 100n, between: [vcc, gnd]}",
}
LATCH_BUTTONS = {"SET": "{between: [set, gnd]}", "CLEAR": "{between: [clear, gnd]}"}
LATCH_PINS = "{trigger: set, threshold: gnd, reset: clear, output: out}"

TOGGLE_PARTS = {
    "RA": "{resistor: 10k, between: [vcc, mid]}",
    "RB": "{resistor: 10k, between: [mid, gnd]}",
    "RF": "{resistor: 100k, between: [out, store]}",
    "CM": "{capacitor: 1u, between: [store, gnd]}",
    "C1": "{capacitor: 100n, between: [vcc, gnd]}",
}
TOGGLE_BUTTONS = {"PUSH": "{between: [store, mid], resistance: 1m}"}
TOGGLE_PINS = "{trigger: mid, threshold: mid, reset: vcc, output: out}"


def _section(name: str, entries: Mapping[str, str | None]) -> str:
    return f"{name}:\n" + "".join(
        f"  {key}: {value}\n" for key, value in entries.items() if value is not None
    )


def spec(
    parts: Mapping[str, str | None],
    buttons: Mapping[str, str | None],
    pins: str,
    supply: str,
    family: str,
    values: str,
    more: str,
) -> str:
    """Return the text of a spec."""
    timer = f"timer:\n  family: {family}\n  pins: {pins}\n" + (f"  values: {values}\n" if values else "")
    head = f"circuit: A test piece\nsupply: {supply}\n{timer}"
    return head + _section("parts", parts) + _section("buttons", buttons) + more


def latch(
    parts: Mapping[str, str | None] | None = None,
    buttons: Mapping[str, str | None] | None = None,
    pins: str = LATCH_PINS,
    supply: str = "12 V",
    family: str = "bipolar",
    values: str = "",
    more: str = "",
) -> str:
    """Return a two-button latch (reset beats set) with parts and buttons replaced, None = left out."""
    return spec(
        {**LATCH_PARTS, **(parts or {})},
        {**LATCH_BUTTONS, **(buttons or {})},
        pins,
        supply,
        family,
        values,
        more,
    )


def toggle(
    parts: Mapping[str, str | None] | None = None,
    buttons: Mapping[str, str | None] | None = None,
    pins: str = TOGGLE_PINS,
    supply: str = "5 V",
    family: str = "cmos",
    values: str = IDEAL,
    more: str = "port: {power_on: low}\n",
) -> str:
    """Return a one-button toggle with parts and buttons replaced, None = left out."""
    return spec(
        {**TOGGLE_PARTS, **(parts or {})},
        {**TOGGLE_BUTTONS, **(buttons or {})},
        pins,
        supply,
        family,
        values,
        more,
    )


@cache
def derive(text: str) -> Behaviour:
    """Derive the behaviour of a spec's text."""
    return porter.derive(read_text(text, "piece.yaml"))


def of_rule(behaviour: Behaviour, rule: str) -> list[Finding]:
    """Return the findings of one rule."""
    return [f for f in behaviour.findings if f.rule == rule]


def rules_of(findings: Iterable[Finding], severity: str = "error") -> set[str]:
    """Return the rules that have a finding of this severity."""
    return {f.rule for f in findings if f.severity == severity}


# --- carrying out a mend ---


def apply(text: str, mend: str, line: int = 0) -> str:
    """Return a spec's text with a mend carried out to the letter; raises where it names nothing to do."""
    tree = yaml.load(text, yaml.BaseLoader)
    done = [step(tree, match, text, line) for pattern, step in _STEPS for match in re.finditer(pattern, mend)]
    if not done:
        raise AssertionError(f"nothing to carry out in: {mend}")
    return str(yaml.safe_dump(tree, sort_keys=False, allow_unicode=True))


def _value(text: str) -> object:
    return yaml.load(text, yaml.BaseLoader)


def _owner(tree: dict, name: str) -> dict:
    return tree["parts"].get(name) or tree["buttons"][name]


def _add_part(tree, match, *_):
    tree["parts"].update(_value("{" + match[1] + "}"))


def _move(tree, match, *_):
    _owner(tree, match[1])["between"] = _value(match[2])


def _change(tree, match, *_):
    part = tree["parts"][match[1]]
    kind = next(k for k in part if k in ("resistor", "capacitor", "led", "diode", "load"))
    part[kind] = _value(match[2])


def _pin(tree, match, *_):
    tree["timer"]["pins"].update(_value("{" + match[1] + "}"))


def _top(tree, match, *_):
    tree.update(_value(match[1]))


def _under_port(tree, match, *_):
    tree.setdefault("port", {}).update(_value(match[1]))


def _figure(tree, match, *_):
    tree["timer"].setdefault("values", {}).update(_value(match[1]))


def _fit(tree, match, *_):
    _owner(tree, match[1]).update(_value(match[2]))


def _family(tree, match, *_):
    tree["timer"]["family"] = match[1]


def _here(tree, match, text, line):
    before = text.splitlines()[: line - 1]
    index = sum(1 for row in before if row.strip().startswith("- {"))
    tree["intent"][index].update(_value(match[1]))


_STEPS = (
    (r"add `(\w+: \{[^`]*\})` to the parts", _add_part),
    (r"put `(\w+)` between `(\[[^`]*\])`", _move),
    (r"change `(\w+)` to `([^`]*)`", _change),
    (r"write `([^`]*)` among the timer's pins", _pin),
    (r"write `(supply: [^`]*)`", _top),
    (r"write `(power_on: \w+)` under `port`", _under_port),
    (r"sure of `([^`]*)`", _figure),
    (r"fit a `(\w+)` with `([^`]*)` at", _fit),
    (r"closer to the rails: `family: (\w+)`", _family),
    (r"write `([^`]*)` here", _here),
)
