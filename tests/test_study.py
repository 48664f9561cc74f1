import json
import os
import shutil
import subprocess
import sys
import textwrap
from pathlib import Path

import pytest

from identkit.errors import InputError, MissingStageError
from identkit.settings import load_settings
from identkit.study import StudyFolder, code_version


@pytest.fixture
def study_file(tmp_path):
    def write(text=""):
        path = tmp_path / "study.toml"
        path.write_text(text)
        return path

    return write


def run(path, done, inputs=()):
    """Run a chain of three stages; note in `done` which did any work."""
    with StudyFolder(load_settings(path)) as study:
        chain = (
            ("read", ("responses",), (), inputs),
            ("fit", ("model",), ("read",), ()),
            ("bound", ("bound.order",), ("fit",), ()),
        )
        for name, settings, after, files in chain:
            stage = study.stage(
                name, settings=settings, after=after, inputs=files, files=(f"{name}.txt",)
            )
            if not stage.current:
                with stage.work():
                    stage.path(f"{name}.txt").write_text(stage.key)
                done.append(name)
        return study


def test_a_second_run_does_nothing(study_file):
    done = []
    run(study_file(), done)
    run(study_file(), done)
    assert done == ["read", "fit", "bound"]


@pytest.mark.parametrize(
    ("text", "again"),
    [
        ("[bound]\norder = 4", ["bound"]),
        ("[bound]\ncontent = 0.5", []),
        ("[model]\nmodes = 3", ["fit", "bound"]),
        ("[responses]\naverages = 9", ["read", "fit", "bound"]),
        ("[study]\nname = 'other'", []),
        ("# only a remark", []),
    ],
)
def test_a_changed_setting_redoes_only_what_depends_on_it(study_file, text, again):
    done = []
    run(study_file(), [])
    run(study_file(text), done)
    assert done == again


def test_changed_measurements_are_read_again_and_untouched_ones_are_not(study_file, tmp_path):
    data = tmp_path / "a.csv"
    data.write_text("1")
    done = []
    run(study_file(), done, inputs=[data])
    done.clear()
    os.utime(data, (1, 1))
    run(study_file(), done, inputs=[data])
    assert done == []
    data.write_text("2")
    run(study_file(), done, inputs=[data])
    assert done == ["read", "fit", "bound"]
    added = tmp_path / "b.csv"
    added.write_text("2")
    done.clear()
    run(study_file(), done, inputs=[data, added])
    assert done == ["read", "fit", "bound"]


def test_a_file_that_cannot_be_read_is_left_to_the_reader(study_file, tmp_path):
    done = []
    study = run(study_file(), done, inputs=[tmp_path / "gone.csv"])
    assert done == ["read", "fit", "bound"]
    assert study.record["inputs"]["gone.csv"]["size"] == -1


@pytest.mark.parametrize("harm", ["delete", "shorten"])
def test_a_lost_or_shortened_file_is_made_again(study_file, harm):
    done = []
    study = run(study_file(), [])
    target = study.path("fit.txt")
    target.unlink() if harm == "delete" else target.write_text("")
    run(study_file(), done)
    assert done == ["fit"]


def test_a_file_edited_at_equal_size_and_time_is_made_again(study_file):
    path = run(study_file(), []).path("fit.txt")
    status, contents = path.stat(), bytearray(path.read_bytes())
    contents[-1] ^= 1
    path.write_bytes(contents)
    os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns))
    done = []
    run(study_file(), done)
    assert done == ["fit"]


def test_a_copied_folder_is_still_current(study_file, tmp_path_factory):
    study = study_file()
    run(study, [])
    copy = tmp_path_factory.mktemp("copy") / "study"
    shutil.copytree(study.parent, copy, copy_function=shutil.copyfile)
    done = []
    run(copy / "study.toml", done)
    assert done == []


def test_forget_strikes_a_stage_and_what_follows(study_file):
    done = []
    study = run(study_file(), [])
    study.forget("fit")
    run(study_file(), done)
    assert done == ["fit", "bound"]


def test_a_stage_needs_the_ones_before_it(study_file):
    study = StudyFolder(load_settings(study_file()))
    with pytest.raises(MissingStageError, match="run the read stage first"):
        study.stage("fit", after=("read",), files=("fit.txt",))


def test_an_error_inside_a_stage_leaves_it_undone(study_file):
    study = run(study_file(), [])
    stage = study.stage("fit", settings=("model",), after=("read",), files=("fit.txt",))
    with pytest.raises(KeyboardInterrupt), stage.work():
        raise KeyboardInterrupt
    assert not stage.current
    done = []
    run(study_file(), done)
    assert done == ["fit"]


def test_a_stage_that_writes_too_little_is_not_done(study_file):
    with StudyFolder(load_settings(study_file())) as study:
        stage = study.stage("read", files=("read.txt",))
        with pytest.raises(FileNotFoundError), stage.work():
            pass
        assert not stage.current


def test_parts_survive_an_interruption_and_go_when_the_stage_is_done(study_file):
    with StudyFolder(load_settings(study_file())) as study:
        stage = study.stage("fit", files=("fit.txt",))
        (stage.parts_folder / "1.nc").write_text("part")
        with pytest.raises(KeyboardInterrupt), stage.work():
            raise KeyboardInterrupt
        again = study.stage("fit", files=("fit.txt",))
        assert (again.parts_folder / "1.nc").read_text() == "part"
        with again.work():
            again.path("fit.txt").write_text("whole")
        assert not (study.folder / "parts").exists()


def test_the_record_says_versions_digests_and_times(study_file):
    study = run(study_file("[study]\nname = 'b'\nresults = 'out/b'"), [])
    record = json.loads((study.folder / "run.json").read_text())
    assert study.folder == study_file("").parent / "out" / "b"
    assert record["study"] == "b"
    assert record["version"] == code_version()
    assert record["libraries"]["numpy"]
    assert set(record["settings"]) >= {"study", "responses", "bound", "export"}
    assert record["stages"]["fit"]["seconds"] >= 0
    assert record["stages"]["fit"]["finished"].endswith("+00:00")


def test_the_log_says_what_ran(study_file):
    study = run(study_file(), [])
    log = (study.folder / "identkit.log").read_text()
    assert "fit: start" in log
    assert "fit: done in" in log


@pytest.mark.parametrize("text", ["", "{", "[]", '{"format": "other/9", "stages": {}}'])
def test_a_damaged_record_means_doing_it_again(study_file, text):
    study = run(study_file(), [])
    study.path("run.json").write_text(text)
    done = []
    run(study_file(), done)
    assert done == ["read", "fit", "bound"]


@pytest.mark.parametrize("results", ["../out", "/out", ".", "a/../..", "a/../../b"])
def test_results_outside_the_studys_folder_are_refused(study_file, results):
    path = study_file(f"[study]\nresults = '{results}'")
    with pytest.raises(InputError, match=r"\[study\] results"):
        StudyFolder(load_settings(path))


def test_results_behind_a_link_to_elsewhere_are_refused(study_file, tmp_path_factory):
    path = study_file("[study]\nresults = 'link'")
    (path.parent / "link").symlink_to(tmp_path_factory.mktemp("elsewhere"))
    with pytest.raises(InputError, match="inside the folder of the study file"):
        StudyFolder(load_settings(path))


def test_a_file_in_the_place_of_the_folder_is_said(study_file):
    path = study_file()
    (path.parent / "results").write_text("")
    with pytest.raises(InputError, match="found a file where the folder should be"):
        StudyFolder(load_settings(path))


@pytest.mark.parametrize(
    ("error", "found"),
    [
        (PermissionError(13, "Permission denied"), "no permission to write"),
        (OSError(30, "Read-only file system"), "Read-only file system"),
    ],
)
def test_a_folder_that_cannot_be_written_is_said(study_file, monkeypatch, error, found):
    def refuse(*args, **kwargs):
        raise error

    monkeypatch.setattr(Path, "touch", refuse)
    with pytest.raises(InputError, match=found):
        StudyFolder(load_settings(study_file()))


def test_a_process_stopped_in_the_middle_leaves_a_folder_that_resumes(study_file):
    """The process ends without any clean-up, as in a power cut."""
    path = study_file()
    script = """
        import os, sys
        from identkit.settings import load_settings
        from identkit.study import StudyFolder
        study = StudyFolder(load_settings(sys.argv[1])).__enter__()
        read = study.stage("read", settings=("responses",), files=("read.txt",))
        with read.work():
            read.path("read.txt").write_text(read.key)
        fit = study.stage("fit", settings=("model",), after=("read",), files=("fit.txt",))
        with fit.work():
            fit.path("fit.txt").write_text("half")
            os._exit(9)
    """
    ended = subprocess.run([sys.executable, "-c", textwrap.dedent(script), str(path)], check=False)
    assert ended.returncode == 9
    done = []
    run(path, done)
    assert done == ["fit", "bound"]
