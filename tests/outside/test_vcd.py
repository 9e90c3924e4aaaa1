"""The value change dump (IEEE 1364), read by `vcdvcd` (PyPI), which shares no code with the writer."""

import pytest
from vcdvcd import VCDVCD

from porter.vectors import Case, Suite, write_vcd


def suite(tick_s: float = 0.002) -> Suite:
    """Return three cases of two buttons and an output, one of them long."""
    cases = (
        Case("idle", "Nothing.", ((5, 0),), ((5, 0),)),
        Case("both", "Both.", ((1, 1), (2, 3), (1, 2)), ((2, 1), (2, 0))),
        Case("stuck", "Stuck.", ((70_000, 2), (3, 0)), ((1, 0), (70_002, 1))),
    )
    return Suite("lamp_latch", "Lamp latch", ("SET", "CLEAR"), ("lamp",), tick_s, cases)


def at_each_tick(runs: tuple[tuple[int, int], ...], bit: int) -> list[str]:
    return [str(value >> bit & 1) for ticks, value in runs for _ in range(ticks)]


def test_every_tick_of_every_case_reads_back():
    dump = VCDVCD(vcd_string=write_vcd(suite()))
    signal = {name.rsplit(".", 1)[1]: dump[name] for name in dump.signals}
    stride = round(0.002 / float(dump.timescale["timescale"]))
    tick = 0
    for i, case in enumerate(suite().cases):
        assert (signal["power_on"][tick * stride], signal["lamp"][tick * stride]) == ("1", "x")
        for name, runs, bit in (("SET", case.held, 0), ("CLEAR", case.held, 1), ("lamp", case.expected, 0)):
            assert signal[name][tick * stride] in "0x"
            said = [
                signal[name][(tick + 1 + t) * stride]
                for t in sorted({0, 1, 2, case.ticks - 2, case.ticks - 1})
            ]
            full = at_each_tick(runs, bit)
            assert said == [full[t] for t in sorted({0, 1, 2, case.ticks - 2, case.ticks - 1})]
        assert int(signal["case"][(tick + 1) * stride], 2) == i
        tick += 1 + case.ticks
    assert dump.endtime == tick * stride
    assert signal["power_on"][tick * stride] == "1"


def test_changes_are_neither_lost_nor_added():
    dump = VCDVCD(vcd_string=write_vcd(suite()))
    clear = next(dump[name] for name in dump.signals if name.endswith("CLEAR"))
    # power-on is at ticks 0, 6 and 11; CLEAR goes down at 8, up at power-on, down at 12 for 70 000 ticks
    assert [(t // 2, v) for t, v in clear.tv] == [(0, "0"), (8, "1"), (11, "0"), (12, "1"), (70_012, "0")]


@pytest.mark.parametrize(
    ("tick_s", "unit_s"),
    [(0.001, 1e-3), (0.002, 1e-3), (5e-5, 1e-6), (390.625e-6, 1e-9), (1.0, 1.0), (1 / 30, 1e-12)],
)
def test_the_time_unit_is_one_that_the_standard_allows_and_exact(tick_s, unit_s):
    """IEEE 1364: 1, 10 or 100 of s, ms, us, ns, ps or fs."""
    dump = VCDVCD(vcd_string=write_vcd(suite(tick_s)))
    assert float(dump.timescale["timescale"]) == pytest.approx(unit_s)
    lamp = next(dump[name] for name in dump.signals if name.endswith("lamp"))
    assert lamp.tv[1][0] * unit_s == pytest.approx(tick_s, rel=1e-9)


def test_no_date_and_the_same_bytes():
    assert "$date" not in write_vcd(suite())
    assert write_vcd(suite()) == write_vcd(suite())
