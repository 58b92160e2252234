"""Nothing lost: processes killed in the middle of a write, full disks, interruptions."""

from __future__ import annotations

import os
import signal
import time

import pytest

from dunhamfit.archive.replace import rewritten
from dunhamfit.archive.store import open_archive
from dunhamfit.errors import ArchiveProblem

# Forks a writer for each line on standard input, so that the imports are paid once.
WRITERS = """
import os
from invented_runs import one_fit
from dunhamfit.archive.store import open_archive
fits = [one_fit(policy) for policy in ("per-source", "stated", "per-band")]
for _ in sys.stdin:
    process = os.fork()
    if not process:
        print(os.getpid(), flush=True)
        for fit in fits * 100:
            with open_archive(sys.argv[1], mode="a") as archive:
                archive.save(fit, parent=archive.latest_number(), title="later")
        os._exit(0)
    os.waitpid(process, 0)
    print("dead", flush=True)
"""
# Exit code 6 and one line where the run cannot be stored.
LIMITED = """
import resource
from dunhamfit.archive.store import open_archive
from dunhamfit.errors import ArchiveProblem
with open_archive(sys.argv[1]) as archive:
    fit = archive.load(1)
    fit.lines.position
limit = int(sys.argv[2])
resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
try:
    with open_archive(sys.argv[1], mode="a") as archive:
        archive.save(fit)
except ArchiveProblem as problem:
    print(problem)
    sys.exit(problem.exit_code)
"""


def titles(path):
    with open_archive(path) as archive:
        for number in {1, 2, archive.latest_number()}:
            archive.load(number)  # compared with its checksum
        return [run.title for run in archive.runs()]


@pytest.mark.slow
def test_kill_at_50_random_moments(path, program, rng):
    """The archive always opens, with the old runs intact and the last one either there or not."""
    moments = rng.uniform(0.0, 0.1, 50)  # seconds after the writer has begun; one write takes some 0.03 s
    writers = program(WRITERS, path)
    stored = 2
    for moment in moments:
        writers.stdin.write("\n")
        writers.stdin.flush()
        process = int(writers.stdout.readline())
        time.sleep(moment)
        os.kill(process, signal.SIGKILL)
        assert writers.stdout.readline() == "dead\n"
        found = titles(path)
        assert len(found) >= stored and found == ["first", "second"] + ["later"] * (len(found) - 2)
        stored = len(found)
    # Some came to the end of a write. How many were hit in the middle of one depends on the machine: no assertion.
    assert stored > 2


@pytest.mark.parametrize("room", [0, 1000, 5000, 10_000, 20_000])
def test_a_disk_that_fills_up(path, program, room):
    """A limit on the size of files stands for the end of the disk; it strikes at different places."""
    before = path.read_bytes()
    writer = program(LIMITED, path, len(before) - 2000 + room)
    out, err = writer.communicate(timeout=60)
    assert writer.returncode == 6, err
    assert out.startswith(f"{path}: nothing was stored: File too large; ") and out.count("\n") == 1
    assert "Traceback" not in err
    assert path.read_bytes() == before
    assert list(path.parent.iterdir()) == [path]


def test_an_interruption_leaves_the_old_file(path, fit, monkeypatch):
    before = path.read_bytes()

    def interrupt(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    with pytest.raises(KeyboardInterrupt), open_archive(path, mode="a") as archive:
        archive.save(fit)
    assert path.read_bytes() == before
    assert list(path.parent.iterdir()) == [path]


def test_another_hand_on_the_file(tmp_path):
    path = tmp_path / "a"
    path.write_text("old")
    with pytest.raises(ArchiveProblem, match="something else changed this archive"), rewritten(path) as content:
        content.write(b"new")
        path.write_text("changed by hand")
    assert path.read_text() == "changed by hand"
    assert list(tmp_path.iterdir()) == [path]


def test_what_a_killed_process_left_is_removed(tmp_path):
    (tmp_path / ".a.123.new").write_text("half")
    (tmp_path / ".ab.123.new").write_text("of another file")
    with rewritten(tmp_path / "a") as content:
        content.write(b"whole")
    assert sorted(item.name for item in tmp_path.iterdir()) == [".ab.123.new", "a"]


def test_the_mode_of_the_file_stays(tmp_path):
    path = tmp_path / "a"
    path.write_text("old")
    path.chmod(0o640)
    with rewritten(path) as content:
        assert content.getvalue() == b"old"
    assert path.stat().st_mode & 0o777 == 0o640

