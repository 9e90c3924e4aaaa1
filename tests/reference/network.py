"""An independent account of a porter circuit, as equations on its node voltages.

Written from the contract alone, by another road than the package: the network
stays in nodal form ``C v' + G v = i`` with a singular ``C``.  The singular
directions of ``C`` are known by structure (one for each group of nodes that
capacitors join, unless the group reaches a rail), so the differential and the
algebraic part come apart without numerical rank decisions.  Everything is in
80-digit decimal arithmetic: 0.1 ohm beside 100 Mohm costs no accuracy.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from decimal import Decimal, localcontext
from functools import cached_property
from itertools import product
from typing import Any

import numpy as np

DIGITS = 80
#: To ground from every node, so that a node that nothing fixes still has a voltage; too small to be seen.
STRAY = Decimal(10) ** -32
Vector = Any  # numpy object arrays of Decimal
Matrix = Any


@dataclass(frozen=True)
class Contact:
    """A button's contact between two nodes."""

    nodes: tuple[str, str]
    resistance: float = 0.1
    normally: str = "open"
    leak: float | None = None


@dataclass(frozen=True)
class Chip:
    """The timer: which node each connected pin is on, and plain figures (SI)."""

    family: str
    pins: Mapping[str, str]
    figures: Mapping[str, float]


#: An ideal timer: rails reached, no input currents, the ratios of three equal resistors.
IDEAL = {
    "high_drop": 0.0,
    "high_resistance": 1e-3,
    "low_level": 0.0,
    "low_resistance": 1e-3,
    "trigger_ratio": 1 / 3,
    "threshold_ratio": 2 / 3,
    "reset_level": 0.7,
    "trigger_current": 0.0,
    "threshold_current": 0.0,
    "reset_current": 0.0,
    "divider": 1e5,
    "discharge_resistance": 1e-3,
}


@dataclass(frozen=True)
class Net:
    """A circuit in plain numbers. Two-terminal parts are ``(node, node, value)``; rails ``vcc``, ``gnd``.

    Diodes are ``(anode, cathode, forward_v, slope_ohm)``; a current flows from its first node to its second.
    """

    supply: float
    chip: Chip
    resistors: tuple[tuple[str, str, float], ...] = ()
    capacitors: tuple[tuple[str, str, float], ...] = ()
    diodes: tuple[tuple[str, str, float, float], ...] = ()
    currents: tuple[tuple[str, str, float], ...] = ()
    contacts: Mapping[str, Contact] = field(default_factory=dict)

    @cached_property
    def nodes(self) -> tuple[str, ...]:
        """All nodes but the rails."""
        parts = (*self.resistors, *self.capacitors, *self.diodes, *self.currents)
        names = [n for p in parts for n in p[:2]]
        names += [n for c in self.contacts.values() for n in c.nodes]
        names += list(self.chip.pins.values())
        return tuple(dict.fromkeys(n for n in names if n not in ("vcc", "gnd")))


def from_circuit(circuit: Any, figures: Mapping[str, float]) -> Net:
    """Return the nominal `Net` of a ``porter.spec.model.Circuit`` with the timer *figures* given."""
    rows: dict[str, list[Any]] = {"resistor": [], "capacitor": [], "diode": [], "current": []}
    for part in circuit.parts:
        a, b = part.nodes
        if part.kind in ("led", "diode"):
            rows["diode"].append((a, b, part.value.nominal, part.slope.nominal))
        elif part.kind == "load" and part.current is not None:
            rows["current"].append((a, b, part.current.nominal))
        else:
            kind = "capacitor" if part.kind == "capacitor" else "resistor"
            rows[kind].append((a, b, part.value.nominal))
        if part.leak is not None and part.leak.resistance is not None:
            rows["resistor"].append((a, b, part.leak.resistance.nominal))
    contacts = {
        b.name: Contact(b.nodes, b.resistance.nominal, b.normally, b.leak.nominal if b.leak else None)
        for b in circuit.buttons
    }
    return Net(
        circuit.supply.nominal,
        Chip(circuit.timer.family, dict(circuit.timer.pins), dict(figures)),
        tuple(rows["resistor"]),
        tuple(rows["capacitor"]),
        tuple(rows["diode"]),
        tuple(rows["current"]),
        contacts,
    )


def solve(matrix: Matrix, right: Matrix) -> Matrix:
    """Return ``matrix^-1 right`` by elimination with row pivoting, in decimals."""
    n = len(matrix)
    work = np.concatenate([matrix, right], axis=1)
    for k in range(n):
        p = max(range(k, n), key=lambda r, k=k: abs(work[r, k]))
        work[[k, p]] = work[[p, k]]
        work[k] = work[k] / work[k, k]
        for r in range(n):
            if r != k and work[r, k]:
                work[r] = work[r] - work[r, k] * work[k]
    return work[:, n:]


def zeros(*shape: int) -> Matrix:
    """Return an object array of decimal zeros."""
    out = np.empty(shape, dtype=object)
    out[...] = Decimal(0)
    return out


@dataclass(frozen=True)
class Branch:
    """A one-way branch: current from *a* to *b* once ``v_a - v_b`` is above *volts*, through *ohms*."""

    a: str
    b: str
    volts: Decimal
    ohms: Decimal


@dataclass(frozen=True)
class Mode:
    """One linear mode: ``a' = rate @ (a, 1)``, node voltages ``volts @ (a, 1)``.

    `guards` are positive while the assumed one-way branches stay as assumed.
    `margins` are positive while reset, trigger, threshold are asserted (rows of None: never).
    """

    rate: Matrix
    volts: Matrix
    guards: Matrix
    margins: dict[str, Vector]
    conducting: tuple[bool, ...]


class Equations:
    """The modes of a `Net`, and the coordinates that capacitors keep from jumping."""

    def __init__(self, net: Net) -> None:
        self.net = net
        self.supply = Decimal(net.supply)
        self.index = {name: k for k, name in enumerate((*net.nodes, "vcc", "gnd"))}
        self.count = len(net.nodes)
        self.figures = {k: Decimal(v) for k, v in net.chip.figures.items()}
        self._modes: dict[tuple[int, frozenset[str], tuple[bool, ...]], Mode] = {}
        with localcontext() as context:
            context.prec = DIGITS
            self._coordinates()

    def _groups(self) -> list[list[int]]:
        """Nodes that capacitors join; the group of the rails comes out with the rails' indices in it."""
        parent = list(range(self.count + 2))

        def root(k: int) -> int:
            while parent[k] != k:
                k = parent[k]
            return k

        parent[self.index["gnd"]] = self.index["vcc"]
        for a, b, _ in self.net.capacitors:
            parent[root(self.index[a])] = root(self.index[b])
        groups: dict[int, list[int]] = {}
        for k in range(self.count + 2):
            groups.setdefault(root(k), []).append(k)
        return list(groups.values())

    def _coordinates(self) -> None:
        """Set ``v = base @ (a, z)``: *a* can't jump, *z* is algebraic."""
        held: list[Vector] = []
        loose: list[Vector] = []
        for group in self._groups():
            if self.index["vcc"] in group:
                members = [k for k in group if k < self.count]
            else:
                members = group[1:]
                loose.append(self._indicator(group))
            held += [self._indicator([k]) for k in members]
        self.states = len(held)
        self.base = np.array([*held, *loose], dtype=object).reshape(-1, self.count).T
        full = zeros(self.count + 2, self.count + 2)
        for a, b, farad in self.net.capacitors:
            self._stamp(full, a, b, Decimal(farad))
        top = self.base[:, : self.states]
        self.mass = top.T @ full[: self.count, : self.count] @ top if self.states else zeros(0, 0)
        pull = full[: self.count, self.index["vcc"]] * -self.supply
        self.empty = solve(self.mass, (top.T @ pull)[:, None])[:, 0] if self.states else zeros(0)

    def _indicator(self, members: Iterable[int]) -> Vector:
        row = zeros(self.count)
        for k in members:
            row[k] = Decimal(1)
        return row

    def _stamp(self, matrix: Matrix, a: str, b: str, value: Decimal) -> None:
        i, j = self.index[a], self.index[b]
        if i != j:
            for r, c, s in ((i, i, 1), (j, j, 1), (i, j, -1), (j, i, -1)):
                matrix[r, c] += s * value

    # What is connected in one situation

    def branches(self, q: int) -> tuple[Branch, ...]:
        """One-way branches of the network with the latch at *q*."""
        found = [Branch(a, b, Decimal(v), Decimal(r)) for a, b, v, r in self.net.diodes]
        out = self.net.chip.pins.get("output")
        f = self.figures
        if out is not None and self.net.chip.family == "bipolar":
            if q:
                found.append(Branch("vcc", out, f["high_drop"], f["high_resistance"]))
            else:
                found.append(Branch(out, "gnd", f["low_level"], f["low_resistance"]))
        return tuple(found)

    def _resistive(self, q: int, held: frozenset[str]) -> list[tuple[str, str, Decimal, Decimal]]:
        """Branches ``(a, b, volts, ohms)`` that conduct both ways: current ``(v_a - v_b - volts)/ohms``."""
        zero = Decimal(0)
        rows = [(a, b, zero, Decimal(r)) for a, b, r in self.net.resistors]
        for name, contact in self.net.contacts.items():
            closed = (name in held) == (contact.normally == "open")
            ohms = contact.resistance if closed else contact.leak
            if ohms is not None:
                rows.append((*contact.nodes, zero, Decimal(ohms)))
        return rows + self._timer_resistive(q)

    def _timer_resistive(self, q: int) -> list[tuple[str, str, Decimal, Decimal]]:
        zero, f, pins = Decimal(0), self.figures, self.net.chip.pins
        rows = []
        if "reset" in pins and f["reset_current"]:
            rows.append(("vcc", pins["reset"], zero, self.supply / f["reset_current"]))
        if "control" in pins:
            rows.append(("vcc", pins["control"], zero, 3 * f["divider"] * (1 - f["threshold_ratio"])))
            rows.append((pins["control"], "gnd", zero, 3 * f["divider"] * f["threshold_ratio"]))
        if "discharge" in pins and not q:
            rows.append((pins["discharge"], "gnd", zero, f["discharge_resistance"]))
        if "output" in pins and self.net.chip.family != "bipolar":
            if q:
                rows.append(("vcc", pins["output"], f["high_drop"], f["high_resistance"]))
            else:
                rows.append((pins["output"], "gnd", f["low_level"], f["low_resistance"]))
        return rows

    def _currents(self) -> list[tuple[str, str, Decimal]]:
        f, pins = self.figures, self.net.chip.pins
        rows = [(a, b, Decimal(i)) for a, b, i in self.net.currents]
        if "trigger" in pins:
            rows.append(("gnd", pins["trigger"], f["trigger_current"]))
        if "threshold" in pins:
            rows.append((pins["threshold"], "gnd", f["threshold_current"]))
        return rows

    # The equations of one situation

    def mode(self, q: int, held: frozenset[str], conducting: tuple[bool, ...]) -> Mode:
        """Return the linear mode of latch *q*, buttons *held*, and the one-way branches *conducting*."""
        key = (q, held, conducting)
        if key not in self._modes:
            with localcontext() as context:
                context.prec = DIGITS
                self._modes[key] = self._build(q, held, conducting)
        return self._modes[key]

    def _build(self, q: int, held: frozenset[str], conducting: tuple[bool, ...]) -> Mode:
        ways = self.branches(q)
        rows = self._resistive(q, held)
        rows += [(w.a, w.b, w.volts, w.ohms) for w, on in zip(ways, conducting, strict=True) if on]
        conductance, inject = self._assemble(rows)
        rate, volts = self._reduce(conductance, inject)
        whole = np.concatenate([volts, zeros(2, self.states + 1)])
        whole[self.index["vcc"], -1] = self.supply
        guards = zeros(len(ways), self.states + 1)
        for k, (way, on) in enumerate(zip(ways, conducting, strict=True)):
            over = whole[self.index[way.a]] - whole[self.index[way.b]]
            over[-1] -= way.volts
            guards[k] = over if on else -over
        return Mode(rate, whole, guards, self._margins(whole), conducting)

    def _assemble(self, rows: list[tuple[str, str, Decimal, Decimal]]) -> tuple[Matrix, Vector]:
        full = zeros(self.count + 2, self.count + 2)
        inject = zeros(self.count + 2)
        for a, b, volts, ohms in rows:
            self._stamp(full, a, b, 1 / ohms)
            inject[self.index[a]] += volts / ohms
            inject[self.index[b]] -= volts / ohms
        for a, b, amps in self._currents():
            inject[self.index[a]] -= amps
            inject[self.index[b]] += amps
        inner = full[: self.count, : self.count]
        for k in range(self.count):
            inner[k, k] += STRAY
        return inner, inject[: self.count] - full[: self.count, self.index["vcc"]] * self.supply

    def _reduce(self, conductance: Matrix, inject: Vector) -> tuple[Matrix, Matrix]:
        m = self.states
        turned = self.base.T @ conductance @ self.base if self.count else zeros(0, 0)
        push = self.base.T @ inject if self.count else zeros(0)
        # z = follow @ (a, 1)
        right = np.concatenate([-turned[m:, :m], push[m:, None]], axis=1)
        follow = solve(turned[m:, m:], right) if self.count > m else zeros(0, m + 1)
        flow = np.concatenate([-turned[:m, :m], push[:m, None]], axis=1)
        if self.count > m:
            flow = flow - turned[:m, m:] @ follow
        rate = solve(self.mass, flow) if m else zeros(0, m + 1)
        unit = zeros(m, m + 1)
        for k in range(m):
            unit[k, k] = Decimal(1)
        volts = self.base @ np.concatenate([unit, follow]) if self.count else zeros(0, m + 1)
        return rate, volts

    def _margins(self, whole: Matrix) -> dict[str, Vector]:
        """How far each pin is past its level, as rows on ``(a, 1)``; positive = asserted."""
        f, pins = self.figures, self.net.chip.pins
        one = zeros(self.states + 1)
        one[-1] = Decimal(1)
        high, low = one * f["threshold_ratio"] * self.supply, one * f["trigger_ratio"] * self.supply
        if "control" in pins:
            high = whole[self.index[pins["control"]]]
            low = high * (f["trigger_ratio"] / f["threshold_ratio"])
        rows = {}
        if "reset" in pins:
            rows["reset"] = one * f["reset_level"] - whole[self.index[pins["reset"]]]
        if "trigger" in pins:
            rows["trigger"] = low - whole[self.index[pins["trigger"]]]
        if "threshold" in pins:
            rows["threshold"] = whole[self.index[pins["threshold"]]] - high
        return rows

    # The right mode for a state

    def at(self, state: Vector, q: int, held: frozenset[str]) -> Mode:
        """Return the mode whose conducting set is consistent with its own currents at *state*.

        On the boundary of a branch the mode is taken in which the branch is going to stay as assumed.
        """
        with localcontext() as context:
            context.prec = DIGITS
            x = np.array([*(Decimal(s) for s in state), Decimal(1)], dtype=object)
            options = []
            for on in product((False, True), repeat=len(self.branches(q))):
                mode = self.mode(q, held, on)
                options.append((self._violation(mode, x), mode))
            return min(options, key=lambda pair: pair[0])[1]

    def _violation(self, mode: Mode, x: Vector) -> Decimal:
        near = self.supply * Decimal("1e-12")
        worst = Decimal(0)
        for guard in mode.guards:
            value = guard @ x
            if abs(value) <= near:
                turn = guard[:-1] @ (mode.rate @ x) if self.states else Decimal(0)
                value = -near if turn < 0 else Decimal(0)
            worst = max(worst, -value)
        return worst

    def rest(self, q: int, held: frozenset[str]) -> Vector:
        """Return the state in which nothing moves with the latch kept at *q*.

        Raises:
            ValueError: where no conducting set is consistent, or a capacitor has no path to settle by.
        """
        with localcontext() as context:
            context.prec = DIGITS
            for on in product((False, True), repeat=len(self.branches(q))):
                mode = self.mode(q, held, on)
                state = solve(mode.rate[:, :-1], -mode.rate[:, -1:])[:, 0] if self.states else zeros(0)
                x = np.array([*state, Decimal(1)], dtype=object)
                if any(abs(s) > 10**15 for s in state):
                    raise ValueError("a capacitor has no path to settle by")
                if all(guard @ x >= -self.supply * Decimal("1e-12") for guard in mode.guards):
                    return state
        raise ValueError("no conducting set is consistent")
