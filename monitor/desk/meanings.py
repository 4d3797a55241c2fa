"""What each part shows, how it is computed, and when not to trust it: the texts behind `?`.

Line breaks inside a paragraph are of the source only; the screen fills them anew.
"""

from __future__ import annotations

from monitor.desk.series import WINDOW

MEANINGS = {
    "verdict": """
What the fields say. gathering: too few snapshots; quiet: nothing grows that the grid does not
carry; swelling: growth suspected; runaway: the alarm, a constant factor held and a sign that grid
or step make it; overflowed: values that are not finite.

Headroom counts steps from the last snapshot at the present rate, as a range. Ruin is where the
growing part is as large as the field.

Quiet is no proof of stability: instabilities that are smooth in space, or faster than the snapshots
come, can be missed.
""",
    "growth": f"""
Factor per step by which the change from snapshot to snapshot grows, fitted to the last {WINDOW}
snapshots. Full: ripple, the grid-scale part. Dotted: bulk, everything. Mode: the factor of the one
growing part that came up longest, which may still be hidden under larger ones that do not grow. The
dashed line is one: above it something grows. On the axis: k kept checkpoint, o==o when the growth
began, A alarm.

Do not trust a few points above one: a start, a source or an arriving wave raises both. The verdict
asks for a factor that holds.
""",
    "levels": """
Sizes in powers of ten, in the field's own units: ripple (full) and bulk (dotted) of the change
between snapshots; the field's variation; and what rounding in storage alone would give the ripple.
A straight rise is a constant factor per step; where it meets the field's variation is ruin.

Ripple near the rounding line says nothing, and a healthy field that grows carries its rounding
noise up with it.
""",
    "where": """
Growth of the ripple from one snapshot to the next, tile by tile. Axis 0 runs down, axis 1 to the
right; where the room is small, neighbours are drawn as the largest of them. Blank: does not grow;
denser: grows faster, up to the factor under the map; ?: below rounding. Guard writes a map on a
change of condition and every 32nd snapshot.

A tile shows growth seen there, not where it began: a wave that arrives raises a tile as well.
""",
    "events": """
What changed, as guard wrote it to the growth log, the newest at the bottom: conditions, segments,
pins, acts and what came of them, remarks. Times are this machine's local time.

What guard could not write (a full disk) is missing here until it can.
""",
    "arrivals": """
The last snapshots that guard judged, the newest at the bottom, and those that it skipped, with the
reason.

A snapshot that was overwritten before it could be read is listed as missed: it was not judged.
""",
    "kept": """
Checkpoints that guard keeps safe from the solver's rotation. Provisional ones give way to newer
ones while the run is quiet; an alarm keeps those from before the growth began. Verified: the copy
was read again and holds the same values.

Verified does not mean clean: see the line `clean` of the verdict.
""",
    "settings": """
The exact settings that guard works with, as it wrote them to the log when it began, and the
versions of what it runs on.

They change only when guard is started again: edit stepwarden.toml and do so.
""",
}


def paragraphs(name: str) -> list[str]:
    """The text of one part, a string per paragraph."""
    return [" ".join(p.split()) for p in MEANINGS[name].strip().split("\n\n")]
