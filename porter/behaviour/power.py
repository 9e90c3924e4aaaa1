"""What comes of every way in which the supply comes, goes and dips."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from porter.behaviour.measure import HIGH, LOW, OSCILLATES, Measures
from porter.behaviour.model import Level, PowerRow
from porter.behaviour.rules.words import figure, volts
from porter.circuit.engine import Ints, asserted
from porter.circuit.family import FAMILIES
from porter.circuit.power import Powered, Profile, dip, follow, ramp, step, works_from
from porter.circuit.values import Columns, Floats
from porter.spec.model import RAILS, Circuit

#: Rise times, and lengths of dropouts and dips, second.
RISES = (1e-6, 1e-3, 10e-3, 100e-3, 1.0)
DROPOUTS = (1e-3, 10e-3, 100e-3, 1.0)
DIPS = (1e-3, 100e-3)
#: A dip leaves this part of the supply.
DIP_TO = 0.6
_LEVELS: tuple[Level, Level] = ("low", "high")
_PINS = ("trigger", "threshold", "reset")


@dataclass(frozen=True, slots=True)
class Situation:
    """One course of the supply: its name, the output before (None: off), the held mask."""

    name: str
    profile: Profile
    start: int | None
    held: int


@dataclass(slots=True)
class _Seen:
    """What was noticed on the way, one entry a lane."""

    at_wake: list[Floats | None]
    flips: list[list[tuple[float, int]]] = field(default_factory=list)
    wake_s: list[float] = field(default_factory=list)


def situations(circuit: Circuit, stays: Sequence[bool]) -> tuple[Situation, ...]:
    """Return the courses that are asked: coming up with no button or one held, dropouts, dips.

    Args:
        stays: whether the latch stays low and high at rest: where it doesn't, nothing can be lost.
    """
    full = circuit.supply.nominal
    rises = [("step", step(full)), *((f"ramp {_time(s)}", ramp(full, s)) for s in RISES)]
    low = f"{DIP_TO:.0%}"
    falls = [(f"dropout {_time(s)}", dip(full, 0.0, s)) for s in DROPOUTS]
    falls += [(f"dip to {low} for {_time(s)}", dip(full, DIP_TO * full, s)) for s in DIPS]
    masks = (0, *(1 << i for i in range(len(circuit.buttons))))
    up = [Situation(name, profile, None, held) for held in masks for name, profile in rises]
    down = [Situation(name, profile, q, 0) for q in (LOW, HIGH) if stays[q] for name, profile in falls]
    return (*up, *down)


def _time(value: float) -> str:
    return figure(value, "s")


def power_rows(circuit: Circuit, cols: Columns, nominal: Measures, starts: int) -> Iterator[PowerRow]:
    """Run the nominal unit through every course of the supply.

    Args:
        starts: the level that a port starts at.
    """
    asked = situations(circuit, [bool(ok[0]) for ok in nominal.rests])
    engine, lanes_q, busy, slept, seen = _run(circuit, cols, asked)
    for k, situation in enumerate(asked):
        pair = (2 * k, 2 * k + 1)
        ends = [OSCILLATES if busy[i] else int(lanes_q[i]) for i in pair]
        output = ("low", "high", "oscillates")[ends[0]] if ends[0] == ends[1] else "undetermined"
        yield PowerRow(
            situation.name,
            None if situation.start is None else _LEVELS[situation.start],
            tuple(b.name for i, b in enumerate(circuit.buttons) if situation.held >> i & 1),
            output,  # type: ignore[arg-type]
            _why(engine, situation, ends, bool(slept[2 * k]), seen, pair),
            _port(nominal, situation, starts, bool(slept[2 * k])),
        )


def _run(
    circuit: Circuit, cols: Columns, asked: Sequence[Situation]
) -> tuple[Powered, Ints, np.ndarray, np.ndarray, _Seen]:
    """Run every situation twice: with a latch that wakes low, and with one that wakes high."""
    twice = [s for s in asked for _ in (LOW, HIGH)]
    engine = Powered(circuit, len(twice), cols)
    held = np.array([s.held for s in twice], np.int64)
    lanes = engine.dark(len(twice), held)
    running = np.array([s.start is not None for s in twice])
    if running.any():
        before, _ = engine.settled(np.array([s.start or 0 for s in twice], np.int64), held)
        lanes.put(np.flatnonzero(running), before.take(running))
    seen = _Seen([None] * len(twice), [[] for _ in twice], [0.0] * len(twice))

    def woke(rows: Ints, guards: Floats) -> None:
        for row, f in zip(rows, guards, strict=True):
            seen.at_wake[row] = f

    def flipped(rows: Ints, when: Floats, q: Ints) -> None:
        for row, t, new in zip(rows, when, q, strict=True):
            seen.flips[row].append((float(t), int(new)))

    wakes = np.tile(np.array([LOW, HIGH], np.int64), len(asked))
    slept = follow(engine, lanes, [s.profile for s in twice], wakes, listener=flipped, on_wake=woke)
    return engine, lanes.q, lanes.busy, slept, seen


def _why(
    engine: Powered, situation: Situation, ends: list[int], slept: bool, seen: _Seen, pair: tuple[int, int]
) -> str:
    if not slept:
        return _through(engine, seen.flips[pair[0]])
    f = seen.at_wake[pair[0]]
    assert f is not None
    wakes = _waking(engine, situation.profile)
    if ends[0] != ends[1]:
        return f"no input forces the latch {wakes}: {_distances(engine, f)}"
    if ends[0] == OSCILLATES:
        return "the circuit oscillates with these buttons held"
    forced = _forcing(f, ends[0])
    late = [t for lane in pair for t, _ in seen.flips[lane][-1:]]
    if forced:
        return f"the {forced} input forces it {wakes}: {_distances(engine, f)}"
    return (
        f"nothing forces it at first, but an input does by {_time(max(late))} after the supply began to move"
    )


def _through(engine: Powered, flips: list[tuple[float, int]]) -> str:
    working = f"the chip keeps working (from {volts(works_from(engine.circuit))} on)"
    if not flips:
        return f"{working} and no input forces the latch"
    t, q = flips[0]
    then = "" if len(flips) == 1 else f", in all {len(flips)} times"
    return f"{working}, and the lagging voltages turn it {_LEVELS[q]} after {_time(t)}{then}"


def _waking(engine: Powered, profile: Profile) -> str:
    """Say at which supply the chip starts to work for the last time."""
    least = works_from(engine.circuit)
    through = any(a[0] != b[0] and a[1] < least < b[1] for a, b in pairwise(profile.points))
    at = least if through else max(v for _, v in profile.points)
    return f"when the chip starts to work at {volts(at)}"


def _distances(engine: Powered, f: Floats) -> str:
    """Say where each input is, seen from its level; one that is wired to a rail is no news."""
    pins = engine.circuit.timer.pins
    return ", ".join(
        f"{pin} {volts(abs(v))} {'above' if v > 0 else 'below'} its level"
        for pin, v in zip(_PINS, f, strict=True)
        if pins.get(pin, "gnd") not in RAILS
    )


def _forcing(f: Floats, q: int) -> str:
    """Name the input whose command it is that the latch is at *q*, empty where there is none."""
    on = asserted(f[None, :], np.zeros((1, 3)), np.zeros((1, 3), bool))
    trigger, threshold, reset = (bool(a[0]) for a in on)
    if reset:
        return "reset" if q == LOW else ""
    if trigger:
        return "trigger" if q == HIGH else ""
    return "threshold" if threshold and q == LOW else ""


def _port(nominal: Measures, situation: Situation, starts: int, lost: bool) -> str:
    """Say what the port does: it starts at a level of its own, then obeys what is held."""
    if not lost and situation.start is not None:
        return f"keeps {_LEVELS[situation.start]} while its own supply holds, else starts {_LEVELS[starts]}"
    begin = starts if nominal.rests[starts][0] else 1 - starts
    end = int(nominal.held[begin, situation.held][0])
    if end == OSCILLATES:
        return f"starts {_LEVELS[starts]}, then oscillates"
    if end == starts or end < 0:
        return f"starts {_LEVELS[starts]}"
    return f"starts {_LEVELS[starts]}, then turns {_LEVELS[end]}"


def power_notes(rows: Sequence[PowerRow]) -> Iterator[str]:
    """Say where the start depends on how the supply comes, and what is assumed of the chip."""
    came = [r for r in rows if r.start is None and not r.held]
    if len({r.output for r in came}) > 1:
        groups: dict[str, list[str]] = {}
        for row in came:
            groups.setdefault(row.output, []).append(row.profile)
        said = "; ".join(f"{output} after {_first_last(names)}" for output, names in groups.items())
        yield f"the start depends on how fast the supply comes: {said}"

    turned: dict[tuple[Level, str], list[str]] = {}
    for row in rows:
        if row.start is not None and row.output in _LEVELS and row.output != row.start:
            turned.setdefault((row.start, row.output), []).append(row.profile)
    for (start, output), names in turned.items():
        yield f"a {start} output is {output} after: {', '.join(names)}"


def _first_last(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{names[0]} to {names[-1]}"


def assumption(circuit: Circuit) -> str:
    """Say what is assumed of the chip on a moving supply."""
    least, family = works_from(circuit), FAMILIES[circuit.timer.family]
    return (
        f"courses of the supply: the chip is taken to work from {volts(least)} on (least published supply of "
        f"the {family.name} family); below, its output drives nothing and the latch is not kept"
    )
