"""Results folders to add, and a PostgreSQL server where its programs are installed."""

import functools
import getpass
import json
import os
import shutil
import socket
import subprocess
import sys
import tempfile
from pathlib import Path

import pytest

from identkit.grids import load, save

HOST = """
import json, os, signal, sys
from pathlib import Path
from identkit.errors import InputError
from identkit.history import adding
from identkit.history.entries import read_folder
from identkit.history.store import Store

def die_after_writing():
    kept = adding.insert_rows
    def insert_rows(connection, table, rows):
        kept(connection, table, rows)
        if table.name == "identkit_estimate":
            os.kill(os.getpid(), signal.SIGKILL)
    adding.insert_rows = insert_rows

def write(place, folder, killed, ready, start):
    if killed:
        die_after_writing()
    read = read_folder(Path(folder))
    os.write(ready, b"r")
    os.read(start, 1)
    try:
        with Store(place) as store:
            adding.add_folders(store, [read], "test")
    except InputError:
        return 2
    return 0

for line in sys.stdin:
    job = json.loads(line)
    ready, start = os.pipe(), os.pipe()
    children = []
    for folder in job["folders"]:
        child = os.fork()
        if child == 0:
            os.close(start[1])
            code = 3
            try:
                code = write(job["place"], folder, job["killed"], ready[1], start[0])
            finally:
                os._exit(code)
        children.append(child)
    os.close(ready[1])
    os.close(start[0])
    for _ in children:
        os.read(ready[0], 1)
    os.close(start[1])
    codes = [os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]) for child in children]
    os.close(ready[0])
    print(json.dumps(codes), flush=True)
"""


@pytest.fixture(scope="session")
def results_of(small_results, tmp_path_factory):
    """Return the maker of copies of a results folder, measured on other days."""

    @functools.cache
    def make(measured_at="", unit_prefix="", rename=()):
        folder = tmp_path_factory.mktemp("results")
        for name in ("population.nc", "audit.nc", "run.json", "set.h5"):
            shutil.copy(small_results / name, folder / name)
        modes = load(small_results / "modes.nc")
        if measured_at:
            labels = [measured_at] * modes.sizes["response"]
            modes = modes.assign_coords(measured_at=("response", labels))
        if unit_prefix:
            names = [unit_prefix + name for name in modes["response"].values]
            units = [unit_prefix + name for name in modes["unit"].values]
            modes = modes.assign_coords(response=names, unit=("response", units))
        if rename:
            new = dict(rename)
            changed = [new.get(str(name), str(name)) for name in modes["mode"].values]
            modes = modes.assign_coords(mode=changed)
            population = load(folder / "population.nc")
            changed = [new.get(str(name), str(name)) for name in population["mode"].values]
            save(population.assign_coords(mode=changed), folder / "population.nc")
        save(modes, folder / "modes.nc")
        return folder

    return make


@pytest.fixture(scope="session")
def write_at_once():
    """Return a function that lets processes add folders to one history at the same moment."""
    host = subprocess.Popen(
        [sys.executable, "-c", HOST], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )

    def write(place, folders, *, killed=False):
        job = {"place": str(place), "folders": [str(f) for f in folders], "killed": killed}
        host.stdin.write(json.dumps(job) + "\n")
        host.stdin.flush()
        return json.loads(host.stdout.readline())

    yield write
    host.communicate()


def _programs():
    found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"))
    return found[-1].parent if found else None


@pytest.fixture(scope="session")
def postgres():
    """Start a PostgreSQL server of our own; return its URL without a database."""
    programs = _programs()
    if programs is None:
        pytest.skip("the PostgreSQL server programs are not installed")
    pytest.importorskip("psycopg")
    root = os.geteuid() == 0
    if root and shutil.which("runuser") is None:
        pytest.skip("the server does not run as root, and runuser is not installed")
    # not below pytest's own folder: that is closed to the user the server runs as
    folder = Path(tempfile.mkdtemp(prefix="identkit-postgres-"))
    user = "postgres" if root else getpass.getuser()
    if root:
        shutil.chown(folder, user)
    before = ["runuser", "-u", user, "--"] if root else []
    data = folder / "data"

    def call(*words):
        done = subprocess.run(
            [*before, *map(str, words)], capture_output=True, text=True, check=False, cwd=folder
        )
        assert done.returncode == 0, done.stdout + done.stderr

    call(programs / "initdb", "-D", data, "-U", "postgres", "-A", "trust", "--no-sync")
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    options = f"-p {port} -h 127.0.0.1 -k {folder} -F"
    call(programs / "pg_ctl", "-D", data, "-l", folder / "log", "-w", "-o", options, "start")
    try:
        yield f"postgresql+psycopg://postgres@127.0.0.1:{port}"
    finally:
        call(programs / "pg_ctl", "-D", data, "-m", "immediate", "-w", "stop")
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture
def postgres_history(postgres, request):
    """Make an empty database and return its URL."""
    import psycopg

    name = f"history_{abs(hash(request.node.name)) % 10**8}"
    address = postgres.replace("+psycopg", "") + "/postgres"
    with psycopg.connect(address, autocommit=True) as connection:
        connection.execute(f"CREATE DATABASE {name}")
    return f"{postgres}/{name}"


@pytest.fixture(params=["sqlite", "postgresql"])
def place(request, tmp_path):
    """An empty history of either kind."""
    if request.param == "sqlite":
        return str(tmp_path / "history.db")
    return request.getfixturevalue("postgres_history")
