"""The rectangle of cells that all parts draw on."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st
from rich.cells import cell_len

from monitor.desk.sheet import Sheet


def test_text_is_cut_at_its_room_and_the_cut_is_seen() -> None:
    """Nine cells for ten letters: eight letters and a sign."""
    sheet = Sheet(20, 2)
    end = sheet.write(1, 0, "abcdefghij", room=9)
    assert sheet.lines()[0] == " abcdefgh…"
    assert end == 10


def test_a_plain_sheet_holds_only_ascii() -> None:
    """What the project's sentences use gets an ASCII stand-in, letters of names an escape."""
    sheet = Sheet(40, 1, plain=True)
    sheet.write(0, 0, "grew ×257 · größe")
    assert sheet.lines() == ["grew x257 - gr\\xf6\\xdfe"]
    sheet.write(0, 0, "x" * 60)
    assert sheet.lines()[0].endswith("x~")


def test_nothing_but_printable_text_gets_in() -> None:
    """Escape sequences are shown, and markup is text like any other."""
    sheet = Sheet(40, 1)
    sheet.write(0, 0, "\x1b[31m[b]T[/b]\u202e")
    assert sheet.lines() == ["\\x1b[31m[b]T[/b]\\u202e"]


def test_outside_the_sheet_nothing_happens() -> None:
    """Any place may be asked for; a sheet of no size is a sheet."""
    sheet = Sheet(3, 1)
    for x, y in ((-1, 0), (0, 1), (3, 0), (0, -1)):
        sheet.write(x, y, "abc")
        sheet.put(x, y, "#")
    assert sheet.lines() == [""]
    assert Sheet(0, 0).lines() == []


@given(st.text(max_size=30), st.integers(1, 20))
def test_a_row_is_always_as_wide_as_the_sheet(text: str, width: int) -> None:
    """Wide characters, combining marks, anything: a row's text takes its cells, no more or less."""
    sheet = Sheet(width, 1)
    sheet.write(0, 0, text)
    assert cell_len("".join(sheet.chars[0])) == width


def test_runs_join_cells_of_one_style() -> None:
    """Three stretches make three runs, in order, covering the row."""
    sheet = Sheet(8, 1)
    sheet.write(0, 0, "ab", "heading")
    sheet.write(4, 0, "cd", "ripple")
    assert list(sheet.runs(0)) == [("ab", "heading"), ("  ", ""), ("cd", "ripple"), ("  ", "")]


def _applied(before: Sheet, after: Sheet) -> tuple[list[list[str]], list[list[str]]]:
    """`before` with only the changed stretches copied from `after`."""
    chars = [list(row) for row in before.chars]
    styles = [list(row) for row in before.styles]
    for x, y, width in after.changes(before):
        chars[y][x : x + width] = after.chars[y][x : x + width]
        styles[y][x : x + width] = after.styles[y][x : x + width]
    return chars, styles


@given(st.data())
def test_the_changes_turn_one_sheet_into_the_other(data: st.DataObject) -> None:
    """Whatever was written to each: applying the changed stretches is enough, and none cuts a wide
    character in two."""
    sheets = []
    for _ in range(2):
        sheet = Sheet(16, 2)
        for y in range(2):
            x = data.draw(st.integers(0, 15))
            text = data.draw(st.text(st.sampled_from("ab 漢字─"), max_size=9))
            sheet.write(x, y, text, data.draw(st.sampled_from(["", "dim"])))
        sheets.append(sheet)
    before, after = sheets
    assert _applied(before, after) == (after.chars, after.styles)
    for x, y, width in after.changes(before):
        for sheet in sheets:
            assert sheet.chars[y][x] != ""
            assert x + width == 16 or sheet.chars[y][x + width] != ""


def test_distant_changes_are_sent_apart() -> None:
    """Two changed cells far from each other do not drag along what lies between."""
    before, after = Sheet(60, 1), Sheet(60, 1)
    after.put(2, 0, "a")
    after.put(50, 0, "b")
    assert list(after.changes(before)) == [(2, 0, 1), (50, 0, 1)]
    assert list(after.changes(after)) == []
