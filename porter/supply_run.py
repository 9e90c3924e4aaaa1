"""One run of the nominal circuit on a moving supply: edges and voltages, exactly."""

from collections.abc import Iterator, Sequence
from itertools import pairwise
from typing import Literal

import numpy as np

from porter.circuit.engine import Ints, Lanes
from porter.circuit.flow import reach
from porter.circuit.network import GND, VCC, Mode
from porter.circuit.power import Piece, Powered, Profile, beat_on, pieces, works_from
from porter.circuit.values import Floats
from porter.single_run import Run, Schedule, held_mask
from porter.spec.model import Circuit


def simulate_supply(
    circuit: Circuit,
    supply: Profile,
    schedule: Schedule,
    end_s: float,
    *,
    start: Literal["off", "low", "high"] = "off",
    wakes: Literal["low", "high"] = "low",
    nodes: Sequence[str] = (),
    times: Sequence[float] = (),
) -> Run:
    """Run the nominal circuit through a course of the supply and a press schedule.

    Args:
        supply: the course in volt.
        schedule: held buttons from each time on, the first at 0.
        start: ``off``: no supply, empty capacitors; else at rest with that output and the full supply.
        wakes: the level that the latch has where the chip starts to work and nothing forces it.
        nodes, times: which voltages to return, and when.

    Returns:
        As `porter.simulate`.  While the chip doesn't work its output counts as low.

    Raises:
        ValueError: the schedule does not begin at 0, or names an unknown button or node.
    """
    if not schedule or schedule[0][0] != 0:
        raise ValueError("the schedule must begin at time 0")
    engine = Powered(circuit, 1)
    lanes = engine.dark(1) if start == "off" else engine.settled(np.array([int(start == "high")]))[0]
    edges = [(0.0, int(start == "high"))]
    seen = _Voltages(engine, nodes, np.asarray(times, float))
    awake, oscillates = start != "off", False
    for until, piece, names in _stretches(pieces(supply, works_from(circuit)), schedule, end_s):
        engine.stretch(np.array([piece.slope]), piece.awake)
        engine.set_supply(lanes, np.array([piece.volts]))
        lanes.held[:] = held_mask(circuit, names)
        lanes.crossed[:], lanes.flips[:], lanes.busy[:] = -1, 0, False
        if piece.awake and not awake:
            lanes.q[:] = int(wakes == "high")
        awake = piece.awake
        oscillates |= _run(engine, lanes, until, edges, seen)
    return Run(_changes(edges), seen.volts, oscillates)


def _stretches(
    cut: Sequence[Piece], schedule: Schedule, end_s: float
) -> Iterator[tuple[float, Piece, Sequence[str]]]:
    """Cut the supply's pieces where the buttons change: (end, piece from there on, names held)."""
    begins = np.concatenate([[0.0], np.cumsum([p.seconds for p in cut])[:-1]])
    marks = sorted({*begins[begins < end_s].tolist(), *(t for t, _ in schedule if t < end_s), end_s})
    for at, until in pairwise(marks):
        k = int(np.searchsorted(begins, at, side="right")) - 1
        names = [held for t, held in schedule if t <= at][-1]
        piece = cut[k]
        volts = piece.volts + piece.slope * (at - begins[k])
        yield until, Piece(float(volts), piece.slope, until - at, piece.awake), list(names)


def _run(
    engine: Powered, lanes: Lanes, until: float, edges: list[tuple[float, int]], seen: "_Voltages"
) -> bool:
    """Run one stretch, through oscillation too; returns whether it oscillated."""

    def turned(_: Ints, when: Floats, new: Ints) -> None:
        edges.append((float(when[0]), int(new[0])))

    before = float(lanes.clock_s[0])
    if engine.awake:
        engine.resolve(lanes)
    edges.append((before, int(lanes.q[0]) if engine.awake else 0))
    frozen = not engine.awake
    engine.run(lanes, until - before, frozen=frozen, watcher=seen.watch, listener=turned)
    busy = bool(lanes.busy[0])
    beat_on(engine, lanes, np.array([until]), turned, seen.watch)
    return busy


def _changes(edges: Sequence[tuple[float, int]]) -> tuple[tuple[float, int], ...]:
    """Keep what changes: of several levels at one instant the last, of equal ones the first."""
    at = dict(edges)  # a later entry of the same time takes its place
    out: list[tuple[float, int]] = []
    for when, level in sorted(at.items()):
        if not out or out[-1][1] != level:
            out.append((when, level))
    return tuple(out)


class _Voltages:
    """Samples node voltages while the run goes by."""

    def __init__(self, engine: Powered, nodes: Sequence[str], times: Floats) -> None:
        self.at = [engine.topo.node(n) for n in nodes]
        self.times = times
        self.volts = np.full((len(nodes), len(times)), np.nan)

    def watch(self, _: Ints, mode: Mode, z0: Floats, at: Floats, length: Floats) -> None:
        """Fill in what lies in a stretch; the next one overwrites its end."""
        since = self.times - at[0]
        inside = np.flatnonzero((since >= 0) & (since <= length[0]))
        if not len(inside) or not self.at:
            return
        rate, drive = mode.rate[0], mode.drive[0]
        span = reach(rate[:, None], since[inside][None, :])
        z = z0[0][:, None] + (drive - rate * z0[0])[:, None] * span
        for row, node in enumerate(self.at):
            if node == GND:
                self.volts[row, inside] = 0.0
            elif node == VCC:
                self.volts[row, inside] = z[-1]
            else:
                self.volts[row, inside] = mode.v0[0, node] + mode.Vz[0, node] @ z
