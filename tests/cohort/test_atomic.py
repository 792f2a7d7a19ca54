"""A file is the old one or the new one, whatever happens in between."""

import os

import pytest

from oscillib.cohort._atomic import write_atomically


@pytest.fixture
def path(tmp_path):
    path = tmp_path / "run.npz"
    path.write_bytes(b"old")
    return path


def names(path):
    return sorted(p.name for p in path.parent.iterdir())


def test_replaces(path):
    write_atomically(path, lambda file: file.write(b"new"))
    assert path.read_bytes() == b"new"
    assert names(path) == ["run.npz"]


@pytest.mark.parametrize("error", [OSError, KeyboardInterrupt])
@pytest.mark.parametrize("moment", ["fsync", "replace"])
def test_a_failure_before_the_move_leaves_the_old_file_alone(path, monkeypatch, error, moment):
    def fail(*_):
        raise error("now")

    monkeypatch.setattr(os, moment, fail)
    with pytest.raises(error, match="now"):
        write_atomically(path, lambda file: file.write(b"new"))
    assert path.read_bytes() == b"old"
    assert names(path) == ["run.npz"]


def test_a_failure_while_writing_leaves_the_old_file_alone(path):
    def write(file):
        file.write(b"half")
        raise RuntimeError("disk full")

    with pytest.raises(RuntimeError, match="disk full"):
        write_atomically(path, write)
    assert path.read_bytes() == b"old"
    assert names(path) == ["run.npz"]


def test_the_content_is_on_the_disk_before_it_gets_the_name(path, monkeypatch):
    done = []
    sync, replace = os.fsync, os.replace
    monkeypatch.setattr(os, "fsync", lambda fd: (done.append("sync"), sync(fd)))
    monkeypatch.setattr(os, "replace", lambda a, b: (done.append("replace"), replace(a, b)))
    write_atomically(path, lambda file: file.write(b"new"))
    assert done == ["sync", "replace", "sync"]


def test_leftovers_of_a_killed_process_are_removed_and_nothing_else(path):
    (path.parent / ".run.npz.0123abcd.tmp").write_bytes(b"half")
    for other in (".other.npz.01.tmp", "run.npz.tmp", ".run.npz"):
        (path.parent / other).write_bytes(b"mine")
    write_atomically(path, lambda file: file.write(b"new"))
    assert names(path) == [".other.npz.01.tmp", ".run.npz", "run.npz", "run.npz.tmp"]


def test_a_new_file_obeys_the_mask_of_the_user(tmp_path):
    write_atomically(tmp_path / "new", lambda file: file.write(b"new"))
    (tmp_path / "plain").write_bytes(b"")
    assert (tmp_path / "new").stat().st_mode == (tmp_path / "plain").stat().st_mode
