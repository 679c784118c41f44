"""The gate: what a hostile, damaged or odd HDF5 file may not do."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

import h5py
import numpy as np
import pytest

from fieldmover.errors import DataError, NotEnoughMemory
from fieldmover.snapshots.gate import Snapshot


@pytest.fixture
def path(tmp_path):
    return tmp_path / "snapshot.h5"


def refused(path, name, *words, **options):
    with pytest.raises(DataError) as caught, Snapshot(path, **options) as snapshot:
        snapshot.read(name)
    message = str(caught.value)
    assert message.startswith(str(path))
    for word in words:
        assert word in message


@pytest.mark.parametrize("kind", ["f2", "f4", "f8", "<f8", ">f8", ">i4", "u1", "i8", "?"])
def test_numbers_of_every_plain_type_arrive(path, kind):
    values = np.arange(6).reshape(2, 3).astype(kind)
    with h5py.File(path, "w") as file:
        file["a/b"] = values
    with Snapshot(path) as snapshot:
        found = snapshot.read("/a/b")
        assert snapshot.shape("a/b") == (2, 3)
        assert np.array_equal(snapshot.read("a/b", (slice(1, 2), slice(None))), values[1:2])
    assert found.dtype.isnative
    assert np.array_equal(found, values)


def test_missing_file(tmp_path):
    with pytest.raises(DataError, match="no such file"):
        Snapshot(tmp_path / "none.h5")


def test_folder_pipe_text_and_empty_file(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "text").write_text("r theta phi\n" * 100)
    (tmp_path / "empty").touch()
    for name, words in {
        "": r"found a folder",
        "pipe": "found a pipe",
        "text": "not an HDF5 file",
        "empty": "0 bytes",
    }.items():
        with pytest.raises(DataError, match=words):
            Snapshot(tmp_path / name)


def test_every_truncation_is_noticed(path):
    with h5py.File(path, "w") as file:
        file["a"] = np.arange(10000.0)
    whole = path.read_bytes()
    for part in range(64):
        path.write_bytes(whole[: len(whole) * part // 64])
        with pytest.raises(DataError, match=r"not an HDF5 file|truncated"):
            Snapshot(path)


def test_a_file_that_may_not_be_read():
    script = (
        "import os, sys, h5py\n"
        "from fieldmover.snapshots.gate import Snapshot\n"
        "if os.getuid() == 0: os.setgid(65534); os.setuid(65534)\n"
        "try: Snapshot(sys.argv[1], memory=1)\n"
        "except Exception as error: print(type(error).__name__, error)\n"
    )
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "private.h5"
        with h5py.File(path, "w") as file:
            file["a"] = np.ones(3)
        path.chmod(0)
        path.parent.chmod(0o755)
        done = subprocess.run(
            [sys.executable, "-c", script, str(path)], capture_output=True, text=True, check=True
        )
    assert done.stdout == f"DataError {path}: permission denied\n"


def test_missing_dataset_names_the_nearest(path):
    with h5py.File(path, "w") as file:
        file["field/b_theta"] = np.ones(3)
    refused(path, "/field/b_teta", "no dataset", "did you mean 'b_theta'")
    refused(path, "/feld/b_theta", "did you mean 'field'")
    refused(path, "/field/x", "it has b_theta")
    refused(path, "/field", "is a group", "b_theta")
    refused(path, "/field/b_theta/more", "has no 'more'")


def test_soft_links_within_the_file_are_followed_and_loops_refused(path):
    with h5py.File(path, "w") as file:
        file["deep/a"] = np.arange(3.0)
        file["deep/near"] = h5py.SoftLink("a")
        file["far"] = h5py.SoftLink("/deep/near")
        file["group"] = h5py.SoftLink("/deep")
        file["loop"] = h5py.SoftLink("/pool")
        file["pool"] = h5py.SoftLink("/loop")
        file["deep/up"] = file["/"]
    with Snapshot(path) as snapshot:
        for name in ("far", "group/near", "deep/up/deep/a"):
            assert snapshot.read(name).tolist() == [0, 1, 2]
    refused(path, "loop", "soft links in a row")


def test_nothing_outside_the_file_is_read(path, tmp_path):
    secret = tmp_path / "secret"
    secret.write_bytes(b"8 secret" * 4)
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["a"] = np.ones(4)
    with h5py.File(path, "w") as file:
        file["link"] = h5py.ExternalLink(str(tmp_path / "other.h5"), "/a")
        file.create_dataset("raw", (4,), "f8", external=[(str(secret), 0, 32)])
        layout = h5py.VirtualLayout((4,), "f8")
        layout[:] = h5py.VirtualSource(str(tmp_path / "other.h5"), "a", (4,))
        file.create_virtual_dataset("virtual", layout)
    refused(path, "link", "refused", "links to another file")
    refused(path, "raw", "refused", "external storage")
    refused(path, "virtual", "refused", "virtual dataset")


@pytest.mark.parametrize(
    "value",
    [
        np.array(["text"], dtype=h5py.string_dtype()),
        np.array([b"text"]),
        np.array([1 + 2j]),
        np.array([(1.0, 2)], dtype=[("a", "f8"), ("b", "i4")]),
        np.array([np.arange(3)], dtype=object),
    ],
    ids=["string", "bytes", "complex", "compound", "ragged"],
)
def test_anything_but_real_numbers_is_refused(path, value):
    with h5py.File(path, "w") as file:
        if value.dtype == object and not h5py.check_string_dtype(value.dtype):
            file.create_dataset("a", (1,), h5py.vlen_dtype("f8"))[0] = np.arange(3.0)
        else:
            file["a"] = value
    refused(path, "a", "refused", "expected real numbers")


def test_empty_and_unwritten_datasets_are_refused(path):
    with h5py.File(path, "w") as file:
        file["none"] = h5py.Empty("f8")
        file["zero"] = np.ones((0, 3))
        file.create_dataset("declared", (100, 100, 100), "f8", chunks=True)
    refused(path, "none", "empty")
    refused(path, "zero", "empty")
    refused(path, "declared", "never written")


def test_sizes_are_looked_at_before_anything_is_allocated(path):
    with h5py.File(path, "w") as file:
        bomb = file.create_dataset("bomb", (1024, 1024, 64), "f4", chunks=(1024, 1024, 1), compression="gzip")
        bomb[:, :, 0] = 0
        huge = file.create_dataset("huge", (10**6, 10**6, 100), "f8", chunks=(1, 1, 100))
        huge[0, 0] = 1.0
        file["big"] = np.ones(1000)
    refused(path, "bomb", "refused", "stored bytes would become")
    refused(path, "huge", "refused", "800000000000000")
    with (
        pytest.raises(NotEnoughMemory, match="8000 bytes; 7999 are free"),
        Snapshot(path, memory=7999) as snapshot,
    ):
        snapshot.read("big")


def test_filters_that_need_a_plugin_are_refused(path):
    with h5py.File(path, "w") as file:
        plist = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plist.set_chunk((10,))
        plist.set_filter(
            32015, h5py.h5z.FLAG_OPTIONAL, ()
        )  # a registered filter that HDF5 does not bring along
        space = h5py.h5s.create_simple((10,))
        data = h5py.h5d.create(file.id, b"a", h5py.h5t.IEEE_F64LE, space, plist)
        data.write(h5py.h5s.ALL, h5py.h5s.ALL, np.ones(10))
    refused(path, "a", "refused", "32015")


def test_plugins_are_switched_off_before_h5py_is_imported():
    script = (
        "import os\n"
        "from fieldmover.snapshots.gate import hdf5\n"
        "hdf5()\n"
        "print(os.environ['HDF5_PLUGIN_PRELOAD'])"
    )
    environment = {key: value for key, value in os.environ.items() if key != "HDF5_PLUGIN_PRELOAD"}
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, env=environment, check=True
    )
    assert done.stdout.strip() == "::"


def test_a_file_that_changes_while_it_is_read(path):
    with h5py.File(path, "w") as file:
        file["a"] = np.ones(100)
    with pytest.raises(DataError, match="changed while it was read"), Snapshot(path) as snapshot:  # noqa: PT012
        snapshot.read("a")
        with open(path, "ab") as file:
            file.write(b"more")


def test_a_file_that_is_being_written(path):
    with h5py.File(path, "w") as file:
        file["a"] = np.ones(10)
        file.flush()
        script = (
            "import sys; from fieldmover.snapshots.gate import Snapshot\n"
            "try: Snapshot(sys.argv[1])\n"
            "except Exception as error: print(error)"
        )
        done = subprocess.run(
            [sys.executable, "-c", script, str(path)], capture_output=True, text=True, check=True
        )
    assert "another program is writing it" in done.stdout


def test_damage_that_a_checksum_finds(path):
    with h5py.File(path, "w") as file:
        file.create_dataset("a", data=np.arange(1000.0), chunks=(1000,), fletcher32=True)
        offset = file["a"].id.get_chunk_info(0).byte_offset
    data = bytearray(path.read_bytes())
    data[offset + 100] ^= 1
    path.write_bytes(data)
    refused(path, "a", "may be damaged")


def test_damage_anywhere_is_an_error_or_harmless(path):
    """Bits flipped at fixed places of a small file in the oldest format: an error of ours or none."""
    with h5py.File(path, "w") as file:
        file.create_dataset("g/a", data=np.arange(64.0), chunks=(64,), fletcher32=True)
    whole = path.read_bytes()
    script = (
        "import sys, numpy as np\n"
        "from pathlib import Path\n"
        "from fieldmover.errors import FieldmoverError\n"
        "from fieldmover.snapshots.gate import Snapshot\n"
        "path, whole = Path(sys.argv[1]), Path(sys.argv[1]).read_bytes()\n"
        "random, bad = np.random.default_rng(1), 0\n"
        "for place in random.integers(0, len(whole), 400):\n"
        "    data = bytearray(whole)\n"
        "    data[place] ^= 1 << random.integers(8)\n"
        "    path.write_bytes(data)\n"
        "    try:\n"
        "        with Snapshot(path) as snapshot: snapshot.read('g/a')\n"
        "    except FieldmoverError: bad += 1\n"
        "print(bad)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, str(path)], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 0, done.stderr
    assert int(done.stdout) > 20, whole[:8]


def test_one_number_from_datasets_and_attributes(path):
    with h5py.File(path, "w") as file:
        file["time"] = np.float32(2.5)
        file["times"] = np.arange(3.0)
        file["state/x"] = np.ones(2)
        file["state"].attrs["time"] = np.array([3])
        file["state"].attrs["name"] = "text"
        file["state"].attrs["nan"] = np.nan
        file["state"].attrs["many"] = np.arange(3)
    with Snapshot(path) as snapshot:
        assert snapshot.number("/time") == 2.5
        assert snapshot.number("/state@time") == 3.0
        for name, words in {
            "/times": "expected one number",
            "/state@name": "expected one number",
            "/state@many": "expected one number",
            "/state@nan": "is nan; expected a finite number",
            "/state@tme": "did you mean 'time'",
            "/stat@time": "did you mean 'state'",
        }.items():
            with pytest.raises(DataError, match=words):
                snapshot.number(name)
