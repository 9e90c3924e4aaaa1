"""Wrong ports on purpose, and whether a suite tells them from the right one."""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TypeVar

import numpy as np

from porter.port.model import U16, Charge, ChargeMode, Count, Move, Port, Test
from porter.port.step import start
from porter.vectors.drive import drive, merged
from porter.vectors.mealy import Ints, Word, rows, successors
from porter.vectors.model import Case, Suite

T = TypeVar("T")

#: Pairs of states that are looked at before equivalence is left undecided.
MOST_PAIRS = 1 << 17

#: Cases of fewer ticks are tried before the others.
SHORT = 1 << 15


@dataclass(frozen=True, slots=True)
class Mutant:
    """A wrong port and what is wrong with it."""

    what: str
    port: Port


@dataclass(frozen=True, slots=True)
class Score:
    """What a suite did to the mutants; each entry says what was wrong with the mutant.

    Args:
        killed: a case fails.
        survivors: no case fails, though some input sequence would tell.
        equivalent: no input sequence tells: not a fault at all.
        undecided: no case fails, and more state pairs than `MOST_PAIRS` left it open whether any would.
    """

    killed: tuple[str, ...]
    survivors: tuple[str, ...]
    equivalent: tuple[str, ...]
    undecided: tuple[str, ...] = ()


def score(port: Port, suite: Suite) -> Score:
    """Run *suite* against every mutant of *port*; those that pass are compared with it state by state."""
    sorted_: dict[str, list[str]] = {"killed": [], "survivors": [], "equivalent": [], "undecided": []}
    for mutant in mutants(port):
        sorted_["killed" if fails(mutant.port, suite) else _why_passed(port, mutant.port)].append(mutant.what)
    return Score(**{key: tuple(value) for key, value in sorted_.items()})


def fails(port: Port, suite: Suite) -> bool:
    """True where *port* gives a wrong answer to some case of *suite*."""
    # the short ones first: most wrong ports fail there, and one that oscillates makes long ones slow
    short = [case for case in suite.cases if case.ticks < SHORT]
    long = [case for case in suite.cases if case.ticks >= SHORT]
    return any(_wrong(port, cases) for cases in (short, long) if cases)


def _wrong(port: Port, cases: list[Case]) -> bool:
    # one entry more than any case expects is wrong already
    most = max(len(case.expected) for case in cases) + 1
    said, _ = drive(port, [case.held for case in cases], most)
    return any(answer != case.expected for answer, case in zip(said, cases, strict=True))


def _why_passed(right: Port, wrong: Port) -> str:
    same = equivalent(right, wrong)
    return "undecided" if same is None else "equivalent" if same else "survivors"


def equivalent(a: Port, b: Port, most: int = MOST_PAIRS) -> bool | None:
    """Tell whether two ports answer every input sequence alike, by walking the pairs of their states.

    Returns:
        None where *most* pairs were seen without an answer.
    """
    decided, word = tell_apart(a, b, most)
    return word is None if decided else None


def tell_apart(a: Port, b: Port, most: int = MOST_PAIRS) -> tuple[bool, Word | None]:
    """Look for a shortest input sequence that two ports answer differently, one mask a tick.

    Returns:
        Whether that was decided within *most* pairs of states, and the sequence if there is one.
    """
    pairs = np.column_stack([rows(start(a)), rows(start(b))])
    wide, k = rows(start(a)).shape[1], a.held_count
    seen, came = {pairs[0].tobytes()}, list[Ints]()
    while len(pairs):
        after_a, out_a = successors(a, pairs[:, :wide])
        after_b, out_b = successors(b, pairs[:, wide:])
        wrong = np.flatnonzero(out_a != out_b)
        if len(wrong):
            return True, _back(came, int(wrong[0]), k)
        flat = np.concatenate([after_a, after_b], axis=2).reshape(-1, pairs.shape[1])
        fresh = _fresh(flat, seen)
        pairs = flat[fresh]
        came.append(fresh)
        if len(seen) > most:
            return False, None
    return True, None


def _back(came: list[Ints], place: int, k: int) -> Word:
    """Return the word to a place in the last level; places are pair * k + input, in every level."""
    word = [place % k]
    for fresh in reversed(came):
        place = int(fresh[place // k])
        word.append(place % k)
    return tuple(reversed(word))


def _fresh(pairs: Ints, seen: set[bytes]) -> Ints:
    kept = []
    for i, pair in enumerate(pairs):
        key = pair.tobytes()
        if key not in seen:
            seen.add(key)
            kept.append(i)
    return np.array(kept, np.int64)


# --- cases that wrong ports call for ---


def sharpen(port: Port, suite: Suite, *, most_pairs: int = 1 << 14, most_entries: int = 4000) -> Suite:
    """Return *suite* with a case for each wrong port that it lets pass and that a short search exposes.

    A charge port's numbers differ from their neighbours by some 20 ppm of the supply; pressing at
    the windows' ends alone can't tell them apart, a sequence looked for on purpose often can.

    Args:
        most_pairs: pairs of states looked at for each wrong port.
        most_entries: run-length coded entries that the whole suite may have.
    """
    room = most_entries - sum(len(case.held) + len(case.expected) for case in suite.cases)
    found: list[Case] = []
    passed = 0
    for mutant in mutants(port):
        if fails(mutant.port, replace(suite, cases=tuple(found))) or fails(mutant.port, suite):
            continue
        decided, word = tell_apart(port, mutant.port, most_pairs)
        if decided and word is None:
            continue
        case = None if word is None else _told_by(port, word, mutant.what, len(found) + 1)
        if case is None or len(case.held) + len(case.expected) > room:
            passed += 1
            continue
        room -= len(case.held) + len(case.expected)
        found.append(case)
    said = f"Of the wrong ports with one number, entry or choice changed, {passed} pass undecided."
    return replace(suite, cases=(*suite.cases, *found), guarantees=(*suite.guarantees, said))


def _told_by(port: Port, word: Word, what: str, number: int) -> Case:
    held = merged((1, mask) for mask in word)
    purpose = f"Tells the port from a wrong one ({what})."
    return Case(f"wrong_{number:03}", purpose, held, drive(port, [held])[0][0])


# --- the wrong ports ---


def mutants(port: Port) -> Iterator[Mutant]:
    """Yield wrong ports: each number one up and one down, each table entry and choice the other way.

    Numbers stay in the range that the port's model allows; a change that leaves no valid port is not made.
    """
    yield Mutant("start_q flipped", replace(port, start_q=1 - port.start_q))
    for q, held, bit in np.ndindex(2, port.held_count, len(port.outputs)):
        answer = _put2(port.answer, q, _put(port.answer[q], held, port.answer[q][held] ^ 1 << bit))
        yield Mutant(f"answer[{q}][{held}] bit {bit} flipped", replace(port, answer=answer))
    parts = _of_charge(port.machine) if isinstance(port.machine, Charge) else _of_count(port.machine)
    for what, machine in parts:
        yield Mutant(what, replace(port, machine=machine))


def _put2(values: tuple[T, T], place: int, value: T) -> tuple[T, T]:
    return (values[0], value) if place else (value, values[1])


def _put(values: tuple[T, ...], place: int, value: T) -> tuple[T, ...]:
    return (*values[:place], value, *values[place + 1 :])


def _nudged(values: tuple[int, ...], least: int, most: int) -> Iterator[tuple[str, tuple[int, ...]]]:
    """Yield *values* with one of them one up or one down, staying within *least* to *most*."""
    for i, value in enumerate(values):
        for by in (-1, 1):
            if least <= value + by <= most:
                yield f"[{i}] {value}{by:+}", _put(values, i, value + by)


def _of_count(machine: Count) -> Iterator[tuple[str, Count]]:
    for q, down in np.ndindex(2, len(machine.live)):
        table = _put2(machine.table, q, _put(machine.table[q], down, 1 - machine.table[q][down]))
        yield f"table[{q}][{down}] flipped", replace(machine, table=table)
    for what, press in _nudged(machine.press, 1, U16):
        yield f"press{what}", replace(machine, press=press)
    for what, release in _nudged(machine.release, 1, U16):
        yield f"release{what}", replace(machine, release=release)
    yield from _of_toggle(machine)


def _of_toggle(machine: Count) -> Iterator[tuple[str, Count]]:
    toggle = machine.toggle
    if toggle is None:
        return
    for down, live in enumerate(machine.live):
        yield f"live[{down}] flipped", replace(machine, live=_put(machine.live, down, not live))
    for what, pair in _nudged(toggle.tap, 0, U16):
        yield f"tap{what}", replace(machine, toggle=replace(toggle, tap=(pair[0], pair[1])))
    for what, pair in _nudged(toggle.hold, 0, U16):
        yield f"hold{what}", replace(machine, toggle=replace(toggle, hold=(pair[0], pair[1])))
    for what, pair in _nudged(toggle.pace, 0, U16):
        yield f"pace{what}", replace(machine, toggle=replace(toggle, pace=(pair[0], pair[1])))


def _of_charge(machine: Charge) -> Iterator[tuple[str, Charge]]:
    for what, first in _nudged(machine.start, 0, U16):
        yield f"start{what}", replace(machine, start=first)
    for q in range(2):
        for held, mode in enumerate(machine.modes[q]):
            for what, wrong in _of_mode(mode):
                modes = _put2(machine.modes, q, _put(machine.modes[q], held, wrong))
                yield f"modes[{q}][{held}].{what}", replace(machine, modes=modes)


def _of_mode(mode: ChargeMode) -> Iterator[tuple[str, ChargeMode]]:
    for what, wrong in _of_tests(mode.flips):
        yield f"flips{what}", replace(mode, flips=wrong)
    for what, wrong in _of_tests(mode.force):
        yield f"force{what}", replace(mode, force=wrong)
    for what, wrong in _of_tests(mode.blocks):
        yield f"blocks{what}", replace(mode, blocks=wrong)
    for i, move in enumerate(mode.moves):
        for what, moved in _of_move(move):
            yield f"moves[{i}].{what}", replace(mode, moves=_put(mode.moves, i, moved))


def _of_tests(tests: tuple[Test, ...]) -> Iterator[tuple[str, tuple[Test, ...]]]:
    for i, test in enumerate(tests):
        yield f"[{i}] left out", tests[:i] + tests[i + 1 :]
        for what, wrong in _of_test(test):
            yield f"[{i}].{what}", _put(tests, i, wrong)


def _of_test(test: Test) -> Iterator[tuple[str, Test]]:
    yield "ge flipped", replace(test, ge=not test.ge)
    single = len(test.coeff) == 1
    for what, limit in _nudged((test.limit,), 0 if single else -(1 << 31), U16 if single else (1 << 31) - 1):
        yield f"limit{what}", replace(test, limit=limit[0])
    for what, coeff in () if single else _nudged(test.coeff, -32767, 32767):
        yield f"coeff{what}", replace(test, coeff=coeff)


def _of_move(move: Move) -> Iterator[tuple[str, Move]]:
    """Yield wrong moves: the numbers that the move's kind looks at, and standing still or jumping."""
    affine = move.kind in ("scale", "drain")
    if move.kind != "hold":
        yield "stands still", Move("hold", move.end)
        for what, end in () if affine else _nudged((move.end,), 0, U16):
            yield f"end{what}", replace(move, end=end[0])
        for what, add in _nudged((move.add,), 0, U16) if affine else ():
            if _fits(wrong := replace(move, add=add[0])):
                yield f"add{what}", wrong
    if move.kind in ("shift", "multiply", "scale", "drain", "mix"):
        yield "jumps", replace(move, kind="jump", only="both")
    if move.only != "both":
        yield "moves both ways", replace(move, only="both")
    if move.kind == "shift":
        yield from ((f"shift{what}", replace(move, shift=n[0])) for what, n in _nudged((move.shift,), 0, 15))
    if move.kind == "drain":
        shifts = ((f"shift{what}", replace(move, shift=n[0])) for what, n in _nudged((move.shift,), 1, 15))
        yield from ((what, wrong) for what, wrong in shifts if _fits(wrong))
    if move.kind in ("multiply", "scale"):
        rates = ((f"rate{what}", replace(move, rate=n[0])) for what, n in _nudged((move.rate,), 1, 65535))
        yield from ((what, wrong) for what, wrong in rates if _fits(wrong))
    if move.kind == "mix":
        yield from ((f"keep{what}", replace(move, keep=n)) for what, n in _nudged(move.keep, -65536, 65536))
        yield from ((f"ends{what}", replace(move, ends=n)) for what, n in _nudged(move.ends, 0, U16))


def _fits(move: Move) -> bool:
    """Whether a scale or drain keeps every copy within its range; true for the other kinds."""
    top = {"scale": U16 * move.rate >> 16, "drain": U16 - (U16 >> move.shift)}.get(move.kind, 0)
    return top + move.add <= U16
