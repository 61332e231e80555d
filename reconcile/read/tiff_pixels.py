"""The pixels of a TIFF page that is not packed, or packed by deflate: filled into memory of the declared size and no more."""

from __future__ import annotations

import math
import sys
import zlib
from io import BufferedReader
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from reconcile.read.tiff import Damaged, Page, packed_bytes

DEFLATE = (8, 32946)
_CHUNK = 4 * 1024 * 1024


def stored_numbers(path: Path, page: Page, order: str) -> NDArray[Any]:
    """Return the numbers of a page as they are stored.

    Parameters
    ----------
    path : the file
    page : one whose strips lie inside the file and agree with its declared size
    order : byte order of the file, "<" or ">"

    Returns
    -------
    array (channels, rows, columns)

    Raises
    ------
    Damaged
        A strip holds more or less than the page declares, or cannot be unpacked.
    OSError
        The file cannot be read.
    """
    inside = 1 if page.separate else page.samples
    kind = np.dtype(f"{'f' if page.sample_format[0] == 3 else 'u'}{page.bits[0] // 8}")
    whole = np.empty((page.samples // inside, page.rows, page.columns, inside), kind)
    needed = packed_bytes(page)
    counts = page.counts or tuple(needed)
    with path.open("rb") as stream:
        if page.tile is None:
            content, position = whole.reshape(-1).view(np.uint8), 0
            for offset, count, length in zip(page.offsets, counts, needed, strict=True):
                _fill(stream, page, offset, count, content[position : position + length])
                position += length
            whole = _in_order(whole, page, order)
        else:
            _lay_tiles(stream, page, order, counts, whole)
    return np.moveaxis(whole[0], 2, 0) if inside > 1 else whole[..., 0]


def _lay_tiles(stream: BufferedReader, page: Page, order: str, counts: tuple[int, ...], whole: NDArray[Any]) -> None:
    wide, high = page.tile or (page.columns, page.rows)
    across, down = math.ceil(page.columns / wide), math.ceil(page.rows / high)
    for number, (offset, count) in enumerate(zip(page.offsets, counts, strict=True)):
        plane, place = divmod(number, across * down)
        row, column = place // across * high, place % across * wide
        tile = np.empty((1, high, wide, whole.shape[3]), whole.dtype)
        _fill(stream, page, offset, count, tile.reshape(-1).view(np.uint8))
        part = whole[plane, row : row + high, column : column + wide]
        part[...] = _in_order(tile, page, order)[0, : part.shape[0], : part.shape[1]]


def _fill(stream: BufferedReader, page: Page, offset: int, count: int, target: NDArray[np.uint8]) -> None:
    """Fill `target` from one strip or tile."""
    stream.seek(offset)
    if page.compression not in DEFLATE:
        if stream.readinto(target.data) != target.size:
            raise Damaged("a file that ends too early")
        return
    unpacker, position, left = zlib.decompressobj(), 0, count
    try:
        while left and not unpacker.eof:
            packed = stream.read(min(left, _CHUNK))
            left -= len(packed) if packed else left
            while packed and not unpacker.eof:
                # One byte more than is wanted shows a strip that holds too much, without unpacking it.
                content = unpacker.decompress(packed, min(_CHUNK, target.size - position + 1))
                packed = unpacker.unconsumed_tail
                if position + len(content) > target.size:
                    raise Damaged(f"a strip that unpacks to more than the {target.size} bytes declared")
                target[position : position + len(content)] = np.frombuffer(content, np.uint8)
                position += len(content)
    except zlib.error as error:
        raise Damaged(f"pixels that cannot be unpacked ({error})") from None
    if position < target.size:
        raise Damaged(f"a strip that unpacks to {position} bytes in place of {target.size}")


def _in_order(block: NDArray[Any], page: Page, order: str) -> NDArray[Any]:
    """Bring the bytes of a block (planes, rows, columns, channels) into the machine's order and undo the predictor."""
    if page.predictor == 3 and block.dtype.kind == "f":
        # Each row holds first all leading bytes, then all second ones; differences of neighbouring bytes are stored.
        *front, columns, inside = block.shape
        width = block.dtype.itemsize
        rows = block.view(np.uint8).reshape(*front, columns * width, inside)
        np.cumsum(rows, axis=-2, dtype=np.uint8, out=rows)
        planes = rows.reshape(*front, width, columns * inside)
        joined = np.ascontiguousarray(np.moveaxis(planes, -2, -1)).view(block.dtype.newbyteorder(">"))
        return joined.reshape(block.shape).astype(block.dtype)
    if order != ("<" if sys.byteorder == "little" else ">"):
        block.byteswap(inplace=True)
    if page.predictor == 2 and block.dtype.kind == "u":
        np.cumsum(block, axis=-2, dtype=block.dtype, out=block)
    elif page.predictor != 1:
        raise Damaged(f"differences of neighbouring pixels stored in a way (number {page.predictor}) not known here")
    return block
