"""What keeps a memory capacitor from doing its work: levels, divider, feedback, leakage, charge sharing."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from porter.behaviour.measure import OSCILLATES, WindowKey, measure
from porter.behaviour.rules.case import (
    Case,
    MemoryButton,
    arrived,
    hanging,
    leaks,
    name_of,
    settle,
    toggles,
    volts_at,
    without_leak,
)
from porter.behaviour.rules.mending import (
    all_good,
    applied,
    candidates,
    first_good,
    resistors,
    some_units,
    wording,
)
from porter.behaviour.rules.words import (
    figure,
    held_words,
    level,
    plain,
    series,
    two_digits,
    volts,
    with_tolerance,
)
from porter.circuit.engine import THRESHOLD, TRIGGER, Engine, Mask
from porter.circuit.family import FAMILIES
from porter.circuit.network import GND
from porter.circuit.values import Floats, columns
from porter.findings import Finding, Position
from porter.spec.model import Part, Spread

#: Supplies that people have at hand.
_SUPPLIES = (5.0, 6.0, 9.0, 12.0, 15.0)
#: Instants after a press at which its effect is looked at, seconds.
_INSTANTS = np.concatenate([[0.0], np.geomspace(1e-12, 1e4, 321), [np.inf]])
_GUARDS = {TRIGGER: "trigger", THRESHOLD: "threshold"}


@dataclass(frozen=True, slots=True)
class Reach:
    """How far an input gets: its extreme voltage, and the level that it would have to pass."""

    pin: str
    volts: float
    level: float

    @property
    def words(self) -> str:
        """The pin's voltage."""
        return f"the {self.pin} input to {volts(self.volts)}"


def press_reach(case: Case, engine: Engine, q: int, mask: int) -> Reach:
    """Return how far a press from rest takes the input that would turn the output (first unit)."""
    guard = THRESHOLD if q else TRIGGER
    lanes, came = arrived(engine, q, mask)
    if not came[0]:
        lanes, _ = engine.rest(q)
    lanes = lanes.take(np.zeros(len(_INSTANTS), int))
    lanes.q[:], lanes.held[:], lanes.busy[:] = q, mask, False
    engine.run(lanes, _INSTANTS, frozen=True)
    beyond, at = engine.guards(lanes)[:, guard], engine.volts(lanes)
    far = int(beyond.argmax() if q else beyond.argmin())
    volts_ = volts_at(at[far], _node(case, guard), float(engine.supply[0]))
    return Reach(_GUARDS[guard], volts_, volts_ - float(beyond[far]))


def _node(case: Case, guard: int) -> int:
    node = case.pin(_GUARDS[guard])
    return GND if node is None else node


def _blamed(case: Case) -> set[int]:
    return {m.index for m in (*case.by_leak, *case.by_capacitors)}


def _button_place(case: Case, m: MemoryButton) -> Position:
    return case.circuit.buttons[m.index].position


# --- leak-too-high ---


def leak_too_high(case: Case) -> Iterator[Finding]:
    """Something that the circuit does without leakage and no longer does with it."""
    names = leaks(case.circuit)
    if not names:
        return
    rows = np.concatenate([_reduced(case, names, 1e-6)] + [_reduced(case, [n], 1e-6) for n in names])
    without = measure(case.with_rows(rows))
    changed = [k for k in range(len(rows)) if _differences(case, without, k)]
    if 0 not in changed:
        return
    guilty = [n for k, n in enumerate(names, 1) if k in changed] or names
    yield _leak(case, guilty[0], _differences(case, without, 0)[0])


def _reduced(case: Case, names: Sequence[str], share: float) -> Floats:
    return without_leak(case.cols, case.circuit, case.evidence.engine.rows, names, share)


def _differences(case: Case, other, k: int) -> list[tuple[str, int, int]]:  # type: ignore[no-untyped-def]
    """Return what unit *k* of other measurements does otherwise: (what, output, held mask)."""
    nominal = case.evidence.nominal
    found = [("rest", q, 0) for q in (0, 1) if other.rests[q][k] != nominal.rests[q][0]]
    for (button, q, kind), seconds in nominal.windows.items():
        if kind == "shortest-press" and np.isfinite(seconds[0]) != np.isfinite(
            other.windows[button, q, kind][k]
        ):
            found.append(("press", q, 1 << button))
    for (q, mask), output in nominal.held.items():
        if OSCILLATES in (output[0], other.held[q, mask][k]) and output[0] != other.held[q, mask][k]:
            found.append(("hold", q, mask))
    return found


def _leak(case: Case, column: str, lost: tuple[str, int, int]) -> Finding:
    _, name, _ = column.split(".")
    what, q, mask = lost
    engines = [case.evidence.engine, case.with_rows(_reduced(case, leaks(case.circuit), 1e-6))]
    if what == "press":
        with_leak, without = (press_reach(case, e, q, mask) for e in engines)
    else:
        with_leak, without = (_idle_reach(case, e, q, mask) for e in engines)
    message = (
        f"{held_words(case.circuit, mask)}, output {level(q)}: leakage of {name} takes "
        f"{with_leak.words}, where {volts(without.volts)} would stand without it; "
        f"the level between them is {volts(with_leak.level)}"
    )
    part = case.part(name)
    place = (
        part.position
        if part is not None
        else next(b.position for b in case.circuit.buttons if b.name == name)
    )
    return Finding("leak-too-high", "error", place, message, _tighter(case, name, column))


def _idle_reach(case: Case, engine: Engine, q: int, mask: int) -> Reach:
    """Where the input that would turn the output settles with the latch kept at *q*."""
    guard = THRESHOLD if q else TRIGGER
    lanes = settle(engine, q, mask)
    at = volts_at(engine.volts(lanes)[0], _node(case, guard), float(engine.supply[0]))
    return Reach(_GUARDS[guard], at, at - float(engine.guards(lanes)[0, guard]))


def _tighter(case: Case, name: str, column: str) -> str:
    """Find a leakage small enough, in E12 steps; one step further than just enough."""
    clean = measure(case.with_rows(_reduced(case, leaks(case.circuit), 1e-6)))
    shares = [1.0 / v for v in series(1.0, True, 1e6)]
    rows = np.concatenate([_reduced(case, [column], s) for s in shares])
    tried = measure(case.with_rows(rows))
    fine = [s for k, s in enumerate(shares) if _same(clean, tried, k)]
    if not fine:
        return f"fit a `{name}` that leaks less, and parts that do too"
    share = fine[min(1, len(fine) - 1)]
    old = float(case.cols.nominal[case.cols.index(column)])
    new = float(_reduced(case, [column], share)[0, case.cols.index(column)])
    part = case.part(name)
    if new < old and part is not None and part.leak is not None:
        return f"fit a `{name}` with `leak: {plain(two_digits(new, up=False))}A` at most"
    return f"fit a `{name}` with `leak: {plain(two_digits(new, up=True))}` at least"


def _same(clean, tried, k: int) -> bool:  # type: ignore[no-untyped-def]
    rests = all(clean.rests[q][0] == tried.rests[q][k] for q in (0, 1))
    held = all(clean.held[key][0] == tried.held[key][k] for key in clean.held)
    keys: list[WindowKey] = [key for key in clean.windows if key[2] == "shortest-press"]
    return (
        rests
        and held
        and all(np.isfinite(clean.windows[w][0]) == np.isfinite(tried.windows[w][k]) for w in keys)
    )


# --- capacitor-on-inputs ---


def capacitor_on_inputs(case: Case) -> Iterator[Finding]:
    """A capacitor on the inputs that takes the memory's charge before the press can act."""
    for m in case.by_capacitors:
        name = hanging(case.evidence, m)[0]
        part = case.part(name)
        assert part is not None
        q = next((q for q in (1, 0) if not _flips(case, q, m)), 1)
        reach = press_reach(case, case.evidence.engine, q, m.mask)
        message = (
            f"pressing {case.circuit.buttons[m.index].name} shares the memory's charge with {name} "
            f"({figure(part.value.nominal, 'F')}) and takes {reach.words}, "
            f"not {'above' if q else 'below'} {volts(reach.level)}"
        )
        tried = candidates(case, [name], up=False)
        best = first_good(case, tried, lambda engine, m=m: toggles(engine, m.mask))  # type: ignore[misc]
        mend = wording(case, best) if best else f"leave out `{name}`"
        yield Finding("capacitor-on-inputs", "error", part.position, message, mend)


def _flips(case: Case, q: int, m: MemoryButton) -> bool:
    """True where the button turns output *q* from rest, and once more after it was turned there."""
    windows = case.evidence.nominal.windows
    first, again = windows[m.index, q, "shortest-press"][0], windows[m.index, q, "re-arm-after-hold"][0]
    came = np.isfinite(windows[m.index, 1 - q, "shortest-press"][0])
    return bool(np.isfinite(first) and (np.isfinite(again) or not came))


# --- divider-uneven ---


def divider_uneven(case: Case) -> Iterator[Finding]:
    """An input that idles outside the band between the two levels, so that one output can't last."""
    told: set[int] = set()
    for m in case.failing:
        for q in (0, 1):
            if m.index in _blamed(case) or case.evidence.nominal.rests[q][0] or q in told:
                continue
            reach = _idle_reach(case, case.evidence.engine, q, 0)
            if (reach.volts > reach.level) if q else (reach.volts < reach.level):
                told.add(q)
                yield _uneven(case, m, q, reach)


def _uneven(case: Case, m: MemoryButton, q: int, reach: Reach) -> Finding:
    other = _idle_reach(case, case.evidence.engine, 1 - q, 0)
    band = " to ".join(volts(v) for v in sorted((reach.level, other.level)))
    message = (
        f"no button held, output {level(q)}: the {reach.pin} input idles at {volts(reach.volts)}, "
        f"{'above' if q else 'below'} its level {volts(reach.level)} (it must stay within {band}): "
        f"the output can't stay {level(q)}"
    )
    return Finding("divider-uneven", "error", case.place(reach.pin), message, _evener(case, m))


def _evener(case: Case, m: MemoryButton) -> str:
    """Find the resistor change that brings the idle voltages farthest inside the band."""
    tried = candidates(case, resistors(case))
    rows = np.concatenate([applied(case, case.evidence.engine.rows, c) for c in tried]) if tried else None
    if rows is None:
        return "add a resistor from the input to either rail, equal ones"
    engine = case.with_rows(rows)
    inside = np.minimum(-settle_guard(engine, 1, THRESHOLD), settle_guard(engine, 0, TRIGGER))
    inside = np.where(toggles(engine, m.mask), inside, -np.inf)
    best = int(inside.argmax())
    if not np.isfinite(inside[best]):
        return "bring the input's idle voltage to half the supply with two equal resistors"
    return wording(case, tried[best])


def settle_guard(engine: Engine, q: int, guard: int) -> Floats:
    """Return a deciding voltage less its level, settled with no button held and the latch kept at *q*."""
    return np.asarray(engine.guards(settle(engine, q, 0))[:, guard])


# --- high-level-too-low ---


def high_level_too_low(case: Case) -> Iterator[Finding]:
    """A charged (or emptied) memory that does not take the pressed input past its level."""
    for m in case.failing:
        for q in (1, 0):
            if (
                m.index not in _blamed(case)
                and all(r[0] for r in case.evidence.nominal.rests)
                and not _flips(case, q, m)
            ):
                yield from _too_low(case, m, q)


def _too_low(case: Case, m: MemoryButton, q: int) -> Iterator[Finding]:
    reach = press_reach(case, case.evidence.engine, q, m.mask)
    if (reach.volts > reach.level) if q else (reach.volts < reach.level):
        return  # it gets there: something else is the matter
    out = case.pin("output")
    output = case.volts(q, 0, -1 if out is None else out)
    store = f"`{name_of(case.topo, m.store)}` to {volts(case.volts(q, 0, m.store))}"
    name = case.circuit.buttons[m.index].name
    message = (
        f"the {level(q)} output of {volts(output)} charges {store}; pressing {name} takes {reach.words}, "
        f"not {'above' if q else 'below'} its level {volts(reach.level)}: {name} can't turn it {level(1 - q)}"
    )
    yield Finding("high-level-too-low", "error", _button_place(case, m), message, _higher(case, m))


def _higher(case: Case, m: MemoryButton) -> str:
    tried = candidates(case, resistors(case))
    best = first_good(case, tried, lambda engine: toggles(engine, m.mask))
    if best is not None:
        return wording(case, best)
    family = FAMILIES[case.circuit.timer.family]
    for supply in _SUPPLIES:
        if case.supply < supply <= family.supply_v[1] and _works_at(case, m, supply):
            return f"write `supply: {with_tolerance(supply, case.circuit.supply, ' V')}`"
    return f"fit a timer whose output comes closer to the rails: `family: {_rail_to_rail()}`"


def _rail_to_rail() -> str:
    return next(f.name for f in FAMILIES.values() if f.output == "resistive")


def _works_at(case: Case, m: MemoryButton, supply: float) -> bool:
    from dataclasses import replace

    scale = supply / case.supply
    old = case.circuit.supply
    circuit = replace(case.circuit, supply=Spread(supply, old.least * scale, old.most * scale))
    return bool(toggles(Engine(circuit, None, columns(circuit)), m.mask)[0])


# --- feedback-too-strong ---


def feedback_too_strong(case: Case) -> Iterator[Finding]:
    """A button that turns the output back again and again while it is held.

    A gated oscillator, which has no two outputs to turn between, is left in peace.
    """
    told: list[int] = []
    for mask in sorted(range(1, 1 << len(case.circuit.buttons)), key=lambda k: (k.bit_count(), k)):
        if any(mask & t == t for t in told) or not _turner(case, mask):
            continue
        nominal = any(case.evidence.nominal.held[q, mask][0] == OSCILLATES for q in (0, 1))
        shaky = _shaky_units(case, mask)
        if nominal or len(shaky):
            told.append(mask)
            yield _feedback(case, mask, nominal, shaky)


def oscillating_masks(case: Case) -> set[int]:
    """Return the held masks in which some allowed unit oscillates."""
    groups = (case.evidence.nominal, case.evidence.drawn.measures, case.evidence.published.measures)
    return {mask for g in groups for (_, mask), output in g.held.items() if (output == OSCILLATES).any()}


def _turner(case: Case, mask: int) -> bool:
    """True where a button of *mask* alone turns the output both ways."""
    nominal = case.evidence.nominal
    if not all(r[0] for r in nominal.rests):
        return False
    both = [
        all(np.isfinite(nominal.windows[i, q, "shortest-press"][0]) for q in (0, 1))
        for i in range(len(case.circuit.buttons))
        if mask >> i & 1
    ]
    return any(both)


def _shaky_units(case: Case, mask: int) -> Floats:
    """Rows of allowed units that oscillate in a held combination, of the drawing's own spread if any do."""
    for group in (case.evidence.drawn, case.evidence.published):
        busy = (group.measures.held[0, mask] == OSCILLATES) | (group.measures.held[1, mask] == OSCILLATES)
        if busy.any():
            return np.asarray(group.rows[busy])
    return np.zeros((0, len(case.cols.names)))


def _feedback(case: Case, mask: int, nominal: bool, shaky: Floats) -> Finding:
    row = case.evidence.engine.rows if nominal else shaky[:1]
    engine = case.with_rows(row)
    high, low = _idle_reach(case, engine, 1, mask), _idle_reach(case, engine, 0, mask)
    period = _period(engine, mask)
    who = f"{'the circuit' if nominal else 'some allowed unit'} oscillates"
    who += f" with a period of {period}" if period else ""
    message = (
        f"{held_words(case.circuit, mask)}: {who}; it would take {high.words} "
        f"with the output high ({_relation(high)} {volts(high.level)}) "
        f"and {low.words} with it low ({_relation(low)} {volts(low.level)})"
    )
    place = next(b.position for i, b in enumerate(case.circuit.buttons) if mask >> i & 1)
    return Finding(
        "feedback-too-strong", "error" if nominal else "warning", place, message, _weaker(case, mask, shaky)
    )


def _relation(reach: Reach) -> str:
    return "above" if reach.volts > reach.level else "below"


def _period(engine: Engine, mask: int) -> str:
    for q in (0, 1):
        lanes, _ = engine.rest(q)
        engine.press(lanes, mask)
        engine.run(lanes, np.inf)
        if lanes.busy[0] and lanes.period_s[0] > 0:
            return figure(float(lanes.period_s[0]), "s")
    return ""


def _weaker(case: Case, mask: int, shaky: Floats) -> str:
    """Find the least resistor change with which nothing oscillates and the button still turns both ways."""
    turner = next(i for i in range(len(case.circuit.buttons)) if mask >> i & 1 and _turner(case, 1 << i))

    def good(engine: Engine) -> Mask:
        return toggles(engine, 1 << turner) & ~_busy(engine, mask)

    near = [p.name for p in case.circuit.parts if p.kind == "resistor" and _feeds(case, p)]
    tried = [c for names in (near, resistors(case)) for c in candidates(case, names)]
    fine = all_good(case, tried, good)
    units = np.concatenate([shaky[:: max(1, len(shaky) // 20)], some_units(case)])
    for candidate in fine[:8]:
        if not _busy(case.with_rows(applied(case, units, candidate)), mask).any():
            return wording(case, candidate)
    return wording(case, fine[0]) if fine else "feed the memory through a larger resistor"


def _feeds(case: Case, part: Part) -> bool:
    """True for a resistor at a memory capacitor."""
    stores = {name_of(case.topo, m.store) for m in case.memory}
    return bool(stores & set(part.nodes))


def _busy(engine: Engine, mask: int) -> Mask:
    busy = np.zeros(len(engine.rows), bool)
    for q in (0, 1):
        lanes, _ = engine.rest(q)
        engine.press(lanes, mask)
        engine.run(lanes, np.inf)
        busy |= lanes.busy
    return busy
