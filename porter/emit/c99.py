"""Writes a port in C99: fits 8-bit parts, and means the same with an ``int`` of 16 bits as with one of 32."""

import re
from collections.abc import Callable
from typing import ClassVar

from porter.emit.fold import fold
from porter.emit.language import Job, banner, microseconds, why
from porter.emit.lower import (
    Affine,
    All,
    Alone,
    Amount,
    Any,
    Cell,
    ChargeParts,
    Compare,
    CountParts,
    End,
    Field,
    Filter,
    Flips,
    Mix,
    Motion,
    Parts,
    ToggleParts,
    copies,
    filter_name,
)
from porter.emit.names import comment, string, unique
from porter.emit.numbers import Number, wrap
from porter.emit.trees import LATCH, Leaf, Node, Syntax, Tree, branch, choose, leaves, render
from porter.port.model import Charge, Port
from porter.vectors.model import Case, Suite

SYNTAX = Syntax(("if (", ") {"), ("} else if (", ") {"), "} else {", "}", "/* as it is */")
ROWS_A_LINE = 8


class C99:
    """The C99 core, self-test and pin layer."""

    folder = "firmware/c"
    files: ClassVar[dict[str, str]] = {
        "c99/latch.h.j2": "{name}.h",
        "c99/latch.c.j2": "{name}.c",
        "c99/selftest.c.j2": "{name}_selftest.c",
        "c99/board.c.j2": "board.c",
    }

    def context(self, job: Job) -> dict[str, object]:
        """Return finished strings for the four templates."""
        return Core(job).context()


class Core:
    """The writing of one port in C."""

    def __init__(self, job: Job) -> None:
        self.job, self.parts, self.port = job, job.parts, job.port
        self.name, self.prefix = job.name, job.name.upper()
        self.buttons = tuple(f"{self.prefix}_BUTTON_{word}" for word in unique(self.port.buttons))
        self.outputs = tuple(f"{self.prefix}_OUTPUT_{word}" for word in unique(self.port.outputs))

    def context(self) -> dict[str, object]:
        """Return the context for every template of the folder."""
        port, parts = self.port, self.parts
        step, init, idle = self._step(), self._init(), self._idle()
        words = set(re.findall(r"\w+", "\n".join([*step, *init, *idle])))
        if words & {f"{self.name}_kept", f"{self.name}_rate"}:  # they stand on it
            words.add(f"{self.name}_part")
        return {
            "name": self.name,
            "prefix": self.prefix,
            "banner": lambda what: banner(self.job, what),
            "why": why(port),
            "tick_us": microseconds(port),
            "buttons": _bits(self.buttons, port.buttons, 0, (17, 26, 16, 20, 23, 22, 21, 0)),
            "outputs": _bits(self.outputs, port.outputs, len(port.buttons), (3, 2, 1, 4, 5, 6, 7, 8)),
            "members": [self._member(cell) for cell in parts.cells],
            "numbers": [self._define(number) for number in parts.numbers if self._ref(number) in words],
            "helpers": [
                h for h in ("clamp", "scaled", "part", "kept", "shift", "rate") if f"{self.name}_{h}" in words
            ],
            "init": fold(init, 4),
            "step": fold(step, 4),
            "idle": fold(idle, 4),
            "recovery": recovery(parts),
            "all_seen": parts.sees_held,
            "suite": suite_rows(self.job.suite),
            "title": string(port.title),
            "pressed": self.job.levels.pressed,
            "pull_up": self.job.levels.pull_up,
            "active": self.job.levels.active,
            "sheet": self.job.known is not None,
        }

    # --- names and types ---

    def _ref(self, number: Number) -> str:
        return f"{self.prefix}_{number.name}"

    def _define(self, number: Number) -> dict[str, object]:
        value = f"{number.value}u"
        if number.name.startswith(("SUM_", "WEIGHT")):
            value = f"INT32_C({number.value})" if number.value >= 0 else f"(-INT32_C({-number.value}))"
        return {"about": number.about, "name": self._ref(number), "value": value}

    def _member(self, cell: Cell) -> dict[str, object]:
        holds = "; ".join(self._field_note(field, cell) for field in cell.fields)
        return {"type": f"uint{cell.width}_t", "name": cell.name, "about": wrap(f"{holds}.")}

    def _field_note(self, field: Field, cell: Cell) -> str:
        at, last = _place(field, cell)
        bits = "" if len(cell.fields) == 1 else f"bit {at}: " if at == last else f"bits {at} to {last}: "
        return bits + _meaning(field, self.port, self.parts.mirrored)

    def _ask(self, ask: int) -> tuple[str, str]:
        """Return the conditions on the latch and the buttons as read."""
        if ask == LATCH:
            return "q != 0u", "q == 0u"
        return f"(held & {self.buttons[ask]}) != 0u", f"(held & {self.buttons[ask]}) == 0u"

    def _ask_down(self, ask: int) -> tuple[str, str]:
        """Return the conditions on the filtered buttons."""
        machine = self.parts.machine
        found = [f for f in machine.filters if f.button == ask] if isinstance(machine, CountParts) else []
        if not found:
            return self._ask(ask)
        n, press = filter_name(self.port, ask), self._ref(found[0].press)
        return f"{n} >= {press}", f"{n} < {press}"

    # --- functions ---

    def _init(self) -> list[str]:
        values = {"q": f"{self.port.start_q}u"}
        if isinstance(self.parts.machine, ChargeParts):
            values |= {
                x: self._ref(n)
                for x, n in zip(copies(self.parts.machine), self.parts.machine.starts, strict=True)
            }
        return [f"m->{cell.name} = {values.get(cell.fields[0].name, '0u')};" for cell in self.parts.cells]

    def _step(self) -> list[str]:
        machine = self.parts.machine
        body = self._charge(machine) if isinstance(machine, ChargeParts) else self._count(machine)
        opened = [line for cell in self.parts.cells for line in _unpack(cell)]
        closed = [self._pack(cell) for cell in self.parts.cells if not early(cell, machine)]
        lines = [*opened, *body, "", *closed, "", *self._answer()]
        return lines if any(re.search(r"\bheld\b", line) for line in lines) else ["(void)held;", "", *lines]

    def _answer(self) -> list[str]:
        tree = self.parts.answer
        if isinstance(tree, Leaf) and tree.value is not None:
            stored = [c.name for c in self.parts.cells if early(c, self.parts.machine) and _alone(c, "q")]
            # Read back, the latch needs no register across a multiplication.
            answer = f"m->{stored[0]}" if stored and tree.value == (0, 1) else self._bits(tree.value)
            return [f"return {answer};"]
        lines = render(tree, self._ask, lambda pair: [f"active = {self._bits(pair)};"], SYNTAX)
        return [
            "/* Answer for the latch and the buttons as they are. */",
            "uint8_t active;",
            *lines,
            "return active;",
        ]

    def _bits(self, pair: tuple[int, int]) -> str:
        if pair == (0, 1):
            return "q"
        if pair == (1, 0):
            return "(uint8_t)(q ^ 1u)"
        if pair[0] == pair[1]:
            return f"{pair[0]}u"
        return f"(uint8_t)((q != 0u) ? {pair[1]}u : {pair[0]}u)"

    def _pack(self, cell: Cell) -> str:
        kind = f"uint{cell.width}_t"
        terms = []
        for field in cell.fields:
            at, last = _place(field, cell)
            value = field.name
            if value == "was":
                full = last == cell.width - 1
                value = "held" if full else f"(held & {(1 << len(self.port.buttons)) - 1}u)"
            if at:
                value = f"({kind})({value} << {at}u)"
            terms.append(value)
        if len(terms) == 1:
            cast = f"({kind})" if terms[0].startswith("n_") and cell.width == 8 else ""
            return f"m->{cell.name} = {cast}{terms[0]};"
        return f"m->{cell.name} = ({kind})({' | '.join(terms)});"

    def _idle(self) -> list[str]:
        parts = self.parts
        filters = parts.machine.filters if isinstance(parts.machine, CountParts) else ()
        if parts.always_idle and not filters:
            return ["(void)m;", "return true;"]
        opened = [line for cell in parts.cells for line in _unpack(cell, was=True)]
        if parts.always_idle:
            opened = [line for line in opened if " n_" in line]
            tests = [self._settled(f) for f in filters]
            return [*opened, "", f"return {' && '.join(tests)};"]
        same = " && ".join(f"(next.{cell.name} == m->{cell.name})" for cell in parts.cells)
        # Member by member: SDCC has no struct assignment, and gcc may call memcpy for it.
        copied = [f"next.{cell.name} = m->{cell.name};" for cell in parts.cells]
        trial = f"{self.name}_t next;"
        if parts.recorded:
            opened = [line for line in opened if " was = " in line]
            asked = [*copied, f"(void){self.name}_step(&next, was);", f"return {same};"]
            return [trial, *opened, "", *asked]
        opened = [line for line in opened if " n_" in line]
        if not filters:
            return [trial, "", *copied, f"(void){self.name}_step(&next, 0u);", f"return {same};"]
        guess = [
            line
            for f in filters
            for line in branch(self._ask_down(f.button)[0], [f"was |= {self.buttons[f.button]};"], [], SYNTAX)
        ]
        return [
            trial,
            *opened,
            "uint8_t was = 0u;",
            "",
            *guess,
            *copied,
            f"(void){self.name}_step(&next, was);",
            f"return {same};",
        ]

    def _settled(self, item: Filter) -> str:
        n = filter_name(self.port, item.button)
        return f"(({n} == 0u) || ({n} == {self._top(item)}))"

    # --- count ---

    def _count(self, machine: CountParts) -> list[str]:
        lines: list[str] = []
        for item in machine.filters:
            lines += [
                "",
                f"/* {comment(self.port.buttons[item.button])}: a change counts once seen long enough. */",
                *self._filter(item),
            ]
        latch = render(machine.latch, self._ask_down, self._set_latch, SYNTAX)
        lines += ["", "/* The latch by level. */", *latch] if latch else []
        return lines + (self._toggle(machine.toggle) if machine.toggle else [])

    def _top(self, item: Filter) -> str:
        if item.release.value == 1:
            return self._ref(item.press)
        return f"(({self._ref(item.press)} + {self._ref(item.release)}) - 1u)"

    def _filter(self, item: Filter) -> list[str]:
        n, press = filter_name(self.port, item.button), self._ref(item.press)
        up, down, top = [f"{n}++;"], [f"{n}--;"], [f"{n} = {self._top(item)};"]
        if item.release.value == 1:
            held = branch(f"{n} < {press}", up, [], SYNTAX)
        elif item.press.value == 1:
            held = top
        else:
            held = branch(f"{n} < ({press} - 1u)", up, top, SYNTAX)
        if item.release.value == 1:
            opened = [f"{n} = 0u;"]
        elif item.press.value == 1:
            opened = branch(f"{n} > 0u", down, [], SYNTAX)
        else:
            opened = branch(f"{n} > {press}", down, [f"{n} = 0u;"], SYNTAX)
        return [
            self._ask(item.button)[0].join(SYNTAX.first),
            *_indent(held),
            SYNTAX.otherwise,
            *_indent(opened),
            "}",
        ]

    def _set_latch(self, pair: tuple[int, int]) -> list[str]:
        if pair == (0, 1):
            return []
        if pair == (1, 0):
            return ["q ^= 1u;"]
        return [f"q = {pair[0]}u;"]

    def _toggle(self, toggle: ToggleParts) -> list[str]:
        pressed = self._ask_down(toggle.button)[0]
        acts = ["q ^= 1u;", f"c = {self._either(toggle.tap)};"]
        live = render(toggle.live, self._ask_down, lambda yes: acts if yes else [], SYNTAX)
        press = [*branch("c == 0u", live, [], SYNTAX), *self._toward(toggle)]
        whole = branch(pressed, press, branch("c > 0u", ["c--;"], [], SYNTAX), SYNTAX)
        name = comment(self.port.buttons[toggle.button])
        note = f"/* {name} turns the latch once the re-arm counter has run out. */"
        return ["", note, *whole]

    def _either(self, pair: tuple[Number, Number]) -> str:
        if pair[0] == pair[1]:
            return self._ref(pair[0])
        kind = "uint8_t" if max(pair[0].value, pair[1].value) < 256 else "uint16_t"
        return f"({kind})((q != 0u) ? {self._ref(pair[1])} : {self._ref(pair[0])})"

    def _toward(self, toggle: ToggleParts) -> list[str]:
        paces = {number.value for number in toggle.pace}
        kind = _type(toggle.most)
        if paces == {0}:
            return []
        if min(paces) >= toggle.most:
            return [f"c = {self._either(toggle.hold)};"]
        same = toggle.hold[0] == toggle.hold[1]
        opened = [] if same else [f"{kind} hold = {self._either(toggle.hold)};"]
        hold = self._ref(toggle.hold[0]) if same else "hold"
        if paces == {1}:
            down = branch(f"c > {hold}", ["c--;"], [], SYNTAX) if toggle.above else []
            return [*opened, *branch(f"c < {hold}", ["c++;"], down, SYNTAX)]
        pace = self._either(toggle.pace)
        limit = branch(f"by > {pace}", [f"by = {pace};"], [], SYNTAX)
        up = [f"{kind} by = ({kind})({hold} - c);", *limit, f"c = ({kind})(c + by);"]
        down = [f"{kind} by = ({kind})(c - {hold});", *limit, f"c = ({kind})(c - by);"]
        return [*opened, *branch(f"c < {hold}", up, down if toggle.above else [], SYNTAX)]

    # --- charge ---

    def _charge(self, machine: ChargeParts) -> list[str]:
        names = copies(machine)
        if fused(machine):
            return self._fused(machine, names)
        decide = render(machine.decide, self._ask, lambda f: self._flip(f, names), SYNTAX)
        lines = ["", "/* Decide with the charge from before this tick. */", *decide] if decide else []
        stored = [self._pack(cell) for cell in self.parts.cells if early(cell, machine)]
        lines += ["", *stored] if stored else []
        mixed = any(motion.mixes for motion in machine.motions)
        for k, (x, motion) in enumerate(zip(names, machine.motions, strict=True)):
            moved = self._motion(motion, x, f"y{k}" if mixed else x, names)
            about = comment(self._capacitor(k))
            lines += ["", f"/* Move the copy of {about} by one tick. */", *moved] if moved else []
        if mixed:
            lines += ["", *(f"{x} = y{k};" for k, x in enumerate(names))]
        return lines

    def _fused(self, machine: ChargeParts, names: tuple[str, ...]) -> list[str]:
        """Return decision and motion under one question."""
        decide, (motion,) = machine.decide, machine.motions
        whole = motion.whole
        assert isinstance(decide, Node) and isinstance(whole, Node)
        opened, act, closed = self._ways(motion, "x", "x", names)
        stored = [self._pack(cell) for cell in self.parts.cells if early(cell, machine)]
        yes, no = (
            [
                *render(flips, self._ask, lambda f: self._flip(f, names), SYNTAX),
                *([] if motion.scales else stored),
                *render(moves, self._ask, act, SYNTAX),
            ]
            for flips, moves in ((decide.yes, whole.yes), (decide.no, whole.no))
        )
        about = f"/* Decide with the charge from before this tick; move the copy of {comment(self._capacitor(0))}. */"
        chain = choose(decide, *self._ask(decide.ask), yes, no, SYNTAX)
        return ["", about, *opened, *chain, *(["", *stored] if stored and motion.scales else []), *closed]

    def _capacitor(self, k: int) -> str:
        assert isinstance(self.port.machine, Charge)
        return self.port.machine.capacitors[k]

    def _motion(self, motion: Motion, x: str, y: str, names: tuple[str, ...]) -> list[str]:
        if motion.whole is None:
            return self._move(motion, x, y)
        opened, act, closed = self._ways(motion, x, y, names)
        return [*opened, *render(motion.whole, self._ask, act, SYNTAX), *closed]

    def _ways(
        self, motion: Motion, x: str, y: str, names: tuple[str, ...]
    ) -> tuple[list[str], Callable[[Alone | Mix | Affine], list[str]], list[str]]:
        """Return what to write before the modes' tree, for each of its leaves, and after it."""
        if motion.scales:
            return self._scales(motion, x, y)
        opened = [] if x == y else [f"uint16_t {y} = {x};"]
        return opened, lambda leaf: self._whole(leaf, x, y, names), []

    def _scales(
        self, motion: Motion, x: str, y: str
    ) -> tuple[list[str], Callable[[Alone | Mix | Affine], list[str]], list[str]]:
        """Return one multiplication for all modes, with its numbers chosen before."""
        assert motion.whole is not None
        said = [leaf for leaf in leaves(motion.whole) if isinstance(leaf, Affine)]
        stays, add = f"stays{x[1:]}", f"add{x[1:]}"
        more = any(leaf.add for leaf in said)
        same = len({leaf.number for leaf in said}) == 1
        kept = self._scaled(x, self._ref(said[0].number) if same else stays)

        def numbers(leaf: Alone | Mix | Affine) -> list[str]:
            assert isinstance(leaf, Affine)
            amount = [f"{add} = {self._ref(leaf.add) if leaf.add else '0u'};"] if more else []
            return amount + ([] if same else [f"{stays} = {self._ref(leaf.number)};"])

        opened = [
            *([] if same else [f"uint16_t {stays};"]),
            *([f"uint16_t {add};"] if more else []),
            *([] if x == y else [f"uint16_t {y};"]),
        ]
        return opened, numbers, [f"{y} = (uint16_t)({kept} + {add});" if more else f"{y} = {kept};"]

    def _scaled(self, x: str, number: str) -> str:
        return f"{self.name}_scaled({x}, {number})"

    def _affine(self, leaf: Affine, x: str, y: str) -> list[str]:
        add, ref = leaf.add and self._ref(leaf.add), self._ref(leaf.number)
        if leaf.kind == "scale":
            kept = self._scaled(x, ref)
            lines = [f"{y} = (uint16_t)({kept} + {add});" if add else f"{y} = {kept};"]
        else:
            # In one expression: a second statement on the same variable has been miscompiled (SDCC 4.2.0, PDK).
            gone = f"(uint16_t)({x} >> {ref})"
            lines = [f"{y} = (uint16_t)({x} - {f'(uint16_t)({gone} - {add})' if add else gone});"]
        if leaf.guard.number is None:
            return lines
        side = "<" if leaf.guard.only == "up" else ">"
        return branch(f"{x} {side} {self._ref(leaf.guard.number)}", lines, [], SYNTAX)

    def _flip(self, flips: Flips, names: tuple[str, ...]) -> list[str]:
        low, high = self._any(flips.low, names), self._any(flips.high, names)
        turn = ["q ^= 1u;", *self._turn_copy()]
        if low == high:
            return turn if low == "" else branch(low, turn, [], SYNTAX) if low else []
        up, down = (self._turned(text, value) for text, value in ((low, 1), (high, 0)))
        if not up:
            return branch("q != 0u", down, [], SYNTAX)
        return branch("q == 0u", up, down, SYNTAX)

    def _turn_copy(self) -> list[str]:
        return ["x ^= 0xFFFFu;"] if self.parts.mirrored else []

    def _turned(self, condition: str | None, value: int) -> list[str]:
        if condition is None:
            return []
        turn = [f"q = {value}u;", *self._turn_copy()]
        return branch(condition, turn, [], SYNTAX) if condition else turn

    def _any(self, any_of: Any, names: tuple[str, ...]) -> str | None:
        """Return the condition as text; empty where it always holds, None where it never does."""
        if not any_of:
            return None
        return " || ".join(self._all(a, names, len(any_of) > 1) for a in any_of)

    def _all(self, all_of: All, names: tuple[str, ...], nested: bool) -> str:
        texts = [self._compare(test, names) for test in all_of]
        joined = " && ".join(texts if len(texts) == 1 else [f"({text})" for text in texts])
        return f"({joined})" if nested else joined

    def _compare(self, test: Compare, names: tuple[str, ...]) -> str:
        if test.alone is not None:
            return f"{names[test.alone]} {test.operator} {self._ref(test.limit)}"
        terms = [
            f"({self._ref(w)} * (int32_t){x})" for x, w in zip(names, test.weights, strict=True) if w.value
        ]
        return f"({' + '.join(terms) or 'INT32_C(0)'}) {test.operator} {self._ref(test.limit)}"

    def _move(self, motion: Motion, x: str, y: str) -> list[str]:
        opened = [] if x == y else [f"uint16_t {y} = {x};"]
        used = amounts_of(motion)
        if not used:  # only jumps and rests
            return opened + render(motion.aims, self._ask, lambda aim: self._jump(aim.end, y), SYNTAX)
        end, kind = f"end{x[1:]}", used[0].kind
        part = f"{kind}{x[1:]}"
        declared = [f"uint16_t {end};"]
        if len(used) > 1:
            declared.append(f"uint{8 if kind == 'shift' else 16}_t {part};")
        aims = render(motion.aims, self._ask, lambda aim: self._aim(aim, y, end, part), SYNTAX)
        apart = render(motion.amounts, self._ask, lambda amount: self._choose(amount, part), SYNTAX)
        if len(used) == 1:
            apart, part = [], self._ref(used[0].number)
        go = self._go_rate if kind == "rate" else self._go_shift
        return [*opened, *declared, *aims, *apart, *go(y, end, part, min(a.number.value for a in used))]

    def _choose(self, amount: Amount | None, part: str) -> list[str]:
        return [f"{part} = {self._ref(amount.number)};"] if amount else []

    def _go_rate(self, x: str, end: str, rate: str, _least: int) -> list[str]:
        # Two calls take fewer registers across the multiplication than one with the sign kept.
        up, down = (
            f"{self.name}_part((uint16_t)({far}), {rate})" for far in (f"{end} - {x}", f"{x} - {end}")
        )
        return branch(
            f"{x} < {end}", [f"{x} = (uint16_t)({x} + {up});"], [f"{x} = (uint16_t)({x} - {down});"], SYNTAX
        )

    def _go_shift(self, x: str, end: str, shift: str, least: int) -> list[str]:
        """Return the lines for a rounded shift, in a form that can't leave 16 bits on the way."""
        by = f"by{x[1:]}"
        half = f"(uint16_t)({by} >> (uint8_t)({shift} - 1u))"
        rounded = f"(uint16_t)({by} >> {shift}) + ({half} & 1u)"
        if least > 1:
            rounded = f"(uint16_t)({half} + 1u) >> 1u"
        return [
            f"uint16_t {by} = ({x} < {end}) ? (uint16_t)({end} - {x}) : (uint16_t)({x} - {end});",
            f"{by} = (uint16_t)({rounded});",
            f"{x} = ({x} < {end}) ? (uint16_t)({x} + {by}) : (uint16_t)({x} - {by});",
        ]

    def _aim(self, aim: Alone, x: str, name: str, part: str) -> list[str]:
        """Return the lines that set the target; a jump goes there at once, so that no distance is left."""
        end = aim.end
        jump = self._jump(end, x) if end.whole else []
        return [*jump, f"{name} = {self._target(end, x)};", *self._choose(aim.amount, part)]

    def _jump(self, end: End, x: str) -> list[str]:
        return [] if end.number is None else [f"{x} = {self._target(end, x)};"]

    def _target(self, end: End, x: str) -> str:
        if end.number is None:
            return x
        ref = self._ref(end.number)
        test = {"up": f"({x} < {ref})", "down": f"({x} > {ref})"}.get(end.only)
        return f"{test} ? {ref} : {x}" if test else ref

    def _whole(self, leaf: Alone | Mix | Affine, x: str, y: str, names: tuple[str, ...]) -> list[str]:
        if isinstance(leaf, Affine):
            return self._affine(leaf, x, y)
        if isinstance(leaf, Mix):
            terms = [
                self._kept(sign, keep, copy, end)
                for (sign, keep), copy, end in zip(leaf.keep, names, leaf.ends, strict=True)
                if keep.value
            ]
            total = " ".join([f"(int32_t){self._ref(leaf.end)}", *terms])
            return [f"{y} = {self.name}_clamp({total});"]
        end = self._target(leaf.end, x)
        if leaf.amount is None:
            return [] if leaf.end.number is None else [f"{y} = {end};"]
        return [f"{y} = {self.name}_{leaf.amount.kind}({x}, {end}, {self._ref(leaf.amount.number)});"]

    def _kept(self, sign: int, keep: Number, x: str, end: Number) -> str:
        mark = "+" if sign > 0 else "-"
        if keep.value == 65536:
            return f"{mark} ((int32_t){x} - (int32_t){self._ref(end)})"
        return f"{mark} {self.name}_kept({x}, {self._ref(end)}, {self._ref(keep)})"


def _bits(
    words: tuple[str, ...], names: tuple[str, ...], first: int, edge: tuple[int, ...]
) -> list[dict[str, str]]:
    """Return rows for buttons or outputs, with the example boards' pins: *first* and on, those of *edge*."""
    shorts = unique(names)
    return [
        {
            "word": w,
            "mask": f"0x{1 << i:02X}u",
            "name": comment(n),
            "short": shorts[i],
            "avr": str(first + i),
            "nrf": str(edge[i]),
        }
        for i, (w, n) in enumerate(zip(words, names, strict=True))
    ]


def early(cell: Cell, machine: ChargeParts | CountParts) -> bool:
    """Whether a cell is stored before the copies move, to free its registers for a multiplication."""
    if isinstance(machine, CountParts) or set(copies(machine)) & {field.name for field in cell.fields}:
        return False
    whole = machine.motions[0].whole
    if fused(machine) and not machine.motions[0].scales and whole is not None and _asks(whole, LATCH):
        return False  # the motion wants the latch as well, and storing it twice costs more than it frees
    return any(_multiplies(motion) for motion in machine.motions)


def _asks(tree: Tree[Alone | Mix | Affine], question: int) -> bool:
    """Whether a tree asks a question anywhere."""
    if isinstance(tree, Leaf):
        return False
    return tree.ask == question or _asks(tree.yes, question) or _asks(tree.no, question)


def _alone(cell: Cell, name: str) -> bool:
    """Whether a cell holds one field of that name and nothing else."""
    return [field.name for field in cell.fields] == [name]


def fused(machine: ChargeParts) -> bool:
    """Whether decision and motion hang on the same button, so that it need be asked but once."""
    if len(machine.motions) > 1:
        return False
    decide, whole = machine.decide, machine.motions[0].whole
    return isinstance(decide, Node) and isinstance(whole, Node) and decide.ask == whole.ask != LATCH


def _multiplies(motion: Motion) -> bool:
    if motion.whole is None:
        return any(amount.kind == "rate" for amount in amounts_of(motion))
    return any(isinstance(leaf, Affine) and leaf.kind == "scale" for leaf in leaves(motion.whole))


def amounts_of(motion: Motion) -> list[Amount]:
    """Return the different amounts of a motion, wherever they are said."""
    said = [aim.amount for aim in leaves(motion.aims) if aim.amount] + leaves(motion.amounts)
    return list(dict.fromkeys(said))


def _type(most: int) -> str:
    return "uint8_t" if most < 256 else "uint16_t"


def _meaning(field: Field, port: Port, mirrored: bool) -> str:
    if field.name == "q":
        return "the latch, 1 = output high"
    if field.name == "was":
        return "the buttons of the last step"
    if field.name == "c":
        return "open ticks until the next press acts"
    if field.name.startswith("n_"):
        return f"agreement counter, 0 to {field.most}"
    charge = port.machine
    k = int(field.name[1:] or 0)
    turned = "; 65535 less itself while the latch is 1" if mirrored else ""
    return f"copy of {charge.capacitors[k]}, {charge.low_v[k]:.9g} V + {charge.scale_v[k]:.9g} V each{turned}"  # type: ignore[union-attr]


def _place(field: Field, cell: Cell) -> tuple[int, int]:
    """Return a field's first and last bit; the last field reaches to the cell's end."""
    at = sum(f.bits for f in cell.fields[: cell.fields.index(field)])
    last = at + field.bits - 1
    alone = field is cell.fields[-1] and field.name != "q"
    return at, cell.width - 1 if alone else last


def _unpack(cell: Cell, was: bool = False) -> list[str]:
    """Return the locals of a cell's fields; the last buttons are only read where *was* asks for them."""
    lines = []
    for field in cell.fields:
        if field.name == "was" and not was:
            continue
        at, last = _place(field, cell)
        kind = f"uint{8 if last - at < 8 else 16}_t"
        if kind == "uint8_t" and field.name.startswith("n_") and _alone(cell, field.name):
            kind = "uint_fast8_t"  # below its limit by itself: a 32-bit part need not cut it to a byte
        value = f"m->{cell.name}"
        if at:
            value = f"({value} >> {at}u)"
        if last != cell.width - 1:
            value = f"({value} & {(1 << (last - at + 1)) - 1}u)"
        whole = at == 0 and last == cell.width - 1
        lines.append(f"{kind} {field.name} = {value if whole else f'({kind}){value}'};")
    return lines


def _indent(lines: list[str]) -> list[str]:
    return [SYNTAX.indent + line for line in lines]


def recovery(parts: Parts) -> list[str]:
    """Return what the core does from an impossible state, as comment lines."""
    spare = [
        (1 << (last - at + 1)) - 1 - f.most
        for cell in parts.cells
        for f in cell.fields
        if not f.name.startswith(("x", "was", "q"))
        for at, last in [_place(f, cell)]
    ]
    if isinstance(parts.machine, ChargeParts):
        return wrap(
            "Every bit pattern of the state is a legal one after one step: a copy that was disturbed is some "
            "voltage, and decays with the circuit's own time constant."
        )
    ticks = max(spare, default=0) + 1
    return wrap(
        f"From any bit pattern of the state the core is back in a legal one after at most {ticks} "
        f"tick{'s' * (ticks > 1)} with the buttons open."
    )


# --- vectors ---


def suite_rows(suite: Suite) -> dict[str, object]:
    """Return the suite as finished rows: the cases in order, with stimulus and answer as lines of runs."""
    return {
        "cases": [
            {
                "name": string(case.name),
                "ticks": case.ticks,
                "purpose": comment(case.purpose),
                "held": runs(case, "held"),
                "expected": runs(case, "expected"),
                "flat_held": runs(case, "held", "{}, {},"),
                "flat_expected": runs(case, "expected", "{}, {},"),
            }
            for case in suite.cases
        ],
        "guarantees": [line for sentence in suite.guarantees for line in wrap(sentence)],
    }


def runs(case: Case, which: str, row: str = "{{{}u, {}u}},") -> list[str]:
    """Return a case's runs as lines of a table; *row* writes one run of ticks and bits."""
    cells = [row.format(ticks, bits) for ticks, bits in getattr(case, which)]
    return [" ".join(cells[i : i + ROWS_A_LINE]) for i in range(0, len(cells), ROWS_A_LINE)]
