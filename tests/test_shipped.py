"""Every shipped spec comes out as the comment at its top says."""

from functools import cache

import numpy as np
import pytest

import porter
from porter.behaviour.model import Behaviour
from porter.port.model import Port
from porter.port.step import run
from porter.resources import folder
from porter.spec.model import Circuit


@cache
def circuit(name: str) -> Circuit:
    return porter.read(folder("specs") / f"{name}.yaml")


@cache
def behaviour(name: str) -> Behaviour:
    return porter.derive(circuit(name))


@cache
def port(name: str) -> Port:
    return porter.plan(circuit(name), behaviour(name))


def edges(name: str, schedule: list[tuple[float, tuple[str, ...]]], end_s: float) -> int:
    """Count the timer output's edges after the start, from rest with the output low."""
    return len(porter.simulate(circuit(name), schedule, end_s, start="settled", output="low").edges) - 1


def port_edges(name: str, schedule: list[tuple[float, tuple[str, ...]]], end_s: float) -> int:
    """Count the port's output edges for the same presses."""
    planned = port(name)
    at = np.array([t for t, _ in schedule])
    masks = np.array([sum(1 << planned.buttons.index(b) for b in held) for _, held in schedule])
    ticks = np.arange(int(end_s / planned.tick_s)) * planned.tick_s
    out = run(planned, masks[np.searchsorted(at, ticks + 1e-9, side="right") - 1][None, :])
    return int((np.diff(out[0].astype(int)) != 0).sum())


def pressing(button: str, count: int, every_s: float, press_s: float = 0.06) -> tuple[list, float]:
    """Presses of one button at a steady pace, and when they are over."""
    schedule: list[tuple[float, tuple[str, ...]]] = [(0.0, ())]
    for k in range(count):
        begin = 1.0 + k * every_s
        schedule += [(begin, (button,)), (begin + press_s, ())]
    return schedule, 1.0 + count * every_s + 2.0


@pytest.mark.parametrize(
    ("name", "dominance", "both"),
    [("kiln_vent", "reset-dominant", "low"), ("plant_mister", "set-dominant", "high")],
)
def test_two_buttons(name: str, dominance: str, both: str) -> None:
    """Both held: the dominant one's level; whichever is released last decides."""
    found = behaviour(name)
    sets, resets = found.buttons
    assert found.dominance == dominance
    assert [(r.output) for r in found.priority] == [both]
    assert {r.order[-1]: r.output for r in found.releases} == {sets: "high", resets: "low"}


def test_a_toggle_acts_once_however_long_it_is_held() -> None:
    for hold_s in (0.01, 0.3, 5.0, 600.0):
        schedule = [(0.0, ()), (1.0, ("LIGHT",)), (1.0 + hold_s, ())]
        assert edges("aquarium_light", schedule, 3.0 + hold_s) == 1


def test_a_toggle_re_arms_only_after_its_memory_has_recovered() -> None:
    window = next(
        w for w in behaviour("aquarium_light").windows if (w.start, w.window) == ("high", "re-arm-after-hold")
    )
    assert window.seconds.nominal is not None
    for factor, count in ((0.98, 1), (1.02, 2)):
        gap = factor * window.seconds.nominal
        schedule = [(0.0, ()), (1.0, ("LIGHT",)), (4.0, ()), (4.0 + gap, ("LIGHT",)), (5.0, ())]
        assert edges("aquarium_light", schedule, 7.0) == count


@pytest.mark.parametrize("count_edges", [edges, port_edges])
def test_the_slow_button_misses_quick_pressing(count_edges) -> None:
    """Quick pressing is followed by the first and missed by the ten times slower one, which follows slow pressing."""
    quick, quick_end = pressing("LIGHT", 6, 0.4)
    slow, slow_end = pressing("LIGHT", 6, 4.0)
    assert count_edges("aquarium_light", quick, quick_end) == 6
    assert count_edges("aquarium_light_slow", quick, quick_end) < 6
    assert count_edges("aquarium_light_slow", slow, slow_end) == 6


@pytest.mark.parametrize("fan", ["low", "high"])
@pytest.mark.parametrize("held_s", [0.05, 2.0])
def test_the_off_button_only_turns_off(fan: str, held_s: float) -> None:
    """From either state, and whatever the toggle button does meanwhile."""
    for at in np.linspace(0.95, 1.0 + held_s, 5):
        schedule = sorted(
            [
                (0.0, ()),
                (1.0, ("QUIET",)),
                (float(at), ("FAN", "QUIET")),
                (1.0 + held_s + 0.1, ("QUIET",)),
                (8.0, ()),
            ]
        )
        seen = porter.simulate(circuit("bench_fan"), schedule, 9.0, start="settled", output=fan).edges
        assert seen[-1][1] == 0
        assert all(level == 0 for t, level in seen if t >= 1.0)


def test_one_lamp_is_lit_in_each_state() -> None:
    low, high = (set(row) for row in port("door_sign").answer)
    assert low | high == {0b01, 0b10} and not low & high


def test_the_low_level_means_on() -> None:
    low, high = (set(row) for row in port("cellar_pump").answer)
    assert low == {1} and high == {0}


def test_the_memory_can_be_read_off_the_report() -> None:
    from porter.charts import standard_traces

    trace = standard_traces(circuit("map_lamp"), behaviour("map_lamp"), port("map_lamp"))[0]
    assert {name for name, _ in trace.levels} == {"trigger level", "threshold level"}
    waves = {w.name: w.volts for w in trace.waves}
    levels = dict(trace.levels)
    assert min(waves["memory"]) < levels["trigger level"] < levels["threshold level"] < max(waves["memory"])
    assert waves["inputs"][0] == pytest.approx(6.0, abs=0.1)


@pytest.mark.parametrize(
    ("name", "rule"),
    [
        ("faulty_floating_threshold", "floating-input"),
        ("faulty_bare_led", "led-without-resistor"),
        ("faulty_strong_feedback", "feedback-too-strong"),
        ("faulty_uneven_divider", "divider-uneven"),
        ("faulty_loaded_output", "high-level-too-low"),
    ],
)
def test_faulty_drawings(name: str, rule: str) -> None:
    found = behaviour(name)
    assert found.verdict == "faulty"
    assert rule in {f.rule for f in found.findings if f.severity == "error"}


SOUND = sorted(
    p.name[:-5] for p in folder("specs").iterdir() if p.name.endswith(".yaml") and "faulty" not in p.name
)


@pytest.mark.parametrize("name", SOUND)
def test_sound_specs(name: str) -> None:
    assert behaviour(name).verdict == "sound"
    assert not [f for f in behaviour(name).findings if f.severity == "error"]
