"""The direction of imports between rooms, and the names and weight of the top level."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import fragkit

PACKAGE = Path(fragkit.__file__).parent
MAY_IMPORT = {
    "core": set(),
    "readers": {"core"},
    "fit": {"core"},
    "states": {"core"},
    "circuits": {"core"},
    "pauli": {"core", "states"},
    "planning": {"core", "fit", "states"},
    "estimate": {"core", "planning", "circuits", "states"},
    "report": {"core", "readers", "fit", "states", "circuits", "pauli", "planning", "estimate"},
    "files": {"core", "readers", "fit", "states", "circuits", "pauli", "planning", "estimate"},
}
# Inside of planning; what is not in a folder may import all of them.
PLANNING_MAY_IMPORT = {
    "_operators": set(),
    "_exact": {"_operators"},
    "_rotations": {"_operators"},
    "_gap": {"_operators", "_exact", "_rotations"},
}
# Methods of Plan, TradeOff, Counts and Estimate forward to upper rooms, and import them in the method's body.
FORWARDING = {
    "planning/_plan.py",
    "planning/_trade_off.py",
    "estimate/_adaptive.py",
    "estimate/_counts.py",
    "estimate/_estimate.py",
}


def imported_rooms(tree: ast.AST) -> set[str]:
    names = []
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom) and node.module:
            names.append(node.module)
        elif isinstance(node, ast.Import):
            names += [alias.name for alias in node.names]
    return {name.split(".")[1] for name in names if name.startswith("fragkit.") and name.count(".") >= 1}


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_lower_rooms_never_import_upper_ones(room: str) -> None:
    files = sorted((PACKAGE / room).rglob("*.py"))
    assert files, f"room {room} has no files"
    for path in files:
        tree = ast.parse(path.read_text())
        if f"{room}/{path.name}" in FORWARDING:
            tree = ast.Module([node for node in tree.body if isinstance(node, ast.Import | ast.ImportFrom)], [])
        wrong = imported_rooms(tree) - MAY_IMPORT[room] - {room}
        assert not wrong, f"{room}/{path.name} imports {sorted(wrong)}"


@pytest.mark.parametrize("folder", sorted(PLANNING_MAY_IMPORT))
def test_folders_of_planning_import_downwards(folder: str) -> None:
    files = sorted((PACKAGE / "planning" / folder).glob("*.py"))
    assert len(files) > 3
    for path in files:
        parts = [name.split(".") for name in imported_paths(ast.parse(path.read_text()))]
        used = {part[2] for part in parts if part[:2] == ["fragkit", "planning"]} & set(PLANNING_MAY_IMPORT)
        assert used <= PLANNING_MAY_IMPORT[folder] | {folder}, f"{path.name} imports {sorted(used)}"


def imported_paths(tree: ast.AST) -> list[str]:
    """Dotted paths of everything that is imported, names out of modules included."""
    paths = []
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, "relative import"
            paths += [f"{node.module}.{alias.name}" for alias in node.names]
        elif isinstance(node, ast.Import):
            paths += [alias.name for alias in node.names]
    return paths


def test_rooms_use_each_others_front_doors_only() -> None:
    seen = 0
    for path in sorted(PACKAGE.rglob("*.py")):
        room = path.relative_to(PACKAGE).parts[0]
        for imported in imported_paths(ast.parse(path.read_text())):
            parts = imported.split(".")
            if parts[0] != "fragkit" or len(parts) < 3 or parts[1] == room:
                continue
            seen += 1
            assert not any(part.startswith("_") for part in parts[2:]), f"{path} imports {imported}"
    assert seen > 100


def test_every_public_name_resolves_and_is_declared_to_type_checkers() -> None:
    tree = ast.parse((PACKAGE / "__init__.py").read_text())
    guarded = next(node for node in tree.body if isinstance(node, ast.If))
    declared = {alias.asname for node in ast.walk(guarded) if isinstance(node, ast.ImportFrom) for alias in node.names}
    assert declared == set(fragkit.__all__)
    for name in fragkit.__all__:
        assert getattr(fragkit, name) is not None


def test_import_leaves_heavy_packages_alone() -> None:
    heavy = ["jax", "openfermion", "pyscf", "matplotlib", "clarabel", "cirq", "qiskit", "scipy"]
    code = f"import fragkit, sys; print([name for name in {heavy} if name in sys.modules])"
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.strip()
    assert shown == "[]"


def test_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        _ = fragkit.nonsense
