"""The package's engine against the independent reference, on random networks and random presses.

Source: `tests/reference`, written from the contract's physics without sight of the engine, and
itself checked in `test_reference_itself.py`.  The spec text goes through the package's reader.

Compared: node voltages to 1e-6 of the supply, edge times to 1e-6 relative, and the edges one for
one.  Situations that a difference of 1e-7 would turn the other way are drawn again.
"""

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, assume, given, settings
from hypothesis import strategies as st

from porter import simulate
from porter.spec.read import read_text
from tests.reference.integrate import Restless, Run, run_exact
from tests.reference.network import IDEAL, Chip, Contact, Net
from tests.reference.text import spec_text

NEAR = 1e-7
Draw = Any


@dataclass(frozen=True)
class Case:
    """A network and what is done to it."""

    net: Net
    schedule: tuple[tuple[float, tuple[str, ...]], ...]
    end_s: float
    start: str
    output: str


def decades(low: int, high: int) -> st.SearchStrategy[float]:
    """Values of two digits from ``10**low`` to ``10**high``."""
    return st.builds(lambda m, e: float(f"{m}e{e - 1}"), st.integers(10, 99), st.integers(low, high - 1))


@st.composite
def parts(draw: Draw, nodes: tuple[str, ...]) -> dict[str, Any]:
    """Resistors that tie every node to a rail by some path, capacitors over them, perhaps an LED."""
    ohms, farads = decades(2, 8), decades(-10, -4)
    resistors = []
    for k, node in enumerate(nodes):
        resistors.append((draw(st.sampled_from(("vcc", "gnd", *nodes[:k]))), node, draw(ohms)))
    ends = st.lists(st.sampled_from(("vcc", "gnd", *nodes)), min_size=2, max_size=2, unique=True)
    for a, b in draw(st.lists(ends, min_size=1, max_size=4)):
        resistors.append((a, b, draw(ohms)))
    between = st.tuples(st.sampled_from(nodes), st.sampled_from(("gnd", "gnd", "vcc", *nodes)))
    pairs = draw(st.lists(between.filter(lambda p: p[0] != p[1]), min_size=1, max_size=5))
    capacitors = tuple((a, b, draw(farads)) for a, b in pairs)
    diodes: tuple[tuple[str, str, float, float], ...] = ()
    if draw(st.booleans()):
        resistors.append(("out", "lamp", draw(ohms)))
        diodes = (("lamp", draw(st.sampled_from(("gnd", *nodes))), 1.9, 10.0),)
    return {"resistors": tuple(resistors), "capacitors": capacitors, "diodes": diodes}


@st.composite
def chips(draw: Draw, nodes: tuple[str, ...]) -> Chip:
    """A timer of either family with its pins on *nodes*, on rails, or open."""
    family = draw(st.sampled_from(("bipolar", "cmos")))
    pins = {"output": "out"}
    for pin, choices in (
        ("trigger", nodes),
        ("threshold", (*nodes, None)),
        ("reset", (*nodes, "vcc", None)),
        ("control", (None, None, None, *nodes)),
        ("discharge", (None, None, *nodes)),
    ):
        node = draw(st.sampled_from(choices))
        if node is not None:
            pins[pin] = node
    figures = dict(IDEAL)
    kind = draw(st.sampled_from(("ideal", "real", "sharp")))
    if kind == "sharp":
        figures |= {"high_drop": 1.7, "low_level": 0.1}
    if family == "bipolar":
        # Sharper one-way outputs have tests of their own below.
        figures |= {"high_resistance": 0.1, "low_resistance": 0.1}
    if kind == "real":
        figures |= {"high_drop": 1.4, "high_resistance": 8.0, "low_level": 0.04, "low_resistance": 12.0}
        figures |= {"trigger_current": 5e-7, "threshold_current": 3e-8, "reset_current": 4e-4}
        figures |= {"divider": 5e3, "discharge_resistance": 12.0, "trigger_ratio": 0.334}
    return Chip(family, pins, figures)


@st.composite
def cases(draw: Draw) -> Case:
    """A random network of 1 to 5 capacitors and 1 to 3 buttons, and a random schedule of presses."""
    nodes = (*(f"n{k}" for k in range(draw(st.integers(1, 4)))), "out")
    contacts = {}
    ends = st.lists(st.sampled_from(("vcc", "gnd", *nodes)), min_size=2, max_size=2, unique=True)
    for k in range(draw(st.integers(1, 3))):
        a, b = draw(ends.filter(lambda e: set(e) != {"vcc", "gnd"}))
        contacts[f"B{k}"] = Contact(
            (a, b),
            draw(st.sampled_from((0.1, 0.1, 5.0, 300.0))),
            draw(st.sampled_from(("open", "open", "closed"))),
            draw(st.sampled_from((None, None, 5e6))),
        )
    made = draw(parts(nodes))
    net = Net(draw(st.sampled_from((5.0, 9.0, 12.0))), draw(chips(nodes)), contacts=contacts, **made)
    now, schedule = 0.0, [(0.0, draw(st.sampled_from(((), (), tuple(contacts)))))]
    for gap in draw(st.lists(decades(-5, 1), min_size=1, max_size=6)):
        now += gap
        schedule.append((now, tuple(b for b in contacts if draw(st.booleans()))))
    end = now + draw(decades(-4, 1))
    return Case(
        net,
        tuple(schedule),
        end,
        draw(st.sampled_from(("empty", "settled"))),
        draw(st.sampled_from(("low", "high"))),
    )


def samples(case: Case) -> np.ndarray:
    """Times to look at the voltages, away from every press."""
    bounds = [t for t, _ in case.schedule] + [case.end_s]
    return np.array([a + (b - a) * f for a, b in pairwise(bounds) for f in (0.013, 0.41, 0.93)])


def reference(case: Case, nodes: tuple[str, ...]) -> Run:
    """The reference's run, or hypothesis draws again where it is ill-posed."""
    try:
        if case.start == "settled":
            rest = run_exact(case.net, [(0.0, ())], 1e-6, output=case.output)
            assume(rest.edges == [(0.0, int(case.output == "high"))])
        run = run_exact(
            case.net, case.schedule, case.end_s, start=case.start, output=case.output,
            nodes=nodes, times=samples(case), most_edges=24,
        )  # fmt: skip
    except (Restless, ValueError):
        assume(False)
        raise
    assume(run.closest > NEAR and run.glitches == 0)
    return run


def compare(case: Case) -> None:
    """Run both and compare."""
    nodes = tuple(n for n in case.net.nodes if n != "lamp")
    want = reference(case, nodes)
    circuit = read_text(spec_text(case.net), "checked.yaml")
    got = simulate(
        circuit, case.schedule, case.end_s, start=case.start, output=case.output,
        nodes=nodes, times=samples(case),
    )  # fmt: skip
    assert [q for _, q in got.edges] == [q for _, q in want.edges], (got.edges, want.edges)
    # The reference tells times apart by whole steps of end / 2**52.
    step = 4 * case.end_s / 2**52
    assert [t for t, _ in got.edges] == pytest.approx([t for t, _ in want.edges], rel=1e-6, abs=step)
    times = samples(case)
    at_edge = np.array([any(abs(t - e) <= 1e-6 * e for e, _ in want.edges) for t in times], dtype=bool)
    assert np.abs(got.volts - want.volts)[:, ~at_edge].max() / case.net.supply < 1e-6


def test_a_start_that_the_latch_does_not_hold() -> None:
    """A high output with the threshold idling above its level can't be the start of anything: low from 0 on.

    The same where the first press hides it.
    """
    chip = Chip("cmos", {"trigger": "vcc", "threshold": "n", "output": "out"}, IDEAL)
    net = Net(
        5.0,
        chip,
        (("vcc", "n", 1e4), ("out", "gnd", 1e4)),
        (("n", "gnd", 1e-6),),
        contacts={"B": Contact(("out", "gnd"), 100.0)},
    )
    circuit = read_text(spec_text(net), "checked.yaml")
    for schedule in ([(0.0, ())], [(0.0, ("B",))], [(0.0, ()), (0.5, ("B",))]):
        assert run_exact(net, schedule, 1.0, output="high").edges == [(0.0, 0)]
        assert simulate(circuit, schedule, 1.0, start="settled", output="high").edges == ((0.0, 0),)


@pytest.mark.parametrize("ohms", [4.0, 0.1, 1e-3])
def test_a_source_that_ends_up_carrying_nothing(ohms: float) -> None:
    """A bipolar output charges a capacitor through 10 Mohm and comes to rest.

    Its current fades to nothing and must not be taken for one that switches on and off.
    """
    net = Net(
        5.0,
        Chip(
            "bipolar",
            {"trigger": "vcc", "output": "out"},
            IDEAL | {"high_drop": 1.3, "high_resistance": ohms},
        ),
        (("out", "m", 1e7),),
        (("m", "gnd", 1e-6),),
        contacts={"B": Contact(("m", "gnd"))},
    )
    circuit = read_text(spec_text(net), "checked.yaml")
    run = simulate(circuit, [(0.0, ())], 1.0, start="settled", output="high", nodes=("m",), times=(0.5,))
    assert run.volts[0, 0] == pytest.approx(3.7, abs=1e-6)


@pytest.mark.parametrize("ohms", [12.0, 0.1, 1e-3])
def test_a_sink_does_not_source(ohms: float) -> None:
    """A bipolar output that is low lets its node fall on below 0.1 V: 100 Mohm, 1 nF, five time constants."""
    net = Net(
        5.0,
        Chip(
            "bipolar", {"trigger": "vcc", "output": "out"}, IDEAL | {"low_level": 0.1, "low_resistance": ohms}
        ),
        (("out", "gnd", 1e8),),
        (("vcc", "out", 1e-9),),
        contacts={"B": Contact(("out", "gnd"))},
    )
    ask = {"start": "empty", "nodes": ("out",), "times": (0.5,)}
    want = run_exact(net, [(0.0, ())], 1.0, **ask).volts[0, 0]
    assert want == pytest.approx(0.1 * np.exp(-5), rel=1e-3)
    got = simulate(read_text(spec_text(net), "checked.yaml"), [(0.0, ())], 1.0, **ask).volts[0, 0]
    assert got == pytest.approx(want, abs=5e-6)


CHECKS = [HealthCheck.too_slow, HealthCheck.filter_too_much, HealthCheck.data_too_large]


# Shrinking would take minutes here; the long run does it.
@settings(
    max_examples=30,
    deadline=None,
    derandomize=True,
    suppress_health_check=CHECKS,
    phases=[Phase.explicit, Phase.generate],
)
@given(case=cases())
def test_random_networks(case: Case) -> None:
    compare(case)


@pytest.mark.system
@settings(max_examples=1000, deadline=None, derandomize=True, suppress_health_check=CHECKS)
@given(case=cases())
def test_many_random_networks(case: Case) -> None:
    compare(case)
