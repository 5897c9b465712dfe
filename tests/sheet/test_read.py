"""Reading a sheet: every mistake is named with its line, what was found, and what was expected."""

from __future__ import annotations

import os
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from charflow.errors import SheetError
from charflow.sheet import Role, Sheet, read_sheet
from charflow.sheet.read import sheet_from

GOOD = """\
[cell]
netlist = "cell.spice"
subckt = "dff"

[pins]
CK  = { role = "clock", active = "rise" }
D   = { role = "data" }
Q   = { role = "output", shows = "state" }
VDD = { role = "power" }
VSS = { role = "ground" }

[corners.typical]
models = ["models.lib:tt", "more.lib"]
supply = "1.2 V"
temperature = "25 C"

[axes]
clock_slew = ["10 ps", "50 ps"]
data_slew = ["10 ps", "50 ps"]
load = ["1 fF", "5 fF"]
constraint_load = "5 fF"

[measure]
pushout = "10 %"
slew_fractions = [0.2, 0.8]
resolution = "0.1 ps"
"""


def write(folder: Path, text: str) -> Path:
    path = folder / "cell.toml"
    path.write_text(text, encoding="utf-8")
    return path


def line_of(text: str, part: str) -> int:
    """Return the number of the one line of ``text`` that holds ``part``."""
    (number,) = (n for n, line in enumerate(text.splitlines(), 1) if part in line)
    return number


def complaint(folder: Path, old: str, new: str) -> tuple[SheetError, str]:
    """Return the error of the good sheet with ``old`` replaced, and the changed text."""
    assert GOOD.count(old) == 1
    text = GOOD.replace(old, new)
    with pytest.raises(SheetError) as caught:
        read_sheet(write(folder, text))
    return caught.value, text


class TestGood:
    def test_quantities_come_out_in_si_units(self, tmp_path: Path) -> None:
        sheet = read_sheet(write(tmp_path, GOOD))
        assert sheet.axes.clock_slew == pytest.approx((10e-12, 50e-12))
        assert sheet.axes.load == pytest.approx((1e-15, 5e-15))
        assert sheet.corners["typical"].supply == 1.2
        assert sheet.measure.pushout == pytest.approx(0.1)
        assert sheet.measure.resolution == pytest.approx(0.1e-12)

    def test_pins_keep_their_order_and_roles(self, tmp_path: Path) -> None:
        sheet = read_sheet(write(tmp_path, GOOD))
        assert tuple(sheet.pins) == ("CK", "D", "Q", "VDD", "VSS")
        assert (sheet.inputs, sheet.outputs) == (("CK", "D"), ("Q",))
        assert sheet.with_role(Role.POWER, Role.GROUND) == ("VDD", "VSS")

    def test_paths_are_taken_from_the_folder_of_the_sheet(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        (tmp_path / "sheets").mkdir()
        (tmp_path / "elsewhere").mkdir()
        monkeypatch.chdir(tmp_path / "elsewhere")
        text = GOOD.replace('"cell.spice"', '"../cells/cell.spice"')
        sheet = read_sheet(write(tmp_path / "sheets", text))
        assert sheet.cell.netlist == tmp_path / "cells" / "cell.spice"
        assert sheet.corners["typical"].models == (
            f"{tmp_path}/sheets/models.lib:tt",
            f"{tmp_path}/sheets/more.lib",
        )

    def test_environment_variables_are_filled_in(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.setenv("PDK_HERE", "/pdk/v1")
        text = GOOD.replace("models.lib:tt", "${PDK_HERE}/models.lib:tt")
        sheet = read_sheet(write(tmp_path, text))
        assert sheet.corners["typical"].models[0] == "/pdk/v1/models.lib:tt"

    def test_what_may_be_left_out_may_be_left_out(self, tmp_path: Path) -> None:
        text = GOOD[: GOOD.index("[measure]")].replace('subckt = "dff"\n', "")
        sheet = read_sheet(write(tmp_path, text))
        assert sheet.cell.subckt is None
        assert sheet.measure.slew_fractions == (0.2, 0.8)
        assert sheet.measure.pushout == 0.1


class TestWrong:
    @pytest.mark.parametrize(
        ("old", "new", "at", "said"),
        [
            # units
            (
                'clock_slew = ["10 ps", "50 ps"]',
                'clock_slew = ["10", "50 ps"]',
                "clock_slew",
                ["axes.clock_slew", "'10' has no unit", "a time in seconds", '"10 ps"'],
            ),
            (
                'clock_slew = ["10 ps", "50 ps"]',
                "clock_slew = [10, 50]",
                "clock_slew",
                ["axes.clock_slew", "10 has no unit", '"10 ps"'],
            ),
            (
                'load = ["1 fF", "5 fF"]',
                'load = ["5 V"]',
                'load = ["5 V"]',
                ["axes.load", "'5 V' is in 'V'", "a capacitance in farads"],
            ),
            ('supply = "1.2 V"', "supply = 1.2", "supply", ["corners.typical.supply", "1.2 has no unit"]),
            ('supply = "1.2 V"', "supply = true", "supply", ["corners.typical.supply", "True"]),
            ('supply = "1.2 V"', 'supply = "-1 V"', "supply", ["corners.typical.supply", "greater than 0"]),
            ('supply = "1.2 V"', 'supply = "nan V"', "supply", ["corners.typical.supply", "a voltage"]),
            (
                'temperature = "25 C"',
                'temperature = "25"',
                "temperature",
                ["corners.typical.temperature", "'25' has no unit", "degrees Celsius"],
            ),
            (
                'temperature = "25 C"',
                'temperature = "-300 C"',
                "temperature",
                ["corners.typical.temperature", "greater than or equal to -273"],
            ),
            ('pushout = "10 %"', "pushout = 0.1", "pushout", ["measure.pushout", "0.1 has no unit"]),
            ('pushout = "10 %"', 'pushout = "0 %"', "pushout", ["measure.pushout", "greater than 0"]),
            (
                'resolution = "0.1 ps"',
                'resolution = "1 s"',
                "resolution",
                ["measure.resolution", "less than or equal to 0.000000001"],
            ),
            # axes
            ('data_slew = ["10 ps", "50 ps"]', "data_slew = []", "data_slew", ["axes.data_slew is empty"]),
            (
                'data_slew = ["10 ps", "50 ps"]',
                'data_slew = ["50 ps", "10 ps"]',
                "[axes]",
                ["data_slew must rise", "1e-11 comes after 5e-11", "Sort the list"],
            ),
            (
                'data_slew = ["10 ps", "50 ps"]',
                'data_slew = ["10 ps", "10 ps"]',
                "[axes]",
                ["data_slew must rise", "remove repeats"],
            ),
            (
                'data_slew = ["10 ps", "50 ps"]',
                'data_slew = ["0 ps", "10 ps"]',
                "[axes]",
                ["data_slew must be greater than zero"],
            ),
            (
                'data_slew = ["10 ps", "50 ps"]',
                'data_slew = ["10 s"]',
                "[axes]",
                ["data_slew of 10 is beyond 1e-06", "check the prefix"],
            ),
            (
                'constraint_load = "5 fF"',
                'constraint_load = "-5 fF"',
                "[axes]",
                ["constraint_load must be greater than zero"],
            ),
            # fractions
            (
                "slew_fractions = [0.2, 0.8]",
                "slew_fractions = [0.8, 0.2]",
                "[measure]",
                ["slew_fractions must be two numbers either side of 0.5", "found 0.8, 0.2"],
            ),
            (
                "slew_fractions = [0.2, 0.8]",
                "slew_fractions = [20, 80]",
                "[measure]",
                ["slew_fractions", "found 20, 80"],
            ),
            (
                "slew_fractions = [0.2, 0.8]",
                "slew_fractions = [nan, 0.8]",
                "[measure]",
                ["slew_fractions", "found nan, 0.8"],
            ),
            (
                "slew_fractions = [0.2, 0.8]",
                "slew_fractions = [0.2, inf]",
                "[measure]",
                ["slew_fractions", "found 0.2, inf"],
            ),
            (
                "slew_fractions = [0.2, 0.8]",
                "slew_fractions = [0.2]",
                "slew_fractions",
                ["measure.slew_fractions.1", "missing"],
            ),
            # keys and tables
            (
                "subckt = ",
                "subcircuit = ",
                "subcircuit",
                ["unknown key 'cell.subcircuit'", "Did you mean 'subckt'?"],
            ),
            ("[measure]", "[mesure]", "[mesure]", ["unknown table 'mesure'", "Did you mean 'measure'?"]),
            (
                "pushout = ",
                "zzz = ",
                "zzz",
                ["unknown key 'measure.zzz'", "Known here: pushout, slew_fractions"],
            ),
            (
                'role = "clock", active',
                'role = "clock", activ',
                "CK ",
                ["unknown key 'pins.CK.activ'", "Did you mean 'active'?"],
            ),
            ('role = "data"', 'role = "dta"', "D  ", ["unknown role 'dta'", "Did you mean 'data'?"]),
            ('role = "data"', 'role = "%%%"', "D  ", ["unknown role '%%%'", "Known here: clock, gate, data"]),
            ('supply = "1.2 V"\n', "", "[corners.typical]", ["the key corners.typical.supply is missing"]),
            ('{ role = "data" }', "{ }", "D  ", ["the key pins.D.role is missing"]),
            ('netlist = "cell.spice"\n', "", "[cell]", ["the key cell.netlist is missing"]),
            # pins
            (
                'active = "rise"',
                'active = "up"',
                "CK ",
                ["pins.CK.active", "expected one of rise, fall, high, low, found 'up'"],
            ),
            (
                'active = "rise"',
                'active = "high"',
                "CK ",
                ["pins.CK", "needs active = 'rise' or 'fall', found 'high'"],
            ),
            (', active = "rise"', "", "CK ", ["pins.CK", "needs active = 'rise' or 'fall', found nothing"]),
            ('role = "data"', 'role = "data", active = "rise"', "D  ", ["pins.D", "takes no 'active'"]),
            (', shows = "state"', "", "Q  ", ["pins.Q", "an output needs shows"]),
            (
                'role = "data"',
                'role = "data", shows = "state"',
                "D  ",
                ["pins.D", "only an output takes 'shows'"],
            ),
            # corners
            (
                'models = ["models.lib:tt", "more.lib"]',
                "models = []",
                "models",
                ["corners.typical.models is empty"],
            ),
        ],
    )
    def test_it_is_named_with_its_line(
        self, tmp_path: Path, old: str, new: str, at: str, said: list[str]
    ) -> None:
        error, text = complaint(tmp_path, old, new)
        for words in said:
            assert words in str(error)
        assert error.where == (f"{tmp_path / 'cell.toml'}:{line_of(text, at)}",)

    @pytest.mark.parametrize("table", ["cell", "pins", "axes"])
    def test_a_missing_table_is_named(self, tmp_path: Path, table: str) -> None:
        raw = tomllib.loads(GOOD)
        del raw[table]
        with pytest.raises(SheetError, match=rf"^x\.toml: the table {table} is missing$"):
            sheet_from(raw, Path("x.toml"))

    def test_a_sheet_without_corners_is_told_so(self) -> None:
        raw = tomllib.loads(GOOD)
        raw["corners"] = {}
        with pytest.raises(SheetError, match="corners is empty; it needs at least one entry"):
            sheet_from(raw, Path("x.toml"))

    @pytest.mark.parametrize("role", ["output", "power", "ground"])
    def test_a_cell_needs_an_output_and_supplies(self, role: str) -> None:
        raw = tomllib.loads(GOOD)
        raw["pins"] = {name: pin for name, pin in raw["pins"].items() if pin["role"] != role}
        with pytest.raises(SheetError, match=f"pins: none has the role '{role}'"):
            sheet_from(raw, Path("x.toml"))

    def test_two_pins_that_differ_in_case_only_are_one_pin_to_spice(self, tmp_path: Path) -> None:
        error, _ = complaint(tmp_path, "VSS = {", 'q = { role = "data" }\nVSS = {')
        assert "'q' and 'Q' are one name to SPICE, which ignores case" in error.message

    @pytest.mark.parametrize("name", ["a b", "", "1A", "A\nB", "ü", "A;B", "A,B", "*A"])
    def test_a_pin_has_a_name_that_a_port_can_have(self, name: str) -> None:
        raw = tomllib.loads(GOOD)
        raw["pins"][name] = {"role": "data"}
        with pytest.raises(SheetError, match="is not a name a netlist port can have"):
            sheet_from(raw, Path("x.toml"))

    def test_a_pin_called_path_is_named_like_any_other(self) -> None:
        raw = tomllib.loads(GOOD)
        raw["pins"]["path"] = {"role": "data", "active": "up"}
        with pytest.raises(SheetError, match=r"pins\.path\.active"):
            sheet_from(raw, Path("x.toml"))

    @pytest.mark.parametrize("name", ["a/b", "", "..", ".hidden", "a b", "x" * 61, "ä"])
    def test_a_corner_has_a_name_that_a_file_can_have(self, name: str) -> None:
        raw = tomllib.loads(GOOD)
        raw["corners"][name] = raw["corners"]["typical"]
        with pytest.raises(SheetError, match="may hold only letters, digits"):
            sheet_from(raw, Path("x.toml"))

    @pytest.mark.parametrize(
        "mode", ["hs a", "hsa\n.include /etc/passwd", "HSA", "a", "x" * 13, "hsa\n", ";ls"]
    )
    def test_a_compatibility_is_a_short_word(self, mode: str) -> None:
        raw = tomllib.loads(GOOD)
        raw["corners"]["typical"]["compatibility"] = mode
        with pytest.raises(SheetError, match=r"corners\.typical\.compatibility"):
            sheet_from(raw, Path("x.toml"))

    @pytest.mark.parametrize(
        "options",
        [
            {"scale=1\n.include /etc/passwd\n.option x": 1.0},
            {"sc ale": 1.0},
            {"": 1.0},
            {"scale": float("nan")},
            {"scale": float("inf")},
            {"scale": "big"},
        ],
    )
    def test_an_option_is_a_name_and_a_finite_number(self, options: dict[str, Any]) -> None:
        raw = tomllib.loads(GOOD)
        raw["corners"]["typical"]["options"] = options
        with pytest.raises(SheetError, match=r"corners\.typical\.options"):
            sheet_from(raw, Path("x.toml"))


class TestFile:
    def test_a_missing_file_is_named(self, tmp_path: Path) -> None:
        with pytest.raises(SheetError, match="there is no such sheet") as caught:
            read_sheet(tmp_path / "none.toml")
        assert caught.value.where == (str(tmp_path / "none.toml"),)

    def test_a_folder_is_not_a_sheet(self, tmp_path: Path) -> None:
        with pytest.raises(SheetError, match="the sheet cannot be read: Is a directory"):
            read_sheet(tmp_path)

    def test_a_name_with_a_null_character_is_an_error_not_a_crash(self) -> None:
        with pytest.raises(SheetError, match="the sheet cannot be read"):
            read_sheet("a\0b")

    def test_bytes_that_are_not_utf_8_are_refused(self, tmp_path: Path) -> None:
        (tmp_path / "cell.toml").write_bytes(GOOD.encode().replace(b"cell.spice", b"z\xe4hler.spice"))
        with pytest.raises(SheetError, match="the file is not UTF-8 text"):
            read_sheet(tmp_path / "cell.toml")

    def test_what_is_not_toml_is_told_with_line_and_column(self, tmp_path: Path) -> None:
        with pytest.raises(SheetError, match=r"this is not TOML: .*line 2, column") as caught:
            read_sheet(write(tmp_path, "[cell]\nnetlist = cell.spice\n"))
        assert "A sheet has tables such as [cell]" in caught.value.todo

    def test_a_key_given_twice_is_refused(self, tmp_path: Path) -> None:
        twice = GOOD.replace('subckt = "dff"', 'subckt = "dff"\nsubckt = "dff2"')
        with pytest.raises(SheetError, match="this is not TOML"):
            read_sheet(write(tmp_path, twice))

    def test_endless_nesting_is_refused(self, tmp_path: Path) -> None:
        with pytest.raises(SheetError, match=r"nests too deeply|not TOML"):
            read_sheet(write(tmp_path, "a = " + "[" * 20_000))

    def test_a_huge_file_is_refused_unread(self, tmp_path: Path) -> None:
        with pytest.raises(SheetError, match="larger than 1,000,000 bytes"):
            read_sheet(write(tmp_path, GOOD + "#" * 1_000_000))

    def test_an_unset_variable_is_named_with_the_text_that_uses_it(
        self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.delenv("NO_SUCH_PDK", raising=False)
        error, _ = complaint(tmp_path, "models.lib:tt", "${NO_SUCH_PDK}/m.lib:tt")
        assert "no variable 'NO_SUCH_PDK', which '${NO_SUCH_PDK}/m.lib:tt' uses" in error.message
        assert "export NO_SUCH_PDK=" in error.todo

    def test_the_home_folder_of_nobody_is_an_error_not_a_crash(self, tmp_path: Path) -> None:
        text = GOOD.replace('"cell.spice"', '"~nobody-has-this-name/cell.spice"')
        try:
            sheet = read_sheet(write(tmp_path, text))
        except SheetError:
            return
        assert "nobody-has-this-name" in str(sheet.cell.netlist)


scalars = st.one_of(
    st.booleans(),
    st.integers(-5, 5),
    st.floats(),
    st.text(max_size=8),
    st.sampled_from(
        ["10 ps", "5 fF", "1.2 V", "25 C", "clock", "output", "${HOME}", "~x/y", "a\0b", "state"]
    ),
)
names = st.one_of(
    st.sampled_from(
        ["cell", "pins", "corners", "axes", "measure", "path", "role", "netlist", "models", "load"]
    ),
    st.text(max_size=6),
)
values = st.recursive(
    scalars,
    lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(names, inner, max_size=4)),
    max_leaves=12,
)
laws = settings(derandomize=True, deadline=None, max_examples=300)


class TestAnything:
    @laws
    @given(st.dictionaries(names, values, max_size=6))
    def test_any_tables_are_a_sheet_or_a_sheet_error(self, raw: dict[str, Any]) -> None:
        with pytest.raises(SheetError) as caught:  # a random table never makes a whole sheet
            sheet_from(raw, Path("x.toml"))
        assert caught.value.message
        assert "x.toml" in str(caught.value)

    @laws
    @given(st.data())
    def test_a_good_sheet_with_one_value_exchanged_is_a_sheet_or_a_sheet_error(
        self, data: st.DataObject
    ) -> None:
        raw = tomllib.loads(GOOD)
        table: Any = raw
        while True:
            key = data.draw(st.sampled_from(sorted(table)))
            if not isinstance(table[key], dict) or data.draw(st.booleans()):
                break
            table = table[key]
        table[key] = data.draw(values)
        try:
            sheet = sheet_from(raw, Path("x.toml"))
        except SheetError as error:
            message = str(error)
        else:
            message = ""
            assert isinstance(sheet, Sheet)
        assert "Value error" not in message
        assert "pydantic" not in message

    @settings(
        derandomize=True,
        deadline=None,
        max_examples=100,
        suppress_health_check=[HealthCheck.function_scoped_fixture],
    )
    @given(st.one_of(st.binary(max_size=200), st.text(max_size=200).map(lambda text: text.encode())))
    def test_any_bytes_are_a_sheet_error(self, tmp_path: Path, content: bytes) -> None:
        path = tmp_path / "any.toml"
        path.write_bytes(content)
        with pytest.raises(SheetError) as caught:
            read_sheet(path)
        assert os.fspath(path) in str(caught.value)


def test_a_key_of_thousands_of_parts_is_refused_before_it_takes_gigabytes(tmp_path: Path) -> None:
    path = tmp_path / "deep.toml"
    path.write_text("# " + "." * 1000 + "\na" + ".a" * 400 + " = 1\n")
    with pytest.raises(SheetError, match=r"deep\.toml:2: this nests too deeply"):
        read_sheet(path)
