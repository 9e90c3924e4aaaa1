"""Checks between the sections of a spec: names that must exist, meet once, or agree."""

from collections import Counter
from collections.abc import Callable, Collection, Iterator, Sequence
from dataclasses import replace

from porter.findings import Finding, Position
from porter.spec.desk import Desk, did_you_mean
from porter.spec.model import RAILS, Circuit, Intent

#: Names that would collide with a column of the vectors' CSV.
RESERVED = ("case", "tick", "purpose")

#: Where a drawing has far too many parts, or its timer wasn't read, single nodes are no news.
MAX_TOUCHES = 300


def cross_check(
    desk: Desk, draft: Circuit, in_order: Callable[[Sequence[Finding]], tuple[Finding, ...]]
) -> Circuit:
    """Return *draft* with its nodes, positions and warnings; what doesn't agree is noted at the desk."""
    touches = list(_touches(desk, draft))
    nodes = tuple(dict.fromkeys(name for name, _ in touches if name not in RAILS))
    _names(desk, draft)
    _targets(desk, draft, nodes)
    _intents(desk, draft)
    _ratios(desk, draft)
    if "output" in draft.timer.pins and len(touches) < MAX_TOUCHES:
        _lonely(desk, touches, {o.target for o in draft.outputs if o.kind != "lit"})
    _alike(desk, touches)
    warnings = in_order([f for f in desk.findings if f.severity == "warning"])
    return replace(draft, nodes=nodes, positions=dict(desk.positions), warnings=warnings)


def _touches(desk: Desk, draft: Circuit) -> Iterator[tuple[str, Position]]:
    """Yield every mention of a node by a pin, part or button, with its place."""
    for pin, node in draft.timer.pins.items():
        yield node, draft.timer.pin_positions[pin]
    sections = [("parts", p.name, p.nodes) for p in draft.parts]
    sections += [("buttons", b.name, b.nodes) for b in draft.buttons]
    for section, name, nodes in sections:
        for n, node in enumerate(nodes):
            if node:
                yield node, desk.positions[f"{section}.{name}.between.{n}"]


def _names(desk: Desk, draft: Circuit) -> None:
    """Names of buttons, parts and outputs: each means one thing."""
    parts = {p.name for p in draft.parts}
    buttons = {b.name for b in draft.buttons}
    for name in buttons & parts:
        desk.error(
            "name-repeated",
            desk.positions[f"buttons.{name}"],
            f"`{name}` is a part and a button",
            "rename one of them",
        )
    for output in draft.outputs:
        if output.name in buttons:
            place = desk.positions.get(f"outputs.{output.name}", output.position)
            desk.error(
                "name-repeated", place, f"`{output.name}` is a button and an output", "rename one of them"
            )
    for section, names in (
        ("buttons", [b.name for b in draft.buttons]),
        ("outputs", [o.name for o in draft.outputs]),
    ):
        _column_names(desk, section, names)


def _column_names(desk: Desk, section: str, names: Sequence[str]) -> None:
    for n, name in enumerate(names):
        place = desk.positions.get(f"{section}.{name}", Position(desk.file, 1, 1))
        if name in RESERVED:
            desk.error(
                "name-unusable", place, f"`{name}` is a column of every vector file", "choose another name"
            )
        if name.lower() in [other.lower() for other in names[:n]]:
            desk.error(
                "name-repeated",
                place,
                f"`{name}` differs from another name by case only",
                "generated code can't tell them apart: rename one",
            )


def _targets(desk: Desk, draft: Circuit, nodes: Sequence[str]) -> None:
    """Outputs name an LED, or a node that something touches."""
    unread = [p.name for p in draft.parts if not p.text]
    lamps = [p.name for p in draft.parts if p.kind == "led"]
    kinds = {p.name: p.kind for p in draft.parts}
    for output in draft.outputs:
        if output.target in ("", *(unread if output.kind == "lit" else nodes)):
            continue
        if output.kind == "lit" and output.target not in lamps:
            known = kinds.get(output.target)
            message = (
                f"`{output.target}` is a {known}, not an LED"
                if known
                else f"there is no LED `{output.target}`"
            )
            desk.error("name-unknown", output.position, message, did_you_mean(output.target, lamps))
        elif output.kind != "lit":
            message = (
                f"`{output.target}` never changes"
                if output.target in RAILS
                else f"nothing is on a node `{output.target}`"
            )
            desk.error("name-unknown", output.position, message, did_you_mean(output.target, nodes))


def _intents(desk: Desk, draft: Circuit) -> None:
    """Intents name buttons, and no two contradict each other."""
    known = [b.name for b in draft.buttons]
    seen: dict[tuple[str, object], Intent] = {}
    for n, line in enumerate(draft.intent):
        if line.kind != "power_on" and not (line.buttons and all(line.buttons)):
            continue
        _known_buttons(desk, line, f"intent.{n}.{line.kind}", known)
        key = (line.kind, frozenset(line.buttons) if line.kind == "held" else line.buttons)
        _agree(desk, line, seen.setdefault(key, line))
    _power_on(desk, draft)


def _known_buttons(desk: Desk, line: Intent, path: str, known: Sequence[str]) -> None:
    for n, name in enumerate(line.buttons):
        if name not in known:
            where = desk.positions[f"{path}.{n}"]
            desk.error("name-unknown", where, f"there is no button `{name}`", did_you_mean(name, known))


def _agree(desk: Desk, line: Intent, first: Intent) -> None:
    """Note a line of intent that says the contrary of, or the same as, the *first* of its kind."""
    where, there = line.position, first.position.line
    if first.output != line.output:
        message = f"line {there} wants the output {first.output} here"
        desk.error("intent-contradicts", where, message, "keep the one that is meant")
    elif first is not line:
        desk.warn("intent-repeated", where, f"the same as line {there}", "leave one out")


def _power_on(desk: Desk, draft: Circuit) -> None:
    wish = draft.port.power_on
    for line in draft.intent:
        if line.kind == "power_on" and wish not in (None, line.output):
            desk.error(
                "intent-contradicts",
                line.position,
                f"`port.power_on` wants the output {wish}",
                "make the two agree",
            )


def _ratios(desk: Desk, draft: Circuit) -> None:
    values = draft.timer.values
    if "trigger_ratio" in values and "threshold_ratio" in values:
        low, high = values["trigger_ratio"], values["threshold_ratio"]
        if low.nominal >= high.nominal:
            desk.error(
                "ratios-crossed",
                draft.timer.value_positions["trigger_ratio"],
                f"the trigger ratio {low.nominal:.4g} isn't below the threshold ratio {high.nominal:.4g}",
                "swap them, or check the data sheet",
            )


def _lonely(desk: Desk, touches: Sequence[tuple[str, Position]], targets: Collection[str]) -> None:
    """Warn of nodes that one thing is on, unless the product takes its output there."""
    names = [name for name, _ in touches]
    counts = Counter(names)
    lower = {name: name.lower() for name in names}
    spellings = Counter(lower[name] for name in set(names))
    for name, place in touches:
        if name and name not in (*RAILS, *targets) and counts[name] == 1 and spellings[lower[name]] == 1:
            others = [n for n in dict.fromkeys(names) if n != name]
            desk.warn(
                "node-touched-once", place, f"only one thing is on node `{name}`", _lonely_mend(name, others)
            )


def _lonely_mend(name: str, others: Sequence[str]) -> str:
    close = did_you_mean(name, others)
    return close if close.startswith("did") else "wire something else to it, or leave it out"


def _alike(desk: Desk, touches: Sequence[tuple[str, Position]]) -> None:
    first: dict[str, str] = {}
    for name, place in touches:
        known = first.setdefault(name.lower(), name)
        if known != name and known.lower() not in RAILS:
            desk.warn(
                "nodes-alike",
                place,
                f"nodes `{known}` and `{name}` differ by case only",
                "use one spelling if one node is meant",
            )
            first[name.lower()] = name
