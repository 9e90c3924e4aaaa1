"""The engine on a moving supply against scipy's integration of the same networks.

Written from the physics: every node carries a capacitor, so that the nodal equations
``C v' = g V + c V' - G v`` are plain differential equations.  scipy's ``solve_ivp`` (LSODA,
rtol 1e-11) steps them from event to event; the comparators are its event functions.
Edges are compared one for one to 1e-6, end voltages to 1e-6 of the supply.
"""

from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from porter.circuit.power import Powered, Profile, dip, follow, ramp, step
from porter.spec.read import read_text
from porter.supply_run import simulate_supply

LEAST = 2.0  # V, the least published supply of the class (TI SLFS043C)
OUT_OHM, RESET_V = 50.0, 0.7
Draw = Any
Triple = tuple[str, str, float]


@dataclass(frozen=True)
class Net:
    """Resistors and capacitors between nodes and rails, and the nodes of three inputs."""

    nodes: tuple[str, ...]
    resistors: tuple[Triple, ...]
    capacitors: tuple[Triple, ...]
    pins: dict[str, str]


def decades(low: int, high: int) -> st.SearchStrategy[float]:
    return st.builds(lambda m, e: float(f"{m}e{e - 1}"), st.integers(10, 99), st.integers(low, high - 1))


@st.composite
def nets(draw: Draw) -> Net:
    nodes = (*(f"n{k}" for k in range(draw(st.integers(1, 3)))), "out")
    ohms, farads = decades(3, 6), decades(-8, -5)
    resistors = [
        (draw(st.sampled_from(("vcc", "gnd", *nodes[:k]))), n, draw(ohms)) for k, n in enumerate(nodes)
    ]
    ends = st.lists(st.sampled_from(("vcc", "gnd", *nodes)), min_size=2, max_size=2, unique=True)
    resistors += [(*e, draw(ohms)) for e in draw(st.lists(ends, min_size=1, max_size=3))]
    capacitors = [(n, draw(st.sampled_from(("gnd", "gnd", "vcc"))), draw(farads)) for n in nodes]
    for a, b in draw(st.lists(ends, max_size=2)):
        capacitors.append((a, b, draw(farads)))
    pins = {pin: draw(st.sampled_from(nodes)) for pin in ("trigger", "threshold", "reset")}
    return Net(nodes, tuple(resistors), tuple(capacitors), pins)


def spec(net: Net, volts: float) -> str:
    parts = [
        f"  R{k}: {{resistor: {v:.12f}, between: [{a}, {b}]}}" for k, (a, b, v) in enumerate(net.resistors)
    ]
    parts += [
        f"  C{k}: {{capacitor: {v:.14f}, between: [{a}, {b}]}}" for k, (a, b, v) in enumerate(net.capacitors)
    ]
    values = (
        "trigger_ratio: 1/3, threshold_ratio: 2/3, trigger_current: 0, threshold_current: 0, reset_current: 0, "
        f"reset_level: {RESET_V} V, high_resistance: {OUT_OHM}, low_resistance: {OUT_OHM}"
    )
    pins = ", ".join(f"{p}: {n}" for p, n in net.pins.items())
    return "\n".join([
        "circuit: Checked", f"supply: {volts} V", "timer:", "  family: cmos",
        f"  pins: {{{pins}, output: out}}", f"  values: {{{values}}}", "parts:", *parts,
        "buttons:", "  B: {between: [out, gnd]}",
    ]) + "\n"  # fmt: skip


# --- the other road ---


class Reference:
    """Steps one network along a profile."""

    def __init__(self, net: Net) -> None:
        self.net = net
        n = len(net.nodes)
        self.C, self.c = self._stamp(net.capacitors, n)
        self.G, self.g = self._stamp(net.resistors, n, inverse=True)
        self.edges: list[tuple[float, int]] = []
        self.wakes: list[float] = []
        self.closest = np.inf

    def _stamp(
        self, parts: tuple[Triple, ...], n: int, inverse: bool = False
    ) -> tuple[np.ndarray, np.ndarray]:
        M, rail = np.zeros((n, n)), np.zeros(n)
        at = {name: k for k, name in enumerate(self.net.nodes)}
        for a, b, value in parts:
            v = 1 / value if inverse else value
            for i, j in ((a, b), (b, a)):
                if i in at:
                    M[at[i], at[i]] += v
                    if j in at:
                        M[at[i], at[j]] -= v
                    elif j == "vcc":
                        rail[at[i]] += v
        return M, rail

    def levels(self, v: np.ndarray, V: float) -> np.ndarray:
        volts = dict(zip(self.net.nodes, v, strict=True)) | {"vcc": V}
        at = [volts[self.net.pins[p]] for p in ("trigger", "threshold", "reset")]
        return np.array([at[0] - V / 3, at[1] - 2 * V / 3, at[2] - RESET_V])

    def decide(self, v: np.ndarray, V: float, q: int, slope: np.ndarray | None = None) -> int:
        f = self.levels(v, V)
        if slope is not None:  # on its level a voltage counts as being where it goes
            f = np.where(np.abs(f) < 1e-8, slope, f)
        return 0 if f[2] < 0 else 1 if f[0] < 0 else 0 if f[1] > 0 else q

    def stretch(self, v, q, t0, V0, V1, length, waking):  # type: ignore[no-untyped-def]
        """Integrate one straight stretch; q None: the chip doesn't work. Returns v, q."""
        slope, t, out = (V1 - V0) / length, 0.0, self.net.nodes.index("out")
        while True:
            G, g = self.G.copy(), self.g.copy()
            if q is not None:
                G[out, out] += 1 / OUT_OHM
                g[out] += q / OUT_OHM

            def rhs(s, y, G=G, g=g):  # type: ignore[no-untyped-def]
                return np.linalg.solve(self.C, g * (V0 + slope * s) + self.c * slope - G @ y)

            if q is not None:
                f, d = (
                    self.levels(v, V0 + slope * t),
                    self.levels(rhs(t, v), slope) + np.array([0, 0, RESET_V]),
                )
                self.closest = min(
                    self.closest, np.min(np.where(np.abs(f) < 1e-8, np.abs(d) * 1e-3, np.abs(f)))
                )
                want = self.decide(v, V0 + slope * t, q, d)
                if want != q:
                    q = want
                    if not (waking and t == 0):
                        self.edges.append((t0 + t, q))
                    assume(len(self.edges) < 20)
                    continue
            events = [] if q is None else [
                (lambda s, y, k=k: self.levels(y, V0 + slope * s)[k]) for k in range(3)
            ]  # fmt: skip
            for e in events:
                e.terminal = True  # type: ignore[attr-defined]
            solved = solve_ivp(rhs, (t, length), v, "LSODA", rtol=1e-11, atol=1e-12, events=events or None)
            v, t = solved.y[:, -1], solved.t[-1]
            if solved.status != 1 or t >= length:
                return v, q
            # Step over the crossing, so that it isn't met again.
            ahead = min(1e-9 * max(t, 1e-9), length - t)
            v = v + rhs(t, v) * ahead
            t += ahead


def by_integration(net: Net, profile: Profile, v: np.ndarray, q: int, tail: float):  # type: ignore[no-untyped-def]
    ref = Reference(net)
    jump = np.linalg.solve(ref.C, ref.c)
    points = [*profile.points, (profile.points[-1][0] + tail, profile.points[-1][1])]
    awake, now = profile.points[0][1] >= LEAST, q
    for (t0, v0), (t1, v1) in pairwise(points):
        if t1 == t0:
            v = v + jump * (v1 - v0)
            continue
        cuts = [(t0, v0), (t1, v1)]
        if min(v0, v1) < LEAST < max(v0, v1):
            cuts.insert(1, (t0 + (LEAST - v0) / (v1 - v0) * (t1 - t0), LEAST))
        for (a, va), (b, vb) in pairwise(cuts):
            works = min(va, vb) >= LEAST
            waking, awake = works and not awake, works
            if waking:
                now = q
                ref.wakes.append(a)
            v, after = ref.stretch(v, now if works else None, a, va, vb, b - a, waking)
            now = after if works else q
    return ref, v, now


@st.composite
def profiles(draw: Draw) -> tuple[float, Profile]:
    volts, seconds = draw(st.sampled_from((3.0, 5.0, 12.0))), draw(decades(-6, 0))
    kind = draw(st.sampled_from(("step", "ramp", "brown-out", "to and fro")))
    if kind == "step":
        return volts, step(volts)
    if kind == "ramp":
        return volts, ramp(volts, seconds)
    low, more = draw(st.sampled_from((0.0, 0.3, 0.75, 0.9))) * volts, draw(decades(-4, 0))
    if kind == "brown-out":
        return volts, Profile((*ramp(volts, seconds).points, *_later(dip(volts, low, more), 2 * seconds)))
    back = ((seconds, volts), (seconds + more, low), (seconds + 3 * more, volts))
    return volts, Profile(((0.0, 0.0), *back))


def _later(profile: Profile, by: float) -> tuple[tuple[float, float], ...]:
    return tuple((t + by, v) for t, v in profile.points)


def compare(net: Net, volts: float, profile: Profile, q: int) -> None:
    tail = 0.2
    ref, v, last = by_integration(net, profile, np.zeros(len(net.nodes)), q, tail)
    assume(ref.closest > 1e-6)
    engine = Powered(read_text(spec(net, volts), "checked.yaml"), 1)
    lanes = engine.dark(1)
    edges: list[tuple[float, int]] = []
    end = profile.points[-1][0] + tail
    follow(
        engine, lanes, [profile], np.array([q]), end_s=end,
        listener=lambda _, when, new: edges.append((float(when[0]), int(new[0]))),
    )  # fmt: skip
    assume(not lanes.busy[0])
    # A latch that is forced the instant its chip starts to work was never anything else: no edge.
    edges = [e for e in edges if min(abs(e[0] - t) for t in ref.wakes) > 1e-12 * e[0]]
    assert [n for _, n in edges] == [n for _, n in ref.edges], (edges, ref.edges)
    assert [t for t, _ in edges] == pytest.approx([t for t, _ in ref.edges], rel=1e-6, abs=1e-9)
    assert int(lanes.q[0]) == last
    engine.stretch(np.zeros(1), True)
    order = [engine.topo.nodes.index(n) for n in net.nodes]
    assert np.abs(engine.volts(lanes)[0][order] - v).max() / volts < 1e-6


CHECKS = [HealthCheck.too_slow, HealthCheck.filter_too_much, HealthCheck.data_too_large]


@settings(max_examples=25, deadline=None, suppress_health_check=CHECKS)
@given(net=nets(), driven=profiles(), q=st.sampled_from((0, 1)))
def test_random_networks_on_a_moving_supply(net: Net, driven: tuple[float, Profile], q: int) -> None:
    compare(net, *driven, q)


@pytest.mark.system
@settings(max_examples=500, deadline=None, suppress_health_check=CHECKS)
@given(net=nets(), driven=profiles(), q=st.sampled_from((0, 1)))
def test_many_random_networks_on_a_moving_supply(net: Net, driven: tuple[float, Profile], q: int) -> None:
    compare(net, *driven, q)


@settings(max_examples=15, deadline=None, suppress_health_check=CHECKS)
@given(
    ohm=decades(4, 5),
    up=decades(4, 6),
    farad=decades(-8, -7),
    periods=st.floats(2.0, 5.0),
    low=st.sampled_from((0.5, 0.7, 0.95)),
)
def test_oscillators_on_a_moving_supply(
    ohm: float, up: float, farad: float, periods: float, low: float
) -> None:
    """Their levels move with the supply while they beat: many edges a run."""
    net = Net(
        ("n0", "out"),
        (("out", "n0", ohm), ("vcc", "n0", 10 * up), ("vcc", "out", 1e6)),
        (("n0", "gnd", farad), ("n0", "vcc", farad / 10), ("out", "gnd", 1e-10)),
        {"trigger": "n0", "threshold": "n0", "reset": "vcc"},
    )
    last = periods * 1.4 * ohm * farad
    profile = Profile(
        ((0.0, 0.0), (last, 5.0), (1.2 * last, 5.0), (1.4 * last, 5.0 * low), (1.6 * last, 5.0))
    )
    ref, v, q = by_integration(net, profile, np.zeros(2), 0, last / 10)
    assume(ref.closest > 1e-6 and len(ref.edges) >= 2)
    result = simulate_supply(read_text(spec(net, 5.0), "checked.yaml"), profile, [(0.0, [])], 1.7 * last)
    mine = [e for e in result.edges[1:] if min(abs(e[0] - t) for t in ref.wakes) > 1e-12 * e[0]]

    assert [n for _, n in mine] == [n for _, n in ref.edges]
    assert [t for t, _ in mine] == pytest.approx([t for t, _ in ref.edges], rel=1e-6)
    assert mine[-1][1] == q and np.isfinite(v).all()
