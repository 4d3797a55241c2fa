"""Who may import whom: the rooms of the code base and the few doors between them."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.source_tree import ROOT, import_sites, imports, sources


def test_the_rules_see_imports_wherever_they_stand(tmp_path: Path) -> None:
    """An import inside a function counts like one at the top: both are found with their lines."""
    path = tmp_path / "sample.py"
    path.write_text("import a.b\n\ndef f():\n    from c import d\n    from . import e\n")
    assert list(imports(path)) == [("a.b", 1), ("c.d", 4), ("..e", 5)]


@pytest.mark.parametrize(
    ("library", "package"),
    [
        ("monitor", "probes"),
        ("demo_runs", "probes"),
        ("monitor", "demo_runs"),
        ("probes", "demo_runs"),
    ],
)
def test_no_import_against_the_direction(library: str, package: str) -> None:
    """probes knows nothing of monitor; the demo solvers know neither, so that their truth is
    independent of what is tested against it."""
    assert import_sites(library, package) == set()


def test_installed_code_never_imports_tests() -> None:
    """Tests are not installed, so nothing that is may need them."""
    assert import_sites("tests") == set()


def test_no_relative_imports() -> None:
    """One spelling of each import, so that these rules and a reader's search find them all."""
    assert [str(p) for p in sources() for name, _ in imports(p) if name.startswith(".")] == []


@pytest.mark.parametrize(
    ("library", "allowed"),
    [
        ("textual", "monitor/desk/"),
        ("rich", "monitor/desk/"),
        ("watchdog", "probes/arrivals/wakeups.py"),
        ("h5py", "probes/formats/hdf5.py"),
        ("netCDF4", "nowhere"),
        ("pickle", "nowhere"),
        ("shelve", "nowhere"),
        ("marshal", "nowhere"),
    ],
)
def test_one_door_for_each_library(library: str, allowed: str) -> None:
    """The screen library only in the desk, file events and HDF5 each in one file, and nothing that
    can run code from a file (pickle and its kin) anywhere."""
    sites = import_sites(library, "probes", "monitor")
    assert {site for site in sites if not site.startswith(allowed)} == set()


def test_the_reading_side_does_without_scipy() -> None:
    """The reading process stays small: SciPy is for the parent and for tests."""
    sites = import_sites("scipy", "probes")
    child_side = ("probes/child.py", "probes/formats/", "probes/arrivals/", "probes/sketch.py")
    assert {site for site in sites if site.startswith(child_side)} == set()


def test_only_the_actions_signal_the_run() -> None:
    """pidfd_send_signal, the one way to signal a solver, stands in monitor/actions only."""
    users = {
        str(p.relative_to(ROOT))
        for p in sources()
        if "pidfd_send_signal" in p.read_text(encoding="utf-8")
    }
    assert {user for user in users if not user.startswith("monitor/actions/")} == set()


def test_no_shell_and_no_unpickling() -> None:
    """Commands run as argument lists, arrays are loaded without pickles."""
    forbidden = ("shell=True", "os.system(", "allow_pickle=True", "os.popen(")
    found = [
        (str(p.relative_to(ROOT)), word)
        for p in sources()
        for word in forbidden
        if word in p.read_text(encoding="utf-8")
    ]
    assert found == []
