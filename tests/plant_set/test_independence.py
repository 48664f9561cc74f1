"""The audit may share nothing with the builder: checked on the syntax tree."""

import ast
from pathlib import Path

import identkit.plant_set

FORBIDDEN = ("identkit.methods", "identkit.forms", "identkit.stages", "identkit.batch")


def imported(path: Path) -> set[str]:
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0
            names |= {f"{node.module}.{alias.name}" for alias in node.names} | {str(node.module)}
        if isinstance(node, ast.Call) and getattr(node.func, "id", "") == "import_module":
            names |= {item.value for item in node.args if isinstance(item, ast.Constant)}
    return names


def test_nothing_of_the_builder_is_imported():
    files = sorted(Path(identkit.plant_set.__file__).parent.glob("*.py"))
    assert len(files) > 10
    for path in files:
        found = [name for name in imported(path) if name.startswith(FORBIDDEN)]
        assert not found, f"{path.name} imports {found}"


def test_the_check_sees_an_import(tmp_path):
    path = tmp_path / "x.py"
    path.write_text("def f():\n    from identkit.methods import state_space\n")
    assert "identkit.methods" in imported(path)


def test_scipy_stays_out_of_loading_sampling_and_responses():
    folder = Path(identkit.plant_set.__file__).parent
    for name in ("fields", "document", "files", "model", "response", "sample", "store", "node"):
        found = imported(folder / f"{name}.py")
        assert not any(item.startswith(("scipy", "jsonschema", "h5py")) for item in found), name
