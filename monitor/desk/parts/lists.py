"""Parts that are lists: events, arrivals, kept checkpoints, settings."""

from __future__ import annotations

from abc import abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

import msgspec

from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet
from monitor.lastclean import kept_pins
from monitor.wording import condition_sign, count, moment_text


@dataclass(frozen=True, slots=True)
class Item:
    """One line: a label in a column of its own, a sign and text; style is that of the sign, or of
    the text where there is none."""

    label: str
    text: str
    style: str = ""
    sign: str = ""


class ListPart(Part):
    """Shows as many items as there is room for: the last ones until moved (`newest_last`), else the
    first ones."""

    newest_last = True
    moves = "scroll"

    def __init__(self) -> None:
        self._back = 0
        self._room = 1
        self._total = 0

    @abstractmethod
    def items(self, scene: Scene) -> Sequence[Item]:
        """All items, oldest first."""

    @abstractmethod
    def facts(self, scene: Scene) -> list[tuple[str, str]]:
        """For the heading."""

    def move(self, by: int) -> None:
        """Scroll; `_back` counts from where the list rests."""
        step = -by if self.newest_last else by
        most = max(0, self._total - self._room)
        self._back = min(most, max(0, self._back + step))

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        items = self.items(scene)
        self._room, self._total = max(1, height - 1), len(items)
        self._back = min(self._back, max(0, self._total - self._room))
        facts = self.facts(scene)
        if self._back:
            facts.append((f"{self._back} further", "dim"))
        sheet = self.blank(scene, width, height, chosen, facts)
        if self.newest_last:
            end = self._total - self._back
            shown = items[max(0, end - self._room) : end]
        else:
            shown = items[self._back : self._back + self._room]
        if not shown:
            sheet.write(2, 1, "none yet", "dim")
        column = max((len(sheet.told(item.label)) for item in shown), default=0) + 2
        for y, item in enumerate(shown, 1):
            sheet.write(1, y, item.label, "dim", column)
            x = 1 + column
            if item.sign:
                x = sheet.write(x, y, item.sign, item.style) + 1
            sheet.write(x, y, item.text, "" if item.sign else item.style)
        return sheet


class EventsPart(ListPart):
    key = "e"
    name = "events"

    def items(self, scene: Scene) -> list[Item]:
        return [Item(moment_text(e.at, scene.now), e.text, e.gravity) for e in scene.story.events]

    def facts(self, scene: Scene) -> list[tuple[str, str]]:
        bad = scene.health.bad_lines
        return [(f"{bad} unreadable lines in the log", "swelling")] if bad else []


class ArrivalsPart(ListPart):
    key = "a"
    name = "arrivals"

    def items(self, scene: Scene) -> list[Item]:
        out = []
        for arrival in scene.story.arrivals:
            time = moment_text(arrival.at, scene.now)
            if arrival.condition:
                sign = condition_sign(arrival.condition, ascii=scene.glyphs.plain)
                told = f"{arrival.place}  {arrival.path}"
                out.append(Item(time, told, arrival.condition, sign))
            else:
                told = f"skipped {arrival.path}, {arrival.told}"
                out.append(Item(time, told, "swelling"))
        return out

    def facts(self, scene: Scene) -> list[tuple[str, str]]:
        story = scene.story
        out = [(f"{story.snapshots:,} judged", "")]
        if story.skipped:
            out.append((f"{story.skipped:,} skipped", "swelling"))
        return out


class KeptPart(ListPart):
    key = "k"
    name = "kept"

    def items(self, scene: Scene) -> list[Item]:
        out = []
        for pin in kept_pins(list(scene.story.pins.values())):
            step = "?" if pin.step is None else f"{pin.step:,}"
            proof = "verified" if pin.verified else "not verified"
            size = f"{count(pin.bytes)}B by {pin.method}" if pin.method else ""
            told = ", ".join(filter(None, (pin.state, proof, pin.folder, size, pin.detail)))
            style = "" if pin.state == "provisional" else "good" if pin.verified else "swelling"
            out.append(Item(step, told, style))
        return out

    def facts(self, scene: Scene) -> list[tuple[str, str]]:
        return []


class SettingsPart(ListPart):
    key = "s"
    name = "settings"
    newest_last = False

    def items(self, scene: Scene) -> list[Item]:
        opened = scene.story.opened
        if opened is None:
            return []
        out = [
            Item("run", opened.run),
            Item("guard", f"process {opened.pid} on {opened.host}"),
            *(Item(f"{name}", version) for name, version in sorted(opened.versions.items())),
        ]
        for section, values in opened.settings.items():
            if isinstance(values, dict):
                out += [Item(f"{section}.{key}", _plain(v)) for key, v in values.items()]
            else:
                out.append(Item(section, _plain(values)))
        return out

    def facts(self, scene: Scene) -> list[tuple[str, str]]:
        return []


def _plain(value: object) -> str:
    return msgspec.json.encode(value).decode()
