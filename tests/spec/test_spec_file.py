"""Reading whole files: what comes out, what is refused, and that nothing ever crashes."""

import dataclasses
import json
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from porter.findings import SpecError
from porter.render import render_findings, render_summary
from porter.spec.model import Circuit, Leak, Spread
from porter.spec.read import TOP_KEYS, identifier, read, read_text
from porter.spec.rules import RULES
from porter.spec.tree import MAX_BYTES

SPECS = sorted((Path(__file__).parents[2] / "specs").glob("*.yaml"))

LATCH = """\
circuit: Rabbit hutch lamp
supply: 9 V ±10%
timer:
  family: cmos
  pins: {trigger: set, threshold: gnd, reset: clear, output: out}
parts:
  R1: {resistor: 22k ±5%, between: [vcc, set]}
  R2: {resistor: 22k ±5%, between: [vcc, clear]}
  R3: {resistor: 3k3 ±5%, between: [out, lamp]}
  D1: {led: 2.0 V, between: [lamp, gnd]}
buttons:
  ON: {between: [set, gnd]}
  OFF: {between: [clear, gnd], bounce: 5 ms}
"""


def rules(text: str) -> list[str]:
    """Return the rules of the errors in *text*, in order of position."""
    with pytest.raises(SpecError) as caught:
        read_text(text, "hutch.yaml")
    return [finding.rule for finding in caught.value.findings if finding.severity == "error"]


def latch(*more: str) -> Circuit:
    """Return the latch with lines added at its end."""
    return read_text(LATCH + "\n".join(more) + "\n", "hutch.yaml")


def test_a_spec_becomes_a_circuit() -> None:
    """Values in SI, names in the order of the spec, defaults filled in."""
    circuit = latch()

    assert (circuit.name, circuit.title, circuit.file) == ("hutch", "Rabbit hutch lamp", "hutch.yaml")
    assert Spread(9.0, 8.1, 9.9) == circuit.supply
    assert [part.name for part in circuit.parts] == ["R1", "R2", "R3", "D1"]
    assert tuple(button.name for button in circuit.buttons) == ("ON", "OFF")
    assert circuit.nodes == ("set", "clear", "out", "lamp")
    assert dict(circuit.timer.pins) == {
        "trigger": "set",
        "threshold": "gnd",
        "reset": "clear",
        "output": "out",
    }
    assert circuit.warnings == ()


def test_defaults() -> None:
    """What a spec leaves out has the value that the contract names."""
    circuit = latch()

    assert Spread.exact(0.1) == circuit.buttons[0].resistance
    assert (
        circuit.buttons[0].normally,
        circuit.buttons[0].bounce_s,
        circuit.buttons[1].bounce_s,
    ) == ("open", None, 0.005)
    assert Spread.exact(10.0) == circuit.parts[3].slope
    assert [(o.name, o.kind, o.target) for o in circuit.outputs] == [("out", "high", "out")]
    port = circuit.port
    assert (Spread.exact(5.0), None, 0.10, "auto", None, 0.010) == (
        port.supply, port.tick_s, port.clock, port.style, port.power_on, port.pin_drive_a,
    )  # fmt: skip


def test_the_port_takes_the_circuits_supply_where_it_can() -> None:
    """Up to 5.5 V the controller shares the supply, with its tolerance."""
    low = read_text(LATCH.replace("9 V ±10%", "5 V ±5%"), "hutch.yaml")

    assert Spread(5.0, 4.75, 5.25) == low.port.supply


@pytest.mark.parametrize(
    "name", ["ON", "OFF", "NO", "YES", "Y", "N", "on", "off", "yes", "no", "null_", "E1", "_1"]
)
def test_words_that_yaml_would_guess_are_names(name: str) -> None:
    """Only true and false are booleans."""
    circuit = read_text(LATCH.replace("  ON:", "  FIRST:").replace("  OFF:", f"  {name}:"), "hutch.yaml")

    assert name == circuit.buttons[1].name


def test_nodes_keep_their_text() -> None:
    """A node called 010 or 1e3 isn't the node 8 or 1000."""
    circuit = read_text(LATCH.replace("lamp]", "010]").replace("[lamp", "[010"), "hutch.yaml")

    assert "010" in circuit.nodes


def test_true_is_a_boolean_and_on_is_not() -> None:
    """`coil` takes true and false only."""
    load = "  K1: {load: 390 ohm, between: [out, gnd], coil: WORD}\nbuttons:"
    circuit = read_text(LATCH.replace("buttons:", load.replace("WORD", "true")), "hutch.yaml")

    assert circuit.parts[-1].relay
    assert rules(LATCH.replace("buttons:", load.replace("WORD", "on"))) == ["choice-unknown"]


def test_loads_and_leaks_are_currents_or_resistances() -> None:
    """The unit decides."""
    more = (
        "  Z1: {load: 20 mA ±10%, between: [vcc, out]}\n  Z2: {load: 1k, between: [vcc, out]}\n"
        "  C1: {capacitor: 1u, between: [out, gnd], leak: 2 uA}\n"
        "  C2: {capacitor: 1u, between: [out, gnd], leak: 10M}\n"
    )
    parts = {
        part.name: part
        for part in read_text(LATCH.replace("buttons:", more + "buttons:"), "hutch.yaml").parts
    }

    assert parts["Z1"].current is not None and parts["Z1"].current.nominal == 0.02
    assert (parts["Z2"].current, parts["Z2"].value.nominal) == (None, 1000.0)
    assert Leak(Spread.exact(2e-6), None) == parts["C1"].leak
    assert Leak(None, Spread.exact(1e7)) == parts["C2"].leak


def test_positions_point_at_the_value() -> None:
    """Line, column and length are those of the text, counted from one."""
    circuit = latch()
    place = circuit.parts[2].position

    assert (place.file, place.line, place.column, place.length) == ("hutch.yaml", 9, 18, 7)
    assert LATCH.splitlines()[place.line - 1][place.column - 1 :][: place.length] == "3k3 ±5%"
    assert {"parts.R3", "parts.R3.resistor", "parts.R3.between.1", "timer.pins.output", "supply"} <= set(
        circuit.positions
    )


def test_all_errors_come_in_one_run_and_in_order() -> None:
    """Eight mistakes, eight findings, sorted by position."""
    text = (
        LATCH.replace("9 V", "9 W").replace("cmos", "mosc").replace("22k", "-22k").replace("2.0 V", "x")
        + "outpus: {}\n"
    )

    found = rules(text)

    expected = ["unit-mismatch", "choice-unknown", "value-out-of-range", "value-out-of-range"]
    assert found == [*expected, "value-unreadable", "key-unknown"]


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    """No file, a folder, and a name that no system takes: the same clear error."""
    for path in (tmp_path / "none.yaml", tmp_path, Path("a\0b.yaml")):
        with pytest.raises(SpecError) as caught:
            read(path)
        assert caught.value.findings[0].rule == "file-unreadable"
        assert str(path) == caught.value.findings[0].position.file


def test_an_enormous_file(tmp_path: Path) -> None:
    """The limit is exact; the reader doesn't even parse what is beyond."""
    path = tmp_path / "big.yaml"
    path.write_text(LATCH + "#" * (MAX_BYTES - len(LATCH.encode())), encoding="utf-8")
    assert read(path).title == "Rabbit hutch lamp"
    path.write_text(LATCH + "#" * (MAX_BYTES - len(LATCH.encode()) + 1), encoding="utf-8")
    with pytest.raises(SpecError) as caught:
        read(path)
    assert [finding.rule for finding in caught.value.findings] == ["file-too-large"]


def test_byte_order_marks_and_line_ends_change_nothing(tmp_path: Path) -> None:
    """A file saved on another system gives the same circuit and places."""
    path = tmp_path / "hutch.yaml"
    path.write_bytes(b"\xef\xbb\xbf" + LATCH.replace("\n", "\r\n").encode())
    there, here = read(path), read_text(LATCH, str(path))

    assert dataclasses.replace(there, source="") == dataclasses.replace(here, source="")


def test_deep_nesting_and_expanding_aliases_are_refused() -> None:
    """Neither recursion nor memory is spent on them."""
    assert rules("circuit: " + "[" * 50_000) == ["nested-too-deep"]
    assert rules("circuit: " + "{a: " * 20_000) == ["nested-too-deep"]
    bomb = "a: &a [x, x]\n" + "".join(
        f"{n}: &{n} [*{m}, *{m}, *{m}]\n" for m, n in zip("abcdefgh", "bcdefghi", strict=True)
    )
    assert "alias-refused" in rules(bomb)


@pytest.mark.parametrize(
    ("stem", "name"),
    [
        ("lamp_latch", "lamp_latch"),
        ("Glue lamp-2", "Glue_lamp_2"),
        ("4you", "spec_4you"),
        ("grüße", "grue"),
        ("漢字", "spec"),
        ("int", "int_port"),
        ("class", "class_port"),
        ("string", "string_port"),
        ("main", "main_port"),
    ],
)
def test_the_name_is_an_identifier(stem: str, name: str) -> None:
    """Names that C, Python or the job folder use already are changed."""
    assert name == identifier(stem)


def test_outputs_may_carry_a_hazard() -> None:
    """Buttons as well."""
    circuit = read_text(
        LATCH.replace("bounce: 5 ms", "hazard: stop") + "outputs: {mat: {lit: D1, hazard: heater}}\n",
        "h.yaml",
    )

    assert (circuit.outputs[0].hazard, circuit.buttons[1].hazard) == ("heater", "stop")


def test_acceptances_keep_what_was_accepted() -> None:
    """Row, reason and the ledger's texts."""
    circuit = latch(
        'accept: [{row: re-arm-after-tap, because: "slow hands", circuit: "36 ms", port: "35 ms"}]'
    )
    line = circuit.accept[0]

    assert (
        line.row,
        line.because,
        line.circuit,
        line.port,
    ) == ("re-arm-after-tap", "slow hands", "36 ms", "35 ms")


@pytest.mark.parametrize("path", SPECS, ids=lambda p: p.stem)
def test_shipped_specs_read_without_a_word(path: Path) -> None:
    """No findings, no warnings, the name is the stem, and decoupling is fitted."""
    circuit = read(path)

    assert circuit.warnings == ()
    assert path.stem == circuit.name
    assert any(p.kind == "capacitor" and set(p.nodes) == {"vcc", "gnd"} for p in circuit.parts)


# --- nothing crashes ------------------------------------------------------------------------


def survives(text: str) -> None:
    """Read *text*: a circuit, or findings that can be shown, with known rules and true places."""
    try:
        read_text(text, "fuzz.yaml")
    except SpecError as error:
        assert error.findings
        for finding in error.findings:
            assert finding.rule in RULES
            assert finding.message and finding.mend
            assert (
                finding.position.line >= 1 and finding.position.column >= 1 and finding.position.length >= 1
            )
        assert list(error.findings) == sorted(error.findings, key=lambda f: f.position)
        shown = render_findings(error.findings, error.source, color=True)
        shown.encode("utf-8", "surrogatepass")
        assert render_summary(error.findings)


@given(st.text(max_size=200))
def test_any_text_is_a_circuit_or_findings(text: str) -> None:
    """Never another exception."""
    survives(text)


WORDS = [
    *("", " ", "null", "true", "~", "[]", "{}", "[a, b]", "{a: b}", "*x", "&x y", "!t z", "-", "- a", "? a"),
    *(
        "|",
        ">",
        "'",
        '"',
        "#",
        ":",
        ",",
        "\t",
        "\n",
        "0",
        "-1",
        "1e-6",
        "NO",
        "±5%",
        "\\",
        "%YAML 1.2",
        "---",
    ),
    *(
        "...",
        "<<",
        "\u2028",
        "\x85",
        "\ufeff",
        "\x00",
        "é",
        "999999999999999999999",
        "1 Meg",
        "vcc",
        "gnd",
        "out",
    ),
]


@st.composite
def mutated(draw: st.DrawFn) -> str:
    """Return a good spec in which some words were replaced or lines lost."""
    text = draw(st.sampled_from([LATCH, SPECS[0].read_text("utf-8"), SPECS[5].read_text("utf-8")]))
    for _ in range(draw(st.integers(1, 4))):
        start = draw(st.integers(0, len(text)))
        length = draw(st.sampled_from([0, 1, 2, 5, 20, 80]))
        text = text[:start] + draw(st.sampled_from(WORDS)) + text[start + length :]
    return text


@settings(max_examples=300, suppress_health_check=[HealthCheck.too_slow], deadline=None)
@given(mutated())
def test_a_damaged_spec_is_a_circuit_or_findings(text: str) -> None:
    """Never another exception, whatever was typed over it."""
    survives(text)


KEYS = [
    *(
        "circuit",
        "supply",
        "timer",
        "parts",
        "buttons",
        "outputs",
        "intent",
        "port",
        "accept",
        "family",
        "pins",
    ),
    *(
        "values",
        "between",
        "resistor",
        "led",
        "load",
        "held",
        "release",
        "power_on",
        "output",
        "nominal",
        "least",
    ),
    *("row", "because", "tick", "lit", "high", "hazard", "R1", "SET", "trigger_ratio", "coil", "leak"),
]
scalars = st.sampled_from(WORDS) | st.text("abkRu0123456789.±%", max_size=6)
trees = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.sampled_from(KEYS), inner, max_size=6),
    max_leaves=25,
)


@settings(max_examples=200, suppress_health_check=[HealthCheck.too_slow], deadline=None)
@given(st.dictionaries(st.sampled_from(TOP_KEYS), trees))
def test_any_tree_of_known_keys_is_a_circuit_or_findings(tree: dict[str, object]) -> None:
    """Right keys in wrong places."""
    survives(json.dumps(tree))  # JSON is YAML's flow style
