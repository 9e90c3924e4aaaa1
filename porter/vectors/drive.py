"""Drive a port's reference step with run-length coded stimuli, many at a time."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from porter.port.model import U16, Charge, Count, Port, State
from porter.port.step import start
from porter.port.swift import Table
from porter.port.swift import stepper as swift
from porter.vectors.mealy import rows, state_of

Runs = tuple[tuple[int, int], ...]
Ints = NDArray[np.int64]

#: The most ticks that a port is given to come to rest; longer is taken as "never".
LONGEST_SETTLE = 1 << 16


def merged(runs: Iterable[tuple[int, int]]) -> Runs:
    """Return *runs* without empty ones, neighbours of the same value joined."""
    out: list[tuple[int, int]] = []
    for ticks, value in runs:
        if ticks <= 0:
            continue
        if out and out[-1][1] == value:
            ticks += out.pop()[0]
        out.append((ticks, value))
    return tuple(out)


def total(runs: Runs) -> int:
    """Return the length of *runs* in ticks."""
    return sum(ticks for ticks, _ in runs)


def cut(runs: Runs, ticks: int) -> Runs:
    """Return the first *ticks* ticks of *runs*."""
    out = []
    for length, value in runs:
        out.append((min(length, ticks), value))
        ticks -= length
    return merged(out)


# --- stepping ---


@dataclass(frozen=True, slots=True)
class Stepper:
    """The reference step on rows of state, shape (B, 1 + registers).

    `advance` takes rows and held masks and returns the rows after the tick and the outputs' bits.
    """

    first: Ints
    advance: Callable[[Ints, Ints], tuple[Ints, Ints]]


@lru_cache(maxsize=2)
def stepper(port: Port) -> Stepper:
    """Return the reference step of *port* on rows."""
    step = swift(port)
    if isinstance(step, Table):
        return Stepper(rows(start(port)), lambda now, masks: _look_up(step, now, masks))

    def advance(now: Ints, masks: Ints) -> tuple[Ints, Ints]:
        after, out = step(state_of(now), masks)
        return rows(after), out.astype(np.int64)

    return Stepper(rows(start(port)), advance)


def _look_up(table: Table, now: Ints, masks: Ints) -> tuple[Ints, Ints]:
    """Step rows (latch, copy) of a tabulated port."""
    to = table.next[masks, now[:, 0] << 16 | now[:, 1]]
    q = to >> 16
    return np.stack([q, to & U16], axis=1), table.answer[q, masks].astype(np.int64)


def drive(port: Port, stimuli: Sequence[Runs], most_answers: int | None = None) -> tuple[list[Runs], State]:
    """Run *stimuli* from power-on, all beside each other.

    Long runs cost only as many steps as the port needs to come to rest or round: where a step
    changes nothing the rest of the run is the same step again, and where a lane is back at a
    state from before, its outputs unchanged since, whole rounds are left out.

    Args:
        stimuli: B run-length coded stimuli, none empty.
        most_answers: stop a lane whose outputs changed more often; its answer then has
            that many entries, and covers the beginning of the stimulus only.

    Returns:
        The outputs' bits of each, run-length coded, and the state of each at its end (B lanes).
    """
    lanes = _Lanes(stepper(port), stimuli, most_answers)
    while len(lanes.live):
        lanes.advance()
    ends = lanes.tick.tolist()
    said = [_runs(c, end, most_answers) for c, end in zip(lanes.changes, ends, strict=True)]
    return said, state_of(lanes.now)


class _Lanes:
    """The working state of `drive`: arrays over all lanes, `live` the indices of those not done."""

    def __init__(self, move: Stepper, stimuli: Sequence[Runs], most_answers: int | None) -> None:
        count = len(stimuli)
        self.move, self.most = move, most_answers
        self.ticks, self.masks = _padded(stimuli)
        self.now = np.repeat(move.first, count, axis=0)
        self.place, self.tick = np.zeros(count, np.int64), np.zeros(count, np.int64)
        self.left = self.ticks[:, 0].copy()
        self.last = np.full(count, -1)
        self.changes: list[list[tuple[int, int]]] = [[] for _ in stimuli]
        # Brent's cycle search: a state to come back to, steps since then, and when to take a later one
        self.mark, self.age, self.renew = self.now.copy(), np.zeros(count, np.int64), np.ones(count, np.int64)
        self.live = np.arange(count)

    def advance(self) -> None:
        """Take one step in every live lane, and leave out what would only repeat it."""
        live = self.live
        before = self.now[live]
        after, out = self.move.advance(before, self.masks[live, self.place[live]])
        turned = out != self.last[live]
        self.now[live], self.last[live] = after, out
        self._note(live[turned])
        by = self._span(before, after, turned)
        self.tick[live] += by
        self.left[live] -= by
        self._take_mark(live[turned | (self.age[live] >= self.renew[live])])
        self._begin(live[(self.left[live] == 0) & (by > 0)])
        self.renew[live[turned]] = 1
        self.live = live[self.left[live] > 0]

    def _note(self, lanes: Ints) -> None:
        """Note the lanes whose outputs changed; stop those that changed too often."""
        for lane in lanes.tolist():
            self.changes[lane].append((int(self.tick[lane]), int(self.last[lane])))
            if self.most is not None and len(self.changes[lane]) > self.most:
                self.left[lane] = 0

    def _span(self, before: Ints, after: Ints, turned: NDArray[np.bool_]) -> Ints:
        """Return how many ticks of its run each live lane's step stands for."""
        self.age[self.live] += 1
        left, age = self.left[self.live], self.age[self.live]
        still = (after == before).all(axis=1)
        round_ = (after == self.mark[self.live]).all(axis=1) & ~turned
        rounds = np.where(round_, 1 + (left - 1) // age * age, 1)
        return np.where(still, left, np.minimum(left, rounds))

    def _take_mark(self, lanes: Ints) -> None:
        self.mark[lanes], self.age[lanes] = self.now[lanes], 0
        self.renew[lanes] *= 2

    def _begin(self, lanes: Ints) -> None:
        """Go on to the next run, if there is one."""
        self.place[lanes] += 1
        self.left[lanes] = self.ticks[lanes, self.place[lanes]]
        self.mark[lanes], self.age[lanes], self.renew[lanes] = self.now[lanes], 0, 1


def _padded(stimuli: Sequence[Runs]) -> tuple[Ints, Ints]:
    """Return ticks and masks, shape (B, longest + 1); the last column is always empty."""
    width = max((len(runs) for runs in stimuli), default=0) + 1
    both = np.zeros((len(stimuli), width, 2), np.int64)
    for lane, runs in enumerate(stimuli):
        both[lane, : len(runs)] = runs
    return both[:, :, 0], both[:, :, 1]


def _runs(changes: list[tuple[int, int]], end: int, most: int | None) -> Runs:
    ends = [tick for tick, _ in changes[1:]] + [end]
    return tuple((stop - tick, value) for (tick, value), stop in zip(changes, ends, strict=True))[:most]


@dataclass(frozen=True, slots=True)
class Rest:
    """How long a port takes to come to rest.

    Args:
        settle: ticks after which nothing changes any more, from any state looked at and with any
            combination held that comes to rest at all; at least 1.
        period: for each held combination the longest period in ticks where it never rests, else 0.
        bounded: False where something neither rested nor came round within `LONGEST_SETTLE` ticks.
    """

    settle: int
    period: tuple[int, ...]
    bounded: bool

    def dwell(self, mask: int) -> int:
        """Return how long to hold *mask*: until settled, or four periods where it oscillates."""
        return min(self.settle, 4 * self.period[mask]) if self.period[mask] else self.settle


def rest(port: Port) -> Rest:
    """Iterate the reference step until nothing changes, and return how long that takes.

    Starts from power-on and from the ends of every register's range, with every combination
    held, then again from where those came to rest.
    """
    settle, period, bounded = 1, np.zeros(port.held_count, np.int64), True
    seeds = _seeds(port)
    for _ in range(2):
        masks = np.tile(np.arange(port.held_count), len(seeds))
        ends, steps, periods = _to_rest(port, np.repeat(seeds, port.held_count, axis=0), masks)
        np.maximum.at(period, masks, periods)
        settle = max(settle, int(steps[periods == 0].max(initial=0)))
        bounded &= not (periods < 0).any()
        seeds = np.unique(ends, axis=0)[:64]
    return Rest(min(settle + 1, LONGEST_SETTLE), tuple(np.maximum(period, 0).tolist()), bounded)


def _seeds(port: Port) -> Ints:
    first = rows(start(port))
    if isinstance(port.machine, Charge):
        count = len(port.machine.start)
        corners = np.array(np.meshgrid([0, 1], *[[0, U16]] * count)).reshape(count + 1, -1).T
        return np.concatenate([first, corners.astype(np.int64)])
    return np.concatenate([first, _count_seeds(port.machine, first)])


def _count_seeds(machine: Count, first: Ints) -> Ints:
    if machine.toggle is None:
        return first
    most = first.repeat(2, axis=0)
    most[:, 0] = [0, 1]
    most[:, -1] = max(machine.toggle.tap + machine.toggle.hold)
    return most


def _to_rest(port: Port, now: Ints, masks: Ints) -> tuple[Ints, Ints, Ints]:
    """Step each lane with its mask held until it rests or comes round.

    Returns:
        The last states, the steps taken, and per lane the period (0 at rest, -1 undecided).
        Periods are found with R. P. Brent's cycle search (BIT 20, 176-184, 1980).
    """
    move = stepper(port)
    now, mark, marked = now.copy(), now.copy(), 0
    steps, period = np.zeros(len(now), np.int64), np.full(len(now), -1)
    lanes = np.arange(len(now))
    for tick in range(1, LONGEST_SETTLE + 1):
        after = move.advance(now[lanes], masks[lanes])[0]
        same, round_ = (after == now[lanes]).all(axis=1), (after == mark[lanes]).all(axis=1)
        now[lanes], steps[lanes] = after, tick
        period[lanes[round_]] = tick - marked
        period[lanes[same]] = 0
        lanes = lanes[~(same | round_)]
        if not len(lanes):
            break
        if tick & (tick - 1) == 0:
            mark, marked = now.copy(), tick
    return now, steps, period
