import pytest

from identkit.atomic import replacing, write_text


def test_replaces_the_file(tmp_path):
    target = tmp_path / "a.txt"
    write_text(target, "old")
    write_text(target, "nëw\n")
    assert target.read_bytes() == "nëw\n".encode()
    assert list(tmp_path.iterdir()) == [target]


def half_written(target, error):
    """Fail between the first and the last byte."""
    with replacing(target) as temporary:
        temporary.write_text("half")
        raise error


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt])
def test_an_interruption_leaves_the_old_file_and_no_other(tmp_path, error):
    target = tmp_path / "a.txt"
    write_text(target, "old")
    with pytest.raises(error):
        half_written(target, error)
    assert target.read_text() == "old"
    assert list(tmp_path.iterdir()) == [target]


def test_keeps_the_suffix_so_that_writers_know_the_kind(tmp_path):
    with replacing(tmp_path / "table.csv") as temporary:
        assert temporary.suffix == ".csv"
        assert temporary.parent == tmp_path
        temporary.touch()
