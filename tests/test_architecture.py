"""Imports point one way, and the house rules that a syntax tree can show. See DEVELOPERS.md."""

import ast
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "ensembles"
FILES = sorted(PACKAGE.rglob("*.py"))

# Room -> rooms it may import beside itself. A new room is refused until it has its line here.
FOUNDATION = {"checks", "logspace", "writing"}
MAY_IMPORT = {
    "checks": set(),
    "logspace": set(),
    "writing": {"checks"},
    "snapshots": FOUNDATION,
    "priors": FOUNDATION,
    "kernels": FOUNDATION,
    "schrodinger": FOUNDATION | {"kernels"},
    "endpoints": FOUNDATION | {"kernels"},
    "grid": FOUNDATION | {"kernels"},
    "bridges": FOUNDATION | {"snapshots", "priors", "kernels", "schrodinger", "endpoints", "grid"},
    "links": FOUNDATION | {"bridges", "snapshots", "priors", "kernels", "schrodinger"},
    "physics": FOUNDATION,
    "quantities": FOUNDATION,
    "lineage": FOUNDATION | {"bridges", "snapshots", "priors", "assessment"},
    "assessment": FOUNDATION | {"bridges", "snapshots", "priors", "kernels", "schrodinger"},
    "sweep": FOUNDATION,
    "report": FOUNDATION
    | {"assessment", "lineage", "links", "bridges", "snapshots", "priors", "kernels", "schrodinger"},
    "estimator": FOUNDATION | {"bridges", "snapshots", "priors"},
    "study_problems": {"checks"},
    "study_links": FOUNDATION | {"priors", "quantities", "study_problems"},
    "study_tables": {"study_links"},
    "link_results": FOUNDATION | {"study", "links", "report", "priors", "snapshots"},
    "study": FOUNDATION | {"snapshots", "priors", "bridges", "study_problems", "study_links", "study_tables"},
    "overview": FOUNDATION | {"snapshots", "priors", "report"},
    "results": FOUNDATION | {"study", "overview", "report", "lineage_results", "bridges", "schrodinger"},
    "lineage_results": FOUNDATION | {"lineage", "report", "bridges", "study", "priors", "snapshots"},
    "assess": FOUNDATION | {"study", "report", "assessment", "bridges", "lineage_results", "snapshots"},
    "cli": FOUNDATION
    | {"study", "overview", "results", "link_results", "assess", "report", "bridges", "snapshots", "priors"},
    "__main__": {"cli"},
    # The names of the public contract are looked up there, on first use; they are held by tests/test_setup.py.
    "__init__": None,
}
HEAVY = {
    "matplotlib": {"report"},
    "numba": {"kernels"},
    "pandas": set(),
    "anndata": set(),
    "dask": set(),
    "pint": set(),
}
"""Slow imports, and the rooms that may do them at the top of a file; everywhere else inside a function."""


def tree_of(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"), filename=str(path))


def room_of(path: Path) -> str:
    """The first name below the package: a folder, or a file without its suffix."""
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def imported_rooms(path: Path, tree: ast.Module) -> set[str]:
    """Rooms of the package that a file imports from, anywhere in it."""
    package = ("ensembles", *path.relative_to(PACKAGE).parts[:-1])
    targets = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            targets += [alias.name.split(".") for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = list(package[: len(package) - node.level + 1]) if node.level else []
            base += node.module.split(".") if node.module else []
            targets += [base if len(base) > 1 else [*base, alias.name] for alias in node.names]
    return {target[1] for target in targets if target[0] == "ensembles" and len(target) > 1}


def wrong_imports(path: Path, tree: ast.Module) -> set[str]:
    room = room_of(path)
    allowed = MAY_IMPORT[room]
    if allowed is None:
        return set()
    # Names such as __version__ and InputError that the package itself offers are no room.
    rooms = {name for name in imported_rooms(path, tree) if name in MAY_IMPORT or (PACKAGE / name).is_dir()}
    return rooms - allowed - {room}


def named(paths: list[Path]) -> dict:
    return {"argvalues": paths, "ids": [str(path.relative_to(PACKAGE)) for path in paths]}


@pytest.mark.parametrize("path", **named(FILES))
def test_imports_point_one_way(path):
    assert room_of(path) in MAY_IMPORT, f"{room_of(path)} is a new room: give it a line in MAY_IMPORT"
    assert wrong_imports(path, tree_of(path)) == set()


@pytest.mark.parametrize(
    ("place", "source", "rooms"),
    [
        ("kernels/dense.py", "from ..bridges.fit import fit_bridge", {"bridges"}),
        ("kernels/dense.py", "from ..priors import brownian", {"priors"}),
        ("snapshots/series.py", "def f():\n    import ensembles.report.figures", {"report"}),
        ("checks.py", "from . import logspace", {"logspace"}),
        ("bridges/fit.py", "from ..schrodinger.iteration import solve\nfrom .. import checks\nimport numpy", set()),
    ],
)
def test_the_import_check_sees_what_it_should(place, source, rooms):
    assert wrong_imports(PACKAGE / place, ast.parse(source)) == rooms


def test_data_dynamics_and_arithmetic_meet_in_few_places():
    meeting = {
        str(path.relative_to(PACKAGE))
        for path in FILES
        if room_of(path) in ("bridges", "lineage", "assessment", "report")
        and {"snapshots", "priors"} <= (rooms := imported_rooms(path, tree_of(path)))
        and rooms & {"kernels", "schrodinger"}
    }
    # fit.py, and kinetic.py for inertia, make a bridge of the three; bridge.py holds them; storage.py brings them back.
    assert meeting <= {"bridges/fit.py", "bridges/kinetic.py", "bridges/bridge.py", "bridges/storage.py"}


def top_level_modules(tree: ast.Module) -> set[str]:
    """Modules imported when the file is imported: not those inside functions or under TYPE_CHECKING."""
    found = set()
    for node in tree.body:
        if isinstance(node, ast.Import):
            found |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            found.add(node.module.split(".")[0])
    return found


@pytest.mark.parametrize("path", **named(FILES))
def test_slow_libraries_are_imported_where_they_are_used(path):
    heavy = {name for name in top_level_modules(tree_of(path)) if room_of(path) not in HEAVY.get(name, {room_of(path)})}
    assert heavy == set()


@pytest.mark.parametrize("path", **named(FILES))
def test_house_rules(path):
    text = path.read_text(encoding="utf-8")
    assert len(text.splitlines()) <= 350, "split the file: two ideas live in it"
    assert not {"utils", "util", "helpers", "helper", "misc"} & set(path.relative_to(PACKAGE).with_suffix("").parts)
    tree = tree_of(path)
    modules = {alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    assert not modules & {"pickle", "cloudpickle", "dill", "shelve", "marshal"}
    calls = [node for node in ast.walk(tree) if isinstance(node, ast.Call)]
    prints = [c.lineno for c in calls if isinstance(c.func, ast.Name) and c.func.id == "print"]
    assert path.name == "cli.py" or not prints
    loads = [c for c in calls if ast.unparse(c.func) in ("np.load", "numpy.load")]
    for call in loads:
        assert "allow_pickle=False" in ast.unparse(call), f"line {call.lineno}: np.load needs allow_pickle=False"


@pytest.mark.parametrize("path", **named(FILES))
def test_public_functions_have_few_arguments(path):
    for node in ast.walk(tree_of(path)):
        if not isinstance(node, ast.FunctionDef) or node.name.startswith("_") or path.name == "cli.py":
            continue
        if any("compiled" in ast.unparse(decorator) for decorator in node.decorator_list):
            continue  # compiled loops take plain arrays, one by one
        arguments = node.args
        assert arguments.kwarg is None, f"{node.name} takes **{arguments.kwarg}: name its arguments"
        names = [a.arg for a in (*arguments.posonlyargs, *arguments.args, *arguments.kwonlyargs)]
        count = len([name for name in names if name not in ("self", "cls")])
        assert count <= 7, f"{node.name} takes {count} arguments: gather them into a dataclass"
