"""Tables in a terminal: inside their width, and nothing hidden."""

from __future__ import annotations

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from svyrates.words import Column, Table, display_width
from svyrates.words.text import wrap

# Labels hold no digits, so that a digit found is one of the numbers.
LABEL = st.text(st.characters(exclude_categories=("Nd", "Nl", "No")), max_size=60)
NUMBER = st.integers(0, 10**15).map(lambda n: f"{n:,}")


def _numbers(name: str, values: list[str], *, heading: str = "", panel: int = 0) -> Column:
    return Column(name, heading or name, values, kind="number", panel=panel)


@st.composite
def _tables(draw: st.DrawFn) -> Table:
    n_rows = draw(st.integers(1, 4))
    keys = [
        Column(f"key {i}", draw(LABEL), draw(st.lists(LABEL, min_size=n_rows, max_size=n_rows)),
               key=True)
        for i in range(draw(st.integers(1, 3)))
    ]  # fmt: skip
    numbers = [
        _numbers(
            f"n{i}",
            draw(st.lists(NUMBER, min_size=n_rows, max_size=n_rows)),
            heading=draw(LABEL),
            panel=draw(st.integers(0, 2)),
        )
        for i in range(draw(st.integers(1, 9)))
    ]
    return Table(draw(LABEL), (*keys, *numbers), (draw(LABEL),))


@given(_tables(), st.integers(60, 200))
def test_lines_fit_and_every_number_is_shown(table: Table, width: int) -> None:
    lines = table.text(width).split("\n")
    assert max(map(display_width, lines)) <= width
    shown = [word for line in lines for word in line.split()]
    for column in table.columns:
        if column.kind == "number":
            for value in column.values:
                # A label may touch nothing: two spaces stand between columns.
                assert value in shown
                shown.remove(value)


@pytest.mark.parametrize("width", [-5, 0, 1, 39])
def test_a_width_too_small_to_read_is_not_kept(width: int) -> None:
    table = Table("T", (Column("g", "group", ["north"], key=True), _numbers("n", ["1"])))
    assert table.text(width) == table.text(40)


def test_labels_give_way_before_numbers_do() -> None:
    long = "a-label-of-one-very-long-word-only"
    keys = [Column(f"k{i}", "key", [long], key=True) for i in range(3)]
    text = Table("", (*keys, _numbers("n", ["123,456,789,012,345"]))).text(60)
    assert "123,456,789,012,345" in text
    assert max(map(len, text.split("\n"))) <= 60


def test_side_by_side_if_it_fits_and_in_panels_if_not() -> None:
    table = Table(
        "",
        (
            Column("g", "group", ["north", "south"], key=True),
            _numbers("a", ["11", "12"], heading="first", panel=0),
            _numbers("b", ["21", "22"], heading="second", panel=1),
            _numbers("c", ["9" * 20, "32"], heading="third", panel=1),
        ),
    )
    assert table.text(60) == (
        f"group  first  second                 third\n{'─' * 42}\n"
        f"north     11      21  {'9' * 20}\nsouth     12      22  {'32':>20}"
    )
    # 42 columns do not fit in 41: the panels part, though the second column would have fitted.
    assert table.text(41) == (
        f"group  first\n{'─' * 12}\nnorth     11\nsouth     12\n\n"
        f"group  second                 third\n{'─' * 35}\n"
        f"north      21  {'9' * 20}\nsouth      22  {'32':>20}"
    )


@given(st.integers(60, 120), st.integers(8, 20))
def test_every_panel_repeats_the_keys(width: int, n_columns: int) -> None:
    numbers = [_numbers(f"n{i}", [f"{i}01234567", f"{i}11234567"]) for i in range(n_columns)]
    keys = (
        Column("g", "region", ["north", "south"], key=True),
        Column("s", "sex", ["women", "men"], key=True),
    )
    panels = Table("", (*keys, *numbers)).text(width).split("\n\n")
    assert len(panels) > 1 or n_columns * 11 + 13 <= width
    for panel in panels:
        head, rule, *rows = panel.split("\n")
        assert head.split()[:2] == ["region", "sex"]
        assert set(rule) == {"─"}
        assert [row.split()[:2] for row in rows] == [["north", "women"], ["south", "men"]]
        assert {len(row.split()) for row in [head, *rows]} == {len(head.split())}


def test_headings_break_between_words_only() -> None:
    table = Table(
        "",
        (
            Column("g", "region of residence", ["north"], key=True),
            _numbers("n", ["1"], heading="unweighted respondents"),
        ),
    )
    assert table.text(80) == (
        "region of   unweighted\n"
        "residence  respondents\n"
        "──────────────────────\n"
        "north                1"
    )


def test_wide_characters_line_up() -> None:
    values = ["日本", "e\u0301t\u0301", "abcd"]
    table = Table("", (Column("g", "g", values, key=True), _numbers("n", ["1", "2", "3"])))
    assert table.text() == f"g     n\n{'─' * 7}\n日本  1\ne\u0301t\u0301    2\nabcd  3"


def test_a_long_label_takes_three_lines_and_then_an_ellipsis() -> None:
    label = " ".join(["word"] * 60)
    table = Table("", (Column("g", "group", [label], key=True), _numbers("n", ["7"])))
    lines = table.text(60).split("\n")[2:]
    assert len(lines) == 3
    assert lines[-1].endswith("…")
    assert lines[0].endswith("7")


def test_a_row_of_blanks_is_still_a_row() -> None:
    table = Table("", (Column("g", "group", [" " * 90, "north"], key=True),))
    assert table.text(60).split("\n")[2:] == ["", "north"]


@given(st.text(st.characters(categories=("L", "M", "N", "P", "S", "Zs"))), st.integers(2, 60))
@example("abcde\u0301", 4)
@example("日本語のラベル", 3)
def test_wrapping_keeps_every_character(text: str, width: int) -> None:
    lines = wrap(text, width)
    assert all(display_width(line) <= width for line in lines)
    assert "".join("".join(lines).split()) == "".join(text.split())


def test_notes_are_indented_from_their_second_line() -> None:
    note = "A note of more than forty columns, which is more than one line holds."
    lines = Table("", (Column("g", "g", ["x"]),), (note,)).text(40).split("\n")[3:]
    assert lines == ["A note of more than forty columns, which", "  is more than one line holds."]
