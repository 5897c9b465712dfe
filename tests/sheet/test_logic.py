"""Logic expressions of a sheet: what they mean, checked by brute force against Python's own operators."""

from __future__ import annotations

from itertools import product

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charflow.errors import SheetError
from charflow.sheet.logic import parse_logic

NAMES = ("A", "B", "C", "D_1")
laws = settings(derandomize=True, deadline=None, max_examples=300)


def every_level() -> list[dict[str, bool]]:
    return [dict(zip(NAMES, bits, strict=True)) for bits in product((False, True), repeat=len(NAMES))]


# A tree is drawn as a pair of texts that must mean the same: one of ours and one of Python's.
Pair = tuple[str, str]
leaves = st.sampled_from([*((name, name) for name in NAMES), ("0", "False"), ("1", "True")])


def _grow(inner: st.SearchStrategy[Pair]) -> st.SearchStrategy[Pair]:
    def binary(ours: str, theirs: str) -> st.SearchStrategy[Pair]:
        return st.tuples(inner, inner).map(
            lambda pair: (f"({pair[0][0]}){ours}({pair[1][0]})", f"({pair[0][1]} {theirs} {pair[1][1]})")
        )

    return st.one_of(
        inner.map(lambda a: (f"!({a[0]})", f"(not {a[1]})")),
        inner.map(lambda a: (f"({a[0]})'", f"(not {a[1]})")),
        *(binary(ours, "and") for ours in ("&", " * ", " ")),
        *(binary(ours, "or") for ours in ("|", "+")),
        binary("^", "!="),
        st.tuples(inner, inner, inner).map(
            lambda t: (f"({t[0][0]}) ? ({t[1][0]}) : ({t[2][0]})", f"({t[1][1]} if {t[0][1]} else {t[2][1]})")
        ),
    )


trees = st.recursive(leaves, _grow, max_leaves=12)


@laws
@given(trees)
def test_an_expression_means_what_python_s_own_operators_say(pair: Pair) -> None:
    ours, theirs = pair
    logic = parse_logic(ours)
    for levels in every_level():
        assert logic.value(levels) is eval(theirs, {}, dict(levels))


@pytest.mark.parametrize(
    ("loose", "grouped"),
    [
        ("A | B & C", "A | (B & C)"),
        ("A ^ B & C", "A ^ (B & C)"),
        ("A | B ^ C", "A | (B ^ C)"),
        ("!A & B", "(!A) & B"),
        ("!A B", "(!A) & B"),
        ("A B'", "A & (!B)"),
        ("A + B * C", "A | (B & C)"),
        ("A B + C D_1", "(A & B) | (C & D_1)"),
        ("A ? B : C ? D_1 : 0", "A ? B : (C ? D_1 : 0)"),
        ("A ? B ? C : 0 : 1", "A ? (B ? C : 0) : 1"),
        ("A | B ? C : D_1", "(A | B) ? C : D_1"),
        ("!A'", "A"),
        ("A''", "A"),
        ("!!A", "A"),
    ],
)
def test_operators_bind_as_documented(loose: str, grouped: str) -> None:
    for levels in every_level():
        assert parse_logic(loose).value(levels) is parse_logic(grouped).value(levels)


@laws
@given(trees, st.lists(st.sampled_from([False, True, None]), min_size=4, max_size=4))
def test_unknown_levels_give_unknown_exactly_where_the_value_depends_on_them(
    pair: Pair, bits: list[bool | None]
) -> None:
    logic = parse_logic(pair[0])
    given_levels = dict(zip(NAMES, bits, strict=True))
    possible = {
        logic.value(levels)
        for levels in every_level()
        if all(given_levels[name] in (None, level) for name, level in levels.items())
    }
    assert logic.value(given_levels) is (possible.pop() if len(possible) == 1 else None)


def test_names_are_listed_once_in_the_order_of_the_text() -> None:
    assert parse_logic("SE ? SI : D & SE | bus[3]").names == ("SE", "SI", "D", "bus[3]")
    assert parse_logic("1").names == ()


@pytest.mark.parametrize(
    ("text", "why", "column"),
    [
        ("A &", "the expression ends where a name was expected", 3),
        ("A & | B", "'|' found where a name was expected", 4),
        ("A B )", "')' does not fit here", 4),
        ("(A | B", "expected ')' here", 6),
        ("A ? B", "expected ':' here", 5),
        ("A $ B", "'$' is no operator or name", 2),
        ("A ? B : ", "the expression ends where a name was expected", 7),
        ("   @", "'@' is no operator or name", 3),
        ("", "the expression ends where a name was expected", 0),
        ("A = B", "'=' is no operator or name", 2),
        ("A && B", "'&' found where a name was expected", 3),
        ("'A", '"\'" found where a name was expected', 0),
    ],
)
def test_a_mistake_is_shown_with_a_caret_under_it(text: str, why: str, column: int) -> None:
    with pytest.raises(SheetError) as caught:
        parse_logic(text)
    first, shown, caret = caught.value.message.split("\n")
    assert first == why
    assert shown == f"    {text}"
    assert caret == " " * (4 + column) + "^"


def test_nesting_and_length_have_limits_that_are_errors_not_crashes() -> None:
    with pytest.raises(SheetError, match="nests too deeply"):
        parse_logic("(" * 150 + "A" + ")" * 150)
    with pytest.raises(SheetError, match="nests too deeply"):
        parse_logic("!" * 150 + "A")
    with pytest.raises(SheetError, match="nests too deeply"):
        parse_logic("A ? B : " * 90 + "C")
    with pytest.raises(SheetError, match="longer than 10000"):
        parse_logic("A" * 10_001)
    with pytest.raises(SheetError, match="more than 400 names and operators"):
        parse_logic("A & " * 200 + "A")
    assert parse_logic("A" + "'" * 399).value({"A": True}) is False


@pytest.mark.parametrize("text", ["A" + "'" * 4000, "|".join(["A"] * 2000), "^".join(["A"] * 2001)])
def test_a_long_expression_is_evaluated_or_refused(text: str) -> None:
    try:
        logic = parse_logic(text)
    except SheetError:
        return
    assert logic.value({"A": True}) is True


@laws
@given(st.text(alphabet="AB_1!&|^?:()' *+0[]$<>.\t\n€", max_size=40))
def test_any_text_is_an_expression_or_a_sheet_error(text: str) -> None:
    try:
        logic = parse_logic(text)
    except SheetError:
        return
    assert logic.value(dict.fromkeys(logic.names, False)) in (True, False)
