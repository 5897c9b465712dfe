"""What the fuzz bench starts from: sound inputs, the named hostile ones, and ways to spoil either.

Every input is bytes. The same seed gives the same inputs.
"""

from __future__ import annotations

import gzip
import random
import re
import sqlite3
import tempfile
import zlib
from collections.abc import Callable
from pathlib import Path

ROOT = Path(__file__).parent.parent.parent
DECKS = ROOT / "decks"
LARGEST = 200_000  # bytes of an input, so that a run of the bench ends

QUANTITIES = (
    *(
        '"NaN s"',
        '"nan ps"',
        '"inf s"',
        '"-inf ps"',
        '"1e400 ps"',
        '"-10 ps"',
        '"0 ps"',
        '"1e300 ps"',
        '"10"',
    ),
    *('"10 ms"', '"10 pF"', "10e-12", "nan", "inf", '"10 ps 5 ps"', '""', "true", "[]", "{}", '"5e-324 s"'),
)
SHEET_LINES = (
    *('next_state = "D & D & D"', 'next_state = "(((((((((("', 'next_state = { s0 = "D", s1 = "s0" }'),
    *("include_folders = ['/']", 'allow = ["directive:.control"]', 'allow = ["outside-folder:/"]'),
    *("resolution = '0 s'", "slew_fractions = [0.8, 0.2]", "slew_fractions = [nan, inf]", "glitch = '60 %'"),
    *("options = { scale = 1e-6 }", "compatibility = 'hsa'", "unknown = 1", "netlist = '../../etc/passwd'"),
    *("netlist = '${HOME}/x'", "netlist = '\\u0000'", "subckt = ''", "rest = '1 ns'", "[corners.'a/../b']"),
    'D1 = { role = "data" }\nD2 = { role = "clear", active = "low" }\nD3 = { role = "scan_enable" }',
)
NETLIST_LINES = (
    *("+ continued", "+", "\\\\", "x1 a b c", "X1 A B tarn_dffp_1 w='2*l' l={3*u}", ".PARAM W='L*2' L={1u}"),
    *(
        ".subckt a b c w=1u l='w*2'",
        ".SUBCKT A B C",
        ".ends",
        ".ENDS A",
        ".subckt",
        ".subckt a",
        ".macro m p",
    ),
    *(".eom", ".model n nmos level=54 vth0=nan", ".model n.1 nmos lmin=1e-9 lmax=inf", ".lib tt", ".endl"),
    *(".lib 'cell.spice' tt", ".include cell.spice", ".include '/dev/zero'", '.include ".."', ".if (1)"),
    *(".control", "shell touch WITNESS", ".endc", "* ng_script", ".option scale=1e-6", ".options nan=nan"),
    *("m1 a b c d n w=1e400 l=-1", "m1 a b c d n w='(1+' l=", "r1 a b 1k $ comment", "r1 a b 1k ; comment"),
    *(
        "r1 a b 1k // comment",
        "`touch WITNESS`",
        "a1 b c file",
        ".func f(x)={f(x)}",
        ".global vdd vss",
        ".end",
    ),
    *("c1 a b 'if(1,2", 'c1 a b "x', ".param a=b b=a", ".elseif", ".endif", "e1 a b and(1) c d", ".title x"),
)
NETLIST_WORDS = (
    *(
        "1e400",
        "-1",
        "0",
        "nan",
        "'2*w'",
        "{l*2}",
        "'",
        '"',
        "{",
        "(",
        ")",
        "=",
        "==",
        "w=1u",
        "params:",
        "m=1e9",
    ),
    *(
        "VDD",
        "vdd",
        "tarn_dffp_1",
        "nmos",
        "level=14",
        "if(a,b,c)",
        "a.b:c",
        "$x",
        "\\",
        "%n",
        "<script>",
        ";",
    ),
)
SHEET_WORDS = (
    *(
        '"data"',
        '"clock"',
        '"gate"',
        '"clear"',
        '"preset"',
        '"scan_data"',
        '"scan_enable"',
        '"enable"',
        '"output"',
    ),
    *(
        '"rise"',
        '"fall"',
        '"high"',
        '"low"',
        '"state"',
        '"!state"',
        "\"D'''\"",
        '"D" # "',
        '"D ? CK : !D"',
        '"1"',
    ),
    *('"!!!!!!!!D"', '"a b c d e f g"', '"state ^ D"', '"0 ps"', '"1 ns"', '"5 fF"', '"1e-6 s"', '"1 uF"'),
)
TABLE_CELLS = (
    *("nan", "inf", "-inf", "1e400", "-1e14", "1e15", "1_0", "0x10", " 5", "", "-0.0", "\u0661", "9" * 5000),
    *('"', '""', ",", ";", "=cmd()", "setup", "hold", "clk_to_q", "nothing", "typical", "\x00", "\x1b[31m"),
    *("null", "true", "[]", "{}", '"', "NaN", "Infinity", "-Infinity", "1E999", "[" * 3000, '{"a":' * 2000),
)
JUNK = (
    *(b"", b"\n", b"\r\n", b"\x00", b"\xff\xfe", b"\xef\xbb\xbf", b"\x1f\x8b\x08", b"PK\x03\x04", b"\x1a"),
    *(b"\xc3\x28", b"\xe2\x80\xae", b"\xed\xa0\x80", b"SQLite format 3\x00", b"\x7fELF", b"%n%s%x", b"$(id)"),
)


def sheets() -> list[bytes]:
    """Return the sheets of the demo cells, and hostile ones."""
    sound = [path.read_bytes() for path in sorted(DECKS.glob("*.toml"))]
    return sound + hostile_sheets((DECKS / "tarn_dffp_1.toml").read_bytes())


def hostile_sheets(sound: bytes) -> list[bytes]:
    """Return sheets that are spoilt on purpose: functions and pins beyond all measure, other encodings."""

    def with_function(text: str) -> bytes:
        return sound.replace(b"[pins]", f"next_state = {text}\n[pins]".encode())

    pins = "".join(f'D{n} = {{ role = "data" }}\n' for n in range(40)).encode()
    many = sound.replace(b"[corners", pins + b"[corners", 1)
    bits = ", ".join(f's{n} = "D"' for n in range(30))
    return [
        sound.replace(b"\n", b"\r\n"),
        sound.decode().encode("utf-16"),
        sound + b"# \xff\xfe",
        gzip.compress(sound),
        with_function(f'"D{chr(39) * 9000}"'),
        with_function(f'"{"!" * 9000}D"'),
        with_function(f'"{"(" * 5000}D{")" * 5000}"'),
        with_function(f'"{"D & " * 2400}D"'),
        with_function(f'"{"D ? " * 2400}D"'),
        with_function(f'"{"x" * 20_000}"'),
        with_function(f"{{ {bits} }}"),
        many,
        many.replace(b"[pins]", b'next_state = "%s"\n[pins]' % b" & ".join(b"D%d" % n for n in range(40))),
        sound.replace(
            b"[pins]", b"[pins]\n" + b"".join(b"P%d = { role = 'power' }\n" % n for n in range(3000))
        ),
        b"a = " + b"[" * 50_000,
        b"a" + b".a" * 50_000 + b" = 1",
        b"[axes]\nload = [" + b'"1 fF", ' * 20_000 + b"]",
    ]


def netlists() -> list[bytes]:
    """Return netlists and model files of the demo cells, and hostile ones."""
    return _sound_netlists() + hostile_netlists((DECKS / "tarn_dffp_1.spice").read_bytes())


def hostile_netlists(sound: bytes) -> list[bytes]:
    """Return the named hostile netlists: continuations, case, nesting, parameters, expressions, junk."""
    return [
        sound.replace(b" ", b"\n+ "),
        sound.upper(),
        sound + sound,
        sound.replace(b"\n", b"\r\n"),
        sound.decode("latin-1").encode("utf-16"),
        gzip.compress(sound),
        zlib.compress(sound),
        b"* \xe9\xff in a comment\n" + sound,
        b".subckt a b c w='2*(1+1)' l={1u} m=1\nm1 b c b c n w='w*2' l={l}\n.ends a\n",
        b".subckt a b\n.subckt c d\nr1 d 0 1\n.ends c\nx1 b c\n.ends a\n",
        b".subckt a b\n" * 20_000,
        b".subckt a b\n" * 10_000 + b".ends\n" * 10_000,
        b"x" * LARGEST,
        b".subckt a b\n+" + b" c" * 60_000 + b"\n.ends\n",
        b".param " + b"a=" * 50_000,
        b".param " + b"= " * 50_000,
        b".param a=" + b"(" * 100_000,
        b".option " + b"scale=1 " * 20_000 + b"x'",
        b".model n nmos " + b"(" * 90_000,
        b"r1 a b " + b"'" * 99_999,
        b'r1 a b "' + b" " * 99_999,
        b"r1 a b 1 " + b"\\\\\n" * 30_000,
        b"+\n" * 60_000,
        b".include cell.spice\n" * 3000,
        b".lib a\n.lib cell.spice b\n.endl\n.lib b\n.lib cell.spice a\n.endl\n",
        b".lib tt\n" * 20_000,
        b".func f(x)={" + b"f(" * 40_000,
        b"".join(b".param p%d=p%d\n" % (n, n + 1) for n in range(9000)) + sound,
        b"".join(b".model n.%d nmos lmin=%de-9 lmax=1 wmin=0 wmax=1\n" % (n, n) for n in range(4000)) + sound,
    ]


def _sound_netlists() -> list[bytes]:
    return [
        path.read_bytes() for pattern in ("*.spice", "*.lib", "*.inc") for path in sorted(DECKS.glob(pattern))
    ]


def csv_tables() -> list[bytes]:
    """Return small tables as charflow writes them, some with holes and several corners."""
    head = (
        "corner,quantity,pin,pin_edge,related_pin,related_edge,output,output_edge,when,"
        "clock_slew_ps,data_slew_ps,load_ff,value_ps,bracket_ps,status,transients,key\n"
    )
    found = []
    for corner in ("typical", "slow"):
        lines = [head]
        for slew in (10, 50):
            for load in (1, 5):
                value = 100.25 + slew + load
                lines.append(
                    f"{corner},clk_to_q,,,CK,rise,Q,fall,,{slew},,{load},{value},,measured,1,k{slew}\n"
                )
                lines.append(
                    f"{corner},setup,D,rise,CK,rise,,,SE,{slew},{load},5,{value - 120},0.1,pushout,4,s\n"
                )
        lines.append(f'{corner},hold,D,fall,CK,rise,,,,10,10,5,,,"no offset, none",9,\n')
        lines.append(f"{corner},pulse_width,CK,rise,,,Q,rise,,10,,5,55.5,0.2,pushout,9,p\n")
        found.append("".join(lines).encode())
    return found


def json_tables() -> list[bytes]:
    """Return the same tables as ``tables.json``."""
    from charflow.tables.flat import from_csv
    from charflow.tables.folder import Tables, to_json

    rows = [from_csv(raw.decode(), "seed") for raw in csv_tables()]
    return [
        to_json(Tables("cell", ("a", "b"), {"pushout": 0.1, "corners": {}}, some)).encode() for some in rows
    ]


def stores() -> list[bytes]:
    """Return stores with no, few and some entries."""
    from charflow.campaign.store import FILE, Store

    found = []
    for count in (0, 3, 60):
        with tempfile.TemporaryDirectory() as name:
            store = Store(Path(name))
            store.add_trials((f"key{n}", f"label{n % 2}", {"n": n}, [[0.5 * n], "x"]) for n in range(count))
            store.put("meta", "facts of corner typical", {"ngspice": 39})
            store.close()
            found.append((Path(name) / FILE).read_bytes())
    return found


Spoil = Callable[[bytes, random.Random], bytes]


def _flip(data: bytes, chance: random.Random) -> bytes:
    spoilt = bytearray(data)
    for _ in range(chance.choice((1, 1, 2, 8))):
        if spoilt:
            spoilt[chance.randrange(len(spoilt))] = chance.randrange(256)
    return bytes(spoilt)


def _cut(data: bytes, chance: random.Random) -> bytes:
    begin, end = sorted(chance.randrange(len(data) + 1) for _ in "ab")
    return data[:begin] + data[end:]


def _end(data: bytes, chance: random.Random) -> bytes:
    return data[: chance.randrange(len(data) + 1)]


def _double(data: bytes, chance: random.Random) -> bytes:
    begin, end = sorted(chance.randrange(len(data) + 1) for _ in "ab")
    return data[:end] + data[begin:end] * chance.choice((1, 2, 50)) + data[end:]


def _lines(data: bytes, chance: random.Random) -> bytes:
    lines = data.split(b"\n")
    match chance.randrange(3):
        case 0:
            chance.shuffle(lines)
        case 1:
            del lines[chance.randrange(len(lines))]
        case _:
            lines.insert(chance.randrange(len(lines) + 1), chance.choice(lines))
    return b"\n".join(lines)


def _whole(data: bytes, chance: random.Random) -> bytes:
    ways: tuple[Callable[[bytes], bytes], ...] = (
        lambda raw: raw.replace(b"\n", b"\r\n"),
        lambda raw: raw.replace(b"\n", b"\r"),
        bytes.upper,
        bytes.lower,
        lambda raw: raw.decode("latin-1").encode("utf-16"),
        lambda raw: b"\xef\xbb\xbf" + raw,
        gzip.compress,
        zlib.compress,
        lambda raw: raw.replace(b" ", b"\n+ "),
        lambda raw: raw.replace(b"=", b" = "),
        lambda raw: raw + raw,
        lambda raw: raw.replace(b"\n", b""),
        lambda raw: raw.replace(b"\n", b"\xa0\n"),
    )
    return chance.choice(ways)(data)


def _junk(data: bytes, chance: random.Random) -> bytes:
    place = chance.randrange(len(data) + 1)
    piece = chance.choice(JUNK) * chance.choice((1, 1, 1, 1000))
    return data[:place] + piece + data[place:]


GENERAL: tuple[Spoil, ...] = (_flip, _flip, _cut, _end, _double, _lines, _whole, _junk)


def with_lines(extra: tuple[str, ...]) -> Spoil:
    """Return a way to spoil a text: one of ``extra`` as a line of its own, or in place of one."""

    def spoil(data: bytes, chance: random.Random) -> bytes:
        lines = data.split(b"\n")
        place = chance.randrange(len(lines) + 1)
        lines[place : place + chance.randrange(2)] = [chance.choice(extra).encode("utf-8", "replace")]
        return b"\n".join(lines)

    return spoil


def with_words(extra: tuple[str, ...], edges: bytes) -> Spoil:
    """Return a way to spoil a text: one of ``extra`` in place of what stands between two of ``edges``."""

    def spoil(data: bytes, chance: random.Random) -> bytes:
        places = [index for index, byte in enumerate(data[:20_000]) if byte in edges] or [0]
        begin = chance.choice(places)
        end = next((place for place in places if place > begin), len(data))
        return data[: begin + 1] + chance.choice(extra).encode("utf-8", "replace") + data[end:]

    return spoil


def with_quoted(extra: tuple[str, ...]) -> Spoil:
    """Return a way to spoil a sheet that stays TOML: one of ``extra`` in place of a quoted text."""

    def spoil(data: bytes, chance: random.Random) -> bytes:
        found = list(_QUOTED.finditer(data[:20_000]))
        if not found:
            return data
        place = chance.choice(found)
        return data[: place.start()] + chance.choice(extra).encode() + data[place.end() :]

    return spoil


_QUOTED = re.compile(rb'"[^"\n]*"')


def spoilt(seeds: list[bytes], ways: tuple[Spoil, ...], chance: random.Random) -> bytes:
    """Return one of ``seeds``, spoilt in one to four ways."""
    data = chance.choice(seeds)
    for _ in range(chance.choice((1, 1, 2, 2, 3, 4))):
        data = chance.choice(ways)(data, chance)[:LARGEST]
    return data


def damaged_header(data: bytes, chance: random.Random) -> bytes:
    """Return a store with a byte of its header or of its first page changed."""
    place = chance.randrange(min(len(data), chance.choice((100, 4096)))) if data else 0
    return data[:place] + bytes([chance.randrange(256)]) + data[place + 1 :]


def other_schema(data: bytes, chance: random.Random) -> bytes:
    """Return the store with another schema, or other tables, if it is one."""
    with tempfile.TemporaryDirectory() as name:
        path = Path(name) / "store"
        path.write_bytes(data)
        statement = chance.choice(
            (
                "PRAGMA user_version=0",
                f"PRAGMA user_version={chance.choice((2, 99, -1, 2**31 - 1))}",
                "DROP TABLE rows",
                "ALTER TABLE trials ADD COLUMN more",
                "UPDATE trials SET outcome = x'ff00'",
                "UPDATE meta SET value = '['",
                "CREATE TRIGGER t AFTER INSERT ON meta BEGIN DELETE FROM trials; END",
                "CREATE VIEW v AS SELECT * FROM v",
            )
        )
        try:
            db = sqlite3.connect(path)
            with db:
                db.execute(statement)
            db.close()
        except (sqlite3.Error, UnicodeDecodeError):
            return data
        return path.read_bytes()
