"""The import rule between rooms, read from the source."""

import ast
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
ROOMS = ("flows", "detectors", "warehouse", "dashboards")
MAY_IMPORT = {
    "detectors": {"detectors"},
    "warehouse": {"warehouse"},
    "dashboards": {"dashboards", "warehouse.published", "warehouse.cautions"},
    "flows/readers": {"flows.readers"},
    "flows": set(ROOMS),
}
LIBRARIES = {
    "detectors": {"numpy", "scipy"},
    "warehouse": {"duckdb", "polars", "deltalake", "obstore", "numpy", "xlsxwriter", "pyreadstat"},
    "dashboards": {"plotly", "polars", "jinja2", "markupsafe", "PIL"},
    "flows/readers": {"numpy", "polars", "pydicom", "soundfile"},
    "flows": {"polars", "numpy", "prefect", "distributed", "rich", "jinja2", "jsonschema"},
}
MODULES = sorted(path for room in ROOMS for path in (ROOT / room).rglob("*.py"))


def room_of(path: Path) -> str:
    name = path.relative_to(ROOT).as_posix()
    return "flows/readers" if name.startswith("flows/readers/") else name.split("/")[0]


def imported(path: Path) -> set[str]:
    """Every module that the source names in an import, at any depth."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: write imports in full"
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
    return names


def allowed(name: str, may: set[str]) -> bool:
    return any(name == room or name.startswith(room + ".") for room in may)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_a_room_imports_only_what_its_floor_may(path):
    """A module imports of ours only the rooms below it, and of others only its room's libraries."""
    room = room_of(path)
    for name in imported(path):
        top = name.split(".")[0]
        if top in ROOMS:
            assert allowed(name, MAY_IMPORT[room]), f"{path.relative_to(ROOT)} imports {name}"
        elif top not in sys.stdlib_module_names:
            assert top in LIBRARIES[room], f"{path.relative_to(ROOT)} imports the library {top}"


def test_only_the_schedule_knows_prefect():
    """No module but flows/schedule.py imports Prefect."""
    knowing = {
        path.relative_to(ROOT).as_posix()
        for path in MODULES
        if any(name.split(".")[0].startswith("prefect") for name in imported(path))
    }
    assert knowing <= {"flows/schedule.py"}
