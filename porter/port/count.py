"""The count style: the latch by table, filters for slow inputs, at most one toggle with a re-arm counter."""

import numpy as np

from porter.behaviour.model import Behaviour, Window
from porter.port.memory import Memory
from porter.port.model import Constant, Count, Toggle
from porter.port.origin import Origin
from porter.spec.model import Circuit

_LEVELS = ("low", "high")


def _window(behaviour: Behaviour, button: str, level: str, kind: str) -> Window:
    return next(w for w in behaviour.windows if (w.button, w.start, w.window) == (button, level, kind))


def toggles(behaviour: Behaviour) -> list[int]:
    """Return the buttons whose press turns the output from either state."""
    return [
        i
        for i, name in enumerate(behaviour.buttons)
        if all(
            _window(behaviour, name, level, "shortest-press").seconds.nominal is not None for level in _LEVELS
        )
    ]


def fits_count(behaviour: Behaviour) -> tuple[bool, str]:
    """Return whether latch, filters and one re-arm counter can do what the circuit does, and why not."""
    rows = [row for row in behaviour.held if row.output == "oscillates"]
    if rows:
        return False, "it oscillates in a held combination, and a table can't"
    if {row.start for row in behaviour.held} != {"low", "high"}:
        return False, "one of the two outputs doesn't last, and a latch with a table has no time limit"
    found = toggles(behaviour)
    if len(found) > 1:
        return False, "more than one button toggles"
    if found:
        name = behaviour.buttons[found[0]]
        kinds = ("re-arm-after-tap", "re-arm-after-hold")
        if any(
            _window(behaviour, name, lv, kind).seconds.nominal is None for lv in _LEVELS for kind in kinds
        ):
            return False, f"{name} doesn't re-arm"
    return True, ""


def plan_count(
    circuit: Circuit, behaviour: Behaviour, mem: Memory, tick_s: float
) -> tuple[Count, list[Constant], list[str]]:
    """Plan the count machine; call only where `fits_count` is true."""
    found = toggles(behaviour)
    toggle_bit = 1 << found[0] if found else 0
    table = _table(circuit, behaviour, toggle_bit)
    live = tuple(_is_live(circuit, behaviour, toggle_bit, mask) for mask in range(1 << len(circuit.buttons)))
    origin = Origin(circuit, mem)
    constants: list[Constant] = []
    press = _press_ticks(circuit, behaviour, tick_s, origin, constants)
    toggle = _toggle(behaviour, found[0], tick_s, origin, constants) if found else None
    release = (1,) * len(circuit.buttons)
    machine = Count(table, live, press, release, toggle)
    return (
        machine,
        constants,
        ["the re-arm counter follows taps and holds; lengths between are on a straight line"]
        if found
        else [],
    )


def _output(behaviour: Behaviour, names: tuple[str, ...], level: str) -> str:
    return next(r.output for r in behaviour.held if r.held == names and r.start == level)


def _names(circuit: Circuit, mask: int) -> tuple[str, ...]:
    return tuple(b.name for i, b in enumerate(circuit.buttons) if mask >> i & 1)


def _table(
    circuit: Circuit, behaviour: Behaviour, toggle_bit: int
) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """The latch by level: the held table, in which a live toggle alone changes nothing."""

    def entry(q: int, mask: int) -> int:
        if _is_live(circuit, behaviour, toggle_bit, mask):
            return q
        return int(_output(behaviour, _names(circuit, mask), _LEVELS[q]) == "high")

    masks = range(1 << len(circuit.buttons))
    return tuple(entry(0, mask) for mask in masks), tuple(entry(1, mask) for mask in masks)


def _is_live(circuit: Circuit, behaviour: Behaviour, toggle_bit: int, mask: int) -> bool:
    """True where the toggle is held and both starts come out changed."""
    if not mask & toggle_bit:
        return False
    names = _names(circuit, mask)
    return _output(behaviour, names, "low") == "high" and _output(behaviour, names, "high") == "low"


def _press_ticks(
    circuit: Circuit, behaviour: Behaviour, tick_s: float, origin: Origin, constants: list[Constant]
) -> tuple[int, ...]:
    """Ticks that each button must be held: one, or as long as its own RC takes."""
    ticks = []
    for i, button in enumerate(circuit.buttons):
        seconds = [
            w.seconds.nominal
            for w in behaviour.windows
            if w.button == button.name and w.window == "shortest-press" and w.seconds.nominal is not None
        ]
        longest = max(seconds, default=0.0)
        ticks.append(1 + int(np.ceil(longest / tick_s - 1e-9)) if longest > 0 else 1)
        constants.append(
            origin.constant(
                f"press.{i}",
                ticks[-1],
                f"ticks that {button.name} must be seen held before it counts",
                f"1 + {longest * 1e3:.6g} ms / {tick_s * 1e3:g} ms, rounded up",
                (f"buttons.{button.name}",),
            )
        )
    return tuple(ticks)


def _toggle(
    behaviour: Behaviour,
    button: int,
    tick_s: float,
    origin: Origin,
    constants: list[Constant],
) -> Toggle:
    name = behaviour.buttons[button]
    values: dict[str, list[int]] = {"tap": [], "hold": []}
    for kind, label in (("tap", "re-arm-after-tap"), ("hold", "re-arm-after-hold")):
        for q, level in enumerate(_LEVELS):
            seconds = _window(behaviour, name, level, label).seconds.nominal
            assert seconds is not None
            ticks = max(1, int(np.ceil(seconds / tick_s - 1e-9)))
            values[kind].append(ticks)
            constants.append(
                origin.constant(
                    f"toggle.{kind}.{q}",
                    ticks,
                    f"open ticks after a {kind} that turned the output {level} until {name} acts again",
                    f"{seconds * 1e3:.6g} ms / {tick_s * 1e3:g} ms, rounded up",
                    (f"buttons.{name}",),
                )
            )
    pace = [max(1, abs(t - h) // 3) for t, h in zip(values["tap"], values["hold"], strict=True)]
    for q in (0, 1):
        constants.append(
            origin.constant(
                f"toggle.pace.{q}",
                pace[q],
                "re-arm ticks that a held tick takes off a tap's, output " + _LEVELS[q],
                "a third of the way from tap to hold",
                (f"buttons.{name}",),
            )
        )
    return Toggle(
        button,
        (values["tap"][0], values["tap"][1]),
        (values["hold"][0], values["hold"][1]),
        (pace[0], pace[1]),
    )
