"""Reading SPICE text: what a line is, what a subckt is, and what a user is told when it is wrong."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import CharflowError, NetlistError
from charflow.sheet.netlist import (
    Line,
    assignments,
    check_ports,
    find_subckt,
    logical_lines,
    loose_elements,
    positional,
    read_subckts,
    read_text,
    render,
)

HERE = Path("cell.spice")

INVERTER = """\
* an inverter
.subckt INV A Y VDD VSS PARAMS: w=1u l = 0.15u
M1 Y A VSS VSS nch w={w} l={l}
M2 Y A VDD VDD pch w='2*w' l={l}
.ends INV
"""


def texts(source: str, **options: bool) -> list[str]:
    return [line.text for line in logical_lines(source, HERE, **options)]


class TestLogicalLines:
    def test_joins_continuations_across_comments_and_blank_lines(self) -> None:
        assert texts("R1 a 0\n* between\n\n+ 10k\n  + tc1=0\n") == ["R1 a 0 10k tc1=0"]

    def test_joins_after_two_backslashes_as_ngspice_does(self) -> None:
        assert texts("R1 a 0 \\\\\n11k\nR2 a 0 1\n") == ["R1 a 0 11k", "R2 a 0 1"]

    def test_two_backslashes_never_survive_at_the_end_of_a_line(self) -> None:
        assert texts("R1 a 0 1k\\\\\\\\\n\\\\\nR2 a 0 1\\\\") == ["R1 a 0 1k R2 a 0 1"]

    @pytest.mark.parametrize(
        ("source", "expected"),
        [
            ("R1 a 0 1k;c", "R1 a 0 1k"),
            ("R1 a 0 1k ; c", "R1 a 0 1k"),
            ("R1 a 0 1k $ c", "R1 a 0 1k"),
            ("R1 a 0 1k $c", "R1 a 0 1k"),
            ("R1 a 0 1k,$ c", "R1 a 0 1k,"),
            ("R1 a 0 1k\t$ c", "R1 a 0 1k"),
            ("R1 a$ 0 1k", "R1 a$ 0 1k"),
            ("R1 a 0 1k // c", "R1 a 0 1k"),
            ("R1 a 0 1k// c", "R1 a 0 1k"),
            ('.include "/a//b"', '.include "/a//b"'),
            ("  R1\ta \t0   1k  \r", "R1 a 0 1k"),
        ],
    )
    def test_cuts_comments_as_ngspice_39_does(self, source: str, expected: str) -> None:
        assert texts(source) == [expected]

    @pytest.mark.parametrize("comment", ["* x", "  * x", "; x", "$ x", "// x", "*# shell x", "\r"])
    def test_drops_lines_that_are_only_comment(self, comment: str) -> None:
        assert texts(f"R1 a 0 1\n{comment}\nR2 a 0 1") == ["R1 a 0 1", "R2 a 0 1"]

    def test_keeps_a_dollar_in_ps_compatibility(self) -> None:
        assert texts("R1 a 0 $x", dollar_comments=False) == ["R1 a 0 $x"]

    def test_counts_the_first_physical_line(self) -> None:
        lines = logical_lines("* c\n\nR1 a\n+ 0 1\nR2 a 0 1\n", HERE)
        assert [line.number for line in lines] == [3, 5]
        assert lines[1].place == "cell.spice:5"

    def test_keeps_case_and_quoted_spaces(self) -> None:
        assert texts('.include "My  File"') == ['.include "My  File"']

    def test_refuses_a_continuation_of_nothing(self) -> None:
        with pytest.raises(NetlistError, match=r"cell\.spice:2: a continuation line"):
            logical_lines("* c\n+ R1\n", HERE)

    @pytest.mark.parametrize("character", ["\u00b5", "\u00a0", "\x0b", "\u2028", "\r", "\x1b"])
    def test_refuses_foreign_characters_outside_comments(self, character: str) -> None:
        with pytest.raises(NetlistError, match=r"cell\.spice:1: the character"):
            logical_lines(f"R1 a{character}b 0 1k", HERE)
        assert texts(f"R1 a 0 1 ; {character}") == ["R1 a 0 1"]

    def test_refuses_a_line_without_end(self) -> None:
        with pytest.raises(NetlistError, match="characters with its continuations"):
            logical_lines("R1 " + "a" * 1_000_001, HERE)


class TestRender:
    def test_gives_back_what_was_read(self) -> None:
        lines = logical_lines(INVERTER, HERE)
        assert texts(render(lines)) == [line.text for line in lines]

    def test_wraps_long_lines_without_changing_them(self) -> None:
        text = ".param " + " ".join(f"a{number}={number}" for number in range(3000))
        wrapped = render([Line(text, HERE, 1)])
        assert max(map(len, wrapped.splitlines())) <= 2002
        assert texts(wrapped) == [text]

    def test_never_wraps_inside_double_quotes(self) -> None:
        text = 'R1 a 0 "' + "x " * 1500 + '"'
        assert texts(render([Line(text, HERE, 1)])) == [text]


class TestReadText:
    def test_reads_latin_1_comments(self, tmp_path: Path) -> None:
        file = tmp_path / "a.spice"
        file.write_bytes(b"* 5 \xb5m\nR1 a 0 1\n")
        assert texts(read_text(file)) == ["R1 a 0 1"]

    def test_names_near_files_when_one_is_missing(self, tmp_path: Path) -> None:
        (tmp_path / "dff.spice").write_text("x")
        with pytest.raises(NetlistError, match=r"no such file\n.*dff\.spice"):
            read_text(tmp_path / "dff.spic")

    @pytest.mark.parametrize("junk", [b"\x1f\x8b\x08\x00", b"R1 a 0 1\n\x00", "R1 a 0 1".encode("utf-16")])
    def test_refuses_what_is_not_text(self, tmp_path: Path, junk: bytes) -> None:
        file = tmp_path / "a.spice.gz"
        file.write_bytes(junk)
        with pytest.raises(NetlistError, match="not text: byte 0x"):
            read_text(file)

    def test_refuses_folders_pipes_and_impossible_names(self, tmp_path: Path) -> None:
        os.mkfifo(tmp_path / "pipe")
        for path, message in [
            (tmp_path, "folder"),
            (tmp_path / "pipe", "not an ordinary file"),
            (Path("/dev/zero"), "not an ordinary file"),
            (tmp_path / "a\0b", "cannot be read"),
            (tmp_path / ("n" * 5000), "cannot be read"),
        ]:
            with pytest.raises(NetlistError, match=message):
                read_text(path)

    def test_refuses_absurd_sizes_without_reading_them(self, tmp_path: Path) -> None:
        file = tmp_path / "big.spice"
        with file.open("wb") as handle:
            handle.truncate(200 * 1024 * 1024)
        with pytest.raises(NetlistError, match="210 MB; at most 67 MB"):
            read_text(file)

    def test_takes_a_dos_end_of_file(self, tmp_path: Path) -> None:
        file = tmp_path / "dos.spice"
        file.write_bytes(b"\xef\xbb\xbfR1 a 0 1\r\n\x1a")
        assert texts(read_text(file)) == ["R1 a 0 1"]


class TestSubckts:
    def test_reads_ports_and_defaults(self) -> None:
        subckt = find_subckt(logical_lines(INVERTER, HERE))
        assert subckt.name == "INV"
        assert subckt.ports == ("A", "Y", "VDD", "VSS")
        assert subckt.parameters == (("w", "1u"), ("l", "0.15u"))
        assert [line.number for line in subckt.body] == [3, 4]
        assert subckt.place == "cell.spice:2"

    @pytest.mark.parametrize(
        "head",
        [
            ".subckt s (a b) w=1 l='2 * 3'",
            ".SUBCKT s a b w = 1 l = '2 * 3'",
            ".macro s a b params: w=1 l='2 * 3'",
        ],
    )
    def test_reads_every_form_of_the_head(self, head: str) -> None:
        subckt = find_subckt(logical_lines(f"{head}\n.ends\n", HERE))
        assert (subckt.ports, subckt.parameters) == (("a", "b"), (("w", "1"), ("l", "'2 * 3'")))

    def test_keeps_nested_subckts_in_the_body(self) -> None:
        source = ".subckt o a\n.subckt i b\nR1 b 0 1\n.ends\nX1 a i\n.ends\n"
        found = read_subckts(logical_lines(source, HERE))
        assert list(found) == ["o"]
        assert len(found["o"].body) == 4

    def test_names_both_places_of_a_double_definition(self) -> None:
        source = ".subckt s a\n.ends\n.SUBCKT S b\n.ends\n"
        with pytest.raises(NetlistError, match=r"cell\.spice:3: .*'S' is defined twice.*cell\.spice:1"):
            read_subckts(logical_lines(source, HERE))

    @pytest.mark.parametrize(
        ("source", "message"),
        [
            (".subckt s a\nR1 a 0 1\n", "cell.spice:1: the subckt that starts here has no .ends"),
            ("R1 a 0 1\n.ends\n", "cell.spice:2: an .ends without"),
            (".subckt\n.ends\n", "cell.spice:1: a subckt without a name"),
        ],
    )
    def test_names_the_line_of_broken_brackets(self, source: str, message: str) -> None:
        with pytest.raises(NetlistError) as caught:
            read_subckts(logical_lines(source, HERE))
        assert message in str(caught.value)

    def test_suggests_near_names(self) -> None:
        lines = logical_lines(".subckt dffp_1 a\n.ends\n.subckt dffn_1 a\n.ends\n", HERE)
        with pytest.raises(NetlistError, match=r"no subckt is called 'dfp_1'; nearest: dffp_1"):
            find_subckt(lines, "dfp_1")
        with pytest.raises(NetlistError, match="2 subckts were found: dffp_1, dffn_1"):
            find_subckt(lines)
        with pytest.raises(NetlistError, match=r"no \.subckt"):
            find_subckt([])
        assert find_subckt(lines, "DFFN_1").name == "dffn_1"

    def test_finds_elements_that_would_join_the_test_circuit(self) -> None:
        lines = logical_lines(INVERTER + "V1 vdd 0 1.8\n.param x=1\n", HERE)
        assert [line.text for line in loose_elements(lines)] == ["V1 vdd 0 1.8"]


class TestPorts:
    SUBCKT = find_subckt(logical_lines(".subckt dff CLK D Q VPWR VGND\n.ends\n", HERE))

    def test_takes_any_order_and_case(self) -> None:
        check_ports(self.SUBCKT, ["d", "clk", "q", "vgnd", "vpwr"])

    def test_names_missing_extra_and_nearest(self) -> None:
        with pytest.raises(NetlistError) as caught:
            check_ports(self.SUBCKT, ["CLKK", "D", "Q", "VPWR"])
        message = str(caught.value)
        assert "pin 'CLKK' is no port (nearest: CLK)" in message
        assert "no pin is given for port CLK, VGND" in message
        assert "cell.spice:1" in message

    def test_names_a_pin_given_twice(self) -> None:
        with pytest.raises(NetlistError, match="pin 'd' is named twice"):
            check_ports(self.SUBCKT, ["CLK", "D", "d", "Q", "VPWR", "VGND"])


def test_assignments_keep_quotes_and_order() -> None:
    text = "X1 a b sub w = 0.42 l='a * b' m={n + 1} z=\"q\""
    assert assignments(text) == (("w", "0.42"), ("l", "'a * b'"), ("m", "{n + 1}"), ("z", '"q"'))
    assert positional(text) == ["X1", "a", "b", "sub"]


SPICE_LIKE = st.text(alphabet=".subcktend+*;$\\ \n\r'\"{}=x1", max_size=200).map(str.encode)


@given(st.binary(max_size=300) | SPICE_LIKE)
@settings(max_examples=300, deadline=None)
def test_any_bytes_are_read_or_refused_politely(tmp_path_factory: pytest.TempPathFactory, raw: bytes) -> None:
    file = tmp_path_factory.getbasetemp() / "fuzz.spice"
    file.write_bytes(raw)
    try:
        lines = logical_lines(read_text(file), file)
        for line in lines:
            assert line.text == line.text.strip()
            assert not line.text.endswith("\\\\")
        assert [line.text for line in logical_lines(render(lines), file)] == [line.text for line in lines]
        check_ports(find_subckt(lines), ["a"])
    except CharflowError:
        return
