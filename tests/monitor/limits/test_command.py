"""`stepwarden limit` as a user meets it."""

from __future__ import annotations

import json
import math
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest
import scipy.io
import scipy.sparse as sp

from monitor.cli import main
from monitor.exits import Exit
from tests.monitor.here import Here


def ask(words: str, capsys: pytest.CaptureFixture[str]) -> tuple[int, dict]:
    """Status and the JSON object."""
    status = main(["limit", *words.split(), "--json"])
    return status, json.loads(capsys.readouterr().out)


def told(words: list[str], capsys: pytest.CaptureFixture[str]) -> tuple[int, str]:
    """Status and everything said."""
    status = main(["limit", *words])
    out, err = capsys.readouterr()
    return status, out + err


def test_forward_euler_heat(capsys: pytest.CaptureFixture[str]) -> None:
    """dt <= h**2 / 2 (LeVeque 2007, section 9.3): without a step the status is 0 and all keys that
    are promised are there."""
    status, got = ask("--integrator euler --spacing 0.1 --diffusion 1", capsys)
    assert status == Exit.GOOD
    assert got["dt_max"] == pytest.approx(0.005, rel=1e-6)
    assert got["cells_per_wavelength"] == pytest.approx(2.0)
    assert got["numbers"][0]["name"] == "diffusion number"
    assert got["numbers"][0]["alone"] == pytest.approx(0.5, rel=1e-6)
    assert got["verdict"]
    assert {"factor", "why", "step"} <= got.keys()


@pytest.mark.parametrize(("step", "status", "factor"), [(0.005, 0, 1.0), (0.006, 10, 1.4)])
def test_a_given_step(
    step: float, status: int, factor: float, capsys: pytest.CaptureFixture[str]
) -> None:
    """At the limit stable, above it |1 - 4 r| = 1.4 (LeVeque 2007, section 9.6)."""
    got_status, got = ask(f"--integrator euler --spacing 0.1 --diffusion 1 --step {step}", capsys)
    assert got_status == status
    assert got["factor"] == pytest.approx(factor, rel=1e-9)
    assert got["stable"] == (status == 0)


@pytest.mark.parametrize(
    ("words", "want"),
    [
        # Yee 1966: 1 / (c sqrt(3)) on a unit cube; sqrt(8) with central differences (Durran 2010);
        # |a| + |b| for upwind; Euler decay 2 / rate; a beam 1 / 2 (Hughes 1987).
        ("--integrator verlet --spacing 1,1,1 --wave 1", 3.0**-0.5),
        ("--integrator rk4 --spacing 2 --advection 1 --advection-stencil central2", 2 * 8**0.5),
        ("--integrator euler --spacing 1,1 --advection 1,-1 --advection-stencil upwind1", 0.5),
        ("--integrator euler --spacing 1 --reaction=-4", 0.5),
        ("--integrator verlet --spacing 1 --bending 1", 0.5),
        ("--integrator rkc --stages 5 --order 1 --damping 0 --spacing 1 --diffusion 1", 12.5),
        ("--integrator leapfrog --filter 0.1 --spacing 1 --advection 1", (0.9 / 1.1) ** 0.5),
    ],
)
def test_simple_cases(words: str, want: float, capsys: pytest.CaptureFixture[str]) -> None:
    """The options of the simple cases."""
    assert ask(words, capsys)[1]["dt_max"] == pytest.approx(want, rel=1e-6)


def test_a_scheme_without_a_stable_step(capsys: pytest.CaptureFixture[str]) -> None:
    """Heun with central advection: limit zero, and 1.25e-5 a step at a tenth of the Courant number,
    which a budget may allow (both facts are wanted)."""
    words = "--integrator heun --spacing 1 --advection 1 --step 0.1"
    status, got = ask(words, capsys)
    assert (status, got["dt_max"]) == (10, 0.0)
    assert got["factor"] - 1.0 == pytest.approx(1.25e-5, rel=1e-3)
    status, got = ask(f"{words} --steps 10000 --allowed-growth 2", capsys)
    assert status == Exit.GOOD
    assert got["verdict"] == "stable within the budget"
    want = (4.0 * (2.0 ** (2.0 / 10_000) - 1.0)) ** 0.25
    assert got["budget"]["dt_max"] == pytest.approx(want, rel=1e-6)
    assert ask(f"{words} --steps 100000 --allowed-growth 2", capsys)[0] == Exit.ALARM


def test_a_double_root_is_marginal(capsys: pytest.CaptureFixture[str]) -> None:
    """Leapfrog at Courant number 1 (Strikwerda 2004, section 4.2): status 10."""
    words = "--integrator leapfrog --spacing 1 --advection 1 --step"
    assert ask(f"{words} 1", capsys)[1]["verdict"] == "marginal"
    assert ask(f"{words} 1", capsys)[0] == Exit.ALARM
    assert ask(f"{words} 0.999", capsys)[0] == Exit.GOOD


def test_the_matrix_with_its_boundaries(capsys: pytest.CaptureFixture[str]) -> None:
    """100 unknowns at r = 1.5: |1 - 6 sin(100 pi / 202)**2| (LeVeque 2007, section 9.6)."""
    words = "--integrator euler --spacing 1 --diffusion 1 --cells 100 --boundary dirichlet --step"
    status, got = ask(f"{words} 1.5", capsys)
    want = abs(1.0 - 6.0 * math.sin(100 * math.pi / 202) ** 2)
    assert status == Exit.ALARM
    assert got["matrix"]["two_norm"]["value"] == pytest.approx(want, rel=1e-12)
    status, got = ask(f"{words} 0.5", capsys)
    assert status == Exit.GOOD
    assert got["verdict"] == "contractive"


def test_upwind_with_an_inflow_is_not_allowed_twice_its_limit(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Eigenvalues would allow Courant number 2; the largest step stays 1, and 1.5 is unstable in
    practice (Trefethen and Embree 2005)."""
    status, got = ask(
        "--integrator upwind --spacing 1 --advection 1 --cells 100 --boundary dirichlet/neumann "
        "--step 1.5",
        capsys,
    )
    assert status == Exit.ALARM
    assert got["dt_max"] == pytest.approx(1.0, rel=1e-6)
    assert got["matrix"]["verdict"] == "unstable in practice"
    assert got["matrix"]["spectral_radius"]["value"] == pytest.approx(0.5, rel=1e-12)
    assert 45 < got["matrix"]["largest_power_ln"] / math.log(10.0) < 47


SETTINGS = """
[scheme]
integrator = "rk4"
spacing = [1, 1.0]
step = 0.4
boundary = ["neumann", "periodic"]

[[scheme.terms]]
kind = "advection"
velocity = ["u.npy", 0.5]
stencil = "upwind3"

[[scheme.terms]]
kind = "diffusion"
name = "mixing"
coefficient = "0.1 + k"
"""


@pytest.fixture
def folder(scene: Here) -> Path:
    """Settings that take a velocity from a file and a diffusivity from a snapshot."""
    rng = np.random.default_rng(77_003)
    (scene.folder / "stepwarden.toml").write_text(
        SETTINGS.replace("step = 0.4", 'step = 0.4\nsnapshot = "run.npz"')
    )
    np.save(scene.folder / "u.npy", (1.0 + rng.random((8, 9))).astype("f4"))
    np.savez(scene.folder / "run.npz", k=0.1 * rng.random((8, 9)), h=np.full((8, 9), 4.0))
    return scene.folder


def test_settings_with_fields(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Found in the current folder; numbers are the largest over the cells, labelled by term."""
    status, got = ask("", capsys)
    assert status == Exit.GOOD
    assert got["step"] == 0.4
    u = np.load(folder / "u.npy").astype(float)
    with np.load(folder / "run.npz") as run:
        k = 0.1 + run["k"]
    numbers = {n["term"]: n["value"] for n in got["numbers"]}
    assert numbers["advection"] == pytest.approx(0.4 * (u.max() + 0.5))
    assert numbers["mixing"] == pytest.approx(0.4 * 2.0 * k.max())
    assert len(got["symbol"]["cell"]) == 2
    assert got["matrix"]["unknowns"] == 72


def test_options_override_settings(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Another step for the same file, and other terms instead of the file's."""
    assert ask(f"{folder} --step 5", capsys)[0] == Exit.ALARM
    _, got = ask(f"{folder} --wave sqrt(9.81*h) --snapshot run.npz", capsys)
    # RK4 on staggered waves: sqrt(8) / (2 c sqrt(1 / dx**2 + 1 / dy**2)).
    want = math.sqrt(8.0) / (2.0 * math.sqrt(9.81 * 4.0) * math.sqrt(2.0))
    assert got["symbol"]["dt_max"]["value"] == pytest.approx(want, rel=1e-6)


def test_ones_own_matrix(scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """The step's own matrix in each format: a bidiagonal one of radius 0.5 whose powers explode."""
    n = 60
    matrix = np.diag(np.full(n, -0.5)) + np.diag(np.full(n - 1, 1.5), -1)
    np.save("a.npy", matrix)
    sp.save_npz("a.npz", sp.csr_array(matrix))
    scipy.io.mmwrite("a.mtx", sp.coo_array(matrix))
    for name in ("a.npy", "a.npz", "a.mtx"):
        status, got = ask(f"--matrix {name}", capsys)
        assert status == Exit.ALARM
        assert got["verdict"] == "unstable in practice"
        assert got["factor"] == pytest.approx(0.5)


def test_ones_own_right_hand_side(scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """With an integrator the matrix is L: 2 / (4 sin(n pi / (2 (n + 1)))**2) for heat."""
    n = 50
    matrix = sp.diags_array([np.ones(n - 1), -2 * np.ones(n), np.ones(n - 1)], offsets=[-1, 0, 1])
    sp.save_npz("l.npz", sp.csr_array(matrix))
    status, got = ask("--matrix l.npz --integrator euler", capsys)
    assert status == Exit.GOOD
    assert got["dt_max"] == pytest.approx(0.5 / math.sin(50 * math.pi / 102) ** 2, rel=1e-9)
    assert ask("--matrix l.npz --integrator euler --step 0.6", capsys)[0] == Exit.ALARM


def test_an_energy_weight(scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """A rotation of (u, 10 v) is contractive in the energy u**2 + 100 v**2 and in no other."""
    np.save("a.npy", np.array([[0.0, -10.0], [0.1, 0.0]]))
    np.save("w.npy", np.array([1.0, 100.0]))
    assert ask("--matrix a.npy --weight w.npy", capsys)[1]["verdict"] == "contractive"
    plain = ask("--matrix a.npy", capsys)[1]
    assert plain["verdict"] == "stable with transient growth"
    assert plain["matrix"]["two_norm"]["value"] == pytest.approx(10.0)


def test_the_table(capsys: pytest.CaptureFixture[str]) -> None:
    """The verdict stands out, each number has its limit, lines fit a terminal."""
    words = "--integrator euler --spacing 0.1 --diffusion 1 --step 0.006 --cells 20"
    status, text = told(words.split(), capsys)
    assert status == Exit.ALARM
    assert "UNSTABLE" in text
    assert "diffusion number 0.6 (alone at most 0.5)" in text
    assert "a wave of 2 cells" in text
    assert max(len(line) for line in text.splitlines()) <= 100


def test_the_scan(scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """A drawing of characters, numbers in the JSON, and a picture that is well-formed."""
    words = ["--integrator", "euler", "--spacing", "1", "--diffusion", "1", "--scan"]
    status, text = told([*words, "--picture", "scan.svg"], capsys)
    assert status == Exit.GOOD
    assert "the largest stable step" in text
    assert ElementTree.parse("scan.svg").getroot().tag.endswith("svg")
    _, got = ask(" ".join(words), capsys)
    steps, factors = np.array(got["scan"]["step"]), np.array(got["scan"]["factor"])
    # |1 - 4 r| beyond r = 1 / 2 (LeVeque 2007, section 9.6).
    assert factors == pytest.approx(np.maximum(1.0, np.abs(1.0 - 4.0 * steps)), rel=1e-6)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ("--spacing=-0.1 --diffusion 1", "spacing: is -0.1; a cell size must be positive"),
        ("--spacing 0.1 --diffusion nan", "diffusion coefficient: is nan; give a finite number"),
        ("--diffusion 1", "[scheme] spacing: must be given"),
        ("--spacing 1 --diffusion 1 --step 0", "--step: is 0; a time step must be positive"),
        ("--spacing 1 --diffusion 1 --steps 5", "--steps and --allowed-growth: need each other"),
        ("--spacing 1 --diffusion 1 --steps 5 --allowed-growth 0.5", "a growth over 1"),
        ("--spacing 1 --diffusion 1 --cells 4,a", "--cells: is '4,a'"),
        ("--spacing 1 --diffusion 1 --powers 0", "--powers: is 0"),
        ("--spacing 1 --diffusion 1 --transient-max 0.5", "--transient-max: is 0.5"),
        ("--spacing 1 --diffusion 1 --weight w.npy", "--weight: goes with --matrix only"),
        ("--spacing 1 --diffusion 1 --advection-stencil upwind1", "needs --advection"),
        ("--spacing 1 --diffusion k", "names the field 'k', but no snapshot is given"),
        ("--spacing 1 --diffusion none.npy", "coefficient[0]: there is no file none.npy"),
        ("--spacing 1 --diffusion 1 --picture a.png", "pictures are SVG"),
        ("--matrix none.mtx", "none.mtx: there is no such file"),
        ("--matrix rectangle.npy", "is 3 x 4, not square"),
        ("--matrix holes.npy", "holds nan in row 1, column 2"),
        ("--matrix text.mtx", "is not readable as a matrix"),
        ("--matrix square.npy --step 1", "--step: needs --integrator"),
        ("--matrix square.npy --scan", "--matrix: goes neither with terms"),
        ("--matrix square.npy --weight rectangle.npy", "one weight per unknown"),
        ("", "nothing to judge"),
        ("empty.toml", "says nothing of the scheme"),
        ("bad.toml", "[[scheme.terms]] number 1 kind: must be one of"),
    ],
)
def test_bad_input(words: str, said: str, scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """Status 2, the key, the value and the remedy; nothing on standard output."""
    np.save("rectangle.npy", np.ones((3, 4)))
    holes = np.eye(3)
    holes[1, 2] = np.nan
    np.save("holes.npy", holes)
    np.save("square.npy", np.eye(3))
    Path("text.mtx").write_text("no matrix\n")
    Path("empty.toml").write_text('[run]\nname = "x"\n')
    Path("bad.toml").write_text('[scheme]\n[[scheme.terms]]\nkind = "magic"\n')
    assert main(["limit", *words.split()]) == Exit.USAGE
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err


def test_coefficients_from_several_formats(scene: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """A member of an archive by name, the only one without, and what an ambiguous one says."""
    k = np.linspace(0.5, 2.0, 12).reshape(3, 4)
    np.savez("one.npz", k=k)
    np.savez("two.npz", k=k, m=k)
    np.save("fortran.npy", np.asfortranarray(k))
    for name in ("one.npz", "two.npz:k", "fortran.npy"):
        _, got = ask(f"--integrator euler --spacing 1,1 --diffusion {name}", capsys)
        # The largest diffusivity sets the limit h**2 / (4 k).
        assert got["symbol"]["dt_max"]["value"] == pytest.approx(1 / 8, rel=1e-6)
        assert got["symbol"]["cell"] == [2, 3]
    status, text = told(["--spacing", "1,1", "--diffusion", "two.npz"], capsys)
    assert status == Exit.USAGE
    assert "name one, like FILE:FIELD" in text
