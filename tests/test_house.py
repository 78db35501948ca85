"""The rules of the house: who may import whom, and what the package offers."""

import ast
import importlib
import subprocess
import sys
from pathlib import Path

import pytest

import terrain2q

ROOT = Path(terrain2q.__file__).parent

# Each part may import the parts named, itself, and nothing else of ours. The arrows only run one way.
MAY_IMPORT = {
    "errors": set(),
    "units": {"errors"},
    "columns": {"units"},
    "roughness_tables": {"errors"},
    "study": {"errors", "units", "roughness_tables"},
    "flows": {"errors", "study"},
    "findings_page": {"errors"},
    "start": {"errors", "study", "flows", "ground"},
    "hydraulics": {"errors", "units"},
    "ground": {"errors", "units"},
    "jobs": {"errors", "units", "flows", "ground", "hydraulics"},
    "output": {"errors", "units", "columns", "ground", "hydraulics", "jobs"},
    "laying_out": {"errors", "units", "study", "ground", "jobs", "output", "screening"},
    "screening": {"batches", "errors", "flows", "study", "ground", "hydraulics", "jobs", "output"},
    "batches": {"errors", "units", "columns", "flows", "ground", "hydraulics", "jobs", "output"},
    "process": {"batches", "errors", "units", "columns", "flows", "study", "ground", "hydraulics", "jobs",
                "output", "roughness_tables", "laying_out", "screening"},
    "commands": {"errors", "units", "columns", "study", "flows", "start", "process", "roughness_tables",
                 "output", "laying_out"},
}  # fmt: skip

PURE = {"hydraulics": {"rasterio", "geopandas", "shapely", "pyproj", "pyogrio", "click"}}
"""Libraries that a part never imports; pandas and matplotlib only where a method needs them."""


def _part(path: Path) -> str:
    return path.relative_to(ROOT).parts[0].removesuffix(".py")


def _imports(tree: ast.AST) -> set[str]:
    found = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found.add(node.module)
            if node.module == "terrain2q":
                found |= {f"terrain2q.{alias.name}" for alias in node.names}
    return found


@pytest.mark.parametrize("path", sorted(ROOT.rglob("*.py")), ids=lambda p: str(p.relative_to(ROOT)))
def test_imports_run_one_way(path):
    part = _part(path)
    if part in ("__init__", "__main__"):
        return
    assert part in MAY_IMPORT, f"{part} is new: give it its place in MAY_IMPORT and in DEVELOPERS.md"
    for name in _imports(ast.parse(path.read_text(encoding="utf-8"))):
        root, _, rest = name.partition(".")
        if root == "terrain2q" and rest and rest != "__version__":
            other = rest.split(".")[0]
            assert other == part or other in MAY_IMPORT[part], f"{path.name} imports {name}"
        assert root not in PURE.get(part, ()), f"{path.name} imports {root}"


def test_what_is_offered_can_be_imported():
    for name in terrain2q.__all__:
        assert getattr(terrain2q, name) is not None
    assert sorted(terrain2q.__all__) == terrain2q.__all__


def test_package_imports_nothing_heavy():
    tree = ast.parse((ROOT / "__init__.py").read_text(encoding="utf-8"))
    top = {n.names[0].name for n in tree.body if isinstance(n, ast.Import)}
    assert top == {"importlib"}
    with pytest.raises(AttributeError):
        terrain2q.no_such_name  # noqa: B018


def test_every_module_imports():
    for path in ROOT.rglob("*.py"):
        name = ".".join(["terrain2q", *path.relative_to(ROOT).with_suffix("").parts]).removesuffix(
            ".__init__"
        )
        if not name.endswith("__main__"):
            importlib.import_module(name)


@pytest.mark.parametrize(
    ("module", "not_loaded"),
    [
        # what every process that works on batches loads
        (
            "terrain2q.batches.engines",
            {"pandas", "geopandas", "pyogrio", "matplotlib", "scipy", "fontTools", "jinja2", "numba"},
        ),
        # what a run loads that writes no pages and draws nothing
        ("terrain2q.process", {"matplotlib", "scipy", "fontTools", "jinja2", "numba"}),
    ],
)
def test_what_is_slow_to_load_is_not_loaded_before_it_is_needed(module, not_loaded):
    code = f"import sys, {module}; print(*{{name.split('.')[0] for name in sys.modules}})"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert not not_loaded & set(loaded.split())
