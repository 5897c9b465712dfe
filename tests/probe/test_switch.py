"""The switch-level evaluator: contests by strength, charge, unknown gates, races by speed."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import NetlistError
from charflow.probe.conduction import HIGH, LOW, UNKNOWN
from charflow.probe.switch import Switches
from charflow.probe.transistors import read_network
from charflow.sheet.lines import logical_lines

SUPPLIES = (["vdd"], ["vss"])


def _network(text, subckt=None):  # type: ignore[no-untyped-def]
    return read_network(logical_lines(text, Path("cell.spice")), subckt)


def _switches(cell, *inputs):  # type: ignore[no-untyped-def]
    return Switches(_network(cell.text), *SUPPLIES, inputs)


def _level(switches, state, node):  # type: ignore[no-untyped-def]
    return state[switches.index[node]]


@pytest.mark.parametrize("a", [LOW, HIGH])
@pytest.mark.parametrize("b", [LOW, HIGH])
def test_a_nand_gate_is_a_nand_gate(gates, a: int, b: int) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A B Y")
    cell.nand("Y", "A", "B")
    switches = _switches(cell, "a", "b")
    state = switches.settle(switches.blank([a, b]))
    assert _level(switches, state, "y") == (LOW if a and b else HIGH)


def test_an_unknown_gate_that_does_not_matter_is_ignored(gates) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A Y")
    cell.nand("Y", "A", "lost")
    cell.inv("other", "lost")
    switches = _switches(cell, "a")
    low = switches.settle(switches.blank([LOW]))
    high = switches.settle(switches.blank([HIGH]))
    assert (_level(switches, low, "y"), _level(switches, high, "y")) == (HIGH, UNKNOWN)


@pytest.mark.parametrize(("width", "level"), [(4.0, LOW), (0.1, HIGH), (0.8, UNKNOWN)])
def test_a_contest_goes_to_the_wider_device(gates, width: float, level: int) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A Y")
    cell.p("Y", "VSS", "VDD", 2.0)
    cell.n("Y", "A", "VSS", width)
    cell.inv("Y", "Z")
    switches = _switches(cell, "a")
    assert _level(switches, switches.settle(switches.blank([HIGH])), "y") == level


def test_a_node_that_nothing_drives_keeps_its_charge_and_is_named(gates) -> None:  # type: ignore[no-untyped-def]
    cell = gates("D G Y")
    cell.n("held", "G", "D")
    cell.inv("held", "Y")
    switches = _switches(cell, "d", "g")
    written = switches.settle(switches.blank([HIGH, HIGH]))
    shut = switches.settle(written, {switches.index["g"]: LOW})
    after = switches.settle(shut, {switches.index["d"]: LOW})
    assert _level(switches, after, "held") == HIGH
    assert switches.floating(written) == frozenset()
    assert switches.floating(after) == {switches.index["held"]}


def test_shared_charge_goes_to_the_larger_node(gates) -> None:  # type: ignore[no-untyped-def]
    cell = gates("A B G Y")
    cell.n("large", "A", "VDD")
    cell.n("small", "B", "VSS")
    cell.n("large", "G", "small", 0.1)
    cell.inv("large", "Y", width=20.0)
    switches = _switches(cell, "a", "b", "g")
    index = switches.index
    state = switches.settle(switches.blank([HIGH, HIGH, LOW]))
    state = switches.settle(switches.settle(state, {index["a"]: LOW}), {index["b"]: LOW})
    assert (_level(switches, state, "large"), _level(switches, state, "small")) == (HIGH, LOW)
    joined = switches.settle(state, {index["g"]: HIGH})
    assert (_level(switches, joined, "large"), _level(switches, joined, "small")) == (HIGH, HIGH)


def test_a_ring_of_inverters_ends_unknown_and_in_time(gates) -> None:  # type: ignore[no-untyped-def]
    cell = gates("EN Y")
    cell.nand("Y", "EN", "c")
    cell.inv("Y", "b")
    cell.inv("b", "c")
    switches = _switches(cell, "en")
    stopped = switches.settle(switches.blank([LOW]))
    assert _level(switches, stopped, "y") == HIGH
    ringing = switches.settle(stopped, {switches.index["en"]: HIGH})
    assert _level(switches, ringing, "y") == UNKNOWN


def test_fingers_and_copies_add_up() -> None:
    fingers = _network(
        ".subckt c A Y VDD VSS\nM1 Y A VSS VSS nmos w=1u l=0.1u\nM2 VSS A Y VSS nmos w=2u l=0.1u\n"
        "M3 Y A VDD VDD pmos w=1u l=0.1u m=3\n.ends\n"
    )
    assert sorted((device.n, device.width) for device in fingers.transistors) == [
        (False, pytest.approx(3e-6)),
        (True, pytest.approx(3e-6)),
    ]


def test_a_hierarchy_is_flattened_with_its_parameters() -> None:
    text = (
        ".subckt inv a y vdd vss params: wn=1u\nM1 y a vss vss my_nch w=wn l=0.1u\n"
        "M2 y a vdd vdd my_pch w='2u' l=0.1u\n.ends\n"
        ".subckt top A Y VDD VSS\nX1 A mid VDD VSS inv wn=3u\nX2 mid Y VDD VSS inv\n.ends\n"
    )
    network = _network(text, "top")
    widths = {(d.gate, d.n): d.width for d in network.transistors}
    assert widths[("a", True)] == pytest.approx(3e-6)
    assert widths[("mid", True)] == pytest.approx(1e-6)
    assert network.unsized == 0


def test_resistors_are_wire() -> None:
    text = (
        ".subckt c A Y VDD VSS\nR1 A a1 10\nR2 a1 a2 20\nM1 Y a2 VSS VSS nmos w=1u l=1u\n"
        "M2 Y a1 VDD VDD pmos w=1u l=1u\n.ends\n"
    )
    assert {device.gate for device in _network(text).transistors} == {"a"}


def test_a_scaled_size_is_taken_as_micrometres() -> None:
    text = ".subckt c A Y VDD VSS\nX1 Y A VSS VSS any_pdk__nfet_01v8 w=420000u l=150000u\n.ends\n"
    (device,) = _network(text).transistors
    assert (device.width, device.length) == (pytest.approx(0.42e-6), pytest.approx(0.15e-6))


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ("M1 Y A VSS VSS thing w=1u l=1u", "n-channel or a p-channel"),
        ("M1 Y A VSS nmos w=1u", "a transistor has 4"),
        ("L1 A Y 1n", "not a transistor"),
        ("C1 A Y 1f", "no transistor"),
        ("X1 A Y VDD VSS c", "nested deeper"),
        (".subckt i a b c\nM1 a b c c nmos\n.ends\nX1 A Y i", "2 nodes to 'i', which has 3"),
    ],
)
def test_what_is_no_transistor_netlist_is_refused(body: str, words: str) -> None:
    with pytest.raises(NetlistError, match=words):
        _network(f".subckt c A Y VDD VSS\n{body}\n.ends\n", "c")


def test_a_model_line_tells_the_polarity_that_a_name_does_not() -> None:
    text = ".subckt c A Y VDD VSS\nM1 Y A VSS VSS thing w=1u l=1u\n.ends\n.model thing pmos level=54\n"
    assert not _network(text).transistors[0].n


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(st.booleans(), *(st.sampled_from(["A", "B", "x", "y", "z", "VDD", "VSS"]),) * 3),
        min_size=1,
        max_size=12,
    ),
    st.lists(st.tuples(st.sampled_from(["a", "b"]), st.sampled_from([LOW, HIGH])), max_size=6),
)
def test_any_network_settles_and_what_has_settled_stays(devices, moves) -> None:  # type: ignore[no-untyped-def]
    lines = [
        f"M{at} {d} {g} {s} {'VSS' if n else 'VDD'} {'nmos' if n else 'pmos'} w=1u l=1u"
        for at, (n, d, g, s) in enumerate(devices)
    ]
    network = _network("\n".join([".subckt c A B x VDD VSS", *lines, ".ends", ""]))
    switches = Switches(network, *SUPPLIES, ("a", "b"))
    state = switches.settle(switches.blank([LOW, LOW]))
    for node, level in moves:
        state = switches.settle(state, {switches.index[node]: level})
    if UNKNOWN not in state:
        assert switches.settle(state) == state
