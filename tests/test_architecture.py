"""The house rules that a reader relies on, held by tests: who may import whom, and tests that can fail."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "src" / "anticlast"
MODULES = sorted(PACKAGE.rglob("*.py"))
TESTS = sorted((ROOT / "tests").rglob("*.py"))

# Lower layers first; a module may import from its own layer and those above it in this list, never below.
LAYERS = (
    {"errors", "tolerances", "cutter", "records", "files"},
    {"quadrature", "saddle", "outline", "outline_checks", "outline_cuts", "outline_files", "extremes"},
    {"toml_lines", "materials", "file_schema"},
    {"solid", "passes", "machine", "posting", "readback", "proof", "stock"},
    {"job", "job_schema", "job_checks", "job_cuts", "job_speeds", "job_turn", "reach", "survey"},
    {"report"},
    {"pipeline", "compare"},
    {"cli"},
)
LOWER_HALF = {"readback", "proof", "stock"}
# What the read-back half may share with the planning half: records, geometry, nothing that plans or writes text.
SHARED_WITH_LOWER_HALF = {
    "errors", "tolerances", "cutter", "records", "saddle", "outline", "readback", "proof", "stock", "materials",
}  # fmt: skip


def dotted(path: Path) -> str:
    return ".".join(path.relative_to(PACKAGE).with_suffix("").parts)


def imported(path: Path) -> set[str]:
    """Every module of the package that a file imports, anywhere in it, as dotted names below the package."""
    found = set()
    tree = ast.parse(path.read_text(encoding="utf-8"))
    annotations_only = {
        inner
        for node in ast.walk(tree)
        if isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"
        for inner in ast.walk(node)
    }
    for node in ast.walk(tree):
        if node in annotations_only:
            continue
        if isinstance(node, ast.ImportFrom) and node.module and node.module.split(".")[0] == "anticlast":
            base = node.module.removeprefix("anticlast").lstrip(".")
            found |= {f"{base}.{alias.name}".lstrip(".") for alias in node.names}
        elif isinstance(node, ast.Import):
            found |= {
                alias.name.removeprefix("anticlast.")
                for alias in node.names
                if alias.name.startswith("anticlast.")
            }
    return found


def stage(name: str) -> str:
    return name.split(".")[0]


def layer(name: str) -> int:
    for index, members in enumerate(LAYERS):
        if stage(name) in members:
            return index
    raise AssertionError(f"{name} stands in no layer: add it to LAYERS")


@pytest.mark.parametrize("path", [path for path in MODULES if path.stem != "__init__"], ids=dotted)
def test_imports_run_one_way(path: Path) -> None:
    for target in imported(path):
        if stage(target) in {"__version__", ""}:
            continue
        assert layer(target) <= layer(dotted(path)), f"{dotted(path)} must not import {target}"


@pytest.mark.parametrize("path", [path for path in MODULES if stage(dotted(path)) in LOWER_HALF], ids=dotted)
def test_lower_half_knows_nothing_of_the_upper(path: Path) -> None:
    strangers = {target for target in imported(path) if stage(target) not in SHARED_WITH_LOWER_HALF}
    assert not strangers, f"{dotted(path)} shares code with the planning half: {sorted(strangers)}"


@pytest.mark.parametrize("path", [path for path in MODULES if path.stem.endswith("_kernels")], ids=dotted)
def test_kernels_see_arrays_only(path: Path) -> None:
    """Compiled code calls nothing outside its file: numba's disk cache does not notice changes in other modules."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            assert {alias.name.split(".")[0] for alias in node.names} <= {"numpy", "math", "numba"}
        elif isinstance(node, ast.ImportFrom):
            assert (node.module or "").split(".")[0] in {"__future__", "numpy", "math", "numba"}


def test_planning_cannot_be_reached_from_the_geometry() -> None:
    for name in ("saddle", "outline", "cutter"):
        path = PACKAGE / f"{name}.py"
        assert not {stage(target) for target in imported(path)} & {
            "passes",
            "machine",
            "posting",
            "readback",
            "proof",
        }


def _calls(tree: ast.AST, names: set[str]) -> list[ast.Expr]:
    """Statements that call one of the names and drop the answer."""
    return [
        node
        for node in ast.walk(tree)
        if isinstance(node, ast.Expr)
        and isinstance(node.value, ast.Call)
        and (getattr(node.value.func, "attr", None) or getattr(node.value.func, "id", None)) in names
    ]


@pytest.mark.parametrize("path", TESTS, ids=lambda path: path.name)
def test_tests_can_fail(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert not _calls(tree, {"allclose", "isclose", "array_equal", "approx"}), (
        "a comparison's answer is dropped"
    )
    for node in ast.walk(tree):
        if isinstance(node, ast.FunctionDef) and node.name.startswith("test_"):
            source = ast.unparse(node)
            checks = re.search(r"\bassert\b|raises\(|assert_|check_|_agree\(|expect", source)
            assert checks, f"{path.name}:{node.lineno} {node.name} asserts nothing"
        if isinstance(node, ast.Call) and getattr(node.func, "attr", "") == "raises":
            name = ast.unparse(node.args[0]) if node.args else ""
            assert name not in {"Exception", "BaseException"}, (
                f"{path.name}:{node.lineno} accepts any exception"
            )


def _tracked_texts() -> list[Path]:
    kept = []
    for folder in ("src", "tests", "docs", "post", "samples", ".ci"):
        kept += [
            path
            for path in sorted((ROOT / folder).rglob("*"))
            if path.is_file() and "__pycache__" not in path.parts
        ]
    return [*kept, ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "pyproject.toml"]


@pytest.mark.parametrize("path", _tracked_texts(), ids=lambda path: str(path.relative_to(ROOT)))
def test_no_absolute_path_of_any_machine(path: Path) -> None:
    try:
        text = path.read_text(encoding="utf-8")
    except UnicodeDecodeError:
        return
    found = re.search(r"(?<![\w.])/(?:work|root|home/\w+|Users/\w+)/", text)
    assert path.name == Path(__file__).name or found is None


def test_developer_text_names_what_exists() -> None:
    for name in ("README.md", "DEVELOPERS.md"):
        text = (ROOT / name).read_text(encoding="utf-8")
        for quoted in re.findall(r"`((?:src|tests|docs|post|samples|\.ci)/[\w./-]*)`", text):
            assert (ROOT / quoted).exists(), f"{name} names {quoted}, which does not exist"
