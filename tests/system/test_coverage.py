"""What the vectors reach in the emitted C: each branch, and each condition's independent effect."""

from dataclasses import replace
from pathlib import Path

import pytest
from backends.coverage import Reached, measure
from backends.work import work
from circuits import ALL, planned

pytestmark = pytest.mark.system

#: `idle` compares every member of the state after a trial step. That the latch alone would change, the
#: rest standing still, never happens in these ports: the comparison is there for ports where it could.
LAST = pytest.mark.xfail(
    reason="idle compares the latch where nothing but the latch never changes", strict=True
)


@pytest.fixture(scope="module")
def reached(specs: Path, tmp_path_factory: pytest.TempPathFactory):
    """What the suite of a kind of circuit reaches, measured once."""
    known: dict[str, Reached] = {}

    def of(kind: str) -> Reached:
        if kind not in known:
            known[kind] = measure(work(*planned(kind, specs)), tmp_path_factory.mktemp(kind))
        return known[kind]

    return of


@pytest.mark.parametrize("kind", ALL)
def test_vectors_reach_all_of_init_and_step(kind: str, reached):
    """Every function, and in init and step every branch and condition; gaps are in `idle`'s answer alone."""
    found = reached(kind)
    assert found.functions[0] == found.functions[1] > 0 and found.branches[1] > 0
    assert all(line.startswith("return (next.") for line in found.unseen), found.unseen


@pytest.mark.parametrize(
    "kind", [kind if kind == "two_button" else pytest.param(kind, marks=LAST) for kind in ALL]
)
def test_vectors_reach_everything(kind: str, reached):
    """Every branch and every condition's effect in the whole core."""
    found = reached(kind)
    assert found.whole, found


def test_a_case_too_few_is_seen(specs: Path, tmp_path: Path):
    """With the first case alone something is not reached, so the measure can fail."""
    port, suite = planned("charge_multiply", specs)
    short = replace(suite, cases=suite.cases[:1])
    found = measure(work(port, short), tmp_path)
    assert not found.whole and any("return" not in line for line in found.unseen)
