"""Takes snapshots while a solver marches, and the truth about each of them at once."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from probes.spec import FieldSpec
from tests.corpus import levels
from tests.corpus.case import Array, Fields, Run, Spot, Stored, Truth
from tests.corpus.storing import steps_between, stored

# The growing part counts as emerged where it is this many times everything else.
ABOVE = 2.0
# Tiles that hold less of the growing part than this share of the fullest one are not asked.
_FULL = 0.25
# A field that decays is compared with this share of its largest variation at least.
_LEAST = 0.01
# Share of the field at which what grows has shown when it emerged.
_LARGE = 0.1
# Snapshots that a solver still writes after values have ceased to be finite.
_AFTERWARDS = 2


@dataclass(frozen=True, slots=True)
class _Sizes:
    """Of one field in one snapshot: the growing part, the same in the worst tile, the rest's
    variation."""

    part: float
    tile: float
    varied: float


@dataclass
class Recorder:
    """Collects snapshots of one run. store: see `tests.corpus.storing`; floor: of contamination.

    end: contamination at which the run has shown enough. placed: whether the growing part has a
    place of its own. gridded: False for values in an unstructured numbering, without ripple.
    """

    store: str = "f8"
    floor: float = 0.0
    end: float = 30.0
    placed: bool = False
    gridded: bool = True
    snapshots: list[Stored] = field(default_factory=list)
    spots: list[Spot | None] = field(default_factory=list)
    above: list[tuple[float, float]] = field(default_factory=list)
    _sizes: list[dict[str, _Sizes]] = field(default_factory=list)
    _largest: dict[str, float] = field(default_factory=dict)
    _before: dict[str, tuple[Array, Array]] = field(default_factory=dict)
    _holes: dict[str, Array] = field(default_factory=dict)
    _overflow: int | None = None
    _ruined: bool = False

    def take(self, step: int, time: float, fields: Fields, growing: Fields | None = None) -> bool:
        """Add a snapshot; growing: the growing part of some fields, None where nothing grows.

        Returns whether to go on.
        """
        files = {name: stored(values, self.store) for name, values in fields.items()}
        number = len(self.snapshots)
        self.snapshots.append(Stored(step, time, files))
        if not number:
            self._holes = {name: np.isnan(values) for name, values in files.items()}
        self._judge(files, fields, growing or {})
        whole = all(_sound(v[~self._holes[name]]) for name, v in files.items())
        if self._overflow is None and not whole:
            self._overflow = number
        if self._overflow is not None and number >= self._overflow + _AFTERWARDS:
            return False
        return not self._share(self._sizes[-1])[0] > self.end

    def _judge(self, files: Fields, fields: Fields, growing: Fields) -> None:
        sizes, above, spot, most = {}, (0.0, 0.0), None, -1.0
        for name, part in growing.items():
            part = np.asarray(part, dtype=np.float64)
            with np.errstate(all="ignore"):
                clean = self._filled(name, np.asarray(fields[name], dtype=np.float64)) - part
            varied = levels.variation(clean)
            if math.isfinite(varied) and not self._ruined:
                self._largest[name] = max(varied, self._largest.get(name, 0.0))
            own = _Sizes(levels.rms(part), float(levels.tile_rms(part).max()), varied)
            sizes[name] = own
            seen = self._above(name, part, files[name])
            above = (max(above[0], seen[0]), max(above[1], seen[1]))
            box = levels.energy_box(part) if self.placed else None
            if box is not None and own.part > most:
                peak = np.unravel_index(int(np.argmax(np.abs(part))), part.shape)
                spot = Spot(name, box, tuple(int(i) for i in peak), part.size)
                most = own.part
        # What a non-linear solver makes of a ruined field is no measure of it. (A field that is at
        # rest in the first snapshot holds nothing but rounding there.)
        self._ruined |= bool(self._sizes) and self._share(sizes)[0] >= 1.0
        self._sizes.append(sizes)
        self.above.append(above)
        self.spots.append(spot)

    def _share(self, sizes: dict[str, _Sizes]) -> tuple[float, float]:
        """Contamination over the field and in the worst tile, of the field that has most."""
        share, local = 0.0, 0.0
        for name, own in sizes.items():
            least = _LEAST * self._largest.get(name, 0.0)
            size = max(own.varied, least) if math.isfinite(own.varied) else least
            share, local = max(share, _over(own.part, size)), max(local, _over(own.tile, size))
        return share, local

    @property
    def contamination(self) -> list[float]:
        """Of the snapshots so far, over the field."""
        return [self._share(sizes)[0] for sizes in self._sizes]

    def _above(self, name: str, part: Array, file: Array) -> tuple[float, float]:
        """By how much the change of the growing part exceeds that of the rounding of the stored
        numbers, and of all the rest, in the bulk or the ripple of the tiles that it fills."""
        with np.errstate(all="ignore"):
            values = self._filled(name, np.asarray(file, dtype=np.float64))
            rest = values - part
            before = self._before.get(name)
            self._before[name] = (part.copy(), rest)
            if before is None:
                return 0.0, 0.0
            if not (_sound(part) and _sound(rest)):
                return math.inf, math.inf
            floors = levels.rounding(steps_between(values, self.store), self.gridded)
            found = levels.channels(part - before[0], self.gridded)
            others = levels.channels(rest - before[1], self.gridded)
            return _most(found, floors), _most(found, others)

    def _filled(self, name: str, values: Array) -> Array:
        """Masked cells filled with the mean of the others."""
        hole = self._holes[name]
        return np.where(hole, values[~hole].mean(), values) if hole.any() else values

    def emergence(self, clear: bool = False) -> int | None:
        """First snapshot from which on the growing part stays above the rounding of the stored
        numbers (clear: above everything else), until it is nearly as large as the field."""
        found = None
        for k, (above, share) in enumerate(zip(self.above, self.contamination, strict=True)):
            if above[clear] < ABOVE:
                found = None
            elif found is None:
                found = k
            if share >= _LARGE:
                break
        return found

    def healthy(self, **rest: object) -> Run:
        """The run of a solver in which nothing grows that should not."""
        return self._run(Truth("healthy", **self._common()), **rest)

    def sick(
        self, cause: int, factor: float | None, why: str = "", linear: bool = True, **rest: object
    ) -> Run:
        """The run of a solver in which something grows from step `cause` on."""
        truth = Truth(
            "sick",
            cause=cause,
            factor=factor,
            why=why,
            linear=linear,
            emergence=self.emergence(),
            clear=self.emergence(clear=True),
            contamination=tuple(self.contamination),
            local=tuple(self._share(sizes)[1] for sizes in self._sizes),
            floor=self.floor,
            spots=tuple(self.spots),
            **self._common(),
        )
        return self._run(truth, **rest)

    def broken(self, cause: int, bounds: dict[str, FieldSpec], why: str) -> Run:
        """The run of a solver whose values leave their bounds without having grown before."""
        first = next(
            (k for k, s in enumerate(self.snapshots) if _outside(s.fields, bounds)),
            None,
        )
        truth = Truth("sick", cause=cause, why=why, linear=False, broken=first, **self._common())
        return self._run(truth, specs=bounds)

    def _common(self) -> dict[str, object]:
        first = next(iter(self.snapshots[0].fields.values()))
        return {
            "overflow": self._overflow,
            "steps": tuple(s.step for s in self.snapshots),
            "dtype": "<f2"
            if "digits" in self.store or "decimals" in self.store
            else first.dtype.str,
        }

    def _run(self, truth: Truth, **rest: object) -> Run:
        specs = dict(rest.pop("specs", {}))  # type: ignore[call-overload]
        if not self.gridded:
            names = self.snapshots[0].fields
            specs = {n: specs.get(n, FieldSpec(grid=False)) for n in names}
        return Run(self.snapshots, truth, specs=specs, **rest)  # type: ignore[arg-type]


def _most(found: list[Array], others: list[Array]) -> float:
    """Largest ratio of two sets of levels in the tiles that what was found fills."""
    best = 0.0
    for one, other in zip(found, others, strict=True):
        asked = (one >= _FULL * one.max()) & (one > 0.0)
        best = max(best, float(np.where(asked, one / other, 0.0).max()))
    return best


def _over(part: float, whole: float) -> float:
    if part == 0.0:
        return 0.0
    return part / whole if whole > 0.0 else math.inf


def _sound(values: Array) -> bool:
    return bool(np.isfinite(values).all())


def _outside(fields: Fields, bounds: dict[str, FieldSpec]) -> bool:
    for name, spec in bounds.items():
        values = fields[name]
        if spec.min is not None and float(values.min()) < spec.min:
            return True
        if spec.max is not None and float(values.max()) > spec.max:
            return True
    return False
