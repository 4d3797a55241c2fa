"""Say before a launch, or a restart, how large a time step the scheme tolerates, and why.

The scheme stands in [scheme] and [[scheme.terms]] of a stepwarden.toml, or in options:

  stepwarden limit --integrator euler --spacing 0.1 --diffusion 1
  stepwarden limit --integrator rk4 --spacing 1,1 --advection 2,0.5 --advection-stencil upwind3
  stepwarden limit --integrator verlet --spacing 10,10 --wave 'sqrt(9.81 * h)' --snapshot run.npz

Values are numbers, files (k.npy, run.h5:/k) or formulas of a snapshot's fields. With --cells, or
coefficients in files, the step's matrix is assembled with its boundaries and judged as well. A
matrix or a step function of one's own is judged by --matrix and --function.

Exit status: 0 stable, or no step was given; 10 unstable or marginal; 2 bad input.
"""

from __future__ import annotations

from argparse import ArgumentParser, Namespace
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.exits import Exit

if TYPE_CHECKING:
    from monitor.limits.answer import LimitAnswer


def declare(parser: ArgumentParser) -> None:
    parser.add_argument("path", metavar="PATH", nargs="?", type=Path, help="settings or folder")
    scheme = parser.add_argument_group("the scheme")
    scheme.add_argument("--integrator", metavar="NAME", help="euler, heun, rk4, ab3, leapfrog ...")
    scheme.add_argument("--spacing", metavar="DX[,DY[,DZ]]", help="cell sizes")
    scheme.add_argument("--advection", metavar="U[,V[,W]]", help="velocity (--advection=-1,2)")
    scheme.add_argument(
        "--advection-stencil",
        metavar="NAME",
        help="central2, central4, upwind1, upwind3, weno5, compact4, spectral",
    )
    scheme.add_argument("--diffusion", metavar="NU", help="diffusivity, one or one per axis")
    scheme.add_argument("--diffusion-stencil", metavar="NAME", help="central2, central4, spectral")
    scheme.add_argument("--wave", metavar="C", help="speed of waves")
    scheme.add_argument(
        "--wave-form", metavar="FORM", help="staggered (default), second-order, collocated"
    )
    scheme.add_argument("--reaction", metavar="RATE", help="rate, negative where it decays")
    scheme.add_argument("--bending", metavar="B", help="stiffness")
    scheme.add_argument("--stages", metavar="S", type=int, help="of rkc")
    scheme.add_argument("--order", metavar="P", type=int, help="of rkc, 1 or 2")
    scheme.add_argument("--damping", metavar="E", type=float, help="of rkc")
    scheme.add_argument("--filter", metavar="G", type=float, help="Robert-Asselin, of leapfrog")
    scheme.add_argument("--snapshot", metavar="FILE", help="whose fields formulas name")
    matrix = parser.add_argument_group("the matrix")
    matrix.add_argument("--cells", metavar="N[,M[,L]]", help="assemble it on this grid")
    matrix.add_argument(
        "--boundary",
        metavar="WORD[,WORD]",
        help="per axis: periodic, dirichlet, neumann, or both ends: dirichlet/neumann",
    )
    matrix.add_argument(
        "--matrix",
        metavar="FILE",
        type=Path,
        help="one's own: the step's, or with --integrator the right-hand side's (.mtx .npz .npy)",
    )
    matrix.add_argument(
        "--function",
        metavar="MODULE:NAME",
        help="one's own step in Python, from this folder: takes a state, returns the next one",
    )
    matrix.add_argument(
        "--state", metavar="FILE", help="state to linearise --function at (k.npy, run.h5:/k)"
    )
    matrix.add_argument("--weight", metavar="FILE", type=Path, help="its energy weights (.npy)")
    matrix.add_argument("--powers", metavar="K", type=int, help="how far powers are followed")
    matrix.add_argument(
        "--transient-max",
        metavar="X",
        type=float,
        default=1e3,
        help="growth that makes a step unstable in practice (default: 1000)",
    )
    asked = parser.add_argument_group("what is asked")
    asked.add_argument("--step", metavar="DT", type=float, help="judge this time step")
    asked.add_argument("--steps", metavar="N", type=int, help="length of a budget of growth")
    asked.add_argument("--allowed-growth", metavar="X", type=float, help="growth in N steps")
    asked.add_argument("--scan", action="store_true", help="draw the factor against the step")
    asked.add_argument("--picture", metavar="FILE", type=Path, help="write that as SVG")
    asked.add_argument("--json", action="store_true", help="print one JSON object instead of text")


def run(options: Namespace) -> int:
    if options.function is not None:
        answer = _function(options)
    else:
        answer = _scheme(options) if options.matrix is None else _matrix(options)
    return Exit.GOOD if answer.stable else Exit.ALARM


def _matrix(options: Namespace) -> LimitAnswer:
    from monitor.limits.options import TERMS, wish
    from monitor.limits.userstep import judge_matrix, judge_operator, read_matrix, read_weight
    from probes.errors import SettingsError
    from probes.limits.building import integrator
    from probes.limits.spec import SchemeSpec

    if options.scan or options.picture or any(getattr(options, term) for term in TERMS):
        raise SettingsError("goes neither with terms nor with --scan", "--matrix")
    asked = wish(options, 0.0)
    matrix = read_matrix(options.matrix)
    scale = read_weight(options.weight, matrix.shape[0]) if options.weight else None
    if options.integrator:
        spec = SchemeSpec(
            stages=options.stages or 0,
            order=options.order or 2,
            damping=-1.0 if options.damping is None else options.damping,
            filter=options.filter or 0.0,
        )
        answer = judge_operator(matrix, scale, integrator(options.integrator, spec), asked)
    elif options.step is not None:
        raise SettingsError("needs --integrator with --matrix", "--step")
    else:
        answer = judge_matrix(matrix, scale, asked)
    _print(answer, options, None)
    return answer


def _function(options: Namespace) -> LimitAnswer:
    from monitor.limits.coefficients import Coefficients
    from monitor.limits.options import TERMS, wish
    from monitor.limits.stepfunction import StepFunction, judge_function
    from probes.errors import SettingsError

    if options.matrix or options.scan or any(getattr(options, term) for term in TERMS):
        raise SettingsError("goes neither with terms, --matrix nor --scan", "--function")
    if options.step is not None:
        raise SettingsError("is the function's own", "--step", "leave it out")
    if options.state is None:
        raise SettingsError("must be given with --function", "--state", "a file of one state")
    state = Coefficients(Path(), "")(options.state, "--state")
    with StepFunction(options.function, Path()) as function:
        answer = judge_function(function, state, wish(options, 0.0))
    _print(answer, options, None)
    return answer


def _scheme(options: Namespace) -> LimitAnswer:
    from monitor.limits.coefficients import Coefficients
    from monitor.limits.judging import judge
    from monitor.limits.options import scheme_settings, wish
    from monitor.limits.scan import limit_of, svg, sweep
    from probes.errors import SettingsError
    from probes.limits.building import box, build

    if options.weight is not None:
        raise SettingsError("goes with --matrix only", "--weight")
    if options.picture is not None and options.picture.suffix != ".svg":
        raise SettingsError(f"is {options.picture}", "--picture", "pictures are SVG: NAME.svg")
    spec, folder = scheme_settings(options)
    asked = wish(options, spec.step)
    scheme = build(spec, Coefficients(folder, spec.snapshot))
    answer = judge(scheme, box(spec, scheme), asked)
    found = None
    if options.scan or options.picture:
        found = sweep(scheme, limit_of(scheme), asked.step)
    _print(answer, options, found)
    if options.picture and found is not None:
        options.picture.write_text(svg(found, answer.title), encoding="utf-8")
    return answer


def _print(answer: LimitAnswer, options: Namespace, found: object) -> None:
    from monitor.limits.jsonform import json_object
    from monitor.limits.scan import Sweep, drawing
    from monitor.limits.wording import write_up

    if options.json:
        import json

        plain = json_object(answer)
        if isinstance(found, Sweep):
            plain["scan"] = {"step": found.steps, "factor": found.factors}
        print(json.dumps(plain, indent=1, allow_nan=False))
        return
    print(write_up(answer))
    if isinstance(found, Sweep) and options.scan:
        import sys

        print(drawing(found, "utf" not in (sys.stdout.encoding or "").lower()))
