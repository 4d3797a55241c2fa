"""From settings to schemes, and what is said of bad ones."""

from __future__ import annotations

import msgspec
import numpy as np
import pytest

from probes.errors import SettingsError
from probes.limits.building import box, build, names
from probes.limits.spec import SchemeSpec
from probes.limits.terms import Advection, Bending, Diffusion, Reaction, Stencil, System, Waves
from probes.limits.vonneumann import Analysis

HEAT = {"kind": "diffusion", "coefficient": 1.0}
WIND = {"kind": "advection", "velocity": [1.0]}


def spec(*terms: dict, **keys: object) -> SchemeSpec:
    table = {"spacing": [1.0], "terms": list(terms)} | keys
    return msgspec.convert(table, SchemeSpec)


def nothing(text: str, where: str) -> np.ndarray:
    raise SettingsError(f"{text!r} was looked up", where)


def limit(*terms: dict, **keys: object) -> float | None:
    return Analysis(build(spec(*terms, **keys), nothing)).largest_step().dt.value


def test_every_kind_of_term() -> None:
    """Each kind becomes its term, with the usual stencil, form and mean."""
    kinds = [
        (WIND | {"stencil": "upwind3"}, Advection((1.0,), "upwind3")),
        (HEAT, Diffusion(1.0)),
        ({"kind": "diffusion", "coefficient": [2.0]}, Diffusion((2.0,))),
        ({"kind": "wave", "speed": 3.0, "form": "collocated"}, Waves(3.0, "collocated")),
        ({"kind": "reaction", "rate": -1}, Reaction(-1.0)),
        ({"kind": "bending", "coefficient": 0.5}, Bending(0.5)),
        (
            {"kind": "stencil", "offsets": [[0], [1]], "weights": [1, -1]},
            Stencil(((0,), (1,)), (1.0, -1.0)),
        ),
    ]
    for table, want in kinds:
        (term,) = build(spec(table), nothing).terms
        assert term == want
    (system,) = build(
        spec({"kind": "system", "matrices": [[[0, 1], [1, 0]]], "source": [[0, 2], [-2, 0]]}),
        nothing,
    ).terms
    assert isinstance(system, System)
    assert system.source.tolist() == [[0.0, 2.0], [-2.0, 0.0]]


@pytest.mark.parametrize(
    ("keys", "want"),
    [
        # The whole schemes' limits: LeVeque 2007, sections 10.3, 10.4 (Courant number one).
        ({"integrator": "lax-wendroff"}, 1.0),
        ({"integrator": "upwind"}, 1.0),
        ({"integrator": "ftcs"}, 0.0),
        # 1 + z + z**2 / 2 + z**3 / 6 by its tableau (Heun's third order) and by its coefficients.
        (
            {
                "integrator": "tableau",
                "tableau": [[], [1 / 3], [0, 2 / 3]],
                "weights": [0.25, 0, 0.75],
            },
            3.0**0.5,
        ),
        ({"integrator": "polynomial", "polynomial": [1, 1, 0.5, 1 / 6]}, 3.0**0.5),
        ({"integrator": "leapfrog", "filter": 0.1}, (0.9 / 1.1) ** 0.5),
    ],
)
def test_integrators_by_name(keys: dict, want: float) -> None:
    """Central advection, or what the whole scheme implies, at unit speed and spacing."""
    assert limit(WIND, **keys) == pytest.approx(want, abs=1e-7)


@pytest.mark.parametrize(
    ("order", "want"),
    [(1, 2.0 * 10**2), (2, 2 / 3 * 99)],
)
def test_chebyshev_by_settings(order: int, want: float) -> None:
    """Ten stages without damping reach 2 s**2, or 2 / 3 (s**2 - 1) (Sommeijer and others 1998)."""
    got = limit(HEAT, integrator="rkc", stages=10, order=order, damping=0.0)
    assert got == pytest.approx(want / 4.0, rel=1e-6)


def test_a_term_with_an_integrator_of_its_own_is_split() -> None:
    """Two integrators make two parts, in the order of the terms."""
    made = build(spec(WIND, HEAT | {"integrator": "euler"}, integrator="rk3"), nothing)
    assert [p.integrator.name for p in made.parts] == ["rk3", "euler"]


def test_texts_are_looked_up_with_their_key() -> None:
    """Fields and files come in through the caller; the key is handed along."""
    asked = []

    def lookup(text: str, where: str) -> np.ndarray:
        asked.append((text, where))
        return np.ones((3, 4)) if text == "u" else np.full(4, 0.5)

    made = build(
        spec({"kind": "advection", "velocity": ["u", 2.0]}, spacing=[1.0, "dy.npy"]), lookup
    )
    assert made.shape == (3, 4)
    assert asked == [
        ("dy.npy", "[scheme] spacing[1]"),
        ("u", "[[scheme.terms]] number 1 velocity[0]"),
    ]


def test_the_matrixs_grid() -> None:
    """From the keys, one boundary for all axes, or each end by its own word."""
    made = build(spec(HEAT, spacing=[1.0, 1.0]), nothing)
    assert box(spec(HEAT, spacing=[1.0, 1.0]), made) is None
    found = box(
        spec(HEAT, spacing=[1.0, 1.0], cells=[4, 5], boundary=["periodic", "dirichlet neumann"]),
        made,
    )
    assert found is not None
    assert found.shape == (4, 5)
    assert found.ends == (("periodic", "periodic"), ("dirichlet", "neumann"))


def test_a_large_grids_matrix_is_asked_for() -> None:
    """Fields of 30,000 cells bring no matrix by themselves; smaller ones do."""
    for n, there in ((30_000, False), (300, True)):
        given = spec(HEAT | {"coefficient": "k"})
        made = build(given, lambda text, where, n=n: np.ones(n))  # type: ignore[misc]
        assert (box(given, made) is not None) == there
        asked = msgspec.structs.replace(given, cells=(n,))
        assert box(asked, made) is not None


@pytest.mark.parametrize(
    ("terms", "keys", "said"),
    [
        ((), {}, "names no terms"),
        ((HEAT,), {"spacing": []}, "one cell size per axis"),
        ((HEAT,), {"spacing": [-0.1]}, "spacing: is -0.1; a cell size must be positive"),
        ((HEAT,), {"spacing": [1.0] * 4}, "one to three"),
        ((HEAT,), {"integrator": "rk5"}, "'rk5' is no integrator here; did you mean"),
        ((HEAT,), {"integrator": "rkc"}, "at least two stages"),
        ((HEAT,), {"integrator": "rkc", "stages": 4, "order": 3}, "must be 1 or 2"),
        ((HEAT,), {"integrator": "rkc", "stages": 4, "damping": -2.0}, "not be negative"),
        ((HEAT,), {"integrator": "leapfrog", "filter": 0.7}, "between 0 and 0.5"),
        ((HEAT,), {"integrator": "polynomial", "polynomial": [2.0, 1.0]}, "begins with 1"),
        ((HEAT,), {"integrator": "verlet"}, "term of u_t"),
        (({"kind": "diffusion"},), {}, "coefficient must be given"),
        (({"kind": "wave"},), {}, "speed must be given"),
        (({"kind": "advection", "velocity": [1.0, 2.0]},), {}, "2 components for 1 axis"),
        ((WIND | {"stencil": "upwnd1"},), {}, "did you mean 'upwind1'"),
        ((WIND | {"stencil": "central4"},), {"integrator": "upwind"}, "does not go with upwind"),
        ((WIND | {"stencil": "lax-wendroff"},), {"integrator": "rk4"}, "whole step of its own"),
        (({"kind": "diffusion", "coefficient": [1.0, 2.0]},), {}, "2 values for 1 axis"),
        (({"kind": "stencil", "offsets": [[0]], "weights": [1, 2]},), {}, "one weight for each"),
        (({"kind": "stencil", "offsets": [[0, 1]], "weights": [1]},), {}, "each offset needs 1"),
        (({"kind": "system", "matrices": [[[1, 0], [0]]]},), {}, "not a square matrix"),
        (({"kind": "system", "matrices": [[[1]], [[1]]]},), {}, "2 matrices for 1 axis"),
        (
            ({"kind": "system", "matrices": [[[0, 1], [-1, 0]]], "stencil": "upwind1"},),
            {},
            "no upwind side",
        ),
        (
            (WIND, HEAT | {"integrator": "ab2"}),
            {"integrator": "rk3"},
            "keeps several time levels and cannot be split",
        ),
        (({"kind": "wave", "speed": 1.0, "stencil": "upwind1"},), {}, "'upwind1' is not known"),
    ],
)
def test_bad_settings(terms: tuple[dict, ...], keys: dict, said: str) -> None:
    """Each names what is wrong, and mostly what to write instead."""
    with pytest.raises(SettingsError) as caught:
        build(spec(*terms, **keys), nothing)
    assert said in str(caught.value)


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ({"cells": [4, 4]}, "[4, 4] for 1 axis"),
        ({"cells": [4], "boundary": ["a b c"]}, "one or two words"),
        ({"cells": [4], "boundary": ["fixed"]}, "known are periodic"),
        ({"cells": [4], "boundary": ["periodic", "periodic"]}, "2 entries for 1 axis"),
    ],
)
def test_bad_grids(keys: dict, said: str) -> None:
    """The same for cells and boundary."""
    given = spec(HEAT, **keys)
    with pytest.raises(SettingsError) as caught:
        box(given, build(given, nothing))
    assert said in str(caught.value)


def test_coefficients_that_do_not_fit() -> None:
    """Shapes that cannot be one grid, and a NaN with its cell."""
    fields = {"a": np.ones((3, 4)), "b": np.ones((4, 3)), "c": np.ones((3, 4))}
    fields["c"][1, 2] = np.nan

    def lookup(text: str, where: str) -> np.ndarray:
        return fields[text]

    wind = {"kind": "advection", "velocity": ["a", "b"]}
    with pytest.raises(SettingsError, match=r"do not fit on one grid: shapes \(3, 4\), \(4, 3\)"):
        build(spec(wind, spacing=[1.0, 1.0]), lookup)
    with pytest.raises(SettingsError, match=r"is nan at cell \[1, 2\] \(1 cell\(s\) in all\)"):
        build(spec(HEAT | {"coefficient": "c"}, spacing=[1.0, 1.0]), lookup)


def test_all_names_are_told() -> None:
    """The list in error messages holds the catalogue, what needs settings, and whole schemes."""
    assert {"euler", "rk4", "ab3", "leapfrog", "rkc", "tableau", "lax-wendroff"} <= set(names())
