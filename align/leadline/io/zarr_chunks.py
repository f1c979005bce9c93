"""The chunks of a Zarr array one after the other, each unpacked into one small buffer that is used again.

zarr itself copies every chunk once more and goes through its event loop for each; whoever only adds up what a large
stack holds pays for that more than for the sum. Here is what plain local files need: chunks or shards in C order,
packed by one common codec or by none. Everything else is read by zarr.

References
----------
Zarr specification 2 and 3 (chunk keys, ``bytes``, ``sharding_indexed``).
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from itertools import product
from typing import TYPE_CHECKING, Any

import numpy as np

from leadline.io.images import READ_FAULTS, fetch_ahead, unreadable

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    from leadline.base.arrays import AnyArray

_UNPACKERS = ("zstd", "blosc", "gzip", "zlib")
_INDEX = ["bytes", "crc32c"]
_CHECKSUM_BYTES = 4
_EMPTY = 2**64 - 1


@dataclass(frozen=True, slots=True)
class Shards:
    """How chunks lie in a file. ``chunk`` : shape of a shard. ``at_end`` : where the index is."""

    chunk: tuple[int, ...]
    at_end: bool


class Chunks:
    """A Zarr array on slicing, as zarr reads it, and its chunks by ``pieces``."""

    def __init__(self, array: Any, packed: str | None, stored: np.dtype[Any], shards: Shards | None) -> None:
        self._array, self._packed, self._stored, self._shards = array, packed, stored, shards
        self.shape: tuple[int, ...] = array.shape
        self.dtype: np.dtype[Any] = array.dtype
        self.chunks: tuple[int, ...] = array.chunks

    def __getitem__(self, key: Any) -> Any:
        return self._array[key]

    def pieces(self, key: tuple[Any, ...] | None) -> Any:
        """The voxels under a key of indices and slices, chunk by chunk; of None: whether this can be done."""
        return True if key is None else self._pieces([k if isinstance(k, slice) else slice(k, k + 1) for k in key])

    def _pieces(self, box: list[slice]) -> Iterator[tuple[tuple[int, ...], AnyArray]]:
        size = int(np.prod(self.chunks)) * self._stored.itemsize
        buffer, unpack = np.empty(size, np.uint8), _unpacker(self._packed)
        spans = (range(s.start // c, -(-s.stop // c)) for s, c in zip(box, self.chunks, strict=True))
        for packed, number in self._packed_chunks(list(product(*spans))):
            voxels = self._voxels(packed, buffer, unpack)
            first = [n * c for n, c in zip(number, self.chunks, strict=True)]
            start = tuple(max(s.start, f) for s, f in zip(box, first, strict=True))
            ends = (min(s.stop, f + c) for s, f, c in zip(box, first, self.chunks, strict=True))
            yield start, voxels[tuple(slice(a - f, b - f) for a, b, f in zip(start, ends, first, strict=True))]

    def _voxels(self, packed: bytes | None, buffer: AnyArray, unpack: Callable[..., Any]) -> AnyArray:
        voxels = buffer.view(self._stored).reshape(self.chunks)
        if packed is None:
            voxels[...] = self._array.fill_value or 0
            return voxels
        try:
            held = memoryview(unpack(packed, out=buffer)).nbytes
            if held != buffer.nbytes:
                raise EOFError(f"a chunk of {held} bytes, {buffer.nbytes} belong there")
        except READ_FAULTS as error:
            raise unreadable(self._root, error) from error
        return voxels

    @property
    def _root(self) -> Path:
        root: Path = self._array.store.root / self._array.path
        return root

    def _file(self, number: tuple[int, ...]) -> Path:
        return self._root / str(self._array.metadata.encode_chunk_key(number))

    def _packed_chunks(self, numbers: list[tuple[int, ...]]) -> Iterator[tuple[bytes | None, tuple[int, ...]]]:
        """The bytes of chunks as they are stored, None where there are none."""
        if self._shards is None:
            for k, number in enumerate(numbers):
                fetch_ahead(self._file(after) for after in numbers[k + 1 : k + 2])
                yield _bytes_of(self._file(number)), number
            return
        many = [s // c for s, c in zip(self._shards.chunk, self.chunks, strict=True)]
        numbers = sorted(numbers, key=lambda number: [n // m for n, m in zip(number, many, strict=True)])
        name, index = None, None
        for number in numbers:
            file = self._file(tuple(n // m for n, m in zip(number, many, strict=True)))
            if file != name:
                name, index = file, self._index(file, many)
            inside = tuple(n % m for n, m in zip(number, many, strict=True))
            start, length = (_EMPTY, _EMPTY) if index is None else map(int, index[inside])
            yield None if start == _EMPTY else _bytes_of(file, start, length), number

    def _index(self, file: Path, many: list[int]) -> AnyArray | None:
        """Start and length of every chunk in a shard; None where there is no such shard."""
        assert self._shards is not None
        length = 16 * int(np.prod(many)) + _CHECKSUM_BYTES
        start = -length if self._shards.at_end else 0
        packed = _bytes_of(file, start, length)
        if packed is None:
            return None
        return np.frombuffer(packed[:-_CHECKSUM_BYTES], "<u8").reshape(*many, 2)


def _bytes_of(file: Path, start: int = 0, length: int = -1) -> bytes | None:
    """Bytes of a file, from its end where ``start`` is negative; None where it is not there."""
    try:
        with file.open("rb", buffering=0) as handle:
            size = os.fstat(handle.fileno()).st_size
            start = start if start >= 0 else size + start
            if start < 0 or start + length > size:
                raise EOFError(f"bytes {start} to {start + length} are wanted of {size}")
            handle.seek(start)
            return handle.read(length)
    except FileNotFoundError:
        return None
    except (OSError, EOFError) as error:
        raise unreadable(file, error) from error


def _unpacker(name: str | None) -> Callable[..., Any]:
    import imagecodecs

    if name is None:
        return _copied
    if name == "blosc":
        return lambda packed, out: imagecodecs.blosc_decode(packed, out=out, numthreads=1)
    unpack: Callable[..., Any] = getattr(imagecodecs, f"{name}_decode")
    return unpack


def _copied(packed: bytes, out: AnyArray) -> AnyArray:
    out[: len(packed)] = np.frombuffer(packed, np.uint8)
    return out[: len(packed)]


def chunked(array: Any) -> Any:
    """The array with ``pieces`` where its chunks lie in plain local files as described above, else as it is."""
    from zarr.storage import LocalStore

    if not isinstance(array.store, LocalStore):
        return array
    layout = _layout_2(array) if array.metadata.zarr_format == 2 else _layout_3(array.metadata)
    if layout is None:
        return array
    names, stored, shards = layout
    if len(names) > 1 or any(name not in _UNPACKERS for name in names) or stored.kind not in "uif":
        return array
    if shards is not None and not names:
        return (
            array  # only zarr checks the sum of a shard's index, by which bare voxels may be taken from a wrong place
        )
    return Chunks(array, names[0] if names else None, stored, shards)


Layout = tuple[list[str], np.dtype[Any], Shards | None]


def _layout_2(array: Any) -> Layout | None:
    if array.order != "C" or array.filters:
        return None
    return [codec.codec_id for codec in array.compressors], array.dtype, None


def _layout_3(metadata: Any) -> Layout | None:
    codecs = [codec.to_dict() for codec in metadata.codecs]
    shards = None
    if metadata.chunk_grid.to_dict()["name"] != "regular":
        return None
    if [codec["name"] for codec in codecs] == ["sharding_indexed"]:
        said = codecs[0]["configuration"]
        if [codec["name"] for codec in said["index_codecs"]] != _INDEX:
            return None
        shards = Shards(tuple(metadata.chunk_grid.chunk_shape), said["index_location"] == "end")
        codecs = list(said["codecs"])
    first = codecs[0]
    if first["name"] != "bytes":
        return None
    endian = first.get("configuration", {}).get("endian", "little")
    return [codec["name"] for codec in codecs[1:]], metadata.dtype.to_native_dtype().newbyteorder(endian), shards
