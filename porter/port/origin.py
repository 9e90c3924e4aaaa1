"""Where each constant of a firmware came from: formula, working, spec lines."""

from collections.abc import Sequence

import numpy as np

from porter.circuit.engine import Engine
from porter.circuit.network import Mode
from porter.circuit.values import Floats
from porter.port.memory import Memory, settled_mode
from porter.port.model import U16, Constant, Move, Test
from porter.spec.model import Circuit

_NUDGE = 1.01


class Origin:
    """Finds which spec values a constant depends on, by nudging each of them by one per cent."""

    def __init__(self, circuit: Circuit, mem: Memory) -> None:
        self.circuit, self.mem = circuit, mem
        cols = mem.engine.columns
        rows = np.tile(cols.nominal, (1 + len(cols.names), 1))
        for k in range(len(cols.names)):
            rows[1 + k, k] *= _NUDGE
        self.names = cols.names
        self.engine = Engine(circuit, rows, cols)

    def constant(self, key: str, value: int, meaning: str, working: str, columns: Sequence[str]) -> Constant:
        """Return one constant with its spec lines."""
        from porter.port.plan import spec_lines  # the planner stands above this module

        return Constant(key, value, meaning, working, spec_lines(self.circuit, columns))

    def _mode(self, q: int, held: int) -> Mode:
        middle = self.mem.volts(np.full((1, len(self.mem.kept)), U16 / 2))[0]
        conducts = settled_mode(self.mem.engine, q, held, middle).conducts
        return self.engine.mode(q, held, conducts)

    def _moved_by(self, values: Floats) -> list[str]:
        scale = np.abs(values[0]) + 1e-12
        return [n for n, v in zip(self.names, values[1:], strict=True) if abs(v - values[0]) > 1e-5 * scale]

    def _held(self, q: int, held: int) -> str:
        names = [b.name for i, b in enumerate(self.circuit.buttons) if held >> i & 1]
        return (
            f"output {'high' if q else 'low'}, {' and '.join(names) + ' held' if names else 'no button held'}"
        )

    def _state(self, at: int) -> tuple[int, str]:
        k = self.mem.kept[at]
        return k, self.mem.engine.topo.state_names[k]

    def end(self, key: str, value: int, q: int, held: int, at: int, end_v: float) -> Constant:
        """Where a copy settles."""
        k, name = self._state(at)
        mode = self._mode(q, held)
        A, b = _dynamics(mode)
        with np.errstate(divide="ignore", invalid="ignore"):
            volts = np.where(np.abs(A[:, k, k]) > 1e-12, -b[:, k] / A[:, k, k], 0.0)
        supply = float(self.mem.engine.supply[0])
        low, scale = self.mem.low_v[at], self.mem.scale_v[at]
        working = f"({end_v:.6g} V - {low:.6g} V) / {scale * U16:.6g} V * 65535 = {(end_v - low) / scale:.2f}"
        meaning = f"{name} settles here; {self._held(q, held)} ({end_v / supply:.4f} of the supply)"
        return self.constant(key, value, meaning, working, self._moved_by(volts))

    def stays(self, key: str, move: Move, q: int, held: int, at: int, rate: float, tick_s: float) -> Constant:
        """How much of a copy stays in one tick."""
        k, name = self._state(at)
        A, _ = _dynamics(self._mode(q, held))
        times = f"{tick_s * 1e3:g} ms / {1e3 / rate:.6g} ms"
        stays = float(np.exp(-rate * tick_s))
        if move.kind == "drain":
            exact = f"-log2(1 - exp(-T/tau)) = -log2(1 - exp(-{times})) = {-np.log2(1 - stays):.4f}"
            meaning = f"of {name} one part in 2 to the power of this goes in a tick; {self._held(q, held)}"
            return self.constant(key, move.shift, meaning, exact, self._moved_by(A[:, k, k]))
        exact = f"65536 * exp(-T/tau) = 65536 * exp(-{times}) = {65536 * stays:.2f}"
        meaning = f"65536ths of {name} that stay in a tick; {self._held(q, held)}"
        return self.constant(key, move.rate, meaning, exact, self._moved_by(A[:, k, k]))

    def add(self, key: str, move: Move, q: int, held: int, at: int, stays: float, end: float) -> Constant:
        """What a copy gains in one tick, so that it settles at its end."""
        k, name = self._state(at)
        to, of = (U16 - end, f"65535 less {name}") if move.mirror else (end, name)
        working = (
            f"end * (1 - exp(-T/tau)) = {to:.2f} * {1 - stays:.6f} = {to * (1 - stays):.2f}, "
            "and half of what is lost in rounding down"
        )
        meaning = f"what {of} gains in a tick; {self._held(q, held)}"
        A, b = _dynamics(self._mode(q, held))
        columns = self._moved_by(b[:, k]) + self._moved_by(A[:, k, k])
        return self.constant(key, move.add, meaning, working, columns)

    def rate(self, key: str, value: int, q: int, held: int, at: int, rate: float, tick_s: float) -> Constant:
        """The share of its way that a copy goes in one tick."""
        k, name = self._state(at)
        A, _ = _dynamics(self._mode(q, held))
        share = -np.expm1(-rate * tick_s)
        times = f"{tick_s * 1e3:g} ms / {1e3 / rate:.6g} ms"
        working = f"65536 * (1 - exp(-T/tau)) = 65536 * (1 - exp(-{times})) = {65536 * share:.2f}"
        meaning = f"65536ths of the way to its end that {name} goes in a tick; {self._held(q, held)}"
        return self.constant(key, value, meaning, working, self._moved_by(A[:, k, k]))

    def keep(self, key: str, value: int, q: int, held: int, at: int, other: int, tick_s: float) -> Constant:
        """An entry of the one-tick matrix of coupled copies."""
        (k, name), (j, from_) = self._state(at), self._state(other)
        mode = self._mode(q, held)
        phi = (mode.S * np.exp(-mode.rate * tick_s)[:, None, :]) @ mode.Sinv
        working = f"exp(A T)[{name}, {from_}] with T = {tick_s * 1e3:g} ms, in 65536ths"
        meaning = (
            f"65536ths of {from_}'s distance from its end that {name} has a tick later; {self._held(q, held)}"
        )
        return self.constant(key, value, meaning, working, self._moved_by(phi[:, k, j]))

    def limit(self, key: str, test: Test, q: int, held: int) -> Constant:
        """The copy's value at which the latch flips."""
        mode = self._mode(q, held)
        guard = {1: 1, 0: 0}[q]
        values = mode.g0[:, guard] + (mode.Gz[:, guard] * (mode.Sinv @ self.mem.base)).sum(axis=1)
        names = [self.mem.engine.topo.state_names[k] for k in self.mem.kept]
        sign = "at or above" if test.ge else "at or below"
        if len(test.coeff) == 1:
            volts = self.mem.low_v[0] + test.limit * self.mem.scale_v[0]
            said, working = names[0], f"{volts:.6g} V, by the {'threshold' if q else 'trigger'} input"
        else:
            said = " + ".join(f"{c} * {n}" for c, n in zip(test.coeff, names, strict=True) if c)
            working = f"the {'threshold' if q else 'trigger'} input's level as a plane over the copies"
        meaning = f"the latch flips with {said} {sign} this; {self._held(q, held)}"
        return self.constant(key, test.limit, meaning, working, self._moved_by(values))


def _dynamics(mode: Mode) -> tuple[Floats, Floats]:
    """Return A (U, m, m) and b (U, m) of ``dx/dt = A x + b`` for all units."""
    A = -(mode.S * mode.rate[:, None, :]) @ mode.Sinv
    return A, (mode.S @ mode.drive[..., None])[..., 0]
