"""The public names: few, pinned, all there, and loaded only when asked for."""

import subprocess
import sys

import identkit

NAMES = {
    "PlantSet",
    "audit",
    "bound_spread",
    "check_controller",
    "choose_nominal",
    "compare_sets",
    "describe_population",
    "estimate_responses",
    "fit_modes",
    "load_set",
    "pair_modes",
    "read_controller",
    "read_responses",
    "run_study",
    "screen",
    "state_coverage",
    "track_drift",
}


def test_the_names_are_these():
    assert set(identkit.__all__) == NAMES
    assert len(NAMES) <= 25


def test_every_name_is_there_with_its_documentation():
    for name in NAMES:
        assert getattr(identkit, name).__doc__


def test_import_brings_no_heavy_library():
    code = "import sys, identkit; print(*{m.split('.')[0] for m in sys.modules})"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    heavy = {"numpy", "scipy", "xarray", "pandas", "matplotlib", "cvxpy", "numba"}
    assert not heavy & set(done.stdout.split())


def test_help_brings_no_heavy_library():
    code = (
        "import sys\nfrom identkit.cli import commands\n"
        "commands.main(['--help'], standalone_mode=False)\n"
        "print('LOADED', *{m.split('.')[0] for m in sys.modules})"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    loaded = done.stdout.split("LOADED")[1].split()
    assert not {"numpy", "scipy", "xarray", "pandas", "matplotlib", "pydantic"} & set(loaded)
