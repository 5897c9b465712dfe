"""The picture shows what the comparison found, in words and units, and is the same every time."""

from __future__ import annotations

import struct
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import pytest

from charflow.errors import FolderError, InputError
from charflow.show import style
from charflow.show.change import _draw, draw_change
from charflow.tables.compare import Comparison, compare
from charflow.tables.flat import Row

HOSTILE = "$\\frac{x$ <script>&\x1b[31m\n%n"
ROW = Row(
    *("typical", "setup", "D", "rise", "CK", "rise", "", "", ""),
    *(10.0, 50.0, 5.0, 20.0, 0.1, "pushout", 3, "k"),
)


def comparison(quantity: str = "setup", **names: str) -> Comparison:
    old = [
        replace(
            ROW, quantity=quantity, clock_slew_ps=clock, data_slew_ps=data, value_ps=clock + data, **names
        )
        for clock in (10.0, 50.0, 200.0)
        for data in (10.0, 50.0)
    ]
    new = [replace(row, value_ps=1.04 * (row.value_ps or 0.0) - 1.0) for row in old]
    return compare(old, new)


def words_of(found: Comparison, limit: float | None = None) -> list[str]:
    """Return every text of the drawn picture."""
    from matplotlib.text import Text

    with style.figure(13, 10) as drawn:
        _draw(drawn, found, limit, ("old", "new"))
        return [text.get_text() for text in drawn.findobj(Text) if isinstance(text, Text)]


def test_axes_are_labelled_in_words_and_units() -> None:
    words = words_of(comparison())
    for wanted in ("old value [ps]", "new value [ps]", "change [%]", "data slew [ps]", "clock slew [ps]"):
        assert wanted in words
    assert "setup of D rise before CK rise" in words


def test_every_change_of_a_table_is_written_in_it_with_its_sign() -> None:
    found = comparison()
    words = words_of(found)
    for change in found.changes:
        assert f"{100 * change.fraction:+.1f}".replace("-", "\N{MINUS SIGN}") in words


def test_what_is_beyond_the_limit_is_counted_in_words() -> None:
    found = comparison()
    beyond = len(found.beyond(0.02))
    assert 0 < beyond < len(found.changes)
    assert any(f"Limit 2 %: {beyond} beyond it, ringed" in text for text in words_of(found, 0.02))


@pytest.mark.parametrize("suffix", [".svg", ".png", ".SVG"])
def test_a_picture_is_written_by_its_suffix_and_the_same_every_time(tmp_path: Path, suffix: str) -> None:
    first, second = tmp_path / f"a{suffix}", tmp_path / f"b{suffix}"
    for path in (first, second):
        draw_change(path, comparison(), 0.02, ("old", "new"))
    content = first.read_bytes()
    assert content == second.read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == [first.name, second.name]
    if suffix == ".png":
        width, height = struct.unpack(">II", content[16:24])
        assert (width, height) == (13 * 144, 10 * 144)
    else:
        assert ElementTree.fromstring(content).tag.endswith("svg")


def test_hostile_names_are_only_names(tmp_path: Path) -> None:
    path = tmp_path / "c.svg"
    found = comparison(pin=HOSTILE, corner=HOSTILE, when=HOSTILE, related_pin=HOSTILE)
    draw_change(path, found, None, (HOSTILE, HOSTILE))
    text = path.read_text()
    tree = ElementTree.fromstring(text)
    assert not [node for node in tree.iter() if node.tag.endswith("script")]
    assert "\x1b" not in text


@pytest.mark.parametrize("name", ["c.pdf", "c", "c.svg.gz", "c.html"])
def test_another_kind_of_picture_is_refused_before_anything_is_drawn(tmp_path: Path, name: str) -> None:
    with pytest.raises(InputError, match=r"written as \.png or \.svg"):
        draw_change(tmp_path / name, comparison(), None, ("old", "new"))
    assert list(tmp_path.iterdir()) == []


def test_a_picture_that_cannot_be_written_leaves_the_one_before(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with pytest.raises(FolderError, match="cannot be written"):
        draw_change(tmp_path / "no" / "c.png", comparison(), None, ("old", "new"))
    path = tmp_path / "c.png"
    path.write_bytes(b"before")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    with pytest.raises(FolderError, match="No space left"):
        draw_change(path, comparison(), None, ("old", "new"))
    assert path.read_bytes() == b"before"
    assert [p.name for p in tmp_path.iterdir()] == ["c.png"]


def test_nothing_on_both_sides_is_nothing_to_draw(tmp_path: Path) -> None:
    found = compare([ROW], [replace(ROW, value_ps=None, status="no")])
    with pytest.raises(InputError, match="nothing to draw"):
        draw_change(tmp_path / "c.png", found, None, ("old", "new"))


@pytest.mark.parametrize("values", [(0.0, 0.0), (1e14, -1e14), (5.0, 5.0)])
def test_one_point_draws_whatever_its_value(tmp_path: Path, values: tuple[float, float]) -> None:
    old, new = (replace(ROW, value_ps=value) for value in values)
    draw_change(tmp_path / "c.png", compare([old], [new]), 0.02, ("old", "new"))
    assert (tmp_path / "c.png").stat().st_size > 10_000


def lightness(colour: str) -> float:
    red, green, blue = (int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5))
    return 0.2126 * red**2.2 + 0.7152 * green**2.2 + 0.0722 * blue**2.2


def test_the_first_four_families_are_told_apart_without_colour() -> None:
    greys = sorted(lightness(colour) ** (1 / 3) for colour, _, _ in style.FAMILIES[:4])
    assert all(b - a > 0.1 for a, b in pairwise(greys)), greys
    assert len({marker for _, marker, _ in style.FAMILIES}) == len(style.FAMILIES)
    assert len({repr(line) for _, _, line in style.FAMILIES}) == len(style.FAMILIES)


def test_text_reads_on_every_colour_of_a_change() -> None:
    colours = style.change_colours()
    for step in range(101):
        fill = colours(step / 100)
        back = lightness("#" + "".join(f"{round(255 * part):02x}" for part in fill[:3]))
        ink = lightness(style.ink_on(fill))
        assert (max(ink, back) + 0.05) / (min(ink, back) + 0.05) > 3.4


def test_a_figure_leaves_the_settings_of_others_alone() -> None:
    import matplotlib as mpl

    before: dict[str, Any] = dict(mpl.rcParams)
    with style.figure(2, 2):
        assert mpl.rcParams["text.parse_math"] is False
    assert dict(mpl.rcParams) == before


def test_matplotlib_is_not_imported_before_a_picture_is_drawn() -> None:
    modules = "charflow.cli, charflow.show.change, charflow.show.style"
    code = f"import sys, {modules}; print('matplotlib' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


def test_many_corners_and_pins_still_fit(tmp_path: Path) -> None:
    rows = [
        replace(ROW, corner=f"corner{c}", pin=f"D{d}", clock_slew_ps=s, value_ps=20.0 + d)
        for c in range(4)
        for d in range(16)
        for s in (10.0, 50.0)
    ]
    new = [replace(row, value_ps=(row.value_ps or 0) * (1 + n / 1000)) for n, row in enumerate(rows)]
    words: Callable[[Comparison], list[str]] = words_of
    found = compare(rows, new)
    assert "Change: the 24 of 64 that moved most" in words(found)
    draw_change(tmp_path / "c.png", found, None, ("a" * 300, "b"))
