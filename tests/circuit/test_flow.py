"""Exact flow: crossings against a root finder of scipy, and a run split anywhere."""

from functools import cache

import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

import porter
from porter.circuit.engine import Engine
from porter.circuit.flow import first_fall, reach
from porter.resources import resource

#: Rates from a contact of 100 ns to a memory of 100 s, and a charge that nothing drains.
RATES = st.one_of(st.just(0.0), st.floats(-2, 7).map(lambda e: 10.0**e))
TERMS = st.lists(st.tuples(st.floats(-1, 1), RATES), min_size=1, max_size=4)


def _value(f0: float, d: np.ndarray, rate: np.ndarray, t: float) -> float:
    return float(f0 + (d * reach(rate, np.full(len(d), t))).sum())


@given(st.floats(0.001, 1), TERMS, st.floats(-6, 3))
@settings(max_examples=150)
def test_first_fall_is_the_first_one_and_a_zero(f0: float, terms, span: float) -> None:
    """No point of a fine grid lies below zero before it, and scipy's root finder finds it too."""
    until, rate = 10.0**span, np.array([r for _, r in terms])
    # Sizes are of the swing within the run, so that every term matters whatever its rate.
    d = np.array([c for c, _ in terms]) / np.maximum(reach(rate, np.full(len(rate), until)), 1e-30)
    size = f0 + np.abs([c for c, _ in terms]).sum()
    found = float(first_fall(np.array([f0]), d[None, :], rate[None, :], np.array([until]))[0])
    grid = np.concatenate([[0.0], np.geomspace(until * 1e-12, until, 2000)])
    values = f0 + (d[:, None] * reach(rate[:, None], grid[None, :])).sum(axis=0)
    assert (values[grid < found] > -1e-12 * size).all()
    if np.isfinite(found):
        assert 0 < found <= until
        assert abs(_value(f0, d, rate, found)) <= 1e-11 * size
    below = np.flatnonzero(values < -1e-9 * size)
    if len(below):
        assert found <= grid[below[0]]
        start, end = grid[below[0] - 1], grid[below[0]]
        assume(values[below[0] - 1] > 1e-9 * size and start <= found)
        root = brentq(lambda t: _value(f0, d, rate, t), start, end, xtol=1e-300, rtol=1e-14)
        slope = abs(float((d * np.exp(-rate * root)).sum())) * root / size
        assume(slope > 1e-6)  # where it hardly falls, the time is as soft as the rounding
        assert abs(found - root) <= 1e-8 * root


def test_a_graze_is_no_fall() -> None:
    """``h - 4 (e^-t - e^-2t)`` has its least value, ``h - 1``, at ln 2: above zero it never falls."""
    rate, d = np.array([[1.0, 2.0]]), np.array([[4.0, -8.0]])  # the slopes at 0 of its two terms

    def fall(height: float) -> float:
        return float(first_fall(np.array([height]), d, rate, np.array([np.inf]))[0])

    assert fall(1 + 1e-9) == np.inf
    t = fall(1 - 1e-6)
    assert 0 < t < np.log(2)
    assert np.isclose(4 * (np.exp(-t) - np.exp(-2 * t)), 1 - 1e-6, rtol=1e-12)


@given(st.floats(-3, 6).map(lambda e: 10.0**e), st.floats(-9, 2).map(lambda e: 10.0**e))
def test_reach_is_the_integral_of_a_decay(rate: float, t: float) -> None:
    """Its slope is the decay, and with no decay it is the time itself."""
    value = float(reach(np.array([rate]), np.array([t]))[0])
    assert np.isclose(value, -np.expm1(-rate * t) / rate, rtol=1e-14)
    assert float(reach(np.array([0.0]), np.array([t]))[0]) == t
    assert float(reach(np.array([rate]), np.array([np.inf]))[0]) == 1 / rate


@cache
def _engine(name: str) -> Engine:
    return Engine(porter.read(str(resource(f"specs/{name}.yaml"))))


@given(
    st.sampled_from(["aquarium_light", "map_lamp", "plant_mister"]),
    st.lists(st.tuples(st.booleans(), st.floats(1e-4, 0.8)), min_size=1, max_size=4),
    st.floats(0.0, 1.0),
)
@settings(max_examples=40)
def test_a_run_split_anywhere_ends_in_the_same_state(name: str, presses, share: float) -> None:
    """Running for s and then for the rest is the same as running through, flips and all."""
    engine = _engine(name)
    whole, split = engine.empty(0), engine.empty(0)
    every = (1 << len(engine.circuit.buttons)) - 1
    for down, length in presses:
        for lanes, pieces in ((whole, [length]), (split, [share * length, (1 - share) * length])):
            engine.press(lanes, every * down)
            for piece in pieces:
                engine.run(lanes, piece)
    assert (whole.q == split.q).all()
    assert np.allclose(whole.x, split.x, rtol=0, atol=1e-9)
