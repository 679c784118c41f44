"""Outputs are complete or not there, whatever the disk does."""

from __future__ import annotations

import errno
import os
import socket
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest

from fieldmover.errors import OutputError
from fieldmover.snapshots import write
from fieldmover.snapshots.gate import Snapshot
from fieldmover.snapshots.write import LatchingFile, Output, chunks, publish, remove_stale, write_text

VALUES = np.random.default_rng(1).random((20, 30, 10))


@pytest.fixture
def path(tmp_path):
    return tmp_path / "out.h5"


def save(path, overwrite=False, values=VALUES):
    with Output(path, overwrite) as output:
        output.write("/group/a", values, {"unit": "gaussian", "count": 3, "size": 1.5})
        output.publish()


def outcome(path):
    """The message of a failed save, None if it worked."""
    try:
        save(path)
    except OutputError as error:
        return str(error)
    return None


def test_what_is_written_is_read(path):
    save(path)
    with Snapshot(path) as snapshot:
        assert np.array_equal(snapshot.read("/group/a"), VALUES)
    with h5py.File(path) as file:
        data = file["group/a"]
        assert data.fletcher32
        assert data.chunks == (20, 30, 10)
        assert dict(data.attrs) == {"unit": b"gaussian", "count": 3, "size": 1.5}
        assert file.libver == ("v110", "v110") or file.id.get_create_plist().get_version()[0] >= 2
    assert os.listdir(path.parent) == ["out.h5"]


def test_slabs_make_the_same_file_as_the_whole(path):
    save(path)
    other = path.with_name("slabs.h5")
    with Output(other) as output:
        output.create("/group/a", VALUES.shape, "f8", {"unit": "gaussian", "count": 3, "size": 1.5})
        for rows in (slice(0, 7), slice(7, 20)):
            output.write_slab("/group/a", (rows,), VALUES[rows])
        assert np.array_equal(output.read("/group/a"), VALUES)
        output.publish()
    with h5py.File(path) as one, h5py.File(other) as two:
        assert np.array_equal(one["group/a"][()], two["group/a"][()])


def test_nothing_of_variable_length(path):
    """HDF5 keeps such values in blocks that start with GCOL and carry no checksum."""
    save(path, values=np.zeros((8, 8, 8)))
    assert b"GCOL" not in path.read_bytes()


def test_an_existing_file_stays_unless_told(path):
    path.write_text("old")
    with pytest.raises(OutputError, match="exists; give --overwrite"):
        save(path)
    assert path.read_text() == "old"
    save(path, overwrite=True)
    with h5py.File(path) as file:
        assert "group/a" in file
    assert os.listdir(path.parent) == ["out.h5"]


def test_an_unfinished_file_leaves_nothing(path):
    with pytest.raises(RuntimeError), Output(path) as output:  # noqa: PT012
        output.write("/a", VALUES)
        assert output.partial.exists()
        raise RuntimeError
    assert os.listdir(path.parent) == []


def test_a_folder_that_is_not_there(tmp_path):
    with pytest.raises(OutputError, match="no such file or directory"):
        Output(tmp_path / "none" / "out.h5")


def test_too_little_space_is_told_before_writing(path):
    with pytest.raises(OutputError, match="more than are free"):
        Output(path, size=2**60)
    assert os.listdir(path.parent) == []


@pytest.mark.parametrize("call", ["pwrite", "preadv", "ftruncate", "fsync", "link", "open"])
@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EIO])
def test_an_error_at_any_call_leaves_neither_output_nor_rest(path, monkeypatch, call, number):
    """The n-th call of each kind fails, for n = 1, 2, ... until a run has fewer calls than that."""
    real = getattr(os, call)
    for fatal in range(1, 200):
        count = 0

        def fails(*arguments, fatal=fatal, **options):
            nonlocal count
            count += 1
            if count == fatal:
                raise OSError(number, os.strerror(number))
            return real(*arguments, **options)

        with monkeypatch.context() as patched:
            patched.setattr(write.os, call, fails)
            error = outcome(path)
        if error is None:
            break
        assert os.strerror(number).lower() in error
        assert not path.exists() or (call, fatal) in {
            ("open", 2),
            ("fsync", 2),
        }  # the folder's sync comes last
        path.unlink(missing_ok=True)
        assert os.listdir(path.parent) == []
    assert fatal > 1 or call == "preadv"
    with h5py.File(path) as file:
        assert np.array_equal(file["group/a"][()], VALUES)


def test_after_a_failed_write_the_program_lives_on(tmp_path):
    """A limit on the size of files acts like a full disk; plain HDF5 may crash when it closes such a file."""
    script = (
        "import resource, signal, sys, numpy as np\n"
        "from fieldmover.snapshots.write import Output\n"
        "from fieldmover.errors import OutputError\n"
        "for limit in range(0, 3_000_000, 100_000):\n"
        "    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))\n"
        "    try:\n"
        "        with Output(sys.argv[1], overwrite=True) as output:\n"
        "            output.write('/a', np.random.default_rng(1).random((64, 64, 64)))\n"
        "            output.write('/b', np.ones((10, 10, 10)))\n"
        "            output.publish()\n"
        "    except OutputError as error: print('refused', error)\n"
        "    else: print('written')\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, str(tmp_path / "out.h5")], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    lines = done.stdout.splitlines()
    assert len(lines) == 30
    assert lines[0].startswith("refused")
    assert "file too large" in lines[0]
    assert lines[-1] == "written"
    assert os.listdir(tmp_path) == ["out.h5"]


def test_killed_while_writing(tmp_path):
    """Neither a half-written output nor, after the next run, its temporary file."""
    script = (
        "import os, signal, sys, numpy as np\n"
        "from fieldmover.snapshots.write import Output\n"
        "with Output(sys.argv[1]) as output:\n"
        "    output.write('/a', np.ones((64, 64, 64)))\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    path = tmp_path / "out.h5"
    done = subprocess.run([sys.executable, "-c", script, str(path)], check=False)
    assert done.returncode == -9
    assert not path.exists()
    assert len(os.listdir(tmp_path)) == 1
    save(path)
    assert os.listdir(tmp_path) == ["out.h5"]


def test_only_rests_of_dead_processes_of_this_machine_are_removed(path):
    host = socket.gethostname()
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    names = {
        f"out.h5.part-{host}-{dead.pid}": False,
        f"out.h5.part-{host}-{os.getpid()}": True,
        f"out.h5.part-elsewhere-{dead.pid}": True,
        f"out.h5.part-{host}-{dead.pid}-mine": True,
        f"other.h5.part-{host}-{dead.pid}": True,
    }
    for name in names:
        path.with_name(name).touch()
    remove_stale(path)
    assert {name: path.with_name(name).exists() for name in names} == names


def test_a_file_system_without_hard_links(path, monkeypatch):
    def refuses(*_):
        raise OSError(errno.EPERM, "no hard links here")

    monkeypatch.setattr(write.os, "link", refuses)
    save(path)
    with pytest.raises(OutputError, match="exists"):
        save(path)
    with h5py.File(path) as file:
        assert "group/a" in file
    assert os.listdir(path.parent) == ["out.h5"]


def test_only_one_of_two_that_publish_wins(tmp_path):
    one, two, path = tmp_path / "one", tmp_path / "two", tmp_path / "out"
    one.write_text("1")
    two.write_text("2")
    publish(one, path, overwrite=False)
    with pytest.raises(FileExistsError):
        publish(two, path, overwrite=False)
    assert path.read_text() == "1"


def test_a_signal_within_hdf5_is_raised_outside_it(path, monkeypatch):
    class Stop(BaseException):
        pass

    def stops(*_):
        raise Stop

    with pytest.raises(Stop), Output(path) as output:  # noqa: PT012
        monkeypatch.setattr(write.os, "pwrite", stops)
        output.write("/a", np.ones((64, 64, 65)))
        output.publish()
    assert os.listdir(path.parent) == []


def test_the_first_error_is_the_one_that_is_kept(tmp_path):
    descriptor = os.open(tmp_path / "file", os.O_RDONLY | os.O_CREAT)
    file = LatchingFile(descriptor)
    assert file.write(b"abc") == 3
    assert file.readinto(bytearray(4)) == 4
    assert file.truncate(10) == 10
    with pytest.raises(OSError, match="Bad file descriptor"):
        file.check()
    os.close(descriptor)


def test_chunks_are_even():
    for n in range(1, 400):
        (size,) = chunks((n, 1))[:1]
        assert size <= 64
        assert -(-n // size) * size - n < -(-n // size)


def test_text_is_replaced_as_a_whole(tmp_path):
    path = tmp_path / "report.json"
    write_text(path, "one")
    write_text(path, "two")
    assert path.read_text() == "two"
    assert os.listdir(tmp_path) == ["report.json"]
    with pytest.raises(OutputError, match="no such file"):
        write_text(Path(tmp_path) / "none" / "report.json", "text")
