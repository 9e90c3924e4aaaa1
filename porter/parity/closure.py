"""The walk over every reachable state of port and circuit, and the bound that holds for ever.

With one capacitor, let ``e`` be the port's copy less the true voltage, in copies
(1/65536 of the range).  In each mode one tick of the true flow takes two voltages
to two that are nearer by the steepest slope ``lambda`` of that map at least, and the
port's own rounding adds at most ``q`` — both measured here over every reachable state.
So ``|e| <= E = max q / (1 - lambda)`` for every input sequence of any length
(contraction mapping, S. Banach), up to the first decision within E of its threshold:
after such a grey one port and circuit may go apart.

Where nothing conducts (a mode, or the part of one beyond the level that a one-way
output drives to) the slope is one.  There the port has to keep its copy exactly, and
beside it the port may only move toward that part; then no error grows there either.

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
from porter.parity.twin import circuit_moves
from porter.port.decisions import GRID, decisions, sides, spread_out
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
        path: held masks per tick that lead to a reachable state that decides differently, the
            deciding one last, None = there is none.
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
    path = _path(parents, table.depth, wrong, port) if wrong.any() else None
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
        complete=bound.holds and table.starts_alike(),
        differs=int(wrong.sum()),
        said=(
            *_said(states, masks, bound, scale, int(grey.sum()), int(wrong.sum())),
            *(() if table.starts_alike() else ("the port starts with a copy that is not the circuit's",)),
        ),
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
        until = ", up to its first grey decision" if grey else ""
        said.append(
            f"the copy stays within {_volts(volts)} of the true voltage for every input sequence of any length{until}: "
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
        self.depth = np.full(2 * _COPIES, _COPIES, np.int64)
        #: One tick of each mode with the latch kept, from every copy.
        self.flow: dict[tuple[int, int], Floats] = {}
        step = stepper(port)
        for q in (0, 1):
            state = State(np.full(_COPIES, q, np.uint8), self.X)
            for h in self.masks:
                after, _ = step(state, np.full(_COPIES, h, np.int64))
                self.decided[q, h] = after.q
                self.next_q[q, h], self.next_x[q, h] = after.q, after.regs[:, 0]
                self.truth[q, h] = decisions(mem, q, h)
                self.edges[q, h] = np.asarray(np.flatnonzero(np.diff(self.truth[q, h])) + 0.5, np.float64)

    def reach(self) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
        """Mark the reachable states, shape (2, copies), with how each was first come to.

        Parents hold ``(state * masks + held)`` of the step, -1 at the start; `depth` the fewest ticks.
        """
        seen = np.zeros(2 * _COPIES, bool)
        parents = np.full(2 * _COPIES, -1, np.int64)
        nexts = [
            np.concatenate([self.next_q[q, h] * np.int64(_COPIES) + self.next_x[q, h] for q in (0, 1)])
            for h in self.masks
        ]
        front = np.array([self.port.start_q * _COPIES + self.machine.start[0]])
        seen[front] = True
        self.depth[front] = 0
        while len(front):
            found = []
            level = int(self.depth[front[0]]) + 1
            for h, table in zip(self.masks, nexts, strict=True):
                to = table[front]
                new = ~seen[to]
                to, source = to[new], front[new]
                parents[to] = source * len(self.masks) + h
                seen[to], self.depth[to] = True, level
                found.append(np.unique(to))
            front = np.concatenate(found)
        return seen.reshape(2, _COPIES), parents

    def starts_alike(self) -> bool:
        """Whether the copy at power-on is the circuit's, rounded."""
        true = self.mem.copies(self.mem.engine.empty(self.port.start_q).x)[0, 0]
        return bool(abs(self.machine.start[0] - np.clip(true, 0, U16)) <= 0.5 + 1e-9)

    def local_error(self, seen: Mask) -> "_Errors":
        """Compare one tick of port and circuit from every reachable copy, per (latch after deciding, held)."""
        errors = _Errors({}, {}, {}, {})
        for q in (0, 1):
            for h in self.masks:
                at = np.flatnonzero(self._arrivals(seen, q, h))
                self.flow[q, h] = _one_tick(self.mem, q, h, self.tick_s, frozen=True)[0]
                flips = _one_tick(self.mem, q, h, self.tick_s)[1]
                errors.at[q, h], errors.flips[q, h] = at, flips[at]
                # A flip at the boundary itself is the decision's, which `compare` looks at.
                errors.late[q, h] = (flips[at] > 0) & (self.truth[q, h][at] == q)
                errors.off[q, h] = np.abs(self._moved(q, h)[at] - self.flow[q, h][at])
        return errors

    def _arrivals(self, seen: Mask, q: int, h: int) -> Mask:
        """Copies from which a tick is lived through with the latch at q: as come in, or just flipped to."""
        return np.asarray(
            (seen[q] & (self.decided[q, h] == q)) | (seen[1 - q] & (self.decided[1 - q, h] == q))
        )

    def _moved(self, q: int, h: int) -> Ints:
        return move_copies(self.machine.modes[q][h].moves[0], 0, self.X)

    def still(self, key: tuple[int, int]) -> tuple[Floats, Mask]:
        """The slope of a mode's one-tick map from each copy to the next, and where it is one or borders on that.

        A stretch between two copies in which the map bends has a slope between that of its sides.
        """
        slopes = np.abs(np.diff(self.flow[key]))
        rests = slopes >= 1 - _STILL
        rests[1:] |= slopes[:-1] >= 1 - _STILL
        rests[:-1] |= slopes[1:] >= 1 - _STILL
        return slopes, rests

    def factor(self, key: tuple[int, int], at: Ints, widen: float) -> tuple[float, bool]:
        """The most of an error that a tick leaves where a mode moves, and whether it stands still somewhere.

        Looked for over the copies *at* and *widen* around them.
        """
        low, high = max(0, int(at.min() - widen) - 1), min(U16, int(at.max() + widen) + 1)
        slopes, still = self.still(key)
        moving = slopes[low:high][~still[low:high]]
        return float(moving.max(initial=0.0)), bool(still[low:high].any())

    def bound(self, errors: "_Errors") -> Bound:
        """Find the error that no input sequence can exceed."""
        found = self._calm(errors, 0.5)
        for _ in range(20):  # a wider bound may reach a steeper part of a mode
            wider = self._calm(errors, found.copies)
            if wider.copies <= found.copies * (1 + 1e-9):
                break
            found = wider
        if not any(late.any() for late in errors.late.values()):
            return wider
        return self._late_bound(errors, wider)

    def _calm(self, errors: "_Errors", widen: float) -> Bound:
        """Bound the error of ticks without a flip inside; `apart` 1 where some mode stands still, else 0."""
        worst, rounding, slowest, holds, rests = 0.5, 0.0, 0.0, True, False
        for key, off in errors.off.items():
            if not len(off):
                continue
            factor, still = self.factor(key, errors.at[key], widen)
            rests |= still
            holds &= not still or self._keeps(key, errors.at[key], off)
            most = float(off.max())
            rounding, slowest = max(rounding, most), max(slowest, factor)
            worst = max(worst, most / (1 - factor))
        return Bound(worst, rounding, slowest, 0.0, int(rests), holds)

    def _keeps(self, key: tuple[int, int], at: Ints, off: Floats) -> bool:
        """Whether a mode that partly stands still is copied exactly there, and moved only toward there elsewhere."""
        slopes, still = self.still(key)
        rests = np.append(slopes >= 1 - _STILL, False)[at] & np.append(False, slopes >= 1 - _STILL)[at]
        if (off[rests] > 1e-6).any():
            return False
        moved, place = self._moved(*key)[at] - at, np.flatnonzero(still)
        below, above = (at <= place[0] + 1) & (moved >= 0), (at >= place[-1]) & (moved <= 0)
        return bool((rests | below | above).all())

    def _late_bound(self, errors: "_Errors", calm: Bound) -> Bound:
        """Widen the bound by what flips inside ticks let in; see the module's head."""
        before, after, late, apart, holds = calm.copies, calm.copies, calm.copies, 1, calm.holds
        for _ in range(400):
            apart = self._ticks_apart(errors, before)
            # Where a mode stands still nothing need have faded.
            left = 1.0 if calm.apart else calm.slowest ** (apart - 1)
            each = {key: self._late_error(key, errors, before) for key, at in errors.late.items() if at.any()}
            late = max(each.values())
            after = max(
                calm.rounding + size * self._first_factor(1 - q, errors, size)
                for (q, _), size in each.items()
            )
            again = late if apart == 1 else calm.copies * (1 - left) + after * left
            if again <= before * (1 + 1e-4):
                break
            before = again
        else:
            holds = False
        most = max(before, after, calm.copies)
        return Bound(most, calm.rounding, calm.slowest, late, apart, holds and before < U16)

    def _first_factor(self, q: int, errors: "_Errors", widen: float) -> float:
        """The most of an error that the first tick after a flip to q leaves."""
        found = [self.factor((q, h), errors.at[q, h], widen) for h in self.masks if len(errors.at[q, h])]
        return max((1.0 if still else factor for factor, still in found), default=1.0)

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

    def _ticks_apart(self, errors: "_Errors", widen: float) -> int:
        """Fewest ticks from just after a flip inside a tick to the next one, over all inputs.

        A copy within *widen* of one from which the circuit flips counts as one.
        """
        source = {key: self._about(errors, key, widen) for key in errors.late}
        front = np.zeros((2, _COPIES), bool)
        for (q, h), late in errors.late.items():
            front[q, self._moved(q, h)[errors.at[q, h][late]]] = True
        for ticks in range(1, 4096):
            new = np.zeros_like(front)
            for q in (0, 1):
                at = np.flatnonzero(front[q])
                for h in self.masks:
                    for to in (0, 1):
                        if (source[to, h][at] & (self.decided[q, h][at] == to)).any():
                            return ticks
                    new[self.next_q[q, h][at], self.next_x[q, h][at]] = True
            front = new
        return 4096

    def _about(self, errors: "_Errors", key: tuple[int, int], widen: float) -> Mask:
        """Mark copies within *widen* of one from which the circuit flips inside the tick."""
        places = np.sort(errors.at[key][errors.late[key]])
        if not len(places):
            return np.zeros(_COPIES, bool)
        X = self.X[:, 0]
        after = np.clip(np.searchsorted(places, X), 0, len(places) - 1)
        near = np.minimum(np.abs(places[after] - X), np.abs(places[np.maximum(after - 1, 0)] - X))
        return np.asarray(near <= widen)

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
        """After a flip inside a tick: the port's next decision must bring it level, whatever is pressed then.

        Where what is pressed then keeps the port from flipping, circuit and port may show the same
        latch but not remember the same: the circuit has been there and back.  Those are grey, as
        are the copies from which the circuit flips for some voltage within the bound.
        """
        for (q, h), late in errors.late.items():
            if not late.any():
                continue
            self._pending_exactly(q, h, errors, bound, grey, wrong)
            maybe = errors.at[q, h][self._about(errors, (q, h), bound)[errors.at[q, h]]]
            to = self._moved(q, h)[maybe]
            for h2 in self.masks:
                stays = to[(self.decided[q, h2][to] == q)]
                grey[q, stays, h2] |= ~wrong[q, stays, h2]

    def _pending_exactly(
        self,
        q: int,
        h: int,
        errors: "_Errors",
        bound: float,
        grey: NDArray[np.bool_],
        wrong: NDArray[np.bool_],
    ) -> None:
        late = errors.late[q, h]
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


#: A slope of a one-tick map from here up to one is taken for standing still.
_STILL = 1e-9


def _one_tick(mem: Memory, q: int, h: int, tick_s: float, frozen: bool = False) -> tuple[Floats, Ints]:
    """Return where one tick takes the true voltage from every copy, in copies, and the flips on the way.

    Between two grid copies that start in one mode on the same sides of all levels and meet no event
    the map is affine, and neither does any copy between them meet one: guards are affine in the
    copy at every instant.  The other stretches are run copy by copy.

    Args:
        frozen: let no comparator act.
    """
    lanes = mem.lanes(q, h, GRID[:, None])
    first = sides(mem, q, h, GRID)[:, : 1 if frozen else 4]
    calm = np.ones(len(GRID), bool)

    def watch(rows: Ints, _: object, __: object, at: Floats, length: Floats) -> None:
        calm[rows] &= (at == 0) & (length >= tick_s)

    mem.engine.run(lanes, tick_s, frozen=frozen, watcher=watch)
    ends = mem.copies(lanes.x)[:, 0]
    true = np.interp(np.arange(_COPIES), GRID, ends)
    flips = np.zeros(_COPIES, np.int64)
    quiet = calm[1:] & calm[:-1] & (first[1:] == first[:-1]).all(axis=1)
    _, open_ = spread_out(GRID, quiet)
    if len(open_):
        single = mem.lanes(q, h, open_[:, None])
        mem.engine.run(single, tick_s, frozen=frozen)
        true[open_], flips[open_] = mem.copies(single.x)[:, 0], single.flips
    return true, flips


@dataclass(frozen=True, slots=True)
class _Errors:
    """Per (q, held): the copies looked at, whether the circuit flips inside the tick, how far off, how many flips."""

    at: dict[tuple[int, int], Ints]
    late: dict[tuple[int, int], Mask]
    off: dict[tuple[int, int], Floats]
    flips: dict[tuple[int, int], Ints]


def _path(parents: Ints, depth: Ints, wrong: NDArray[np.bool_], port: Port) -> tuple[int, ...]:
    """Return the held masks that lead to the wrong state reached soonest, its own last."""
    q, x, h = np.nonzero(wrong)
    states = q.astype(np.int64) * _COPIES + x
    best = int(np.argmin(depth[states]))
    path, state = [int(h[best])], int(states[best])
    while parents[state] >= 0:
        path.append(int(parents[state] % port.held_count))
        state = int(parents[state] // port.held_count)
    return tuple(reversed(path))
