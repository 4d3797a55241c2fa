"""What a record loses when there is too much for it, and how long records are."""

from __future__ import annotations

import random
import statistics

from monitor.growthlog.fitting import shortened
from monitor.growthlog.read import decode
from monitor.growthlog.records import (
    Channel,
    Estimate,
    Evidence,
    Line,
    Mode,
    Snapshot,
    Verdict,
    Worst,
)
from monitor.growthlog.write import as_logged, encode


class Maker:
    """Evidence with numbers of full length, as measurements have them."""

    def __init__(self, seed: int) -> None:
        self._random = random.Random(seed)

    def between(self, low: float, high: float) -> float:
        return self._random.uniform(low, high)

    def channel(self, name: str) -> Channel:
        return Channel(
            f=name,
            lo=self.between(280, 290),
            hi=self.between(300, 310),
            bulk=self.between(-8, -7),
            ripple=self.between(-30, -12),
            own=self.between(-20, -18),
            floor=self.between(-35, -34),
            cells=self.between(2, 5),
            vary=self.between(1, 3),
            total=self.between(1e6, 1e7),
        )

    def mode(self, name: str) -> Mode:
        return Mode(
            f=name,
            re=self.between(0.3, 1.6),
            im=self.between(0, 0.4),
            factor=self.between(0.97, 1.03),
            low=self.between(0.97, 1.03),
            high=self.between(0.97, 1.03),
            residual=self.between(1e-4, 0.1),
            span=6,
            share=self.between(0, 1),
            cells=self.between(2, 9),
            axes=(self.between(2, 9), self.between(2, 9)),
            held=3,
            match=self.between(0.9, 1),
            gain=self.between(0, 3),
            foretold=self.between(0, 3),
            grown=self.between(0, 9),
            amp=self.between(-30, -10),
        )

    def evidence(self, names: list[str], modes: int, worst: int) -> Evidence:
        return Evidence(
            channels=tuple(self.channel(name) for name in names),
            stride=20,
            dt=self.between(1e-4, 1e-3),
            fresh=240,
            modes=tuple(self.mode(names[0]) for _ in range(modes)),
            line=Line(
                names[0],
                slope=self.between(0.01, 0.9),
                rise=self.between(3, 9),
                rms=self.between(0.01, 0.1),
                span=20,
                tile=137,
                cells=self.between(2, 5),
                over=self.between(1, 9),
            ),
            worst=tuple(
                Worst(self._random.randrange(256), self.between(0, 1), self.between(0.97, 1.03))
                for _ in range(worst)
            ),
            where=(names[0], ""),
        )

    def snapshot(self, evidence: Evidence, verdict: Verdict) -> Snapshot:
        return Snapshot(
            seq=15241,
            at=1.76e9 + self.between(0, 1e5),
            key=f"{self._random.getrandbits(64):016x}",
            path="out/T_110780.npy",
            index=5539,
            seg=1,
            step=110780,
            time=self.between(30, 60),
            mtime=1.76e9 + self.between(0, 1e5),
            evidence=evidence,
            verdict=verdict,
        )


def grow(maker: Maker, evidence: Evidence) -> Evidence:
    """What an alarm adds."""
    from msgspec.structs import replace

    share = Estimate(
        maker.between(1e-9, 1e-5), maker.between(1e-9, 1e-5), maker.between(1e-9, 1e-5), 0.8
    )
    return replace(evidence, contamination=share, local=share, box=((120, 136), (40, 60)), edges={})


def test_a_quiet_record_is_short() -> None:
    """A run's median record (one field, a mode, a line, three worst tiles, quiet) has 600 bytes at
    most."""
    maker = Maker(73901)
    lengths = [
        len(encode(maker.snapshot(maker.evidence(["T"], 1, 3), Verdict(condition="quiet"))))
        for _ in range(200)
    ]
    assert statistics.median(lengths) <= 600


def test_nothing_is_cut_from_an_ordinary_alarm() -> None:
    """Four fields, four modes and five worst tiles at an alarm fit as they are."""
    maker = Maker(5519)
    evidence = grow(maker, maker.evidence(["h", "u", "v", "T"], 4, 5))
    assert as_logged(evidence).cut == 0


def test_what_is_left_out_and_in_which_order() -> None:
    """Worst tiles go first, then edges, limits, modes and channels, as far as needed; `cut` counts
    the entries, and a channel with non-finite values stays to the last."""
    maker = Maker(20417)
    names = [f"species_{n:02d}" for n in range(30)]
    from msgspec.structs import replace

    evidence = replace(
        maker.evidence(names, 4, 8),
        edges={"axis 0 low": 0.5},
        limits={"advection": 0.9},
    )
    channels = list(evidence.channels)
    channels[17] = replace(channels[17], bad=3, ripple=-99.0)
    evidence = replace(evidence, channels=tuple(channels))

    slightly = as_logged(replace(evidence, channels=evidence.channels[:15]))
    assert len(slightly.worst) == 4
    assert slightly.cut >= 4

    seen = as_logged(evidence)
    assert (len(seen.worst), seen.edges, seen.limits) == (4, {}, {})
    assert len(seen.modes) <= 2
    assert channels[17].f in [c.f for c in seen.channels]
    dropped = [c.ripple for c in channels if c.f not in {k.f for k in seen.channels}]
    kept = [c.ripple for c in channels if c.f in {k.f for k in seen.channels} and not c.bad]
    assert max(r for r in dropped if r is not None) <= min(r for r in kept if r is not None)
    assert seen.cut == 4 + 1 + 1 + (4 - len(seen.modes)) + (30 - len(seen.channels))


def test_fields_with_bounds_are_cut_last() -> None:
    """A broken bound must not be overlooked because a field has the calmest ripple of thirty."""
    from msgspec.structs import replace

    maker = Maker(77_003)
    evidence = maker.evidence([f"species_{n:02d}" for n in range(30)], 2, 3)
    channels = list(evidence.channels)
    channels[11] = replace(channels[11], bounded=True, ripple=-99.0)
    seen = as_logged(replace(evidence, channels=tuple(channels)))
    assert seen.cut > 10
    assert channels[11].f in [c.f for c in seen.channels]


def test_long_sentences_and_paths_are_shortened_where_it_hurts_least() -> None:
    """A sentence loses its end and a path its beginning."""
    maker = Maker(31)
    record = maker.snapshot(
        maker.evidence(["T"], 1, 3), Verdict(condition="runaway", why="growth " * 200)
    )
    from msgspec.structs import replace

    back = decode(encode(replace(record, path="deep/" * 1000 + "T_000120.npy")))
    assert isinstance(back, Snapshot)
    assert back.verdict.why.startswith("growth growth")
    assert back.verdict.why.endswith("...")
    assert back.path.startswith("...")
    assert back.path.endswith("deep/T_000120.npy")


def test_shortening_counts_escapes() -> None:
    """Beyond ASCII a character takes six bytes or twelve of the line, and is kept whole or not."""
    assert shortened("abc", 3) == "abc"
    assert shortened("abcd", 3) == "..."
    assert shortened("ééé", 15) == "éé..."
    assert shortened("\U0001f30a" * 2, 23) == "\U0001f30a..."
    assert shortened("out/T_1.npy", 8, keep_end=True) == "...1.npy"
