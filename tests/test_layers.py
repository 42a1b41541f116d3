"""Which package may import what, read from the source without running it."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
GEOMETRY = sorted((ROOT / "geometry").rglob("*.py"))
CONVERTER = sorted((ROOT / "converter").rglob("*.py"))
FORBIDDEN = {"converter", "ezdxf", "click", "rich", "jinja2", "pathlib", "io", "os", "sys", "json", "csv", "logging"}
SLOW = ("scipy.interpolate", "scipy.spatial", "scipy.optimize", "shapely")


def name(path):
    return str(path.relative_to(ROOT))


def imports(nodes):
    """Full names that the given statements import."""
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are written in full"
            yield node.module
            yield from (f"{node.module}.{alias.name}" for alias in node.names)


def test_both_packages_are_found():
    assert {"geometry/polyline.py", "geometry/bspline.py"} <= {name(path) for path in GEOMETRY}
    assert CONVERTER


def test_imports_are_seen():
    tree = ast.parse("import rich.table\nfrom scipy import interpolate\ndef f():\n    import shapely\n")
    assert list(imports(ast.walk(tree))) == ["rich.table", "scipy", "scipy.interpolate", "shapely"]
    assert list(imports(tree.body)) == ["rich.table", "scipy", "scipy.interpolate"]


@pytest.mark.parametrize("path", GEOMETRY, ids=name)
def test_geometry_is_numbers_only(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    assert not {found.split(".")[0] for found in imports(ast.walk(tree))} & FORBIDDEN
    calls = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not calls & {"open", "print", "input"}


@pytest.mark.parametrize("path", GEOMETRY, ids=name)
def test_slow_libraries_are_imported_where_they_are_used(path):
    top = list(imports(ast.parse(path.read_text(encoding="utf-8")).body))
    assert not [found for found in top if found.startswith(SLOW)]


@pytest.mark.parametrize("path", GEOMETRY + CONVERTER, ids=name)
def test_nothing_imports_the_tests_or_samples(path):
    roots = {found.split(".")[0] for found in imports(ast.walk(ast.parse(path.read_text(encoding="utf-8"))))}
    assert not roots & {"tests", "samples", "hypothesis", "pytest", "geomdl", "pyogrio", "matplotlib"}
