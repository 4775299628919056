"""Layers import one way; heavy and GPL libraries stay where they belong (DESIGN 4 and 6)."""

from __future__ import annotations

import ast
import os
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import pytest

import realize

PACKAGE = Path(realize.__file__).parent
MODULES = sorted(PACKAGE.rglob("*.py"))

#: Layer of every part of the package; a part may import from lower ranks and from itself.
#: ``testing`` holds named models (nothing but models beneath it), and is used by the demo and by tests.
RANKS = {
    "_version": 0,
    "errors": 0,
    "later": 0,
    "schema": 0,
    "kernels": 1,
    "models": 2,
    "testing": 3,
    "verification": 3,
    "forms": 4,
    "conversions": 5,
    "reduction": 6,
    "fitting": 6,
    "estimation": 6,
    "sampling": 6,
    "networks": 6,
    "steps": 7,
    "files": 8,
    "interop": 8,
    "reports": 9,
    "codegen": 9,
    "batch": 10,
    "commands": 11,
    "__main__": 12,
}
CHILD = "steps/opinion_child.py"


@dataclass(frozen=True)
class Import:
    """One import statement: the module, the names taken from it, and whether it runs when the file is imported."""

    module: str
    names: tuple[str, ...]
    line: int
    at_top: bool


def _is_type_checking(node: ast.AST) -> bool:
    return isinstance(node, ast.If) and any(
        getattr(part, "id", getattr(part, "attr", "")) == "TYPE_CHECKING" for part in ast.walk(node.test)
    )


@cache
def tree_of(path: Path) -> ast.Module:
    """Return the parsed file."""
    return ast.parse(path.read_text(encoding="utf-8"))


@cache
def imports_of(path: Path) -> tuple[Import, ...]:
    """Return the imports of a file, those inside functions too, those under TYPE_CHECKING not."""

    def walk(node: ast.AST, at_top: bool) -> Iterator[Import]:
        for child in ast.iter_child_nodes(node):
            if _is_type_checking(child):
                for other in child.orelse:  # type: ignore[attr-defined]
                    yield from walk(other, at_top)
                continue
            if isinstance(child, ast.Import):
                for alias in child.names:
                    yield Import(alias.name, (), child.lineno, at_top)
            elif isinstance(child, ast.ImportFrom):
                assert child.level == 0, f"{path}: relative import in line {child.lineno}"
                yield Import(child.module or "", tuple(alias.name for alias in child.names), child.lineno, at_top)
            else:
                inside = isinstance(child, (ast.FunctionDef, ast.AsyncFunctionDef, ast.Lambda))
                yield from walk(child, at_top and not inside)

    return tuple(walk(tree_of(path), True))


def part_of(path: Path) -> str:
    """Return the first name below the package that a file belongs to ('' for the package's own __init__)."""
    first = path.relative_to(PACKAGE).parts[0]
    return "" if first == "__init__.py" else first.removesuffix(".py")


def parts_imported(found: Import) -> Iterator[str]:
    """Yield the parts of the package that an import reaches."""
    head, _, rest = found.module.partition(".")
    if head != "realize":
        return
    if rest:
        yield rest.partition(".")[0]
    else:
        yield from (name for name in found.names if name in RANKS)


def test_every_part_has_a_layer() -> None:
    assert {part_of(path) for path in MODULES} - {""} <= set(RANKS)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_point_one_way(path: Path) -> None:
    part = part_of(path)
    if part == "":
        pytest.skip("the package's __init__ hands names on")
    for found in imports_of(path):
        for other in parts_imported(found):
            assert other == part or RANKS[other] < RANKS[part] or (RANKS[part] == 0 and RANKS[other] == 0), (
                f"{path.relative_to(PACKAGE)}:{found.line}: {part} imports {found.module}"
            )


@pytest.mark.parametrize("library", ["slycot", "control"])
def test_independent_libraries_are_imported_in_the_child_alone(library: str) -> None:
    users = {
        (str(path.relative_to(PACKAGE)), found.at_top)
        for path in MODULES
        for found in imports_of(path)
        if found.module.partition(".")[0] == library
    }
    # objects of control go in and out where somebody has them: imported there, inside the functions
    allowed = {(CHILD, True), (CHILD, False)} | ({("interop/objects.py", False)} if library == "control" else set())
    assert users <= allowed
    for path in MODULES:
        for node in ast.walk(tree_of(path)):
            if isinstance(node, ast.Call) and getattr(node.func, "id", getattr(node.func, "attr", "")) in (
                "import_module",
                "__import__",
            ):
                named = [a.value for a in node.args if isinstance(a, ast.Constant) and isinstance(a.value, str)]
                assert not any(text.partition(".")[0] == library for text in named), path


def test_the_child_shares_nothing_with_the_package() -> None:
    assert not any(found.module.startswith("realize") for found in imports_of(PACKAGE / CHILD))


@pytest.mark.parametrize("library", ["matplotlib", "rich", "slycot", "control", "scipy.optimize", "scipy.signal"])
def test_heavy_libraries_are_imported_inside_functions(library: str) -> None:
    for path in MODULES:
        for found in imports_of(path):
            whole = {found.module, *(f"{found.module}.{name}" for name in found.names)}
            if any(name == library or name.startswith(library + ".") for name in whole):
                assert not found.at_top, f"{path.relative_to(PACKAGE)}:{found.line}"


def test_kernels_know_no_default_and_no_file() -> None:
    for path in (PACKAGE / "kernels").rglob("*.py"):
        for found in imports_of(path):
            assert found.module.partition(".")[0] not in ("json", "click", "pathlib", "rich", "msgspec"), path


def _modules_after(*arguments: str, code: str | None = None, cwd: Path | None = None) -> set[str]:
    """Return the modules that are loaded after a command (or a line of code) ran in a fresh interpreter."""
    body = code or f"import runpy, sys; sys.argv = ['realize', *{list(arguments)!r}]\n" + (
        "try:\n    runpy.run_module('realize', run_name='__main__')\nexcept SystemExit as done:\n"
        "    assert not done.code, done.code\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", body + "\nimport sys; sys.stderr.write('\\nMODULES ' + ' '.join(sys.modules))"],
        capture_output=True,
        text=True,
        timeout=60,
        cwd=cwd,
        env={**os.environ, "OMP_NUM_THREADS": "1"},
    )
    assert done.returncode == 0, done.stderr
    return set(done.stderr.rpartition("MODULES ")[2].split())


def test_importing_the_package_imports_no_numpy() -> None:
    loaded = _modules_after(code="import realize; assert realize.__version__")
    assert not loaded & {"numpy", "scipy", "click", "msgspec", "flint", "control", "slycot", "matplotlib", "rich"}


def test_version_imports_nothing_heavy() -> None:
    loaded = _modules_after("--version")
    assert not loaded & {"numpy", "scipy", "click", "msgspec", "flint", "control", "slycot", "matplotlib", "rich"}


def test_a_small_conversion_imports_only_what_it_uses(tmp_path: Path) -> None:
    (tmp_path / "small.json").write_text(
        '{"realize": 1, "kind": "transfer-function", "numerator": [1, 2], "denominator": [1, 3, 5, 7]}'
    )
    loaded = _modules_after(
        "convert", "small.json", "--to", "state-space", "--no-second-opinion", "-o", "out.json", cwd=tmp_path
    )
    assert (tmp_path / "out.json").exists()
    assert not loaded & {"control", "slycot", "matplotlib", "scipy.signal", "scipy.optimize", "pandas"}
