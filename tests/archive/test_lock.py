"""Two writers at once: the second is told, nothing is lost, and a dead writer locks nobody out."""

from __future__ import annotations

import errno
import fcntl
import os

import pytest

from dunhamfit.archive import lock
from dunhamfit.archive.lock import writer_lock
from dunhamfit.archive.store import open_archive
from dunhamfit.errors import ArchiveProblem

HOLD = """
from dunhamfit.archive.store import open_archive
with open_archive(sys.argv[1], mode="a") as archive:
    print("open", flush=True)
    sys.stdin.readline()
"""
STORE = """
from invented_runs import one_fit
from dunhamfit.archive.store import open_archive
fit = one_fit()
print("ready", flush=True)
sys.stdin.readline()
for _ in range(5):
    with open_archive(sys.argv[1], mode="a") as archive:
        archive.save(fit, title=sys.argv[2])
"""


@pytest.fixture
def impatient(monkeypatch):
    monkeypatch.setattr(lock, "WAIT_SECONDS", 0.05)


def test_the_second_writer_is_told(path, program, impatient):
    holder = program(HOLD, path)
    assert holder.stdout.readline() == "open\n"
    with pytest.raises(ArchiveProblem) as caught:
        open_archive(path, mode="a")
    assert f"another writer (process {holder.pid}) has this archive open; nothing was stored" in str(caught.value)
    with open_archive(path) as reader:
        assert reader.numbers() == (1, 2)
    holder.communicate("\n", timeout=30)
    with open_archive(path, mode="a") as archive:
        assert archive.save(archive.latest()) == 3


def test_so_is_one_in_the_same_process(path, impatient):
    with open_archive(path, mode="a"), pytest.raises(ArchiveProblem, match="another writer"):
        open_archive(path, mode="a")
    with open_archive(path, mode="a"):
        pass


def test_a_killed_writer_holds_nothing(path, program, impatient):
    holder = program(HOLD, path)
    holder.stdout.readline()
    holder.kill()
    holder.wait()
    with open_archive(path, mode="a") as archive:
        assert archive.save(archive.latest()) == 3
    assert list(path.parent.iterdir()) == [path]


def test_four_writers_that_take_turns_lose_nothing(tmp_path, program):
    path = tmp_path / "shared.h5"
    writers = [program(STORE, path, name) for name in "abcd"]
    for writer in writers:
        assert writer.stdout.readline() == "ready\n"
    for writer in writers:
        writer.stdin.write("\n")
        writer.stdin.flush()
    for writer in writers:
        assert writer.wait(timeout=60) == 0, writer.stderr.read()
    with open_archive(path) as archive:
        titles = [run.title for run in archive.runs()]
        assert archive.numbers() == tuple(range(1, 21))
        assert sorted(titles) == sorted("abcd" * 5)
        archive.latest()


def test_a_folder_that_cannot_be_written(path, monkeypatch):
    """The superuser may write anywhere, so that the refusal of the system is played here."""

    def refuse(*_):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))

    with monkeypatch.context() as patch:
        patch.setattr(os, "open", refuse)
        with pytest.raises(ArchiveProblem) as caught:
            open_archive(path, mode="a")
    assert str(caught.value).startswith(f"{path}: cannot be written: folder '{path.parent}': Permission denied; ")
    with open_archive(path) as archive:
        assert archive.numbers() == (1, 2)


@pytest.mark.skipif(os.geteuid() == 0, reason="the superuser may write into a read-only folder")
def test_a_read_only_folder(path):
    path.parent.chmod(0o555)
    try:
        with pytest.raises(ArchiveProblem, match="Permission denied"):
            open_archive(path, mode="a")
        with open_archive(path) as archive:
            archive.latest()
    finally:
        path.parent.chmod(0o755)


def test_a_file_system_without_locks(path, monkeypatch):
    """Some network file systems refuse to lock: storing goes on, guarded by the look at the file before the rename."""

    def refuse(*_):
        raise OSError(errno.ENOLCK, os.strerror(errno.ENOLCK))

    monkeypatch.setattr(fcntl, "flock", refuse)
    with open_archive(path, mode="a") as first, open_archive(path, mode="a") as second:
        assert first.save(first.load(1)) == 3
        assert second.save(second.load(1)) == 4


def test_the_lock_file_is_gone_afterwards(tmp_path):
    path = tmp_path / "a.h5"
    with writer_lock(path):
        assert [item.name for item in tmp_path.iterdir()] == [".a.h5.lock"]
    assert list(tmp_path.iterdir()) == []
