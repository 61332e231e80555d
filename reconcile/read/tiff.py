"""The pages of a TIFF file as its own directories declare them, before any of them is decoded.

The layout is that of TIFF 6.0 (Adobe, 1992), and its 64-bit variant with the version number 43.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass
from typing import IO

from reconcile.campaign.refusal import Refusal

MOST_PAGES = 100_000
MOST_ENTRIES = 4_096  # of one directory
MOST_VALUES = 4_000_000  # of one tag: the strips of a large frame, one line each, are far fewer
_SIZES = {1: 1, 2: 1, 3: 2, 4: 4, 5: 8, 6: 1, 7: 1, 8: 2, 9: 4, 10: 8, 11: 4, 12: 8, 13: 4, 16: 8, 17: 8, 18: 8}
_CODES = {1: "B", 3: "H", 4: "I", 13: "I", 16: "Q", 18: "Q"}  # the unsigned whole numbers, which are all that is needed
_WANTED = {254, 256, 257, 258, 259, 262, 266, 273, 277, 278, 279, 284, 317, 322, 323, 324, 325, 338, 339}
_DESCRIPTION = 270


class Damaged(Exception):
    """A file that breaks off or contradicts itself: what was found."""


@dataclass(frozen=True, slots=True)
class Page:
    """One directory of a TIFF file."""

    number: int  # from 0, among all directories of the file
    columns: int
    rows: int
    bits: tuple[int, ...]  # one for each sample
    sample_format: tuple[int, ...]  # 1 unsigned, 2 signed, 3 floating point
    compression: int  # 1: none
    photometric: int  # 0 white is zero, 1 black is zero, 2 red-green-blue, 3 palette
    separate: bool  # one plane after the other
    predictor: int
    fill_order: int
    extra_samples: int
    offsets: tuple[int, ...]  # of the strips, or of the tiles
    counts: tuple[int, ...]  # their bytes
    tile: tuple[int, int] | None  # columns and rows; None: strips
    strip_rows: int
    reduced: bool  # a thumbnail or a mask beside the picture
    declared_frames: int  # frames that lie behind one directory, as the description says; else 1

    @property
    def samples(self) -> int:
        """Channels of a pixel."""
        return len(self.bits)

    @property
    def decoded_bytes(self) -> int:
        """Bytes of the whole page, unpacked."""
        return math.ceil(self.columns * sum(self.bits) / 8) * self.rows


def pages(stream: IO[bytes], size: int) -> tuple[str, list[Page]]:
    """Return the byte order, "<" or ">", and every page.

    Parameters
    ----------
    stream : the open file
    size : its length [bytes]

    Raises
    ------
    Damaged
        A directory lies outside the file, repeats, or lacks what a picture needs.
    """
    head = _take(stream, 0, 16 if size >= 16 else 8, size)
    order = "<" if head[:2] == b"II" else ">"
    big = struct.unpack(order + "H", head[2:4])[0] == 43
    if big and len(head) < 16:
        raise Damaged("a header that breaks off")
    offset = struct.unpack(order + ("Q" if big else "I"), head[8:16] if big else head[4:8])[0]
    found: list[Page] = []
    seen: set[int] = set()
    while offset:
        if offset in seen:
            raise Damaged("a chain of pages that runs in a circle")
        if len(found) == MOST_PAGES:
            raise Damaged(f"more than {MOST_PAGES} pages")
        seen.add(offset)
        tags, offset = _directory(stream, offset, size, order, big)
        found.append(_page(len(found), tags))
    if not found:
        raise Damaged("no page")
    return order, found


def _take(stream: IO[bytes], offset: int, length: int, size: int) -> bytes:
    if offset + length > size:
        raise Damaged(f"a file of {size} bytes that ought to hold at least {offset + length}")
    stream.seek(offset)
    content = stream.read(length)
    if len(content) != length:
        raise Damaged("a file that breaks off")
    return content


def _directory(
    stream: IO[bytes], offset: int, size: int, order: str, big: bool
) -> tuple[dict[int, tuple[int, ...] | bytes], int]:
    """Return the wanted tags of one directory, and where the next one lies."""
    width, code = (8, "Q") if big else (2, "H")
    number = struct.unpack(order + code, _take(stream, offset, width, size))[0]
    if not 0 < number <= MOST_ENTRIES:
        raise Damaged(f"a page directory of {number} entries")
    entry, field = (20, 8) if big else (12, 4)
    block = _take(stream, offset + width, number * entry + field, size)
    tags: dict[int, tuple[int, ...] | bytes] = {}
    for start in range(0, number * entry, entry):
        tag, kind = struct.unpack(order + "HH", block[start : start + 4])
        if tag not in _WANTED and tag != _DESCRIPTION:
            continue
        count = struct.unpack(order + ("Q" if big else "I"), block[start + 4 : start + 4 + field])[0]
        if count > MOST_VALUES or kind not in _SIZES:
            raise Damaged(f"a tag {tag} of {count} values")
        length = count * _SIZES[kind]
        raw = block[start + 4 + field : start + 4 + 2 * field]
        if length > field:
            raw = _take(stream, struct.unpack(order + ("Q" if big else "I"), raw)[0], length, size)
        if tag == _DESCRIPTION:
            tags[tag] = raw[: min(length, 4096)]
        elif kind in _CODES:
            tags[tag] = struct.unpack(f"{order}{count}{_CODES[kind]}", raw[:length])
        else:
            raise Damaged(f"a tag {tag} that holds no whole numbers")
    return tags, struct.unpack(order + ("Q" if big else "I"), block[number * entry :])[0]


def _page(number: int, tags: dict[int, tuple[int, ...] | bytes]) -> Page:
    def values(tag: int, otherwise: tuple[int, ...] = ()) -> tuple[int, ...]:
        stored = tags.get(tag)
        return stored if isinstance(stored, tuple) and stored else otherwise

    columns, rows = values(256, (0,))[0], values(257, (0,))[0]
    samples = values(277, (1,))[0]
    if not columns or not rows or not 0 < samples <= 16:
        raise Damaged(f"a page of {columns} x {rows} pixels and {samples} channels")
    bits, kinds = values(258, (1,)), values(339, (1,))
    bits, kinds = (bits * samples)[:samples], (kinds * samples)[:samples]
    tiled = 322 in tags and 323 in tags
    offsets, counts = values(324 if tiled else 273), values(325 if tiled else 279)
    if not offsets or (counts and len(counts) != len(offsets)):
        raise Damaged(f"a page of {len(offsets)} strips and {len(counts)} strip lengths")
    description = tags.get(_DESCRIPTION, b"")
    subfile = values(254, (0,))[0]
    return Page(
        number=number,
        columns=columns,
        rows=rows,
        bits=bits,
        sample_format=kinds,
        compression=values(259, (1,))[0],
        photometric=values(262, (1,))[0],
        separate=values(284, (1,))[0] == 2 and samples > 1,
        predictor=values(317, (1,))[0],
        fill_order=values(266, (1,))[0],
        extra_samples=len(values(338)),
        offsets=offsets,
        counts=counts,
        tile=(values(322, (0,))[0], values(323, (0,))[0]) if tiled else None,
        strip_rows=min(values(278, (rows,))[0], rows) or rows,
        reduced=bool(subfile & 0b101),
        declared_frames=_behind(description if isinstance(description, bytes) else b""),
    )


def _behind(description: bytes) -> int:
    """Return how many frames a common acquisition program says to lie behind its first directory."""
    if not description.startswith(b"ImageJ="):
        return 1
    for line in description.splitlines():
        key, _, value = line.partition(b"=")
        if key == b"images" and value.strip().isdigit():
            return int(value)
    return 1


def packed_bytes(page: Page) -> list[int]:
    """Return the bytes that each strip or tile of an uncompressed page needs, in the file's order."""
    planes = page.samples if page.separate else 1
    width = page.bits[0] // 8 * (1 if page.separate else page.samples)
    if page.tile is not None:
        across, down = math.ceil(page.columns / page.tile[0]), math.ceil(page.rows / page.tile[1])
        return [page.tile[0] * page.tile[1] * width] * (across * down * planes)
    whole, rest = divmod(page.rows, page.strip_rows)
    strips = [page.strip_rows * page.columns * width] * whole + ([rest * page.columns * width] if rest else [])
    return strips * planes


def check_strips(page: Page, size: int, place: str) -> None:
    """Hold the declared size of a page against the bytes that are really there.

    Raises
    ------
    Refusal
        Strips are missing, reach past the end of the file, or hold far more or far less than the page declares.
    """

    def refuse(found: str) -> Refusal:
        return Refusal(
            place,
            found=found,
            expected=f"the pixels of {page.columns} x {page.rows}, as the page declares",
            remedy="The file is damaged or was cut short: copy or export it again.",
        )

    if page.tile is not None and (0 in page.tile or math.prod(page.tile) > 64 * 1024 * 1024):
        raise refuse(f"tiles of {page.tile[0]} x {page.tile[1]} pixels")
    needed = packed_bytes(page)
    counts = page.counts or tuple(needed)
    if len(page.offsets) != len(needed) or len(counts) != len(needed):
        raise refuse(f"{len(page.offsets)} strips or tiles in place of {len(needed)}")
    missing = max(offset + count for offset, count in zip(page.offsets, counts, strict=True)) - size
    if missing > 0:
        raise refuse(f"a file that ends {missing} bytes too early")
    if 0 in counts:
        raise refuse("an empty strip")
    if page.compression == 1 and any(count < need for count, need in zip(counts, needed, strict=True)):
        raise refuse(f"{sum(counts)} bytes of pixels in place of {sum(needed)}")
    if sum(counts) > sum(needed) + 64 * 1024:
        raise refuse(f"{sum(counts)} bytes of pixels where {sum(needed)} would do")
