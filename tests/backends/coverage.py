"""Measures what a suite reaches in an emitted core: branches, and each condition's own effect (MC/DC).

Source of the measure: clang's source-based coverage; MC/DC from version 18 on, used here from 19.
"""

import json
import re
from dataclasses import dataclass
from pathlib import Path

from .targets import WARNINGS, names
from .tools import DRIVERS, must, need
from .work import Work, first_difference

CLANG, MERGE, SHOW = "clang-19", "llvm-profdata-19", "llvm-cov-19"


@dataclass(frozen=True, slots=True)
class Reached:
    """Counts for the core's source, (reached, there are); `unseen` are the source lines with a gap."""

    branches: tuple[int, int]
    conditions: tuple[int, int]
    functions: tuple[int, int]
    unseen: tuple[str, ...]

    @property
    def whole(self) -> bool:
        """Whether everything was reached, and there was something to reach."""
        pairs = (self.branches, self.conditions, self.functions)
        return all(reached == there for reached, there in pairs) and self.branches[1] > 0


def measure(work: Work, where: Path) -> Reached:
    """Compile a core for coverage, run the whole work, and count.

    Raises:
        AssertionError: an answer differs from the reference's, so that the counts would mean nothing.
    """
    need(CLANG, MERGE, SHOW, "sh")
    work.write(where)
    flags = ["-std=c99", "-O1", "-fprofile-instr-generate", "-fcoverage-mapping", "-fcoverage-mcdc"]
    sources = [f"{work.name}.c", DRIVERS / "cover.c"]
    must([CLANG, *flags, *WARNINGS, *names(work), *sources, "-o", "cover"], where)
    (where / "in.bin").write_bytes(work.stimulus.tobytes())
    must(["sh", "-c", "LLVM_PROFILE_FILE=raw.profraw ./cover < in.bin > out.bin"], where)
    assert first_difference(work, (where / "out.bin").read_bytes()) is None
    must([MERGE, "merge", "raw.profraw", "-o", "core.profdata"], where)
    asked = ["-instr-profile=core.profdata", "./cover", f"{work.name}.c"]
    report = json.loads(must([SHOW, "export", "-summary-only", *asked], where))
    (core,) = (item["summary"] for item in report["data"][0]["files"])
    shown = must([SHOW, "show", "-show-mcdc", "-show-branches=count", *asked], where)
    return Reached(*(_pair(core[kind]) for kind in ("branches", "mcdc", "functions")), _unseen(shown))


def _unseen(shown: str) -> tuple[str, ...]:
    """Return the source lines under which the report names a branch or condition that wasn't reached."""
    source, seen = "", dict[str, None]()
    for line in shown.splitlines():
        found = re.match(r"\s*\d+\|[^|]*\|(.*)", line)
        source = found[1].strip() if found else source
        if re.search(r"True: 0,|False: 0\]|-Pair: not covered", line):
            seen[source] = None
    return tuple(seen)


def _pair(counts: dict[str, int]) -> tuple[int, int]:
    return counts["covered"], counts["count"]
