"""The house's borders: who may import whom, who owns which library, sizes."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "dq"

#: Ground that every stage stands on, lowest first.
GROUND = ("errors", "segments", "config", "tables", "counting", "gps", "chirp")

#: The stages in flow order.
STAGES = (
    "store",
    "conditioning",
    "tiles",
    "transients",
    "features",
    "families",
    "motion",
    "witnesses",
    "vetoes",
    "cost",
    "writers",
    "report",
    "night",
    "cli",
)

#: What a part may import of the house besides the ground.
MAY_IMPORT = {
    "errors": set(),
    "segments": set(),
    "config": set(),
    "tables": set(),
    "counting": set(),
    "gps": set(),
    "chirp": set(),
    "store": set(),
    "conditioning": set(),
    "tiles": set(),
    "transients": {"tiles"},
    "features": {"tiles"},
    "motion": set(),
    "families": {"writers"},
    "witnesses": set(),
    "vetoes": {"witnesses"},
    "cost": set(),
    "writers": set(),
    "report": {"families", "witnesses", "cost", "writers"},
    "night": set(STAGES) - {"cli"},
    "observatory": set(),
    "cli": {*STAGES, "observatory"},
}

#: Outside library -> the parts that may import it. The standard library and numpy are
#: free to all.
OWNERS = {
    "h5py": {"store", "writers", "night", "observatory"},
    "pandas": {
        "tables",
        "store",
        "transients",
        "features",
        "motion",
        "families",
        "witnesses",
        "vetoes",
        "cost",
        "writers",
        "report",
        "night",
        "cli",
    },
    "scipy": {
        "counting",
        "conditioning",
        "tiles",
        "transients",
        "features",
        "families",
        "witnesses",
        "vetoes",
        "cost",
        "night",
        "observatory",
    },
    "numba": {"conditioning", "tiles", "transients", "families", "witnesses"},
    "matplotlib": {"report"},
    "jinja2": {"report"},
    "erfa": {"gps"},
    "pydantic": {"config"},
    "click": {"cli"},
    "tqdm": {"cli"},
    "sklearn": {"families"},
}

#: Parts that are mathematics: arrays and tables in, arrays and tables out.
MATHEMATICS = (
    "chirp",
    "counting",
    "segments",
    "conditioning",
    "tiles",
    "transients",
    "features",
    "motion",
    "families",
    "witnesses",
    "vetoes",
    "cost",
)

#: The only files of these parts that reach a disk.
DISK_FILES = {"families/model_store.py"}

#: Calls and modules that reach a disk, a process or a network.
OUTSIDE_CALLS = {"open", "read_csv", "read_text", "write_text", "loadtxt", "savetxt"}
OUTSIDE_MODULES = {"os", "pathlib", "h5py", "socket", "subprocess", "multiprocessing"}

FILES = sorted(PACKAGE.rglob("*.py"))
FILE_LINES = 450
FUNCTION_LINES = 75


def part_of(path: Path) -> str:
    relative = path.relative_to(PACKAGE)
    return relative.parts[0].removesuffix(".py")


def imports_of(tree: ast.AST) -> list[tuple[int, str]]:
    found = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found += [(node.lineno, alias.name) for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module:
            if node.module == "dq":
                found += [(node.lineno, f"dq.{alias.name}") for alias in node.names]
            else:
                found.append((node.lineno, node.module))
    return found


def breaches(path: Path, tree: ast.AST) -> list[str]:
    """Give the imports of one file that cross a border."""
    part = part_of(path)
    if part in ("__init__", "__main__"):
        return []
    found = []
    for line, name in imports_of(tree):
        top, _, rest = name.partition(".")
        where = f"{path.relative_to(PACKAGE.parent)}:{line}"
        if top == "dq":
            target = rest.partition(".")[0]
            if target in ("", "__version__", part):
                continue
            below = GROUND[: GROUND.index(part)] if part in GROUND else GROUND
            if target not in below and target not in MAY_IMPORT[part]:
                found.append(f"{where} {part} may not import {name}")
        elif top in OWNERS and part not in OWNERS[top]:
            found.append(f"{where} {part} may not import {top}")
    return found


def parse(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"))


def test_every_part_has_a_place():
    parts = {part_of(p) for p in FILES} - {"__init__", "__main__"}
    assert parts == set(MAY_IMPORT)


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_stay_within_the_borders(path):
    assert breaches(path, parse(path)) == []


def test_no_unowned_library_is_imported():
    import sys

    known = {*OWNERS, *sys.stdlib_module_names, "numpy", "dq"}
    unknown = [
        f"{path.relative_to(PACKAGE)}:{line} {name}"
        for path in FILES
        for line, name in imports_of(parse(path))
        if name.partition(".")[0] not in known
    ]
    assert unknown == []


@pytest.mark.parametrize(
    ("source", "part"),
    [
        ("from dq.cost import cost_of", "vetoes/x.py"),
        ("import h5py", "witnesses/x.py"),
        ("import pandas as pd", "segments/x.py"),
        ("from dq.night import run_night", "report/x.py"),
        ("def f():\n    import matplotlib.pyplot", "cli/x.py"),
    ],
)
def test_a_breach_is_found(source, part):
    assert len(breaches(PACKAGE / part, ast.parse(source))) == 1


def disk_uses(tree: ast.AST) -> list[str]:
    found = [
        f"{line} {name}"
        for line, name in imports_of(tree)
        if name.partition(".")[0] in OUTSIDE_MODULES
    ]
    for node in ast.walk(tree):
        if isinstance(node, ast.Call):
            called = node.func
            name = getattr(called, "id", getattr(called, "attr", ""))
            if name in OUTSIDE_CALLS:
                found.append(f"{node.lineno} {name}()")
    return found


@pytest.mark.parametrize("part", MATHEMATICS)
def test_mathematics_opens_no_file(part):
    inside = (p for p in FILES if part_of(p) == part)
    for path in (p for p in inside if str(p.relative_to(PACKAGE)) not in DISK_FILES):
        assert disk_uses(parse(path)) == [], path


def test_a_disk_use_is_found():
    assert disk_uses(ast.parse("open('x')")) == ["1 open()"]
    assert disk_uses(ast.parse("from pathlib import Path")) == ["1 pathlib"]


def test_only_the_night_starts_processes():
    starters = {"multiprocessing", "concurrent", "subprocess"}
    for path in FILES:
        names = {n.partition(".")[0] for _, n in imports_of(parse(path))}
        assert not names & starters or part_of(path) == "night", path


def test_files_and_functions_stay_small():
    long = []
    for path in FILES:
        text = path.read_text(encoding="utf-8")
        if text.count("\n") > FILE_LINES:
            long.append(f"{path.relative_to(PACKAGE)}: {text.count(chr(10))} lines")
        for node in ast.walk(ast.parse(text)):
            if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
                lines = node.end_lineno - node.lineno + 1
                if lines > FUNCTION_LINES:
                    name = f"{path.relative_to(PACKAGE)}: {node.name}"
                    long.append(f"{name}: {lines} lines")
    assert long == []


def test_the_map_names_every_stage_in_flow_order():
    doc = ast.get_docstring(parse(PACKAGE / "__init__.py"))
    places = [doc.find(f"\n{stage} ") for stage in ("segments", *STAGES)]
    assert -1 not in places
    assert places == sorted(places)


def test_no_catch_all_modules():
    names = {p.stem for p in FILES}
    assert not names & {"utils", "util", "helpers", "misc", "common"}
