"""The README promises only what there is."""

from __future__ import annotations

import math
import re
import shlex
from argparse import ArgumentParser
from importlib import import_module
from pathlib import Path

import pytest

from monitor.commands import COMMANDS
from monitor.config import load
from monitor.exits import Exit
from tests.source_tree import ROOT

README = (ROOT / "README.md").read_text(encoding="utf-8")
FIRST_COMMAND = "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/stepwarden demo"
SECOND_COMMAND = (
    "python3 -m venv .venv && .venv/bin/pip install '.[test]' && .venv/bin/python -m pytest"
)


def blocks(kind: str) -> list[str]:
    return re.findall(rf"```{kind}\n(.*?)```", README, re.DOTALL)


def shown_commands() -> list[list[str]]:
    """Every `stepwarden NAME ...` in a shell block, as words after "stepwarden"."""
    out = []
    for line in "\n".join(blocks("sh")).splitlines():
        words = shlex.split(line, comments=True)
        if "stepwarden" in words:
            tail = words[words.index("stepwarden") + 1 :]
            out.append(tail[: tail.index("&")] if "&" in tail else tail)
    return out


def test_the_two_commands_stand_first() -> None:
    """The demo and the tests, each one line, before any other command."""
    shell = blocks("sh")
    assert [block.strip() for block in shell[:2]] == [FIRST_COMMAND, SECOND_COMMAND]


def test_the_first_paragraph_states_the_job() -> None:
    """A reader who stops after one paragraph knows what it watches, sees, keeps and stops."""
    first = README.split("\n\n")[1]
    for word in ("simulation", "snapshots", "grows", "clean checkpoint", "stopped"):
        assert word in first


@pytest.mark.parametrize("words", shown_commands(), ids=" ".join)
def test_shown_commands_parse(words: list[str]) -> None:
    """Each command line is accepted by the command's own parser."""
    assert words[0] in COMMANDS
    parser = ArgumentParser()
    import_module(f"monitor.commands.{words[0]}").declare(parser)
    parser.parse_args(words[1:])


def test_every_command_is_shown() -> None:
    """No command is left for the reader to find by chance."""
    named = set(re.findall(r"stepwarden (\w+)", README))
    assert set(COMMANDS) <= named


def test_the_settings_example_loads(tmp_path: Path) -> None:
    """The TOML block is accepted as it stands."""
    (block,) = blocks("toml")
    path = tmp_path / "stepwarden.toml"
    path.write_text(block, encoding="utf-8")
    settings = load(path)
    assert settings.run.last_step == 400000
    assert [step.do for step in settings.stop] == ["file", "command"]
    assert settings.checkpoints.pattern == ("restart/state_{step}.h5",)


def test_the_exit_table_is_the_codes() -> None:
    """The table has one row for each status of monitor.exits, and the signals."""
    rows = set(re.findall(r"^\| ([\d+n]+) \|", README, re.MULTILINE))
    assert rows == {str(int(status)) for status in Exit} | {"128+n"}


@pytest.mark.parametrize("link", re.findall(r"\]\(([^)#]+)\)", README))
def test_links_lead_somewhere(link: str) -> None:
    """Pictures and files named in the README are in the tree."""
    assert (ROOT / link).is_file()


def test_the_integration_script_runs_the_readmes_test_command() -> None:
    """What is promised is what is checked."""
    assert SECOND_COMMAND in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def factors(excess: float) -> tuple[float, float, float]:
    """Growth per step so far above the limit, of the fastest wave (von Neumann's analysis;
    Strikwerda 2004, chapters 2, 6 and 8, numbers from memory): central second-order waves,
    leapfrog advection, forward Euler for heat."""
    nu = 1.0 + excess
    root = nu + math.sqrt(nu * nu - 1.0)
    return root**2, root, abs(1.0 - 2.0 * nu)


def test_the_table_of_steps_to_ruin() -> None:
    """Every entry of the table follows from the factors: 16 decades, and a twelfth of that."""
    rows = re.findall(r"^\| ([\d.]+) % \| (.+) \|$", README, re.MULTILINE)
    assert len(rows) == 5
    for excess, cells in rows:
        for factor, cell in zip(factors(float(excess) / 100.0), cells.split(" | "), strict=True):
            steps = math.log(1e16) / math.log(factor)
            between = f"{int(steps / 12):,}" if steps >= 12 else "–"
            assert cell == f"{round(steps):,} / {between}"
