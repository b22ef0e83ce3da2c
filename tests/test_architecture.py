"""The plan of the house: imports point down, modules stay small, and everything has its place."""

import ast
import graphlib
import re
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[1]
PACKAGE, TESTS = REPOSITORY / "habitat", REPOSITORY / "tests"
MODULES, TEST_MODULES = sorted(PACKAGE.rglob("*.py")), sorted(TESTS.rglob("*.py"))

FLOORS = [
    {"errors", "files", "units", "schema"},
    {"seawater", "species"},
    {"ocean", "trials"},
    {"bands", "viability", "scenario"},
    {"regions", "findings", "tables", "figures", "gridfile", "output", "progress"},
    {"studyfile"},
    {"report", "pictures"},
    {"study", "bandfile", "trialsjob"},
    {"cli", "__init__"},
]
FLOOR_OF = {part: floor for floor, parts in enumerate(FLOORS) for part in parts}
WITHIN_A_FLOOR = {  # importer, imported
    ("files", "errors"),
    ("units", "errors"),
    ("schema", "errors"),
    ("schema", "files"),
    ("viability", "bands"),
    ("findings", "regions"),
    ("figures", "regions"),
    ("cli", "__init__"),
}
LONGEST_MODULE = 420  # lines

each_module = pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(PACKAGE).as_posix())


def tree(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def dotted(path: Path) -> str:
    """Name of a module as it is imported; a package is named by its folder."""
    parts = path.relative_to(REPOSITORY).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


NAMES = {dotted(path): path for path in MODULES}


def imported_modules(path: Path) -> Iterator[str]:
    """Modules of this package that `path` imports, inside functions and for types too."""
    package = dotted(path) if path.name == "__init__.py" else dotted(path).rpartition(".")[0]
    for node in ast.walk(tree(path)):
        if isinstance(node, ast.Import):
            candidates = [(alias.name, None) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            ancestors = package.split(".")[: len(package.split(".")) + 1 - node.level] if node.level else []
            source = ".".join([*ancestors, *([node.module] if node.module else [])])
            candidates = [(source, alias.name) for alias in node.names]
        else:
            continue
        for source, name in candidates:
            if source.split(".")[0] == "habitat":
                yield f"{source}.{name}" if f"{source}.{name}" in NAMES else source


def part_of(module: str) -> str:
    """Room of the house that a module belongs to: ``habitat.ocean.roles`` is in ``ocean``."""
    return module.split(".")[1] if "." in module else "__init__"


@each_module
def test_imports_point_down(path):
    importer = part_of(dotted(path))
    assert importer in FLOOR_OF, f"{importer} has no floor yet: give it one in FLOORS"
    for module in imported_modules(path):
        imported = part_of(module)
        allowed = (
            imported == importer
            or (importer, imported) in WITHIN_A_FLOOR
            or FLOOR_OF.get(imported, len(FLOORS)) < FLOOR_OF[importer]
        )
        assert allowed, f"{dotted(path)} imports {module}, which is not below it"


def test_imports_make_no_cycle():
    graph = {name: set(imported_modules(path)) - {name} for name, path in NAMES.items()}
    graphlib.TopologicalSorter(graph).prepare()  # raises CycleError, which names the modules


def test_imports_are_seen_in_every_form(tmp_path, monkeypatch):
    path = tmp_path / "habitat" / "ocean" / "roles.py"
    path.parent.mkdir(parents=True)
    path.write_text(
        "import numpy, habitat.errors\n"
        "from habitat import units as u\n"
        "from habitat.files import nearest\n"
        "def late():\n    from ..seawater import solubility\n    from . import casts\n    from .. import files\n"
    )
    monkeypatch.setitem(globals(), "REPOSITORY", tmp_path)
    found = [
        "habitat.errors",
        "habitat.units",
        "habitat.files",
        "habitat.seawater",
        "habitat.ocean.casts",
        "habitat.files",
    ]
    assert list(imported_modules(path)) == found


@each_module
def test_modules_are_small(path):
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST_MODULE


@each_module
def test_everything_public_is_documented(path):
    module = tree(path)
    kinds = (ast.FunctionDef, ast.AsyncFunctionDef, ast.ClassDef)
    public = [node for node in module.body if isinstance(node, kinds) and not node.name.startswith("_")]
    methods = [
        node
        for owner in public
        if isinstance(owner, ast.ClassDef)
        for node in owner.body
        if isinstance(node, kinds) and not node.name.startswith("_")
    ]
    assert ast.get_docstring(module), "the module has no docstring"
    assert [node.name for node in (*public, *methods) if not ast.get_docstring(node)] == []


@pytest.mark.parametrize("path", MODULES + TEST_MODULES, ids=lambda path: path.relative_to(REPOSITORY).as_posix())
def test_no_exception_is_caught_unnamed(path):
    handlers = [node for node in ast.walk(tree(path)) if isinstance(node, ast.ExceptHandler)]
    assert [handler.lineno for handler in handlers if handler.type is None] == []


def calls(path: Path) -> list[ast.Call]:
    return [node for node in ast.walk(tree(path)) if isinstance(node, ast.Call)]


@each_module
def test_only_the_command_line_prints(path):
    printing = [call.lineno for call in calls(path) if isinstance(call.func, ast.Name) and call.func.id == "print"]
    assert printing == [] or path == PACKAGE / "cli.py"


@pytest.mark.parametrize("path", TEST_MODULES, ids=lambda path: path.relative_to(TESTS).as_posix())
def test_every_expected_error_is_checked_by_its_text(path):
    unchecked = [
        call.lineno
        for call in calls(path)
        if ast.unparse(call.func) in ("pytest.raises", "pytest.warns")
        and not any(keyword.arg == "match" for keyword in call.keywords)
    ]
    assert unchecked == []


def test_every_module_has_its_tests():
    """``habitat/ocean/roles.py`` has ``tests/ocean/test_roles.py``; an ``__init__.py`` is tested by its neighbours."""
    expected = {
        path.relative_to(PACKAGE): TESTS / path.relative_to(PACKAGE).with_name(f"test_{path.name}")
        for path in MODULES
        if path.name != "__init__.py"
    }
    assert [str(module) for module, tests in expected.items() if not tests.is_file()] == []


# --- the repository ----------------------------------------------------------------------------------------------


def listed(*options: str) -> list[Path]:
    """Files that the version control lists, as paths relative to the repository."""
    try:
        command = ["git", "-C", str(REPOSITORY), "ls-files", "-z", *options]
        output = subprocess.run(command, capture_output=True, check=True, text=True).stdout
    except (OSError, subprocess.CalledProcessError) as error:
        pytest.skip(f"git lists no files here: {error}")
    return [Path(name) for name in output.split("\0") if name]


def test_the_top_level_holds_only_what_belongs_there():
    belongs = {"README.md", "DEVELOPERS.md", "pyproject.toml", "habitat", "tests", "profiles", "examples"}
    top = {path.parts[0] for path in listed()}
    assert {name for name in top if not name.startswith(".")} - belongs == set()


def test_files_speak_only_of_the_project():
    """No path of one machine, no word of another trade, in any text of the repository."""
    foreign = re.compile(r"(?<![\w.])/(?:wor[k]\b|tm[p]/)|\b(?:lectur[e]|transcrip[t])", re.IGNORECASE)
    looked_at = 0
    for path in listed("--cached", "--others", "--exclude-standard"):
        if path.parts[0] not in {"habitat", "tests", "profiles", "examples", "README.md", "DEVELOPERS.md"}:
            continue
        try:
            text = (REPOSITORY / path).read_text(encoding="utf-8")
        except (UnicodeDecodeError, FileNotFoundError):  # a picture or a grid; a file deleted but still listed
            continue
        looked_at += 1
        lines = [f"{path}:{number}" for number, line in enumerate(text.splitlines(), 1) if foreign.search(line)]
        assert lines == []
    assert looked_at > 10
