"""From the command line, and a settings file if there is one, to a scheme's settings."""

from __future__ import annotations

import math
from argparse import Namespace
from pathlib import Path
from typing import Any, cast

import msgspec

from monitor.config import load
from monitor.limits.judging import Wish
from monitor.logfinding import SETTINGS_NAME
from probes.errors import SettingsError
from probes.limits.spec import SchemeSpec, TermSpec

# Options that name a term, and with it a scheme of their own beside that of a settings file.
TERMS = ("diffusion", "advection", "wave", "reaction", "bending")


def scheme_settings(options: Namespace) -> tuple[SchemeSpec, Path]:
    """The scheme to be judged and the folder its paths start from.

    Terms on the command line replace those of the file; other options override single keys.
    Raises SettingsError.
    """
    spec, folder = _from_file(options)
    terms = _terms(options)
    changes: dict[str, Any] = {}
    if terms:
        changes["terms"] = terms
    if options.integrator:
        changes["integrator"] = options.integrator
    if options.spacing:
        changes["spacing"] = tuple(amounts(options.spacing))
    if options.cells:
        changes["cells"] = tuple(_whole_numbers(options.cells, "--cells"))
    if options.boundary:
        words = options.boundary.split(",")
        changes["boundary"] = tuple(word.replace("/", " ").strip() for word in words)
    for key in ("stages", "damping", "order", "filter", "snapshot"):
        value = getattr(options, key)
        if value is not None:
            changes[key] = value
    return msgspec.structs.replace(spec, **changes), folder


def wish(options: Namespace, step: float) -> Wish:
    """What is asked, with the settings file's step where none is given."""
    step = options.step if options.step is not None else step
    if step < 0.0 or not math.isfinite(step) or (options.step is not None and step == 0.0):
        raise SettingsError(f"is {step:g}", "--step", "a time step must be positive")
    if (options.steps is None) != (options.allowed_growth is None):
        raise SettingsError(
            "need each other", "--steps and --allowed-growth", "like --steps 10000 2"
        )
    steps, growth = options.steps or 0, options.allowed_growth or 1.0
    if options.steps is not None and (steps < 1 or not growth > 1.0 or not math.isfinite(growth)):
        raise SettingsError(
            f"are {steps} and {growth:g}",
            "--steps and --allowed-growth",
            "at least one step and a growth over 1",
        )
    if options.powers is not None and options.powers < 1:
        raise SettingsError(f"is {options.powers}", "--powers", "follow at least one step")
    if not options.transient_max > 1.0:
        raise SettingsError(f"is {options.transient_max:g}", "--transient-max", "must be over 1")
    return Wish(step or None, steps, growth, options.powers or 0, options.transient_max)


def amounts(text: str) -> list[float | str]:
    """Numbers and texts between commas outside of parentheses: "1,0.5", "u.npy,hypot(a,b)"."""
    parts, depth = [""], 0
    for c in text:
        depth += (c == "(") - (c == ")")
        if c == "," and depth == 0:
            parts.append("")
        else:
            parts[-1] += c
    return [_amount(part.strip()) for part in parts]


def _amount(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text


def _one(text: str, option: str) -> float | str:
    found = amounts(text)
    if len(found) != 1:
        raise SettingsError(f"holds {len(found)} values", option, "give one")
    return found[0]


def _terms(options: Namespace) -> tuple[TermSpec, ...]:
    found = []
    if options.advection:
        found.append(
            TermSpec(
                kind="advection",
                velocity=tuple(amounts(options.advection)),
                stencil=options.advection_stencil or "",
            )
        )
    elif options.advection_stencil:
        raise SettingsError("needs --advection", "--advection-stencil")
    if options.diffusion:
        values = amounts(options.diffusion)
        found.append(
            TermSpec(
                kind="diffusion",
                coefficient=values[0] if len(values) == 1 else tuple(values),
                stencil=options.diffusion_stencil or "",
            )
        )
    if options.wave:
        found.append(
            TermSpec(kind="wave", speed=_one(options.wave, "--wave"), form=options.wave_form or "")
        )
    if options.reaction:
        found.append(TermSpec(kind="reaction", rate=_one(options.reaction, "--reaction")))
    if options.bending:
        found.append(TermSpec(kind="bending", coefficient=_one(options.bending, "--bending")))
    return tuple(found)


def _from_file(options: Namespace) -> tuple[SchemeSpec, Path]:
    path = cast(Path | None, options.path)
    if path is None:
        if any(getattr(options, term) for term in TERMS):
            return SchemeSpec(), Path()
        path = Path(SETTINGS_NAME)
        if not path.exists():
            raise SettingsError(
                "nothing to judge: no term is given and there is no settings file here",
                remedy="try --integrator euler --spacing 0.1 --diffusion 1, or name a file",
            )
    file = path / SETTINGS_NAME if path.is_dir() else path
    settings = load(file, watching=False)
    if settings.scheme is None:
        raise SettingsError(
            "says nothing of the scheme", str(file), "write [scheme] and [[scheme.terms]]"
        )
    return settings.scheme, file.parent


def _whole_numbers(text: str, option: str) -> list[int]:
    try:
        return [int(part) for part in text.split(",")]
    except ValueError as error:
        raise SettingsError(f"is {text!r}", option, "whole numbers like 64,64") from error
