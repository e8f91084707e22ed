"""Files that were packed with gzip or Zstandard, told by their first bytes."""

from __future__ import annotations

import io
from pathlib import Path
from typing import BinaryIO, Literal, cast

import pyarrow as pa
import xxhash

Packing = Literal["gzip", "zstd"]

MAGIC: dict[Packing, bytes] = {"gzip": b"\x1f\x8b", "zstd": b"\x28\xb5\x2f\xfd"}

_BUFFER_BYTES = 1 << 20


def packing_of(path: Path) -> Packing | None:
    """Return how a file is packed; None if it is not."""
    with path.open("rb") as file:
        beginning = file.read(4)
    return next((name for name, magic in MAGIC.items() if beginning.startswith(magic)), None)


def opened(path: Path, packing: Packing | None) -> BinaryIO:
    """Open a file to read its content, unpacked.

    A file that ends early, or whose checksum does not hold, raises an OSError while it is read.
    """
    if packing is None:
        return path.open("rb")
    stream = pa.CompressedInputStream(pa.OSFile(str(path), "rb"), packing)
    return cast("BinaryIO", io.BufferedReader(stream, _BUFFER_BYTES))


def checksum_of(path: Path) -> str:
    """Return a checksum of the bytes of a file."""
    digest = xxhash.xxh3_128()
    with path.open("rb") as file:
        while part := file.read(_BUFFER_BYTES):
            digest.update(part)
    return digest.hexdigest()
