"""Every wrong port that is not equivalent to the right one fails its suite."""

from dataclasses import replace

import numpy as np
import pytest
from vector_ports import behaviour, charge, latch, three_buttons, toggle, toggle_and_clear

from porter.port.step import run
from porter.vectors import build_vectors, mutants, score, sharpen
from porter.vectors.mutants import equivalent, fails, tell_apart


@pytest.mark.parametrize(
    "port",
    [
        latch(),
        latch((3, 1), (2, 2)),
        toggle(),
        toggle(1, 1, (4, 6), (0, 2), (2, 1)),
        toggle_and_clear(),
        three_buttons(),
    ],
    ids=["latch", "filtered_latch", "toggle", "quick_toggle", "toggle_and_clear", "three_buttons"],
)
def test_every_wrong_count_port_is_caught(port):
    result = score(port, build_vectors(behaviour(port.buttons), port))
    assert result.survivors == () == result.undecided
    assert len(result.killed) >= 10
    assert len(result.killed) + len(result.equivalent) == len(list(mutants(port)))


def test_a_thin_suite_lets_wrong_ports_pass():
    suite = build_vectors(behaviour(latch().buttons), latch())
    thin = replace(suite, cases=suite.cases[:1])
    assert score(latch(), thin).survivors


def test_the_right_port_passes_its_suite():
    for port in (latch(), toggle(), charge()):
        assert not fails(port, build_vectors(behaviour(port.buttons), port))


def test_equivalence_is_decided_by_walking_all_pairs():
    assert equivalent(toggle(), toggle()) is True
    assert equivalent(toggle(), toggle(tap=(11, 10))) is False
    assert equivalent(charge(), charge(), most=10) is None


def test_coarse_faults_of_a_charge_port_are_caught():
    port = charge()
    suite = build_vectors(behaviour(port.buttons), port)
    coarse = [
        m for m in mutants(port) if any(word in m.what for word in ("ge", "left out", "jumps", "start_q"))
    ]
    passed = [m.what for m in coarse if not fails(m.port, suite) and equivalent(port, m.port) is False]
    assert passed == []


def test_a_telling_sequence_is_one():
    right, wrong = toggle(), toggle(hold=(6, 4))
    decided, word = tell_apart(right, wrong)
    assert decided
    said = [run(p, np.array([word]))[0].tolist() for p in (right, wrong)]
    assert said[0][:-1] == said[1][:-1]
    assert said[0][-1] != said[1][-1]


@pytest.mark.system  # long
def test_sharpening_catches_faults_of_one_step_in_65536():
    port = charge()
    suite = build_vectors(behaviour(port.buttons), port)
    sharp = sharpen(port, suite, most_pairs=1 << 14)
    assert sharp.cases[: len(suite.cases)] == suite.cases
    before, after = score(port, suite), score(port, sharp)
    assert set(before.killed) < set(after.killed)
    assert sum(len(c.held) + len(c.expected) for c in sharp.cases) <= 4000
    assert not fails(port, sharp)
