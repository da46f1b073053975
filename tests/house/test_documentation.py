"""The documentation is true: its commands, its indices, its settings."""

import re
import subprocess
from pathlib import Path

import pytest
import typer.main

from service.cli import app
from service.settings import Settings
from service.spectral.indices import INDICES, Index

INDEX_ROW = re.compile(r"^\| `(\w+)`( \*)? \| `([^`]+)`[^|]*\| ([^|]+?) \| ([^|]+?) \|$", re.M)


def command_between(readme: str, marker: str) -> str:
    """Return what the README shows between two markers, without the fence."""
    block = readme.split(f"<!-- {marker}:begin -->")[1].split(f"<!-- {marker}:end -->", maxsplit=1)[
        0
    ]
    return block.strip().removeprefix("```").removesuffix("```").strip()


def commands_of_the_cli() -> list[str]:
    """Return every command with its group, as typed after the program's name."""
    top = typer.main.get_command(app)
    found: list[str] = []
    waiting = list(getattr(top, "commands", {}).items())
    while waiting:
        name, command = waiting.pop()
        inner = getattr(command, "commands", {})
        waiting += [(f"{name} {sub}", each) for sub, each in inner.items()]
        if not inner:
            found.append(name)
    return sorted(found)


@pytest.fixture(scope="module")
def documents(root: Path) -> str:
    return "".join((root / name).read_text("utf-8") for name in ("README.md", "DEVELOPERS.md"))


@pytest.mark.parametrize("marker", ["run", "test"])
def test_each_of_the_two_commands_is_one_line_that_needs_only_venv(
    readme: str, marker: str
) -> None:
    command = command_between(readme, marker)
    assert command.startswith("python3 -m venv ")
    assert "\n" not in command


def test_the_first_command_runs_the_job_and_the_second_the_tests(readme: str) -> None:
    assert command_between(readme, "run").endswith("/bin/furrowlight demo")
    assert command_between(readme, "test").endswith("/bin/python -m pytest")


def test_ci_runs_the_test_command_of_the_readme_from_anywhere(
    root: Path, readme: str, tmp_path: Path
) -> None:
    shown = subprocess.run(
        ["bash", str(root / ".ci" / "run"), "--show"],
        cwd=tmp_path,
        check=True,
        capture_output=True,
        text=True,
    ).stdout
    assert shown.strip() == command_between(readme, "test")


def test_the_cli_has_commands_and_each_is_documented(documents: str) -> None:
    commands = commands_of_the_cli()
    assert {"demo", "serve", "keys create"} <= set(commands)
    assert [name for name in commands if f"furrowlight {name}" not in documents] == []


@pytest.mark.parametrize("name", sorted(Settings.model_fields))
def test_each_setting_is_in_the_readme(readme: str, name: str) -> None:
    assert f"`FURROWLIGHT_{name.upper()}`" in readme


def test_what_the_readme_says_of_an_index_is_what_the_registry_says(readme: str) -> None:
    """A new index needs no line here: `GET /v1/indices` documents it from its own entry."""
    rows = {
        name: (star == "", formula, rise, source)
        for name, star, formula, rise, source in INDEX_ROW.findall(readme)
    }
    registry = {
        index.id: (index.watched, index.formula, index.rise, index.source)
        for index in INDICES.values()
    }
    assert {"ndvi", "ndmi", "ndwi", "nbr"} <= set(rows)
    assert {name: row for name, row in rows.items() if row != registry.get(name)} == {}


@pytest.mark.parametrize("index", INDICES.values(), ids=INDICES.keys())
def test_each_index_documents_itself(index: Index) -> None:
    texts = (index.title, index.formula, index.rise, index.fall, index.typical, index.source)
    assert all(text.strip() for text in texts)


def test_the_service_warns_its_readers(readme: str) -> None:
    assert "Check on the ground before acting" in readme
