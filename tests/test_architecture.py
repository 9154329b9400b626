"""The shape of the code: what may import what, where SQL and the cluster are, file sizes."""

import ast
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests import reference

ROOT = Path(__file__).parent.parent
DOWNWARD = [
    "units",
    "quantity",
    "sending",
    "span",
    "receiving",
    "extent",
    "experiment",
    "grid",
    "columns",
    "legend",
    "measured",
    "catalogue",
    "source",
    "amplifier",
    "relation",
    "fibre",
    "receiver",
    "theory",
    "thermal",
    "findings",
    "planning",
    "schemes",
    "kernels",
    "transforms",
    "track",
    "propagation",
    "accumulators",
    "layout",
    "widths",
    "statistics",
    "pairing",
    "view",
    "budget",
    "point",
    "result",
    "task",
    "features",
    "detection",
    "passage",
    "invariants",
    "ensemble",
    "chain",
    "study",
]
LONGEST_FILE_LINES = 660
VAGUE_NAMES = {"utils", "util", "helpers", "helper", "common", "misc"}
CODE = {".py", ".js", ".css", ".html"}
SQL = re.compile(
    r"\b(SELECT\s.+\sFROM|INSERT\s+(OR\s+\w+\s+)?INTO|UPDATE\s+\w+\s+SET|DELETE\s+FROM"
    r"|CREATE\s+(TABLE|INDEX|TRIGGER|UNIQUE|VIEW|VIRTUAL)|PRAGMA\s)",
    re.DOTALL,
)


def _python(folder: str) -> list[Path]:
    return sorted((ROOT / folder).rglob("*.py"))


def _imports(path: Path) -> Iterator[tuple[str, bool]]:
    """(module, whether it is imported when the file is) of every import in a file."""
    tree = ast.parse(path.read_text())
    top = set(ast.walk(tree))
    for function in [
        n for n in ast.walk(tree) if isinstance(n, ast.FunctionDef | ast.AsyncFunctionDef)
    ]:
        top -= set(ast.walk(function)) - {function}
    for node in ast.walk(tree):
        match node:
            case ast.Call(
                func=ast.Attribute(attr="import_module"), args=[ast.Constant(value=str(module))]
            ):
                yield module, node in top
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node in top
        elif isinstance(node, ast.ImportFrom):
            module = node.module or ""
            yield module, node in top
            for alias in node.names:
                yield f"{module}.{alias.name}", node in top


@pytest.mark.parametrize("path", _python("solver"), ids=lambda path: path.name)
def test_solver_imports_run_downward(path: Path) -> None:
    """A module imports only those before it; ``study`` reaches ``ensemble`` late, in a function."""
    if path.stem == "__init__":
        assert not list(_imports(path))
        return
    assert path.stem in DOWNWARD, f"{path.name} has no place in the order: add it"
    below = set(DOWNWARD[: DOWNWARD.index(path.stem)])
    for module, at_top in _imports(path):
        package, _, rest = module.partition(".")
        assert package not in {"server", "web", "tests"}, f"{path.name} imports {module}"
        name = rest.partition(".")[0]
        if package == "solver" and name in DOWNWARD:
            assert name in below, f"{path.name} imports {module}, which is not below it"
            if path.stem == "study" and name == "ensemble":
                assert not at_top, "study must load the compiled solver only in a function"


def test_the_server_starts_without_the_compiled_solver() -> None:
    """Starting would otherwise take seconds and hundreds of MB the web process never uses."""
    probe = (
        "import sys, server.app\n"
        "loaded = {'numba', 'pyfftw', 'llvmlite', 'solver.kernels'} & set(sys.modules)\n"
        "sys.exit(f'loaded: {sorted(loaded)}' if loaded else 0)"
    )
    done = subprocess.run(
        [sys.executable, "-c", probe], cwd=ROOT, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 0, done.stderr


def test_sql_stands_in_one_module() -> None:
    """All statements in server/storage.py."""
    strings = {
        path.relative_to(ROOT).as_posix()
        for folder in ("server", "solver", "web")
        for path in _python(folder)
        for node in ast.walk(ast.parse(path.read_text()))
        if isinstance(node, ast.Constant) and isinstance(node.value, str) and SQL.search(node.value)
    }
    assert strings == {"server/storage.py"}


def test_the_cluster_is_behind_one_module() -> None:
    """Only server/engine.py knows distributed (or dask)."""
    users = {
        path.relative_to(ROOT).as_posix()
        for folder in ("server", "solver", "web")
        for path in _python(folder)
        for module, _ in _imports(path)
        if module.partition(".")[0] in {"distributed", "dask"}
    }
    assert users == {"server/engine.py"}


def test_files_are_short_and_named_for_what_they_hold() -> None:
    """One noun per file."""
    files = [
        path
        for folder in ("solver", "server", "web", "tests")
        for path in (ROOT / folder).rglob("*")
        if path.suffix in CODE and "__pycache__" not in path.parts
    ]
    assert len(files) > 40
    long = {p.name: n for p in files if (n := len(p.read_text().splitlines())) > LONGEST_FILE_LINES}
    assert not long
    assert not [path for path in files if path.stem.lower() in VAGUE_NAMES]


def test_every_kernel_has_an_oracle() -> None:
    """A public compiled function has a plain numpy twin of the same name in tests/reference.py."""
    tree = ast.parse((ROOT / "solver" / "kernels.py").read_text())
    compiled = [
        node.name
        for node in tree.body
        if isinstance(node, ast.FunctionDef)
        and not node.name.startswith("_")
        and any("njit" in ast.dump(inner) for inner in ast.walk(node))
    ]
    assert set(compiled) == {
        "kerr_rotation",
        "linear_flow",
        "band_share",
        "column_powers",
        "intensity_moments",
        "domain_counts",
        "map_levels",
        "field_walls",
        "sphere_counts",
        "intensity_counts",
        "quadrature_counts",
        "spectral_lines",
        "column_stokes",
        "local_polarization",
        "spectral_moments",
    }
    assert not [name for name in compiled if not callable(getattr(reference, name, None))]
    elsewhere = [
        path.name
        for path in _python("solver")
        if path.stem != "kernels" and "njit" in path.read_text()
    ]
    assert not elsewhere
