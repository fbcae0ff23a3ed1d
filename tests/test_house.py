"""The house: who imports whom, and what a build carries."""

import ast
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
FOLDERS = ("sequencer", "drivers", "simulators", "recipes")
MAY_IMPORT = {
    "sequencer": {"sequencer", "drivers", "recipes"},
    "drivers": {"drivers"},
    "simulators": {"simulators"},
    "recipes": {"recipes"},
}
# The command line starts the simulated bench; nothing else knows of it.
EXCEPTION = (ROOT / "sequencer" / "cli.py", "simulators")


def imported(path: Path) -> set[str]:
    """Return the full names of the modules of ours that a file imports."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found.add(node.module)
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return {name for name in found if name.startswith("pulsetally.")}


def files(folder: str) -> list[Path]:
    return sorted((ROOT / folder).rglob("*.py"))


@pytest.mark.parametrize("folder", FOLDERS)
def test_imports_point_one_way(folder: str) -> None:
    for path in files(folder):
        for name in imported(path):
            other = name.split(".")[1]
            allowed = other in MAY_IMPORT[folder] or (path, other) == EXCEPTION
            assert allowed, f"{path.relative_to(ROOT)} imports {name}"


def test_no_module_imports_itself_in_a_circle() -> None:
    modules = {
        "pulsetally."
        + ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__"): path
        for folder in FOLDERS
        for path in files(folder)
    }
    graph = {name: imported(path) & modules.keys() - {name} for name, path in modules.items()}
    finished: set[str] = set()

    def visit(name: str, way: tuple[str, ...]) -> None:
        assert name not in way, f"a circle: {' -> '.join([*way, name])}"
        if name in finished:
            return
        for other in graph[name]:
            visit(other, (*way, name))
        finished.add(name)

    for name in graph:
        visit(name, ())
    assert len(finished) == len(modules)


def test_the_build_names_every_package() -> None:
    setup = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    named = set(setup["tool"]["setuptools"]["packages"])
    found = {
        "pulsetally." + ".".join(path.parent.relative_to(ROOT).parts)
        for folder in FOLDERS
        for path in (ROOT / folder).rglob("__init__.py")
    }
    assert named == found
    for folder in FOLDERS:
        assert (ROOT / folder / "py.typed").exists()


@pytest.mark.parametrize("files", ["*.yaml", "*.json"])
def test_the_build_takes_along_every_file_of_settings(files: str) -> None:
    setup = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    data: dict[str, list[str]] = setup["tool"]["setuptools"]["package-data"]
    for folder in FOLDERS:
        patterns = data["*"] + data.get(f"pulsetally.{folder}", [])
        taken = {path for pattern in patterns for path in (ROOT / folder).glob(pattern)}
        assert set((ROOT / folder).rglob(files)) <= taken


def test_files_are_not_too_long() -> None:
    for folder in (*FOLDERS, "tests", "benchmarks"):
        for path in files(folder):
            lines = path.read_text(encoding="utf-8").count("\n")
            assert lines <= 600, f"{path.relative_to(ROOT)} has {lines} lines: split it by subject"
