"""`porter trace`: press sequences in every form, and what circuit and port do with them."""

import contextlib
import csv
import io
import json
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from test_cli import LAMP, SIGN, Call, call  # noqa: F401  # the fixture

import porter
from porter.behaviour.derive import derive
from porter.findings import PorterError
from porter.port.model import Port
from porter.port.plan import plan
from porter.show import lanes, play
from porter.spec.model import Circuit
from porter.spec.read import read
from porter.trace import Trace


@pytest.fixture(scope="module")
def sign() -> tuple[Circuit, Port]:
    circuit = read(SIGN)
    return circuit, plan(circuit, derive(circuit))


def written(tmp_path: Path, *lines: str) -> Path:
    path = tmp_path / "presses.csv"
    path.write_text("\n".join(lines) + "\n")
    return path


def test_json_begins_with_the_start_and_has_each_change(call: Call, tmp_path: Path) -> None:  # noqa: F811
    lines = ("0.1,ENTER,press", "0.2,ENTER,release", "0.3,WAIT,press", "0.3,ENTER,press", "0.4,WAIT,release")
    ended = call("trace", SIGN, written(tmp_path, "time_s,button,action", *lines), "--json")
    assert (ended.status, ended.err) == (0, "")
    # WAIT wins while both are held; ENTER, still held, acts again once WAIT is let go
    changes = [[0.0, "low"], [0.1, "high"], [0.3, "low"], [0.4, "high"]]
    assert {"circuit": changes, "port": changes} == json.loads(ended.out)


def test_the_port_acts_at_the_tick_and_misses_what_falls_between_two(
    call: Call,  # noqa: F811
    tmp_path: Path,
) -> None:
    lines = ("0.0011,ENTER,press", "0.0012,ENTER,release", "0.0105,WAIT,press", "0.0405,WAIT,release")
    path = written(tmp_path, "time_s,button,action", *lines)
    said = json.loads(call("trace", SIGN, path, "--json", "--start", "low").out)
    assert said["circuit"] == [[0.0, "low"], [0.0011, "high"], [0.0105, "low"]]
    assert said["port"] == [[0.0, "low"]]
    said = json.loads(call("trace", SIGN, path, "--json", "--start", "high").out)
    assert said["circuit"] == [[0.0, "high"], [0.0105, "low"]]
    assert said["port"] == [[0.0, "high"], [0.011, "low"]]


def test_a_press_at_time_0_shows_the_start_first(call: Call, tmp_path: Path) -> None:  # noqa: F811
    path = written(tmp_path, "time_s,button,action", "0,ENTER,press")
    said = json.loads(call("trace", SIGN, path, "--json").out)
    assert [[0.0, "low"], [0.0, "high"]] == said["circuit"] == said["port"]


def test_the_run_ends_one_second_after_the_last_change(call: Call, tmp_path: Path) -> None:  # noqa: F811
    path = written(tmp_path, "time_s,button,action", "0.1,ENTER,press", "0.4,ENTER,release")
    assert axis(call("trace", SIGN, path).out).endswith(" 1.4 s")
    assert axis(call("trace", SIGN, path, "--until", "250ms").out).endswith(" 250 ms")


def axis(out: str) -> str:
    """Return the line with the times under the lanes."""
    return next(line for line in out.splitlines() if line.lstrip().startswith("0 s "))


def test_every_form_of_input_says_the_same(call: Call, tmp_path: Path) -> None:  # noqa: F811
    actions = written(tmp_path, "time_s,button,action", "0.1,ENTER,press", "0.15,ENTER,release")
    one = call("trace", SIGN, actions, "--json").out
    levels = written(tmp_path, "\ufefftime_s, WAIT, ENTER\r", "0.1,0,1\r", "", "150e-3,0,0\r")
    assert one == call("trace", SIGN, levels, "--json").out
    assert one == call("trace", SIGN, "--press", "ENTER@0.1+50ms", "--json").out


def test_a_case_of_the_vectors_is_answered_as_expected(call: Call, tmp_path: Path) -> None:  # noqa: F811
    path = tmp_path / "vectors.csv"
    text = call("vectors", SIGN, "--format", "csv").out
    path.write_bytes(text.encode())
    rows = [r for r in csv.reader(io.StringIO(text, newline="")) if r[0] == "low_ENTER_tap"]
    expected = [(int(r[1]), int(r[4])) for r in rows]
    ended = call("trace", SIGN, path, "--case", "low_ENTER_tap", "--csv")
    port = {
        float(r["time_s"]): int(r["port come_in"]) for r in csv.DictReader(io.StringIO(ended.out, newline=""))
    }
    for tick, bit in expected:
        before = max(t for t in port if t <= tick * 1e-3 + 1e-9)
        assert bit == port[before]


def test_a_case_must_be_picked(call: Call, tmp_path: Path) -> None:  # noqa: F811
    path = tmp_path / "vectors.csv"
    path.write_text(call("vectors", SIGN, "--format", "csv").out)
    ended = call("trace", SIGN, path)
    assert ended.status == 2
    assert "--case NAME" in ended.err


def test_csv_has_every_button_and_output_of_both(call: Call) -> None:  # noqa: F811
    ended = call("trace", SIGN, "--press", "ENTER@0.1+0.1", "--csv")
    rows = list(csv.DictReader(io.StringIO(ended.out, newline="")))
    assert [row["circuit come_in"] for row in rows] == ["0", "1", "1"]
    assert [row["ENTER"] for row in rows] == ["0", "1", "0"]
    assert [row["time_s"] for row in rows] == ["0.0", "0.1", "0.2"]


def test_for_people_lanes_and_edges(call: Call) -> None:  # noqa: F811
    ended = call("trace", LAMP, "--press", "LIGHT@0.1+0.05", "--press", "LIGHT@0.5+1", "--until", "2")
    assert "lamp, circuit _____|▔" in ended.out
    assert "lamp     active   0.100000 s   0.100000 s   0 s" in ended.out
    assert "The port's edges fall together with the circuit's." in ended.out
    assert max(map(len, ended.out.splitlines())) <= 120


@pytest.mark.parametrize(
    ("lines", "said"),
    [
        (["when,what"], ":1:1: error: the header is none that is known"),
        (
            ["time_s,button,action", "0.1,ENTR,press"],
            ":2:1: error: there is no button `ENTR`: there are ENTER, WAIT",
        ),
        (["time_s,button,action", "0.1,ENTER,push"], ":2:1: error: `push` is no action"),
        (["time_s,button,action", "-1,ENTER,press"], ":2:1: error: `-1` is not a time"),
        (["time_s,button,action", "nan,ENTER,press"], "`nan` is not a time"),
        (["time_s,button,action", "0.1,ENTER"], ":2:1: error: 2 cells where 3 belong"),
        (["time_s,ENTER", "0.2,1", "0.1,0"], ":3:1: error: its time is not after"),
        (["time_s,ENTER", "0.2,yes"], ":2:1: error: `yes` is neither 0 nor 1"),
        (["case,tick,WAIT,ENTER,purpose"], "the columns are not this spec's buttons"),
        ([], "the header is none that is known"),
    ],
)
def test_an_unusable_file_is_2_at_its_line(
    call: Call,  # noqa: F811
    tmp_path: Path,
    lines: list[str],
    said: str,
) -> None:
    ended = call("trace", SIGN, written(tmp_path, *lines))
    assert (ended.status, ended.out) == (2, "")
    assert said in ended.err


def test_every_problem_of_a_file_is_named_at_once(call: Call, tmp_path: Path) -> None:  # noqa: F811
    path = written(tmp_path, "time_s,button,action", "x,ENTER,press", "0.1,ENTR,press", "0.2,WAIT,pres")
    assert call("trace", SIGN, path).err.count(": error: ") == 3


@pytest.mark.parametrize(
    ("args", "said"),
    [
        (["--press", "ENTER"], "write NAME@AT+LENGTH"),
        (["--press", "BELL@1"], "there is no button `BELL`"),
        (["--press", "ENTER@1h"], "`1h` is not a time"),
        (["--press", "ENTER@1", "--until", "soon"], "--until: `soon` is not a time"),
        (["--press", "ENTER@1", "--until", "0"], "must be longer than 0"),
        (["--press", "ENTER@1e9"], "at most"),
        (["no_such.csv"], "can't read `no_such.csv`"),
    ],
)
def test_unusable_words_are_2(call: Call, args: list[str], said: str) -> None:  # noqa: F811
    ended = call("trace", SIGN, *args)
    assert (ended.status, ended.out) == (2, "")
    assert said in ended.err


def test_a_start_that_does_not_last_is_2(call: Call) -> None:  # noqa: F811
    # a one-shot rests low only
    soap = str(Path(SIGN).with_name("soap_dose.yaml"))
    circuit = porter.read(soap)
    ended = call("trace", soap, "--press", f"{circuit.buttons[0].name}@0.1+0.1", "--start", "high")
    assert ended.status == 2
    assert "doesn't stay high" in ended.err


held_sets = st.sets(st.sampled_from(["ENTER", "WAIT"])).map(lambda s: tuple(sorted(s)))


@settings(max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    sets=st.lists(held_sets, min_size=1, max_size=8),
    gaps=st.lists(st.integers(1, 300), min_size=8, max_size=8),
)
def test_a_saved_counterexample_reads_back(
    sign: tuple[Circuit, Port],
    tmp_path_factory: pytest.TempPathFactory,
    sets: list[tuple[str, ...]],
    gaps: list[int],
) -> None:
    circuit, port = sign
    ticks = [sum(gaps[:k]) for k in range(len(sets))]
    changes = tuple(zip(ticks, sets, strict=True))
    path = tmp_path_factory.mktemp("saved") / "case.csv"
    play.save_changes(changes, port, path)
    tape = play.read_file(str(path), circuit, port, None)
    tick = Fraction(repr(port.tick_s))
    expected = {at * tick: set(held) for at, held in changes}
    got = {at: set(held) for at, held in tape.changes}
    now: set[str] = set()
    for at, held in expected.items():
        now = got.get(at, now)
        assert held == now
    with pytest.raises(PorterError, match="not written over"):
        play.save_changes(changes, port, path)


@given(st.fractions(0, 1000, max_denominator=10**6))
def test_times_are_read_exactly(value: Fraction) -> None:
    micros = value * 10**6
    text = f"{micros.numerator // micros.denominator}"
    assert Fraction(int(text), 10**6) == play.seconds_of(f"{text} us") == play.seconds_of(f"{text}e-6")


@settings(max_examples=100)
@given(
    head=st.sampled_from(["", "time_s,button,action\n", "time_s,ENTER\n", "case,tick,ENTER,WAIT,purpose\n"]),
    text=st.text(alphabet='time_s,butonacrple01EWAITNR.\n\r" ', max_size=80),
)
def test_no_text_crashes_the_reader(
    sign: tuple[Circuit, Port], tmp_path_factory: pytest.TempPathFactory, head: str, text: str
) -> None:
    path = tmp_path_factory.getbasetemp() / "any.csv"
    path.write_text(head + text)
    with contextlib.suppress(PorterError):
        tape = play.read_file(str(path), *sign, None)
        assert [at for at, _ in tape.changes] == sorted({at for at, _ in tape.changes})


def test_edges_pair_up_by_direction_and_nearness() -> None:
    ours = ((0.0, 0), (1.0, 1), (2.0, 0), (5.0, 1))
    theirs = ((0.0, 0), (1.001, 1), (2.001, 0), (3.0, 1), (3.1, 0))
    found = lanes.edges(Trace("t", 9.0, {}, {"lamp": ours}, {"lamp": theirs}, ours), 0.001)
    assert [(e.circuit_s, e.port_s) for e in found] == [
        (1.0, 1.001),
        (2.0, 2.001),
        (None, 3.0),
        (None, 3.1),
        (5.0, None),
    ]


@given(
    st.lists(st.floats(0.001, 9.999), max_size=20, unique=True),
    st.integers(60, 200),
)
def test_a_lane_shows_every_level_and_fits(times: list[float], width: int) -> None:
    changes = tuple((at, k & 1) for k, at in enumerate([0.0, *sorted(times)]))
    lines = lanes.chart(Trace("t", 10.0, {"B": changes}, {"lamp": changes}, None, changes), width)
    assert all(len(line) <= width for line in lines)
    lane = lines[0].removeprefix("            B ")
    assert bool(times) == ("|" in lane)
