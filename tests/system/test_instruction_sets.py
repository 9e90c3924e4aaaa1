"""Every vector on every processor: emitted cores, compiled and run, against the reference tick by tick."""

import numpy as np
import pytest
from backends.targets import BACKENDS, HOSTS, PDK14, Avr, Backend, CortexM0, Host, MicroPython, RiscV
from backends.work import ASK, INIT, KEPT, Work, first_difference, outputs, rests, without_rest, work
from circuits import ALL, planned

from porter.port.model import Port
from porter.vectors.drive import drive
from porter.vectors.model import Case, Suite

pytestmark = pytest.mark.system

#: Those without a multiplication.
SMALL = ("two_button", "forced_count", "charge_shift")
every_backend = pytest.mark.parametrize("backend", BACKENDS, ids=lambda b: b.name)


@pytest.fixture(scope="session")
def jobs(specs, tmp_path_factory):
    """The work of a kind of circuit: whole; without long rests; and what this machine says to the latter."""
    ready: dict[str, tuple[Work, Work, bytes]] = {}

    def job(kind: str) -> tuple[Work, Work, bytes]:
        if kind not in ready:
            whole = work(*planned(kind, specs))
            answers = HOSTS[0].run(whole, tmp_path_factory.mktemp(kind))
            assert first_difference(whole, answers) is None
            short = without_rest(whole, answers)
            ready[kind] = whole, short, HOSTS[0].run(short, tmp_path_factory.mktemp(kind))
        return ready[kind]

    return job


@pytest.mark.parametrize("kind", ALL)
@every_backend
def test_all_vectors(backend: Backend, kind: str, jobs, tmp_path):
    """Each case of the suite gives the reference's outputs at every tick, and idle the same as on this machine."""
    if backend is PDK14 and kind not in SMALL:
        pytest.skip("more RAM than the part has; runs on its larger sister")
    whole, short, here = jobs(kind)
    # What runs fast takes the long rests too.
    asked = whole if isinstance(backend, Host | Avr | CortexM0 | RiscV | MicroPython) else short
    answers = backend.run(asked, tmp_path)
    assert first_difference(asked, answers) is None
    if asked is short:
        assert rests(asked, answers).tolist() == rests(asked, here).tolist()


def _long(port: Port, stretch: int) -> Suite:
    """Return one case of presses and pauses that last *stretch* ticks and a little, with a tap between."""
    most = port.held_count - 1
    held = ((3, 0), (50, most), (stretch, 0), (9, 1), (stretch + 1, most), (stretch + 2, 0), (60, 1), (60, 0))
    answers, _ = drive(port, [held])
    case = Case("long", f"Presses and pauses of {stretch} ticks.", held, answers[0])
    return Suite(port.name, port.title, port.buttons, port.outputs, port.tick_s, (case,))


@pytest.mark.parametrize("kind", ["two_button", "forced_count"])
@every_backend
def test_counts_of_16_bits_wrap(backend: Backend, kind: str, specs, tmp_path):
    """A press and a pause longer than a 16-bit count of ticks change nothing that shouldn't."""
    port, _ = planned(kind, specs)
    whole = work(port, _long(port, 65_536))
    plain = np.where(whole.stimulus == INIT, INIT, whole.stimulus & (ASK - 1)).astype(np.uint8)
    asked = Work(port, whole.texts, plain, whole.expected)
    assert first_difference(asked, backend.run(asked, tmp_path)) is None


@pytest.mark.parametrize("kind", ["two_button", "forced_count", "charge_multiply"])
def test_counts_of_32_bits_wrap(kind: str, specs, tmp_path):
    """The same for a pause longer than a 32-bit count of ticks: seven weeks of milliseconds."""
    port, _ = planned(kind, specs)
    case = _long(port, 70_000).cases[0]
    held = (*case.held, (2**32 + 1, 0), *case.held[1:])
    answers, _ = drive(port, [held])
    assert HOSTS[1].run_long(work(port, _long(port, 9)), tmp_path, held) == answers[0]


# --- the harness itself ---


def test_a_short_answer_is_a_difference(specs):
    """An emulator that ends early doesn't pass."""
    port, suite = planned("charge_shift", specs)
    asked = work(port, suite)
    assert "answers to" in str(first_difference(asked, asked.expected[:-1].tobytes()))


def test_a_wrong_answer_is_named_with_its_case(specs):
    """The first difference says where it is."""
    port, suite = planned("charge_shift", specs)
    asked = work(port, suite)
    wrong = asked.expected.copy()
    at = 1 + suite.cases[0].ticks + 1 + 7  # two marks, and seven ticks into the second case
    wrong[at] ^= 1
    wrong[at + 9] ^= 1
    held = asked.stimulus[at] & (ASK - 1)
    said = f"shift_charge: case 1, tick 7, held {held}: expected {asked.expected[at]}, got {wrong[at]}"
    assert first_difference(asked, wrong.tobytes()) == said


@pytest.mark.parametrize("backend", [HOSTS[0], Avr()], ids=lambda b: b.name)
def test_a_wrong_core_is_found(backend: Backend, specs, tmp_path):
    """A core whose threshold is a hundredth off fails on the vectors."""
    port, suite = planned("charge_multiply", specs)
    asked = work(port, suite)
    limit = str(port.machine.modes[0][1].flips[0].limit)
    core = asked.texts[f"{port.name}.c"].replace(f" {limit}u", f" {int(limit) * 99 // 100}u")
    assert core != asked.texts[f"{port.name}.c"]
    broken = Work(port, {**asked.texts, f"{port.name}.c": core}, asked.stimulus, asked.expected)
    assert first_difference(asked, backend.run(broken, tmp_path)) is not None


def test_only_rest_is_left_out(jobs):
    """Cutting rests keeps every case and every change of the outputs, and more than 8 bits of each rest."""
    whole, short, _ = jobs("two_button")
    changes = [np.flatnonzero(np.diff(outputs(w.expected).astype(int))).size for w in (whole, short)]
    cases = [np.count_nonzero(w.stimulus == INIT) for w in (whole, short)]
    assert changes[0] == changes[1] and cases[0] == cases[1]
    assert KEPT > 256 and len(short.stimulus) < len(whole.stimulus)
