"""Writes a port in MicroPython, which also runs under CPython.

A step takes no memory from the heap: attributes are small integers, and no product leaves 30 bits.
"""

import re
from typing import ClassVar

from porter.emit.c99 import amounts_of, suite_rows
from porter.emit.fold import fold
from porter.emit.language import Job, banner, microseconds, why
from porter.emit.lower import (
    Affine,
    All,
    Alone,
    Amount,
    Any,
    ChargeParts,
    Compare,
    CountParts,
    End,
    Filter,
    Flips,
    Mix,
    Motion,
    ToggleParts,
    copies,
    filter_name,
)
from porter.emit.names import camel, comment, string, unique
from porter.emit.numbers import Number
from porter.emit.trees import LATCH, Syntax, branch, render

SYNTAX = Syntax(("if ", ":"), ("elif ", ":"), "else:", "", "")


class MicroPython:
    """The MicroPython core, self-test and pin layer."""

    folder = "firmware/micropython"
    files: ClassVar[dict[str, str]] = {
        "micropython/latch.py.j2": "{name}.py",
        "micropython/selftest.py.j2": "{name}_selftest.py",
        "micropython/main.py.j2": "main.py",
    }

    def context(self, job: Job) -> dict[str, object]:
        """Return finished strings for the three templates."""
        return Core(job).context()


class Core:
    """The writing of one port in MicroPython."""

    def __init__(self, job: Job) -> None:
        self.job, self.parts, self.port = job, job.parts, job.port
        self.buttons = tuple(f"_BUTTON_{word}" for word in unique(self.port.buttons))

    def context(self) -> dict[str, object]:
        """Return the context for every template of the folder."""
        port, name = self.port, self.job.name
        state, step, idle = self._state(), self._step(), self._idle()
        words = set(re.findall(r"\w+", "\n".join([*state, *step, *idle])))
        return {
            "name": name,
            "cls": camel(name),
            "title": string(port.title),
            "banner": lambda what: banner(self.job, what),
            "why": why(port),
            "tick_us": microseconds(port),
            "buttons": [
                {"word": w, "mask": 1 << i, "name": comment(n), "short": w.removeprefix("_BUTTON_")}
                for i, (w, n) in enumerate(zip(self.buttons, port.buttons, strict=True))
            ],
            "outputs": [
                {"word": w, "mask": 1 << i, "name": comment(n)}
                for i, (w, n) in enumerate(zip(unique(port.outputs), port.outputs, strict=True))
            ],
            "numbers": [
                {"about": n.about, "name": _ref(n), "value": n.value}
                for n in self.parts.numbers
                if _ref(n) in words
            ],
            "helpers": [h for h in ("scaled", "part", "kept", "against") if f"_{h}" in words],
            "state": fold(state, 8),
            "step": fold(step, 8),
            "idle": fold(idle, 8),
            "suite": suite_rows(self.job.suite),
            "all_seen": self.parts.sees_held,
            "pressed": self.job.levels.pressed,
            "pull_up": self.job.levels.pull_up,
            "active": self.job.levels.active,
        }

    def _fields(self) -> list[str]:
        return [f.name for cell in self.parts.cells for f in cell.fields]

    def _state(self) -> list[str]:
        values = {"q": str(self.port.start_q)}
        if isinstance(self.parts.machine, ChargeParts):
            values |= {
                x: _ref(n) for x, n in zip(copies(self.parts.machine), self.parts.machine.starts, strict=True)
            }
        return [f"self._{name} = {values.get(name, '0')}" for name in self._fields()]

    def _ask(self, ask: int) -> tuple[str, str]:
        if ask == LATCH:
            return "q", "not q"
        return f"held & {self.buttons[ask]}", f"not held & {self.buttons[ask]}"

    def _ask_down(self, ask: int) -> tuple[str, str]:
        machine = self.parts.machine
        found = [f for f in machine.filters if f.button == ask] if isinstance(machine, CountParts) else []
        if not found:
            return self._ask(ask)
        n, press = filter_name(self.port, ask), _ref(found[0].press)
        return f"{n} >= {press}", f"{n} < {press}"

    def _step(self) -> list[str]:
        machine = self.parts.machine
        body = self._charge(machine) if isinstance(machine, ChargeParts) else self._count(machine)
        opened = [f"{name} = self._{name}" for name in self._fields() if name != "was"]
        closed = [f"self._{name} = {'held' if name == 'was' else name}" for name in self._fields()]
        return [*opened, *body, *closed, *self._answer()]

    def _answer(self) -> list[str]:
        return render(self.parts.answer, self._ask, lambda pair: [f"return {self._bits(pair)}"], SYNTAX)

    def _bits(self, pair: tuple[int, int]) -> str:
        if pair == (0, 1):
            return "q"
        return str(pair[0]) if pair[0] == pair[1] else f"{pair[1]} if q else {pair[0]}"

    def _idle(self) -> list[str]:
        parts = self.parts
        filters = parts.machine.filters if isinstance(parts.machine, CountParts) else ()
        if parts.always_idle and not filters:
            return ["return True"]
        if parts.always_idle:
            return [f"return {' and '.join(self._settled(f) for f in filters)}"]
        names = self._fields()
        if parts.recorded:
            guess = ["was = self._was"]
        elif not filters:
            guess = []
        else:
            guess = ["was = 0"]
            for f in filters:
                condition = f"self.{'_' + self._ask_down(f.button)[0]}"
                guess += branch(condition, [f"was |= {self.buttons[f.button]}"], [], SYNTAX)
        keep = [f"{name} = self._{name}" for name in names if name != "was"]
        same = " and ".join(f"{name} == self._{name}" for name in names if name != "was")
        back = [f"self._{name} = {name}" for name in names if name != "was"]
        open_ = not parts.recorded and not filters
        return [*keep, *guess, f"self.step({0 if open_ else 'was'})", f"same = {same}", *back, "return same"]

    def _settled(self, item: Filter) -> str:
        n = f"self._{filter_name(self.port, item.button)}"
        return f"({n} == 0 or {n} == {_top(item)})"

    # --- count ---

    def _count(self, machine: CountParts) -> list[str]:
        lines: list[str] = []
        for item in machine.filters:
            name = comment(self.port.buttons[item.button])
            lines += [f"# {name}: a change counts once seen long enough.", *self._filter(item)]
        latch = render(machine.latch, self._ask_down, self._set_latch, SYNTAX)
        lines += ["# The latch by level.", *latch] if latch else []
        return lines + (self._toggle(machine.toggle) if machine.toggle else [])

    def _filter(self, item: Filter) -> list[str]:
        n, press = filter_name(self.port, item.button), _ref(item.press)
        held = branch(f"{n} < {press} - 1", [f"{n} += 1"], [f"{n} = {_top(item)}"], SYNTAX)
        opened = branch(f"{n} > {press}", [f"{n} -= 1"], [f"{n} = 0"], SYNTAX)
        return branch(self._ask(item.button)[0], held, opened, SYNTAX)

    def _set_latch(self, pair: tuple[int, int]) -> list[str]:
        if pair == (0, 1):
            return []
        return ["q ^= 1"] if pair == (1, 0) else [f"q = {pair[0]}"]

    def _toggle(self, toggle: ToggleParts) -> list[str]:
        acts = ["q ^= 1", f"c = {_either(toggle.tap)}"]
        live = render(toggle.live, self._ask_down, lambda yes: acts if yes else [], SYNTAX)
        press = [*branch("not c", live, [], SYNTAX)] if live else []
        press += [
            f"hold = {_either(toggle.hold)}",
            f"pace = {_either(toggle.pace)}",
            *branch("c < hold", ["c = min(c + pace, hold)"], ["c = max(c - pace, hold)"], SYNTAX),
        ]
        name = comment(self.port.buttons[toggle.button])
        note = f"# {name} turns the latch once the re-arm counter has run out."
        return [
            note,
            *branch(self._ask_down(toggle.button)[0], press, branch("c", ["c -= 1"], [], SYNTAX), SYNTAX),
        ]

    # --- charge ---

    def _charge(self, machine: ChargeParts) -> list[str]:
        names = copies(machine)
        decide = render(machine.decide, self._ask, lambda f: self._flip(f, names), SYNTAX)
        lines = ["# Decide with the charge from before this tick.", *decide] if decide else []
        mixed = any(motion.mixes for motion in machine.motions)
        for k, (x, motion) in enumerate(zip(names, machine.motions, strict=True)):
            y = f"y{k}" if mixed else x
            moved = self._motion(motion, x, y, names)
            about = comment(self.port.machine.capacitors[k])  # type: ignore[union-attr]
            lines += [f"# Move the copy of {about} by one tick.", *moved] if moved else []
        return lines + ([f"{x} = y{k}" for k, x in enumerate(names)] if mixed else [])

    def _flip(self, flips: Flips, names: tuple[str, ...]) -> list[str]:
        low, high = _any(flips.low, names), _any(flips.high, names)
        if low == high:
            turn = ["q ^= 1", *self._turn_copy()]
            return [] if low is None else branch(low, turn, [], SYNTAX) if low else turn
        up, down = self._turned(low, 1), self._turned(high, 0)
        return branch("q", down, up, SYNTAX) if down else branch("not q", up, [], SYNTAX)

    def _turn_copy(self) -> list[str]:
        return ["x ^= 65535"] if self.parts.mirrored else []

    def _turned(self, condition: str | None, value: int) -> list[str]:
        if condition is None:
            return []
        turn = [f"q = {value}", *self._turn_copy()]
        return branch(condition, turn, [], SYNTAX) if condition else turn

    def _motion(self, motion: Motion, x: str, y: str, names: tuple[str, ...]) -> list[str]:
        opened = [] if x == y else [f"{y} = {x}"]
        if motion.whole:
            return opened + render(
                motion.whole, self._ask, lambda leaf: self._whole(leaf, x, y, names), SYNTAX
            )
        used = amounts_of(motion)
        if not used:  # only jumps and rests
            return opened + render(motion.aims, self._ask, lambda aim: _jump(aim.end, y), SYNTAX)
        part = _ref(used[0].number) if len(used) == 1 else str(used[0].kind)
        return [
            *opened,
            *render(motion.aims, self._ask, lambda aim: _aim(aim, y), SYNTAX),
            *render(motion.amounts, self._ask, lambda a: _choose(a) if len(used) > 1 else [], SYNTAX),
            f"by = end - {y} if {y} < end else {y} - end",
            _part(used[0].kind, part),
            f"{y} = {y} + by if {y} < end else {y} - by",
        ]

    def _whole(self, leaf: Alone | Mix | Affine, x: str, y: str, names: tuple[str, ...]) -> list[str]:
        if isinstance(leaf, Affine):
            return _affine(leaf, x, y)
        if isinstance(leaf, Mix):
            terms = [
                _kept(sign, keep, copy, end)
                for (sign, keep), copy, end in zip(leaf.keep, names, leaf.ends, strict=True)
                if keep.value
            ]
            return [f"{y} = min(max({' '.join([_ref(leaf.end), *terms])}, 0), 65535)"]
        if leaf.amount is None:
            return [] if leaf.end.number is None else [f"{y} = {_target(leaf.end, x)}"]
        return [
            *_aim(Alone(leaf.end, None), x),
            f"by = end - {x} if {x} < end else {x} - end",
            _part(leaf.amount.kind, _ref(leaf.amount.number)),
            f"{y} = {x} + by if {x} < end else {x} - by",
        ]


def _affine(leaf: Affine, x: str, y: str) -> list[str]:
    add, ref = f" + {_ref(leaf.add)}" if leaf.add else "", _ref(leaf.number)
    kept = f"_scaled({x}, {ref})" if leaf.kind == "scale" else f"{x} - ({x} >> {ref})"
    lines = [f"{y} = {kept}{add}"]
    if leaf.guard.number is None:
        return lines
    side = "<" if leaf.guard.only == "up" else ">"
    return branch(f"{x} {side} {_ref(leaf.guard.number)}", lines, [], SYNTAX)


def _ref(number: Number) -> str:
    return f"_{number.name}"


def _top(item: Filter) -> str:
    return f"{_ref(item.press)} + {_ref(item.release)} - 1"


def _either(pair: tuple[Number, Number]) -> str:
    return _ref(pair[0]) if pair[0] == pair[1] else f"{_ref(pair[1])} if q else {_ref(pair[0])}"


def _target(end: End, x: str) -> str:
    if end.number is None:
        return x
    ref = _ref(end.number)
    test = {"up": f"{x} < {ref}", "down": f"{x} > {ref}"}.get(end.only)
    return f"{ref} if {test} else {x}" if test else ref


def _jump(end: End, x: str) -> list[str]:
    return [] if end.number is None else [f"{x} = {_target(end, x)}"]


def _aim(aim: Alone, x: str) -> list[str]:
    """Return the lines that set the target; a jump goes there at once, so that no distance is left."""
    jump = _jump(aim.end, x) if aim.end.whole else []
    return [*jump, f"end = {_target(aim.end, x)}", *_choose(aim.amount)]


def _choose(amount: Amount | None) -> list[str]:
    return [f"{amount.kind} = {_ref(amount.number)}"] if amount else []


def _part(kind: str, number: str) -> str:
    return f"by = (by + (1 << {number} >> 1)) >> {number}" if kind == "shift" else f"by = _part(by, {number})"


def _kept(sign: int, keep: Number, x: str, end: Number) -> str:
    mark = "+" if sign > 0 else "-"
    return (
        f"{mark} ({x} - {_ref(end)})"
        if keep.value == 65536
        else f"{mark} _kept({x}, {_ref(end)}, {_ref(keep)})"
    )


def _any(any_of: Any, names: tuple[str, ...]) -> str | None:
    """Return the condition as text; empty where it always holds, None where it never does."""
    if not any_of:
        return None
    text = " or ".join(_all(a, names) for a in any_of)
    return f"({text})" if " or " in text or " and " in text else text


def _all(all_of: All, names: tuple[str, ...]) -> str:
    return " and ".join(_compare(test, names) for test in all_of)


def _compare(test: Compare, names: tuple[str, ...]) -> str:
    """Return a comparison; sums of several copies in two halves, which fit small integers."""
    if test.alone is not None:
        return f"{names[test.alone]} {test.operator} {_ref(test.limit)}"
    used = [(x, _ref(w)) for x, w in zip(names, test.weights, strict=True) if w.value]
    high = " + ".join(f"{w} * ({x} >> 8)" for x, w in used) or "0"
    low = " + ".join(f"{w} * ({x} & 255)" for x, w in used) or "0"
    return f"_against({high}, {low}, {_ref(test.limit)}) {test.operator} 0"
