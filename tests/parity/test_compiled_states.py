"""The emitted cores as they run: the reference's function in every state, and safe from any bit pattern.

C is compiled to WebAssembly with traps on undefined behaviour, so that a shift or a sum
out of range ends the run instead of passing by chance.
"""

import os
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import emit_run
import numpy as np
import pytest
import wasmtime
from emit_ports import filtered, suite, toggle_count, toggle_sides
from wrong_ports import charge, right

from porter.emit import emit
from porter.port.model import U16, Charge, Port, State
from porter.port.step import idle
from porter.port.swift import stepper

FLAGS = [
    "-target",
    "wasm32-freestanding",
    "-std=c99",
    "-O1",
    "-nostdlib",
    "-Wl,--no-entry",
    "-fsanitize=undefined",
    "-fsanitize-trap=undefined",
]


def ports() -> list[Port]:
    """Shipped ports of one copy and of none, and counting ones."""
    shipped = [right(name).port for name in ("aquarium_light", "map_lamp", "bench_fan", "kiln_vent")]
    return [*shipped, filtered(press=5, release=4), toggle_count(), toggle_sides()]


def texts_of(port: Port) -> dict[str, str]:
    """Return a port's files."""
    return emit(port, suite(port, 2, 1))


def compiled(where: Path, some: list[Port], texts: list[dict[str, str]]) -> list[emit_run.Core]:
    """Compile cores together, trapping on what C leaves undefined."""
    lines = []
    for port, text in zip(some, texts, strict=True):
        for ending in ("h", "c"):
            (where / f"{port.name}.{ending}").write_text(text[f"firmware/c/{port.name}.{ending}"])
        (where / f"{port.name}_driver.c").write_text(
            emit_run._DRIVER.format(name=port.name, lanes=emit_run.LANES)
        )
        lines += [f'#include "{port.name}.c"\n', f'#include "{port.name}_driver.c"\n']
    (where / "all.c").write_text("".join(lines))
    places = {"ZIG_GLOBAL_CACHE_DIR": str(where / "cache"), "ZIG_LOCAL_CACHE_DIR": str(where / "cache")}
    command = [sys.executable, "-m", "ziglang", "cc", *FLAGS, "all.c", "-o", "cores.wasm"]
    done = subprocess.run(command, cwd=where, env=os.environ | places, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    engine = wasmtime.Engine()
    store = wasmtime.Store(engine)
    module = wasmtime.Module.from_file(engine, str(where / "cores.wasm"))
    exports = wasmtime.Instance(store, module, []).exports(store)
    return [emit_run.Core(port.name, emit_run.layout(port), store, exports) for port in some]


@pytest.fixture(scope="module")
def cores(tmp_path_factory) -> dict[str, tuple[Port, emit_run.Core]]:
    """All cores, by name."""
    some = ports()
    made = compiled(tmp_path_factory.mktemp("cores"), some, [texts_of(port) for port in some])
    return {port.name: (port, core) for port, core in zip(some, made, strict=True)}


def turned(port: Port) -> bool:
    """Whether the core keeps the copy upside down while the latch is 1."""
    moves = (m for row in charge(port).modes for mode in row for m in mode.moves)
    return any(m.mirror for m in moves)


def stored(port: Port, core: emit_run.Core, state: State) -> np.ndarray:
    """Write reference states as the core's struct."""
    out = np.zeros(len(state.q), core.kinds)
    out["q"] = state.q
    if "x" in out.dtype.names:
        flip = U16 * (turned(port) & (state.q == 1))
        out["x"] = state.regs[:, 0] ^ flip
    return out


def every_state(port: Port) -> State:
    """All states of a port whose registers are one copy, or none that matters."""
    if isinstance(port.machine, Charge):
        q, X = np.divmod(np.arange(2 * (U16 + 1), dtype=np.int64), U16 + 1)
        return State(q.astype(np.uint8), X[:, None])
    q = np.array([0, 1], np.uint8)
    return State(q, np.zeros((2, len(port.buttons) + 2), np.int64))


def compare_everywhere(port: Port, core: emit_run.Core) -> int:
    """Step core and reference from every state with every mask; returns how many steps were the same."""
    state, steps, count = every_state(port), stepper(port), 0
    for mask in range(port.held_count):
        held = np.full(len(state.q), mask)
        after, answers = steps(state, held)
        got, said, rest = core.step(stored(port, core, state), held)
        np.testing.assert_array_equal(stored(port, core, after), got)
        np.testing.assert_array_equal(answers, said)
        # Where idle() is true, one more step changes nothing: a fixed point, for ever.
        fixed = idle(port, after, held)
        assert not (rest & ~fixed).any()
        if mask == 0:
            np.testing.assert_array_equal(fixed, rest)
        if rest.any():
            again, once_more, _ = core.step(got[rest], held[rest])
            np.testing.assert_array_equal(got[rest], again)
            np.testing.assert_array_equal(said[rest], once_more)
        count += len(held)
    return count


@pytest.mark.parametrize("name", ["aquarium_light", "map_lamp", "bench_fan", "kiln_vent"])
def test_the_compiled_core_is_the_reference_in_every_state(cores, name):
    """State in, state out, answer and idle: the same function, over all states and masks."""
    port, core = cores[name]
    assert compare_everywhere(port, core) == len(every_state(port).q) * port.held_count


def test_one_state_that_differs_is_found(tmp_path):
    """The comparison can fail: a limit one copy off, which shows in one state of all, is found."""
    port = right("aquarium_light").port
    texts = texts_of(port)
    path = f"firmware/c/{port.name}.c"
    wrong = texts | {path: texts[path].replace("LIMIT_LOW_LIGHT 21844u", "LIMIT_LOW_LIGHT 21845u")}
    assert wrong != texts
    core = compiled(tmp_path, [port], [wrong])[0]
    with pytest.raises(AssertionError):
        compare_everywhere(port, core)


def test_a_shift_out_of_range_traps(tmp_path):
    """The traps are there: a core that shifts by too much does not come back."""
    port = right("kiln_vent").port
    texts = texts_of(port)
    path = f"firmware/c/{port.name}.c"
    wrong = texts | {path: texts[path].replace("(m->q & 1u)", "((1u << (m->q + 31u)) >> 31u)")}
    assert wrong != texts
    core = compiled(tmp_path, [port], [wrong])[0]
    states = np.frombuffer(bytes([1]), core.kinds)
    with pytest.raises(wasmtime.Trap):
        core.step(states, np.array([0]))


# --- from any bit pattern ---


def patterns(kinds: np.dtype, most: int) -> np.ndarray:
    """All bit patterns of a struct of one or two bytes, else *most* drawn ones."""
    names = kinds.names or ()
    bits = sum(8 * kinds[name].itemsize for name in names)
    drawn = np.random.default_rng(3)
    values = np.arange(1 << bits) if bits <= 16 else drawn.integers(0, 1 << bits, most)
    out = np.zeros(len(values), kinds)
    for name in names:
        width = 8 * kinds[name].itemsize
        out[name] = values & ((1 << width) - 1)
        values = values >> width
    return out


def stated_ticks(port: Port) -> int:
    """Return within how many ticks the header says that any pattern is legal again."""
    header = re.sub(r"\s*\n \* ", " ", texts_of(port)[f"firmware/c/{port.name}.h"])
    found = re.search(r"back in a legal one after at most (\d+) tick", header)
    assert found or "legal one after one step" in header
    return int(found[1]) if found else 1


def reachable(port: Port, core: emit_run.Core) -> set[bytes]:
    """Return every state that the core comes to from power-on."""
    states, ever = core.start(), {core.start()[0].tobytes()}
    while len(states):
        held = np.tile(np.arange(port.held_count), len(states))
        after, _, _ = core.step(np.repeat(states, port.held_count), held)
        new = {s.tobytes(): i for i, s in enumerate(after) if s.tobytes() not in ever}
        ever |= set(new)
        states = after[sorted(new.values())]
    return ever


@pytest.mark.parametrize("name", ["kiln_vent", "pump_latch", "stair_toggle", "desk_toggle"])
def test_any_pattern_is_legal_again_in_the_stated_time(cores, name):
    """Count cores: all patterns of their one or two bytes, buttons open, no trap on the way."""
    port, core = cores[name]
    states = patterns(core.kinds, 0)
    legal = {port.answer[q][0] for q in (0, 1)}
    for _ in range(stated_ticks(port)):
        states, answers, _ = core.step(states, np.zeros(len(states), np.uint8))
        assert {*answers.tolist()} <= legal
    assert {state.tobytes() for state in states} <= reachable(port, core)


def check_copies(port: Port, core: emit_run.Core, states: np.ndarray) -> None:
    """A charge core's next state is that of its latch's lowest bit, whatever the other bits were."""
    for mask in range(port.held_count):
        held = np.full(len(states), mask)
        cleaned = states.copy()
        cleaned["q"] &= 1
        after, answers, _ = core.step(states, held)
        expected, said, _ = core.step(cleaned, held)
        np.testing.assert_array_equal(expected, after)
        np.testing.assert_array_equal(said, answers)
        assert after["q"].max() <= 1


def test_any_pattern_of_a_copy_is_a_voltage(cores):
    """Charge cores: a sample of the patterns of their three bytes is legal after the one tick stated."""
    for name in ("aquarium_light", "bench_fan"):
        port, core = cores[name]
        assert stated_ticks(port) == 1
        check_copies(port, core, patterns(core.kinds, 30_000))


@pytest.mark.long
def test_all_patterns_of_a_copy_are_voltages(cores):
    """All 16.7 million patterns of the three bytes."""
    port, core = cores["aquarium_light"]
    x = np.arange(U16 + 1)
    for q in range(256):
        states = np.zeros(len(x), core.kinds)
        states["x"], states["q"] = x, q
        check_copies(port, core, states)


# --- MicroPython ---


def in_micropython(port: Port, states: State) -> list[list[int]]:
    """Step the emitted class from every state with every mask, in MicroPython; returns (q, X, answer, idle) rows."""
    copied = isinstance(port.machine, Charge)
    shown = stored_python(port, states)
    put = "latch._x = x; " if copied else ""
    got = "latch._x" if copied else "0"
    code = f"""
{emit_run.emit_python(port)}
latch = {emit_run.python_core(port).__name__}()
for q, x in zip({bytes(states.q.tolist())!r}, {shown}):
    for held in range({port.held_count}):
        {put}latch._q = q
        answer = latch.step(held)
        after = latch._q, {got}
        print(latch._q, {got}, answer, int(latch.idle()))
        assert after == (latch._q, {got})
"""
    return [[int(v) for v in line.split()] for line in emit_run.micropython(code).splitlines()]


def stored_python(port: Port, states: State) -> str:
    """Write the copies as the class keeps them: a Python expression."""
    if not isinstance(port.machine, Charge):
        return f"bytes({len(states.q)})"
    flip = U16 * (turned(port) & (states.q == 1))
    return repr((states.regs[:, 0] ^ flip).tolist())


def check_python(port: Port, states: State) -> None:
    """Compare with the reference."""
    rows = np.array(in_micropython(port, states))
    count = port.held_count
    wide = State(np.repeat(states.q, count), np.repeat(states.regs, count, axis=0))
    held = np.tile(np.arange(count), len(states.q))
    after, answers = stepper(port)(wide, held)
    np.testing.assert_array_equal(after.q, rows[:, 0])
    if isinstance(port.machine, Charge):
        flip = U16 * (turned(port) & (after.q == 1))
        np.testing.assert_array_equal(after.regs[:, 0] ^ flip, rows[:, 1])
    np.testing.assert_array_equal(answers, rows[:, 2])
    fixed = idle(port, after, held)
    assert not (rows[:, 3].astype(bool) & ~fixed).any()
    np.testing.assert_array_equal(fixed[held == 0], rows[held == 0, 3].astype(bool))


def test_micropython_is_the_reference_in_every_state_of_a_small_machine():
    """Both latch states of a latch without memory, every mask."""
    port = right("kiln_vent").port
    check_python(port, every_state(port))


@pytest.mark.parametrize("apart", [397, pytest.param(1, marks=pytest.mark.long)])
def test_micropython_is_the_reference_in_many_states_of_a_large_one(apart):
    """Copies all along the range with both latch values, every mask; all of them on request."""
    port = right("aquarium_light").port
    states = every_state(port)
    chunk = 5_000 if apart == 1 else len(states.q)
    for part in range(0, len(states.q), chunk):
        rows = slice(part, part + chunk, apart)
        check_python(port, State(states.q[rows], states.regs[rows]))


def test_a_wrong_class_is_found():
    """The comparison can fail: a reference with a limit one copy off parts from it in one of two states."""
    port = right("aquarium_light").port
    states = State(np.array([0, 0], np.uint8), np.array([[21844], [21845]]))
    machine = charge(port)
    mode = machine.modes[0][1]
    moved = replace(mode, flips=(replace(mode.flips[0], limit=21845),))
    other = replace(port, machine=replace(machine, modes=((machine.modes[0][0], moved), machine.modes[1])))
    rows = np.array(in_micropython(port, states))
    after, _ = stepper(other)(
        State(np.repeat(states.q, 2), np.repeat(states.regs, 2, axis=0)), np.tile([0, 1], 2)
    )
    assert (after.q != rows[:, 0]).any()
