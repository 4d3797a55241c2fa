"""The step of a user's own matrix: the step's own, or the right-hand side's with an integrator."""

from __future__ import annotations

import math
import zipfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import scipy.io
import scipy.sparse as sp
from numpy.typing import NDArray

from monitor.limits.answer import LimitAnswer
from monitor.limits.judging import Wish
from probes.errors import SettingsError
from probes.limits.assemble import Operator
from probes.limits.integrators import Integrator
from probes.limits.matrix import MatrixAnswer, analyse
from probes.limits.matrixlimit import largest_step
from probes.limits.records import Found
from probes.limits.stepping import MatrixStep, SchemeStep

Array = NDArray[np.float64]

_KINDS = "a Matrix Market file (.mtx), a SciPy sparse matrix (.npz) or an array (.npy)"
_STEPS = 500
DENSE = 600  # unknowns up to which a step function's matrix is formed, column by column


def read_matrix(path: Path) -> sp.csr_array:
    """A square matrix of real, finite numbers. Raises SettingsError."""
    try:
        matrix = _read(path)
    except FileNotFoundError as error:
        raise SettingsError("there is no such file", str(path)) from error
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as error:
        what = f"is not readable as a matrix ({str(error).splitlines()[0][:120]})"
        raise SettingsError(what, str(path), f"give {_KINDS}") from error
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1]:
        shape = " x ".join(str(n) for n in matrix.shape)
        raise SettingsError(f"is {shape}, not square", str(path), "a step maps a state to a state")
    matrix = sp.csr_array(matrix)
    if np.iscomplexobj(matrix.data):
        raise SettingsError("is complex", str(path), "write real and imaginary parts as 2 x 2")
    matrix = matrix.astype(np.float64)
    if not np.isfinite(matrix.data).all():
        at = int(np.flatnonzero(~np.isfinite(matrix.data))[0])
        row = int(np.searchsorted(matrix.indptr, at, side="right")) - 1
        what = f"holds {matrix.data[at]} in row {row}, column {int(matrix.indices[at])}"
        raise SettingsError(what, str(path))
    return matrix


def _read(path: Path) -> Any:
    if path.suffix == ".npz":
        return sp.load_npz(path)
    if path.suffix == ".npy":
        return np.load(path, allow_pickle=False)
    if path.suffix in (".mtx", ".mm"):
        return scipy.io.mmread(path)
    raise ValueError(f"unknown suffix {path.suffix!r}")


def read_weight(path: Path, size: int) -> Array:
    """Positive weights (size,) of the squares in the energy; their roots scale the state."""
    try:
        weight = np.load(path, allow_pickle=False)
    except (OSError, ValueError, EOFError) as error:
        raise SettingsError("is not readable as a .npy array", str(path)) from error
    if weight.shape != (size,):
        what = f"holds {weight.shape} numbers for a matrix of {size} unknowns"
        raise SettingsError(what, str(path), "give one weight per unknown")
    if not (np.isfinite(weight).all() and (weight > 0.0).all()):
        raise SettingsError("holds numbers that are not positive", str(path))
    return np.asarray(np.sqrt(weight.astype(np.float64)))


def answer_of_step(title: str, found: MatrixAnswer, notes: tuple[str, ...]) -> LimitAnswer:
    """A given step's answer: nothing to choose, only a verdict."""
    none = Found.none("the step is given as it is")
    return replace(_answer(title, 0, none, found, Wish()), notes=(*notes, *_notes(found)))


def judge_matrix(matrix: sp.csr_array, scale: Array | None, wish: Wish) -> LimitAnswer:
    """A matrix that is the step itself."""
    weight = "the given energy" if scale is not None else "root mean square, all unknowns alike"
    found = analyse(MatrixStep(matrix, scale), weight, wish.powers or _STEPS, wish.transient_max)
    return answer_of_step(f"the given step's matrix, {matrix.shape[0]} unknowns", found, ())


def judge_operator(
    matrix: sp.csr_array, scale: Array | None, integrator: Integrator, wish: Wish
) -> LimitAnswer:
    """A matrix of the right-hand side, marched by `integrator`."""
    size = matrix.shape[0]
    told = "the given energy" if scale is not None else "root mean square, all unknowns alike"
    operator = Operator(integrator, matrix, None, np.ones(size) if scale is None else scale, told)
    limit = largest_step([operator])
    at = wish.step if wish.step is not None else limit.value
    found = None
    if at:
        step = SchemeStep([operator], at if wish.step is not None else at * (1.0 - 1e-6))
        found = analyse(step, told, wish.powers or _STEPS, wish.transient_max)
    title = f"{integrator.title}: the given right-hand side's matrix, {size} unknowns"
    return _answer(title, integrator.evaluations, limit, found, wish, at or None)


def _answer(
    title: str,
    evaluations: int,
    limit: Found,
    found: MatrixAnswer | None,
    wish: Wish,
    at: float | None = None,
) -> LimitAnswer:
    judged = wish.step is not None or at is None
    word, why, stable = "no stable step", limit.reason, True
    if found is not None:
        word = {"transient": "stable with transient growth"}.get(found.word, found.word)
        why, stable = found.why, found.stable or not judged
    elif limit.value is None:
        word = "no limit"
    return LimitAnswer(
        title=title,
        evaluations=evaluations,
        step=wish.step,
        judged_at=at,
        dt_max=limit,
        symbol=None,
        matrix_dt=None,
        matrix=found,
        budget=None,
        numbers=(),
        verdict=word,
        why=why,
        stable=stable,
        notes=_notes(found),
    )


def _notes(found: MatrixAnswer | None) -> tuple[str, ...]:
    if found is None or not math.isfinite(found.transient.logarithm):
        return ()
    if found.radius.value.value is not None and found.radius.value.value < 1.0 and not found.stable:
        return ("the spectral radius is below one, and errors grow all the same before they decay",)
    return ()
