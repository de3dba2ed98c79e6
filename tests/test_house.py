"""The house stands as written: imports run one way, top-level commands stay light, modules keep their size."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parent.parent / "inundate"
ORDER = [
    "common", "scenes", "leaves", "pixels", "extent", "stage", "relation", "series", "skill", "products", "batch", "cli",
]  # fmt: skip
NO_FILES = ("leaves", "extent", "relation", "series", "skill")
FORBIDDEN = {"pickle", "joblib", "shelve", "marshal"}


def _imports(path: Path) -> list[str]:
    """Return dotted names that a module imports, at any depth."""
    names = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names += [a.name for a in node.names]
        elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
            names.append(node.module)
    return names


def _part(path: Path) -> str:
    inner = path.relative_to(PACKAGE).parts
    return inner[0].removesuffix(".py")


MODULES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_run_one_way(path):
    """A part imports common and parts above it only; the reserve imports common only; batch alone calls the reserve."""
    part = _part(path)
    if part == "__init__":
        return
    for name in _imports(path):
        if not name.startswith("inundate."):
            continue
        other = name.split(".")[1]
        if part == "reserve":
            assert other in ("common", "reserve"), f"{path} imports {name}"
        elif other == "reserve":
            assert part in ("batch", "reserve"), f"{path} imports {name}"
        else:
            assert ORDER.index(other) <= ORDER.index(part), f"{path} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_nothing_is_pickled_and_science_opens_no_files(path):
    """No module pickles; scientific parts import no file library, no dask and no configuration."""
    names = {n.split(".")[0] for n in _imports(path)}
    assert not names & FORBIDDEN
    if _part(path) in NO_FILES:
        assert not names & {"rasterio", "rioxarray", "dask", "pydantic", "tomllib", "pystac", "sqlite3"}


def test_modules_keep_their_size():
    """Modules stay under about 400 lines."""
    long = {str(p.relative_to(PACKAGE)): n for p in MODULES if (n := len(p.read_text().splitlines())) > 425}
    assert not long


def test_help_is_light():
    """``inundate --help`` loads none of the heavy libraries."""
    code = "import sys, inundate.cli; print([m for m in ('numpy','pandas','lightgbm','rasterio','numba','dask') if m in sys.modules])"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert out.stdout.strip() == "[]"


def test_compiled_code_may_not_reorder_sums():
    """No kernel lets the compiler reorder arithmetic: a build from cache would then differ in the last bits from a fresh one."""
    loose = [str(p.relative_to(PACKAGE)) for p in MODULES if "fastmath" in p.read_text()]
    assert not loose
