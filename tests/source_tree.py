"""The project's own files, as the rules about them see it."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PACKAGES = ("probes", "monitor", "demo_runs")
_MADE = {"__pycache__", "build", "dist"}


def sources(*packages: str) -> list[Path]:
    """Python files of the given packages (default: all that are installed)."""
    return sorted(p for name in packages or PACKAGES for p in (ROOT / name).rglob("*.py"))


def all_files() -> Iterator[Path]:
    """Every file of the project, without hidden folders other than ``.ci`` and without what tools
    make."""
    for top in sorted(ROOT.iterdir()):
        if top.is_file():
            yield top
        elif (top.name == ".ci" or not top.name.startswith(".")) and not _made(top):
            yield from (
                p
                for p in sorted(top.rglob("*"))
                if p.is_file() and not any(_made(parent) for parent in p.parents)
            )


def _made(folder: Path) -> bool:
    return folder.name in _MADE or folder.name.endswith(".egg-info")


def imports(path: Path) -> Iterator[tuple[str, int]]:
    """(dotted name, line) of everything a file imports, wherever in the file; relative imports are
    not used in this project and come out as ".name"."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"), str(path))):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            yield from ((f"{module}.{alias.name}", node.lineno) for alias in node.names)


def import_sites(library: str, *packages: str) -> set[str]:
    """Files (relative to the root) that import `library` or something in it."""
    return {
        str(path.relative_to(ROOT))
        for path in sources(*packages)
        for name, _ in imports(path)
        if name == library or name.startswith(f"{library}.")
    }
