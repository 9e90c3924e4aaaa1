"""Emitted C under the compilers and checkers that its users have; needs them from the system."""

import re
import subprocess
from pathlib import Path

import pytest
from emit_ports import (
    HAND_MADE,
    suite,
    toggle_count,
    toggle_drain,
    toggle_multiply,
    toggle_scale,
    toggle_shift,
    two_button,
)

from porter.emit import emit
from porter.port.model import Port

pytestmark = pytest.mark.system

WARNINGS = [
    "-std=c99",
    "-Wall",
    "-Wextra",
    "-Wpedantic",
    "-Wconversion",
    "-Wsign-conversion",
    "-Wshadow",
    "-Wstrict-prototypes",
    "-Wmissing-prototypes",
    "-Wundef",
    "-Wvla",
    "-Werror",
]
AVR = ["avr-gcc", "-mmcu=attiny85", "-Os", "-std=c99"]
M0 = ["arm-none-eabi-gcc", "-mcpu=cortex-m0", "-mthumb", "-Os", "-std=c99", "-ffreestanding"]


def write(port: Port, where: Path) -> None:
    """Write the C files of a port."""
    for path, text in emit(port, suite(port, 3000)).items():
        if path.startswith("firmware/c/"):
            (where / Path(path).name).write_text(text)


def run(command: list[str], where: Path) -> subprocess.CompletedProcess[str]:
    """Run a command in a folder."""
    return subprocess.run(command, cwd=where, capture_output=True, text=True)


def must(command: list[str], where: Path) -> str:
    """Run a command that must succeed; return what it printed."""
    done = run(command, where)
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


@pytest.mark.parametrize("make", HAND_MADE)
@pytest.mark.parametrize("compiler", ["gcc", "clang"])
def test_selftest_passes_without_a_warning(compiler, make, tmp_path):
    """Core and self-test compile clean, and pass with address and undefined-behaviour checks."""
    port = make()
    write(port, tmp_path)
    sources = [f"{port.name}.c", f"{port.name}_selftest.c"]
    must([compiler, *WARNINGS, "-O2", "-fsanitize=address,undefined", *sources, "-o", "selftest"], tmp_path)
    assert "all 2 cases passed" in must(["./selftest"], tmp_path)


@pytest.mark.parametrize("make", HAND_MADE)
def test_selftest_as_the_contract_says(make, tmp_path):
    """``cc -std=c99 X.c X_selftest.c`` is enough, and a wrong core fails with the first difference."""
    port = make()
    write(port, tmp_path)
    command = ["cc", "-std=c99", f"{port.name}.c", f"{port.name}_selftest.c"]
    must(command, tmp_path)
    must(["./a.out"], tmp_path)
    core = tmp_path / f"{port.name}.c"
    core.write_text(re.sub(r"uint8_t q = [^;]*;", "uint8_t q = 1u;", core.read_text(), count=1))
    must(command, tmp_path)
    found = run(["./a.out"], tmp_path)
    assert found.returncode == 1
    assert re.match(r"random_\d: tick \d+, held \d+: expected \d, got \d", found.stdout)


@pytest.mark.parametrize("make", HAND_MADE)
@pytest.mark.parametrize("compiler", [AVR, M0], ids=["avr", "m0"])
def test_cross_compilers_have_no_warning(compiler, make, tmp_path):
    """The core compiles clean with an ``int`` of 16 bits and for a small 32-bit part."""
    port = make()
    write(port, tmp_path)
    # Newlib's and avr-libc's own headers aside, -Wpedantic holds there as well.
    must([*compiler, *WARNINGS, "-c", f"{port.name}.c"], tmp_path)


# Flash for init and step, measured with avr-gcc 5.4.0 and arm-none-eabi-gcc 12.2.
# What a careful hand reached for the same behaviour: two_button 42 and 56, toggle_count 66 and 68,
# toggle_drain 86 and 72, toggle_scale 100 and 68 (the compiler's own multiplication apart).
SIZES = {
    two_button: (34, 36),
    toggle_count: (76, 90),
    toggle_shift: (170, 160),
    toggle_multiply: (202, 168),
    toggle_drain: (76, 64),
    toggle_scale: (98, 80),
}


@pytest.mark.parametrize("make", SIZES)
@pytest.mark.parametrize("tools", [(AVR, "avr-nm"), (M0, "arm-none-eabi-nm")], ids=["avr", "m0"])
def test_cores_stay_small(tools, make, tmp_path):
    """Flash of init and step stays within what was reached."""
    port, (compiler, nm) = make(), tools
    write(port, tmp_path)
    must([*compiler, "-c", f"{port.name}.c", "-o", "core.o"], tmp_path)
    symbols = [line.split() for line in must([nm, "-S", "core.o"], tmp_path).splitlines()]
    sizes = {row[3]: int(row[1], 16) for row in symbols if len(row) == 4}
    total = sum(size for name, size in sizes.items() if not name.endswith("_idle"))
    assert total <= SIZES[make][compiler is M0], sizes


def test_avr_image_links(tmp_path):
    """Core and pin layer link into an image for an ATtiny85, without a warning but the library's own."""
    port = two_button()
    write(port, tmp_path)
    must(
        [*AVR, "-Wall", "-Wextra", "-Wundef", "-Werror", f"{port.name}.c", "board.c", "-o", "image.elf"],
        tmp_path,
    )


@pytest.fixture(scope="module")
def pins(tmp_path_factory):
    """The program that runs an image in an ATtiny85 emulator (libsimavr) and moves its pins."""
    program = tmp_path_factory.mktemp("pins") / "pins"
    source = Path(__file__).with_name("pins.c")
    libraries = ["-lsimavr", "-lsimavrparts", "-lelf"]
    must(["cc", "-O1", str(source), "-o", str(program), *libraries], program.parent)
    return program


def drive(port: Port, pins: Path, where: Path, *moves: str) -> list[tuple[int, int, int]]:
    """Build an image and move its pins; return changes as (microseconds, pin, level; -1 = not driven)."""
    write(port, where)
    must([*AVR, f"{port.name}.c", "board.c", "-o", "image.elf"], where)
    printed = must([str(pins), "image.elf", *moves], where)
    assert printed.endswith("END\n"), printed
    return [tuple(map(int, line.split())) for line in printed.splitlines() if re.match(r"\d+ ", line)]


def test_two_button_image_on_pins(pins, tmp_path):
    """On an emulated part: low from the start, then each press acts within a tick, also after 3 s asleep."""
    moves = [
        "0:0=1",
        "0:1=1",
        "20000:0=0",
        "40000:0=1",
        "60000:1=0",
        "80000:1=1",
        "3000000:0=0",
        "3020000:0=1",
        "3040000:0=1",
    ]
    changes = drive(two_button(), pins, tmp_path, *moves)
    assert [change[1:] for change in changes] == [(2, 0), (2, 1), (2, 0), (2, 1)]
    late = [change[0] - due for change, due in zip(changes, (0, 20_000, 60_000, 3_000_000), strict=True)]
    assert all(0 <= delay <= 1_200 for delay in late), late


def test_held_button_wins_at_boot_on_pins(pins, tmp_path):
    """A button held when the supply comes acts at once: the first driven level is already high."""
    changes = drive(two_button(), pins, tmp_path, "0:0=0", "0:1=1", "30000:0=1", "60000:0=1")
    assert [change[1:] for change in changes] == [(2, 1)]


def test_toggle_image_on_pins(pins, tmp_path):
    """The charge style on pins: each press turns the lamp once the copy has recovered."""
    moves = ["0:0=1", "2000000:0=0", "2100000:0=1", "4000000:0=0", "4100000:0=1", "4200000:0=1"]
    changes = drive(toggle_shift(), pins, tmp_path, *moves)
    assert [change[1:] for change in changes] == [(1, 0), (1, 1), (1, 0)]


def test_m0_pin_layer_compiles(tmp_path):
    """The pin layer for the nRF51 compiles clean."""
    write(two_button(), tmp_path)
    must([*M0, *WARNINGS, "-DPORTER_BOARD_NRF51", "-c", "board.c"], tmp_path)


def test_an_unknown_board_stops_the_compiler(tmp_path):
    """A part that nobody worked out is an error, never silently wrong."""
    write(two_button(), tmp_path)
    done = run(["cc", "-std=c99", "-c", "board.c"], tmp_path)
    assert done.returncode != 0 and "FIT" in done.stderr


# What a look at one file alone must find, with the reason; both rules are advisory.
TAKEN = {
    "2.5": "unused macros: the tick and the outputs' masks are for the caller",
    "8.7": "external linkage: the functions are for the caller",
}


@pytest.mark.parametrize("make", HAND_MADE)
def test_misra(make, tmp_path):
    """cppcheck's MISRA C:2012 add-on has nothing to say on the core but what is listed."""
    port = make()
    write(port, tmp_path)
    done = run(
        ["cppcheck", "--addon=misra", "--std=c99", "--quiet", "--template={id} {line}", f"{port.name}.c"],
        tmp_path,
    )
    rules = {(rule, line) for rule, line in re.findall(r"misra-c2012-(\S+) (\d+)", done.stderr)}
    assert set() == {(rule, line) for rule, line in rules if rule not in TAKEN}, done.stderr
