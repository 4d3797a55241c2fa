"""What `verify` says of a checkpoint; a scripted reading process answers for the file."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from monitor.config import Settings
from monitor.growthlog.records import PinRecord, Snapshot
from monitor.verify import Ask, Finding, Known, judge, known, verify
from probes.errors import ReadError
from probes.spec import FieldSpec, SnapshotSpec, WatchSpec
from probes.wire import (
    Arrival,
    BlockReply,
    Examine,
    Examined,
    Failed,
    Look,
    Looked,
    Packed,
    Pending,
    ReadSnapshot,
    Reply,
    Request,
    Sketched,
)
from tests.monitor.made_log import alarmed_run, contents, snap

PATH = Path("chk_000260.npy")
NOTHING = Packed.of(np.zeros((0,)))


def block(**changes: object) -> BlockReply:
    """A finite block of 3 x 4 cells between 1 and 2."""
    given = {
        "field": "T",
        "part": "",
        "shape": (3, 4),
        "tile": (3, 4),
        "columns": NOTHING,
        "exponent": 0,
        "positions": NOTHING,
        "peak": NOTHING,
        "low": 1.0,
        "high": 2.0,
        "total": 18.0,
        "zeros": 0,
        "dtype": "<f8",
        "spacing_of_storage": 2.0**-52,
    }
    return BlockReply(**(given | changes))  # type: ignore[arg-type]


def log() -> Known:
    return known(contents(alarmed_run()), Path("run"))


def test_without_a_log_only_the_file_speaks() -> None:
    """Finite and in bounds is fit, and the finding says that growth is unknown."""
    finding = judge(PATH, [block()], {}, None, None)
    assert finding.verdict == "fit"
    assert "growth unknown" in finding.text()
    assert "12 values" in finding.text()


def test_non_finite_values_weigh_most() -> None:
    """An index and a count are given, although the log's growth began later."""
    finding = judge(PATH, [block(bad=3, bad_at=(2, 1))], {}, 250, log())
    assert finding.verdict == "overflowed"
    assert "3 non-finite" in finding.text()
    assert "[2, 1]" in finding.text()


def test_a_mask_that_guard_had_learnt_is_no_overflow() -> None:
    """Guard judged this very step and found nothing non-finite beyond its mask."""
    holes = block(bad=3, bad_at=(0, 0))
    assert judge(PATH, [holes], {}, 260, log()).verdict == "fit"
    assert judge(PATH, [holes], {}, 250, log()).verdict == "overflowed"


@pytest.mark.parametrize(("spec", "verdict"), [({"min": 1.5}, "unfit"), ({"max": 2.0}, "fit")])
def test_bounds(spec: dict[str, float], verdict: str) -> None:
    """A value outside its declared bounds makes a checkpoint unfit; a value on them does not."""
    assert judge(PATH, [block()], {"T": FieldSpec(**spec)}, None, None).verdict == verdict


@pytest.mark.parametrize(
    ("step", "verdict"),
    [(260, "fit"), (255, "fit"), (360, "fit"), (380, "unfit"), (900, "unfit")],
)
def test_the_log_knows_what_grew(step: int, verdict: str) -> None:
    """What grew is traced back from the alarm: at most 2e-6 of the field at step 660.

    Backwards at the lower end of the logged factor, 1.01867, it is below the tolerance of 1e-8
    up to step 660 - ln(200) / ln(1.01867) = 373.
    """
    assert judge(PATH, [block()], {}, step, log()).verdict == verdict


def test_a_step_beyond_the_log_is_not_called_clean_by_it() -> None:
    """Fit as a file, with growth unknown."""
    assert "growth unknown" in judge(PATH, [block()], {}, 10**6, log()).text()


def test_a_quiet_log_says_so() -> None:
    """No alarm: the judgement of that snapshot is the reason given."""
    quiet = Known(snapshots=(snap(3), snap(4, "swelling")))
    assert "judged quiet" in judge(PATH, [block()], {}, 60, quiet).text()
    assert judge(PATH, [block()], {}, 80, quiet).verdict == "unfit"


def test_steps_of_pins_and_snapshots_are_found_by_path(tmp_path: Path) -> None:
    """A pinned copy has the step of its record; a snapshot that of its last use of the name."""
    pin = PinRecord(
        seq=1, at=1.0, pin="p", state="kept", folder="pins/p", files=("a.npy",), step=240
    )
    snaps = (snap(3, path="even.npy"), snap(5, path="even.npy"))
    about = Known(None, tmp_path, snaps, (pin,))
    assert about.step_of(tmp_path / "pins" / "p" / "a.npy") == 240
    assert about.step_of(tmp_path / "even.npy") == 100
    assert about.step_of(tmp_path / "other.npy") is None


def scripted(answers: dict[type, Reply | Exception]) -> tuple[Callable[[WatchSpec], Ask], list]:
    """A stand-in for the reading process: an answer per kind of request; watches are noted."""
    watches: list[WatchSpec] = []

    def keeper(watch: WatchSpec) -> Ask:
        watches.append(watch)

        def ask(request: Request, timeout_s: float) -> Reply:
            answer = answers[type(request)]
            if isinstance(answer, Exception):
                raise answer
            return answer

        return ask

    return keeper, watches


def answers(**changes: object) -> dict[type, Reply | Exception]:
    arrival = Arrival(key="00", files=(), step=260)
    out: dict[type, Reply | Exception] = {
        Examine: Examined(
            format="npy",
            fields=(("T", (3, 4), "<f8"),),
            records=1,
            growing=False,
            steps=(None,),
            times=(None,),
        ),
        Look: Looked(arrivals=(arrival,)),
        ReadSnapshot: Sketched(arrival=arrival, blocks=(block(),)),
    }
    by_name = {kind.__name__: kind for kind in out}
    return out | {by_name[name]: value for name, value in changes.items()}  # type: ignore[dict-item]


def test_the_file_is_read_with_no_mask_to_learn() -> None:
    """A mask must not be learnt from the file under test, or its NaN would hide themselves;
    the log's settings for the field are kept."""
    settings = Settings(
        snapshots=SnapshotSpec(pattern=("h_{step}.npy",)), fields={"T": FieldSpec(min=0.0)}
    )
    keeper, watches = scripted(answers())
    finding = verify(Path("odd[1].npy"), Known(settings), keeper)
    assert finding.step == 260
    assert watches[-1].fields["T"] == FieldSpec(path="T", min=0.0, mask="none")
    assert watches[-1].snapshots.pattern == ("odd?1?.npy",)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        (
            {"Examine": Failed(kind="read", what="cut short", remedy="copy it again")},
            "copy it again",
        ),
        ({"Examine": ReadError("the reading process hung")}, "hung"),
        (
            {
                "Look": Looked(
                    pending=(
                        Pending(key="0", path="a", reason="writing", detail="still grows", since=0),
                    )
                )
            },
            "still grows",
        ),
        ({"Look": Looked()}, "not complete"),
        ({"ReadSnapshot": Failed(kind="not-yet", what="changed while being read")}, "changed"),
    ],
)
def test_what_cannot_be_read_is_unreadable(changes: dict[str, object], words: str) -> None:
    """Each way to fail ends in a finding with its reason, never in an exception."""
    keeper, _ = scripted(answers(**changes))
    finding = verify(PATH, None, keeper)
    assert isinstance(finding, Finding)
    assert finding.verdict == "unreadable"
    assert words in finding.text()


def test_the_made_log_is_what_these_tests_think() -> None:
    """Snapshots every 20 steps, alarm at 660."""
    snaps = [s for s in log().snapshots if isinstance(s, Snapshot)]
    assert snaps[0].step == 60
    assert next(s.step for s in snaps if s.verdict.alarmed) == 660
