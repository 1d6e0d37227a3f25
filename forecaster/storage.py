"""Files that are either whole or absent: atomic write, SHA-256, arrays on disk, member shards.

An array file is a plain ``.npz`` (zip of ``.npy``), written so that the same arrays always give
the same bytes, and read without ever trusting it: sizes are checked before memory is taken, and
nothing is unpickled.
"""

from __future__ import annotations

import hashlib
import io
import os
import re
import secrets
import struct
import time
import tokenize
import warnings
import zipfile
import zlib
from math import prod
from pathlib import Path

import numpy as np

from forecaster.errors import ForecasterWarning, InputError

MAX_SHARD_BYTES = 2**30
STALE_AFTER = 3600.0  # s; a file takes seconds to write, so an older temporary file is abandoned

_ARRAY_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
_SHARD_NAME = re.compile(r"member-(\d{6,})\.npz")
_TEMPORARY_NAME = re.compile(r"\..+\.[0-9a-f]{16}\.part")
_PLAN_FILE = "plan.sha256"
# what the standard library raises, one time or another, on a damaged archive
_DAMAGE = (
    zipfile.BadZipFile,
    zlib.error,
    struct.error,
    EOFError,
    OSError,
    OverflowError,
    RuntimeError,
    ValueError,
)
# ... and NumPy on a damaged array header
_HEADER_DAMAGE = (
    tokenize.TokenError,
    SyntaxError,
    TypeError,
    ValueError,
    RecursionError,
    MemoryError,
)
_EARLIEST = (1980, 1, 1, 0, 0, 0)  # the first date a zip entry can hold


def write_atomically(path: str | Path, data: bytes) -> None:
    """Write `data` to `path` so that a reader sees the old file or the new one, never a part.

    Parameters
    ----------
    path : str or Path
        Its folder must exist.
    data : bytes

    Raises
    ------
    InputError
        When the folder does not exist.

    Notes
    -----
    A temporary file in the same folder is written, flushed to the disk and renamed over `path`;
    then the folder itself is flushed, without which a power cut could undo the rename.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_atomically(f"{folder}/note.txt", b"calm")
    ...     sorted(p.name for p in Path(folder).iterdir()), sha256_of(f"{folder}/note.txt")[:8]
    (['note.txt'], '2b4b2ead')
    """
    path = Path(path)
    if not path.parent.is_dir():
        raise InputError(f"cannot write {path}: the folder {path.parent} does not exist")
    temporary = path.with_name(f".{path.name}.{secrets.token_hex(8)}.part")
    try:
        with open(temporary, "xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    _flush_folder(path.parent)


def _flush_folder(folder: Path) -> None:
    """Force the folder's entries to the disk, on systems where a folder can be opened."""
    if hasattr(os, "O_DIRECTORY"):
        descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)


def sha256_of(source: str | Path | bytes) -> str:
    """SHA-256, in hexadecimal, of a file (given by its path) or of bytes.

    Raises
    ------
    InputError
        When there is no such file.

    Notes
    -----
    FIPS 180-4.  A file is read in blocks, so its size does not matter.

    Examples
    --------
    >>> sha256_of(b"abc")[:16]
    'ba7816bf8f01cfea'
    """
    if isinstance(source, bytes):
        return hashlib.sha256(source).hexdigest()
    try:
        with open(source, "rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except (FileNotFoundError, IsADirectoryError) as error:
        raise InputError(f"there is no file {source}") from error


def npz_bytes(arrays: dict[str, np.ndarray]) -> bytes:
    """The content of an ``.npz`` file holding `arrays`; equal arrays give equal bytes.

    Parameters
    ----------
    arrays : dict of str to array
        Names are letters, digits and underscores; numbers, booleans or text, no objects.

    Raises
    ------
    InputError
        For another name, or an array of Python objects.

    Notes
    -----
    Entries are sorted by name, dated 1980-01-01 and stored, not deflated: float32 elevations
    deflate by 7 % at about eighty times the cost, and deflated bytes would depend on the zlib
    that made them.

    Examples
    --------
    >>> read_npz(npz_bytes({"hs": np.array(2.5)}), max_bytes=1000)
    {'hs': array(2.5)}
    """
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_STORED) as archive:
        for name in sorted(arrays):
            if not _ARRAY_NAME.fullmatch(name):
                raise InputError(f"an array name is letters, digits and underscores, got {name!r}")
            array = np.asarray(arrays[name], order="C")
            if array.dtype.hasobject:
                raise InputError(f"array {name!r} holds Python objects; only numbers or text can")
            entry = io.BytesIO()
            np.lib.format.write_array(entry, array, allow_pickle=False)
            info = zipfile.ZipInfo(f"{name}.npy", _EARLIEST)
            info.create_system = 3
            info.external_attr = 0o644 << 16
            archive.writestr(info, entry.getvalue())
    return buffer.getvalue()


def read_npz(source: str | Path | bytes, *, max_bytes: int) -> dict[str, np.ndarray]:
    """Arrays of an ``.npz`` file that is not trusted.

    Parameters
    ----------
    source : str, Path or bytes
        A file, or the content of one (so that what was hashed is what is read).
    max_bytes : int
        Limit on the file, and on the sum of its arrays once unpacked.

    Returns
    -------
    dict of str to array
        Writable copies.

    Raises
    ------
    InputError
        When the file is missing, damaged, too large, encrypted, or holds anything but plain
        named arrays.

    Notes
    -----
    The sizes stated in the archive are summed before anything is unpacked, unpacking stops at
    the stated size, and an array's own header must agree with it: neither a zip bomb nor a
    header that claims a huge shape takes memory.  Nothing is unpickled.
    """
    label = "the data" if isinstance(source, bytes) else str(source)
    try:
        size = len(source) if isinstance(source, bytes) else os.path.getsize(source)
        _check_size(size, max_bytes, label)
        with zipfile.ZipFile(io.BytesIO(source) if isinstance(source, bytes) else source) as file:
            entries = file.infolist()
            unpacked = sum(entry.file_size for entry in entries)
            _check_size(unpacked, max_bytes, f"{label}, unpacked")
            arrays: dict[str, np.ndarray] = {}
            for entry in entries:
                name = _entry_name(entry, label)
                if name in arrays:
                    raise InputError(f"{label}: two arrays are named {name!r}")
                arrays[name] = _parse_npy(file.read(entry), f"{label}: array {name!r}")
            return arrays
    except InputError:
        raise
    except FileNotFoundError as error:
        raise InputError(f"there is no file {label}") from error
    except _DAMAGE as error:
        raise InputError(f"{label}: not a whole .npz file ({error})") from error


def _check_size(size: int, limit: int, label: str) -> None:
    if size > limit:
        raise InputError(f"{label}: {size} bytes, more than the limit of {limit}")


def _entry_name(entry: zipfile.ZipInfo, label: str) -> str:
    """Array name of a zip entry, or InputError for an entry that no array file should hold."""
    name = entry.filename.removesuffix(".npy")
    if name == entry.filename or not _ARRAY_NAME.fullmatch(name):
        raise InputError(f"{label}: holds {entry.filename!r}, which is not a named .npy array")
    if entry.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED):
        raise InputError(f"{label}: {entry.filename!r} is packed by a method other than deflate")
    return name


def _parse_npy(data: bytes, label: str) -> np.ndarray:
    """Array from the bytes of a ``.npy`` entry, its header checked against their number."""
    stream = io.BytesIO(data)
    try:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            shape, fortran, dtype = np.lib.format.read_array_header_1_0(stream)
        elif version == (2, 0):
            shape, fortran, dtype = np.lib.format.read_array_header_2_0(stream)
        else:
            raise ValueError(f"version {version}; 1.0 and 2.0 can be read")
    except _HEADER_DAMAGE as error:
        raise InputError(f"{label}: unreadable .npy header ({error})") from error
    if dtype.kind not in "biufcSU":
        raise InputError(f"{label}: type {dtype}; only numbers, booleans and text can be read")
    if min(shape, default=0) < 0 or prod(shape) * dtype.itemsize != len(data) - stream.tell():
        raise InputError(
            f"{label}: shape {shape} of {dtype} does not fit {len(data) - stream.tell()} bytes"
        )
    array = np.ndarray(shape, dtype, data, stream.tell(), order="F" if fortran else "C")
    return array.copy(order="K")


class ShardFolder:
    """A folder with one array file per ensemble member, which knows what is finished.

    Parameters
    ----------
    path : str or Path
        Made if absent.
    plan_hash : str
        Identifies the plan whose members these are.  A folder remembers the first plan it was
        opened with and refuses any other: members of two plans never mix.

    Raises
    ------
    InputError
        When the folder belongs to another plan, or holds members of no known plan.

    Notes
    -----
    Any number of processes may write different members at a time.  A shard appears whole or not
    at all; temporary files of a run that was killed are never taken for shards, and are removed
    when the folder is opened once they are older than an hour.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as parent:
    ...     shards = ShardFolder(f"{parent}/seas", plan_hash="2f1c")
    ...     shards.write(7, {"elevation": np.zeros(3)})
    ...     shards.finished(), shards.read(7)["elevation"].shape
    ({7}, (3,))
    """

    __slots__ = ("_path", "_plan_hash")

    def __init__(self, path: str | Path, *, plan_hash: str):
        self._path = Path(path)
        self._plan_hash = plan_hash
        self._path.mkdir(parents=True, exist_ok=True)
        plan_file = self._path / _PLAN_FILE
        if not plan_file.exists():
            if any(_SHARD_NAME.fullmatch(file.name) for file in self._path.iterdir()):
                raise InputError(
                    f"{self._path} holds members but no {_PLAN_FILE}; use an empty folder"
                )
            write_atomically(plan_file, f"{plan_hash}\n".encode())
        # read back even when just written: another process may have been first
        found = plan_file.read_text(encoding="utf-8").strip()
        if found != plan_hash:
            raise InputError(
                f"{self._path} was made by plan {found}, not by plan {plan_hash}; "
                "use another folder, or the settings it was made with"
            )
        self._remove_abandoned()

    @property
    def path(self) -> Path:
        """The folder."""
        return self._path

    @property
    def plan_hash(self) -> str:
        """The plan whose members the folder holds."""
        return self._plan_hash

    def finished(self) -> set[int]:
        """Numbers of the members whose shard is present and whole.

        Every shard is read and its checksums compared.  A damaged one is named in a
        `ForecasterWarning` and left out, so that it is computed and written again.
        """
        whole = set()
        for file in sorted(self._path.iterdir()):
            match = _SHARD_NAME.fullmatch(file.name)
            if match is None:
                continue
            try:
                read_npz(file, max_bytes=MAX_SHARD_BYTES)
            except InputError as error:
                warnings.warn(
                    f"{error}; the member counts as unfinished", ForecasterWarning, stacklevel=2
                )
            else:
                whole.add(int(match[1]))
        return whole

    def write(self, member: int, arrays: dict[str, np.ndarray]) -> None:
        """Write (or replace) the shard of `member`, whole or not at all."""
        write_atomically(self._file(member), npz_bytes(arrays))

    def read(self, member: int) -> dict[str, np.ndarray]:
        """Arrays of `member`.

        Raises
        ------
        InputError
            When its shard is missing or damaged.
        """
        return read_npz(self._file(member), max_bytes=MAX_SHARD_BYTES)

    def _file(self, member: int) -> Path:
        if member < 0:
            raise InputError(f"members are counted from 0, got {member}")
        return self._path / f"member-{member:06d}.npz"

    def _remove_abandoned(self) -> None:
        """Remove temporary files too old to belong to a run that is still writing."""
        for file in self._path.iterdir():
            if _TEMPORARY_NAME.fullmatch(file.name):
                try:
                    if time.time() - file.stat().st_mtime > STALE_AFTER:
                        file.unlink()
                except FileNotFoundError:
                    continue  # its writer renamed it, or another process removed it
