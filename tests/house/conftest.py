"""What the house tests look at: the tree as a commit would hold it."""

import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
TEXT_SUFFIXES = {".py", ".md", ".toml", ".txt", ".yml", ".yaml", ".sh", ".mako", ".ini", ".csv", ""}


@pytest.fixture(scope="session")
def root() -> Path:
    return ROOT


@pytest.fixture(scope="session")
def readme(root: Path) -> str:
    return (root / "README.md").read_text("utf-8")


def listed(*options: str) -> list[Path]:
    """Return files by git, which alone knows what belongs to the project."""
    command = ["git", "-c", "safe.directory=*", "ls-files", "-z", *options]
    names = subprocess.run(command, cwd=ROOT, check=True, capture_output=True, text=True).stdout
    return [Path(name) for name in names.split("\0") if name and (ROOT / name).is_file()]


@pytest.fixture(scope="session")
def committed() -> list[Path]:
    """Files that git tracks, relative to the root."""
    return listed()


@pytest.fixture(scope="session")
def texts() -> dict[Path, str]:
    """Text files that a commit of everything would hold, by path relative to the root."""
    files = listed("--cached", "--others", "--exclude-standard")
    return {
        path: (ROOT / path).read_text("utf-8") for path in files if path.suffix in TEXT_SUFFIXES
    }


@pytest.fixture(scope="session")
def sources(texts: dict[Path, str]) -> dict[Path, str]:
    """Python files of all of the project."""
    return {path: text for path, text in texts.items() if path.suffix == ".py"}
