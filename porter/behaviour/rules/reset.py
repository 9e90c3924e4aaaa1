"""What is wrong around the reset pin, whose level is an absolute voltage and which carries a current."""

from collections.abc import Iterator

import numpy as np

from porter.behaviour.rules.case import Case, parasitic, volts_at
from porter.behaviour.rules.mending import (
    Candidate,
    applied,
    candidates,
    resistors,
    settle_volts,
    wording,
    worst_row,
)
from porter.behaviour.rules.words import change, figure, held_words, plain, series, volts
from porter.circuit.engine import Engine
from porter.circuit.network import Branch
from porter.circuit.values import Floats
from porter.findings import Finding

#: What takes the reset pin below this part of its highest voltage is meant to reset.
_MEANT = 0.5


# --- reset-not-low-enough ---


def not_low_enough(case: Case) -> Iterator[Finding]:
    """A combination that is meant to reset, and leaves the pin above its level.

    Meant: it takes the pin below half of the highest voltage that any other gives it.
    """
    node = case.pin("reset")
    for held in _meant(case):
        assert node is not None
        yield from _judged(case, held, node)


def troubled(case: Case) -> set[int]:
    """Return the held masks that the rule has something to say of."""
    node = case.pin("reset")
    return {held for held in _meant(case) if node is not None and any(_judged(case, held, node, mend=False))}


def _meant(case: Case) -> list[int]:
    """Return the least held masks that are meant to reset."""
    node = case.pin("reset")
    if node is None or node < 0:
        return []
    masks = sorted(range(1 << len(case.circuit.buttons)), key=lambda k: (k.bit_count(), k))
    highest = max(case.volts(1, held, node) for held in masks)
    found: list[int] = []
    for held in masks:
        if not any(held & t == t for t in found) and case.volts(1, held, node) < _MEANT * highest:
            found.append(held)
    return found


def _beyond(engine: Engine, held: int, node: int) -> Floats:
    """Volts by which the settled reset pin stays above its level."""
    return np.asarray(settle_volts(engine, 1, held, node) - _figure(engine, "reset_level"))


def _figure(engine: Engine, key: str) -> Floats:
    return np.asarray(engine.rows[:, engine.columns.index(f"timer.{key}")])


def _judged(case: Case, held: int, node: int, mend: bool = True) -> Iterator[Finding]:
    nominal = case.evidence.engine
    worst = worst_row(case, lambda engine: _beyond(engine, held, node))
    error = bool(_beyond(nominal, held, node)[0] >= 0)
    engine = nominal if error else case.with_rows(worst)
    if not error and _beyond(engine, held, node)[0] < 0:
        return
    at, limit = float(settle_volts(engine, 1, held, node)[0]), float(_figure(engine, "reset_level")[0])
    current = _figure(engine, "reset_current")[0] * (1 - at / float(engine.supply[0]))
    unit = "" if error else "in an allowed unit "
    message = (
        f"{held_words(case.circuit, held)}: {unit}the reset pin comes down to {volts(at)}, not below its "
        f"level {volts(limit)} (an absolute voltage; {figure(float(current), 'A')} flows out of the pin)"
    )
    pressed = [b.position for i, b in enumerate(case.circuit.buttons) if held >> i & 1]
    place = pressed[0] if pressed else case.place("reset")
    how = _lower(case, held, node, worst) if mend else ""
    yield Finding("reset-not-low-enough", "error" if error else "warning", place, message, how)


def _lower(case: Case, held: int, node: int, worst: Floats) -> str:
    """Find the smallest change of a resistor or contact that brings the worst unit down (or the nominal)."""
    tried = candidates(case, resistors(case))
    contacts = [
        (b.name, v, v / b.resistance.nominal)
        for i, b in enumerate(case.circuit.buttons)
        if held >> i & 1
        for v in series(b.resistance.nominal, False, 1e4)
    ]
    for rows in (worst, case.evidence.engine.rows):
        low = [c for c in tried if _beyond(case.with_rows(applied(case, rows, c)), held, node)[0] < 0]
        if low:
            return wording(case, low[0])
        for name, value, ratio in contacts:
            better = rows.copy()
            better[:, case.cols.index(f"buttons.{name}")] *= ratio
            if _beyond(case.with_rows(better), held, node)[0] < 0:
                return f"fit a `{name}` with `resistance: {plain(value)}` at most"
    return "bring the contact straight to ground"


# --- reset-pull-up-too-weak ---


def pull_up_too_weak(case: Case) -> Iterator[Finding]:
    """A pull-up through which the pin's largest published current could hold the timer reset.

    Nominal supply and resistors against the pin's most: so the makers' advice of about 10 kΩ at 5 V
    (TI SLFS023H) is the limit itself.
    """
    node = case.pin("reset")
    if node is None or node < 0:
        return
    current, limit = (
        float(case.cols.most[case.cols.index(f"timer.{k}")]) for k in ("reset_high_current", "reset_level")
    )
    found = _thevenin(case, node, case.cols.nominal[None, :])
    if found is None:
        return
    open_, ohm = found
    if open_ <= limit or open_ - current * ohm >= limit * (1 - 1e-9):
        return
    message = (
        f"{volts(open_)} - {figure(current, 'A')} × {figure(ohm, 'ohm')} = {volts(open_ - current * ohm)} at "
        f"the reset pin is less than {volts(limit)}: with the published current into it (most) the pull-up "
        f"may not release the timer"
    )
    yield Finding(
        "reset-pull-up-too-weak",
        "warning",
        case.place("reset"),
        message,
        _stronger(case, node, current, limit),
    )


def _stronger(case: Case, node: int, current: float, limit: float) -> str:
    def good(candidate: Candidate) -> bool:
        found = _thevenin(case, node, applied(case, case.cols.nominal[None, :], candidate))
        return found is not None and found[0] - current * found[1] >= limit

    best = next((c for c in candidates(case, resistors(case), up=False) if good(c)), None)
    return wording(case, best) if best else change("the pull-up", "a smaller one")


def _thevenin(case: Case, node: int, row: Floats) -> tuple[float, float] | None:
    """Return open voltage and source resistance at a node by its resistors, contacts at rest.

    Nodal analysis; None where no resistor leads to a rail.
    """
    branches = [b for b in case.topo.branches if _passive(b)]
    near = _connected(node, branches)
    index = {n: k for k, n in enumerate(sorted(near))}
    G, drive = np.zeros((len(index), len(index))), np.zeros(len(index))
    grounded = False
    for b in branches:
        g = 1.0 / float(b.ohm(row)[0])
        for here, there in ((b.a, b.b), (b.b, b.a)):
            if here in index:
                G[index[here], index[here]] += g
                if there in index:
                    G[index[here], index[there]] -= g
                else:
                    grounded = True
                    drive[index[here]] += g * volts_at(drive, there, float(row[0, 0]))
    if not grounded:
        return None
    inverse = np.linalg.inv(G)
    return float((inverse @ drive)[index[node]]), float(inverse[index[node], index[node]])


def _passive(b: Branch) -> bool:
    inner = b.name.startswith("output ") or b.name in ("discharge", "divider")
    return b.way < 0 and not inner and not parasitic(b) and b.fits(1, 0)


def _connected(start: int, branches: list[Branch]) -> set[int]:
    seen, todo = set(), [start]
    while todo:
        node = todo.pop()
        if node >= 0 and node not in seen:
            seen.add(node)
            todo += [b.b for b in branches if b.a == node] + [b.a for b in branches if b.b == node]
    return seen
