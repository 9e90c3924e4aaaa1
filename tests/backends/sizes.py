"""Flash, RAM and cycles of emitted cores on each processor: ``python -m tests.backends.sizes [SPEC …]``.

Flash counts init, step and what they call of the core's own; `idle` stands apart, and the compiler's
helper library (a multiplication on parts without one) isn't counted. RAM is the state; on PDK parts,
where SDCC keeps parameters and locals in fixed places, those as well. Cycles are those of an AVR's
step, least to most over the suite, its return included.
"""

import re
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

from elftools.elf.elffile import ELFFile

from porter.port.model import Port
from porter.vectors.model import Suite

from .rows import ROWS
from .rows import suite as random_suite
from .targets import Avr, names
from .tools import find, must
from .work import Work, first_difference, work

GCC = {
    "AVR t85": "avr-gcc -mmcu=attiny85",
    "AVR t10": "avr-gcc -mmcu=attiny10",
    "Cortex-M0": "arm-none-eabi-gcc -mcpu=cortex-m0 -mthumb -ffreestanding",
    "RV32EC": "riscv64-unknown-elf-gcc -march=rv32ec -mabi=ilp32e -ffreestanding",
}
SDCC = {"8051": "-mmcs51", "STM8": "-mstm8", "PDK14": "-mpdk14"}
PARTS = (*GCC, *SDCC)


@dataclass(frozen=True, slots=True)
class Size:
    """Bytes: `flash` of init and step, `idle` apart, and `ram`."""

    flash: int
    idle: int
    ram: int

    def __str__(self) -> str:
        return f"{self.flash}/{self.ram} +{self.idle}"


def size(part: str, work: Work, where: Path) -> Size:
    """Compile a core for a part and measure it."""
    work.write(where)
    return _gcc(GCC[part], work, where) if part in GCC else _sdcc(SDCC[part], work, where)


def _gcc(command: str, work: Work, where: Path) -> Size:
    # A variable of the state's type, for its size.
    (where / "state.c").write_text(f'#include "{work.name}.h"\n{work.name}_t state;\n')
    for source in (work.name, "state"):
        must([*command.split(), "-Os", "-std=c99", "-c", f"{source}.c"], where)
    sizes = _symbols(where / f"{work.name}.o")
    idle = sizes.pop(f"{work.name}_idle")
    return Size(sum(sizes.values()), idle, _symbols(where / "state.o")["state"])


def _symbols(path: Path) -> dict[str, int]:
    with path.open("rb") as stream:
        symbols = ELFFile(stream).get_section_by_name(".symtab").iter_symbols()
        return {s.name: s["st_size"] for s in symbols if s["st_info"]["type"] in ("STT_FUNC", "STT_OBJECT")}


def _sdcc(flag: str, work: Work, where: Path) -> Size:
    command = ["sdcc", flag, "--std-c99", "--opt-code-size", *names(work), "-c", f"{work.name}.c"]
    must([*command, "-o", "core.rel"], where)
    areas = _areas((where / "core.rel").read_text())
    code, symbols = areas["CSEG" if flag == "-mmcs51" else "CODE"]
    idle = code - symbols[f"_{work.name}_idle"]  # the last function of the file
    state = sum(
        int(bits) // 8 for bits in re.findall(r"^    uint(\d+)_t \w+;", work.texts[f"{work.name}.h"], re.M)
    )
    fixed = sum(areas.get(name, (0, {}))[0] for name in ("DATA", "OSEG")) if flag == "-mpdk14" else 0
    return Size(code - idle, idle, state + fixed)


def _areas(text: str) -> dict[str, tuple[int, dict[str, int]]]:
    """Return size and symbols of each area of an object file of SDCC's assembler; numbers are hexadecimal."""
    areas: dict[str, tuple[int, dict[str, int]]] = {}
    for line in text.splitlines():
        if found := re.match(r"A (\S+) size (\w+)", line):
            areas[found[1]] = current = (int(found[2], 16), {})
        elif (found := re.match(r"S (\S+) Def(\w+)", line)) and areas:
            current[1][found[1]] = int(found[2], 16)
    return areas


def cycles(work: Work, where: Path) -> tuple[int, int]:
    """Return the least and the most cycles of a step on an AVR over the whole work."""
    backend = Avr()
    work.write(where)
    backend.build(work, where)
    found = backend.cycles(work, where)
    difference = first_difference(work, (where / "out.bin").read_bytes())
    assert difference is None, difference
    return found


def table(jobs: list[tuple[Port, Suite]]) -> str:
    """Return the table as Markdown, a row for each port; a part without its compiler has no figures."""
    rows = [["core", *PARTS, "AVR cycles"], ["---"] * (len(PARTS) + 2)]
    for port, suite in jobs:
        asked = work(port, suite)
        with tempfile.TemporaryDirectory() as folder:
            where = Path(folder)
            sizes = [str(size(part, asked, where)) if _there(part) else "" for part in PARTS]
            spent = "-".join(map(str, cycles(asked, where))) if find("avr-gcc") and find("simavr") else ""
        rows.append([port.name, *sizes, spent])
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)


def _there(part: str) -> bool:
    return find(GCC[part].split()[0] if part in GCC else "sdcc") is not None


def _planned(spec: Path) -> tuple[Port, Suite]:
    import porter
    from porter.port.plan import plan
    from porter.vectors import build_vectors

    circuit = porter.read(spec)
    behaviour = porter.derive(circuit)
    port = plan(circuit, behaviour)
    return port, build_vectors(behaviour, port)


def main(arguments: list[str]) -> None:
    """Print the table for the given specs; without any, for ports by hand and the shipped specs."""
    specs = [Path(word) for word in arguments]
    by_hand = [] if specs else [(port := make(), random_suite(port)) for make in ROWS]
    if not specs:
        shipped = Path(__file__).parents[2] / "specs"
        specs = sorted(path for path in shipped.glob("*.yaml") if not path.name.startswith("faulty"))
    print("Bytes: flash of init and step / RAM, + flash of idle.\n")
    print(table([*by_hand, *map(_planned, specs)]))


if __name__ == "__main__":
    main(sys.argv[1:])
