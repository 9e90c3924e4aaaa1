"""From parts to modes: the switched network and its exact linear solution.

A *mode* is one combination of latch ``q``, held mask, and the set of one-way
branches that conduct (a bit mask).  Within a mode the network is linear.

The equations are set up branch by branch, not node by node: with ``A`` the
incidence matrix scaled by the square roots of the conductances, the branch
currents are ``sqrt(g) * (A v + e)`` and the law of currents reads
``A' (A v + e) = injected``.  The decay rates are then squares of singular
values, which keeps a 10 s memory exact beside a 10 ns contact where the
eigenvalues of the nodal matrix would not (G. Golub, C. Van Loan, Matrix
Computations, 4th ed., section 8.6: singular values carry an absolute error
near the rounding unit times the largest one).
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from porter.circuit.family import FAMILIES
from porter.circuit.values import Columns, Floats
from porter.spec.model import RAILS, Circuit, Part

#: A value of every unit: takes rows (B, P), gives (B,).
Getter = Callable[[Floats], Floats]
GND, VCC = -1, -2
_STRAY = 1e-9**0.5  # root of the conductance (S) of a stray path
RAIL_INDEX = {"gnd": GND, "vcc": VCC}


@dataclass(frozen=True, slots=True)
class Branch:
    """A resistive branch from `a` to `b`: current ``(v_a - v_b - emf) / ohm``.

    Args:
        q: the latch value it needs, None = either.
        button, pressed: it needs this button pressed (or not), button -1 = none.
        way: index of the one-way branch it is, -1 = conducts both ways.
    """

    a: int
    b: int
    ohm: Getter
    emf: Getter | None = None
    q: int | None = None
    button: int = -1
    pressed: bool = True
    way: int = -1
    name: str = ""

    def fits(self, q: int, held: int) -> bool:
        """True where the latch and the held mask allow it to conduct."""
        return self.q in (None, q) and (self.button < 0 or bool(held >> self.button & 1) == self.pressed)


@dataclass(frozen=True, slots=True)
class Inject:
    """A constant current from node `a` to node `b`."""

    a: int
    b: int
    ampere: Getter
    name: str = ""


@dataclass(frozen=True, slots=True)
class Comparator:
    """A deciding voltage: asserted where ``v_pin - factor * v_ref - level`` is below (above) zero."""

    name: str
    pin: int | None  # node, rail, or None where the pin is not connected
    below: bool
    level: Getter
    ref: int | None = None  # node whose voltage times `factor` is the level
    factor: Getter | None = None


@dataclass(frozen=True, slots=True)
class Topology:
    """The circuit's connections, without values.

    Args:
        nodes: names of the nodes between the rails; indices elsewhere refer to it.
        T: (N, m) node voltages by capacitor state; W: (N, p) by the remaining unknowns.
        cap_matrix: rows -> (B, m, m), the capacitance matrix of the states.
        cap_to_supply: rows -> (B, m), capacitance from each state's node to the supply rail.
        state_names: one name a capacitor state.
        islands: per node the id of its capacitor island (nodes joined by capacitors), -1 = rails' island.
        ways: number of one-way branches.
    """

    circuit: Circuit
    columns: Columns
    nodes: tuple[str, ...]
    branches: tuple[Branch, ...]
    injects: tuple[Inject, ...]
    comparators: tuple[Comparator, ...]
    T: Floats
    W: Floats
    islands: NDArray[np.int64]
    caps: tuple[tuple[int, int, Getter, str], ...]
    state_names: tuple[str, ...]
    ways: int
    supply: Getter = field(repr=False)

    @property
    def states(self) -> int:
        """Number of capacitor states."""
        return int(self.T.shape[1])

    def node(self, name: str) -> int:
        """Return the index of a node or rail."""
        return RAIL_INDEX[name] if name in RAILS else self.nodes.index(name)

    def cap_matrix(self, rows: Floats) -> Floats:
        """Return the capacitance matrix in the states' coordinates, shape (B, m, m)."""
        n = len(self.nodes)
        full = np.zeros((len(rows), n, n))
        for a, b, farad, _ in self.caps:
            c = farad(rows)
            for i, j, sign in ((a, a, 1), (b, b, 1), (a, b, -1), (b, a, -1)):
                if i >= 0 and j >= 0:
                    full[:, i, j] += sign * c
        return self.T.T @ full @ self.T

    def cap_to_supply(self, rows: Floats) -> Floats:
        """Return the capacitance from each state's node to the supply, shape (B, m)."""
        at = np.zeros((len(rows), len(self.nodes)))
        for a, b, farad, _ in self.caps:
            for i, j in ((a, b), (b, a)):
                if i >= 0 and j == VCC:
                    at[:, i] += farad(rows)
        return at @ self.T


@dataclass(frozen=True, slots=True)
class Mode:
    """The exact solution of one mode for every unit.

    In the coordinates ``z`` (``x = S z``) the flow is ``dz/dt = drive - rate * z``; node voltages
    are ``Vz z + v0``; guards ``Gz z + g0`` with one row a comparator (trigger, threshold, reset:
    deciding voltage less its level) and then one a one-way branch (at least zero where the assumed
    conduction is right).

    Shapes: rate, drive (B, m); S, Sinv (B, m, m); Vz (B, N, m); v0 (B, N); Gz (B, J, m); g0 (B, J).
    floating: node flags (N,): no conducting path and no charge fixes its voltage.
    """

    q: int
    held: int
    conducts: int
    rate: Floats
    drive: Floats
    S: Floats
    Sinv: Floats
    Vz: Floats
    v0: Floats
    Gz: Floats
    g0: Floats
    floating: NDArray[np.bool_]
    drifts: bool  # a charge is held that nothing drains


def topology(circuit: Circuit, cols: Columns, rail: Getter | None = None) -> Topology:
    """Lay out a circuit's network.

    Args:
        rail: voltage of the supply rail where that isn't the supply of the spec.
    """
    return _Layout(circuit, cols, rail).topology()


class _Layout:
    """Collects branches, sources and capacitors while walking over the circuit."""

    def __init__(self, circuit: Circuit, cols: Columns, rail: Getter | None) -> None:
        self.circuit, self.cols = circuit, cols
        self.rail = rail or self.value("supply")
        names = [*circuit.nodes]
        names += [n for n in circuit.timer.pins.values() if n not in names and n not in RAILS]
        self.nodes = tuple(names)
        self.branches: list[Branch] = []
        self.injects: list[Inject] = []
        self.caps: list[tuple[int, int, Getter, str]] = []
        self.ways = 0

    def value(self, name: str) -> Getter:
        column = self.cols.index(name)
        return lambda rows: rows[:, column]

    def figure(self, key: str) -> Getter:
        return self.value(f"timer.{key}")

    def at(self, node: str) -> int:
        return GND if node == "gnd" else VCC if node == "vcc" else self.nodes.index(node)

    def pin(self, name: str) -> int | None:
        node = self.circuit.timer.pins.get(name)
        return None if node is None else self.at(node)

    def way(self) -> int:
        self.ways += 1
        return self.ways - 1

    def topology(self) -> Topology:
        self._output()
        for part in self.circuit.parts:
            getattr(self, f"_{part.kind}")(part, *(self.at(n) for n in part.nodes))
        self._buttons()
        self._discharge()
        self._input_currents()
        self._divider()
        islands, T, W, names = _states(self.nodes, self.caps)
        return Topology(
            circuit=self.circuit,
            columns=self.cols,
            nodes=self.nodes,
            branches=tuple(self.branches),
            injects=tuple(self.injects),
            comparators=self._comparators(),
            T=T,
            W=W,
            islands=islands,
            caps=tuple(self.caps),
            state_names=names,
            ways=self.ways,
            supply=self.rail,
        )

    def _resistor(self, part: Part, a: int, b: int) -> None:
        self.branches.append(Branch(a, b, self.value(f"parts.{part.name}"), name=part.name))

    def _led(self, part: Part, a: int, b: int) -> None:
        slope, vf = self.value(f"parts.{part.name}.slope"), self.value(f"parts.{part.name}")
        self.branches.append(Branch(a, b, slope, vf, way=self.way(), name=part.name))

    _diode = _led

    def _load(self, part: Part, a: int, b: int) -> None:
        if part.current is None:
            self._resistor(part, a, b)
            return
        self.injects.append(Inject(a, b, self.value(f"parts.{part.name}"), part.name))
        # A real load stops drawing when its voltage is gone: the return path keeps the
        # ideal current from pulling its node past the other rail.
        self.branches.append(
            Branch(b, a, lambda rows: np.full(len(rows), 0.1), way=self.way(), name=part.name)
        )

    def _capacitor(self, part: Part, a: int, b: int) -> None:
        self.caps.append((a, b, self.value(f"parts.{part.name}"), part.name))
        if part.leak is not None:
            leak = self.value(f"parts.{part.name}.leak")
            supply = self.value("supply")
            # A leakage current is quoted at the working voltage: taken as a resistance there.
            ohm = leak if part.leak.current is None else (lambda rows: supply(rows) / leak(rows))
            self.branches.append(Branch(a, b, ohm, name=f"{part.name} leak"))

    def _buttons(self) -> None:
        for i, button in enumerate(self.circuit.buttons):
            a, b = (self.at(n) for n in button.nodes)
            made = button.normally == "open"
            closed = self.value(f"buttons.{button.name}")
            self.branches.append(Branch(a, b, closed, button=i, pressed=made, name=button.name))
            if button.leak is not None:
                leak = self.value(f"buttons.{button.name}.leak")
                self.branches.append(Branch(a, b, leak, button=i, pressed=not made, name=button.name))

    def _output(self) -> None:
        out = self.pin("output")
        if out is None:
            return
        one_way = FAMILIES[self.circuit.timer.family].output == "one-way"
        way = self.way() if one_way else -1
        high = (self.figure("high_resistance"), self.figure("high_drop"))
        low = (self.figure("low_resistance"), self.figure("low_level"))
        # One index serves both: only one of them is driven at a time.
        self.branches.append(Branch(VCC, out, _floor(high[0]), high[1], q=1, way=way, name="output high"))
        self.branches.append(Branch(out, GND, _floor(low[0]), low[1], q=0, way=way, name="output low"))

    def _discharge(self) -> None:
        pin = self.pin("discharge")
        if pin is not None:
            ohm = _floor(self.figure("discharge_resistance"))
            self.branches.append(Branch(pin, GND, ohm, q=0, name="discharge"))

    def _input_currents(self) -> None:
        for pin, key, into in (
            ("trigger", "trigger_current", False),
            ("threshold", "threshold_current", True),
        ):
            node = self.pin(pin)
            if node is not None and node >= 0:
                ends = (node, GND) if into else (VCC, node)
                self.injects.append(Inject(*ends, self.figure(key), f"{pin} current"))
        reset = self.pin("reset")
        if reset is not None and reset >= 0:
            current, supply = self.figure("reset_current"), self.value("supply")
            # The pin's current is published at 0 V; it falls off toward the supply.
            ohm: Getter = lambda rows: supply(rows) / np.maximum(current(rows), 1e-15)  # noqa: E731
            self.branches.append(Branch(VCC, reset, ohm, name="reset current"))

    def _divider(self) -> None:
        control = self.pin("control")
        if control is None or control < 0:
            return
        each, ratio = self.figure("divider"), self.figure("threshold_ratio")
        self.branches.append(Branch(VCC, control, lambda r: 3 * each(r) * (1 - ratio(r)), name="divider"))
        self.branches.append(Branch(control, GND, lambda r: 3 * each(r) * ratio(r), name="divider"))

    def _comparators(self) -> tuple[Comparator, ...]:
        supply, trigger, threshold = self.rail, self.figure("trigger_ratio"), self.figure("threshold_ratio")
        control = self.pin("control")
        zero: Getter = lambda rows: np.zeros(len(rows))  # noqa: E731
        if control is None:
            low = Comparator("trigger", self.pin("trigger"), True, lambda r: trigger(r) * supply(r))
            high = Comparator("threshold", self.pin("threshold"), False, lambda r: threshold(r) * supply(r))
        else:
            one: Getter = lambda rows: np.ones(len(rows))  # noqa: E731
            part: Getter = lambda rows: trigger(rows) / threshold(rows)  # noqa: E731
            low = Comparator("trigger", self.pin("trigger"), True, zero, control, part)
            high = Comparator("threshold", self.pin("threshold"), False, zero, control, one)
        return (low, high, Comparator("reset", self.pin("reset"), True, self.figure("reset_level")))


def _floor(ohm: Getter) -> Getter:
    """A driver of exactly zero ohm can't be solved beside others: take a milliohm at least."""
    return lambda rows: np.maximum(ohm(rows), 1e-3)


def _states(
    nodes: Sequence[str], caps: Sequence[tuple[int, int, Getter, str]]
) -> tuple[NDArray[np.int64], Floats, Floats, tuple[str, ...]]:
    """Choose the capacitor states: node voltages of the islands that capacitors join.

    An island that holds a rail has every node's voltage as a state.  A free island keeps its
    first node as an unknown and takes the others relative to it.  Capacitors in parallel, or
    from rail to rail, then need no special case.
    """
    n = len(nodes)
    parent = list(range(n + 1))  # entry n stands for the rails

    def find(i: int) -> int:
        while parent[i] != i:
            i = parent[i]
        return i

    for a, b, _, _ in caps:
        ra, rb = find(a if a >= 0 else n), find(b if b >= 0 else n)
        parent[min(ra, rb)] = max(ra, rb)
    roots = [find(i) for i in range(n)]
    rail = find(n)
    first: dict[int, int] = {}
    state_cols: list[tuple[int, int | None]] = []
    unknowns: list[list[int]] = []
    for i, root in enumerate(roots):
        if root == rail:
            state_cols.append((i, None))
        elif root in first:
            state_cols.append((i, first[root]))
            unknowns[[u[0] for u in unknowns].index(first[root])].append(i)
        else:
            first[root] = i
            unknowns.append([i])
    T = np.zeros((n, len(state_cols)))
    W = np.zeros((n, len(unknowns)))
    for k, (i, _) in enumerate(state_cols):
        T[i, k] = 1.0
    for k, members in enumerate(unknowns):
        W[members, k] = 1.0
    names = tuple(nodes[i] if base is None else f"{nodes[i]}-{nodes[base]}" for i, base in state_cols)
    return np.array([-1 if r == rail else r for r in roots], np.int64), T, W, names


# --- modes ---


def _active(topo: Topology, q: int, held: int, conducts: int) -> list[Branch]:
    return [b for b in topo.branches if b.fits(q, held) and (b.way < 0 or conducts >> b.way & 1)]


def _components(topo: Topology, branches: Sequence[Branch], joined: bool) -> tuple[list[int], set[int]]:
    """Group nodes by conducting branches (and capacitor islands if `joined`); rails are one group.

    Returns each node's group and the groups that hold a rail.
    """
    n = len(topo.nodes)
    parent = list(range(n + 1))

    def find(i: int) -> int:
        while parent[i] != i:
            i = parent[i]
        return i

    def join(i: int, j: int) -> None:
        parent[find(i)] = find(j)

    for b in branches:
        join(b.a if b.a >= 0 else n, b.b if b.b >= 0 else n)
    if joined:
        for i, island in enumerate(topo.islands):
            join(i, n if island < 0 else int(island))
    return [find(i) for i in range(n)], {find(n)}


def solve_mode(topo: Topology, rows: Floats, q: int, held: int, conducts: int) -> Mode:
    """Solve one mode for all units.

    Args:
        rows: shape (B, P), the units' values.

    Returns:
        The mode; see `Mode` for shapes.
    """
    branches = _active(topo, q, held, conducts)
    A, e = _incidence(topo, rows, branches)
    injected = _injected(topo, rows)
    groups, grounded = _components(topo, branches, joined=True)
    loose = sorted({g for g in groups if g not in grounded})
    floating = np.array([g in loose for g in groups], bool)
    A, e = _tie_floating(topo, A, e, groups, loose)
    m = topo.states
    Ax, Ay = A @ topo.T, A @ topo.W
    QtAx, Qte, R, Q = _project(Ay, Ax, e)
    cur_y = _solve_lower(R, injected @ topo.W)  # R^-T W' injected
    Axp, ep = Ax - Q @ QtAx, e - (Q @ Qte[..., None])[..., 0]
    k_cur = injected @ topo.T - (np.swapaxes(QtAx, 1, 2) @ cur_y[..., None])[..., 0]
    y_x = -_solve_upper(R, QtAx)
    y_0 = _solve_upper(R, (cur_y - Qte)[..., None])[..., 0]
    split, _ = _components(topo, branches, joined=False)
    kept = len({g for g in split if g not in {_rail_group(topo, branches)}}) - len(loose)
    rate, drive, S, Sinv = _decays(topo, rows, Axp, ep, k_cur, kept)
    Vx = topo.T + topo.W @ y_x
    Vz, v0 = Vx @ S, y_0 @ topo.W.T
    Gz, g0 = _guards(topo, rows, q, held, conducts, Vz, v0)
    return Mode(q, held, conducts, rate, drive, S, Sinv, Vz, v0, Gz, g0, floating, kept > 0 and m > 0)


def _rail_group(topo: Topology, branches: Sequence[Branch]) -> int:
    _, grounded = _components(topo, branches, joined=False)
    return next(iter(grounded))


def _incidence(topo: Topology, rows: Floats, branches: Sequence[Branch]) -> tuple[Floats, Floats]:
    count, n = len(rows), len(topo.nodes)
    A, e = np.zeros((count, len(branches), n)), np.zeros((count, len(branches)))
    supply = topo.supply(rows)
    for k, b in enumerate(branches):
        root = 1.0 / np.sqrt(b.ohm(rows))
        e[:, k] = 0.0 if b.emf is None else -b.emf(rows)
        for node, sign in ((b.a, 1.0), (b.b, -1.0)):
            if node >= 0:
                A[:, k, node] += sign * root
            elif node == VCC:
                e[:, k] += sign * supply
        e[:, k] *= root
    return A, e


def _injected(topo: Topology, rows: Floats) -> Floats:
    current = np.zeros((len(rows), len(topo.nodes)))
    for inject in topo.injects:
        ampere = inject.ampere(rows)
        for node, sign in ((inject.a, -1.0), (inject.b, 1.0)):
            if node >= 0:
                current[:, node] += sign * ampere
    return current


def _tie_floating(
    topo: Topology, A: Floats, e: Floats, groups: Sequence[int], loose: Sequence[int]
) -> tuple[Floats, Floats]:
    """Give each floating group a stray path to ground so that it can be solved; `floating` tells of it.

    It is so weak that a current with no other way drives the group far off: a one-way branch that
    could carry it is then seen to conduct.
    """
    if not loose:
        return A, e
    ties = np.zeros((len(A), len(loose), len(topo.nodes)))
    for k, group in enumerate(loose):
        ties[:, k, groups.index(group)] = _STRAY
    return np.concatenate([A, ties], 1), np.concatenate([e, np.zeros((len(A), len(loose)))], 1)


def _project(Ay: Floats, Ax: Floats, e: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Factor the algebraic part; returns Q'Ax, Q'e, R, Q."""
    count, _, p = Ay.shape
    if p == 0:
        empty = np.zeros((count, Ay.shape[1], 0))
        return np.zeros((count, 0, Ax.shape[2])), np.zeros((count, 0)), np.zeros((count, 0, 0)), empty
    Q, R = np.linalg.qr(Ay)
    Qt = np.swapaxes(Q, 1, 2)
    return Qt @ Ax, (Qt @ e[..., None])[..., 0], R, Q


def _solve_upper(R: Floats, B: Floats) -> Floats:
    return np.asarray(np.linalg.solve(R, B)) if R.shape[1] else np.zeros((len(R), 0, B.shape[2]))


def _solve_lower(R: Floats, b: Floats) -> Floats:
    if not R.shape[1]:
        return np.zeros((len(R), 0))
    return np.asarray(np.linalg.solve(np.swapaxes(R, 1, 2), b[..., None])[..., 0])


def _decays(
    topo: Topology, rows: Floats, Axp: Floats, ep: Floats, k_cur: Floats, kept: int
) -> tuple[Floats, Floats, Floats, Floats]:
    """Return rate, drive, S and its inverse; `kept` charges are drained by nothing (rate exactly 0)."""
    m = topo.states
    count = len(rows)
    if m == 0:
        return np.zeros((count, 0)), np.zeros((count, 0)), np.zeros((count, 0, 0)), np.zeros((count, 0, 0))
    L = np.linalg.cholesky(topo.cap_matrix(rows))
    Linv_t = np.swapaxes(np.linalg.inv(L), 1, 2)
    scaled = Axp @ Linv_t
    short = max(0, m - scaled.shape[1])
    scaled = np.concatenate([scaled, np.zeros((count, short, m))], 1)
    ep = np.concatenate([ep, np.zeros((count, short))], 1)
    U, sigma, Vt = _svd(scaled)
    if kept:
        sigma[:, m - kept :] = 0.0
    S = Linv_t @ np.swapaxes(Vt, 1, 2)
    Sinv = Vt @ np.swapaxes(L, 1, 2)
    along = (np.swapaxes(U, 1, 2) @ ep[..., None])[..., 0]
    drive = -sigma * along + (np.swapaxes(S, 1, 2) @ k_cur[..., None])[..., 0]
    return sigma**2, drive, S, Sinv


def _svd(scaled: Floats) -> tuple[Floats, Floats, Floats]:
    if scaled.shape[2] == 1:  # by far the commonest case, and far faster by hand
        sigma = np.linalg.norm(scaled, axis=1)
        U = scaled / np.where(sigma == 0, 1.0, sigma)[:, None, :]
        return U, sigma, np.ones((len(scaled), 1, 1))
    U, sigma, Vt = np.linalg.svd(scaled, full_matrices=False)
    return U, sigma, Vt


def _at(node: int | None, topo: Topology, rows: Floats, Vz: Floats, v0: Floats) -> tuple[Floats, Floats]:
    """Return the affine map of one node's voltage: (B, m) and (B,)."""
    if node is None or node < 0:
        level = topo.supply(rows) if node == VCC else np.zeros(len(rows))
        return np.zeros((len(rows), Vz.shape[2])), level
    return Vz[:, node], v0[:, node]


def _guards(
    topo: Topology, rows: Floats, q: int, held: int, conducts: int, Vz: Floats, v0: Floats
) -> tuple[Floats, Floats]:
    pairs = [_comparator_guard(topo, c, rows, Vz, v0) for c in topo.comparators]
    pairs += [_way_guard(topo, w, rows, q, held, conducts, Vz, v0) for w in range(topo.ways)]
    return np.stack([p[0] for p in pairs], 1), np.stack([p[1] for p in pairs], 1)


def _comparator_guard(
    topo: Topology, comparator: Comparator, rows: Floats, Vz: Floats, v0: Floats
) -> tuple[Floats, Floats]:
    if comparator.pin is None:  # an unconnected pin never asserts
        far = np.full(len(rows), np.inf if comparator.below else -np.inf)
        return np.zeros((len(rows), Vz.shape[2])), far
    row, const = _at(comparator.pin, topo, rows, Vz, v0)
    const = const - comparator.level(rows)
    if comparator.ref is not None:
        assert comparator.factor is not None
        factor = comparator.factor(rows)
        ref_row, ref_const = _at(comparator.ref, topo, rows, Vz, v0)
        row, const = row - factor[:, None] * ref_row, const - factor * ref_const
    return row, const


def _way_guard(
    topo: Topology, way: int, rows: Floats, q: int, held: int, conducts: int, Vz: Floats, v0: Floats
) -> tuple[Floats, Floats]:
    """Forward voltage beyond the emf for a conducting branch, its negative for a blocking one."""
    branch = next((b for b in topo.branches if b.way == way and b.fits(q, held)), None)
    if branch is None:
        return np.zeros((len(rows), Vz.shape[2])), np.full(len(rows), np.inf)
    ra, ca = _at(branch.a, topo, rows, Vz, v0)
    rb, cb = _at(branch.b, topo, rows, Vz, v0)
    sign = 1.0 if conducts >> way & 1 else -1.0
    emf = 0.0 if branch.emf is None else branch.emf(rows)
    return sign * (ra - rb), sign * (ca - cb - emf)
