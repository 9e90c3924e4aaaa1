"""Planning: the tick's series, the choice of style, and where each constant came from."""

import dataclasses
from collections.abc import Iterator
from functools import cache

import pytest
from hypothesis import given
from hypothesis import strategies as st

import porter
from porter.behaviour.model import Band, Behaviour, HeldRow, PowerOn, Window
from porter.circuit.engine import Engine
from porter.circuit.family import figures
from porter.circuit.values import columns
from porter.port.memory import memory
from porter.port.model import U16, Charge, Count, Port
from porter.port.plan import choose_tick, plan, series_below
from porter.resources import folder, resource
from porter.spec.model import Circuit, Spread

SHIPPED = sorted(p.name.removesuffix(".yaml") for p in folder("specs").iterdir())
SOUND = [name for name in SHIPPED if not name.startswith("faulty_")]
SERIES = sorted(float(f"{step}e{decade}") for decade in range(-9, 4) for step in (1, 2, 5))


@cache
def _read(name: str) -> Circuit:
    return porter.read(str(resource(f"specs/{name}.yaml")))


def _behaviour(*windows: Window) -> Behaviour:
    """A behaviour of which the plan needs little: both outputs last, and these windows."""
    rows = tuple(HeldRow((), level, level, None) for level in ("low", "high"))
    empty = ((),) * 3
    return Behaviour(
        "by hand", ("GO",), "sound", rows, (), "", (), PowerOn("undetermined", ""), windows, *empty
    )  # type: ignore[arg-type]


def _window(nominal: float, least: float, most: float) -> Window:
    band = Band(nominal, least, most)
    return Window("GO", "low", "re-arm-after-tap", band, band)


def _free_tick(name: str = "aquarium_light") -> Circuit:
    circuit = _read(name)
    return dataclasses.replace(circuit, port=dataclasses.replace(circuit.port, tick_s=None))


@given(st.floats(-8, 2).map(lambda e: 10.0**e))
def test_series_below_is_the_next_of_the_series(limit: float) -> None:
    tick = series_below(limit)
    assert tick in SERIES
    assert tick <= limit * (1 + 1e-9)
    assert all(other <= tick or other > limit for other in SERIES)


@pytest.mark.parametrize("tick", [t for t in SERIES if 1e-8 < t < 100])
def test_a_member_of_the_series_is_its_own_tick(tick: float) -> None:
    """Rounding must not push 0.002 down to 0.001."""
    assert series_below(tick) == tick


@given(st.floats(1e-4, 10), st.floats(0.01, 0.5))
def test_the_tick_is_a_tenth_of_the_narrowest_spread(nominal: float, part: float) -> None:
    spread = nominal * part
    wide = _window(10 * nominal, 9 * nominal, 11 * nominal)
    narrow = _window(nominal, nominal - spread / 2, nominal + spread / 2)
    tick, why = choose_tick(_free_tick(), _behaviour(wide, narrow))
    assert tick in SERIES
    assert 50e-6 <= tick <= 20e-3
    assert tick <= spread / 10 * (1 + 1e-6) or tick == 50e-6
    assert "1-2-5" in why


def test_the_tick_of_the_spec_is_kept() -> None:
    circuit = _read("aquarium_light")
    tick, why = choose_tick(circuit, _behaviour(_window(1.0, 0.999, 1.001)))
    assert tick == circuit.port.tick_s == 2e-3
    assert "fixed by the spec" in why


@pytest.mark.parametrize(
    ("found", "wish", "start_q"),
    [
        ("low", None, 0),
        ("high", None, 1),
        ("high", "low", 0),
        ("undetermined", "high", 1),
        ("undetermined", None, 0),
    ],
)
def test_the_start_is_the_circuits_own_unless_the_spec_asks(
    found: str, wish: str | None, start_q: int
) -> None:
    circuit = _read("aquarium_light")
    circuit = dataclasses.replace(circuit, port=dataclasses.replace(circuit.port, power_on=wish))
    derived = dataclasses.replace(_derived("aquarium_light"), power_on=PowerOn(found, ""))
    assert plan(circuit, derived).start_q == start_q


def _flat(spread: Spread) -> Spread:
    return Spread(spread.nominal, spread.nominal, spread.nominal)


@cache
def _derived(name: str) -> Behaviour:
    """What the nominal unit does: with nothing toleranced, `derive` has one unit to measure."""
    circuit = _read(name)
    published = {key: _flat(value) for key, value in figures(circuit.timer, circuit.supply.nominal).items()}
    exact = dataclasses.replace(
        circuit,
        supply=_flat(circuit.supply),
        timer=dataclasses.replace(circuit.timer, values=published),
        parts=tuple(dataclasses.replace(part, value=_flat(part.value)) for part in circuit.parts),
        buttons=tuple(dataclasses.replace(b, resistance=_flat(b.resistance)) for b in circuit.buttons),
    )
    return porter.derive(exact)


@cache
def _planned(name: str) -> Port:
    return plan(_read(name), _derived(name))


@pytest.mark.parametrize("name", SOUND)
def test_a_port_carries_what_the_circuit_remembers(name: str) -> None:
    """No capacitor that matters: a table; else a copy of each that does, within sixteen bits."""
    mem = memory(Engine(_read(name)))
    machine = _planned(name).machine
    if not mem.kept:
        assert isinstance(machine, Count)
        return
    assert isinstance(machine, Charge)
    assert len(machine.start) == len(mem.kept)
    for mode in (mode for row in machine.modes for mode in row):
        assert all(0 <= move.end <= U16 for move in mode.moves)


@pytest.mark.parametrize("name", SOUND)
def test_every_constant_names_lines_of_its_spec(name: str) -> None:
    """Each has a meaning and a working, a key of its own, and lines that hold a value."""
    circuit, constants = _read(name), _planned(name).constants
    lines = circuit.source.splitlines()
    assert len({c.key for c in constants}) == len(constants)
    for constant in constants:
        assert constant.meaning
        assert constant.working
        for source in filter(None, constant.source.split(", ")):
            file, _, line = source.partition(":")
            assert file == circuit.file
            assert ":" in lines[int(line) - 1], f"{constant.key}: line {line} holds no value"


def _nudged(circuit: Circuit) -> Iterator[tuple[int, Circuit]]:
    """The circuit with one part's value up by a fifth, and the line that says it."""
    for part in circuit.parts:
        value = Spread(*(1.2 * getattr(part.value, key) for key in ("nominal", "least", "most")))
        parts = tuple(dataclasses.replace(p, value=value) if p is part else p for p in circuit.parts)
        yield part.position.line, dataclasses.replace(circuit, parts=parts)


@pytest.mark.parametrize("name", ["aquarium_light", "map_lamp"])
def test_a_constant_that_a_part_moves_names_its_line(name: str) -> None:
    """Change one part and plan again: whatever changes by more than rounding had named the part's line."""
    circuit, before = _read(name), {c.key: c for c in _planned(name).constants}
    moved = 0
    for line, other in _nudged(circuit):
        for constant in plan(other, _derived(name)).constants:
            old = before.get(constant.key)
            if old is not None and abs(constant.value - old.value) > 2 + 1e-3 * abs(old.value):
                moved += 1
                assert f"{circuit.file}:{line}" in old.source.split(", "), (constant.key, line)
    assert moved > 5


def test_all_columns_have_lines() -> None:
    """The planner finds a line for every value that a circuit has, published figures included."""
    from porter.port.plan import spec_lines

    circuit = _read("map_lamp")
    for name in columns(circuit).names:
        assert spec_lines(circuit, [name]).startswith("map_lamp.yaml:")
