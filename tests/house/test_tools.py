"""Lint, format, types and import contracts hold for the whole tree."""

import subprocess
import sys
import sysconfig
from pathlib import Path

import pytest

# The tools' own deprecations are not ours to mend; their findings are.
SCRIPTS = Path(sysconfig.get_path("scripts"))


def run_tool(root: Path, *command: str) -> None:
    """Run a tool in the root; fail with what it says."""
    done = subprocess.run(command, cwd=root, capture_output=True, text=True, check=False)
    assert done.returncode == 0, f"{done.stdout}\n{done.stderr}"


def test_every_file_passes_the_linter(root: Path) -> None:
    run_tool(root, sys.executable, "-m", "ruff", "check", "--output-format=concise", ".")


def test_every_file_is_formatted(root: Path) -> None:
    run_tool(root, sys.executable, "-m", "ruff", "format", "--check", ".")


def test_every_module_passes_strict_type_checks(root: Path) -> None:
    run_tool(root, sys.executable, "-m", "mypy")


def test_imports_keep_the_contracts_of_the_rooms(root: Path) -> None:
    run_tool(root, str(SCRIPTS / "lint-imports"))


@pytest.mark.parametrize(
    ("text", "command"),
    [
        ("import os\n", ("ruff", "check", "--stdin-filename", "service/seeded.py", "-")),
        ("x = {  'a':1 }\n", ("ruff", "format", "--check", "--stdin-filename", "s.py", "-")),
    ],
)
def test_the_tools_find_a_seeded_fault(root: Path, text: str, command: tuple[str, ...]) -> None:
    done = subprocess.run(
        [sys.executable, "-m", *command],
        cwd=root,
        input=text,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1


def test_strict_types_find_a_seeded_fault(root: Path, tmp_path: Path) -> None:
    seeded = tmp_path / "seeded.py"
    seeded.write_text("def halved(number):\n    return number / 2\n", "utf-8")
    config = str(root / "pyproject.toml")
    done = subprocess.run(
        [sys.executable, "-m", "mypy", "--config-file", config, str(seeded)],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=False,
    )
    assert "no-untyped-def" in done.stdout
