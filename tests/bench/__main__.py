"""Print what porter's speed is against plain ways of doing the same, each pair timed in this run.

    python -m tests.bench            all of them, about two minutes
    python -m tests.bench flow job   only those

The target column is what was aimed at; a miss says so.
"""

import sys
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from itertools import product

import numpy as np
from rich.console import Console
from rich.table import Table

import porter
from porter.behaviour.measure import measure
from porter.behaviour.model import Behaviour
from porter.circuit.engine import Engine, Lanes
from porter.circuit.values import columns, corners
from porter.parity.closure import walk_one
from porter.parity.twin import Twin, circuit_decides, circuit_moves
from porter.port.memory import memory
from porter.port.model import Charge, Port
from porter.port.step import start, step
from porter.port.swift import stepper
from porter.resources import resource
from porter.spec.model import Circuit
from tests.bench.adaptive import Presses, adaptive, exact
from tests.bench.clock import command_seconds, seconds
from tests.bench.plain import step_of
from tests.reference.integrate import run_exact
from tests.reference.network import from_circuit

LIBRARIES = "import click, jinja2, numpy, pydantic, quantiphy, rich.console, rich.table, vcd, yaml"


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the result; `kept` None = no target."""

    what: str
    value: str
    target: str
    kept: bool | None


@cache
def _circuit(name: str) -> Circuit:
    return porter.read(str(resource(f"specs/{name}.yaml")))


@cache
def _behaviour(name: str) -> Behaviour:
    return porter.derive(_circuit(name))


@cache
def _port(name: str) -> Port:
    return porter.plan(_circuit(name), _behaviour(name))


def _ratio(what: str, ratio: float, target: float | None) -> Row:
    if target is None:
        return Row(what, f"{ratio:,.0f} x", "", None)
    return Row(what, f"{ratio:,.0f} x", f">= {target:,.0f} x", ratio >= target)


# --- exact flow against an adaptive integrator ---


def _toggle_presses() -> tuple[Presses, float]:
    """Taps and holds of a one-button toggle over some seconds."""
    presses: list[tuple[float, int]] = [(0.0, 0)]
    for k in range(10):
        at = 0.3 + 0.75 * k
        presses += [(at, 1), (at + (0.08 if k % 2 else 0.4), 0)]
    return tuple(presses), 8.0


def flow() -> Iterator[Row]:
    """Toggles: twenty changes of the button, and the memory's voltage before each of them."""
    yield from _flow("aquarium_light", 300)
    yield from _flow("aquarium_light_slow", None)  # 100 nF on the contact: two decades apart, so stiff


def _flow(name: str, target: float | None) -> Iterator[Row]:
    circuit = _circuit(name)
    presses, end_s = _toggle_presses()
    engine = Engine(circuit)
    lanes = engine.rest(0)[0]
    node = engine.topo.state_names.index("memory")
    figures = {
        name.removeprefix("timer."): value
        for name, value in zip(engine.columns.names, engine.columns.nominal, strict=True)
        if name.startswith("timer.")
    }
    names = [tuple(b.name for b in circuit.buttons if held) for _, held in presses]
    schedule = tuple((t, held) for (t, _), held in zip(presses, names, strict=True))
    times = [*(t for t, _ in presses[1:]), end_s]
    goal = run_exact(from_circuit(circuit, figures), schedule, end_s, nodes=("memory",), times=times).volts[0]
    error = float(np.abs(exact(engine, presses, end_s, lanes)[:, 0, node] - goal).max())
    our_time = seconds(lambda: exact(engine, presses, end_s, lanes))
    method, rtol, off, their_time = _best_integrator(engine, presses, end_s, lanes, node, goal, error)
    yield Row(f"{name}: most off from an 80-digit reference", f"{error:.1e} V", "", None)
    yield Row(
        f"solve_ivp, {method} with rtol {rtol:g}, off by",
        f"{off:.1e} V",
        f">= {error:.1e} V",
        off >= error,
    )
    yield _ratio("exact flow of one unit", their_time / our_time, target)
    units = 4096
    cols = columns(circuit)
    many = Engine(circuit, corners(cols, cols.free(True)[:12])[:units])
    batch = many.rest(0)[0]
    exact(many, presses, end_s, batch)  # its modes are solved once, as the single unit's were
    each = seconds(lambda: exact(many, presses, end_s, batch), 3) / units
    yield _ratio(f"exact flow of {units:,} units at once, each", their_time / each, target)


def _best_integrator(
    engine: Engine, presses: Presses, end_s: float, lanes: Lanes, node: int, goal: np.ndarray, error: float
) -> tuple[str, float, float, float]:
    """The quickest method and tolerance whose error comes nearest to ours without beating it.

    Where none gets as near, the tightest tolerance of each method is what there is.
    """
    found = []
    for method, rtol in product(("DOP853", "LSODA", "Radau"), (1e-10, 1e-12, 3e-14)):
        run = lambda m=method, r=rtol: adaptive(engine, presses, end_s, lanes, m, r)[:, 0, node]  # noqa: E731
        off = float(np.abs(run() - goal).max())
        if off >= error:
            found.append((off, seconds(run, 2), method, rtol))
    best = min(off for off, *_ in found)
    off, took, method, rtol = min((f for f in found if f[0] <= 100 * best), key=lambda f: f[1])
    return method, rtol, off, took


# --- literal enumeration ---


def enumeration() -> Iterator[Row]:
    """Every press sequence of a one-copy port, side by side, against one after the other."""
    circuit, port = _circuit("aquarium_light"), _port("aquarium_light")
    rng = np.random.default_rng(1)
    lanes, ticks = 1 << 14, 200
    held = rng.integers(0, port.held_count, (lanes, ticks))

    def batched() -> None:
        state, quick = start(port, lanes), stepper(port)
        for tick in range(ticks):
            state, _ = quick(state, held[:, tick])

    few = held[:40].tolist()
    plain = step_of(port)

    def looped() -> None:
        for row in few:
            q, X = port.start_q, port.machine.start[0]  # type: ignore[union-attr]
            for mask in row:
                q, X = plain(q, X, mask)

    def reference() -> None:
        for row in held[:2]:
            state = start(port)
            for mask in row:
                state, _ = step(port, state, np.array([mask]))

    _same_step(port)
    batched()  # the table is made once
    ours = lanes * ticks / seconds(batched)
    theirs = len(few) * ticks / seconds(looped)
    one = 2 * ticks / seconds(reference, 2)
    yield Row("port, sequence-ticks a second", f"{ours / 1e6:,.0f} million", "", None)
    yield _ratio("against the reference step looped over one at a time", ours / one, 100)
    yield Row("against hand-written integer Python, one at a time", f"{ours / theirs:,.0f} x", "", None)
    yield _twins(circuit, port)


def _same_step(port: Port) -> None:
    """The plain loop is worth timing only if it computes the same."""
    rng, plain = np.random.default_rng(2), step_of(port)
    state = start(port)
    q, X = int(state.q[0]), int(state.regs[0, 0])
    for mask in rng.integers(0, port.held_count, 3000):
        state, _ = step(port, state, np.array([mask]))
        q, X = plain(q, X, int(mask))
        assert (q, X) == (int(state.q[0]), int(state.regs[0, 0]))


def _twins(circuit: Circuit, port: Port) -> Row:
    """Circuit and port together, as the proof walks them."""

    def rate(lanes: int, ticks: int) -> float:
        held = np.random.default_rng(3).integers(0, port.held_count, (ticks // 10, lanes))
        twin = Twin.powered(circuit, port, lanes=lanes)

        def walk() -> None:
            for masks in held:
                twin.circuit_for(masks, 10)
                for _ in range(10):
                    twin.port_tick(masks)

        return lanes * ticks / seconds(walk, 2)

    return _ratio(
        "circuit and port together, against one sequence at a time", rate(1 << 14, 50) / rate(1, 100), 100
    )


# --- a whole job ---


def job() -> Iterator[Row]:
    """`porter port` on a shipped toggle against importing the libraries that it needs."""
    spec = str(resource("specs/aquarium_light.yaml"))
    bare = command_seconds([sys.executable, "-c", LIBRARIES])
    with tempfile.TemporaryDirectory() as folder:
        whole = command_seconds([sys.executable, "-m", "porter", "port", spec, "-o", f"{folder}/job"], 3)
    yield Row("importing the libraries", f"{bare:.2f} s", "", None)
    yield Row("porter port aquarium_light.yaml", f"{whole:.2f} s", "", None)
    yield Row("times the bare import", f"{whole / bare:.1f} x", "<= 6 x", whole <= 6 * bare)


# --- corners ---


def corner() -> Iterator[Row]:
    """Every corner of twelve toleranced values, with every window, hold and margin."""
    circuit = _circuit("aquarium_light")
    cols = columns(circuit)
    nominal = measure(Engine(circuit, None, cols))
    keys = tuple(nominal.margins)
    free = cols.free(True)[:12]
    rows = corners(cols, free)

    def looped() -> None:
        for row in rows[1:9]:
            measure(Engine(circuit, row[None, :], cols), keys)

    took = seconds(lambda: measure(Engine(circuit, rows, cols), keys), 3)
    each = seconds(looped, 2) / 8
    yield Row(f"{len(rows):,} units of {len(free)} toleranced values", f"{took:.2f} s", "< 1 s", took < 1)
    yield Row("against measuring one unit at a time", f"{each * len(rows) / took:,.0f} x", "", None)


# --- closure ---


def closure() -> Iterator[Row]:
    """Every reachable state of a one-capacitor port, compared with the circuit."""
    name = "aquarium_light"
    mem, port = memory(Engine(_circuit(name))), _port(name)
    walk, _ = walk_one(mem, port)
    took = seconds(lambda: walk_one(memory(Engine(_circuit(name))), port), 3)
    steps = walk.closure.steps
    plain = step_of(port)
    sample = np.linspace(0, 65535, 150).astype(int).tolist()

    def looped() -> None:
        for X in sample:
            for held in range(port.held_count):
                for q in (0, 1):
                    plain(q, X, held)
                    one = np.array([[X]])
                    circuit_decides(mem, q, held, one)
                    circuit_moves(mem, q, held, one, port.tick_s)

    each = seconds(looped, 2) / (len(sample) * port.held_count * 2)
    yield Row(f"{walk.closure.states:,} states, {steps:,} steps", f"{took:.2f} s", "< 0.2 s", took < 0.2)
    yield Row("against one state at a time (sampled)", f"{each * steps / took:,.0f} x", "", None)


# --- how cost grows ---


def growth() -> Iterator[Row]:
    """Seconds of `derive` and `prove` by buttons and capacitors, and of the enumeration by depth."""
    for name in ("door_sign", "stair_light", "wash_door", "aquarium_light", "soap_dose", "bench_fan"):
        circuit = _circuit(name)
        kept = memory(Engine(circuit)).kept
        derive = seconds(lambda c=circuit: porter.derive(c), 1)
        behaviour, port = _behaviour(name), _port(name)
        prove = seconds(lambda c=circuit, p=port, b=behaviour: porter.prove(c, p, b), 1)
        what = f"{name}: {len(circuit.buttons)} buttons, {len(kept)} capacitors carried"
        yield Row(f"{what}; derive, prove", f"{derive:.2f} s, {prove:.2f} s", "", None)
    yield from _by_depth()


def _by_depth() -> Iterator[Row]:
    circuit, port = _circuit("aquarium_light"), _port("aquarium_light")
    assert isinstance(port.machine, Charge)
    for depth in (8, 10, 12, 14):
        rows = np.arange(1 << depth)
        twin = Twin.powered(circuit, port, lanes=len(rows))

        def walk(depth: int = depth, rows=rows, twin: Twin = twin) -> None:
            for k in range(depth):
                masks = rows >> k & 1
                twin.circuit_for(masks, 1)
                twin.port_tick(masks)

        took = seconds(walk, 1)
        yield Row(f"all {len(rows):,} sequences of depth {depth}, a tick each", f"{took:.3f} s", "", None)


def compiled() -> Iterator[Row]:
    """Every sequence of two buttons against the emitted C as compiled, beside a solver's bounded check."""
    # Needs a C compiler and z3, which the other parts do without.
    from tests.bench.enumerate_c import CORES, DEPTH, rows

    for depth, sequences, literal, solver in rows()[1:-1]:
        aimed = depth == str(DEPTH)
        yield Row(
            f"all {sequences} sequences of {depth} steps, two buttons, against the compiled C",
            f"{literal}; bounded check by Z3 {solver}",
            f"10 s on {CORES} cores" if aimed else "",
            float(literal.removesuffix(" s")) < 10 if aimed else None,
        )


PARTS: dict[str, Callable[[], Iterator[Row]]] = {
    "flow": flow,
    "enumeration": enumeration,
    "job": job,
    "corners": corner,
    "closure": closure,
    "growth": growth,
    "compiled": compiled,
}


def main(names: list[str]) -> int:
    """Run the named parts, or all; returns 1 where a target is missed."""
    table = Table("what", "measured", "target", "", title=f"processor seconds; numpy {np.__version__}")
    missed = False
    for name in names or PARTS:
        table.add_section()
        for row in PARTS[name]():
            said = {None: "", True: "kept", False: "MISSED"}[row.kept]
            missed |= row.kept is False
            table.add_row(row.what, row.value, row.target, said)
    Console(width=120).print(table)
    return int(missed)


if __name__ == "__main__":
    wrong = set(sys.argv[1:]) - set(PARTS)
    if wrong:
        sys.exit(f"no such part: {', '.join(sorted(wrong))}; there are {', '.join(PARTS)}")
    sys.exit(main(sys.argv[1:]))
