"""The house rules that a parser can check: who may import whom, kernels, size, the top level."""

from __future__ import annotations

import ast
import importlib
import inspect
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import FunctionType

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "sparsesel"
FILES = sorted(PACKAGE.rglob("*.py"))

# Imports go down only: each place names all that it may import besides itself.
GROUND = {"tasks", "resampling", "claim", "datasets"}
ENGINE_FLOOR = {"engine", "error_control", *GROUND}
SELECTOR_FLOOR = {"knockoffs", "_sklearn_compat", *ENGINE_FLOOR}
STUDY_FLOOR = {"selectors", *SELECTOR_FLOOR}
MAY_IMPORT: dict[str, set[str]] = {
    "tasks": set(),
    "resampling": set(),
    "claim": set(),
    "datasets": set(),
    "error_control": set(),
    "_sklearn_compat": set(),
    "engine": {"tasks"},
    "knockoffs": {"engine", "error_control", "tasks", "resampling"},
    "selectors": SELECTOR_FLOOR,
    "study": STUDY_FLOOR,
    "report": {"study", *STUDY_FLOOR},
    "__main__": {"report", "study", *STUDY_FLOOR},
    # The public face of the package gathers names from everywhere.
    "__init__": {"report", "study", *STUDY_FLOOR},
}

RUN_TIME = {"numpy", "scipy", "sklearn", "numba", "joblib", "threadpoolctl"}
OPTIONAL = {"cvxpy", "matplotlib", "pandas", "polars"}
# Fixed by the owner; what starts with a dot is for tools.
TOP_LEVEL = {"LICENSE", "README.md", "DEVELOPERS.md", "pyproject.toml", "sparsesel", "tests"}
LEFT_BY_TOOLS = {"build", "dist", "__pycache__"}
LONGEST_FUNCTION = 60
KERNEL_DECORATORS = {"kernel", "exact_kernel"}


@dataclass(frozen=True)
class Import:
    module: str
    name: str
    line: int
    deferred: bool

    @property
    def top(self) -> str:
        return self.module.split(".")[0]

    @property
    def place(self) -> str:
        """The floor of an import of ours: ``from sparsesel import tasks`` is of tasks."""
        place = [*self.module.split("."), self.name][1]
        is_ours = place and ((PACKAGE / place).is_dir() or (PACKAGE / f"{place}.py").exists())
        return place if is_ours else "__init__"


def place_of(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def parse(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def is_deferred(node: ast.AST) -> bool:
    """Whether what a statement holds is run on a call, or by type checkers only."""
    for_types = isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"
    return for_types or isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef)


def imports(path: Path) -> Iterator[Import]:
    package = ["sparsesel", *path.relative_to(PACKAGE).parts[:-1]]

    def visit(node: ast.AST, deferred: bool) -> Iterator[Import]:
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield Import(alias.name, "", node.lineno, deferred)
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else []
            module = ".".join([*base, *([node.module] if node.module else [])])
            for alias in node.names:
                yield Import(module, alias.name, node.lineno, deferred)
        deferred = deferred or is_deferred(node)
        for child in ast.iter_child_nodes(node):
            yield from visit(child, deferred)

    return visit(parse(path), False)


def functions(path: Path) -> Iterator[ast.FunctionDef]:
    return (node for node in ast.walk(parse(path)) if isinstance(node, ast.FunctionDef))


def is_kernel(function: ast.FunctionDef) -> bool:
    return any(
        isinstance(part, ast.Name) and part.id in KERNEL_DECORATORS
        for decorator in function.decorator_list
        for part in ast.walk(decorator)
    )


def relative(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


each_file = pytest.mark.parametrize("path", FILES, ids=relative)


# --- floors ---------------------------------------------------------------------------------


@each_file
def test_imports_go_down_only(path):
    place = place_of(path)
    assert place in MAY_IMPORT, f"{place} has no floor: say in MAY_IMPORT what it may import"
    allowed = MAY_IMPORT[place] | {place}
    for found in imports(path):
        if found.top != "sparsesel":
            continue
        names_the_version = found.module == "sparsesel" and found.name == "__version__"
        assert names_the_version or found.place in allowed, (
            f"{relative(path)}:{found.line} imports {found.module} ({found.place}); "
            f"{place} may import {sorted(allowed)}"
        )


@each_file
def test_third_parties_are_declared_and_optional_ones_wait_until_called(path):
    for found in imports(path):
        if found.top == "sparsesel" or found.top in sys.stdlib_module_names:
            continue
        where = f"{relative(path)}:{found.line} imports {found.module}"
        assert found.top in RUN_TIME | OPTIONAL, f"{where}, which is not a dependency"
        if found.top == "cvxpy":
            assert relative(path) == "sparsesel/engine/reference.py", f"{where}, the reference's"
            assert found.deferred, f"{where} before it is called"
        elif found.top in OPTIONAL and place_of(path) != "report":
            assert found.deferred, f"{where} before it is called"


@each_file
def test_private_modules_of_scikit_learn_are_imported_in_one_file(path):
    if place_of(path) == "_sklearn_compat":
        return
    for found in imports(path):
        if found.top == "sklearn":
            parts = f"{found.module}.{found.name}".split(".")
            private = {part for part in parts if part.startswith("_")} - {"__version__"}
            assert not private, f"{relative(path)}:{found.line} imports {found.module}"


@pytest.mark.parametrize("path", sorted((PACKAGE / "error_control").glob("*.py")), ids=relative)
def test_error_control_is_pure_functions_of_numbers(path):
    third = {found.top for found in imports(path)} - sys.stdlib_module_names - {"sparsesel"}
    assert third <= {"numpy", "scipy"}


@each_file
def test_annotations_are_not_evaluated(path):
    tree = parse(path)
    code = [node for node in tree.body if not isinstance(node, ast.Expr)]
    if code:
        assert isinstance(code[0], ast.ImportFrom) and code[0].module == "__future__"


# --- kernels --------------------------------------------------------------------------------


@each_file
def test_kernels_are_compiled_by_our_decorators_without_threads_or_full_fastmath(path):
    for found in imports(path):
        if found.top == "numba":
            assert relative(path) == "sparsesel/engine/_jit.py", f"line {found.line}"
    for node in ast.walk(parse(path)):
        settings: list[tuple[str | None, ast.AST]] = []
        if isinstance(node, ast.Call):
            settings = [(keyword.arg, keyword.value) for keyword in node.keywords]
        elif isinstance(node, ast.Dict):
            settings = [
                (key.value, value)
                for key, value in zip(node.keys, node.values, strict=True)
                if isinstance(key, ast.Constant)
            ]
        for name, value in settings:
            is_true = isinstance(value, ast.Constant) and value.value is True
            # Full fastmath lets NaN pass a certificate; threads of a kernel fight those of BLAS.
            assert not (name in ("fastmath", "parallel") and is_true), f"line {node.lineno}"


@each_file
def test_what_a_kernel_calls_lives_in_its_file(path):
    """The cache of compiled code does not notice an edit in another file."""
    ours = {
        found.name: found.module
        for found in imports(path)
        if found.top == "sparsesel" and found.name not in KERNEL_DECORATORS
    }
    for function in filter(is_kernel, functions(path)):
        called = {
            node.func.id
            for node in ast.walk(function)
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
        }
        assert not called & set(ours), f"{function.name} calls {called & set(ours)}"


# --- docstrings -------------------------------------------------------------------------------


@pytest.mark.parametrize("path", [p for p in FILES if place_of(p) != "__main__"], ids=relative)
def test_public_objects_are_documented(path):
    parts = path.relative_to(ROOT).with_suffix("").parts
    module = importlib.import_module(".".join(parts).removesuffix(".__init__"))
    for name in getattr(module, "__all__", []):
        public = getattr(module, name)
        documented = {name: public} if callable(public) else {}
        if inspect.isclass(public):
            documented |= {
                f"{name}.{member}": getattr(public, member)
                for member, value in vars(public).items()
                if member[0] != "_" and isinstance(value, FunctionType | property)
            }
        bare = [label for label, value in documented.items() if not inspect.getdoc(value)]
        assert not bare


# --- size -----------------------------------------------------------------------------------


def length(function: ast.FunctionDef) -> int:
    """Count the lines of a function without its docstring."""
    body = function.body[1:] if ast.get_docstring(function) else function.body
    return (body[-1].end_lineno or 0) - body[0].lineno + 1 if body else 0


@each_file
def test_functions_stay_short_and_long_kernels_say_why(path):
    for function in functions(path):
        if length(function) <= LONGEST_FUNCTION:
            continue
        where = f"{relative(path)}:{function.lineno} {function.name} has {length(function)} lines"
        assert is_kernel(function), f"{where}; stop at {LONGEST_FUNCTION}"
        reason = ast.get_docstring(function) or ""
        assert "because" in reason, f"{where}; its docstring must say because of what"


# --- the top level ----------------------------------------------------------------------------


def test_the_top_level_holds_what_the_owner_fixed_and_nothing_else():
    found = {
        path.name
        for path in ROOT.iterdir()
        if path.name[0] != "." and path.suffix != ".egg-info" and path.name not in LEFT_BY_TOOLS
    }
    assert TOP_LEVEL <= found <= TOP_LEVEL | {"examples"}
