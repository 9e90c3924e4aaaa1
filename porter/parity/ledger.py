"""The ledger: every aspect of behaviour, circuit against port, each row the same, tighter, or different."""

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from porter.behaviour.measure import QUICK_S, release_in_order
from porter.behaviour.model import Band, Behaviour, Level, Window, WindowKind
from porter.circuit.engine import Engine, Ints
from porter.circuit.family import FAMILIES, figures
from porter.circuit.values import Floats
from porter.parity.model import LedgerRow, RowVerdict
from porter.port.bench import Bench, bench, output_after, re_arm, settle, shortest_press, stays
from porter.port.memory import Memory, frozen_rest
from porter.port.model import U16, Charge, Port
from porter.spec.model import Circuit

_LEVELS: tuple[Level, Level] = ("low", "high")
_WINDOWS: tuple[WindowKind, ...] = ("re-arm-after-tap", "re-arm-after-hold", "stray-gap")
#: Gap and length of the contact bounce that the chatter row is looked at with, seconds.
_BOUNCE_GAP_S, _BOUNCE_S = 0.3e-3, 5e-3


@dataclass(frozen=True, slots=True)
class Seen:
    """A row before acceptance."""

    row: str
    circuit: str
    port: str
    verdict: RowVerdict


def ledger(circuit: Circuit, behaviour: Behaviour, port: Port, mem: Memory) -> tuple[LedgerRow, ...]:
    """Fill in the ledger and mark the rows that the spec accepts."""
    accepted = {a.row: a for a in circuit.accept}
    rows = []
    for seen in _rows(circuit, behaviour, port, mem):
        taken = accepted.get(seen.row)
        because = (
            taken.because if taken is not None and seen.verdict == "differs" and _still(taken, seen) else None
        )
        rows.append(LedgerRow(seen.row, seen.circuit, seen.port, seen.verdict, because))
    return tuple(rows)


def _still(taken, seen: Seen) -> bool:  # type: ignore[no-untyped-def]
    """True where the acceptance was given for these values, or for whatever they are."""
    return taken.circuit in (None, seen.circuit) and taken.port in (None, seen.port)


def _rows(circuit: Circuit, behaviour: Behaviour, port: Port, mem: Memory) -> Iterator[Seen]:
    on = bench(port, _resting_copies(mem, port))
    yield _held_table(circuit, behaviour, port, on)
    yield _priority(circuit, behaviour, port, on)
    yield _releases(circuit, behaviour, port, on, mem.engine)
    yield _power_on(behaviour, port)
    yield _shortest(circuit, behaviour, port, on)
    for kind in _WINDOWS:
        yield _window_row(circuit, behaviour, port, on, kind)
    if behaviour.timed:
        yield _timed_row(circuit, behaviour, port, on)
    yield _chatter(circuit, port, mem.engine)
    yield from _supply_rows(circuit, port)


def _resting_copies(mem: Memory, port: Port) -> tuple[tuple[int, ...], tuple[int, ...]] | None:
    if not isinstance(port.machine, Charge):
        return None
    empty = mem.engine.empty(0).x[0]
    high = frozen_rest(mem.engine, 1, 0, empty)
    rests = (frozen_rest(mem.engine, 0, 0, high), high)
    low, top = (tuple(int(v) for v in np.clip(np.rint(mem.copies(x[None, :])[0]), 0, U16)) for x in rests)
    return low, top


def _held_table(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench) -> Seen:
    rows = list(behaviour.held)
    same = [_port_held(circuit, port, on, row.held, row.start) == row.output for row in rows]
    return _agree("held-table", same, "entries", [f"{_and(r.held)} from {r.start}" for r in rows])


def _and(names: tuple[str, ...]) -> str:
    return " and ".join(names) or "none"


def _mask(circuit: Circuit, names: tuple[str, ...]) -> int:
    return sum(1 << i for i, b in enumerate(circuit.buttons) if b.name in names)


def _port_held(circuit: Circuit, port: Port, on: Bench, names: tuple[str, ...], begin: Level) -> str:
    state = on.rest[_LEVELS.index(begin)]
    return "no rest" if state is None else output_after(port, state, _mask(circuit, names))


def _agree(row: str, same: list[bool], what: str, labels: list[str]) -> Seen:
    wrong = [label for ok, label in zip(same, labels, strict=True) if not ok]
    port = f"{sum(same)} of {len(same)} equal" + (f"; not for {', '.join(wrong[:4])}" if wrong else "")
    return Seen(row, f"{len(same)} {what}", port, "differs" if wrong else "same")


def _priority(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench) -> Seen:
    if not behaviour.priority:
        return Seen("priority", "one button: nothing to win", "one button", "same")
    same = []
    for row in behaviour.priority:
        seen = {_port_held(circuit, port, on, row.held, lv) for lv in _LEVELS} - {"no rest"}
        same.append(row.output in seen if len(seen) == 1 else row.output == "keeps")
    said = "; ".join(f"{_and(r.held)}: {r.winner or 'neither'}" for r in behaviour.priority[:3])
    seen_row = _agree("priority", same, "combinations", [_and(r.held) for r in behaviour.priority])
    return Seen(
        "priority",
        f"{behaviour.dominance + ', ' if behaviour.dominance else ''}{said}",
        seen_row.port,
        seen_row.verdict,
    )


def _releases(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench, engine: Engine) -> Seen:
    if not behaviour.releases:
        return Seen("release-order", "one button: one order", "one button", "same")
    same, labels = [], []
    for row in behaviour.releases:
        indices = [next(i for i, b in enumerate(circuit.buttons) if b.name == name) for name in row.order]
        for q in (0, 1):
            truth = release_in_order(engine, q, indices)
            if truth is not None:
                same.append(_port_release(port, on, q, indices) == ("low", "high", "oscillates")[truth])
                labels.append(" then ".join(row.order))
    return _agree("release-order", same, "orders, from both states", labels)


def _port_release(port: Port, on: Bench, q: int, order: list[int]) -> str:
    state = on.rest[q]
    if state is None:
        return "no rest"
    mask, output = sum(1 << i for i in order), ""
    for gone in (0, *(1 << i for i in order)):
        mask &= ~gone
        state, settled = settle(port, state, mask)
        output = _LEVELS[int(state.q[0])] if settled else "oscillates"
    return output


def _power_on(behaviour: Behaviour, port: Port) -> Seen:
    found, chosen = behaviour.power_on.output, _LEVELS[port.start_q]
    verdict: RowVerdict = "tighter" if found == "undetermined" else "same" if found == chosen else "differs"
    circuit = "comes up either way" if found == "undetermined" else f"comes up {found}"
    return Seen("power-on", circuit, f"always starts {chosen}", verdict)


def time_text(seconds: float | None) -> str:
    """Write a time as people read it.

    >>> time_text(0.0549)
    '54.9 ms'
    """
    if seconds is None:
        return "never"
    if seconds == 0:
        return "at once"
    for unit, size in (("s", 1.0), ("ms", 1e-3), ("µs", 1e-6)):
        if seconds >= size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds * 1e9:.3g} ns"


def _band_text(band: Band) -> str:
    if band.least == band.most:
        return time_text(band.nominal)
    return f"{time_text(band.nominal)} ({time_text(band.least)} to {time_text(band.most)})"


def _shortest(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench) -> Seen:
    pulse = figures(circuit.timer, circuit.supply.nominal)["shortest_pulse"].most
    longest, said, ticks = 0.0, [], 0
    for i, button in enumerate(circuit.buttons):
        for q, level in enumerate(_LEVELS):
            window = _find(behaviour, button.name, level, "shortest-press")
            if window.seconds.nominal is not None:
                longest = max(longest, window.seconds.nominal)
                found = shortest_press(on, i, q)
                ticks = max(ticks, found or 0)
                if found is None:
                    said.append(f"{button.name} doesn't turn {level}")
    at_least = max(longest, pulse)
    port_s = ticks * port.tick_s
    text = f"{time_text(port_s)} to be sure of it" + ("; " + ", ".join(said) if said else "")
    same = not said and longest > port.tick_s and abs(port_s - longest) <= 2 * port.tick_s
    return Seen("shortest-press", f"notices {time_text(at_least)}", text, "same" if same else "differs")


def _find(behaviour: Behaviour, button: str, level: str, kind: WindowKind) -> Window:
    return next(w for w in behaviour.windows if (w.button, w.start, w.window) == (button, level, kind))


def port_window(port: Port, on: Bench, button: int, q: int, kind: WindowKind) -> float | None:
    """Return a port's window in seconds of its nominal clock, None = never."""
    tap = None if kind == "re-arm-after-hold" else re_arm(on, button, q, held=False)
    hold = None if kind == "re-arm-after-tap" else re_arm(on, button, q, held=True)
    found = [ticks for ticks in (tap, hold) if ticks is not None]
    return min(found) * port.tick_s if found else None


def _window_row(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench, kind: WindowKind) -> Seen:
    said, ports, wrong = [], [], False
    for i, button in enumerate(circuit.buttons):
        for q, level in enumerate(_LEVELS):
            window = _find(behaviour, button.name, level, kind)
            seconds = port_window(port, on, i, q, kind)
            if window.seconds.nominal is None and seconds is None:
                continue
            said.append(f"{button.name} from {level} {_band_text(window.guaranteed)}")
            ports.append(
                f"{button.name} from {level} {time_text(seconds)}, clock ±{circuit.port.clock * 100:.3g} %"
            )
            wrong |= not inside(window.guaranteed, seconds, circuit.port.clock, port.tick_s)
    if not said:
        return Seen(kind, "none: no button waits", "none", "same")
    return Seen(kind, "; ".join(said), "; ".join(ports), "differs" if wrong else "same")


def _timed_row(circuit: Circuit, behaviour: Behaviour, port: Port, on: Bench) -> Seen:
    said, ports, wrong = [], [], False
    for timed in behaviour.timed:
        button = next(i for i, b in enumerate(circuit.buttons) if b.name == timed.button)
        ticks = stays(on, button, _LEVELS.index(timed.output), QUICK_S)
        seconds = None if ticks is None else ticks * port.tick_s
        said.append(
            f"{timed.output} after a quick press of {timed.button} for {_band_text(timed.guaranteed)}"
        )
        ports.append(f"{timed.button} {time_text(seconds)}, clock ±{circuit.port.clock * 100:.3g} %")
        wrong |= not inside(timed.guaranteed, seconds, circuit.port.clock, port.tick_s)
    return Seen("timed-output", "; ".join(said), "; ".join(ports), "differs" if wrong else "same")


def inside(family: Band, seconds: float | None, clock: float, tick_s: float) -> bool:
    """True where a port's window lies between that of two allowed units with its clock at either end.

    A band narrower than a tick each side of the nominal is widened to that: the sampling delay is
    stated apart.
    """
    if seconds is None or family.nominal is None:
        return seconds is None and family.nominal is None
    least = min(family.least or 0.0, family.nominal - tick_s)
    most = np.inf if family.most is None else max(family.most, family.nominal + tick_s)
    return bool(least <= seconds * (1 - clock) and seconds * (1 + clock) <= most)


def _chatter(circuit: Circuit, port: Port, engine: Engine) -> Seen:
    """Count output edges when each button bounces at its closing and at its opening."""
    ours, theirs = [], []
    for i in range(len(circuit.buttons)):
        ours.append(_circuit_edges(engine, port.start_q, i))
        theirs.append(_port_edges(port, i))
    worst = max(ours, default=0)
    most = max(theirs, default=0)
    verdict: RowVerdict = (
        "same"
        if ours == theirs
        else "tighter"
        if all(t <= o for t, o in zip(theirs, ours, strict=True))
        else "differs"
    )
    return Seen("output-chatter", f"{worst} edges for a press that bounces", f"{most} edges", verdict)


def _bounces(button: int) -> list[tuple[float, int]]:
    """A press of 300 ms with 5 ms of bounce at both ends: (time, held) changes."""
    changes: list[tuple[float, int]] = []
    for begin, last in ((0.05, 1), (0.35, 0)):
        for k in range(int(_BOUNCE_S / _BOUNCE_GAP_S)):
            changes.append((begin + k * _BOUNCE_GAP_S, 1 << button if k % 2 == 0 else 0))
        changes.append((begin + _BOUNCE_S, last << button))
    return changes


def _circuit_edges(engine: Engine, q: int, button: int) -> int:
    lanes = engine.empty(q, np.zeros(1, np.int64))
    edges: list[float] = []

    def listen(_: Ints, when: Floats, __: Ints) -> None:
        edges.append(float(when[0]))

    engine.run(lanes, _bounces(button)[0][0])
    changes = [*_bounces(button), (1.0, 0)]
    for (at, held), (until, _) in pairwise(changes):
        engine.press(lanes, held, listen)
        engine.run(lanes, until - at, listener=listen)
    return len(edges)


def _port_edges(port: Port, button: int) -> int:
    from porter.port.step import run

    ticks = int(np.ceil(1.0 / port.tick_s))
    at = np.arange(ticks) * port.tick_s
    times = np.array([t for t, _ in _bounces(button)])
    masks = np.array([0, *(h for _, h in _bounces(button))])
    held = masks[np.searchsorted(times, at, side="right")]
    out = run(port, held[None, :])[0]
    return int((np.diff(out.astype(int)) != 0).sum())


def _supply_rows(circuit: Circuit, port: Port) -> Iterator[Seen]:
    supply, fed = circuit.supply, circuit.port.supply
    family = FAMILIES[circuit.timer.family]
    low, high = supply.least, supply.most
    yield Seen(
        "supply-extremes",
        f"works from {low:g} V to {high:g} V, family {family.supply_v[0]:g} V to {family.supply_v[1]:g} V",
        f"fed {fed.nominal:g} V from a regulator; windows don't move with the supply",
        "differs",
    )
    yield Seen(
        "supply-loss",
        "keeps its latch through dips that leave the chip working, loses it below",
        f"restarts {_LEVELS[port.start_q]} whenever its brown-out reset acts",
        "differs",
    )
    fig = figures(circuit.timer, supply.nominal)
    yield Seen(
        "output-level",
        f"high {supply.nominal - fig['high_drop'].nominal:.3g} V, up to {family.rated_output_a * 1e3:.0f} mA",
        f"high {fed.nominal:g} V, up to {circuit.port.pin_drive_a * 1e3:g} mA",
        "differs",
    )
    yield Seen(
        "start-up-time",
        "follows its inputs within microseconds of the supply",
        "deaf, output held by its bias resistor, until the controller has started (up to about 70 ms)",
        "differs",
    )


__all__ = ["ledger", "port_window", "time_text"]
