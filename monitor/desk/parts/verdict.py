"""The verdict: a banner with the condition, and labelled sentences below it."""

from __future__ import annotations

from textwrap import wrap

from monitor.desk.advice import Row, headline, over, rows, stalled
from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet
from monitor.wording import condition_sign

_LABEL = 7
# Which sentences get a second line first.
_SECOND_LINE = ("why", "act", "left", "guard", "clean", "run", "where")


class VerdictPart(Part):
    key = "v"
    name = "verdict"

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        sheet = Sheet(width, height, plain=scene.glyphs.plain)
        self._banner(sheet, scene)
        told = rows(scene.story, scene.health, scene.now)
        y = 1
        for row, lines in _fitted(sheet, told, height - 1):
            sheet.write(1, y, row.label, "label")
            for line in lines:
                sheet.write(
                    _LABEL, y, line, f"act-{row.style}" if row.label == "act" else row.style
                )
                y += 1
        return sheet

    def _banner(self, sheet: Sheet, scene: Scene) -> None:
        last = scene.story.last
        condition = last.verdict.condition if last is not None else "gathering"
        sign = condition_sign(condition, ascii=scene.glyphs.plain)
        style = f"banner-{condition}"
        x = sheet.write(0, 0, f" {sign} {condition.upper()} ", style)
        if stalled(scene.story):
            x = sheet.write(x, 0, " STALLED ", "banner-swelling")
        if scene.health.guard is False and not over(scene.story):
            x = sheet.write(x, 0, " UNWATCHED ", "banner-swelling")
        name = sheet.told(scene.story.run)
        room = max(0, min(len(name), (sheet.width - x) // 3))
        x = sheet.write(
            x + 2,
            0,
            headline(scene.story, scene.now),
            f"act-{condition}",
            sheet.width - x - room - 4,
        )
        if room:
            sheet.write(sheet.width - room - 1, 0, name, "heading", room)


def _fitted(sheet: Sheet, told: list[Row], height: int) -> list[tuple[Row, list[str]]]:
    """Each sentence on one line, and those that matter most on two where there is room."""
    width = sheet.width - _LABEL
    spare = height - len(told)
    two = set()
    for label in _SECOND_LINE:
        row = next((r for r in told if r.label == label), None)
        if spare > 0 and row is not None and len(sheet.told(row.text)) > width:
            two.add(label)
            spare -= 1
    out = []
    for row in told:
        text = sheet.told(row.text)
        lines = [text]
        if row.label in two:
            head = wrap(text, width, break_on_hyphens=False)[0]
            lines = [head, text[len(head) :].lstrip()]
        out.append((row, lines))
    return out
