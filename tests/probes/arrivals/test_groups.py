"""From files to snapshots: steps, parts, fields, growing files, and the order they come in."""

from __future__ import annotations

from dataclasses import dataclass, field

import pytest

from probes.arrivals.groups import Grouper
from probes.arrivals.listing import Seen
from probes.arrivals.patterns import Pattern
from probes.arrivals.settled import Rest
from probes.errors import Held, NotYet, ReadError, Refused
from probes.snapshot import Contents
from probes.spec import SnapshotSpec
from probes.wire import Arrival, Pending

WALL = 1_700_000_000.0


@dataclass
class Folder:
    """Files by hand in front of a grouper. contents: what a file says, or the error it gives."""

    patterns: tuple[str, ...]
    spec: SnapshotSpec = field(default_factory=lambda: SnapshotSpec(pattern=()))
    known: set[str] = field(default_factory=set)
    files: dict[str, Seen] = field(default_factory=dict)
    contents: dict[str, Contents | ReadError] = field(default_factory=dict)
    unsettled: dict[str, Rest] = field(default_factory=dict)
    described: list[str] = field(default_factory=list)
    wall: float = WALL

    def __post_init__(self) -> None:
        self.made = tuple(Pattern.of(p, "/run") for p in self.patterns)
        self.grouper = Grouper(self.made, self.spec, self.describe, self.known)

    def describe(self, path: str) -> Contents:
        name = path.rsplit("/", 1)[-1]
        self.described.append(name)
        said = self.contents[name]
        if isinstance(said, ReadError):
            raise said
        return said

    def put(
        self,
        name: str,
        *,
        inode: int = 0,
        size: int = 100,
        age: float = 60.0,
        rest: Rest = Rest.QUIET,
    ) -> None:
        """A file as it is now; inode 0 gives it one of its own."""
        for index, pattern in enumerate(self.made):
            match = pattern.levels[-1].match(name)
            if match is not None:
                self.files[name] = Seen(
                    f"/run/{name}",
                    index,
                    match,
                    inode or 1000 + len(self.files),
                    size,
                    int((self.wall - age) * 1e9),
                )
                break
        else:
            raise AssertionError(f"{name} fits no pattern")
        self.unsettled[f"/run/{name}"] = rest

    def rest(self, one: Seen) -> Rest:
        return self.unsettled.get(one.path, Rest.QUIET)

    def look(self) -> tuple[list[Arrival], list[Pending]]:
        return self.grouper.group(self.files.values(), self.rest, 0.2, self.wall)

    def take(self) -> list[int | None]:
        """Steps that arrive; they are known from then on."""
        arrivals, _ = self.look()
        self.known |= {a.key for a in arrivals}
        return [a.step for a in arrivals]


def growing(*steps: int | None, dt: float = 0.5) -> Contents:
    times = tuple(dt * s if s is not None else None for s in steps)
    return Contents((), records=len(steps), growing=True, steps=steps, times=times)


def test_numeric_order_and_factor() -> None:
    """Steps come in numeric order, times the factor, each content once."""
    folder = Folder(("h_{step}.npy",), SnapshotSpec(pattern=(), step_factor=50))
    for name in ("h_10.npy", "h_9.npy", "h_100.npy"):
        folder.put(name)
    assert folder.take() == [450, 500, 5000]
    assert folder.take() == []


def test_own_field_name() -> None:
    """Without {field} the literal words of the pattern name the field."""
    folder = Folder(("eta_{step}.npy",))
    folder.put("eta_3.npy")
    arrivals, _ = folder.look()
    assert [f.field for f in arrivals[0].files] == ["eta"]


def test_rewritten_step_is_new_content() -> None:
    """A step whose file was written again has another key."""
    folder = Folder(("h_{step}.npy",))
    folder.put("h_5.npy", inode=5)
    assert folder.take() == [5]
    folder.put("h_5.npy", inode=6)
    assert folder.take() == [5]


def test_two_names_of_one_content() -> None:
    """A link beside the file it points to does not make a second snapshot."""
    folder = Folder(("*.h5",), contents=dict.fromkeys(("a.h5", "latest.h5"), Contents(())))
    folder.put("a.h5", inode=77)
    folder.put("latest.h5", inode=77)
    assert len(folder.look()[0]) == 1


def test_given_parts_make_a_snapshot() -> None:
    """With a given number nothing arrives before all parts of one step are there."""
    folder = Folder(("s{step}_{part}.npy",), SnapshotSpec(pattern=(), parts=3))
    folder.put("s10_0.npy")
    folder.put("s10_1.npy")
    assert folder.take() == []
    folder.put("s10_2.npy")
    arrivals, _ = folder.look()
    assert [[f.part for f in a.files] for a in arrivals] == [["0", "1", "2"]]


def test_learnt_parts_and_an_overtaken_group() -> None:
    """The number of parts is learnt from whole steps; a group that lacks one is reported when a
    later step is whole, and never judged."""
    folder = Folder(("s{step}_{part}.npy",))
    for step in (10, 20):
        for part in range(4):
            folder.put(f"s{step}_{part}.npy")
    assert folder.take() == [10, 20]
    for part in range(3):
        folder.put(f"s30_{part}.npy")
    _, pending = folder.look()
    assert [p.reason for p in pending] == ["writing"]
    for part in range(4):
        folder.put(f"s40_{part}.npy")
    assert folder.take() == [40]
    _, pending = folder.look()
    assert [(p.reason, p.step, p.detail) for p in pending] == [
        ("parts", 30, "3 of 4 files of step 30 came")
    ]
    folder.put("s30_3.npy")
    assert folder.take() == [30]


def test_first_group_is_not_taken_while_files_come() -> None:
    """Without a number given the first step has to be at rest for a while."""
    folder = Folder(("s{step}_{part}.npy",))
    folder.put("s10_0.npy", age=0.3)
    assert folder.take() == []
    folder.put("s10_1.npy", age=0.0)
    folder.wall += 0.5
    assert folder.take() == [10]


@pytest.mark.parametrize("patterns", [("{field}_{step}.npy",), ("u_{step}.npy", "v_{step}.npy")])
def test_fields_in_files_of_their_own(patterns: tuple[str, ...]) -> None:
    """Fields of one step belong together, by place-holder or by several patterns."""
    folder = Folder(patterns)
    for name in ("u_1.npy", "v_1.npy", "u_2.npy"):
        folder.put(name)
    arrivals, _ = folder.look()
    assert [(a.step, sorted(f.field for f in a.files)) for a in arrivals] == [(1, ["u", "v"])]


def test_a_settling_file_holds_back_later_ones_for_a_while() -> None:
    """A file that is complete at once by an event must not overtake an earlier one that needs its
    quiet time; but one that never settles holds nothing up for long."""
    folder = Folder(("h_{step}.npy",))
    folder.put("h_10.npy", age=0.1, rest=Rest.NONE)
    folder.put("h_20.npy", age=0.0)
    folder.put("h_5.npy")
    assert folder.take() == [5]
    folder.wall += 1.0
    assert folder.take() == []
    folder.put("h_10.npy", age=0.1, inode=1000)
    assert folder.take() == [10, 20]
    folder.put("h_30.npy", age=0.0, rest=Rest.NONE)
    folder.put("h_40.npy")
    assert folder.take() == []
    folder.wall += 2.1
    assert folder.take() == [40]
    folder.put("h_60.npy")
    for second in range(59):
        folder.put("h_50.npy", inode=50, size=second, age=0.0, rest=Rest.NONE)
        assert folder.take() == []
        folder.wall += 1.0
    folder.wall += 1.0
    folder.put("h_50.npy", inode=50, size=99, age=0.0, rest=Rest.NONE)
    assert folder.take() == [60]


def test_settling_files_without_steps_keep_the_order_of_writing() -> None:
    """Of two names in turn, the one written later waits for the one written before."""
    folder = Folder(("T_?.npy",), contents=dict.fromkeys(("T_a.npy", "T_b.npy"), Contents(())))
    folder.put("T_a.npy", age=0.15, rest=Rest.NONE)
    folder.put("T_b.npy", age=0.05)
    assert folder.look()[0] == []
    folder.unsettled.clear()
    assert [a.files[0].path[-7:] for a in folder.look()[0]] == ["T_a.npy", "T_b.npy"]


def test_step_from_contents() -> None:
    """Without {step} the file tells step and time; it is opened once as long as it is the same."""
    folder = Folder(("T_?.npz",), SnapshotSpec(pattern=(), step_factor=2))
    folder.contents["T_a.npz"] = Contents((), steps=(30,), times=(1.5,))
    folder.put("T_a.npz")
    for _ in range(3):
        arrivals, _ = folder.look()
    assert [(a.step, a.time) for a in arrivals] == [(60, 1.5)]
    assert folder.described == ["T_a.npz"]


def test_parts_overwritten_in_place() -> None:
    """Parts without steps in their names belong together when they hold the same step."""
    folder = Folder(("last_{part}.npz",), SnapshotSpec(pattern=(), parts=2))
    for part, step in (("0", 10), ("1", 8)):
        folder.contents[f"last_{part}.npz"] = Contents((), steps=(step,))
        folder.put(f"last_{part}.npz", inode=int(part) + 1)
    assert folder.take() == []
    folder.contents["last_1.npz"] = Contents((), steps=(10,))
    folder.put("last_1.npz", inode=2, age=59.0)
    assert folder.take() == [10]


def test_growing_file() -> None:
    """Each new record arrives once; the last one only when the file has been quiet, since its
    writer may be back after closing it; the file is opened
    again only when it has changed."""
    folder = Folder(("run.h5",))
    folder.contents["run.h5"] = growing(0, 10)
    folder.put("run.h5", inode=9, rest=Rest.NONE)
    assert folder.take() == [0]
    folder.put("run.h5", inode=9, rest=Rest.CLOSED)
    assert folder.take() == []
    folder.put("run.h5", inode=9)
    arrivals, _ = folder.look()
    assert [(a.step, a.time, a.record, a.growing) for a in arrivals] == [(10, 5.0, 1, True)]
    assert folder.take() == [10]
    assert folder.take() == []
    assert len(folder.described) == 1
    folder.contents["run.h5"] = growing(0, 10, 20)
    folder.put("run.h5", inode=9, size=200)
    assert folder.take() == [20]
    assert len(folder.described) == 2


def test_growing_file_begun_again() -> None:
    """A file cut and begun again under its inode has new records, also if they are of the same
    steps; a new process knows from the keys in the log which of them are judged."""
    folder = Folder(("run.h5",))
    folder.contents["run.h5"] = growing(0, 10, 20)
    folder.put("run.h5", inode=9)
    assert folder.take() == [0, 10, 20]
    folder.contents["run.h5"] = growing(0, 10)
    folder.put("run.h5", inode=9, size=60)
    assert folder.take() == [0, 10]
    later = Folder(("run.h5",), known=set(folder.known))
    later.contents["run.h5"] = growing(0, 10, 20)
    later.put("run.h5", inode=9, size=90)
    assert later.take() == [20]


def test_growing_file_begun_again_with_another_step_while_nobody_looked() -> None:
    """The same steps at other times are other records."""
    folder = Folder(("run.h5",))
    folder.contents["run.h5"] = growing(0, 10, dt=0.5)
    folder.put("run.h5", inode=9)
    folder.take()
    later = Folder(("run.h5",), known=set(folder.known))
    later.contents["run.h5"] = growing(0, 10, 20, dt=0.25)
    later.put("run.h5", inode=9, size=150)
    assert later.take() == [10, 20]


@pytest.mark.parametrize(
    ("error", "reason"),
    [
        (NotYet("half"), "writing"),
        (Held("held"), "held"),
        (Refused("external"), "refused"),
        (ReadError("damaged"), "broken"),
    ],
)
def test_why_a_file_is_not_judged(error: ReadError, reason: str) -> None:
    """Each kind of trouble has its reason, since the first time it was seen."""
    folder = Folder(("T_?.npz",))
    folder.contents["T_a.npz"] = error
    folder.put("T_a.npz")
    folder.look()
    folder.wall += 10.0
    arrivals, pending = folder.look()
    assert arrivals == []
    assert [(p.reason, p.since) for p in pending] == [(reason, WALL)]


def test_held_and_half_written_in_turn() -> None:
    """A writer that keeps readers out is seen now as holding the file, now as half way through:
    the time since the first trouble counts on, until the file could be read."""
    folder = Folder(("T_?.npz",))
    for n in range(5):
        folder.contents["T_a.npz"] = Held("held") if n % 2 else NotYet("half")
        folder.put("T_a.npz", inode=3, size=100 + n)
        _, pending = folder.look()
        assert [p.since for p in pending] == [WALL]
        folder.wall += 20.0
    folder.contents["T_a.npz"] = Contents(())
    folder.put("T_a.npz", inode=3, size=200)
    assert len(folder.look()[0]) == 1
    folder.contents["T_a.npz"] = Held("held")
    folder.put("T_a.npz", inode=3, size=300)
    _, pending = folder.look()
    assert [p.since for p in pending] == [folder.wall]


def test_closed_files_are_tried_ever_less_often() -> None:
    """An unchanged file that cannot be opened is retried with growing pauses, at once when it
    changes, and called broken when it has been at rest and incomplete for over a minute."""
    folder = Folder(("T_?.npz",))
    folder.contents["T_a.npz"] = NotYet("half")
    folder.put("T_a.npz", inode=3)
    for _ in range(200):
        folder.look()
        folder.wall += 0.1
    assert 5 <= len(folder.described) <= 12
    folder.wall += 45.0
    _, pending = folder.look()
    assert [p.reason for p in pending] == ["broken"]
    folder.contents["T_a.npz"] = Contents(())
    folder.put("T_a.npz", inode=3, size=200)
    arrivals, pending = folder.look()
    assert (len(arrivals), pending) == (1, [])
