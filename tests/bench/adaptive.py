"""The circuit's flow by scipy's adaptive integrator, with porter's own modes and decisions.

Everything but the flow and its crossings is shared: the modes' matrices are handed over, so the
comparison is of ``exp`` and located zeros against stepping, not of two ways to solve a network.
"""

import numpy as np
from scipy.integrate import solve_ivp

from porter.circuit.engine import Engine, Lanes
from porter.circuit.network import Mode

#: Held masks from a time on: ``((time_s, held), ...)``, the first at 0.
Presses = tuple[tuple[float, int], ...]


def exact(engine: Engine, presses: Presses, end_s: float, lanes: Lanes) -> np.ndarray:
    """Run lanes through the presses by porter's flow.

    Returns:
        The capacitor states just before each change and at the end, shape (changes, B, m).
    """
    lanes, seen = lanes.copy(), []
    for (at, held), until in zip(presses, [*(t for t, _ in presses[1:]), end_s], strict=True):
        engine.press(lanes, held)
        engine.run(lanes, until - at)
        seen.append(lanes.x.copy())
    return np.array(seen)


def adaptive(
    engine: Engine, presses: Presses, end_s: float, lanes: Lanes, method: str, rtol: float
) -> np.ndarray:
    """Run one lane through the presses by ``solve_ivp``; returns as `exact`."""
    lanes, seen = lanes.copy(), []
    for (at, held), until in zip(presses, [*(t for t, _ in presses[1:]), end_s], strict=True):
        engine.press(lanes, held)
        _stretch(engine, lanes, until - at, method, rtol)
        seen.append(lanes.x.copy())
    return np.array(seen)


def _stretch(engine: Engine, lanes: Lanes, left: float, method: str, rtol: float) -> None:
    while left > 0:
        mode = engine.mode(int(lanes.q[0]), int(lanes.held[0]), int(lanes.conducts[0]))
        took, guard = _leg(mode, lanes, left, method, rtol)
        left -= took
        lanes.crossed[:] = guard
        if guard >= 3:
            lanes.conducts[0] ^= 1 << guard - 3
        if guard >= 0:
            engine.resolve(lanes)


def _leg(mode: Mode, lanes: Lanes, left: float, method: str, rtol: float) -> tuple[float, int]:
    """Integrate to the next event; returns the time it took and the guard met (-1: none)."""
    A = -(mode.S[0] * mode.rate[0]) @ mode.Sinv[0]
    b = mode.S[0] @ mode.drive[0]
    rows, const = mode.Gz[0] @ mode.Sinv[0], mode.g0[0]
    start = lanes.x[0].copy()
    watched = [g for g in range(len(const)) if np.abs(rows[g]).max() > 0 and g != lanes.crossed[0]]

    def event(g: int):  # type: ignore[no-untyped-def]
        side = np.sign(rows[g] @ start + const[g]) or 1.0
        found = lambda _, x: side * (rows[g] @ x + const[g])  # noqa: E731
        found.terminal, found.direction = True, -1
        return found

    done = solve_ivp(
        lambda _, x: A @ x + b,
        (0.0, left),
        start,
        method=method,
        rtol=rtol,
        atol=1e-12,
        events=[event(g) for g in watched],
        **({"jac": A} if method in ("Radau", "BDF") else {}),
    )
    lanes.x[0] = done.y[:, -1]
    met = [watched[k] for k, times in enumerate(done.t_events) if len(times)]
    return float(done.t[-1]), met[0] if met else -1
