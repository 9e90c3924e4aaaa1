"""The README's commands, run again: they print what it says they print.

A block fenced as ``console`` holds commands after ``$ `` and their output; a line of ``...``
stands for any lines. ``pytest --update-golden`` rewrites the outputs; what is left out stays left
out, between the lines that are most like those at the cuts now.
"""

import os
import re
import shlex
import subprocess
import sys
from dataclasses import dataclass
from difflib import SequenceMatcher
from functools import cache
from itertools import groupby
from pathlib import Path

import pytest

from porter.circuit.family import FAMILIES
from porter.cli import cli
from porter.resources import folder

README = Path(__file__).parents[1] / "README.md"
BLOCK = re.compile(r"^```console\n(.*?)^```$", re.S | re.M)
ANY = "..."


@dataclass(frozen=True, slots=True)
class Shown:
    """A command of the README with the output printed under it."""

    command: str
    output: tuple[str, ...]

    @property
    def long(self) -> bool:
        """Whether it takes a whole proof, follows on one, or needs a tool that pip doesn't bring."""
        return self.command.startswith(("porter prove", "porter port", "sed ", "cc "))


def _shown(text: str) -> list[Shown]:
    found = []
    for block in BLOCK.findall(text):
        for piece in re.split(r"^\$ ", block, flags=re.M)[1:]:
            command, *output = piece.rstrip().split("\n")
            found.append(Shown(command, tuple(output)))
    return found


SHOWN = _shown(README.read_text("utf-8"))


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An empty folder: the commands follow one another in it as in the README."""
    return tmp_path_factory.mktemp("readme")


@cache
def _run(place: Path, at: int) -> tuple[str, ...]:
    """Run one command after those before it that leave files; returns the lines it prints."""
    for before in range(at):
        if SHOWN[before].command.startswith(("porter start", "porter port", "cd ")):
            _run(place, before)
    command = re.sub(r"^porter ", f"{shlex.quote(sys.executable)} -m porter ", SHOWN[at].command)
    env = {**os.environ, "COLUMNS": "100", "NO_COLOR": "1", "PYTHONUTF8": "1"}
    done = subprocess.run(
        command, shell=True, cwd=place, env=env, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, timeout=300
    )
    return tuple(line.rstrip() for line in done.stdout.decode().rstrip().splitlines())


def _matches(shown: tuple[str, ...], printed: tuple[str, ...]) -> bool:
    """Whether the lines agree, with any number of lines in place of ``...``."""
    pattern = "".join(r"(.*\n)*?" if line == ANY else re.escape(line) + r"\n" for line in shown)
    return re.fullmatch(pattern, "".join(line + "\n" for line in printed)) is not None


def _nearest(line: str, printed: tuple[str, ...], begin: int) -> int:
    """The place from *begin* on of the line most like this one."""
    likeness = [SequenceMatcher(None, line, other).ratio() for other in printed[begin:]]
    return begin + likeness.index(max(likeness))


def _excerpt(shown: tuple[str, ...], printed: tuple[str, ...]) -> tuple[str, ...]:
    """Cut new output as the old one is cut."""
    kept: list[str] = []
    at = 0
    for left_out, lines in groupby(shown, lambda line: line == ANY):
        if left_out:
            kept.append(ANY)
            continue
        old = [line for line in lines if line]  # an empty line is like every other one
        begin = at if at == 0 and shown[0] != ANY else _nearest(old[0], printed, at)
        at = len(printed) if shown[-1] in (old[-1], "") else _nearest(old[-1], printed, begin) + 1
        kept += printed[begin:at]
    return tuple(kept)


def _rewrite(shown: Shown, printed: tuple[str, ...]) -> None:
    text = README.read_text("utf-8")
    old = "\n".join(("$ " + shown.command, *shown.output)) + "\n"
    new = _excerpt(shown.output, printed) if shown.output else printed
    README.write_text(text.replace(old, "\n".join(("$ " + shown.command, *new)) + "\n"), "utf-8")


MARKS = {True: (pytest.mark.system,), False: ()}


@pytest.mark.xdist_group("readme")
@pytest.mark.parametrize(
    "at", [pytest.param(k, marks=MARKS[s.long], id=s.command) for k, s in enumerate(SHOWN)]
)
def test_a_command_prints_what_the_readme_says(place: Path, at: int, request: pytest.FixtureRequest) -> None:
    shown, printed = SHOWN[at], _run(place, at)
    if request.config.getoption("--update-golden"):
        _rewrite(shown, printed)
        return
    assert _matches(shown.output, printed), "\n".join(
        ("it prints now:", *printed, "", "(`pytest --update-golden` rewrites the outputs)")
    )


def test_the_comparison_sees_a_changed_figure() -> None:
    assert _matches(("a 1", ANY, "c 3"), ("a 1", "b 2", "b 2", "c 3"))
    assert not _matches(("a 1", ANY, "c 3"), ("a 1", "b 2", "c 4"))
    assert not _matches(("a 1",), ("a 1", "b 2"))


def test_new_output_is_cut_as_the_old_one() -> None:
    old = ("head 1", ANY, "table", "", "row a 1", "", ANY, "last 2")
    new = ("more", "head 7", "x", "table", "", "row a 5", "row b 6", "y", "last 9")
    assert _excerpt(old, new) == ("more", "head 7", ANY, "table", "", "row a 5", ANY, "last 9")
    assert _excerpt(("one",), ("two", "three")) == ("two", "three")


def test_every_command_is_explained() -> None:
    """Each command, each timer family, and each shipped spec that is not faulty is in the README."""
    text = README.read_text("utf-8")
    missing = [name for name in cli.commands if f"`porter {name}" not in text]
    assert missing == []
    (line,) = re.findall(r"^  family: .*$", text, re.M)[-1:]
    assert [name for name in FAMILIES if not re.search(rf"[ ,]{name}[ ,:]", line)] == []
    specs = [p.name.removesuffix(".yaml") for p in folder("specs").iterdir()]
    assert [name for name in specs if not name.startswith("faulty") and f"`{name}`" not in text] == []


def test_pictures_are_there() -> None:
    """Every picture that the README shows is in the tree, and the lot stays small."""
    names = re.findall(r"!\[[^\]]*\]\(([^)]+)\)", README.read_text("utf-8"))
    assert names
    assert sum((README.parent / name).stat().st_size for name in names) < 300_000
