"""Imports run one way, without cycles; files and functions stay small."""

import ast
import statistics
from pathlib import Path

import identkit

PACKAGE = Path(identkit.__file__).parent
LEVELS = {
    "errors": 0,
    "outcomes": 0,
    "units": 0,
    "methods": 1,
    "variables": 1,
    "grids": 1,
    "batch": 2,
    "plant_set": 2,
    "synthetic": 2,
    "settings": 2,
    "study": 3,
    "readers": 3,
    "forms": 3,
    "stages": 4,
    "figures": 5,
    "history": 5,
    "report": 6,
    "steps": 7,
    "pipeline": 8,
    "cli": 9,
    "atomic": 0,
    "settings_messages": 1,
    "settings_types": 0,
    "settings_records": 1,
    "synthetic_records": 2,
    "synthetic_record_files": 3,
    "excitation": 7,
    "progress": 1,
    "not_yet": 3,
    "demo": 4,
    "synthetic_files": 3,
    "plants": 2,
    "show": 7,
    "controller": 3,
    "set_price": 3,
    "plant_loops": 4,
    "set_resonances": 3,
    "command_answers": 6,
    "controller_check": 7,
    "controller_answer": 8,
    "comparison_answer": 8,
    "set_comparison": 7,
    "set_audit": 7,
    "drift": 7,
    "__init__": 10,
}
HEAVY = {"cvxpy", "matplotlib", "numba", "statsmodels", "sippy_unipi", "control", "slycot"}


def modules():
    """Yield (dotted name below the package, path)."""
    for path in sorted(PACKAGE.rglob("*.py")):
        yield ".".join(path.relative_to(PACKAGE).with_suffix("").parts), path


def imported(path):
    """Return the dotted names below identkit that a file imports, in functions too."""
    names = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names |= {f"{node.module}.{alias.name}" for alias in node.names} | {node.module}
    return {n.removeprefix("identkit.") for n in names if n.split(".")[0] == "identkit"}


def level(name):
    return LEVELS[name.split(".")[0]]


def test_every_place_has_a_level():
    assert {name.split(".")[0] for name, _ in modules()} <= set(LEVELS)


def test_imports_run_from_higher_to_lower_levels():
    wrong = []
    for name, path in modules():
        for target in imported(path) - {"identkit"}:
            same_package = target.split(".")[0] == name.split(".")[0]
            if not same_package and level(target) >= level(name):
                wrong.append(f"{name} imports {target}")
    assert not wrong


def test_no_module_imports_the_package_root():
    wrong = [
        name
        for name, path in modules()
        if name != "__init__" and "identkit" in imported(path) and not _only_submodules(path)
    ]
    assert not wrong


def _only_submodules(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import) and any(a.name == "identkit" for a in node.names):
            return False
        if isinstance(node, ast.ImportFrom) and node.module == "identkit":
            return False
    return True


def test_no_cycles():
    known = dict(modules())
    graph = {
        name: {t for t in imported(path) if t in known and t != name}
        for name, path in known.items()
    }
    done: set[str] = set()

    def visit(name, trail):
        assert name not in trail, " -> ".join([*trail, name])
        if name in done:
            return
        for target in graph[name]:
            visit(target, [*trail, name])
        done.add(name)

    for name in graph:
        visit(name, [])


def test_plant_set_shares_nothing_with_the_builder():
    for name, path in modules():
        if name.startswith("plant_set"):
            assert not {t for t in imported(path) if t.split(".")[0] in ("methods", "forms")}, name


def test_sub_package_init_files_are_docstrings():
    for name, path in modules():
        if name.endswith(".__init__"):
            assert len(ast.parse(path.read_text(encoding="utf-8")).body) == 1, name


def test_heavy_libraries_stay_out_of_init_files():
    for name, path in modules():
        if name.split(".")[-1] != "__init__":
            continue
        tree = ast.parse(path.read_text(encoding="utf-8"))
        roots = {
            (a.name if isinstance(n, ast.Import) else n.module or "").split(".")[0]
            for n in ast.walk(tree)
            if isinstance(n, ast.Import | ast.ImportFrom)
            for a in n.names
        }
        assert not roots & HEAVY, name


def _code_lines(node, source):
    """Lines of a function without its docstring, blank lines and comments."""
    body = node.body
    if body and isinstance(body[0], ast.Expr) and isinstance(body[0].value, ast.Constant):
        body = body[1:]
    if not body:
        return 0
    lines = source[body[0].lineno - 1 : node.end_lineno]
    return sum(1 for line in lines if line.strip() and not line.strip().startswith("#"))


def test_files_and_functions_stay_small():
    sizes, lengths = {}, {}
    for name, path in modules():
        source = path.read_text(encoding="utf-8").splitlines()
        sizes[name] = len(source)
        for node in ast.walk(ast.parse("\n".join(source))):
            if isinstance(node, ast.FunctionDef):
                lengths[f"{name}.{node.name}"] = _code_lines(node, source)
    assert not {n: s for n, s in sizes.items() if s > (600 if n == "variables" else 400)}
    assert not {n: s for n, s in lengths.items() if s > 80}
    assert statistics.median(lengths.values()) < 12


def test_public_functions_have_docstrings():
    missing = []
    for name, path in modules():
        for node in ast.parse(path.read_text(encoding="utf-8")).body:
            if (
                isinstance(node, ast.FunctionDef | ast.ClassDef)
                and not node.name.startswith("_")
                and not ast.get_docstring(node)
            ):
                missing.append(f"{name}.{node.name}")
    assert not missing
