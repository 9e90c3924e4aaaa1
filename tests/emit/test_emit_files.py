"""The emitted files as a user gets them: names, headers, self-tests, hostile texts, golden copies."""

import ast
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import pytest
from emit_ports import (
    HAND_MADE,
    suite,
    toggle_count,
    toggle_drain,
    toggle_scale,
    toggle_shift,
    toggle_sides,
    two_button,
    two_caps,
)
from emit_run import micropython
from hypothesis import given, settings
from hypothesis import strategies as st

from porter.emit import Levels, emit
from porter.emit.names import comment, identifier, unique
from porter.port.model import Constant, Port
from porter.vectors.model import Case, Suite

GOLDEN = Path(__file__).parents[1] / "golden"
STATEMENT = "Same as the circuit for every sequence of any length."


def files(port: Port, **kwargs) -> dict[str, str]:
    """Emit with a short suite."""
    return emit(port, suite(port, 1500), statement=STATEMENT, **kwargs)


def test_paths_are_the_contract():
    """The job folder has the files that the contract names."""
    assert {
        "firmware/c/lamp_latch.h",
        "firmware/c/lamp_latch.c",
        "firmware/c/lamp_latch_selftest.c",
        "firmware/c/board.c",
        "firmware/micropython/lamp_latch.py",
        "firmware/micropython/lamp_latch_selftest.py",
        "firmware/micropython/main.py",
    } == set(files(two_button()))


@pytest.mark.parametrize("make", HAND_MADE)
def test_same_input_same_bytes(make):
    """Emitting twice gives the same text, without a date or an absolute path."""
    texts = files(make())
    assert texts == files(make())
    assert not re.search(r"/home|/tmp|/root|20\d\d-\d\d", "".join(texts.values()))


@pytest.mark.parametrize("make", HAND_MADE)
def test_no_line_is_too_long(make):
    """Lines stay within 120 columns, tables of vectors included."""
    too_long = [line for text in files(make()).values() for line in text.splitlines() if len(line) > 120]
    assert too_long == []


def test_header_says_where_it_came_from():
    """Tool, spec, hash, remake command and statement stand in every file's header."""
    for text in files(two_button()).values():
        head = re.sub(r"\s*\n[ #*]*", " ", text[:1200])
        for said in ("porter", "lamp_latch.yaml", "0" * 64, "porter port lamp_latch.yaml -o DIR", STATEMENT):
            assert said in head


def test_constants_bring_their_origin():
    """A constant stands with its meaning, working and spec line; no bare number is left in the step."""
    text = files(toggle_shift())["firmware/c/memo_toggle.c"]
    start = text.index("/* Upper threshold")
    assert "2/3 * 65536" in text[start:] and "memo_toggle.yaml:4" in text[start:]
    body = re.sub(r"/\*.*?\*/", "", text[text.index("_step(") :], flags=re.S)
    assert {"0", "1"} >= set(re.findall(r"\b(\d+)u\b", body))


@pytest.mark.parametrize("make", HAND_MADE)
def test_python_selftest_passes_and_a_wrong_constant_fails_it(make, tmp_path):
    """The emitted self-test exits 0 on the emitted core and names the case where a core differs."""
    port = make()
    texts = {Path(path).name: text for path, text in files(port).items() if "micropython" in path}
    for name, text in texts.items():
        (tmp_path / name).write_text(text)
    assert _selftest(port, tmp_path).returncode == 0
    core = tmp_path / f"{port.name}.py"
    core.write_text(core.read_text().replace("        return q", "        return 1 - q"))
    found = _selftest(port, tmp_path)
    assert found.returncode == 1
    assert re.match(r"random_0: tick \d+, held \d+: expected \d, got \d", found.stdout)


def _selftest(port: Port, where: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-B", f"{port.name}_selftest.py"]
    return subprocess.run(command, cwd=where, capture_output=True, text=True)


def test_micropython_runs_the_selftest():
    """The self-test runs in MicroPython as it stands, but for its import of the core beside it."""
    port = toggle_sides()
    texts = files(port)
    core = texts[f"firmware/micropython/{port.name}.py"]
    test = texts[f"firmware/micropython/{port.name}_selftest.py"]
    test = test.replace(f"from {port.name} import", "# from").replace('"__main__"', "__name__")
    printed = micropython(f"{core}\n{test}")
    assert "all 2 cases passed" in printed


class EnoughError(Exception):
    """Ends the endless loop of the pin layer."""


class Bench:
    """Stands in for MicroPython's ``machine`` and ``time``: a clock near its wrap, pins by number."""

    wrap = 1 << 30

    def __init__(self, levels, *, lights=False):
        self.now, self.levels, self.seen = self.wrap - 5_000, levels, []
        self.lights, self.slept = lights, 0

    def modules(self):
        """Return the two modules."""
        bench = self

        class Pin:
            IN, OUT, PULL_UP, PULL_DOWN = "in", "out", "up", "down"

            def __init__(self, number, mode, _pull=None, value=None):
                self.number = number
                if mode == "out":
                    bench.seen.append((number, value))

            def value(self, level=None):
                if level is not None:
                    bench.seen.append((self.number, level))
                return bench.levels(bench.ticks())

        class Dog:
            def __init__(self, timeout):
                pass

            def feed(self):
                if bench.ticks() > 20:
                    raise EnoughError

        machine = SimpleNamespace(Pin=Pin, WDT=Dog, **({"lightsleep": self._light} if self.lights else {}))
        time = SimpleNamespace(
            ticks_us=lambda: self.now % self.wrap,
            ticks_add=lambda a, b: (a + b) % self.wrap,
            ticks_diff=lambda a, b: (a - b + self.wrap // 2) % self.wrap - self.wrap // 2,
            sleep_us=self._sleep,
        )
        return {"machine": machine, "time": time}

    def ticks(self):
        """Return the milliseconds since the start."""
        return (self.now - self.wrap + 5_000) // 1000

    def _light(self, ms):
        assert ms == 1
        self.now, self.slept = self.now + 1000 * ms, self.slept + 1

    def _sleep(self, us):
        assert 0 < us <= 1000
        self.now += us


@pytest.mark.parametrize("lights", [False, True])
def test_pin_layer_follows_the_button_through_the_clocks_wrap(lights, tmp_path, monkeypatch):
    """The MicroPython loop steps once a tick, sleeps lightly where it can, and survives the wrap."""
    port = two_button()
    for path, text in files(port).items():
        if "micropython" in path:
            (tmp_path / Path(path).name).write_text(text)
    # Both buttons' pins read alike here, and reset wins; so a made-up part has one button only.
    layer = (tmp_path / "main.py").read_text().replace("    (3, 0, 1),  # CLEAR\n", "")
    bench = Bench(lambda tick: 0 if tick >= 8 else 1, lights=lights)
    for name, module in bench.modules().items():
        monkeypatch.setitem(sys.modules, name, module)
    monkeypatch.syspath_prepend(str(tmp_path))
    space = {"__name__": "pins"}
    exec(compile(layer, "main.py", "exec"), space)
    monkeypatch.delitem(sys.modules, port.name)
    with pytest.raises(EnoughError):
        space["main"]()
    levels = [level for _, level in bench.seen]
    assert levels[:8] == [0] * 8 and levels[8:] == [1] * (len(levels) - 8)
    assert bool(bench.slept) == lights


def test_pins_have_the_levels_of_the_interface_sheet():
    """Polarities that are handed over stand in both pin layers."""
    texts = emit(two_button(), suite(two_button()), levels=Levels((1, 0), (0, 1), (0,)))
    board, main = texts["firmware/c/board.c"], texts["firmware/micropython/main.py"]
    assert "PRESSED_SET 1u" in board and "PULL_UP_SET 0u" in board and "ACTIVE_LAMP 0u" in board
    assert "(2, 1, 0),  # SET" in main and "(10, 0),  # lamp" in main


def test_an_empty_suite_proves_nothing(tmp_path):
    """A self-test without cases fails rather than passing."""
    port = two_button()
    none = Suite(port.name, port.title, port.buttons, port.outputs, port.tick_s, ())
    for path, text in emit(port, none).items():
        (tmp_path / Path(path).name).write_text(text)
    assert _selftest(port, tmp_path).returncode == 1


HOSTILE = st.one_of(
    st.sampled_from(
        ("*/ int x; /*", "??/", "a\\", "line\nline", '"""', "µΩ±", "{{ 7 * 7 }}", "{% raw %}", "// \\")
    ),
    st.text(max_size=20),
)


@settings(max_examples=60)
@given(text=HOSTILE)
def test_comments_stay_comments(text):
    """Whatever a spec says can't end a comment, a line or a string."""
    said = comment(text)
    assert (said.isascii() and said.isprintable()) or said == ""
    assert not re.search(r"\*/|/\*|//|\?\?|\\|\"\"", said)


@settings(max_examples=15, deadline=None)
@given(texts=st.lists(HOSTILE, min_size=5, max_size=5))
def test_hostile_texts_leave_the_code_as_it_is(texts):
    """Titles, meanings and purposes never change the code: stripped of comments and strings it's the same."""
    port, calm = two_caps(), two_caps()
    row = Constant("start.0", 0, texts[0], texts[1], texts[2])
    case = Case("steady", texts[3], ((3, 0),), ((3, 0),))
    plain = Case("steady", "", ((3, 0),), ((3, 0),))
    shape = (port.name, "", port.buttons, port.outputs, port.tick_s)
    ours = emit(replace(port, title=texts[4], constants=(row,), why=tuple(texts)), Suite(*shape, (case,)))
    theirs = emit(calm, Suite(*shape, (plain,)))
    for path, text in ours.items():
        if path.endswith(".py"):
            assert _tree(text) == _tree(theirs[path])
        else:
            assert _bare(text) == _bare(theirs[path])


def _tree(text: str) -> str:
    tree = ast.parse(text)
    for node in ast.walk(tree):
        if isinstance(node, ast.ClassDef):
            node.body = node.body[1:]
    return ast.dump(tree)


def _bare(text: str) -> str:
    return re.sub(r"\s+", " ", re.sub(r"/\*.*?\*/", "", text, flags=re.S))


@pytest.mark.parametrize("word", ["class", "switch", "2_hand", "main", "lambda", "bool", "größe", "a-b", ""])
def test_identifiers_are_free_in_both_languages(word):
    """A stem that is a keyword, a number or a file of ours still gives a usable name."""
    name = identifier(word)
    assert re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", name)
    assert name not in {"class", "switch", "main", "lambda", "bool"}
    ast.parse(f"{name} = 1")


def test_names_that_fall_together_are_told_apart():
    """Two buttons whose names differ only in signs or case keep different words."""
    assert unique(("on", "ON", "on!")) == ("ON", "ON_2", "ON_3")


def test_equal_modes_share_their_code():
    """Modes that behave alike are merged: one target and one motion for a pair of equal capacitor moves."""
    text = files(toggle_shift())["firmware/c/memo_toggle.c"]
    assert text.count(">> 1u);") - text.count("bits >> 1u);") == 1


@pytest.mark.parametrize("make", [two_button, toggle_count, toggle_shift, toggle_drain, toggle_scale])
@pytest.mark.parametrize(
    "path",
    [
        "firmware/c/{}.h",
        "firmware/c/{}.c",
        "firmware/c/board.c",
        "firmware/micropython/{}.py",
        "firmware/micropython/main.py",
    ],
)
def test_golden(make, path, golden):
    """The artefacts are as reviewed."""
    port = make()
    path = path.format(port.name)
    golden(GOLDEN / port.name / path, files(port)[path])
