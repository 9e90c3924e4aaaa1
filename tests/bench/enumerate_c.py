"""Every press sequence of two buttons to a depth, one after the other, against the emitted C as compiled.

The circuit's side is its exact decision table, which for a circuit without memory is
all there is to it.  Each sequence runs from power-on and is compared after every
step.  The same question is put to Z3 as a bounded check: is there a sequence of so
many steps after which circuit and port have been apart?
"""

import ctypes
import subprocess
import sys
import tempfile
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import pairwise, product
from pathlib import Path
from time import perf_counter

import numpy as np
import z3

import porter
from porter.circuit.engine import Engine
from porter.emit import emit
from porter.parity.twin import circuit_decides
from porter.port.memory import memory
from porter.port.model import Count, Port
from porter.resources import resource
from porter.spec.model import Circuit
from porter.vectors import build_vectors

CORES = 2
DEPTH = 12
_DEPTHS = (6, 8, 10, 11, 12)

_DRIVER = """
#include "{name}.h"
#include "{name}.c"
uint64_t differences(int depth, int bits, uint64_t first, uint64_t last, uint32_t q, const uint8_t *table);
uint64_t differences(int depth, int bits, uint64_t first, uint64_t last, uint32_t start, const uint8_t *table)
{{
    uint64_t apart = 0u;
    const uint64_t mask = (1u << bits) - 1u;
    for (uint64_t sequence = first; sequence < last; sequence++) {{
        {name}_t m;
        uint32_t q = start;
        uint64_t left = sequence;
        {name}_init(&m);
        for (int k = 0; k < depth; k++) {{
            const uint8_t held = (uint8_t)(left & mask);
            q = table[(q << bits) | held];
            if (({name}_step(&m, held) & 1u) != q) {{
                apart++;
                break;
            }}
            left >>= bits;
        }}
    }}
    return apart;
}}
"""


@dataclass(frozen=True, slots=True)
class Case:
    """A circuit without memory: its decision table by ``q << buttons | held``, and its port compiled."""

    port: Port
    table: bytes
    count: Callable[[int, bytes], int]

    @property
    def bits(self) -> int:
        """The number of buttons."""
        return len(self.port.buttons)


def case(name: str, where: Path) -> Case:
    """Compile the emitted core of a shipped circuit whose output shows its latch, at -O2."""
    circuit = porter.read(str(resource(f"specs/{name}.yaml")))
    behaviour = porter.derive(circuit)
    port = porter.plan(circuit, behaviour)
    files = emit(port, build_vectors(behaviour, port))
    for ending in ("h", "c"):
        (where / f"{name}.{ending}").write_text(files[f"firmware/c/{name}.{ending}"])
    (where / "driver.c").write_text(_DRIVER.format(name=name))
    command = [sys.executable, "-m", "ziglang", "cc", "-std=c99", "-O2", "-shared", "-fPIC", "driver.c"]
    subprocess.run([*command, "-o", "core.so"], cwd=where, check=True, capture_output=True)
    compiled = ctypes.CDLL(str(where / "core.so")).differences
    compiled.restype = ctypes.c_uint64
    compiled.argtypes = [ctypes.c_int, ctypes.c_int, *[ctypes.c_uint64] * 2, ctypes.c_uint32, ctypes.c_char_p]

    def count(depth: int, table: bytes) -> int:
        bits = len(port.buttons)
        total = 1 << bits * depth
        ends = [total * k // CORES for k in range(CORES + 1)]
        with ThreadPoolExecutor(CORES) as pool:  # a foreign call lets the other thread run
            parts = [pool.submit(compiled, depth, bits, a, b, port.start_q, table) for a, b in pairwise(ends)]
            return sum(part.result() for part in parts)

    return Case(port, decisions(circuit), count)


def decisions(circuit: Circuit) -> bytes:
    """Return the exact engine's latch after deciding, by ``q << buttons | held``."""
    mem = memory(Engine(circuit))
    q, held = np.array(list(product((0, 1), range(1 << len(circuit.buttons))))).T
    return bytes(circuit_decides(mem, q, held, np.zeros((len(q), len(mem.kept)))).q.tolist())


def solve(depth: int, table: bytes, other: bytes, bits: int, start: int) -> bool:
    """Ask Z3 whether two tables are alike along every sequence of *depth* masks."""
    solver = z3.Solver()
    a = b = z3.BoolVal(bool(start))
    apart = []
    for k in range(depth):
        held = [z3.Bool(f"h{k}_{i}") for i in range(bits)]
        a, b = _next(a, held, table), _choose([*held, b], other)
        apart.append(z3.Xor(a, b))
    solver.add(z3.Or(apart))
    return bool(solver.check() == z3.unsat)


def _next(latch: z3.BoolRef, held: list[z3.BoolRef], table: bytes) -> z3.BoolRef:
    def row(index: int) -> z3.BoolRef:
        masks = [h if index >> i & 1 else z3.Not(h) for i, h in enumerate(held)]
        return z3.And(latch if index >> len(held) else z3.Not(latch), *masks)

    return z3.Or([row(i) for i, to in enumerate(table) if to])


def _choose(bits: list[z3.BoolRef], table: bytes) -> z3.BoolRef:
    """The port's side as firmware asks: one bit after the other, the highest first."""
    if not bits:
        return z3.BoolVal(bool(table[0]))
    half = len(table) // 2
    return z3.If(bits[-1], _choose(bits[:-1], table[half:]), _choose(bits[:-1], table[:half]))


def port_decisions(port: Port) -> bytes:
    """Return the port's own table; for a latch without filters that is all of it."""
    machine = port.machine
    assert isinstance(machine, Count)
    return bytes(machine.table[0]) + bytes(machine.table[1])


def _seconds(work: Callable[[], object]) -> float:
    begin = perf_counter()
    work()
    return perf_counter() - begin


def rows() -> list[tuple[str, ...]]:
    """Measure; returns (depth, sequences, seconds in C, seconds in Z3), with what it shows in a last line.

    Raises:
        AssertionError: circuit and port are apart somewhere, or a flipped entry isn't found.
    """
    with tempfile.TemporaryDirectory() as folder:
        made = case("kiln_vent", Path(folder))
    own = port_decisions(made.port)
    out = [("depth", "sequences", "literally, in C", "Z3, bounded")]
    for depth in _DEPTHS:
        literal = _seconds(lambda depth=depth: _none(made.count(depth, made.table)))
        solver = _seconds(
            lambda depth=depth: _true(solve(depth, made.table, own, made.bits, made.port.start_q))
        )
        out.append((str(depth), f"{1 << made.bits * depth:,}", f"{literal:.4f} s", f"{solver:.4f} s"))
    wrong = bytes(v ^ (i == 3) for i, v in enumerate(made.table))
    assert made.count(3, wrong) > 0
    out.append(
        (
            "",
            "four times as many for each step more",
            f"target at {DEPTH}: < 10 s on {CORES} cores",
            "grows with the formula's length, not with the sequences",
        )
    )
    return out


def _none(differences: int) -> None:
    assert differences == 0


def _true(same: bool) -> None:
    assert same


if __name__ == "__main__":
    for row in rows():
        print("  ".join(f"{cell:>18}" for cell in row))
