"""A counterexample can be saved, replayed by `porter trace`, and seen in the report."""

import re
import subprocess
import sys

import pytest
from wrong_ports import right

from porter.job import build_job
from porter.spec.read import read_text


@pytest.fixture(scope="module")
def fan(tmp_path_factory):
    """A toggle with an off button that is forced into counters, which can't say what a short hold leaves."""
    text = right("bench_fan").circuit.source.replace("style: charge", "style: count")
    spec = tmp_path_factory.mktemp("fan") / "bench_fan.yaml"
    spec.write_text(text)
    return spec


def porter_says(*args: object) -> subprocess.CompletedProcess[str]:
    """Call porter as people do."""
    command = [sys.executable, "-m", "porter", *map(str, args)]
    return subprocess.run(command, capture_output=True, check=False, encoding="utf-8")


def test_prove_saves_it_and_trace_replays_it(fan):
    """The saved file, replayed from power-on, shows circuit and port apart."""
    saved = fan.with_name("case.csv")
    proved = porter_says("prove", fan, "--save", saved)
    assert proved.returncode == 1
    assert "differs" in proved.stdout
    assert (
        "The port differs for longer than a tick"
        in porter_says("trace", fan, saved, "--start", "power-on").stdout
    )


@pytest.mark.long  # a whole job
def test_the_report_charts_it(fan):
    """The job's report has one timing chart more, with the counterexample's title."""
    job = build_job(read_text(fan.read_text(), "bench_fan.yaml"))
    assert job.parity.verdict == "differs"
    assert not job.passed
    assert len(re.findall("<[^>]*>Counterexample: a press sequence", job.files["report.html"])) >= 1


@pytest.mark.long
def test_no_counterexample_no_chart():
    """A port that is the same gets no such chart."""
    assert "Counterexample: a press" not in build_job(right("kiln_vent").circuit).files["report.html"]
