"""The picture of the desk for the documents."""

from __future__ import annotations

import xml.etree.ElementTree as Tree
from pathlib import Path

from monitor.desk.picture import CELL_HEIGHT, main, until_step
from monitor.growthlog.records import Snapshot
from tests.monitor.desk.made_runs import hostile, runaway, write

SVG = "{http://www.w3.org/2000/svg}"


def test_a_picture_is_well_formed_and_stands_alone(tmp_path: Path) -> None:
    """Parsed as XML, with the facts as text, a title for screen readers, no reference outside."""
    log, out = write(tmp_path / "growth.jsonl", runaway().records), tmp_path / "out.svg"
    assert main([str(log), str(out), "--size", "120x40"]) == 0
    root = Tree.parse(out).getroot()
    words = " ".join(text.text or "" for text in root.iter(f"{SVG}text"))
    for word in ("RUNAWAY", "growth", "levels", "where", "1.0204"):
        assert word in words
    assert "cooling plate" in (root.findtext(f"{SVG}title") or "")
    assert float(root.attrib["height"]) > 40 * CELL_HEIGHT
    assert "http" not in out.read_text().replace("http://www.w3.org/2000/svg", "")
    assert len(list(root.iter(f"{SVG}circle"))) > 200


def test_hostile_names_make_no_broken_picture(tmp_path: Path) -> None:
    """Control characters are forbidden in XML; shown escaped, they do no harm."""
    log, out = write(tmp_path / "growth.jsonl", hostile().records), tmp_path / "out.svg"
    assert main([str(log), str(out), "--size", "80x24", "--keys", "e", "--plain"]) == 0
    assert "\\x1b[2J" in "".join(Tree.parse(out).getroot().itertext())


def test_a_moment_of_the_past(tmp_path: Path) -> None:
    """As it was after step 2,100: growth suspected, no alarm yet."""
    made = runaway()
    kept = until_step(made.records, 2100)
    assert max(r.step or 0 for r in kept if isinstance(r, Snapshot)) == 2100
    assert until_step(made.records, None) == made.records
    log, out = write(tmp_path / "growth.jsonl", made.records), tmp_path / "out.svg"
    main([str(log), str(out), "--until-step", "2100", "--size", "80x24"])
    text = "".join(Tree.parse(out).getroot().itertext())
    assert "SWELLING" in text
    assert "RUNAWAY" not in text
