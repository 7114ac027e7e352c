"""Census files: the non-degenerate cells of n capacitors and their numbers, in a file that proves itself.

The skeletons stand in the file once; a cell is the number of its skeleton and its attachment as a number.
Cells are grouped in blocks, one per triple of port charges, those marked "first" in front, so that one ratio
is one contiguous read. Layout, all integers little-endian:

    16 bytes   ``capmuster census``
    4 bytes    format version
    4 bytes    length of the header
    16 bytes   BLAKE2b of the header
    header     JSON: n, provenance, the columns and their types, the skeletons, the blocks with their BLAKE2b
    data       the skeletons, then the blocks; in a block column behind column

Nothing in a file is trusted: whatever does not match makes it a `StoreError`, and the caller builds it anew.
"""

from __future__ import annotations

import hashlib
import json
import os
import struct
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

from capmuster.enumerate.skeletons import SkeletonTable

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    from capmuster.enumerate.tally import Triple

FORMAT_VERSION = 1
_MAGIC = b"capmuster census"
_FIXED = struct.Struct("<16sII16s")
_LONGEST_HEADER = 1 << 22
_DIGEST = 16


class StoreError(Exception):
    """A census file that cannot be used; the message says why."""


@dataclass(frozen=True, slots=True)
class Block:
    """Cells of one triple.

    Attributes
    ----------
    triple
        Absolute port charges over their common divisor, sorted; (0, 1, 1) are unity cells.
    rows, first
        Number of cells, and of those in front.
    offset, size
        Bytes from the start of the file.
    digest
        BLAKE2b of these bytes, as hexadecimal text.
    """

    triple: Triple
    rows: int
    first: int
    offset: int
    size: int
    digest: str


@dataclass(frozen=True, slots=True)
class CensusFile:
    """An open census file; its blocks are read and checked when they are asked for.

    Attributes
    ----------
    path
        Where it is.
    n
        Number of flying capacitors.
    columns
        Name and type (as numpy writes it) of each column.
    skeletons
        The skeletons that the cells refer to.
    blocks
        The blocks, by triple.
    """

    path: Path
    n: int
    columns: tuple[tuple[str, str], ...]
    skeletons: SkeletonTable
    blocks: Mapping[Triple, Block]

    def read(self, block: Block, *, first_only: bool = False) -> dict[str, NDArray[np.integer]]:
        """Read the columns of a block's cells, or of those in front.

        Raises
        ------
        StoreError
            When the block is damaged.
        """
        try:
            with self.path.open("rb") as file:
                data = _read_checked(file, block.offset, block.size, block.digest)
        except OSError as error:
            raise StoreError(f"it cannot be read ({error.strerror})") from error
        found: dict[str, NDArray[np.integer]] = {}
        offset = 0
        for name, kind in self.columns:
            column = np.frombuffer(data, dtype=kind, count=block.rows, offset=offset)
            offset += column.nbytes
            found[name] = column[: block.first] if first_only else column
        return found


def write_census(
    path: Path,
    skeletons: SkeletonTable,
    columns: Mapping[str, NDArray[np.integer]],
    groups: Sequence[tuple[Triple, NDArray[np.intp], int]],
    provenance: Mapping[str, str],
) -> None:
    """Write a census file: completely, or not at all.

    Parameters
    ----------
    path
        Where; its folder is made.
    skeletons
        The skeletons.
    columns
        Integer columns of equal length; each is kept in the smallest type that holds it.
    groups
        For each triple the rows of its cells, in order, and how many of them stand in front.
    provenance
        Said in the header: what wrote the file.

    Raises
    ------
    OSError
        When the file cannot be written.
    """
    small = {name: _smallest(column) for name, column in columns.items()}
    parts = [_skeleton_bytes(skeletons)]
    offset = len(parts[0])
    blocks = []
    for triple, rows, first in groups:
        data = b"".join(column[rows].tobytes() for column in small.values())
        blocks.append(
            {
                "triple": list(triple),
                "rows": len(rows),
                "first": first,
                "offset": offset,
                "size": len(data),
                "blake2b": _digest(data).hex(),
            }
        )
        parts.append(data)
        offset += len(data)
    header = json.dumps(
        {
            "n": skeletons.n,
            "written_by": dict(provenance),
            "columns": [[name, column.dtype.str] for name, column in small.items()],
            "skeletons": {
                "rows": len(skeletons),
                "blake2b": _digest(parts[0]).hex(),
            },
            "blocks": blocks,
        },
        sort_keys=True,
    ).encode()
    fixed = _FIXED.pack(_MAGIC, FORMAT_VERSION, len(header), _digest(header))
    write_whole(path, [fixed, header, *parts])


def open_census(path: Path) -> CensusFile:
    """Open a census file.

    Raises
    ------
    StoreError
        When there is none, or it is foreign, older, truncated or damaged as far as can be seen without
        reading the blocks.
    """
    try:
        size = path.stat().st_size
        with path.open("rb") as file:
            magic, version, length, digest = _FIXED.unpack(_read(file, 0, _FIXED.size))
            if magic != _MAGIC:
                raise StoreError("it is no census file")
            if version != FORMAT_VERSION:
                raise StoreError(f"its format is {version}, not {FORMAT_VERSION}")
            if length > _LONGEST_HEADER:
                raise StoreError("its header is damaged")
            text = _read(file, _FIXED.size, length)
            if _digest(text) != digest:
                raise StoreError("its header is damaged")
            header: Any = json.loads(text)
            start = _FIXED.size + length
            skeletons = _skeletons_read(file, start, header)
    except OSError as error:
        raise StoreError(f"it cannot be read ({error.strerror})") from error
    except (KeyError, TypeError, ValueError) as error:
        raise StoreError("its header is damaged") from error
    blocks = [
        Block(
            triple=tuple(block["triple"]),
            rows=block["rows"],
            first=block["first"],
            offset=start + block["offset"],
            size=block["size"],
            digest=block["blake2b"],
        )
        for block in header["blocks"]
    ]
    end = max((block.offset + block.size for block in blocks), default=0)
    if size != end:
        raise StoreError(f"it has {size} bytes, not {end}")
    return CensusFile(
        path=path,
        n=header["n"],
        columns=tuple((name, kind) for name, kind in header["columns"]),
        skeletons=skeletons,
        blocks={block.triple: block for block in blocks},
    )


def write_whole(path: Path, parts: Iterable[bytes]) -> None:
    """Write a file completely, or not at all.

    Raises
    ------
    OSError
        When it cannot be written.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with temporary.open("wb") as file:
            file.writelines(parts)
            file.flush()
            os.fsync(file.fileno())
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def _smallest(column: NDArray[np.integer]) -> NDArray[np.integer]:
    low, high = (int(column.min()), int(column.max())) if len(column) else (0, 0)
    for kind in ("u1", "i1", "<u2", "<i2", "<u4", "<i4", "<i8"):
        limits = np.iinfo(kind)
        if limits.min <= low and high <= limits.max:
            return column.astype(kind)
    raise OverflowError(f"{high} does not fit into a census file")


def _skeleton_bytes(table: SkeletonTable) -> bytes:
    return b"".join(getattr(table, name).astype("i1").tobytes() for name in table.__slots__)


def _skeletons_read(file: BinaryIO, start: int, header: Any) -> SkeletonTable:  # noqa: ANN401 -- parsed JSON
    n, rows = header["n"], header["skeletons"]["rows"]
    shapes = ((rows, n, 4), (rows, n), (rows, 2), (rows,))
    sizes = [int(np.prod(shape)) for shape in shapes]
    data = np.frombuffer(_read_checked(file, start, sum(sizes), header["skeletons"]["blake2b"]), dtype="i1")
    words, charges, nodes, order = (
        part.reshape(shape) for part, shape in zip(np.split(data, np.cumsum(sizes)[:-1]), shapes, strict=True)
    )
    return SkeletonTable(words, charges.astype(np.int64), nodes, order.astype(np.int64))


def _read(file: BinaryIO, offset: int, size: int) -> bytes:
    file.seek(offset)
    data = file.read(size)
    if len(data) != size:
        raise StoreError("it is truncated")
    return data


def _read_checked(file: BinaryIO, offset: int, size: int, digest: str) -> bytes:
    data = _read(file, offset, size)
    if _digest(data).hex() != digest:
        raise StoreError("it is damaged")
    return data


def _digest(data: bytes) -> bytes:
    return hashlib.blake2b(data, digest_size=_DIGEST).digest()
