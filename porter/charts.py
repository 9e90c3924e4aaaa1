"""Runs of circuit and port side by side, for the report and for `porter trace`."""

from collections.abc import Iterator, Sequence
from itertools import permutations
from typing import Literal

import numpy as np

from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine
from porter.circuit.power import Profile, works_from
from porter.circuit.values import Floats
from porter.port.memory import Memory, memory
from porter.port.model import U16, Charge, Port, State
from porter.port.plan import answers
from porter.port.step import start as port_start
from porter.port.swift import stepper
from porter.single_run import Schedule, held_mask, simulate
from porter.spec.model import RAILS, Circuit
from porter.supply_run import simulate_supply
from porter.trace import Changes, Trace, Wave

_POINTS = 400  # samples of a drawn voltage
_PLAIN_S = 0.15  # length of a step in charts of circuits without a window


def run_trace(
    circuit: Circuit,
    port: Port | None,
    schedule: Schedule,
    end_s: float,
    title: str,
    *,
    start: Literal["empty", "settled"] = "empty",
    output: Literal["low", "high"] = "low",
    engine: Engine | None = None,
    supply: Profile | None = None,
) -> Trace:
    """Run circuit (and port) through a press schedule.

    Args:
        schedule: ``((time_s, held names), ...)``, the first at 0.
        start, output: as in `simulate`; the port begins in the same state.
        supply: its course; the port then starts anew, and is dark, wherever the timer can't work.

    Raises:
        ValueError: the schedule does not begin at 0 or names an unknown button.
    """
    engine = engine or Engine(circuit)
    steps = [(float(at), tuple(names)) for at, names in schedule]
    nodes = _shown_nodes(circuit, engine)
    times = _sample_times([at for at, _ in steps], end_s).tolist()
    if supply is None:
        run = simulate(
            circuit, steps, end_s, start=start, output=output, nodes=nodes, times=times, engine=engine
        )
    else:
        begin: Literal["off", "low", "high"] = "off" if start == "empty" else output
        run = simulate_supply(
            circuit, supply, steps, end_s, start=begin, wakes=output, nodes=nodes, times=times
        )
    waves = tuple(Wave(n, tuple(times), tuple(v.tolist())) for n, v in zip(nodes, run.volts, strict=True))
    return Trace(
        title=title,
        end_s=end_s,
        buttons=_button_changes(circuit, steps),
        circuit=_output_changes(circuit, engine, run.edges, steps),
        port=None
        if port is None
        else _port_changes(circuit, port, engine, steps, end_s, start, output, supply),
        latch=tuple(run.edges),
        waves=waves,
        levels=_levels(engine),
    )


def _shown_nodes(circuit: Circuit, engine: Engine) -> list[str]:
    names = [n for n in engine.topo.state_names if "-" not in n]
    names += [circuit.timer.pins[p] for p in ("trigger", "threshold") if p in circuit.timer.pins]
    return [n for n in dict.fromkeys(names) if n not in RAILS]


def _sample_times(changes: Sequence[float], end_s: float) -> Floats:
    beside = [t for at in changes for t in (at, max(at - 1e-9, 0.0))]
    return np.unique(np.concatenate([np.linspace(0, end_s, _POINTS), beside]))


def _levels(engine: Engine) -> tuple[tuple[str, float], ...]:
    cols, supply = engine.columns, float(engine.supply[0])
    ratio = {pin: float(cols.nominal[cols.index(f"timer.{pin}_ratio")]) for pin in ("trigger", "threshold")}
    return tuple((f"{pin} level", share * supply) for pin, share in ratio.items())


def _button_changes(circuit: Circuit, steps: Sequence[tuple[float, tuple[str, ...]]]) -> dict[str, Changes]:
    return {b.name: _squeeze([(at, int(b.name in names)) for at, names in steps]) for b in circuit.buttons}


def _squeeze(changes: Sequence[tuple[float, int]]) -> Changes:
    """Drop entries that change nothing."""
    kept: list[tuple[float, int]] = []
    for at, level in changes:
        if not kept or kept[-1][1] != level:
            kept.append((at, level))
    return tuple(kept)


def _output_changes(
    circuit: Circuit,
    engine: Engine,
    edges: Sequence[tuple[float, int]],
    steps: Sequence[tuple[float, tuple[str, ...]]],
) -> dict[str, Changes]:
    """Turn the latch's edges and the presses into the spec's outputs."""
    table = answers(engine)
    moments = sorted({at for at, _ in edges} | {at for at, _ in steps})
    latch = [next(q for at, q in reversed(edges) if at <= t) for t in moments]
    held = [next(held_mask(circuit, names) for at, names in reversed(steps) if at <= t) for t in moments]
    bits = [table[q][h] for q, h in zip(latch, held, strict=True)]
    return _by_output(circuit, moments, bits)


def _by_output(circuit: Circuit, moments: Sequence[float], bits: Sequence[int]) -> dict[str, Changes]:
    return {
        o.name: _squeeze([(t, b >> j & 1) for t, b in zip(moments, bits, strict=True)])
        for j, o in enumerate(circuit.outputs)
    }


def _port_changes(
    circuit: Circuit,
    port: Port,
    engine: Engine,
    steps: Sequence[tuple[float, tuple[str, ...]]],
    end_s: float,
    start: str,
    output: str,
    supply: Profile | None = None,
) -> dict[str, Changes]:
    state = port_start(port) if start == "empty" else _settled(port, memory(engine), int(output == "high"))
    ticks = int(np.floor(end_s / port.tick_s + 1e-9)) + 1
    times = np.arange(ticks, dtype=float) * port.tick_s
    at = np.array([t for t, _ in steps])
    masks = np.array([held_mask(circuit, names) for _, names in steps])
    held = masks[np.searchsorted(at, times + 1e-9 * port.tick_s, side="right") - 1]
    fed = (
        np.ones(ticks, bool) if supply is None else supply.at(np.asarray(times, float)) >= works_from(circuit)
    )
    bits, step = [], stepper(port)
    for h, works in zip(held, fed, strict=True):
        state, out = step(state, np.array([h])) if works else (port_start(port), np.zeros(1, int))
        bits.append(int(out[0]))
    return _by_output(circuit, times.tolist(), bits)


def _settled(port: Port, mem: Memory, q: int) -> State:
    """The port's state where the circuit is at rest with the latch at q."""
    state = port_start(port)
    regs = state.regs.copy()
    if isinstance(port.machine, Charge):
        rest, _ = mem.engine.rest(q, np.zeros(1, np.int64))
        regs[0] = np.clip(np.rint(mem.copies(rest.x)[0]), 0, U16)
    return State(np.array([q], np.uint8), regs)


# --- the charts of a report ---


def standard_traces(circuit: Circuit, behaviour: Behaviour, port: Port) -> tuple[Trace, ...]:
    """Run what a reader of the report wants to see: the memory over a press, simultaneous presses."""
    engine = Engine(circuit)
    return (*_memory_traces(circuit, behaviour, port, engine), *_together(circuit, behaviour, port, engine))


def _pace(behaviour: Behaviour) -> float:
    """A length of time in which this circuit's windows can be seen."""
    longest = [w.seconds.nominal for w in behaviour.windows if w.seconds.nominal]
    return max([1.2 * max(longest, default=0.0), _PLAIN_S])


def _memory_traces(circuit: Circuit, behaviour: Behaviour, port: Port, engine: Engine) -> Iterator[Trace]:
    if not engine.topo.states or not memory(engine).kept:
        return
    pace = _pace(behaviour)
    for button in circuit.buttons:
        mine = [w for w in behaviour.windows if w.button == button.name and w.window == "shortest-press"]
        begin = next((w.start for w in mine if w.seconds.nominal is not None), None)
        if begin is None:
            continue
        press, hold = (button.name,), 0.6 * pace
        schedule = [
            (0.0, ()),
            (0.2 * pace, press),
            (0.2 * pace + 0.08 * pace, ()),
            (1.6 * pace, press),
            (1.6 * pace + hold, ()),
            (3.6 * pace, press),
            (3.6 * pace + 0.08 * pace, ()),
        ]
        title = f"{button.name}: a tap, a hold and release, another tap"
        yield run_trace(
            circuit, port, schedule, 4.8 * pace, title, start="settled", output=begin, engine=engine
        )


def _together(circuit: Circuit, behaviour: Behaviour, port: Port, engine: Engine) -> Iterator[Trace]:
    """Two buttons held together, pressed and released in each order."""
    pace = _pace(behaviour)
    names = [b.name for b in circuit.buttons]
    for first, second in permutations(names[:3], 2):
        for gone in (first, second):
            left = second if gone == first else first
            schedule = [
                (0.0, ()),
                (0.3 * pace, (first,)),
                (0.8 * pace, (first, second)),
                (1.5 * pace, (left,)),
                (2.1 * pace, ()),
            ]
            title = f"{first}, then {second} as well; {gone} is let go first"
            yield _no_waves(
                run_trace(
                    circuit, port, schedule, 2.8 * pace, title, start="settled", output="low", engine=engine
                )
            )


def _no_waves(trace: Trace) -> Trace:
    return Trace(trace.title, trace.end_s, trace.buttons, trace.circuit, trace.port, trace.latch)
