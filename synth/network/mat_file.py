"""Reads real and complex matrices from a MAT file of level 5 (saved as version 6 or 7), and nothing else.

The file's published form: a header of 128 bytes, then elements, each with a tag (type and length) and data padded to
eight bytes; a matrix element holds flags, dimensions, name, real part and imaginary part, a sparse one also row indices
and column starts; an element may be compressed as a whole. Own code instead of a library's, because the library's
compiled reader was seen to crash the process on damaged files (a test reads hundreds of them).

Law: for any bytes, ``read_matrices`` returns arrays or raises MatError; beyond the size of the file it unpacks at most
``LARGEST_ELEMENT`` bytes per compressed element.
"""

from __future__ import annotations

import math
import struct
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

LARGEST_ELEMENT = 20_000_000
MOST_VARIABLES = 1000

_MATRIX, _COMPRESSED = 14, 15
_TYPES = {1: "i1", 2: "u1", 3: "i2", 4: "u2", 5: "i4", 6: "u4", 7: "f4", 9: "f8", 12: "i8", 13: "u8"}
_SPARSE = 5
_NUMBERS = range(5, 16)  # sparse, double, single and the whole-number classes
_COMPLEX = 0x08


class MatError(Exception):
    """The bytes are no MAT file that can be read here; the text says why, without full stop."""


@dataclass(frozen=True)
class Variable:
    """A variable by name: its shape and its matrix, None for what is no matrix of numbers (text, cells, structures)."""

    name: str
    shape: tuple[int, ...]
    matrix: NDArray[Any] | None


def read_matrices(data: bytes, most_entries: int) -> list[Variable]:
    """All variables in the order of the file; matrices of more than ``most_entries`` entries are left None."""
    if len(data) < 128 or data[126:128] not in (b"IM", b"MI"):
        raise MatError("it does not start like one of version 6 or 7")
    if data[124:126] in (b"\x00\x02", b"\x02\x00"):
        raise MatError("it has version 7.3; save it as version 7 or lower, or as NPZ")
    order = "<" if data[126:128] == b"IM" else ">"
    found: list[Variable] = []
    for kind, body in _elements(data[128:], order):
        if kind == _COMPRESSED:
            inner = list(_elements(_inflated(body), order))
            if len(inner) != 1:
                raise MatError("a compressed part does not hold one variable")
            kind, body = inner[0]
        if kind != _MATRIX:
            raise MatError(f"an element of type {kind} stands where a variable is expected")
        found.append(_variable(body, order, most_entries))
        if len(found) > MOST_VARIABLES:
            raise MatError(f"it holds more than {MOST_VARIABLES} variables")
    return found


def _inflated(body: bytes) -> bytes:
    stream = zlib.decompressobj()
    try:
        plain = stream.decompress(body, LARGEST_ELEMENT)
    except zlib.error as error:
        raise MatError(f"a compressed part is damaged: {error}") from None
    if stream.unconsumed_tail:
        raise MatError("a compressed part is larger than 20 MB")
    if not stream.eof:
        raise MatError("a compressed part is cut off")
    return plain


def _elements(data: bytes, order: str) -> Iterator[tuple[int, bytes]]:
    """The elements one after the other: type and data."""
    at = 0
    while at < len(data):
        if len(data) - at < 8:
            raise MatError("it is cut off in a tag")
        kind, length = struct.unpack_from(f"{order}II", data, at)
        if kind >> 16:  # small form: length and type in four bytes, up to four bytes of data behind them
            kind, length, start, step = kind & 0xFFFF, kind >> 16, at + 4, 8
            if length > 4:
                raise MatError("a short element is too long")
        else:
            start = at + 8
            step = 8 + (length if kind == _COMPRESSED else -(-length // 8) * 8)
        if start + length > len(data):
            raise MatError("it is cut off")
        yield kind, data[start : start + length]
        at += step


def _numbers(kind: int, body: bytes, order: str) -> NDArray[Any]:
    if kind not in _TYPES:
        raise MatError(f"numbers of type {kind} are not known")
    dtype = np.dtype(order + _TYPES[kind])
    if len(body) % dtype.itemsize:
        raise MatError("the length of a part does not fit its type")
    return np.frombuffer(body, dtype)


def _variable(body: bytes, order: str, most_entries: int) -> Variable:
    parts = _elements(body, order)
    try:
        flags = _numbers(*next(parts), order)
        size = [int(v) for v in _numbers(*next(parts), order)]
        name = next(parts)[1].decode("ascii", "replace")
        if len(flags) != 2 or not 2 <= len(size) <= 32 or any(v < 0 for v in size):
            raise MatError("a variable has no proper shape")
        sort, mask = int(flags[0]) & 0xFF, int(flags[0]) >> 8 & 0xFF
        if sort not in _NUMBERS or math.prod(size) > most_entries:
            return Variable(name, tuple(size), None)
        places = (_numbers(*next(parts), order), _numbers(*next(parts), order)) if sort == _SPARSE else None
        values = _numbers(*next(parts), order)
        if mask & _COMPLEX:
            imaginary = _numbers(*next(parts), order)
            if len(imaginary) != len(values):
                raise MatError(f"the imaginary part of {name[:60]!r} has another size")
            values = _complex(values, imaginary)
    except StopIteration:
        raise MatError("a variable is cut off") from None
    matrix = _full(values, size, name) if places is None else _spread(values, *places, size, name)
    return Variable(name, tuple(size), matrix)


def _complex(real: NDArray[Any], imaginary: NDArray[Any]) -> NDArray[Any]:
    """Both parts put together without arithmetic, so that infinities stay what they are."""
    values = np.empty(len(real), dtype=complex)
    with np.errstate(invalid="ignore"):  # a signalling NaN of a damaged file
        values.real, values.imag = real, imaginary
    return values


def _full(values: NDArray[Any], size: list[int], name: str) -> NDArray[Any]:
    if len(values) != math.prod(size):
        raise MatError(f"{name[:60]!r} has {len(values)} entries, but its shape asks for {math.prod(size)}")
    return values.reshape(size, order="F")


def _spread(values: NDArray[Any], rows: NDArray[Any], starts: NDArray[Any], size: list[int], name: str) -> NDArray[Any]:
    """A full matrix from a sparse one: ``rows`` of the entries, column by column, ``starts`` of the columns."""
    counts: NDArray[np.int64] = np.asarray(np.diff(starts.astype(np.int64)), dtype=np.int64)
    fits = len(size) == 2 and len(starts) == size[1] + 1 and int(starts[0]) == 0 and bool(np.all(counts >= 0))
    used = int(starts[-1]) if fits else -1
    if not fits or not used <= min(len(values), len(rows)) or (used and rows[:used].min() < 0):
        raise MatError(f"the sparse matrix {name[:60]!r} is damaged")
    if used and rows[:used].max() >= size[0]:
        raise MatError(f"the sparse matrix {name[:60]!r} is damaged")
    matrix = np.zeros(size, dtype=values.dtype if values.dtype.kind == "c" else float)
    with np.errstate(invalid="ignore", over="ignore"):
        np.add.at(matrix, (rows[:used].astype(np.int64), np.repeat(np.arange(size[1]), counts)), values[:used])
    return matrix
