"""The screen: keys and what they lead to, by the facts that are shown."""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from pathlib import Path

import pytest
from textual.pilot import Pilot

from monitor.desk.app import DeskApp
from monitor.desk.messages import Arrived, GuardSeen, LogTrouble
from monitor.desk.picture import Replay
from monitor.desk.screens.meaning import MeaningScreen
from monitor.desk.screens.run import RunScreen
from monitor.desk.source import Source
from monitor.desk.widgets.cells import CellView
from tests.monitor.desk import made_runs
from tests.monitor.desk.made_runs import Maker, healthy, runaway, three_fields, write

SMALL, LARGE = (80, 24), (120, 40)


def show(
    made: Maker, size: tuple[int, int], act: Callable[[Pilot[None]], Awaitable[None]]
) -> DeskApp:
    """Run the desk on a made log and do something with it."""

    async def play() -> DeskApp:
        app = DeskApp(Replay(made.records), clock=lambda: made.at + 8.0)
        async with app.run_test(size=size) as pilot:
            await pilot.pause()
            await act(pilot)
        return app

    return asyncio.run(play())


def shown(pilot: Pilot[None]) -> dict[str, str]:
    """Text of each part that is seen, by name."""
    views = pilot.app.screen.query(CellView)
    return {view.part.name: view.text() for view in views if view.display}


def test_at_120_by_40_everything_is_there() -> None:
    """All parts but the settings at once."""

    async def look(pilot: Pilot[None]) -> None:
        parts = shown(pilot)
        assert set(parts) == {
            *("verdict", "growth", "levels", "where", "events", "arrivals", "kept", "keys")
        }
        assert "RUNAWAY" in parts["verdict"]
        assert "ripple 1.0204" in parts["growth"]
        assert "1e-15" in parts["levels"]
        assert "@@" in parts["where"]
        assert "stop file: done" in parts["events"]
        assert "step 2,480" in parts["arrivals"]
        assert "1,800" in parts["kept"]

    show(runaway(), LARGE, look)


def test_at_80_by_24_parts_come_one_at_a_time() -> None:
    """Each letter shows its part below the verdict; the arrows go round."""

    async def look(pilot: Pilot[None]) -> None:
        assert set(shown(pilot)) == {"verdict", "growth", "keys"}
        names = ("levels", "where", "events", "arrivals", "kept", "settings", "growth")
        for key, name in zip("lweaksg", names, strict=True):
            await pilot.press(key)
            await pilot.pause()
            parts = shown(pilot)
            assert set(parts) == {"verdict", name, "keys"}
            assert parts[name].startswith(f"▐{key}")
        await pilot.press("right")
        await pilot.pause()
        assert "levels" in shown(pilot)
        await pilot.press("left", "left", "left")
        await pilot.pause()
        assert "settings" in shown(pilot)

    show(runaway(), SMALL, look)


def test_enter_shows_a_part_alone_and_escape_brings_the_others_back() -> None:
    """On a large screen the chosen part can have all the room."""

    async def look(pilot: Pilot[None]) -> None:
        await pilot.press("e", "enter")
        await pilot.pause()
        parts = shown(pilot)
        assert set(parts) == {"verdict", "events", "keys"}
        assert parts["events"].count("\n") == 28
        await pilot.press("escape")
        await pilot.pause()
        assert len(shown(pilot)) == 8
        await pilot.press("s")
        await pilot.pause()
        assert "settings" in shown(pilot)
        await pilot.press("escape")
        await pilot.pause()
        assert "settings" not in shown(pilot)

    show(runaway(), LARGE, look)


@pytest.mark.parametrize("key", ["g", "l", "w", "e", "a", "k", "s", "v"])
def test_question_mark_explains_the_chosen_part(key: str) -> None:
    """Its name and its text come up, any key closes them and does nothing else."""

    async def look(pilot: Pilot[None]) -> None:
        await pilot.press(key, "question_mark")
        await pilot.pause()
        assert isinstance(pilot.app.screen, MeaningScreen)
        view = pilot.app.screen.query_one(CellView)
        lines = [line.strip() for line in view.text().splitlines()]
        screen = pilot.app.screen_stack[-2]
        assert isinstance(screen, RunScreen)
        names = {v.part.key: v.part.name for v in screen.query(CellView)}
        assert lines[1] == names[key]
        assert "any key closes this" in lines[-1]
        await pilot.press("q")
        await pilot.pause()
        assert pilot.app.screen is screen
        assert pilot.app.is_running

    show(runaway(), SMALL, look)


def test_f_goes_through_the_fields() -> None:
    """h, u, v and h again."""

    async def look(pilot: Pilot[None]) -> None:
        seen = []
        for _ in range(4):
            seen.append(shown(pilot)["growth"].splitlines()[0][:30])
            await pilot.press("f")
            await pilot.pause()
        assert [line.split(" of ")[1][0] for line in seen] == ["h", "u", "v", "h"]

    show(three_fields(), LARGE, look)


def test_plus_minus_and_arrows_change_what_a_plot_shows() -> None:
    """Closer with plus and up, wider with minus and down."""

    async def look(pilot: Pilot[None]) -> None:
        whole = shown(pilot)["growth"]
        await pilot.press("plus", "up")
        await pilot.pause()
        assert "last 1/4" in shown(pilot)["growth"]
        await pilot.press("minus", "down")
        await pilot.pause()
        assert shown(pilot)["growth"] == whole

    show(runaway(), LARGE, look)


def test_lists_scroll_by_line_and_page() -> None:
    """Up and page up go back in time."""

    async def look(pilot: Pilot[None]) -> None:
        await pilot.press("a", "up", "pageup")
        await pilot.pause()
        assert "11 further" in shown(pilot)["arrivals"].splitlines()[0]
        await pilot.press("pagedown", "down", "down")
        await pilot.pause()
        assert "further" not in shown(pilot)["arrivals"]

    show(healthy(), SMALL, look)


def test_q_leaves_with_status_0() -> None:
    """Leaving is no error."""

    async def leave(pilot: Pilot[None]) -> None:
        await pilot.press("q")

    assert (show(healthy(), SMALL, leave).return_code or 0) == 0


def test_resizing_folds_and_unfolds() -> None:
    """From large to small and back: what is chosen stays chosen."""

    async def look(pilot: Pilot[None]) -> None:
        await pilot.press("w")
        await pilot.resize_terminal(*SMALL)
        await pilot.pause()
        await pilot.pause()
        assert set(shown(pilot)) == {"verdict", "where", "keys"}
        assert "@@" in shown(pilot)["where"]
        await pilot.resize_terminal(*LARGE)
        await pilot.pause()
        await pilot.pause()
        assert len(shown(pilot)) == 8
        await pilot.resize_terminal(10, 4)
        await pilot.pause()
        assert "verdict" in shown(pilot)

    show(runaway(), LARGE, look)


def test_news_is_drawn_as_it_comes() -> None:
    """A record, then trouble with the log, then a guard that is gone, then a log that begins
    anew."""

    async def look(pilot: Pilot[None]) -> None:
        screen = pilot.app.screen
        made = healthy(90)
        made.snap(91)
        screen.post_message(Arrived(made.records[-1:], False, 0, 2))
        await pilot.pause()
        await pilot.pause()
        assert "step 1,820" in shown(pilot)["arrivals"]
        assert "2 unreadable lines" in shown(pilot)["events"]
        screen.post_message(LogTrouble("the growth log is gone"))
        await pilot.pause()
        assert "look at the log: the growth log is gone" in shown(pilot)["verdict"]
        screen.post_message(LogTrouble(""))
        screen.post_message(GuardSeen(False))
        await pilot.pause()
        assert "UNWATCHED" in shown(pilot)["verdict"]
        screen.post_message(Arrived(three_fields().records, True, 0, 0))
        await pilot.pause()
        await pilot.pause()
        assert "harbour basin" in shown(pilot)["verdict"]
        assert "40 judged" in shown(pilot)["arrivals"]

    show(healthy(), LARGE, look)


@pytest.mark.parametrize("run", ["healthy", "overflowed", "stalled", "stopped", "hostile"])
@pytest.mark.parametrize("size", [(200, 60), (30, 8)])
def test_every_run_is_shown_at_every_size(run: str, size: tuple[int, int]) -> None:
    """Nothing raises, the condition's word is in the first line."""

    async def look(pilot: Pilot[None]) -> None:
        words = ("QUIET", "OVERFLOWED", "RUNAWAY", "SWELLING")
        assert any(word in shown(pilot)["verdict"].splitlines()[0] for word in words)

    show(getattr(made_runs, run)(), size, look)


def test_an_empty_log_is_waited_for(tmp_path: Path) -> None:
    """A real file that is empty, then gets its first records."""
    log = tmp_path / "growth.jsonl"
    log.touch()

    async def play() -> None:
        app = DeskApp(Source(log))
        async with app.run_test(size=LARGE) as pilot:
            await until(pilot, lambda: "no snapshot was judged" in shown(pilot)["verdict"])
            write(log, healthy(30).records)
            await until(pilot, lambda: "30 judged" in shown(pilot)["arrivals"])

    async def until(pilot: Pilot[None], what: Callable[[], bool]) -> None:
        async with asyncio.timeout(20):
            while not what():
                await pilot.pause(0.02)

    asyncio.run(play())
