"""Runs whole images, pin layer and all, with buttons pressed at the emulated part's port registers.

The AVR image runs in libsimavr. The Cortex-M0 image runs in Unicorn with the few registers that the
pin layer uses as a small model; addresses and meanings: nRF51 Series Reference Manual 3.0, from memory.
"""

import re
import struct
from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path

import unicorn
from elftools.elf.elffile import ELFFile
from unicorn import arm_const

from .tools import DRIVERS, must, need
from .work import Work

PINS = DRIVERS.parents[1] / "emit" / "pins.c"
#: A press or release: microsecond, held mask from then on.
Moves = Sequence[tuple[int, int]]
#: A change of an output pin: microsecond, output index, level.
Change = tuple[int, int, int]


def pins_of(work: Work, part: str) -> tuple[list[int], list[int]]:
    """Return the port bits of buttons and outputs in the pin layer's section for a part."""
    text = work.texts["board.c"]
    section = text[text.index(f"defined({part})") :]
    section = section[
        : section.index("#include") if "#include" in section[:4000] else section.index("Settings")
    ]
    return tuple(  # type: ignore[return-value]
        [int(bit) for bit in re.findall(rf"#define BOARD_{word}_\w+ (\d+)u", section)]
        for word in ("PIN", "OUT")
    )


# --- ATtiny85 ---


def run_avr(work: Work, moves: Moves, where: Path) -> list[Change]:
    """Build the image, press buttons at the pins, and return the output pins' changes once driven.

    Time is that of the emulated clock: a microsecond a cycle.
    """
    need("avr-gcc", "simavr", "cc")
    work.write(where)
    (where / "board.c").write_text(work.texts["board.c"])
    flags = ["-mmcu=attiny85", "-Os", "-std=c99", "-Wall", "-Wextra", "-Werror"]
    must(["avr-gcc", *flags, f"{work.name}.c", "board.c", "-o", "image.elf"], where)
    must(["cc", "-O1", PINS, "-o", "pins", "-lsimavr", "-lsimavrparts", "-lelf"], where)
    buttons, outputs = pins_of(work, "__AVR_ATtiny85__")
    words = [f"0:{bit}=1" for bit in buttons]
    for (_, before), (time, after) in pairwise([(0, 0), *moves]):
        words += [
            f"{time}:{bit}={1 - (after >> i & 1)}"
            for i, bit in enumerate(buttons)
            if (before ^ after) >> i & 1
        ]
    words.append(f"{moves[-1][0] + 20_000}:{buttons[0]}={1 - (moves[-1][1] & 1)}")
    printed = must(["./pins", "image.elf", *words], where)
    assert printed.endswith("END\n"), printed
    rows = [tuple(map(int, line.split())) for line in printed.splitlines() if line[0].isdigit()]
    return [(time, outputs.index(bit), level) for time, bit, level in rows if bit in outputs and level >= 0]


# --- nRF51 ---

GPIO, TIMER, WATCHDOG, CLOCK, SYSTEM = 0x50000000, 0x40008000, 0x40010000, 0x40000000, 0xE000E000
WFE = b"\x20\xbf"
WATCHDOG_US = 1_000_000


@dataclass
class Nrf51:
    """The registers that the pin layer uses, and a clock that moves only where the core waits."""

    moves: Moves
    buttons: list[int]
    outputs: list[int]
    now: int = 0
    latch: int = 0
    direction: int = 0
    capture: int = 0
    due: int = 0
    fed: int | None = None
    pulls: dict[int, int] = field(default_factory=dict)
    reads: list[tuple[int, int]] = field(default_factory=list)  # time, mask
    writes: list[tuple[int, int]] = field(default_factory=list)  # time, output bits

    def held(self) -> int:
        """Return the held mask at this moment."""
        at = bisect_right([time for time, _ in self.moves], self.now) - 1
        return self.moves[at][1] if at >= 0 else 0

    def read(self, base: int, offset: int) -> int:
        """Answer a read of a register."""
        if (base, offset) == (GPIO, 0x510):
            held = self.held()
            self.reads.append((self.now, held))
            for bit in self.buttons:
                assert self.pulls[bit] == 3, "a contact to ground needs the pull-up"
            return sum(1 << bit for i, bit in enumerate(self.buttons) if not held >> i & 1)
        if (base, offset) == (CLOCK, 0x100):
            return 1  # the crystal runs
        if (base, offset) == (TIMER, 0x544):
            return self.capture
        raise AssertionError(f"unexpected read of {base + offset:#x}")

    def write(self, base: int, offset: int, value: int) -> None:
        """Take a write to a register."""
        if base == GPIO and offset in (0x508, 0x50C):
            self.latch = self.latch | value if offset == 0x508 else self.latch & ~value
            self.shown()
        elif (base, offset) == (GPIO, 0x518):
            self.direction |= value
            self.shown()
        elif base == GPIO and 0x700 <= offset < 0x780:
            self.pulls[(offset - 0x700) // 4] = value >> 2 & 3
        elif (base, offset) == (TIMER, 0x044):
            self.capture = self.now & 0xFFFFFFFF
        elif (base, offset) == (TIMER, 0x540):
            self.due = value
        elif (base, offset) in ((TIMER, 0x510), (TIMER, 0x508)):
            assert value == {0x510: 4, 0x508: 3}[offset], "a count of 32 bits in microseconds"
        elif (base, offset) in ((WATCHDOG, 0), (WATCHDOG, 0x600)):
            assert self.fed is None or self.now - self.fed < WATCHDOG_US, "the watchdog bites"
            self.fed = self.now

    def shown(self) -> None:
        """Note what the output pins show, once they are driven."""
        if all(self.direction >> bit & 1 for bit in self.outputs):
            bits = sum(1 << i for i, bit in enumerate(self.outputs) if self.latch >> bit & 1)
            self.writes.append((self.now, bits))

    def wait(self) -> None:
        """Let time pass until the timer's compare event."""
        self.now += (self.due - self.now) % 2**32


def build_m0(work: Work, where: Path) -> None:
    """Compile core, pin layer and start-up code into an image."""
    need("arm-none-eabi-gcc")
    work.write(where)
    (where / "board.c").write_text(work.texts["board.c"])
    flags = [
        "-mcpu=cortex-m0",
        "-mthumb",
        "-Os",
        "-std=c99",
        "-ffreestanding",
        "-nostdlib",
        "-DPORTER_BOARD_NRF51",
    ]
    sources = [f"{work.name}.c", "board.c", DRIVERS / "m0_start.c"]
    link = [f"-Wl,-T,{DRIVERS / 'm0.ld'}", "-lgcc", "-o", "image.elf"]
    must(["arm-none-eabi-gcc", *flags, "-Wall", "-Wextra", "-Werror", *sources, *link], where)


def run_m0(work: Work, moves: Moves, until_us: int, where: Path, *, start_us: int = 0) -> Nrf51:
    """Build the image, run it to a time with buttons pressed at the pins, and return what the pins saw.

    Args:
        start_us: what the microsecond counter shows at reset; moves are in the same time.
    """
    build_m0(work, where)
    board = Nrf51(moves, *pins_of(work, "PORTER_BOARD_NRF51"), now=start_us)
    machine = unicorn.Uc(unicorn.UC_ARCH_ARM, unicorn.UC_MODE_THUMB | unicorn.UC_MODE_MCLASS)
    machine.ctl_set_cpu_model(arm_const.UC_CPU_ARM_CORTEX_M0)
    machine.mem_map(0, 256 * 1024)
    machine.mem_map(0x20000000, 16 * 1024)
    for base in (GPIO, CLOCK, TIMER, WATCHDOG, SYSTEM):
        machine.mmio_map(
            base,
            0x1000,
            lambda _uc, offset, _size, base: board.read(base, offset),
            base,
            lambda _uc, offset, _size, value, base: board.write(base, offset, value),
            base,
        )
    code = _load(machine, where / "image.elf")

    def waits(uc: unicorn.Uc, address: int, _size: int, _data: object) -> None:
        board.wait()
        uc.reg_write(arm_const.UC_ARM_REG_PC, (address + 2) | 1)
        if board.now > until_us:
            uc.emu_stop()

    sleeps = [i for i in range(0, len(code), 2) if code[i : i + 2] == WFE]
    assert sleeps, "the image never sleeps"
    for address in sleeps:
        machine.hook_add(unicorn.UC_HOOK_CODE, waits, begin=address, end=address)
    stack, entry = struct.unpack_from("<II", code)
    machine.reg_write(arm_const.UC_ARM_REG_SP, stack)
    machine.emu_start(entry | 1, len(code))
    return board


def _load(machine: unicorn.Uc, image: Path) -> bytes:
    """Load an image's flash; return it, from address 0."""
    with image.open("rb") as stream:
        for segment in ELFFile(stream).iter_segments("PT_LOAD"):
            if segment["p_paddr"] == 0 and segment["p_filesz"]:
                machine.mem_write(0, segment.data())
                return segment.data()
    raise AssertionError("no code at address 0")
