"""Where it grows: the map of local amplification, and the worst tiles."""

from __future__ import annotations

import math

from monitor.desk import tilemap
from monitor.desk.advice import GRAVE
from monitor.desk.glyphs import RAMP
from monitor.desk.parts.part import Part, Scene
from monitor.desk.sheet import Sheet
from monitor.growthlog.records import TileMap
from monitor.wording import factor_text, number

# While nothing is suspected the ramp ends at a doubling per snapshot, so that noise stays pale.
_QUIET_TOP = math.log(2.0)
_LEAST_TOP = 0.01
_WORST_ROWS = 3


class WherePart(Part):
    key = "w"
    name = "where"
    moves = "another plane"

    def __init__(self) -> None:
        self._plane: int | None = None
        self._planes = 1
        self._shown = 0

    def move(self, by: int) -> None:
        if self._planes > 1:
            self._plane = min(self._planes - 1, max(0, self._shown + by))

    def draw(self, scene: Scene, width: int, height: int, *, chosen: bool = False) -> Sheet:
        record, of = scene.story.maps.get(scene.field, (None, ""))
        array = tilemap.values(record) if record is not None else None
        if record is None or array is None:
            sheet = self.blank(scene, width, height, chosen)
            name = scene.field or "any field"
            sheet.write(2, min(2, height - 1), f"no map of {name} yet", "dim")
            self._worst(sheet, scene, 4)
            return sheet
        stack = tilemap.planes(array)
        self._planes = len(stack)
        wanted = tilemap.worst_plane(stack) if self._plane is None else self._plane
        self._shown = min(self._planes - 1, wanted)
        facts = [(record.f + (f", part {record.part}" if record.part else ""), "")]
        if self._planes > 1:
            facts.append((f"plane {self._shown + 1} of {self._planes}", ""))
        facts.append((f"at {of}", "dim"))
        sheet = self.blank(scene, width, height, chosen, facts)
        last = scene.story.last
        calm = last is None or last.verdict.condition not in ("swelling", *GRAVE)
        top = max(record.high, _QUIET_TOP if calm else _LEAST_TOP)
        used = self._map(sheet, record, stack[self._shown], top)
        self._worst(sheet, scene, 1 + used)
        return sheet

    def _map(self, sheet: Sheet, record: TileMap, plane: tilemap.Array, top: float) -> int:
        """Draw the plane and its ramp; returns the rows used."""
        room = max(1, sheet.height - 3)
        pool = tilemap.pooled(plane, room, max(1, sheet.width - 2))
        steps = tilemap.ramp_steps(pool, top, len(RAMP))
        # Cells of a terminal are about twice as high as wide.
        tall: int = max(1, min(3, room // len(pool), (sheet.width - 2) // (2 * pool.shape[1])))
        wide: int = max(1, min(2 * tall, (sheet.width - 2) // pool.shape[1]))
        for row, line in enumerate(steps):
            for column, step in enumerate(line):
                character = "?" if step < 0 else RAMP[step]
                style = "dim" if step < 0 else f"heat{step}"
                for x in range(wide):
                    for y in range(tall):
                        at = 1 + row * tall + y, 1 + column * wide + x
                        sheet.put(at[1], at[0], character, style)
        y = 1 + len(steps) * tall
        # The ramp would look like another row of the map.
        y += y < sheet.height - 1
        x = sheet.write(1, y, "x1 ", "dim")
        for step, character in enumerate(RAMP):
            sheet.put(x + step, y, character, f"heat{step}")
        sheet.write(x + len(RAMP) + 1, y, f"x{number(math.exp(top), 3)} per snapshot", "dim")
        return y

    def _worst(self, sheet: Sheet, scene: Scene, y: int) -> None:
        last = scene.story.last
        if last is None or last.verdict.condition not in ("swelling", *GRAVE):
            return
        source = last.evidence
        if not source.worst and scene.story.now and scene.story.now.alarm:
            source = scene.story.now.alarm.evidence
        for worst in source.worst[: max(0, min(_WORST_ROWS, sheet.height - y))]:
            told = f"tile {worst.tile}: {worst.share:.0%} of what grows, "
            told += f"{factor_text(worst.factor)} per {scene.story.per}"
            sheet.write(1, y, told)
            y += 1
