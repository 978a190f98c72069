"""The three floors: a module imports only from its own floor or from below."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent / "loopint"
MATHEMATICS = {"core", "hypergeometric", "integrals", "quadrature", "arrays", "formulas"}
PIPELINE = {"pipeline", "interpolation"}
MAY_IMPORT = {  # rooms of the mathematics floor, from the bottom up
    "core": {"core"},
    "hypergeometric": {"core", "hypergeometric"},
    "quadrature": {"core", "quadrature"},
    "integrals": {"core", "hypergeometric", "quadrature", "integrals"},
    "arrays": {"core", "hypergeometric", "integrals", "arrays"},
    "formulas": {"core", "hypergeometric", "quadrature", "integrals", "formulas"},
    "pipeline": MATHEMATICS | {"pipeline"},
    "interpolation": MATHEMATICS | PIPELINE,
}
FILES = sorted(path for path in ROOT.rglob("*.py"))


def imports(path: Path, *, at_run_time: bool = False) -> set[str]:
    """Return the modules of the package that a file imports, wherever the import stands.

    With `at_run_time`, imports for the type checker only are left out.
    """
    found = set()
    tree = ast.parse(path.read_text(encoding="utf-8"))
    typing_only: set[ast.AST] = set()
    for node in ast.walk(tree):
        if at_run_time and isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING":
            typing_only.update(inner for child in node.body for inner in ast.walk(child))
    for node in ast.walk(tree):
        if node in typing_only:
            continue
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            module = str(node.module)
            for alias in node.names:  # a module of a package, or a name in a module
                inner = ROOT.parent / Path(*module.split("."), f"{alias.name}.py")
                found.add(f"{module}.{alias.name}" if inner.is_file() else module)
    return {name for name in found if name.split(".")[0] == "loopint"}


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(ROOT)))
def test_imports_point_downwards(path: Path) -> None:
    room = path.relative_to(ROOT).parts[0]
    if room not in MAY_IMPORT:
        return  # a face: may import everything
    for name in imports(path):
        target = name.split(".")[1] if "." in name else ""
        assert target in MAY_IMPORT[room], f"{path.relative_to(ROOT)} imports {name}"


def test_there_are_no_import_cycles() -> None:
    modules = {
        ".".join(("loopint", *path.relative_to(ROOT).with_suffix("").parts)).removesuffix(
            ".__init__"
        ): path
        for path in FILES
    }
    graph = {
        name: {n for n in imports(path, at_run_time=True) if n in modules}
        for name, path in modules.items()
    }
    graph["loopint"] = set()  # the public face re-exports
    done: set[str] = set()

    def visit(name: str, trail: tuple[str, ...]) -> None:
        assert name not in trail, " -> ".join((*trail, name))
        if name not in done:
            for below in graph[name]:
                visit(below, (*trail, name))
            done.add(name)

    for name in graph:
        visit(name, ())


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(ROOT)))
def test_user_text_is_never_executed(path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call):
            name = getattr(node.func, "id", getattr(node.func, "attr", ""))
            assert name not in {"eval", "exec", "sympify", "parse_expr"}, f"{path}: {name}"


def test_only_one_module_sets_the_precision() -> None:
    for path in FILES:
        if path.name != "precision.py":
            assert "ctx.prec =" not in path.read_text(encoding="utf-8"), path
