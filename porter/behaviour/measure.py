"""What is measured on every unit of a batch: held table, windows, margins.

Everything here is batched over the engine's units; `derive` takes the same
measurements of the nominal unit and of the corners.
"""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from porter.behaviour.model import WindowKind
from porter.circuit.engine import RESET, THRESHOLD, TRIGGER, Engine, Ints, Lanes, Mask
from porter.circuit.flow import first_fall, reach, turning_points
from porter.circuit.network import Mode
from porter.circuit.values import Floats

LOW, HIGH, OSCILLATES = 0, 1, 2
#: A quick press of a person, seconds (common practice; fast tapping leaves about as much).
QUICK_S = 0.04
#: (button index, output that the press would change, kind)
WindowKey = tuple[int, int, WindowKind]
#: (held mask, settled output, what is compared)
MarginKey = tuple[int, int, str]
#: Halvings of a logarithm of at most 30 (a nanosecond to hours): to 1e-12 of the time.
_HALVINGS = 45
_PINS = {"trigger": TRIGGER, "threshold": THRESHOLD, "reset": RESET}


@dataclass(slots=True)
class Measures:
    """Measurements of U units.

    Args:
        rests: ``rests[q]``: whether the latch stays at q with no button held, shape (U,).
        held: ``held[q, mask]``: settled output (0, 1, 2 = oscillates), -1 where q has no rest.
        period_s: the same keys, period of the oscillation.
        windows: seconds, inf = never, shape (U,).
        margins: volts, shape (U,).
        timed: ``timed[button, q]``: seconds that the output stays at q by itself after a quick press that
            turned it there, inf = it stays.
    """

    rests: list[Mask]
    held: dict[tuple[int, int], Ints] = field(default_factory=dict)
    period_s: dict[tuple[int, int], Floats] = field(default_factory=dict)
    windows: dict[WindowKey, Floats] = field(default_factory=dict)
    margins: dict[MarginKey, Floats] = field(default_factory=dict)
    timed: dict[tuple[int, int], Floats] = field(default_factory=dict)


def measure(engine: Engine, margin_keys: tuple[MarginKey, ...] | None = None) -> Measures:
    """Measure all units of an engine.

    Args:
        margin_keys: which margins to take; None: those that the first unit asks for.
    """
    rests = [engine.rest(q) for q in (0, 1)]
    out = Measures([ok for _, ok in rests])
    settled: dict[tuple[int, int], Lanes] = {}
    for q, (rest, ok) in enumerate(rests):
        for mask in range(1 << len(engine.circuit.buttons)):
            lanes = rest.copy()
            engine.press(lanes, mask)
            engine.run(lanes, np.inf)
            settled[q, mask] = lanes
            out.held[q, mask] = np.where(ok, np.where(lanes.busy, OSCILLATES, lanes.q), -1)
            out.period_s[q, mask] = np.where(lanes.busy, lanes.period_s, np.nan)
    for i in range(len(engine.circuit.buttons)):
        out.windows.update(_windows(engine, i, [lanes for lanes, _ in rests], out.rests))
        for q in (0, 1):
            out.timed[i, q] = _stays(engine, *rests[1 - q], 1 << i)
    _margins(engine, [lanes for lanes, _ in rests], settled, out, margin_keys)
    return out


def release_in_order(engine: Engine, q: int, order: Sequence[int]) -> int | None:
    """Hold all buttons of *order* from rest at *q* and release them one by one, each settled (first unit).

    Returns:
        LOW, HIGH or OSCILLATES; None where *q* has no rest.
    """
    lanes, ok = engine.rest(q)
    if not ok[0]:
        return None
    mask = sum(1 << i for i in order)
    for gone in (0, *(1 << i for i in order)):
        mask &= ~gone
        engine.press(lanes, mask)
        engine.run(lanes, np.inf)
    return OSCILLATES if lanes.busy[0] else int(lanes.q[0])


# --- windows ---


def first_flip(engine: Engine, lanes: Lanes, duration: Floats | float) -> Floats:
    """Run lanes and return when each first flips from now on, inf where it doesn't, shape (B,)."""
    begin = lanes.clock_s.copy()
    when = np.full(len(lanes), np.inf)

    def listen(rows: Ints, times: Floats, _: Ints) -> None:
        when[rows] = np.minimum(when[rows], times - begin[rows])

    engine.run(lanes, duration, one_flip=True, listener=listen)
    return when


def hold_until_flip(engine: Engine, start: Lanes, mask: int) -> tuple[Lanes, Floats]:
    """Press and hold until the first flip; returns the lanes right after it and the time it took."""
    lanes = start.copy()
    q = lanes.q.copy()
    engine.press(lanes, mask)
    when = np.zeros(len(lanes))
    waits = np.flatnonzero(lanes.q == q)
    part = lanes.take(waits)
    when[waits] = first_flip(engine, part, np.inf)
    lanes.put(waits, part)
    return lanes, when


def acts_on_release(engine: Engine, start: Lanes, mask: int, press_s: Floats) -> Mask:
    """Return whether a press of a given length flips the latch at or after the release."""
    lanes = start.copy()
    engine.press(lanes, mask)
    engine.run(lanes, press_s)
    q = lanes.q.copy()
    engine.press(lanes, 0)
    flipped = lanes.q != q
    return np.asarray(flipped | np.isfinite(first_flip(engine, lanes, np.inf)))


def _shortest(engine: Engine, start: Lanes, ok: Mask, mask: int) -> Floats:
    """Least closure that changes the output from rest, shape (U,)."""
    _, when = hold_until_flip(engine, start, mask)
    late = acts_on_release(engine, start, mask, np.full(len(start), 1e-9)) & (when > 1e-9)
    when = np.where(late, 0.0, when)  # any touch does it, by its release
    never = np.isinf(when)
    if never.any():
        slow = _bisect(engine, start, mask, never)
        when = np.where(never, slow, when)
    return np.where(ok, when, np.inf)


def _bisect(engine: Engine, start: Lanes, mask: int, rows: Mask) -> Floats:
    """Least press that acts by its release, where holding alone does not act."""
    out = np.full(len(start), np.inf)
    lanes = start.take(rows)
    long = np.full(len(lanes), _settling(engine))
    acting = np.flatnonzero(acts_on_release(engine, lanes, mask, long))
    part, high = lanes.take(acting), long[acting]
    low = np.full(len(acting), 1e-9)
    for _ in range(_HALVINGS if len(acting) else 0):
        mid = np.sqrt(low * high)
        hit = acts_on_release(engine, part, mask, mid)
        low, high = np.where(hit, low, mid), np.where(hit, mid, high)
    found = np.full(len(lanes), np.inf)
    found[acting] = high
    out[rows] = found
    return out


def _settling(engine: Engine) -> float:
    """A time in which everything that can settle has: sixty slowest time constants."""
    slowest = 1.0
    for mode in engine.modes:
        positive = mode.rate[mode.rate > 1e-9]
        slowest = min(slowest, float(positive.min())) if positive.size else slowest
    return 60.0 / slowest


def _windows(
    engine: Engine, button: int, rests: list[Lanes], ok: list[Mask]
) -> Iterator[tuple[WindowKey, Floats]]:
    mask = 1 << button
    for q in (0, 1):
        yield (button, q, "shortest-press"), _shortest(engine, rests[q], ok[q], mask)
    for q in (0, 1):
        tap = _re_arm(engine, rests[1 - q], ok[1 - q], mask, held=False)
        hold = _re_arm(engine, rests[1 - q], ok[1 - q], mask, held=True)
        yield (button, q, "re-arm-after-tap"), tap
        yield (button, q, "re-arm-after-hold"), hold
        yield (button, q, "stray-gap"), np.minimum(tap, hold)


def _stays(engine: Engine, rest: Lanes, ok: Mask, mask: int) -> Floats:
    """How long the output stays turned after a quick press from rest, inf = until another press, shape (U,).

    Counted from where it turns; the press lasts `QUICK_S`, or until it acts if that takes longer.
    """
    lanes, when = hold_until_flip(engine, rest, mask)
    turned = ok & (lanes.q != rest.q) & ~lanes.busy
    q = lanes.q.copy()
    more = np.where(np.isfinite(when), np.maximum(QUICK_S - when, 0.0), 0.0)
    engine.run(lanes, more)
    turned &= lanes.q == q
    engine.press(lanes, 0)
    at_once = lanes.q != q
    return np.where(turned, more + np.where(at_once, 0.0, first_flip(engine, lanes, np.inf)), np.inf)


def after_press(engine: Engine, rest: Lanes, mask: int, held: bool) -> Lanes:
    """Lanes at the instant after a tap (or a settled hold) of a button from rest, contact open."""
    lanes, _ = hold_until_flip(engine, rest, mask)
    if held:
        engine.run(lanes, np.inf)
    engine.press(lanes, 0)
    return lanes


def _re_arm(engine: Engine, rest: Lanes, ok: Mask, mask: int, held: bool) -> Floats:
    """Least open time after a press from rest until the next press changes the output back."""
    lanes = after_press(engine, rest, mask, held)
    turned = ok & (lanes.q != rest.q) & ~lanes.busy
    out = np.full(len(rest), np.inf)
    if not turned.any():
        return out
    rows = np.flatnonzero(turned)
    out[rows] = least_gap(engine, lanes.take(rows), mask)
    return out


def press_acts(engine: Engine, lanes: Lanes, mask: int, gap_s: Floats) -> Mask:
    """Return whether a press after an opening of *gap_s* changes the output (held until settled)."""
    part = lanes.copy()
    engine.run(part, gap_s)
    same = part.q == lanes.q
    engine.press(part, mask)
    flipped = part.q != lanes.q
    return np.asarray(same & (flipped | np.isfinite(first_flip(engine, part, np.inf))))


def least_gap(engine: Engine, lanes: Lanes, mask: int) -> Floats:
    """Least opening after which a press of *mask* flips the latch, inf where none does, shape (B,).

    Found from the exact flow of the opening where the press acts at its first instant, and
    checked by running both sides of it; found by halving where it acts otherwise.
    """
    settled = lanes.copy()
    engine.run(settled, np.inf)
    far = np.full(len(lanes), _settling(engine))
    ever = press_acts(engine, lanes, mask, far)
    gap = np.where(ever, _instant_gap(engine, lanes, settled, mask), np.inf)
    sure = np.isfinite(gap)
    sure[sure] = _is_edge(engine, lanes.take(sure), mask, gap[sure])
    rest = ever & ~sure
    if rest.any():
        gap[rest] = _halve_gap(engine, lanes.take(rest), mask, far[rest])
    return gap


def _is_edge(engine: Engine, lanes: Lanes, mask: int, gap: Floats) -> Mask:
    above = press_acts(engine, lanes, mask, gap * (1 + 1e-9) + 1e-15)
    below = press_acts(engine, lanes, mask, gap * (1 - 1e-6))
    return np.asarray(above & (~below | (gap == 0)))


def _halve_gap(engine: Engine, lanes: Lanes, mask: int, far: Floats) -> Floats:
    low, high = np.full(len(lanes), 1e-9), far.copy()
    out = np.zeros(len(lanes))
    late = np.flatnonzero(~press_acts(engine, lanes, mask, low))
    if not len(late):
        return out
    part, low, high = lanes.take(late), low[late], high[late]
    for _ in range(_HALVINGS):
        mid = np.sqrt(low * high)
        hit = press_acts(engine, part, mask, mid)
        low, high = np.where(hit, low, mid), np.where(hit, mid, high)
    out[late] = high
    return out


def _instant_gap(engine: Engine, lanes: Lanes, settled: Lanes, mask: int) -> Floats:
    """When, along the opening, pressing at that instant would first flip the latch."""
    pressed = settled.copy()
    pressed.held[:] = mask
    engine.resolve(pressed, frozen=True)
    found = np.full(len(lanes), np.inf)

    def watch(rows: Ints, mode: Mode, z0: Floats, at: Floats, length: Floats) -> None:
        begin = at - lanes.clock_s[rows]
        for conducts in np.unique(pressed.conducts[rows]):
            part = np.flatnonzero((pressed.conducts[rows] == conducts) & np.isinf(found[rows]))
            if len(part):
                target = engine.mode(mode.q, mask, conducts)
                when = _joint_crossing(mode, target, lanes.unit[rows[part]], z0[part], length[part])
                found[rows[part]] = begin[part] + when

    engine.run(lanes.copy(), np.inf, watcher=watch)
    return found


def _joint_crossing(open_: Mode, pressed: Mode, unit: Ints, z0: Floats, length: Floats) -> Floats:
    """When the pressed mode's decision would turn, along the open mode's flow from z0."""
    rate = open_.rate[unit]
    pull = open_.drive[unit] - rate * z0
    into = pressed.Sinv[unit] @ open_.S[unit]
    best = np.full(len(unit), np.inf)
    for guard, sign in ((RESET, 1.0), (THRESHOLD, -1.0)) if open_.q else ((TRIGGER, 1.0),):
        row = (pressed.Gz[unit, guard][:, None, :] @ into)[:, 0]
        f0 = sign * (pressed.g0[unit, guard] + (row * z0).sum(axis=1))
        crossing = first_fall(np.maximum(f0, 0.0), sign * row * pull, rate, length)
        best = np.minimum(best, np.where(f0 < 0, 0.0, crossing))
    return best


# --- margins ---


def _margins(
    engine: Engine,
    rests: list[Lanes],
    settled: Mapping[tuple[int, int], Lanes],
    out: Measures,
    keys: tuple[MarginKey, ...] | None,
) -> None:
    wanted = _wanted(engine, settled, out) if keys is None else keys
    guards = {key: engine.guards(lanes) for key, lanes in settled.items()}
    for mask, q, what in wanted:
        if what == "press":
            out.margins[mask, q, what] = press_margin(engine, rests[q], mask)
        else:
            key = (int(what[-1]), mask)
            out.margins[mask, q, what] = _hold_margin(settled[key], guards[key], q, what)


def _wanted(engine: Engine, settled: Mapping[tuple[int, int], Lanes], out: Measures) -> tuple[MarginKey, ...]:
    """The margins that matter, told from the first unit."""
    keys: dict[MarginKey, None] = {}
    for (start, mask), lanes in settled.items():
        if out.held[start, mask][0] in (LOW, HIGH):
            f = engine.guards(lanes.take(np.array([0])))[0]
            for pin, side in _holding(int(lanes.q[0]), f):
                if _connected(engine, pin):
                    same = any(
                        k[:2] == (mask, int(lanes.q[0])) and k[2].startswith(f"{pin} {side}") for k in keys
                    )
                    if not same:
                        keys[mask, int(lanes.q[0]), f"{pin} {side}{start}"] = None
    for i in range(len(engine.circuit.buttons)):
        for q in (0, 1):
            if out.rests[q][0] and np.isfinite(out.windows[i, q, "shortest-press"][0]):
                keys[1 << i, q, "press"] = None
    return tuple(keys)


def _connected(engine: Engine, pin: str) -> bool:
    return engine.circuit.timer.pins.get(pin, "gnd") not in ("vcc", "gnd")


def _holding(q: int, f: Floats) -> Iterator[tuple[str, str]]:
    """Which deciding voltages keep the latch where it is, and on which side they must stay."""
    trigger, threshold, reset = f[TRIGGER] < 0, f[THRESHOLD] > 0, f[RESET] < 0
    if q:
        yield "reset", "above"
        if threshold:
            yield "trigger", "below"
        elif not trigger:
            yield "threshold", "below"
    elif reset and trigger:
        yield "reset", "below"
    else:
        yield "trigger", "above"


def margin_of(engine: Engine, key: MarginKey) -> Floats:
    """Return one margin of all units, shape (U,)."""
    mask, q, what = key
    if what == "press":
        return press_margin(engine, engine.rest(q)[0], mask)
    lanes, _ = engine.rest(int(what[-1]))
    engine.press(lanes, mask)
    engine.run(lanes, np.inf)
    return _hold_margin(lanes, engine.guards(lanes), q, what)


def _hold_margin(lanes: Lanes, guards: Floats, q: int, what: str) -> Floats:
    pin, side = what.split()
    f = guards[:, _PINS[pin]]
    # A unit whose latch went the other way has lost the margin: tell by how much, on the side it fell.
    return np.where(lanes.q == q, f if side.startswith("above") else -f, -np.abs(f))


def press_margin(engine: Engine, rest: Lanes, mask: int) -> Floats:
    """Return how far the deciding voltage goes past its level when a button is pressed from rest.

    The farthest point is at the press, in the end, or (two capacitors sharing their charge) between.
    """
    lanes = rest.copy()
    lanes.held[:] = mask
    engine.resolve(lanes, frozen=True)
    best = _beyond(engine.guards(lanes), lanes.q)

    def watch(rows: Ints, mode: Mode, z0: Floats, _: Floats, length: Floats) -> None:
        best[rows] = np.maximum(best[rows], _between(mode, lanes.unit[rows], z0, length))

    engine.run(lanes, np.inf, frozen=True, watcher=watch if engine.topo.states > 1 else None)
    return np.maximum(best, _beyond(engine.guards(lanes), lanes.q))


def _between(mode: Mode, unit: Ints, z0: Floats, length: Floats) -> Floats:
    """Farthest that a stretch takes the deciding voltages at their turning points, shape (B,)."""
    rate, G = mode.rate[unit], mode.Gz[unit, :3]
    pull = mode.drive[unit] - rate * z0
    best = np.full(len(unit), -np.inf)
    for guard in range(3):
        for t in turning_points(G[:, guard] * pull, rate, length).T:
            z = z0 + pull * reach(rate, t[:, None])
            f = mode.g0[unit, :3] + (G @ z[..., None])[..., 0]
            best = np.maximum(best, _beyond(f, np.full(len(unit), mode.q)))
    return best


def _beyond(f: Floats, q: Ints) -> Floats:
    """Volts by which the comparators want to flip each latch (negative: they don't)."""
    turn_low = np.maximum(np.minimum(f[:, THRESHOLD], f[:, TRIGGER]), -f[:, RESET])
    turn_high = np.minimum(-f[:, TRIGGER], f[:, RESET])
    return np.where(q == 1, turn_low, turn_high)


def works(measures: Measures, nominal: Measures) -> NDArray[np.bool_]:
    """Return which units do what the nominal unit does: same rests and held table, no window gone."""
    good = np.ones(len(measures.rests[0]), bool)
    for q in (0, 1):
        good &= measures.rests[q] == nominal.rests[q][0]
    for key, output in measures.held.items():
        good &= output == nominal.held[key][0]
    for window, seconds in measures.windows.items():
        good &= np.isfinite(seconds) == np.isfinite(nominal.windows[window][0])
    return good
