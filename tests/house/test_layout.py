"""House rules on the tree: what lies where, how long it is, and what it must not hold."""

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

TOP_LEVEL = {
    "README.md",
    "DEVELOPERS.md",
    "LICENSE",
    "pyproject.toml",
    "service",
    "benchmarks",
    "migrations",
    "tests",
    "sample_tiles",
    "docker",
}
LINES_PER_MODULE = 400
PURE_ROOMS = (
    "spectral",
    "zonal",
    "seasons",
    "alerts",
    "observe.py",
    "assess",
    "exports.py",
)

UNFINISHED = re.compile(r"\b(TODO|FIXME|XXX|NotImplementedError)\b")
SKIPPED = re.compile(r"pytest\.(skip|importorskip|xfail)\b|mark\.(skip|skipif|xfail)\b")
SLEPT = re.compile(r"\b(time|asyncio)\.sleep\(")
MOCKED = re.compile(r"\bunittest\b|\bMagicMock\b|monkeypatch\.setattr\b")
ALWAYS_TRUE = re.compile(r"^\s*assert (True|1)\s*$")
# Not within a URL or after a name: `/v1/tmp/x` is nobody's folder.
MACHINE_PATH = re.compile(r"(?<![\w.~$})>*-])/(home|root|tmp|work|Users)/\w")
REGISTRY_HOST = re.compile(r"pypi\.org|pythonhosted|npmjs\.(com|org)|deb\.debian\.org")
BARE_SILENCE = re.compile(r"#\s*(noqa|type:\s*ignore)(?!\s*[:\[])")
GLOBAL_SILENCE = re.compile(r"\b(np|numpy)\.seterr\(|^warnings\.")


def places(pattern: re.Pattern[str], texts: dict[Path, str]) -> list[str]:
    """Return file and line of every match, except in this file, which holds what it looks for."""
    return [
        f"{path}:{at}"
        for path, text in texts.items()
        if path.name != Path(__file__).name
        for at, line in enumerate(text.splitlines(), start=1)
        if pattern.search(line)
    ]


def test_the_top_level_holds_only_what_the_design_names(committed: list[Path]) -> None:
    found = {path.parts[0] for path in committed if not path.parts[0].startswith(".")}
    assert found <= TOP_LEVEL


def test_no_module_is_longer_than_a_reader_can_hold(sources: dict[Path, str]) -> None:
    long = {
        str(path): len(text.splitlines())
        for path, text in sources.items()
        if path.parts[0] == "service" and len(text.splitlines()) > LINES_PER_MODULE
    }
    assert long == {}


def test_no_module_is_named_for_nothing(sources: dict[Path, str]) -> None:
    vague = {"utils", "util", "helpers", "manager", "managers", "common", "misc"}
    assert [str(path) for path in sources if vague & {path.stem, *path.parts}] == []


def test_nothing_is_left_unfinished(texts: dict[Path, str]) -> None:
    assert places(UNFINISHED, texts) == []


def test_no_test_is_skipped_slept_mocked_or_bound_to_pass(sources: dict[Path, str]) -> None:
    tests = {path: text for path, text in sources.items() if path.parts[0] == "tests"}
    found = {rule.pattern: places(rule, tests) for rule in (SKIPPED, SLEPT, MOCKED, ALWAYS_TRUE)}
    assert {pattern: where for pattern, where in found.items() if where} == {}


def test_no_file_names_a_path_of_a_machine(texts: dict[Path, str]) -> None:
    assert places(MACHINE_PATH, texts) == []


def test_no_file_names_a_registry_host(texts: dict[Path, str]) -> None:
    assert places(REGISTRY_HOST, texts) == []


def test_no_silencing_comment_lacks_its_rule(sources: dict[Path, str]) -> None:
    assert places(BARE_SILENCE, sources) == []


def test_numpy_warnings_are_never_silenced_globally(sources: dict[Path, str]) -> None:
    assert places(GLOBAL_SILENCE, sources) == []


@pytest.mark.parametrize(
    ("pattern", "line"),
    [
        (UNFINISHED, "# TODO: later"),
        (UNFINISHED, "raise NotImplementedError"),
        (SKIPPED, "@pytest.mark.skip"),
        (SLEPT, "    time.sleep(1)"),
        (MOCKED, "from unittest import mock"),
        (ALWAYS_TRUE, "    assert True"),
        (MACHINE_PATH, "open('/home/someone/x')"),
        (MACHINE_PATH, "see /tmp/x for more"),
        (REGISTRY_HOST, "index-url = https://pypi.org/simple"),
        (BARE_SILENCE, "x = y  # noqa"),
        (GLOBAL_SILENCE, "np.seterr(all='ignore')"),
    ],
)
def test_each_rule_finds_a_seeded_breach(pattern: re.Pattern[str], line: str) -> None:
    assert places(pattern, {Path("seeded.py"): line}) == ["seeded.py:1"]


def undocumented(tree: ast.Module) -> Iterator[str]:
    """Yield public functions, classes and public methods of public classes without docstring."""
    if ast.get_docstring(tree) is None:
        yield "the module"
    for node in tree.body:
        yield from _undocumented_in(node, prefix="")


def _undocumented_in(node: ast.stmt, *, prefix: str) -> Iterator[str]:
    if not isinstance(node, ast.FunctionDef | ast.ClassDef) or node.name.startswith("_"):
        return
    if ast.get_docstring(node) is None:
        yield f"{prefix}{node.name}"
    if isinstance(node, ast.ClassDef):
        for member in node.body:
            yield from _undocumented_in(member, prefix=f"{node.name}.")


def test_every_public_name_of_the_pure_rooms_is_documented(sources: dict[Path, str]) -> None:
    missing = {
        str(path): names
        for path, text in sources.items()
        if path.parts[0] == "service" and path.parts[1] in PURE_ROOMS
        if (names := list(undocumented(ast.parse(text))))
    }
    assert missing == {}


def test_an_undocumented_public_name_is_found() -> None:
    text = '"""A module."""\nclass A:\n    """A."""\n    def b(self): ...\n    def _c(self): ...\n'
    assert list(undocumented(ast.parse(text))) == ["A.b"]
