"""The drawings, as lines of text."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest

from monitor.desk import meanings
from monitor.desk.glyphs import RAMP
from monitor.desk.parts.curves import CurvePart
from monitor.desk.parts.growth import GrowthPart
from monitor.desk.parts.keys import KeysPart
from monitor.desk.parts.levels import LevelsPart
from monitor.desk.parts.lists import ArrivalsPart, EventsPart, KeptPart, SettingsPart
from monitor.desk.parts.meaning import WIDTH, MeaningPart
from monitor.desk.parts.part import Part, Scene
from monitor.desk.parts.verdict import VerdictPart
from monitor.desk.parts.where import WherePart
from monitor.desk.sheet import Sheet
from monitor.growthlog.records import Channel, TileMap
from tests.monitor.desk import made_runs
from tests.monitor.desk.made_runs import Maker, healthy, hostile, runaway, stalled, three_fields

SceneOf = Callable[..., Scene]

PARTS: tuple[Callable[[], Part], ...] = (
    *(VerdictPart, GrowthPart, LevelsPart, WherePart, EventsPart, ArrivalsPart, KeptPart),
    *(SettingsPart, KeysPart, lambda: MeaningPart(GrowthPart())),
)
RUNS = ("healthy", "runaway", "stopped", "overflowed", "stalled", "three_fields", "hostile")


def column_of(line: str, characters: str) -> list[int]:
    return [n for n, c in enumerate(line) if c in characters]


@pytest.mark.parametrize("run", RUNS)
@pytest.mark.parametrize("plain", [False, True])
def test_every_part_draws_every_run_at_every_size(scene: SceneOf, run: str, plain: bool) -> None:
    """From one cell to a large screen: exactly the size asked for, printable, ASCII if plain."""
    shown = scene(getattr(made_runs, run)(), plain=plain)
    for make in PARTS:
        for width, height in ((1, 1), (7, 3), (12, 5), (80, 14), (200, 50)):
            sheet = make().draw(shown, width, height, chosen=True)
            assert (sheet.width, sheet.height) == (width, height)
            text = "".join(sheet.lines())
            assert text.isprintable()
            assert text.isascii() or not plain


def test_nothing_yet_is_drawn_as_such(scene: SceneOf) -> None:
    """An empty log: every part draws, the plot says why it is empty."""
    shown = scene(Maker())
    for make in PARTS:
        make().draw(shown, 80, 14)
    assert "too few snapshots" in "\n".join(GrowthPart().draw(shown, 60, 10).lines())


def test_the_banner_carries_sign_word_and_time_left(scene: SceneOf) -> None:
    """What must be seen first stands first."""
    first = VerdictPart().draw(scene(runaway()), 120, 10).lines()[0]
    assert first.startswith(" ▂▅█ RUNAWAY ")
    assert "ruin in 743 to 813 steps (about 9 to 10 min)" in first
    assert first.endswith("cooling plate")


def test_a_stall_and_a_missing_guard_are_in_the_banner(scene: SceneOf) -> None:
    """Green alone would lull."""
    from monitor.desk.advice import Health

    first = VerdictPart().draw(scene(stalled(), health=Health(guard=False)), 80, 9).lines()[0]
    assert "QUIET" in first
    assert "STALLED" in first
    assert "UNWATCHED" in first


def test_long_sentences_get_a_second_line_where_there_is_room(scene: SceneOf) -> None:
    """At 80 columns the evidence wraps, and no sentence hides another."""
    lines = VerdictPart().draw(scene(runaway()), 80, 9).lines()
    labels = [line[1:6].strip() for line in lines[1:]]
    assert labels == ["act", "why", "", "where", "left", "clean", "run", "guard"]
    assert "2.1 cells long" in lines[3]


def test_the_ripple_rises_above_the_line_at_one(scene: SceneOf) -> None:
    """Plain drawing: early points on the line at one, the last ones well above it."""
    lines = GrowthPart().draw(scene(runaway(), plain=True), 100, 22).lines()
    stars = {x: y for y, line in enumerate(lines[:-2]) for x in column_of(line, "*")}
    labels = {line[:7].strip(): y for y, line in enumerate(lines[1:], 1)}
    one = next(labels[text] for text in ("1.00", "1.000") if text in labels)
    early = sorted(y for x, y in stars.items() if 20 < x < 60)
    assert abs(early[len(early) // 2] - one) <= 2
    assert stars[max(stars)] < one - 6
    assert "ripple 1.0204" in lines[0]


def test_marks_stand_below_their_steps(scene: SceneOf) -> None:
    """Pin at step 1,800, onset 1,940 to 2,060, alarm 2,240 on an axis of 20 to about 2,900."""
    part = GrowthPart()
    axis = part.draw(scene(runaway(), plain=True), 108, 20).lines()[-2]
    places = [axis.index("k"), axis.index("o"), axis.rindex("o"), axis.index("A")]
    assert places == sorted(places)
    per_step = (axis.index("A") - axis.index("k")) / (2240 - 1800)
    assert (axis.index("o") - axis.index("k")) / per_step == pytest.approx(140, abs=40)


def test_levels_stand_at_their_decades(scene: SceneOf) -> None:
    """The field's variation is e**1.5, just below ten; the ripple ends near 1e-11."""
    lines = LevelsPart().draw(scene(runaway(), plain=True), 100, 30).lines()
    top = next(line for line in lines if "=" in line[8:] and "o==o" not in line)
    assert lines.index(top) <= 2
    ripple = [n for n, line in enumerate(lines[1:-2], 1) if "*" in line]
    ticks = {line[:7].strip(): n for n, line in enumerate(lines) if line[:7].strip()}
    assert ticks["1e-12"] - 2 <= min(ripple) <= ticks["1e-10"] + 2


def test_a_wild_start_does_not_flatten_the_rest(scene: SceneOf) -> None:
    """Three huge first factors: the axis stays near one and the columns are marked at the edge."""
    made = Maker()
    made.open()
    made.segment()
    for n in range(1, 200):
        made.snap(n, evidence={"channels": (_jumpy(n),)})
    lines = GrowthPart().draw(scene(made, plain=True), 100, 20).lines()
    labels = [float(line[:7]) for line in lines[1:-2] if line[:7].strip()]
    assert max(labels) < 1.5
    assert "^" in lines[1]


def _jumpy(n: int) -> Channel:
    level = -30.0 + (25.0 * n if n < 4 else 75.0)
    return Channel(f="T", lo=0.0, hi=1.0, bulk=level, ripple=level + 0.01 * (n % 3), floor=-36.0)


def test_axes_are_kept_so_that_one_more_point_changes_little(scene: SceneOf) -> None:
    """A hundred and one snapshots drawn after a hundred: under sixty cells of the plot change."""
    part = GrowthPart()
    before = part.draw(scene(healthy(100)), 80, 20)
    after = part.draw(scene(healthy(101)), 80, 20)
    assert 0 < sum(width for _, _, width in after.changes(before)) < 60


@pytest.mark.parametrize("make", [GrowthPart, LevelsPart])
def test_looking_closer_shows_the_end(scene: SceneOf, make: Callable[[], CurvePart]) -> None:
    """Two steps closer: a quarter of the run, said in the heading; wider again: all of it."""
    part, shown = make(), scene(runaway(), plain=True)
    whole = part.draw(shown, 100, 20).lines()
    part.zoom(1)
    part.move(-1)
    close = part.draw(shown, 100, 20).lines()
    assert "last 1/4" in close[0]
    assert "1.9k" in close[-1] or "2k" in close[-1]
    assert "500" not in close[-1]
    part.zoom(-5)
    assert part.draw(shown, 100, 20).lines() == whole


def test_the_map_is_densest_at_the_worst_tile(scene: SceneOf) -> None:
    """Row 6, column 5 of the tiles, two characters each; what does not grow is blank."""
    sheet = WherePart().draw(scene(runaway()), 43, 13)
    body = [row[1:17] for row in sheet.chars[1:9]]
    assert "".join(body[6][10:12]) == "@@"
    assert sum(row.count("@") for row in body) == 2
    assert sum(row.count(" ") for row in body) > 64
    assert sheet.styles[7][11] == "heat9"
    assert any("tile 53: 93%" in line for line in sheet.lines())


def test_the_map_of_a_quiet_run_stays_pale(scene: SceneOf) -> None:
    """Noise of the tiles' levels must not look like an alarm."""
    text = "".join(WherePart().draw(scene(healthy()), 43, 13).lines()[1:9])
    assert not set(text) & set(RAMP[5:])


def test_more_room_makes_larger_tiles(scene: SceneOf) -> None:
    """Twice the rows and columns: each tile is four by two characters."""
    sheet = WherePart().draw(scene(runaway()), 60, 22)
    assert sheet.chars[1 + 12][1 + 20 : 1 + 24] == ["@"] * 4
    assert sheet.chars[1 + 13][1 + 20 : 1 + 24] == ["@"] * 4


def test_planes_of_a_solid_are_walked_through(scene: SceneOf) -> None:
    """Three planes, the worst one first; up and down go through them and stop at the ends."""
    made = healthy(5)
    plane = ["0" * 12, "0" * 5 + "z" + "0" * 6, "." * 12]
    made.add(
        TileMap, of=1, f="T", part="", shape=(3, 3, 4), cells="".join(plane), low=-0.1, high=1.0
    )
    part, shown = WherePart(), scene(made)
    assert "plane 2 of 3" in part.draw(shown, 60, 12).lines()[0]
    part.move(1)
    third = part.draw(shown, 60, 12).lines()
    assert "plane 3 of 3" in third[0]
    assert "?" in third[1]
    part.move(10)
    assert "plane 3 of 3" in part.draw(shown, 60, 12).lines()[0]
    part.move(-10)
    assert "plane 1 of 3" in part.draw(shown, 60, 12).lines()[0]


def test_a_map_that_contradicts_itself_is_not_drawn(scene: SceneOf) -> None:
    """Twelve characters for sixteen cells: no map, no error."""
    made = healthy(5)
    made.add(TileMap, of=1, f="T", part="", shape=(4, 4), cells="0" * 12, low=0.0, high=1.0)
    assert "no map" in "\n".join(WherePart().draw(scene(made), 43, 12).lines())


def test_lists_scroll_and_stop_at_their_ends(scene: SceneOf) -> None:
    """Arrivals rest at the newest; far up is the oldest, far down the newest again."""
    part, shown = ArrivalsPart(), scene(healthy(50))
    newest = part.draw(shown, 60, 6).lines()
    assert "step 1,000" in newest[-1]
    part.move(-3)
    assert "step 940" in part.draw(shown, 60, 6).lines()[-1]
    part.move(-1000)
    assert "step 20 " in part.draw(shown, 60, 6).lines()[1]
    part.move(1000)
    assert part.draw(shown, 60, 6).lines() == newest


def test_settings_start_at_the_top(scene: SceneOf) -> None:
    """The run and its guard first, every setting below."""
    lines = SettingsPart().draw(scene(three_fields()), 80, 20).lines()
    assert "harbour basin" in lines[1]
    assert any("snapshots.pattern" in line and "out/T_{step}.npy" in line for line in lines)


def test_skipped_snapshots_are_listed_with_their_reason(scene: SceneOf) -> None:
    """And counted in the heading."""
    lines = ArrivalsPart().draw(scene(stalled()), 80, 8).lines()
    assert "1 skipped" in lines[0]
    assert "skipped out/T_001220.npy, held: its writer holds it" in lines[-1]


def test_hostile_names_stay_in_their_cells(scene: SceneOf) -> None:
    """Escapes are shown as text and markup is not obeyed: brackets are there to be read."""
    shown = scene(hostile())
    text = "\n".join(
        line for make in PARTS for line in make().draw(shown, 160, 16, chosen=False).lines()
    )
    assert "\\x1b[2J" in text
    assert "[bold red]x[/]" in text
    assert "\u202e" not in text


def test_fields_are_numbered(scene: SceneOf) -> None:
    """One of three: the heading says which."""
    assert "of h (1 of 3) per step" in GrowthPart().draw(scene(three_fields()), 90, 14).lines()[0]


def test_every_part_has_a_meaning() -> None:
    """The texts behind `?`: two paragraphs at least, with a caution, and room at 80 x 24."""
    parts = (GrowthPart, LevelsPart, WherePart, EventsPart, ArrivalsPart, KeptPart, SettingsPart)
    for make in (*parts, VerdictPart):
        part = make()
        assert len(meanings.paragraphs(part.name)) >= 2
        assert MeaningPart(part).height <= 27
    assert WIDTH <= 80


def test_a_long_log_tells_how_far_it_was_read(scene: SceneOf) -> None:
    """The bottom line counts down what is still to be read."""
    from monitor.desk.advice import Health

    shown = scene(healthy(), health=Health(guard=True, behind=31_000_000))
    assert "31 MB to go" in KeysPart().draw(shown, 80, 1).lines()[0]


def test_curves_can_be_told_apart_without_colour(scene: SceneOf) -> None:
    """The bulk is dotted: where both are alone it has fewer dots per cell than the ripple."""
    sheet = GrowthPart().draw(scene(runaway()), 120, 24)

    def dots(style: str) -> float:
        found = [
            bin(ord(c) - 0x2800).count("1")
            for chars, styles in zip(sheet.chars[1:-2], sheet.styles[1:-2], strict=True)
            for c, s in zip(chars, styles, strict=True)
            if s == style and "\u2800" <= c <= "\u28ff"
        ]
        return sum(found) / len(found)

    assert dots("bulk") < 0.7 * dots("ripple")
    assert math.isfinite(dots("ripple"))


def test_a_sheet_of_a_part_starts_with_its_letter(scene: SceneOf) -> None:
    """The key that chooses a part stands in its heading, the chosen one is marked."""
    shown = scene(healthy())
    for part in (GrowthPart(), WherePart(), KeptPart()):
        sheet: Sheet = part.draw(shown, 50, 8)
        assert sheet.lines()[0].startswith(f"─{part.key} {part.name}")
        assert part.draw(shown, 50, 8, chosen=True).lines()[0].startswith(f"▐{part.key}")
