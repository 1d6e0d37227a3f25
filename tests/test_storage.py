"""Atomic files, array files and shard folders."""

import hashlib
import io
import os
import pickle
import stat
import struct
import subprocess
import sys
import time
import warnings
import zipfile

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from forecaster import storage
from forecaster.errors import ForecasterWarning, InputError
from forecaster.storage import ShardFolder, npz_bytes, read_npz, sha256_of, write_atomically

LIMIT = 10**6


def zip_of(entries, method=zipfile.ZIP_STORED):
    """Bytes of a zip archive made by the standard library alone."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", method) as archive:
        for name, data in entries:
            archive.writestr(name, data)
    return buffer.getvalue()


def npy_of(array, **options):
    buffer = io.BytesIO()
    np.save(buffer, array, **options)
    return buffer.getvalue()


# --- SHA-256 ---


@pytest.mark.parametrize(
    ("message", "digest"),
    [
        # published: FIPS 180-4 examples for SHA-256 (one-block and two-block messages)
        (b"abc", "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"),
        (
            b"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq",
            "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1",
        ),
    ],
)
def test_sha256_of_published_messages(tmp_path, message, digest):
    file = tmp_path / "message"
    file.write_bytes(message)
    assert sha256_of(message) == digest
    assert sha256_of(file) == sha256_of(str(file)) == digest


def test_sha256_of_a_missing_file_says_so(tmp_path):
    with pytest.raises(InputError, match=r"no file .*absent"):
        sha256_of(tmp_path / "absent")


# --- atomic write ---


def test_write_replaces_and_leaves_nothing_else(tmp_path):
    file = tmp_path / "card.json"
    write_atomically(file, b"old")
    write_atomically(file, b"new")
    assert file.read_bytes() == b"new"
    assert list(tmp_path.iterdir()) == [file]


@pytest.mark.parametrize("step", ["fsync", "replace"])
def test_write_that_fails_keeps_the_old_file(tmp_path, monkeypatch, step):
    file = tmp_path / "card.json"
    file.write_bytes(b"old")

    def refuse(*_):
        raise OSError("no space")

    monkeypatch.setattr(storage.os, step, refuse)
    with pytest.raises(OSError, match="no space"):
        write_atomically(file, b"new")
    assert file.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [file]


def test_file_then_folder_are_flushed(tmp_path, monkeypatch):
    steps = []
    fsync, replace = os.fsync, os.replace
    monkeypatch.setattr(
        storage.os,
        "fsync",
        lambda d: (
            steps.append("folder" if stat.S_ISDIR(os.fstat(d).st_mode) else "file"),
            fsync(d),
        ),
    )
    monkeypatch.setattr(storage.os, "replace", lambda a, b: (steps.append("rename"), replace(a, b)))
    write_atomically(tmp_path / "card.json", b"x")
    assert steps == ["file", "rename", "folder"]


def test_written_file_has_ordinary_permissions(tmp_path):
    (tmp_path / "ordinary").write_bytes(b"")
    write_atomically(tmp_path / "atomic", b"")
    assert (tmp_path / "atomic").stat().st_mode == (tmp_path / "ordinary").stat().st_mode


def test_write_into_a_missing_folder_is_refused(tmp_path):
    with pytest.raises(InputError, match="does not exist"):
        write_atomically(tmp_path / "no" / "file", b"")


# --- array files ---


@given(
    hnp.arrays(
        st.sampled_from(["f4", "f8", "i8", "?", "c16", "U5", "S3", ">f4"]),
        hnp.array_shapes(min_dims=0, max_dims=3, min_side=0, max_side=5),
    )
)
def test_array_comes_back_bit_for_bit_and_numpy_reads_the_same(array):
    data = npz_bytes({"a": array})
    back = read_npz(data, max_bytes=LIMIT)["a"]
    assert (back.dtype, back.shape, back.tobytes()) == (array.dtype, array.shape, array.tobytes())
    assert back.flags.writeable
    # independent code: NumPy's own reader of the .npz format
    with np.load(io.BytesIO(data), allow_pickle=False) as loaded:
        assert loaded["a"].tobytes() == array.tobytes()


def test_equal_arrays_give_equal_bytes_whatever_the_order_time_and_layout(monkeypatch):
    a, b = np.arange(6.0).reshape(2, 3), np.arange(3)
    first = npz_bytes({"a": a, "b": b})
    monkeypatch.setattr(time, "time", lambda: 2e9)
    assert npz_bytes({"b": b, "a": np.asfortranarray(a)}) == first


def test_files_of_numpy_are_read(tmp_path):
    # independent code: numpy.savez_compressed, C and Fortran order
    a = np.arange(6.0).reshape(2, 3)
    np.savez_compressed(tmp_path / "m.npz", a=a, b=np.asfortranarray(a), c=np.float32(2))
    back = read_npz(tmp_path / "m.npz", max_bytes=LIMIT)
    assert sorted(back) == ["a", "b", "c"]
    assert np.array_equal(back["a"], a) and np.array_equal(back["b"], a) and back["c"] == 2


@pytest.mark.parametrize("name", ["", "../up", "a/b", "1a", "a b", "a.b", "höhe"])
def test_odd_names_are_neither_written_nor_read(name):
    with pytest.raises(InputError, match="letters, digits"):
        npz_bytes({name: np.zeros(1)})
    with pytest.raises(InputError, match=r"not a named \.npy"):
        read_npz(zip_of([(f"{name}.npy", npy_of(np.zeros(1)))]), max_bytes=LIMIT)


def test_entry_that_is_no_array_is_refused():
    with pytest.raises(InputError, match=r"not a named \.npy"):
        read_npz(zip_of([("readme", b"hello")]), max_bytes=LIMIT)


class Trap:
    """Unpickling it would be noticed."""

    sprung = False

    def __reduce__(self):
        return (setattr, (Trap, "sprung", True))


def test_objects_are_neither_written_nor_unpickled():
    trap = np.array([Trap()], dtype=object)
    with pytest.raises(InputError, match="objects"):
        npz_bytes({"a": trap})
    data = zip_of([("a.npy", npy_of(trap, allow_pickle=True))])
    assert pickle.dumps(Trap()) in data or b"setattr" in data  # the trap is set
    with pytest.raises(InputError, match="only numbers"):
        read_npz(data, max_bytes=LIMIT)
    assert not Trap.sprung


def test_structured_arrays_are_refused():
    data = zip_of([("a.npy", npy_of(np.zeros(2, [("x", "f8")])))])
    with pytest.raises(InputError, match="only numbers"):
        read_npz(data, max_bytes=LIMIT)


def test_too_much_to_unpack_is_refused_before_unpacking(monkeypatch):
    bomb = zip_of([("a.npy", npy_of(np.zeros(10**6)))], zipfile.ZIP_DEFLATED)
    assert len(bomb) < 10**5 < 8 * 10**6  # packed below the limit, unpacked above
    monkeypatch.setattr(zipfile.ZipFile, "read", lambda *_: pytest.fail("was unpacked"))
    with pytest.raises(InputError, match=r"unpacked: 8000128 bytes, more than the limit of 100000"):
        read_npz(bomb, max_bytes=10**5)


def test_many_small_arrays_count_together():
    data = zip_of([(f"a{i}.npy", npy_of(np.zeros(100))) for i in range(3)])
    with pytest.raises(InputError, match="limit of 2784"):
        read_npz(data, max_bytes=3 * (128 + 800))


def test_entry_that_lies_about_its_size_is_not_unpacked_beyond_it():
    bomb = bytearray(zip_of([("a.npy", npy_of(np.zeros(10**6)))], zipfile.ZIP_DEFLATED))
    for signature, offset in ((b"PK\x03\x04", 22), (b"PK\x01\x02", 24)):
        struct.pack_into("<I", bomb, bomb.index(signature) + offset, 928)
    with pytest.raises(InputError, match="not a whole"):
        read_npz(bytes(bomb), max_bytes=10**5)


@pytest.mark.parametrize("shape", ["(1000000000000,)", "(-1,)", "(-2, -3)", "(3,)"])
def test_header_that_claims_another_size_is_refused(shape):
    text = f"{{'descr': '<f8', 'fortran_order': False, 'shape': {shape}, }}".ljust(117) + "\n"
    entry = b"\x93NUMPY\x01\x00" + struct.pack("<H", 118) + text.encode() + bytes(48)
    with pytest.raises(InputError, match="does not fit 48 bytes"):
        read_npz(zip_of([("a.npy", entry)]), max_bytes=LIMIT)


@pytest.mark.parametrize(
    "entry",
    [
        b"",
        b"hello",
        b"\x93NUMPY\x01\x00\xff\xff{",
        b"\x93NUMPY\x01\x00\x05\x00((((\n",
        b"\x93NUMPY\x03\x00\x02\x00{}",
    ],
)
def test_damaged_header_is_refused(entry):
    with pytest.raises(InputError, match=r"array 'a'"):
        read_npz(zip_of([("a.npy", entry)]), max_bytes=LIMIT)


@pytest.mark.parametrize("method", [zipfile.ZIP_BZIP2, zipfile.ZIP_LZMA])
def test_other_packing_is_refused(method):
    with pytest.raises(InputError, match="deflate"):
        read_npz(zip_of([("a.npy", npy_of(np.zeros(2)))], method), max_bytes=LIMIT)


def test_encrypted_entry_is_refused():
    data = bytearray(npz_bytes({"a": np.zeros(2)}))
    for signature, offset in ((b"PK\x03\x04", 6), (b"PK\x01\x02", 8)):
        data[data.index(signature) + offset] |= 1
    with pytest.raises(InputError, match="encrypted"):
        read_npz(bytes(data), max_bytes=LIMIT)


@pytest.mark.filterwarnings("ignore:Duplicate name")
def test_two_arrays_of_one_name_are_refused():
    data = zip_of([("a.npy", npy_of(np.zeros(1))), ("a.npy", npy_of(np.ones(1)))])
    with pytest.raises(InputError, match="two arrays"):
        read_npz(data, max_bytes=LIMIT)


@given(st.data())
def test_any_damage_is_refused_or_harmless(data):
    good = npz_bytes({"a": np.arange(4.0), "b": np.array("sea")})
    position = data.draw(st.integers(0, len(good) - 1))
    damaged = bytearray(good)
    damaged[position] ^= data.draw(st.integers(1, 255))
    cut = bytes(damaged[: data.draw(st.sampled_from([len(good), position]))])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # a name of an entry may repeat
        try:
            back = read_npz(cut, max_bytes=LIMIT)
        except InputError:
            return
    # dates and attributes of entries may change, the checksummed arrays may not
    assert all(
        np.array_equal(array, wanted)
        for array, wanted in zip(back.values(), (np.arange(4.0), "sea"), strict=False)
    )


def test_missing_file_and_too_large_file_are_said(tmp_path):
    with pytest.raises(InputError, match="no file"):
        read_npz(tmp_path / "absent.npz", max_bytes=LIMIT)
    (tmp_path / "large.npz").write_bytes(npz_bytes({"a": np.zeros(1000)}))
    with pytest.raises(InputError, match="limit of 1000"):
        read_npz(tmp_path / "large.npz", max_bytes=1000)


# --- shards ---


def test_shard_comes_back_and_survives_reopening(tmp_path):
    arrays = {"elevation": np.arange(6, dtype=np.float32).reshape(2, 3), "hs": np.array(2.0)}
    folder = ShardFolder(tmp_path / "seas", plan_hash="a1")
    assert folder.finished() == set()
    folder.write(3, arrays)
    folder.write(1234567, arrays)
    again = ShardFolder(str(tmp_path / "seas"), plan_hash="a1")
    assert again.finished() == {3, 1234567}
    back = again.read(3)
    assert back.keys() == arrays.keys()
    assert back["elevation"].tobytes() == arrays["elevation"].tobytes()
    assert again.path == tmp_path / "seas" and again.plan_hash == "a1"


def test_folder_of_another_plan_is_refused(tmp_path):
    ShardFolder(tmp_path, plan_hash="a1")
    with pytest.raises(InputError, match="made by plan a1, not by plan b2"):
        ShardFolder(tmp_path, plan_hash="b2")


def test_members_of_no_known_plan_are_refused(tmp_path):
    (tmp_path / "member-000000.npz").write_bytes(npz_bytes({}))
    with pytest.raises(InputError, match="no plan"):
        ShardFolder(tmp_path, plan_hash="a1")


@pytest.mark.parametrize("damage", ["cut", "flipped", "emptied"])
def test_damaged_shard_counts_as_unfinished_and_can_be_written_again(tmp_path, damage):
    folder = ShardFolder(tmp_path, plan_hash="a1")
    for member in (0, 1):
        folder.write(member, {"a": np.arange(1000.0)})
    file = tmp_path / "member-000001.npz"
    good = file.read_bytes()
    file.write_bytes(
        {"cut": good[:-30], "flipped": good[:500] + b"?" + good[501:], "emptied": b""}[damage]
    )
    with pytest.warns(ForecasterWarning, match=r"member-000001.*unfinished"):
        assert folder.finished() == {0}
    with pytest.raises(InputError, match="not a whole"):
        folder.read(1)
    folder.write(1, {"a": np.arange(1000.0)})
    assert folder.finished() == {0, 1}
    assert file.read_bytes() == good


def test_other_files_are_left_alone_and_only_old_temporary_files_are_removed(tmp_path):
    folder = ShardFolder(tmp_path, plan_hash="a1")
    names = {
        "fresh": ".member-000004.npz.0123456789abcdef.part",
        "old": ".member-000005.npz.0123456789abcdef.part",
        "foreign": "notes.part",
    }
    for name in names.values():
        (tmp_path / name).write_bytes(b"half")
    before = time.time() - storage.STALE_AFTER - 60
    for name in (names["old"], names["foreign"]):
        os.utime(tmp_path / name, (before, before))
    assert folder.finished() == set()
    ShardFolder(tmp_path, plan_hash="a1")
    left = {file.name for file in tmp_path.iterdir()}
    assert left == {names["fresh"], names["foreign"], "plan.sha256"}


def test_killed_writer_leaves_no_shard(tmp_path):
    ShardFolder(tmp_path, plan_hash="a1").write(0, {"a": np.zeros(3)})
    program = (
        "import os, signal, numpy as np\n"
        "from forecaster import storage\n"
        f"folder = storage.ShardFolder({str(tmp_path)!r}, plan_hash='a1')\n"
        "storage.os.replace = lambda a, b: os.kill(os.getpid(), signal.SIGKILL)\n"
        "folder.write(1, {'a': np.zeros(3)})\n"
    )
    run = subprocess.run([sys.executable, "-c", program], capture_output=True)
    assert run.returncode != 0
    assert len([file for file in tmp_path.iterdir() if file.name.endswith(".part")]) == 1
    assert ShardFolder(tmp_path, plan_hash="a1").finished() == {0}


def test_missing_member_is_said(tmp_path):
    folder = ShardFolder(tmp_path, plan_hash="a1")
    with pytest.raises(InputError, match="member-000009"):
        folder.read(9)
    with pytest.raises(InputError, match="counted from 0"):
        folder.write(-1, {})


def test_shard_bytes_do_not_depend_on_the_process(tmp_path):
    program = (
        "import sys, numpy as np\n"
        "from forecaster.storage import npz_bytes\n"
        "sys.stdout.buffer.write(npz_bytes({'a': np.arange(5.0), 'b': np.ones((2, 2))}))\n"
    )
    there = subprocess.run([sys.executable, "-c", program], capture_output=True, check=True).stdout
    here = npz_bytes({"a": np.arange(5.0), "b": np.ones((2, 2))})
    assert hashlib.sha256(there).hexdigest() == sha256_of(here)
