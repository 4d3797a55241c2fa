"""What a case of the corpus is: a name, a label, and a way to make a run with its truth."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from probes.spec import FieldSpec

Array = NDArray[np.floating]
Fields = dict[str, Array]
Box = tuple[tuple[int, int], ...]
Label = Literal["healthy", "sick"]
Half = Literal["tuned", "scored"]


@dataclass(frozen=True, slots=True)
class Stored:
    """One snapshot as the solver writes it: solver step, its time, and the arrays in the number
    type they are stored in."""

    step: int
    time: float
    fields: Fields


@dataclass(frozen=True, slots=True)
class Spot:
    """Where the growing part is in one snapshot: 95 % energy box along every axis, largest cell."""

    field: str
    box: Box
    peak: tuple[int, ...]
    cells: int

    @property
    def local(self) -> bool:
        """Whether the box is so much smaller than the grid that finding it says something."""
        return volume(self.box) <= 0.5 * self.cells


@dataclass(frozen=True)
class Truth:
    """What is known of a run.

    cause: first step at which some factor exceeds one, None in healthy runs. factor: growth per
    step, None with the reason in `why`. emergence, clear, overflow: number of the first snapshot in
    which the growing part is above the rounding of the stored numbers (in its ripple or bulk), is
    above everything else there, or in which a stored value is not finite. contamination, local: per
    snapshot, the growing part over the field's variation, over the field and in the worst tile.
    floor: contamination below this is not resolved. spots: per snapshot. broken: number of the
    first snapshot outside declared bounds, for cases without a precursor. steps: of the snapshots.
    dtype: of the stored numbers, "<f2" where fewer digits are kept.
    """

    label: Label
    cause: int | None = None
    factor: float | None = None
    why: str = ""
    linear: bool = True
    emergence: int | None = None
    clear: int | None = None
    overflow: int | None = None
    broken: int | None = None
    contamination: tuple[float, ...] = ()
    local: tuple[float, ...] = ()
    floor: float = 0.0
    spots: tuple[Spot | None, ...] = ()
    steps: tuple[int, ...] = ()
    dtype: str = "<f8"


@dataclass(frozen=True)
class Run:
    """Snapshots in the order in which the solver writes them, and the truth.

    specs: settings of fields. parts: slices of the first axis that are written as files of their
    own, by name (none: whole fields).
    """

    snapshots: list[Stored]
    truth: Truth
    specs: dict[str, FieldSpec] = field(default_factory=dict)
    parts: dict[str, slice] = field(default_factory=dict)


@dataclass(frozen=True)
class Case:
    """One member of a family. what: why it is sick, or what is alarming about it though healthy.

    apart: the reason, for a case that is reported but not scored with the others. removed: the
    reason, for a case that is listed but no longer run.
    """

    name: str
    family: str
    label: Label
    what: str
    make: Callable[[np.random.Generator], Run]
    apart: str = ""
    removed: str = ""

    @property
    def half(self) -> Half:
        """Fixed by the name alone: half of the cases may be looked at while tuning."""
        return "tuned" if _digest(self.name) % 2 else "scored"

    def run(self, draw: int) -> Run:
        """The run of one draw. The same draw gives the same run, bit by bit."""
        return self.make(np.random.default_rng([draw, _digest(self.name)]))


@dataclass
class Family:
    """Cases of one kind of solver, in the order in which they are declared."""

    name: str
    cases: list[Case] = field(default_factory=list)

    def sick(self, name: str, what: str, make: Maker, **rest: str) -> None:
        self.cases.append(Case(f"{self.name}_{name}", self.name, "sick", what, make, **rest))

    def healthy(self, name: str, what: str, make: Maker, **rest: str) -> None:
        self.cases.append(Case(f"{self.name}_{name}", self.name, "healthy", what, make, **rest))


Maker = Callable[[np.random.Generator], Run]


def volume(box: Box) -> int:
    """Cells in an index box [lo, hi) per axis."""
    return math.prod(hi - lo for lo, hi in box)


def _digest(name: str) -> int:
    return int.from_bytes(hashlib.sha256(name.encode()).digest()[:6], "big")
