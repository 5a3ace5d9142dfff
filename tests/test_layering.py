"""A module imports only from those above it, and the shipped plugins only what anyone may."""

import ast
import sys
from pathlib import Path

import pytest

import hindlight
import hindlight_plugins

SOURCE = Path(hindlight.__file__).parent
PLUGINS = Path(hindlight_plugins.__file__).parent

ORDER = [
    "errors", "wording", "schema", "completeness_schema", "facts", "blocks", "settings", "dates", "lightcurve",
    "plugin", "cutouts", "contrasts", "hookspecs", "tables", "host", "fence", "clock", "storage", "systems",
    "celestial", "sky", "headers", "instants", "sites", "reading", "integrity", "goodtime", "timetables", "knowledge",
    "files", "companions", "channels", "outlines", "footprints", "frametable", "archive", "summary", "positions",
    "apart", "spans", "pixels", "background", "detection", "pointing", "growth", "opening", "fluxes", "photometry",
    "planted", "duplicates", "likeness", "robust", "losses", "response", "ensemble", "store", "judge", "calibrate",
    "tails", "ranking", "lifted", "search", "timing", "injection", "looks", "completeness", "brighter", "candidates",
    "plan", "more_controls", "comparisons", "tied", "order", "tasks", "examining", "trials", "conclude", "bright",
    "outcome", "crew", "record", "asides", "verdicts", "measuring", "second_pass", "runner", "report_card", "study",
    "hiding", "chances", "unseen", "recovered", "recovery", "powers", "layout", "survey", "export", "demo", "testing",
    "outlet", "cli", "__main__",
]  # fmt: skip
PLUGINS_MAY_IMPORT = {"hindlight", "numpy", "scipy", "astropy", "photutils", "nifty_ls"}


def imports(path):
    """Every module a file imports, by full name."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name}: relative import"
            if node.module == "hindlight":
                yield from (f"hindlight.{alias.name}" for alias in node.names)
            else:
                yield node.module


def test_every_module_has_its_place():
    """The list above names every module of the package, once."""
    names = sorted(path.stem for path in SOURCE.glob("*.py") if path.stem != "__init__")
    assert sorted(ORDER) == names


@pytest.mark.parametrize("name", ORDER)
def test_modules_import_only_from_above(name):
    """No module imports one that stands below it in the list."""
    for module in imports(SOURCE / f"{name}.py"):
        parts = module.split(".")
        if parts[0] == "hindlight" and len(parts) > 1 and parts[1] in ORDER:
            assert ORDER.index(parts[1]) < ORDER.index(name), f"{name} imports {parts[1]}"


def test_only_the_crew_imports_dask():
    """What runs on a cluster is written without knowing of one."""
    for path in SOURCE.glob("*.py"):
        names = {module.split(".")[0] for module in imports(path)}
        assert path.stem == "crew" or not names & {"dask", "distributed"}


def test_only_storage_imports_fsspec():
    """Whoever reads files need not know where they are."""
    for path in SOURCE.glob("*.py"):
        assert path.stem == "storage" or "fsspec" not in {module.split(".")[0] for module in imports(path)}


def test_only_the_command_line_prints():
    """No module but the command line calls print()."""
    for path in SOURCE.glob("*.py"):
        calls = [n for n in ast.walk(ast.parse(path.read_text(encoding="utf-8"))) if isinstance(n, ast.Call)]
        printing = [c for c in calls if isinstance(c.func, ast.Name) and c.func.id == "print"]
        assert path.stem == "cli" or not printing


@pytest.mark.parametrize("path", sorted(PLUGINS.glob("*.py")), ids=lambda path: path.stem)
def test_shipped_plugins_use_the_public_interface_alone(path):
    """A shipped plugin imports `hindlight` itself, the usual libraries and the standard library, no inner module."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.split(".")[0] == "hindlight":
            assert node.module in ("hindlight", "hindlight.testing")
            assert {alias.name for alias in node.names} <= set(hindlight.__all__)
    for module in imports(path):
        top = module.split(".")[0]
        assert top in PLUGINS_MAY_IMPORT or top in sys.stdlib_module_names
