"""The house rules: imports run one way, heavy packages stay out of the way, and the repo holds what it should."""

import ast
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / "cohort"

FOUNDATION = {"errors", "quantities", "program", "compiled", "reading", "stores", "tables"}
MAY_IMPORT: dict[str, set[str]] = {
    "errors": set(),
    "quantities": set(),
    "program": set(),
    "compiled": {"program"},
    "reading": set(),
    "stores": {"errors"},
    "tables": {"errors", "quantities", "reading", "stores"},
    "model": {"errors", "quantities", "program", "compiled"},
    "simulate": {"errors", "quantities", "program", "compiled", "model"},
    "measure": {"errors", "quantities", "program", "compiled", "model", "simulate"},
    "population": {"errors", "quantities"},
    "observe": {"errors", "quantities", "reading", "compiled", "measure", "population"},
    "infer": {"errors", "quantities", "population", "tables"},
    "study": {"errors", "quantities", "reading", "program", "model", "population", "infer", "observe", "tables"},
    "execute": {*FOUNDATION, "model", "simulate", "measure", "observe", "population", "infer", "study"},
    "report": {"errors", "quantities", "reading", "stores", "tables", "infer", "population", "observe", "model"},
    "cli": {"errors", "stores", "study", "execute", "report", "observe"},
    "__init__": {"errors", "stores", "simulate", "study", "execute", "report"},
    "__main__": {"cli"},
}
ONLY_IN = {
    "numba": {"compiled"},
    "llvmlite": {"compiled"},
    "pyarrow": {"tables"},
    "dask": {"execute"},
    "distributed": {"execute"},
    "SALib": {"infer"},
}
LATE = {"numba", "llvmlite", "pyarrow", "dask", "distributed", "SALib", "scipy", "matplotlib"}
TOP_LEVEL_LATE_EXCEPTIONS = {("numba", "compiled"), ("llvmlite", "compiled"), ("pyarrow", "tables")}


def modules() -> list[Path]:
    return sorted(PACKAGE.rglob("*.py"))


def room_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imports(path: Path) -> list[tuple[str, bool]]:
    """(imported name, whether at the top of the module) of every import that runs."""
    tree = ast.parse(path.read_text())
    guarded = {
        id(inner)
        for node in ast.walk(tree)
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)
        for inner in ast.walk(node)
    }
    top = {id(node) for node in tree.body}
    found = []
    for node in ast.walk(tree):
        if id(node) in guarded:
            continue
        if isinstance(node, ast.Import):
            found += [(alias.name, id(node) in top) for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module:
            names = [f"{node.module}.{a.name}" for a in node.names] if node.module == "cohort" else [node.module]
            found += [(name, id(node) in top) for name in names]
    return found


@pytest.mark.parametrize("path", modules(), ids=lambda p: p.relative_to(PACKAGE).as_posix())
def test_imports_run_one_way_and_heavy_ones_stand_inside_functions(path: Path) -> None:
    room = room_of(path)
    for name, at_top in imports(path):
        package, *rest = name.split(".")
        if package == "cohort" and rest and rest[0] != room:
            assert rest[0] in MAY_IMPORT[room], f"{room} imports {rest[0]}"
        if package in ONLY_IN:
            assert room in ONLY_IN[package], f"{package} is imported in {room}"
        if package in LATE and at_top:
            assert (package, room) in TOP_LEVEL_LATE_EXCEPTIONS, f"{package} at the top of {path.name}"


def test_the_rule_covers_every_room() -> None:
    assert {room_of(path) for path in modules()} <= set(MAY_IMPORT)


def test_importing_the_package_loads_nothing_heavy() -> None:
    code = f"import sys, cohort; print(sorted(set({sorted(LATE)!r}) & set(sys.modules)))"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert found.stdout.strip() == "[]"


@pytest.mark.parametrize("path", modules(), ids=lambda p: p.relative_to(PACKAGE).as_posix())
def test_a_module_is_one_room_and_its_public_functions_say_what_they_do(path: Path) -> None:
    text = path.read_text()
    assert text.count("\n") <= 500
    for node in ast.parse(text).body:
        if isinstance(node, ast.FunctionDef | ast.ClassDef) and not node.name.startswith("_"):
            assert ast.get_docstring(node), f"{node.name} has no docstring"


def tracked() -> list[Path]:
    listed = subprocess.run(["git", "ls-files"], capture_output=True, text=True, cwd=ROOT, check=False)
    if listed.returncode:
        pytest.skip("not a git checkout")
    return [ROOT / name for name in listed.stdout.splitlines()]


def test_the_top_level_holds_what_it_should() -> None:
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "cohort", "tests", "studies", "scripts"}
    top = {path.relative_to(ROOT).parts[0] for path in tracked()}
    assert {name for name in top if not name.startswith(".")} <= allowed


def test_lock_files_pin_hashes_and_name_no_host() -> None:
    for name in ("lock-run.txt", "lock-test.txt"):
        text = (ROOT / "scripts" / name).read_text()
        assert "--hash=sha256:" in text
        assert not re.search(r"https?:|file:|index-url|find-links|@ ", text)


def test_no_path_of_one_machine_stands_in_the_repo() -> None:
    homes = "|".join(re.escape(p) for p in {os.sep.join(("", "home", "")), os.sep.join(("", "root", ""))})
    for path in tracked():
        if path.suffix in (".py", ".md", ".toml", ".txt"):
            assert not re.search(rf"(?<![\w.])(?:{homes})\w", path.read_text()), path
