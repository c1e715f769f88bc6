"""Recordings as NumPy archives (NPZ): one array for each column.

A stranger's file is never trusted: arrays of Python objects, which would run code when read, are
refused by their header alone, and sizes are held against the archive before memory is taken.
Large arrays that are not compressed stay on disk and are mapped into memory.
"""

from __future__ import annotations

import hashlib
import io
import math
import struct
import tokenize
import zipfile
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Final

import numpy as np
from numpy.lib import format as npy

from bayesglm.errors import InputError
from bayesglm.recording.columns import ARRAYS, Column, NumberTable, identify
from bayesglm.recording.recording import FloatArray
from bayesglm.recording.table import open_bytes

#: Names under which a number may state the sampling step in place of an array of times.
STEPS: Final = ("step_ms", "step_s")
#: Arrays from this size on are mapped; smaller ones are read as fast.
SMALLEST_MAPPED_BYTES: Final = 16 * 2**20

#: What the parts of an archive raise where it is damaged: zip, deflate, header of an array.
_DAMAGE: Final = (
    zipfile.BadZipFile,
    zlib.error,
    EOFError,
    OSError,
    ValueError,
    RuntimeError,
    NotImplementedError,
    SyntaxError,
    struct.error,
    tokenize.TokenError,
)
_LOCAL_HEADER: Final = struct.Struct("<4s22xHH")
#: Number of members in the record that ends an archive, and how long that is with its comment.
_MEMBERS: Final = struct.Struct("<10xH")
_LONGEST_END: Final = 22 + 2**16
_PIECE: Final = 2**24
#: The largest ratio of sizes that deflate can reach.
_MOST_SHRUNK: Final = 1032


@dataclass(frozen=True)
class _Member:
    """An array in the archive whose header is read.

    `header_bytes` is the length of that header, after which the numbers begin.
    """

    name: str
    info: zipfile.ZipInfo
    shape: tuple[int, ...]
    dtype: np.dtype[Any]
    header_bytes: int


def read_npz(path: Path) -> NumberTable:
    """Read the arrays of a recording.

    Parameters
    ----------
    path
        An archive as `numpy.savez` and `numpy.savez_compressed` write it: one array of numbers a
        column, all of one length, and ``step_ms`` or ``step_s``, a single number, where there is
        no array of times.

    Returns
    -------
    NumberTable
        Arrays of float64 that are stored without compression and are at least 16 MiB large are
        mapped from the file; all others are copies.

    Raises
    ------
    InputError
        If the file is no such archive; the message names the array.
    """
    with open_bytes(path) as stream:
        sha256 = hashlib.file_digest(stream, "sha256").hexdigest()
        with _archive(path, stream) as archive:
            members = {one.filename: one for one in archive.infolist()}
            names = _names(path, archive)
            found = identify(list(names), str(path), ARRAYS, STEPS)
            headers = {
                quantity: _header(path, archive, name, members[names[name]])
                for quantity, (name, _) in found.items()
            }
            for quantity, member in headers.items():
                _refuse_type(path, quantity, member)
            _refuse_shapes(path, headers)
            step = None
            if "step" in headers:
                step = _step(path, archive, headers.pop("step"), found["step"][1])
            columns = {
                quantity: Column(
                    member.name, found[quantity][1], _values(path, stream, archive, member),
                    member.dtype,
                )
                for quantity, member in headers.items()
            }  # fmt: skip
    return NumberTable(path, sha256, columns, first_row=0, wording=ARRAYS, step_ms=step)


@contextmanager
def _archive(path: Path, stream: BinaryIO) -> Iterator[zipfile.ZipFile]:
    """Open the archive; refuse what is none."""
    stream.seek(0)
    magic = stream.read(6)
    if magic == npy.MAGIC_PREFIX:
        raise InputError(
            f"{path}: found a single array; expected an archive of named arrays; save it with "
            "numpy.savez(file, time_ms=…, current_pA=…, voltage_mV=…)"
        )
    try:
        archive = zipfile.ZipFile(stream)
    except _DAMAGE:
        found = "an archive cut short" if magic.startswith(b"PK") else "no archive"
        raise InputError(
            f"{path}: found {found}; expected arrays as numpy.savez writes them; save or copy the "
            "file again"
        ) from None
    with archive:
        if len(archive.infolist()) != _stated_members(stream):
            raise InputError(f"{path}: the archive is damaged (members are missing); copy it again")
        yield archive


def _stated_members(stream: BinaryIO) -> int | None:
    """Number of members by the archive's last record, which `zipfile` does not compare."""
    end = stream.seek(0, io.SEEK_END)
    stream.seek(max(0, end - _LONGEST_END))
    tail = stream.read()
    place = tail.rfind(b"PK\x05\x06")
    return _MEMBERS.unpack_from(tail, place)[0] if 0 <= place <= len(tail) - _MEMBERS.size else None


@contextmanager
def _undamaged(path: Path, name: str) -> Iterator[None]:
    """Turn what a damaged archive raises into one line."""
    try:
        yield
    except InputError:
        raise
    except _DAMAGE as error:
        told = " ".join(str(error).split())[:80]
        raise InputError(
            f"{path}, array {name}: the archive is damaged ({told}); save or copy the file again"
        ) from None


def _names(path: Path, archive: zipfile.ZipFile) -> dict[str, str]:
    """Names of the arrays, with those of the archive's members; refuse members that are none."""
    files = archive.namelist()
    if not files:
        raise InputError(f"{path}: the archive holds no arrays; save the recording again")
    names: dict[str, str] = {}
    for file in files:
        name = file.removesuffix(".npy")
        if name == file:
            raise InputError(
                f"{path}: the archive holds {file!r}, which is no array (.npy); expected arrays as "
                "numpy.savez writes them; save a workbook as CSV"
            )
        if name in names:
            raise InputError(f"{path}: array {name!r} occurs twice; keep one of the two")
        names[name] = file
    return names


def _header(path: Path, archive: zipfile.ZipFile, name: str, info: zipfile.ZipInfo) -> _Member:
    """Read shape and type of an array, and nothing of its content."""
    with _undamaged(path, name), archive.open(info) as file:
        version = npy.read_magic(file)
        if version == (1, 0):
            shape, _, dtype = npy.read_array_header_1_0(file)
        elif version == (2, 0):
            shape, _, dtype = npy.read_array_header_2_0(file)
        else:
            # Version 3 is for names of fields, which no column of numbers has.
            raise ValueError(f"version {version[0]}.{version[1]} of the format")
        return _Member(name, info, shape, dtype, file.tell())


def _refuse_type(path: Path, quantity: str, member: _Member) -> None:
    """Refuse what are no numbers, and a length that the archive does not hold."""
    place = f"{path}, array {member.name}"
    if member.dtype.hasobject:
        raise InputError(
            f"{place}: holds Python objects, which could run a program when read; expected "
            f"numbers; save it as numpy.asarray({member.name}, dtype=float)"
        )
    # Kinds of type: boolean, signed and unsigned whole numbers, floating point.
    allowed = "biuf" if quantity == "spike" else "iuf"
    if member.dtype.kind not in allowed:
        kinds = {"b": "true and false", "c": "complex numbers", "U": "text", "S": "text"}
        found = kinds.get(member.dtype.kind, "values")
        wanted = "0 and 1" if quantity == "spike" else "real numbers"
        raise InputError(
            f"{place}: holds {found} (type {member.dtype}); expected {wanted}; save it as numbers"
        )
    # Deflate cannot shrink by more; what states more would fill the memory.
    packed = member.info.compress_size
    if member.info.file_size > _MOST_SHRUNK * packed + 1024:
        raise InputError(
            f"{place}: the archive is damaged ({packed} bytes cannot hold "
            f"{member.info.file_size}); save or copy the file again"
        )
    stated = member.header_bytes + math.prod(member.shape) * member.dtype.itemsize
    if stated != member.info.file_size:
        raise InputError(
            f"{place}: the archive is damaged (its header states {stated} bytes, the archive "
            f"{member.info.file_size}); save or copy the file again"
        )


def _refuse_shapes(path: Path, headers: dict[str, _Member]) -> None:
    """Refuse arrays of more than one dimension, none or unequal length, and a step that is many."""
    first = headers["voltage"]
    for quantity, member in headers.items():
        place = f"{path}, array {member.name}"
        if quantity == "step":
            if member.shape != ():
                raise InputError(
                    f"{place}: has shape {member.shape}; expected a single number, such as "
                    f"{member.name}=0.05"
                )
        elif len(member.shape) != 1:
            raise InputError(
                f"{place}: has shape {member.shape}; expected one dimension; put the sweeps one "
                "after another and number them in an array sweep"
            )
        elif member.shape == (0,):
            raise InputError(f"{place}: holds no samples; expected at least two")
        elif member.shape != first.shape and len(first.shape) == 1:
            raise InputError(
                f"{place}: has {member.shape[0]} samples and {first.name} {first.shape[0]}; "
                "expected equal lengths; save both from the same samples"
            )


def _step(path: Path, archive: zipfile.ZipFile, member: _Member, factor: float) -> float:
    """Return the sampling step, ms."""
    value = float(_unpacked(path, archive, member))
    if not (np.isfinite(value) and value > 0):
        raise InputError(
            f"{path}, array {member.name}: found {value:.10g}; expected a positive number, the "
            "time between two samples"
        )
    return value * factor


def _values(path: Path, stream: BinaryIO, archive: zipfile.ZipFile, member: _Member) -> FloatArray:
    """Return an array as float64: mapped where it can be, else a copy."""
    size = member.info.file_size - member.header_bytes
    stored = member.info.compress_type == zipfile.ZIP_STORED
    if stored and member.dtype == np.float64 and size >= SMALLEST_MAPPED_BYTES:
        return _mapped(path, stream, member)
    return _unpacked(path, archive, member).astype(np.float64, copy=False)


def _unpacked(path: Path, archive: zipfile.ZipFile, member: _Member) -> FloatArray:
    with _undamaged(path, member.name), archive.open(member.info) as file:
        values: FloatArray = npy.read_array(file, allow_pickle=False)
        return values


def _mapped(path: Path, stream: BinaryIO, member: _Member) -> FloatArray:
    """Map an array that lies in the file as it does in memory."""
    info = member.info
    with _undamaged(path, member.name):
        # How long the header in front of the member is, only that header says.
        stream.seek(info.header_offset)
        head = stream.read(_LOCAL_HEADER.size)
        signature, name_bytes, extra_bytes = _LOCAL_HEADER.unpack(head)
        if signature != b"PK\x03\x04" or info.flag_bits & 0x1:
            raise ValueError("no readable header in front of the array")
        offset = info.header_offset + _LOCAL_HEADER.size + name_bytes + extra_bytes
        # The other way of reading compares this sum too; a wrong offset fails it.
        whole = np.memmap(stream, np.uint8, "r", offset, (info.file_size,))
        checksum = 0
        for start in range(0, len(whole), _PIECE):
            checksum = zlib.crc32(whole[start : start + _PIECE].data, checksum)
        if checksum != info.CRC:
            raise ValueError("its checksum is wrong")
        return np.asarray(
            np.memmap(stream, member.dtype, "r", offset + member.header_bytes, member.shape)
        )
