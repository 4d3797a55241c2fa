"""Stories and scenes of the made runs."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from monitor.desk.advice import Health
from monitor.desk.glyphs import glyphs_for
from monitor.desk.parts.part import Scene
from monitor.desk.story import Story
from tests.monitor.desk.made_runs import Maker


def story_of(made: Maker) -> Story:
    story = Story()
    story.take(made.records)
    return story


@pytest.fixture
def scene() -> Callable[..., Scene]:
    """A scene eight seconds after the last record of a made run, a guard present."""

    def make(made: Maker, *, plain: bool = False, health: Health | None = None) -> Scene:
        story = story_of(made)
        names = story.now.series.fields if story.now else []
        return Scene(
            story,
            health or Health(guard=True),
            made.at + 8.0,
            glyphs_for(plain),
            names[0] if names else "",
        )

    return make
