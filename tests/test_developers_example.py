"""The complete reader that the developers' guide shows is installed and used."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

from tests.source_tree import ROOT

_USE = """
import json, sys
from pathlib import Path
from probes.formats import open_snapshot, readers
from probes.spec import SnapshotSpec

spec = SnapshotSpec(pattern=("u_{step}.grid",))
with open_snapshot(Path(sys.argv[1]), spec) as snapshot:
    contents = snapshot.contents()
    field = contents.fields[0]
    slabs = [slab.tolist() for slab in snapshot.slabs(field.name, 0, 2)]
print(json.dumps({"readers": sorted(readers()), "steps": contents.steps, "slabs": slabs}))
"""


def blocks() -> tuple[str, str]:
    """The guide's project file and module."""
    guide = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    project = re.search(r"`pyproject.toml`\n\n```toml\n(.*?)```", guide, re.DOTALL)
    module = re.search(r"`gridtext.py`\n\n```python\n(.*?)```", guide, re.DOTALL)
    assert project is not None
    assert module is not None
    return project.group(1), module.group(1)


@pytest.fixture
def site(tmp_path: Path) -> Path:
    """A folder of installed distributions holding the example, laid out as an installer would
    (module, METADATA and entry_points.txt), so that the test needs no network."""
    project_text, module = blocks()
    project = tomllib.loads(project_text)["project"]
    folder = tmp_path / "site"
    info = folder / f"{project['name']}-{project['version']}.dist-info"
    info.mkdir(parents=True)
    (folder / "gridtext.py").write_text(module, encoding="utf-8")
    (info / "METADATA").write_text(
        f"Metadata-Version: 2.1\nName: {project['name']}\nVersion: {project['version']}\n"
    )
    lines = []
    for group, entries in project["entry-points"].items():
        lines += [f"[{group}]", *(f"{name} = {value}" for name, value in entries.items())]
    (info / "entry_points.txt").write_text("\n".join(lines) + "\n")
    return folder


def use(site: Path, path: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-P", "-c", _USE, str(path)],
        env=os.environ | {"PYTHONPATH": str(site)},
        capture_output=True,
        text=True,
        timeout=60,
    )


def test_the_example_reads_a_file(site: Path, tmp_path: Path) -> None:
    """Another distribution's reader is found by the content of a file, and its slabs arrive in
    blocks of two rows with every number in place."""
    path = tmp_path / "u_40.grid"
    path.write_text("#grid 40 0.5 3 2\n1 2\n3 4\n5 6\n")
    done = use(site, path)
    assert done.returncode == 0, done.stderr
    got = json.loads(done.stdout)
    assert "gridtext" in got["readers"]
    assert got["steps"] == [40]
    assert got["slabs"] == [[[1.0, 2.0], [3.0, 4.0]], [[5.0, 6.0]]]


def test_the_example_waits_for_an_unfinished_file(site: Path, tmp_path: Path) -> None:
    """A table that ends early is "not yet", as the guide's rules ask."""
    path = tmp_path / "u_41.grid"
    path.write_text("#grid 41 0.6 3 2\n1 2\n")
    done = use(site, path)
    assert done.returncode != 0
    assert "NotYet" in done.stderr
