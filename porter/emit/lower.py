"""From a port to the parts of a step, still in no language: trees of answers, named numbers, packed fields.

Every language writes the same parts, so that a merge or a bound is worked out once, here.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import product
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from porter.emit.numbers import Number, Numbers
from porter.emit.trees import LATCH, Leaf, Tree, grow, leaves
from porter.port.model import U16, Charge, ChargeMode, Count, Move, Port, State, Test
from porter.port.swift import stepper

# --- decisions ---

Operator = Literal[">=", "<=", ">", "<"]


@dataclass(frozen=True, slots=True)
class Compare:
    """``sum(coeff * X) operator limit`` over the copies X; `coeff` is (1,) for one capacitor."""

    coeff: tuple[int, ...]
    operator: Operator
    limit: Number
    weights: tuple[Number, ...] = ()  # the coefficients by name, where there are several

    @property
    def alone(self) -> int | None:
        """The index of the one copy that is compared, None for a sum of several."""
        return self.coeff.index(1) if not self.weights else None

    @property
    def least(self) -> int | None:
        """The least sum that holds, None where only a most is set."""
        return {">=": self.limit.value, ">": self.limit.value + 1}.get(self.operator)

    @property
    def most(self) -> int | None:
        """The greatest sum that holds, None where only a least is set."""
        return {"<=": self.limit.value, "<": self.limit.value - 1}.get(self.operator)

    def inverse(self) -> "Compare":
        """Return the comparison that holds exactly where this one does not."""
        opposite: dict[Operator, Operator] = {">=": "<", "<": ">=", "<=": ">", ">": "<="}
        return Compare(self.coeff, opposite[self.operator], self.limit, self.weights)


#: All must hold; any must hold.  An empty `All` always holds, an empty `Any` never.
All = tuple[Compare, ...]
Any = tuple[All, ...]


@dataclass(frozen=True, slots=True)
class Flips:
    """When the latch flips, from low and from high."""

    low: Any
    high: Any


def _bounds(coeff: tuple[int, ...]) -> tuple[int, int]:
    return sum(min(c, 0) for c in coeff) * U16, sum(max(c, 0) for c in coeff) * U16


def tighten(tests: All) -> All | None:
    """Return the tightest of *tests*, or None where they can't all hold over copies in 0..65535."""
    kept: list[Compare] = []
    for coeff in dict.fromkeys(test.coeff for test in tests):
        same = [test for test in tests if test.coeff == coeff]
        low, high = _bounds(coeff)
        floor = max((t for t in same if t.least is not None), key=lambda t: t.least or 0, default=None)
        roof = min((t for t in same if t.most is not None), key=lambda t: t.most or 0, default=None)
        least = low if floor is None or floor.least is None else max(floor.least, low)
        most = high if roof is None or roof.most is None else min(roof.most, high)
        if least > most:
            return None
        kept += [floor] if floor and least > low else []
        kept += [roof] if roof and most < high else []
    return tuple(kept)


@dataclass(frozen=True, slots=True)
class Tests:
    """One mode's tests: it flips where any of `force` holds, or any of `flips` and none of `blocks`."""

    flips: tuple[Compare, ...]
    force: tuple[Compare, ...]
    blocks: tuple[Compare, ...]

    def holds(self) -> list[All]:
        """Return the alternatives that make the mode flip."""
        free = tuple(test.inverse() for test in self.blocks)
        return [(test,) for test in self.force] + [(test, *free) for test in self.flips]

    def fails(self) -> list[All]:
        """Return the alternatives that keep the mode from flipping."""
        calm = tuple(test.inverse() for test in self.force)
        still = tuple(test.inverse() for test in self.flips)
        return [(*calm, *still)] + ([(*calm, test) for test in self.blocks] if self.flips else [])


def flips(forward: Tests, back: Tests) -> Any:
    """Return when the latch flips and stays: *forward* holds, and *back*, the mode after it, doesn't."""
    found = (tighten((*go, *stay)) for go, stay in product(forward.holds(), back.fails()))
    kept = list(dict.fromkeys(alternative for alternative in found if alternative is not None))
    return tuple(
        a for i, a in enumerate(kept) if not any(_covers(b, a, j < i) for j, b in enumerate(kept) if j != i)
    )


def _covers(wide: All, narrow: All, first: bool) -> bool:
    """Whether *wide* holds wherever *narrow* does; of two equal ones the *first* covers the other."""
    covers = all(tighten((test.inverse(), *narrow)) is None for test in wide)
    return covers and (first or not all(tighten((test.inverse(), *wide)) is None for test in narrow))


# --- motion ---


@dataclass(frozen=True, slots=True)
class End:
    """Where a copy goes: a number, or nowhere (None).

    `only`: ``up`` goes there from below only, ``down`` from above only; `whole`: all the way in one tick.
    """

    number: Number | None
    only: Literal["both", "up", "down"] = "both"
    whole: bool = False


STAY = End(None)


@dataclass(frozen=True, slots=True)
class Amount:
    """How far a copy goes in one tick, of its distance: ``1 / 2**number``, or number 65536ths."""

    kind: Literal["shift", "rate"]
    number: Number


@dataclass(frozen=True, slots=True)
class Alone:
    """A copy's motion in one mode: where to, and how far in one tick (None: not said here)."""

    end: End
    amount: Amount | None


@dataclass(frozen=True, slots=True)
class Mix:
    """A copy's next value: `end` plus each copy's distance from its own end, times that copy's keep."""

    end: Number
    keep: tuple[tuple[int, Number], ...]  # sign and size in 65536ths, one for each copy
    ends: tuple[Number, ...]


@dataclass(frozen=True, slots=True)
class Affine:
    """A copy's next value: what stays of it, and a constant more.

    kind ``scale``: `number` 65536ths stay; ``drain``: one part in two to the power `number` goes.
    `add` None: nothing more.  `guard`: the end from whose one side alone it moves (None: from both).
    """

    kind: Literal["scale", "drain"]
    number: Number
    add: Number | None
    guard: End = STAY


#: Up to so many sorts of scale are written out one by one: the call is shorter than choosing its numbers.
SORTS = 4


@dataclass(frozen=True, slots=True)
class Motion:
    """One copy's motion: where to (`aims`) and how far (`amounts`, where the aims don't say it).

    Where any mode is a mix, a scale or a drain, `whole` says it all instead and the other two are empty.
    """

    aims: Tree[Alone]
    amounts: Tree[Amount]
    whole: Tree[Alone | Mix | Affine] | None = None

    @property
    def mixes(self) -> bool:
        """Whether the copy's next value needs the other copies' present ones."""
        return self.whole is not None and any(isinstance(leaf, Mix) for leaf in leaves(self.whole))

    @property
    def scales(self) -> bool:
        """Whether every mode is a free scale, of more than two sorts: one multiplication then serves all."""
        if self.whole is None:
            return False
        said = leaves(self.whole)
        free = all(isinstance(leaf, Affine) and leaf.kind == "scale" and leaf.guard == STAY for leaf in said)
        return free and len(said) > SORTS


@dataclass(frozen=True, slots=True)
class ChargeParts:
    """A charge port taken apart."""

    starts: tuple[Number, ...]
    decide: Tree[Flips]
    motions: tuple[Motion, ...]


# --- counting ---


@dataclass(frozen=True, slots=True)
class Filter:
    """A button's agreement counter ``n``: 0 = open and settled, `top` = pressed and settled.

    ``n`` joins the reference's counter and its filtered bit: while up it counts held ticks from 0,
    while down it counts open ticks back from `top`; the button is down where ``n >= press``.
    """

    button: int
    press: Number
    release: Number

    @property
    def top(self) -> int:
        """The counter of a button that is held and settled."""
        return self.press.value + self.release.value - 1


@dataclass(frozen=True, slots=True)
class ToggleParts:
    """The toggle's numbers, each for the latch (low, high)."""

    button: int
    tap: tuple[Number, Number]
    hold: tuple[Number, Number]
    pace: tuple[Number, Number]
    live: Tree[bool]
    most: int
    above: bool  # a held button may find the counter above `hold`


@dataclass(frozen=True, slots=True)
class CountParts:
    """A count port taken apart."""

    filters: tuple[Filter, ...]
    latch: Tree[tuple[int, int]]
    toggle: ToggleParts | None


# --- the state in memory ---


@dataclass(frozen=True, slots=True)
class Field:
    """A part of the packed state: `name`, its greatest value, its bits."""

    name: str
    most: int

    @property
    def bits(self) -> int:
        """Bits that the greatest value takes."""
        return max(self.most.bit_length(), 1)


@dataclass(frozen=True, slots=True)
class Cell:
    """One member of the state struct, 8 or 16 bits wide, with its fields from bit 0 upwards."""

    name: str
    width: int
    fields: tuple[Field, ...]


@dataclass(frozen=True, slots=True)
class Parts:
    """Everything a language needs to write a core."""

    port: Port
    numbers: tuple[Number, ...]
    cells: tuple[Cell, ...]
    machine: ChargeParts | CountParts
    answer: Tree[tuple[int, int]]
    recorded: tuple[int, ...]  # buttons whose last reading is kept in the state, for `idle`
    always_idle: bool  # any state is at rest for the reading that led to it
    mirrored: bool  # while the latch is set, the copy is kept as 65535 less itself

    @property
    def sees_held(self) -> bool:
        """Whether `idle` also tells rest with a button held, rather than with all of them open alone."""
        filtered = len(_filtered(self.machine)) == len(self.port.buttons)
        return self.always_idle or bool(self.recorded) or filtered


def lower(port: Port) -> Parts:
    """Take a port apart.

    Raises:
        ValueError: more than eight buttons or outputs, or a test's sum that leaves 32 bits.
    """
    if len(port.buttons) > 8 or len(port.outputs) > 8:
        raise ValueError(f"{port.name}: at most eight buttons and eight outputs fit the step function")
    numbers, charge, mirrored = Numbers(port), isinstance(port.machine, Charge), is_mirrored(port)
    as_asked, port = port, stored(port, mirrored) if charge else port
    machine = _charge(port, numbers, mirrored) if charge else _count(port, numbers)
    answer = grow([(port.answer[0][h], port.answer[1][h]) for h in range(port.held_count)], _buttons(port))
    settled = isinstance(machine, CountParts) and machine.toggle is None and _steady(port)
    free = settled or tells_itself(as_asked, _filtered(machine))
    recorded = () if free else tuple(i for i in _buttons(port) if i not in _filtered(machine))
    cells = _cells(_fields(port, machine, recorded))
    return Parts(port, numbers.all(), cells, machine, answer, recorded, settled, mirrored)


def _buttons(port: Port) -> tuple[int, ...]:
    return tuple(range(len(port.buttons)))


def _filtered(machine: ChargeParts | CountParts) -> tuple[int, ...]:
    return tuple(f.button for f in machine.filters) if isinstance(machine, CountParts) else ()


def _steady(port: Port) -> bool:
    """Whether deciding twice with the same buttons is the same as deciding once."""
    assert isinstance(port.machine, Count)
    low, high = port.machine.table
    return all((low, high)[q][h] == q for h in range(port.held_count) for q in {low[h], high[h]})


# --- charge ---


def _charge(port: Port, numbers: Numbers, mirrored: bool) -> ChargeParts:
    charge = port.machine
    assert isinstance(charge, Charge)
    starts = tuple(
        numbers.get(_of("START", k, charge), "", x, f"start.{k}", f"Copy of {name} at power-on.")
        for k, (x, name) in enumerate(zip(charge.start, charge.capacitors, strict=True))
    )
    decide = grow([_flips(port, h, numbers, mirrored) for h in range(port.held_count)], _buttons(port))
    motions = tuple(_motion(port, k, numbers) for k in range(len(charge.start)))
    return ChargeParts(starts, decide, motions)


def _of(role: str, k: int, charge: Charge) -> str:
    return role if len(charge.start) == 1 else f"{role}_{k}"


def _modes(port: Port) -> list[tuple[int, int, ChargeMode]]:
    charge = port.machine
    assert isinstance(charge, Charge)
    return [(q, h, charge.modes[q][h]) for q, h in product((0, 1), range(port.held_count))]


def _flips(port: Port, held: int, numbers: Numbers, mirrored: bool) -> Flips:
    low, high = (_tests(port, q, held, numbers) for q in (0, 1))
    if not mirrored:
        return Flips(flips(low, high), flips(high, low))
    # What would flip it back is asked of the copy before it is turned round.
    low_now, high_now = (_tests(port, q, held, numbers, turned=True) for q in (0, 1))
    return Flips(flips(low, high_now), flips(high, low_now))


def _tests(port: Port, q: int, held: int, numbers: Numbers, *, turned: bool = False) -> Tests:
    charge = port.machine
    assert isinstance(charge, Charge)
    mode = charge.modes[q][held]
    return Tests(
        *(
            tuple(
                _compare(
                    port, _turn_test(test) if turned else test, q, held, f"{kind}.q{q}.h{held}.{i}", numbers
                )
                for i, test in enumerate(tests)
            )
            for kind, tests in (("flip", mode.flips), ("force", mode.force), ("block", mode.blocks))
        )
    )


_LIMITS = {"flip": "LIMIT", "force": "FORCE", "block": "BLOCK"}


def _compare(port: Port, test: Test, q: int, held: int, key: str, numbers: Numbers) -> Compare:
    charge = port.machine
    assert isinstance(charge, Charge)
    if max(-_bounds(test.coeff)[0], _bounds(test.coeff)[1]) > 2**31 - 1:
        raise ValueError(f"{port.name}: the sum of {key} leaves 32 bits")
    place = numbers.place(q, held)
    if len([c for c in test.coeff if c]) == 1:
        return _compare_one(charge, test, q, place, key, numbers)
    limit = numbers.get(
        f"SUM_{_LIMITS[key.split('.')[0]]}", place, test.limit, f"{key}.limit", _about_test(test, q, key)
    )
    weights = tuple(
        numbers.get(
            "WEIGHT",
            f"{place}_{k}",
            c,
            f"{key}.coeff.{k}",
            f"Weight of the copy of {charge.capacitors[k]} in the sum that decides.",
        )
        for k, c in enumerate(test.coeff)
    )
    return Compare(test.coeff, ">=" if test.ge else "<=", limit, weights)


def _compare_one(charge: Charge, test: Test, q: int, place: str, key: str, numbers: Numbers) -> Compare:
    """Return a test on one copy with its weight divided out, which turns it round where that is negative."""
    k, weight = next((k, c) for k, c in enumerate(test.coeff) if c)
    ge = test.ge == (weight > 0)
    # X >= l / w means X >= the next whole number up, X <= l / w the next one down.
    limit = -(-test.limit // weight) if ge else test.limit // weight
    unit = tuple(int(j == k) for j in range(len(test.coeff)))
    about = _about_test(Test(unit, ge, limit), q, key)
    role = _of(_LIMITS[key.split(".")[0]], k, charge)
    return Compare(unit, ">=" if ge else "<=", numbers.get(role, place, limit, f"{key}.limit", about))


def _about_test(test: Test, q: int, key: str) -> str:
    side = "at least" if test.ge else "at most"
    does = "can't leave" if key.startswith("block") else "leaves"
    return f"The latch {does} {('low', 'high')[q]} where the copy is {side} this."


def _motion(port: Port, k: int, numbers: Numbers) -> Motion:
    asks = (*_buttons(port), LATCH)
    modes = [(q, h, mode.moves[k]) for q, h, mode in _modes(port)]
    if any(move.kind in ("mix", "scale", "drain") for _, _, move in modes):
        whole = [_whole(port, k, q, h, move, numbers) for q, h, move in modes]
        return Motion(Leaf(None), Leaf(None), grow(whole, asks))
    if {move.kind for _, _, move in modes} >= {"shift", "multiply"}:
        modes = [(q, h, _as_rate(move)) for q, h, move in modes]
    ends = [_end(port, k, q, h, move, numbers) for q, h, move in modes]
    amounts = [_amount(port, k, q, h, move, numbers) for q, h, move in modes]
    return _joined(ends, amounts, asks)


def _joined(ends: list[End], amounts: list[Amount | None], asks: tuple[int, ...]) -> Motion:
    """Return one tree for ends and amounts where it is no larger than the ends' own, else one for each."""
    apart = grow([Alone(end, None) for end in ends], asks)
    used = list(dict.fromkeys(amount for amount in amounts if amount))
    if len(used) > 1:
        # A copy that stays or jumps is at its end before the amount is taken: any will do.
        pairs = zip(ends, amounts, strict=True)
        both = grow([Alone(end, amount or used[0]) for end, amount in pairs], asks)
        if len(leaves(both)) <= len(leaves(apart)):
            return Motion(both, Leaf(None))
    return Motion(apart, grow(amounts, asks))


def _as_rate(move: Move) -> Move:
    """Return a shift as a rate: ``(d + 2**(s-1)) >> s == (d * 2**(16-s) + 2**15) >> 16``, to the bit."""
    if move.kind != "shift" or move.shift == 0:
        return move
    return replace(move, kind="multiply", rate=1 << (16 - move.shift), shift=0)


def _whole(port: Port, k: int, q: int, held: int, move: Move, numbers: Numbers) -> Alone | Mix | Affine:
    if move.kind == "mix":
        return _mix(port, k, q, held, move, numbers)
    if move.kind in ("scale", "drain"):
        return _affine(port, k, q, held, move, numbers)
    return Alone(_end(port, k, q, held, move, numbers), _amount(port, k, q, held, move, numbers))


def _affine(port: Port, k: int, q: int, held: int, move: Move, numbers: Numbers) -> Affine:
    top = U16 * move.rate >> 16 if move.kind == "scale" else U16 - (U16 >> move.shift)
    if top + move.add > U16 or not (move.kind == "scale" or 0 < move.shift < 16):
        raise ValueError(f"{port.name}: a {move.kind} leaves 16 bits")
    kind: Literal["scale", "drain"] = "scale" if move.kind == "scale" else "drain"
    number = _pace_number(port, k, q, held, *_SAID[kind], getattr(move, _SAID[kind][1]), numbers)
    add = _pace_number(port, k, q, held, "ADD", "add", move.add, numbers) if move.add else None
    guard = STAY if move.only == "both" else _end(port, k, q, held, move, numbers)
    return Affine(kind, number, add, guard)


def _end(port: Port, k: int, q: int, held: int, move: Move, numbers: Numbers) -> End:
    if move.kind == "hold":
        return STAY
    number = _end_number(port, k, q, held, move.end, numbers, f"move.q{q}.h{held}.{k}.end")
    if move.kind == "jump":
        return End(number, whole=True)
    return End(number, move.only, whole=_is_whole(move))


def _is_whole(move: Move) -> bool:
    return move.kind == "jump" or (move.kind == "shift" and move.shift == 0)


def _end_number(port: Port, k: int, q: int, held: int, end: int, numbers: Numbers, key: str) -> Number:
    charge = port.machine
    assert isinstance(charge, Charge)
    about = f"Where the copy of {charge.capacitors[k]} goes in the end in this mode."
    where = _where(port, numbers, q, held, lambda mode: mode.moves[k].end)
    return numbers.get(_of("END", k, charge), where, end, key, about)


def _where(port: Port, numbers: Numbers, q: int, held: int, pick: Callable[[ChargeMode], int]) -> str:
    """Return a mode's word for a name, without the latch's side where both sides have the same number."""
    charge = port.machine
    assert isinstance(charge, Charge)
    same = pick(charge.modes[0][held]) == pick(charge.modes[1][held])
    return numbers.held(held) if same else numbers.place(q, held)


def _amount(port: Port, k: int, q: int, held: int, move: Move, numbers: Numbers) -> Amount | None:
    if move.kind == "hold" or _is_whole(move):
        return None
    if move.kind == "shift":
        if move.shift > 15:
            raise ValueError(f"{port.name}: a shift of {move.shift} moves a 16-bit copy nowhere")
        return Amount("shift", _pace_number(port, k, q, held, "SHIFT", "shift", move.shift, numbers))
    return Amount("rate", _pace_number(port, k, q, held, "RATE", "rate", move.rate, numbers))


#: Role and field of the number that says how much of a copy stays.
_SAID = {"scale": ("STAYS", "rate"), "drain": ("GOES", "shift")}
_ABOUT = {
    "SHIFT": "Part of its distance that the copy of {} goes in a tick, as a power of two.",
    "RATE": "Part of its distance that the copy of {} goes in a tick, in 65536ths.",
    "STAYS": "Part of the copy of {} that stays in a tick, in 65536ths.",
    "GOES": "Part of the copy of {} that goes in a tick, as a power of two.",
    "ADD": "What the copy of {} gains in a tick.",
}


def _pace_number(
    port: Port, k: int, q: int, held: int, role: str, what: str, value: int, numbers: Numbers
) -> Number:
    charge = port.machine
    assert isinstance(charge, Charge)
    about = _ABOUT[role].format(charge.capacitors[k])
    key = f"move.q{q}.h{held}.{k}.{what}"
    where = _where(port, numbers, q, held, lambda mode: getattr(mode.moves[k], what))
    return numbers.get(_of(role, k, charge), where, value, key, about)


def _mix(port: Port, k: int, q: int, held: int, move: Move, numbers: Numbers) -> Mix:
    key = f"move.q{q}.h{held}"
    ends = tuple(_end_number(port, j, q, held, e, numbers, f"{key}.{j}.end") for j, e in enumerate(move.ends))
    end = _end_number(port, k, q, held, move.end, numbers, f"{key}.{k}.end")
    keep = tuple(
        (1 if n >= 0 else -1, _keep_number(port, k, j, q, held, n, numbers)) for j, n in enumerate(move.keep)
    )
    return Mix(end, keep, ends)


def _keep_number(port: Port, k: int, j: int, q: int, held: int, keep: int, numbers: Numbers) -> Number:
    charge = port.machine
    assert isinstance(charge, Charge)
    pair = f"{charge.capacitors[j]} leaves in {charge.capacitors[k]}"
    about = f"What a distance of {pair} after a tick, in 65536ths."
    key = f"move.q{q}.h{held}.{k}.keep.{j}"
    return numbers.get(f"KEEP_{k}_{j}", numbers.place(q, held), abs(keep), key, about)


# --- the copy turned round ---


def is_mirrored(port: Port) -> bool:
    """Whether the copy is kept as 65535 less itself while the latch is set.

    So it is where the port's moves ask for it, or where that gives both sides more numbers in common.

    Raises:
        ValueError: a scale or drain is mirrored with the latch at 0, or only some are with it at 1.
    """
    charge = port.machine
    if not isinstance(charge, Charge):
        return False
    fixed = [
        (q, move.mirror)
        for q, _, mode in _modes(port)
        for move in mode.moves
        if move.kind in ("scale", "drain")
    ]
    asked = {mirrored for q, mirrored in fixed if q}
    alone = len(charge.start) == 1
    if (0, True) in fixed or len(asked) > 1 or (True in asked and not alone):
        raise ValueError(f"{port.name}: scales and drains are mirrored in part")
    return alone and (asked.pop() if asked else _alike(charge, turned=True) > _alike(charge, turned=False))


def _alike(charge: Charge, *, turned: bool) -> int:
    """Count what both sides of the latch have in common, with the upper side turned round or not."""
    turn = _turn_mode if turned else _plain_mode
    pairs = [(_plain_mode(low), turn(high)) for low, high in zip(*charge.modes, strict=True)]
    tests = sum(bool(a.flips) and a.flips == b.flips for a, b in pairs)
    return tests + sum(a.moves == b.moves for a, b in pairs)


def stored(port: Port, mirrored: bool) -> Port:
    """Return a port whose modes are written for the copy as it is kept."""
    charge = port.machine
    assert isinstance(charge, Charge)
    turn = _turn_mode if mirrored else _plain_mode
    rows = tuple(map(_plain_mode, charge.modes[0])), tuple(map(turn, charge.modes[1]))
    start = tuple(U16 - x for x in charge.start) if mirrored and port.start_q else charge.start
    return replace(port, machine=replace(charge, start=start, modes=rows))


def _turn_mode(mode: ChargeMode) -> ChargeMode:
    turned = (tuple(_turn_test(test) for test in tests) for tests in (mode.flips, mode.force, mode.blocks))
    flips, force, blocks = turned
    moves = tuple(replace(m, mirror=False) if m.mirror else _turn_move(m) for m in mode.moves)
    return ChargeMode(flips, moves, force, blocks)


def _plain_mode(mode: ChargeMode) -> ChargeMode:
    moves = tuple(_turn_move(m) if m.mirror else m for m in mode.moves)
    return replace(mode, moves=moves)


def _turn_test(test: Test) -> Test:
    """Return a test on 65535 less the copy that holds where *test* does: weights and limit turn over."""
    weight = test.coeff[0] if test.coeff else 0
    return replace(test, limit=weight * U16 - test.limit, ge=not test.ge)


def _turn_move(move: Move) -> Move:
    """Return a move that does to 65535 less the copy what *move* does to the copy."""
    if move.kind in ("hold", "scale", "drain"):
        return replace(move, mirror=move.kind != "hold" and not move.mirror)
    only: Literal["both", "up", "down"] = {"both": "both", "up": "down", "down": "up"}[move.only]  # type: ignore[assignment]
    return replace(move, end=U16 - move.end, only=only, mirror=False)


# --- rest ---

_MOST_STATES = 1 << 21


def tells_itself(port: Port, filtered: tuple[int, ...]) -> bool:
    """Whether `idle` can do without the last buttons.

    It then asks whether a step with the buttons open (filtered ones: as their counters say) would
    change anything; looked at in every state there is: that must never be "no" where one more step
    with the buttons that led to the state would.
    """
    states = _every_state(port)
    if states is None or len(states.q) * port.held_count > _MOST_STATES:
        return False
    return all(_at_rest_is_at_rest(port, states, held, filtered) for held in range(1, port.held_count))


def _at_rest_is_at_rest(port: Port, states: State, held: int, filtered: tuple[int, ...]) -> bool:
    step, same = stepper(port), np.full(len(states.q), held)
    after, _ = step(states, same)
    guess = np.zeros(len(states.q), np.int64)
    if filtered:
        guess = after.regs[:, len(port.buttons)] & sum(1 << i for i in filtered)
    said, true = (_stays(step(after, h)[0], after) for h in (guess, same))
    return not (said & ~true).any()


def _stays(a: State, b: State) -> NDArray[np.bool_]:
    return np.asarray((a.q == b.q) & (a.regs == b.regs).all(axis=1))


def _every_state(port: Port) -> State | None:
    """Return all states of a port, reachable or not; None where there are too many to look at."""
    machine = port.machine
    if isinstance(machine, Charge):
        ranges = [range(U16 + 1)] * len(machine.start)
    else:
        n = len(port.buttons)
        top = [max(p, r) for p, r in zip(machine.press, machine.release, strict=True)]
        most = max(*machine.toggle.tap, *machine.toggle.hold) if machine.toggle else 0
        ranges = [*map(range, top), range(1 << n), range(most + 1)]
    sizes = [2, *map(len, ranges)]
    if math.prod(sizes) > _MOST_STATES:
        return None
    grid = np.indices(sizes).reshape(len(sizes), -1).T.astype(np.int64)
    return State(grid[:, 0].astype(np.uint8), grid[:, 1:])


# --- count ---


def _count(port: Port, numbers: Numbers) -> CountParts:
    count = port.machine
    assert isinstance(count, Count)
    filters = tuple(
        _filter(port, i, numbers) for i in _buttons(port) if count.press[i] + count.release[i] > 2
    )
    latch = grow([(count.table[0][h], count.table[1][h]) for h in range(port.held_count)], _buttons(port))
    return CountParts(filters, latch, _toggle(port, numbers))


def _filter(port: Port, button: int, numbers: Numbers) -> Filter:
    count = port.machine
    assert isinstance(count, Count)
    word, name = numbers.held(1 << button), port.buttons[button]
    press = numbers.get(
        f"PRESS_{word}",
        "",
        count.press[button],
        f"press.{button}",
        f"Ticks that {name} must be seen held in a row to count as down.",
    )
    release = numbers.get(
        f"RELEASE_{word}",
        "",
        count.release[button],
        f"release.{button}",
        f"Ticks that {name} must be seen open in a row to count as up.",
    )
    return Filter(button, press, release)


def _toggle(port: Port, numbers: Numbers) -> ToggleParts | None:
    count = port.machine
    assert isinstance(count, Count)
    toggle = count.toggle
    if toggle is None:
        return None
    live = grow(
        [count.live[h] if h >> toggle.button & 1 else None for h in range(port.held_count)], _buttons(port)
    )
    most = max(*toggle.tap, *toggle.hold, 1)
    # The latch changes under a running counter only where a level button turns it.
    free = any(count.table[q][h] != q for q in (0, 1) for h in range(port.held_count))
    above = any((most if free else max(toggle.tap[q], toggle.hold[q])) > toggle.hold[q] for q in (0, 1))
    return ToggleParts(
        toggle.button,
        _pair(
            numbers, "TAP", toggle.tap, "Open ticks from a press that acted to the next that acts, latch {}."
        ),
        _pair(numbers, "HOLD", toggle.hold, "The same after a press held until settled, latch {}."),
        _pair(
            numbers,
            "PACE",
            toggle.pace,
            "Most that the re-arm counter goes toward HOLD in a held tick, latch {}.",
        ),
        live,
        most,
        above,
    )


_SIDES = {"low": "LOW", "high": "HIGH", "either": ""}


def _pair(numbers: Numbers, role: str, values: tuple[int, int], about: str) -> tuple[Number, Number]:
    words = ("either", "either") if values[0] == values[1] else ("low", "high")
    found = [
        numbers.get(role, _SIDES[word], values[q], f"toggle.{role.lower()}.{q}", about.format(word))
        for q, word in enumerate(words)
    ]
    return found[0], found[1]


# --- memory ---


def _fields(port: Port, machine: ChargeParts | CountParts, recorded: tuple[int, ...]) -> list[Field]:
    fields = [Field("q", 1)]
    if recorded:
        fields.append(Field("was", (1 << len(port.buttons)) - 1))
    if isinstance(machine, ChargeParts):
        return fields + [Field(name, U16) for name in copies(machine)]
    fields += [Field(filter_name(port, f.button), f.top) for f in machine.filters]
    return fields + ([Field("c", machine.toggle.most)] if machine.toggle else [])


def copies(machine: ChargeParts) -> tuple[str, ...]:
    """Return the names of the capacitor copies: ``x``, or ``x0``, ``x1``..."""
    count = len(machine.starts)
    return ("x",) if count == 1 else tuple(f"x{k}" for k in range(count))


def filter_name(port: Port, button: int) -> str:
    """Return the name of a button's agreement counter, such as ``n_set``."""
    return "n_" + Numbers(port).held(1 << button).lower()


def _cells(fields: list[Field]) -> tuple[Cell, ...]:
    """Pack fields into the fewest bytes: first fit, the widest first; wide cells go first in memory."""
    bins: list[list[Field]] = []
    for item in sorted(fields, key=lambda f: -f.bits):
        home = next((b for b in bins if sum(f.bits for f in b) + item.bits <= _width(b[0])), None)
        bins.append([item]) if home is None else home.append(item)
    cells = [_cell(sorted(b, key=fields.index), i) for i, b in enumerate(bins)]
    return tuple(sorted(cells, key=lambda cell: -cell.width))


def _width(item: Field) -> int:
    return 8 if item.bits <= 8 else 16


def _cell(fields: list[Field], index: int) -> Cell:
    width = max(_width(f) for f in fields)
    shared = "bits" if any(f.name == "q" for f in fields) else f"bits{index}"
    return Cell(fields[0].name if len(fields) == 1 else shared, width, tuple(fields))
