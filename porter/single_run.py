"""One run of the nominal circuit, for people and tests: edges and voltages."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from porter.circuit.engine import Engine, Ints, Lanes
from porter.circuit.flow import reach
from porter.circuit.network import Mode
from porter.circuit.values import Floats
from porter.spec.model import Circuit

#: ``((time_s, names of the held buttons), ...)``, times rising, the first at 0.
Schedule = Sequence[tuple[float, Iterable[str]]]


@dataclass(frozen=True, slots=True)
class Run:
    """What happened: `edges` (time_s, timer output), the first at 0; `volts` shape (nodes, times)."""

    edges: tuple[tuple[float, int], ...]
    volts: Floats
    oscillates: bool


@dataclass(frozen=True, slots=True)
class _Stretch:
    start_s: float
    length_s: float
    mode: Mode
    z0: Floats

    def volts(self, t: Floats) -> Floats:
        """Node voltages at times since the stretch's start, shape (N, T)."""
        rate, drive = self.mode.rate[0], self.mode.drive[0]
        z = self.z0[:, None] + (drive - rate * self.z0)[:, None] * reach(rate[:, None], t[None, :])
        return np.asarray(self.mode.v0[0][:, None] + self.mode.Vz[0] @ z)


def held_mask(circuit: Circuit, names: Iterable[str]) -> int:
    """Return the held mask of some buttons; raises ValueError for an unknown name."""
    order = [b.name for b in circuit.buttons]
    return sum(1 << order.index(name) for name in set(names))


def simulate(
    circuit: Circuit,
    schedule: Schedule,
    end_s: float,
    *,
    start: Literal["empty", "settled"] = "empty",
    output: Literal["low", "high"] = "low",
    nodes: Sequence[str] = (),
    times: Sequence[float] = (),
    engine: Engine | None = None,
) -> Run:
    """Run the nominal circuit through a press schedule, exactly.

    Args:
        schedule: held buttons from each time on.
        end_s: end of the run, seconds.
        start: ``empty``: the supply steps up over empty capacitors with the latch at `output`;
            ``settled``: at rest with the latch at `output`, no button held.
        nodes, times: which voltages to return, and when (right after an event at that instant).

    Raises:
        ValueError: the schedule does not begin at 0 or names an unknown button.
    """
    if not schedule or schedule[0][0] != 0:
        raise ValueError("the schedule must begin at time 0")
    engine = engine or Engine(circuit)
    q = int(output == "high")
    lanes = engine.rest(q)[0] if start == "settled" else engine.empty(q)
    lanes.clock_s[:] = 0.0
    first = int(lanes.q[0])  # a level that doesn't last is no start
    edges: list[tuple[float, int]] = []
    stretches: list[_Stretch] = []

    def listen(_: Ints, when: Floats, new: Ints) -> None:
        edges.append((float(when[0]), int(new[0])))

    def watch(_: Ints, mode: Mode, z0: Floats, at: Floats, length: Floats) -> None:
        stretches.append(_Stretch(float(at[0]), float(length[0]), mode, z0[0]))

    oscillates = False
    for k, (at, names) in enumerate(schedule):
        until = schedule[k + 1][0] if k + 1 < len(schedule) else end_s
        engine.press(lanes, held_mask(circuit, names), listen)
        oscillates |= _through(engine, lanes, until - at, watch, listen)
    for when, new in edges:
        if when == 0:
            first = new
    later = tuple(e for e in edges if e[0] > 0)
    return Run(
        ((0.0, first), *later), _sample(engine, stretches, nodes, np.asarray(times, float)), oscillates
    )


def _through(engine: Engine, lanes: Lanes, duration: float, watch, listen) -> bool:  # type: ignore[no-untyped-def]
    """Run for *duration*, through oscillation too; returns whether it oscillated."""
    end = lanes.clock_s[0] + duration
    busy = False
    engine.run(lanes, duration, watcher=watch, listener=listen)
    while lanes.busy[0] and lanes.period_s[0] > 0 and lanes.clock_s[0] < end:
        busy = True
        lanes.busy[:], lanes.flips[:] = False, 0
        engine.run(lanes, float(end - lanes.clock_s[0]), watcher=watch, listener=listen)
    return busy or bool(lanes.busy[0])


def _sample(engine: Engine, stretches: Sequence[_Stretch], nodes: Sequence[str], times: Floats) -> Floats:
    out = np.full((len(nodes), len(times)), np.nan)
    if not len(nodes) or not len(times) or not stretches:
        return out
    begins = np.array([s.start_s for s in stretches])
    which = np.clip(np.searchsorted(begins, times, side="right") - 1, 0, None)
    for k in np.unique(which):
        volts = stretches[k].volts(times[which == k] - begins[k])
        for row, name in enumerate(nodes):
            index = engine.topo.node(name)
            rail = {-1: 0.0, -2: float(engine.supply[0])}
            out[row, which == k] = rail[index] if index < 0 else volts[index]
    return out
