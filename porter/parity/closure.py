"""The walk over every reachable state of port and circuit, and the bound that holds for ever.

With one capacitor, let ``e`` be the port's copy less the true voltage, in copies
(1/65536 of the range).  Each tick the true flow shrinks ``|e|`` by the mode's factor
``lambda`` or leaves it (a mode in which nothing conducts, which the port then
copies exactly), and the port's own rounding adds at most ``q`` — measured here at
every reachable state.  So ``|e| <= E = max q / (1 - lambda)`` for every input
sequence of any length (contraction mapping, S. Banach).

Where the circuit flips inside a tick the port acts a part of a tick later.  The
error that enters there, ``D``, is measured with the circuit started at both ends
of the bound; it has shrunk by ``lambda**n`` before the next such flip, ``n`` being
the fewest ticks between two of them that any input sequence allows.  The port's state
at the boundary before it acts is compared apart, for every input (`_Table.pending`).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.circuit.engine import Ints, Mask
from porter.circuit.values import Floats
from porter.parity.model import Closure
from porter.parity.twin import circuit_decides, circuit_moves
from porter.port.memory import Memory, settled_mode
from porter.port.model import U16, Charge, Port, State
from porter.port.step import move_copies
from porter.port.swift import stepper

_COPIES = U16 + 1


@dataclass(frozen=True, slots=True)
class Walk:
    """The closure with what later steps need of it.

    Args:
        closure: the numbers; bound: E in copies (0 where nothing is carried).
        edges: per (q, held) the copies at which the circuit's decision changes.
        refuted: (q, copy, held) of a reachable state that decides differently, None = none.
        path: held masks per tick that lead there, the deciding one last.
    """

    closure: Closure
    bound: float
    edges: dict[tuple[int, int], Floats]
    path: tuple[int, ...] | None


def open_walk(said: str) -> Walk:
    """Return the closure of what was not walked, saying so."""
    return Walk(Closure(0, 0, 0, None, False, 0, (said,)), 0.0, {}, None)


def walk_one(mem: Memory, port: Port, clocks: tuple[float, ...] = ()) -> tuple[Walk, tuple[Closure, ...]]:
    """Close the charge port of a one-capacitor circuit.

    Args:
        clocks: further lengths of the port's real tick, in nominal ticks, to close it with.

    Returns:
        The walk at the nominal clock, and the closures at the others.
    """
    table = _Table(mem, port)
    seen, parents = table.reach()
    first, wrong = _close(table, seen, 1.0)
    path = _path(parents, wrong, port) if wrong.any() else None
    others = tuple(_close(table, seen, clock)[0] for clock in clocks)
    bound = first.bound_v / float(mem.scale_v[0]) if first.bound_v is not None else float(U16)
    return Walk(first, bound, table.edges, path), others


def _close(table: "_Table", seen: Mask, clock: float) -> tuple[Closure, NDArray[np.bool_]]:
    """Close with one clock; returns the closure and the (state, held) pairs that decide wrongly."""
    table.tick_s = table.port.tick_s * clock
    error = table.local_error(seen)
    bound = table.bound(error)
    grey, wrong = table.compare(seen, bound.copies)
    table.pending(error, bound.copies, grey, wrong)
    scale = float(table.mem.scale_v[0])
    states, masks = int(seen.sum()), len(table.masks)
    closure = Closure(
        states=states,
        steps=states * masks,
        grey=int(grey.sum()),
        bound_v=bound.copies * scale if bound.holds else None,
        complete=bound.holds,
        differs=int(wrong.sum()),
        said=tuple(_said(states, masks, bound, scale, int(grey.sum()), int(wrong.sum()))),
        band_s=table.band(bound.copies) if grey.any() else None,
    )
    return closure, wrong


@dataclass(frozen=True, slots=True)
class Bound:
    """How far a copy can be off, in copies; `late` where flips inside ticks enter, with `apart` ticks between."""

    copies: float
    rounding: float
    slowest: float
    late: float
    apart: int
    holds: bool


def _volts(volts: float) -> str:
    for unit, size in (("V", 1.0), ("mV", 1e-3)):
        if volts >= size:
            return f"{volts / size:.3g} {unit}"
    return f"{volts * 1e6:.3g} µV"


def _said(states: int, masks: int, bound: Bound, scale: float, grey: int, wrong: int) -> list[str]:
    volts = bound.copies * scale
    said = [
        f"every state that the port can reach from power-on was visited: {states:,} states, {states * masks:,} steps"
    ]
    if bound.holds:
        said.append(
            f"the copy stays within {_volts(volts)} of the true voltage for every input sequence of any length: "
            f"a tick adds at most {_volts(bound.rounding * scale)} and the slowest mode keeps {bound.slowest:.6f} of what was there"
        )
    else:
        said.append(
            "the copy's error has no bound that holds for ever: a mode neither shrinks it nor is copied exactly"
        )
    if bound.late > 0:
        said.append(
            f"the circuit can flip inside a tick; the port then acts at the next one, which costs up to "
            f"{_volts(bound.late * scale)} once, and {bound.apart} ticks at least lie between two such flips"
        )
    if wrong:
        said.append(
            f"{wrong:,} reachable situations decide differently although they are further from a threshold than the bound"
        )
    else:
        said.append(
            "in every one of them the port decides as the circuit does, "
            + (
                f"but for {grey:,} grey ones, whose deciding voltage is within the bound of its threshold"
                if grey
                else "none excepted"
            )
        )
    return said


class _Table:
    """Port and circuit tabulated over all copies, per (q, held)."""

    def __init__(self, mem: Memory, port: Port) -> None:
        assert isinstance(port.machine, Charge)
        self.mem, self.port, self.machine, self.tick_s = mem, port, port.machine, port.tick_s
        self.masks = range(port.held_count)
        self.X = np.arange(_COPIES, dtype=np.int64)[:, None]
        self.decided: dict[tuple[int, int], NDArray[np.uint8]] = {}
        self.truth: dict[tuple[int, int], Ints] = {}
        self.next_q: dict[tuple[int, int], NDArray[np.uint8]] = {}
        self.next_x: dict[tuple[int, int], Ints] = {}
        self.edges: dict[tuple[int, int], Floats] = {}
        step = stepper(port)
        for q in (0, 1):
            state = State(np.full(_COPIES, q, np.uint8), self.X)
            for h in self.masks:
                after, _ = step(state, np.full(_COPIES, h, np.int64))
                self.decided[q, h] = after.q
                self.next_q[q, h], self.next_x[q, h] = after.q, after.regs[:, 0]
                self.truth[q, h], self.edges[q, h] = _decisions(mem, q, h)

    def reach(self) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
        """Mark the reachable states, shape (2, copies), with how each was first come to.

        Parents hold ``(state * masks + held)`` of the step, -1 at the start.
        """
        seen = np.zeros(2 * _COPIES, bool)
        parents = np.full(2 * _COPIES, -1, np.int64)
        nexts = [
            np.concatenate([self.next_q[q, h] * np.int64(_COPIES) + self.next_x[q, h] for q in (0, 1)])
            for h in self.masks
        ]
        front = np.array([self.port.start_q * _COPIES + self.machine.start[0]])
        seen[front] = True
        while len(front):
            found = []
            for h, table in zip(self.masks, nexts, strict=True):
                to = table[front]
                new = ~seen[to]
                to, source = to[new], front[new]
                parents[to] = source * len(self.masks) + h
                seen[to] = True
                found.append(np.unique(to))
            front = np.concatenate(found)
        return seen.reshape(2, _COPIES), parents

    def local_error(self, seen: Mask) -> "_Errors":
        """Compare one tick of port and circuit from every reachable copy, per (latch after deciding, held)."""
        errors = _Errors({}, {}, {}, {})
        for q in (0, 1):
            for h in self.masks:
                at = np.flatnonzero(self._arrivals(seen, q, h))
                true, flips = _one_tick(self.mem, q, h, self.tick_s)
                errors.at[q, h], errors.flips[q, h] = at, flips[at]
                errors.late[q, h] = flips[at] > 0
                errors.off[q, h] = np.abs(self._moved(q, h)[at] - true[at])
        return errors

    def _arrivals(self, seen: Mask, q: int, h: int) -> Mask:
        """Copies from which a tick is lived through with the latch at q: as come in, or just flipped to."""
        return np.asarray(
            (seen[q] & (self.decided[q, h] == q)) | (seen[1 - q] & (self.decided[1 - q, h] == q))
        )

    def _moved(self, q: int, h: int) -> Ints:
        return move_copies(self.machine.modes[q][h].moves[0], 0, self.X)

    def factor(self, q: int, h: int) -> float:
        """The share of an error that one tick of a mode leaves."""
        a, b = (circuit_moves_frozen(self.mem, q, h, x, self.tick_s) for x in (0.25 * U16, 0.75 * U16))
        return float(abs(b - a) / (0.5 * U16))

    def bound(self, errors: "_Errors") -> Bound:
        """Find the error that no input sequence can exceed."""
        worst, rounding, slowest, holds = 0.5, 0.0, 0.0, True
        for key, off in errors.off.items():
            calm = off[~errors.late[key]]
            if not len(calm):
                continue
            factor, most = self.factor(*key), float(calm.max())
            rounding = max(rounding, most)
            if factor >= 1 - 1e-12:
                holds &= most < 1e-6
                continue
            slowest = max(slowest, factor)
            worst = max(worst, most / (1 - factor))
        if not any(late.any() for late in errors.late.values()):
            return Bound(worst, rounding, slowest, 0.0, 0, holds)
        return self._late_bound(errors, worst, rounding, slowest, holds)

    def _late_bound(
        self, errors: "_Errors", calm: float, rounding: float, slowest: float, holds: bool
    ) -> Bound:
        """Widen the bound by what flips inside ticks let in; see the module's head."""
        apart = self._ticks_apart(errors)
        left = slowest ** (apart - 1)
        before = after = late = calm
        for _ in range(400):
            each = {key: self._late_error(key, errors, before) for key, at in errors.late.items() if at.any()}
            late = max(each.values())
            after = max(rounding + size * self._first_factor(1 - q) for (q, _), size in each.items())
            again = late if apart == 1 else calm * (1 - left) + after * left
            if again <= before * (1 + 1e-4):
                break
            before = again
        else:
            holds = False
        return Bound(max(before, after, calm), rounding, slowest, late, apart, holds and before < U16)

    def _first_factor(self, q: int) -> float:
        """The most of an error that the first tick after a flip to q leaves."""
        return max(self.factor(q, h) for h in self.masks)

    def _late_error(self, key: tuple[int, int], errors: "_Errors", before: float) -> float:
        """The most that a copy is off after a tick with a flip inside, had it been off by *before*."""
        q, h = key
        near = errors.at[key][errors.late[key]]
        if not len(near):
            return 0.0
        to = self._moved(q, h)[near]
        worst = 0.0
        for shift in (-before, 0.0, before):
            lanes = circuit_moves(self.mem, q, h, near[:, None] + shift, self.tick_s)
            flipped = lanes.flips > 0
            off = np.abs(to - self.mem.copies(lanes.x)[:, 0])
            worst = max(worst, float(off[flipped].max(initial=0.0)))
        return worst

    def _ticks_apart(self, errors: "_Errors") -> int:
        """Fewest ticks from just after a flip inside a tick to the next one, over all inputs."""
        source = np.zeros((2, _COPIES), bool)
        front = np.zeros((2, _COPIES), bool)
        for (q, h), late in errors.late.items():
            at = errors.at[q, h][late]
            source[q, at] = True
            front[q, self._moved(q, h)[at]] = True
        for ticks in range(1, 4096):
            if (front & source).any():
                return ticks
            new = np.zeros_like(front)
            for q in (0, 1):
                at = np.flatnonzero(front[q])
                for h in self.masks:
                    new[self.next_q[q, h][at], self.next_x[q, h][at]] = True
            front = new
        return 4096

    def band(self, bound: float) -> float:
        """The most that a decision within the bound is early or late: the bound over the speed of crossing, seconds."""
        worst = 0.0
        for (q, h), edges in self.edges.items():
            for mask in {0, h}:
                for edge in edges:
                    speed = abs(self._speed(q, mask, float(edge)))
                    if speed > 1e-6:
                        worst = max(worst, (bound + 1.0) / speed)
        return worst

    def _speed(self, q: int, h: int, copy: float) -> float:
        """How fast the true voltage moves through a copy with latch and buttons kept, copies a second."""
        mode = settled_mode(self.mem.engine, q, h, self.mem.volts(np.array([[copy]]))[0])
        z = mode.Sinv[0] @ self.mem.volts(np.array([[copy]]))[0]
        k = self.mem.kept[0]
        return float((mode.S[0] @ (mode.drive[0] - mode.rate[0] * z))[k] / self.mem.scale_v[0])

    def compare(self, seen: Mask, bound: float) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
        """Return grey and wrong (state, held) pairs, shape (2, copies, masks)."""
        grey = np.zeros((2, _COPIES, len(self.masks)), bool)
        wrong = np.zeros_like(grey)
        for q in (0, 1):
            for h in self.masks:
                near = np.zeros(_COPIES, bool)
                for edge in self.edges[q, h]:
                    near |= np.abs(self.X[:, 0] - edge) <= bound + 0.5
                grey[q, :, h] = seen[q] & near
                wrong[q, :, h] = seen[q] & ~near & (self.decided[q, h] != self.truth[q, h])
        return grey, wrong

    def pending(
        self, errors: "_Errors", bound: float, grey: NDArray[np.bool_], wrong: NDArray[np.bool_]
    ) -> None:
        """After a flip inside a tick: the port's next decision must bring it level, whatever is pressed then."""
        for (q, h), late in errors.late.items():
            if not late.any():
                continue
            at = errors.at[q, h][late]
            lanes = circuit_moves(self.mem, q, h, at[:, None], self.tick_s)
            to = self._moved(q, h)[at]
            for h2 in self.masks:
                truth = lanes.copy()
                self.mem.engine.press(truth, h2)
                off = self.decided[q, h2][to] != truth.q
                near = np.zeros(len(to), bool)
                for edge in self.edges[q, h2]:
                    near |= np.abs(to - edge) <= bound + 0.5
                grey[q, to[off & near], h2] = True
                wrong[q, to[off & ~near], h2] = True
            wrong[q, to[errors.flips[q, h][late] > 1], 0] = True


_GRID = np.unique(np.rint(np.linspace(0, U16, 258)).astype(np.int64))


def _decisions(mem: Memory, q: int, h: int) -> tuple[Ints, Floats]:
    """Return what the circuit decides at every copy, and between which copies that changes.

    Decided on a grid; a stretch whose ends decide alike in the same mode decides so throughout,
    since every guard is affine there; the other stretches are looked at copy by copy.
    """
    truth = np.empty(_COPIES, np.int64)
    lanes = mem.lanes(q, h, _GRID[:, None])
    mem.engine.resolve(lanes)
    alike = (lanes.q[1:] == lanes.q[:-1]) & (lanes.conducts[1:] == lanes.conducts[:-1])
    which = np.clip(np.searchsorted(_GRID, np.arange(_COPIES), side="right") - 1, 0, len(_GRID) - 2)
    truth[:] = lanes.q[which]
    open_ = np.flatnonzero(~alike[which])
    if len(open_):
        truth[open_] = circuit_decides(mem, q, h, open_[:, None]).q
    truth[_GRID] = lanes.q
    return truth, np.asarray(np.flatnonzero(np.diff(truth)) + 0.5, np.float64)


def _one_tick(mem: Memory, q: int, h: int, tick_s: float) -> tuple[Floats, Ints]:
    """Return where one tick takes the true voltage from every copy, in copies, and the flips on the way.

    Between two grid copies that start in one mode and meet no event the map is affine, and
    neither does any copy between them meet one: guards are affine in the copy at every instant.
    The other stretches are run copy by copy.
    """
    lanes = mem.lanes(q, h, _GRID[:, None])
    mem.engine.resolve(lanes, frozen=True)
    first = lanes.conducts.copy()
    calm = np.ones(len(_GRID), bool)

    def watch(rows: Ints, _: object, __: object, at: Floats, length: Floats) -> None:
        calm[rows] &= (at == 0) & (length >= tick_s)

    mem.engine.run(lanes, tick_s, watcher=watch)
    ends = mem.copies(lanes.x)[:, 0]
    true = np.interp(np.arange(_COPIES), _GRID, ends)
    flips = np.zeros(_COPIES, np.int64)
    quiet = calm[1:] & calm[:-1] & (first[1:] == first[:-1])
    which = np.clip(np.searchsorted(_GRID, np.arange(_COPIES), side="right") - 1, 0, len(_GRID) - 2)
    open_ = np.flatnonzero(~quiet[which])
    if len(open_):
        single = circuit_moves(mem, q, h, open_[:, None], tick_s)
        true[open_], flips[open_] = mem.copies(single.x)[:, 0], single.flips
    return true, flips


@dataclass(frozen=True, slots=True)
class _Errors:
    """Per (q, held): the copies looked at, whether the circuit flips inside the tick, how far off, how many flips."""

    at: dict[tuple[int, int], Ints]
    late: dict[tuple[int, int], Mask]
    off: dict[tuple[int, int], Floats]
    flips: dict[tuple[int, int], Ints]


def circuit_moves_frozen(mem: Memory, q: int, held: int, copy: float, tick_s: float) -> float:
    """Return one tick of the true flow with latch and buttons kept, in copies."""
    lanes = mem.lanes(q, held, np.array([[copy]]))
    mem.engine.run(lanes, tick_s, frozen=True)
    return float(mem.copies(lanes.x)[0, 0])


def _path(parents: Ints, wrong: NDArray[np.bool_], port: Port) -> tuple[int, ...]:
    """Return the held masks that lead to the wrong state reached soonest, its own last."""
    q, x, h = np.nonzero(wrong)
    best: tuple[int, ...] | None = None
    for k in range(min(len(q), 64)):
        path = [int(h[k])]
        state = int(q[k]) * _COPIES + int(x[k])
        while parents[state] >= 0:
            path.append(int(parents[state] % port.held_count))
            state = int(parents[state] // port.held_count)
        if best is None or len(path) < len(best):
            best = tuple(reversed(path))
    assert best is not None
    return best
