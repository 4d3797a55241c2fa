"""The shape of the project's folder, and words that have no place in it."""

from __future__ import annotations

import re
import stat
import tomllib

from tests.source_tree import PACKAGES, ROOT, all_files

TOP = {"README.md", "DEVELOPERS.md", "pyproject.toml", "tests", *PACKAGES}

# Spelled in pieces, so that this file does not break its own rule. What is looked for: folders of
# the machine something was made on, hosts of package registries, and notes from the making.
FORBIDDEN = re.compile(
    "|".join(
        (
            "/wor" + "k/",
            "/ro" + "ot/",
            "/home/[a-z]",
            "/tmp/" + "dev",
            "py" + r"pi\.org",
            "python" + "hosted",
            r"\.libr" + "ary",
            "tran" + "script",
            r"\blect" + r"ure\b",
            r"\bto" + r"do\b",
            "fix" + "me",
        )
    ),
    re.IGNORECASE,
)


def test_the_top_folder_holds_only_what_it_should() -> None:
    """Anything else at the top has a better place."""
    made = {"build", "dist"}
    top = {p.name for p in ROOT.iterdir() if not p.name.startswith(".")} - made
    assert {name for name in top if not name.endswith(".egg-info")} == TOP


def test_no_traces_of_the_workshop() -> None:
    """No file names a machine's own folders, a registry, or how the project was made."""
    found = []
    for path in all_files():
        try:
            lines = path.read_text(encoding="utf-8").splitlines()
        except UnicodeDecodeError:
            continue
        found += [
            f"{path.relative_to(ROOT)}:{number}: {line.strip()[:80]}"
            for number, line in enumerate(lines, 1)
            if FORBIDDEN.search(line)
        ]
    assert found == []


def test_every_folder_of_python_is_a_package() -> None:
    """setuptools finds packages by ``__init__.py``; a folder without one would not be installed."""
    bare = {
        str(p.parent.relative_to(ROOT))
        for p in all_files()
        if p.suffix == ".py" and p.parent != ROOT and not (p.parent / "__init__.py").exists()
    }
    assert {folder for folder in bare if not folder.startswith("tests/data")} == set()


def test_the_readme_is_the_package_page_and_python_is_311() -> None:
    """What pyproject.toml promises about the distribution."""
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert (project["name"], project["readme"]) == ("stepwarden", "README.md")
    assert project["requires-python"] == ">=3.11"
    assert project["scripts"] == {"stepwarden": "monitor.cli:main"}


def test_the_integration_script_can_be_started() -> None:
    """A clean clone runs it as a program."""
    script = ROOT / ".ci" / "run"
    assert script.stat().st_mode & stat.S_IXUSR
    assert script.read_text(encoding="utf-8").startswith("#!/usr/bin/env bash\n")
