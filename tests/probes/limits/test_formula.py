"""Formulas of fields."""

from __future__ import annotations

import numpy as np
import pytest

from probes.errors import SettingsError
from probes.limits.formula import evaluate

FIELDS = {"h": np.array([4.0, 9.0]), "u": np.array([-1.0, 2.0]), "w": np.ones(3)}


def value(text: str) -> list[float]:
    return np.atleast_1d(evaluate(text, lambda name: FIELDS[name], "coefficient")).tolist()


@pytest.mark.parametrize(
    ("text", "want"),
    [
        ("3", [3.0]),
        ("-h", [-4.0, -9.0]),
        ("sqrt(h) + abs(u)", [3.0, 5.0]),
        ("2 * h ** 2 / 4 - 1", [7.0, 39.5]),
        ("hypot(3, 4)", [5.0]),
        ("max(u, 0) + min(u, 0)", [-1.0, 2.0]),
        ("exp(log(h))", pytest.approx([4.0, 9.0])),
    ],
)
def test_arithmetic(text: str, want: object) -> None:
    """As NumPy would have it, cell by cell."""
    assert value(text) == want


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("open('x')", "not understood"),
        ("__import__('os')", "not understood"),
        ("h.dtype", "not understood"),
        ("h[0]", "not understood"),
        ("lambda: 1", "not understood"),
        ("True", "not understood"),
        ("sqrt(h, h, h, h)", "cannot be worked out"),
        ("h +", "neither a file nor a formula"),
        ("h + w", "different shapes"),
        ("h" + "+h" * 400, "too long"),
    ],
)
def test_nothing_else_is_understood(text: str, said: str) -> None:
    """No calls, attributes, items or names beyond fields and a few functions."""
    with pytest.raises(SettingsError, match=said):
        value(text)
