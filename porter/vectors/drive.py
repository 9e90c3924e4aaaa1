"""Drive a port's reference step with run-length coded stimuli, many at a time."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from porter.port.model import U16, Charge, Count, Port, State
from porter.port.step import start, step
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


def drive(port: Port, stimuli: Sequence[Runs]) -> tuple[list[Runs], State]:
    """Run *stimuli* from power-on, all beside each other.

    A run in which a step changes nothing is over at once, since every further
    step of it would be the same step; so long holds cost only as many steps as the
    port needs to come to rest.

    Args:
        stimuli: B run-length coded stimuli, none empty.

    Returns:
        The outputs' bits of each, run-length coded, and the state of each at its end (B lanes).
    """
    ticks, masks = _padded(stimuli)
    now = rows(start(port, len(stimuli)))
    place, left, tick = (np.zeros(len(stimuli), np.int64) for _ in range(3))
    left += ticks[:, 0]
    last = np.full(len(stimuli), -1)
    changes: list[list[tuple[int, int]]] = [[] for _ in stimuli]
    lanes = np.arange(len(stimuli))
    while len(lanes):
        before = now[lanes]
        after, out = step(port, state_of(before), masks[lanes, place[lanes]])
        now[lanes] = rows(after)
        turned = lanes[out != last[lanes]]
        last[lanes] = out
        for lane in turned.tolist():
            changes[lane].append((int(tick[lane]), int(last[lane])))
        by = np.where((now[lanes] == before).all(axis=1), left[lanes], 1)
        tick[lanes] += by
        left[lanes] -= by
        done = lanes[left[lanes] == 0]
        place[done] += 1
        left[done] = ticks[done, place[done]]
        lanes = lanes[left[lanes] > 0]
    return [_runs(c, int(end)) for c, end in zip(changes, tick, strict=True)], state_of(now)


def _padded(stimuli: Sequence[Runs]) -> tuple[Ints, Ints]:
    """Return ticks and masks, shape (B, longest + 1); the last column is always empty."""
    width = max((len(runs) for runs in stimuli), default=0) + 1
    both = np.zeros((len(stimuli), width, 2), np.int64)
    for lane, runs in enumerate(stimuli):
        both[lane, : len(runs)] = runs
    return both[:, :, 0], both[:, :, 1]


def _runs(changes: list[tuple[int, int]], end: int) -> Runs:
    ends = [tick for tick, _ in changes[1:]] + [end]
    return tuple((stop - tick, value) for (tick, value), stop in zip(changes, ends, strict=True))


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
    now, mark, marked = now.copy(), now.copy(), 0
    steps, period = np.zeros(len(now), np.int64), np.full(len(now), -1)
    lanes = np.arange(len(now))
    for tick in range(1, LONGEST_SETTLE + 1):
        after = rows(step(port, state_of(now[lanes]), masks[lanes])[0])
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
