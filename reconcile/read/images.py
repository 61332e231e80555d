"""Image files → frames of numbers: PNG and TIFF, examined before anything is unpacked.

What a file declares is held against what it holds, so that a damaged or hostile one is refused without being decoded.
"""

from __future__ import annotations

import struct
import warnings
import zlib
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.refusal import Refusal
from reconcile.read.tiff import Damaged, Page, check_strips, pages
from reconcile.read.tiff_pixels import DEFLATE, stored_numbers

Frame = NDArray[np.float32]

MOST_PIXELS = 64 * 1024 * 1024  # of one frame
MOST_FRAME_BYTES = 512 * 1024**2  # of one frame, unpacked, with all its channels
MOST_BYTES = 4 * 1024**3  # of one stack, unpacked
_PNG = b"\x89PNG\r\n\x1a\n"
_TIFF = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
_OTHERS = {
    b"\xff\xd8\xff": "a JPEG picture, whose compression moves edges",
    b"BM": "a BMP picture",
    b"GIF8": "a GIF picture",
    b"%PDF": "a PDF document",
    b"PK\x03\x04": "a zip archive or an office document",
    b"\x89HDF": "an HDF5 file",
    b"\x1f\x8b": "a gzip archive",
}
_COMPRESSIONS = {1: "none", 5: "LZW", 8: "deflate", 32773: "PackBits", 32946: "deflate"}
_EXPORT = "Export it from the camera's program as PNG or TIFF, grey, 8 or 16 bits."
# What the decoder raises on damaged content; it has no common ancestor, and a frame must not stop the others.
_FAULTS = (
    OSError,
    SyntaxError,
    ValueError,
    EOFError,
    KeyError,
    IndexError,
    TypeError,
    ArithmeticError,
    MemoryError,
    RuntimeError,
    struct.error,
    zlib.error,
)


@dataclass(frozen=True, slots=True)
class Frames:
    """The frames of one image file, in its own order.

    Items are float32 arrays (rows, columns): whole numbers divided by the largest one their bits can hold, floating
    point as stored. The first frame is decoded on reading, each further one when it is asked for, so that a long
    stack needs no more memory than two frames; asking raises Refusal where that frame is damaged.
    """

    path: Path
    name: str  # address in messages
    bits: int  # of one pixel
    saturated: float | None  # level at which a pixel holds no more; None: floating point, unknown
    notes: tuple[str, ...]
    _first: Frame = field(repr=False)
    _pages: tuple[Page, ...] = field(repr=False, default=())  # of a TIFF file
    _order: str = field(repr=False, default="<")

    def __len__(self) -> int:
        """Return the number of frames."""
        return max(len(self._pages), 1)

    def __getitem__(self, number: int) -> Frame:
        """Return one frame, counted from 0; raises IndexError, and Refusal where it is damaged."""
        if not -len(self) <= number < len(self):
            raise IndexError(number)
        number %= len(self)
        if number == 0:
            return self._first
        return _tiff_frame(self.path, self._pages[number], self._order, self.address(number))[0]

    def __iter__(self) -> Iterator[Frame]:
        """Yield every frame; raises Refusal at a damaged one."""
        return (self[number] for number in range(len(self)))

    def address(self, number: int) -> str:
        """Return the address of one frame, counted from 0: ``stack.tif!page 3`` is the third."""
        return _address(self.name, number, len(self))


def _address(name: str, number: int, of: int) -> str:
    return f"{name}!page {number + 1}" if of > 1 else name


def read_frames(path: Path, name: str) -> Frames:
    """Read an image file.

    Parameters
    ----------
    path : the file
    name : its address in messages

    Returns
    -------
    Frames
        One frame of a PNG file, one or more of a TIFF file.

    Raises
    ------
    Refusal
        It is neither, is damaged, is larger than a frame or a stack can be, holds colours or a packing that are no
        grey levels, or its first frame cannot be decoded.
    """
    try:
        size = path.stat().st_size
        with path.open("rb") as stream:
            head = stream.read(16)
            if head.startswith(_PNG):
                declared = _png_header(stream, size, name)
            elif head.startswith(_TIFF):
                order, found = pages(stream, size)
            else:
                raise _no_image(head, size, name)
    except Damaged as damage:
        raise _damaged(name, str(damage)) from None
    except OSError as error:
        raise Refusal(
            name,
            found=f"a file that cannot be read ({error.strerror or error})",
            expected="a readable file",
            remedy="Check the file.",
        ) from None
    if head.startswith(_PNG):
        return _png(path, name, *declared)
    return _tiff(path, name, size, order, found)


def _no_image(head: bytes, size: int, name: str) -> Refusal:
    if size == 0:
        return Refusal(name, found="an empty file", expected="a picture", remedy="Copy or export it again.")
    what = next((text for start, text in _OTHERS.items() if head.startswith(start)), None)
    if what is None:
        text = all(byte in b"\t\n\r\f" or 32 <= byte < 127 or byte >= 128 for byte in head) and b"\0" not in head
        what = "a text file" if text else "a file that does not begin as a picture does"
    return Refusal(name, found=what, expected="a PNG or TIFF picture", remedy=_EXPORT)


def _damaged(place: str, found: str) -> Refusal:
    return Refusal(
        place,
        found=found,
        expected="a whole picture",
        remedy="The file is damaged or was cut short: copy or export it again.",
    )


def _check_size(columns: int, rows: int, place: str) -> None:
    if columns * rows > MOST_PIXELS:
        raise Refusal(
            place,
            found=f"a frame of {columns} x {rows} pixels",
            expected=f"at most {MOST_PIXELS // 1024**2} Mi pixels",
            remedy="Cut the picture down to the site and its surroundings.",
        )


# ---- PNG: ISO/IEC 15948 ----


def _png_header(stream: IO[bytes], size: int, name: str) -> tuple[int, int, int, int, tuple[str, ...]]:
    """Return columns, rows, bits, colour type and notes, with every chunk's length and checksum verified."""
    stream.seek(len(_PNG))
    position, header, pixels, ended = len(_PNG), b"", 0, False
    notes: tuple[str, ...] = ()
    while not ended:
        front = stream.read(8)
        if len(front) < 8:
            raise Damaged(f"a picture that breaks off after {size} bytes")
        length, kind = struct.unpack(">I4s", front)
        if position + 12 + length > size:
            raise Damaged(f"a picture that breaks off {position + 12 + length - size} bytes or more too early")
        checksum, content = zlib.crc32(kind), b""
        for start in range(0, length, 1 << 20):
            content = stream.read(min(1 << 20, length - start))
            checksum = zlib.crc32(content, checksum)
        if struct.unpack(">I", stream.read(4))[0] != checksum:
            raise Damaged(f"a picture whose part at byte {position} does not agree with its checksum")
        if kind == b"IHDR" and length == 13 and not header:
            header = content
            columns, rows, bits, colour = struct.unpack(">IIBB", header[:10])
            _check_size(columns, rows, name)
        elif not header:
            raise Damaged("a picture without a header")
        pixels += length if kind == b"IDAT" else 0
        if kind == b"acTL":
            notes = ("an animated picture: only its first frame was read",)
        ended = kind == b"IEND"
        position += 12 + length
    if not columns or not rows or not pixels:
        raise Damaged("a picture without pixels")
    return columns, rows, bits, colour, notes


def _png(path: Path, name: str, columns: int, rows: int, bits: int, colour: int, notes: tuple[str, ...]) -> Frames:
    if colour == 3:
        raise _no_grey(name, "a palette of colours")
    if bits not in (8, 16) or colour not in (0, 2, 4, 6):
        raise _no_grey(name, f"pixels of {bits} bits")
    frame, read_bits, lost = _decoded(path, 0, (columns, rows), bits, name)
    if not frame[-2:].any(axis=1).all():
        # Pillow leaves rows that the file does not hold at zero, without a word.
        needed = rows * columns * {0: 1, 2: 3, 4: 2, 6: 4}[colour] * bits // 8 + rows
        held = _unpacked_length(path, needed)
        if held < needed:
            raise _damaged(name, f"{held} bytes of pixels, unpacked, in place of {needed}")
    return Frames(path, name, read_bits, 1.0, (*notes, *lost), frame)


def _unpacked_length(path: Path, enough: int) -> int:
    """Return how many bytes the pixels of a sound PNG file unpack to, counted no further than `enough`.

    A picture stored in interlaced passes needs a few bytes more than a plain one, never fewer.
    """
    unpacker, held = zlib.decompressobj(), 0
    with path.open("rb") as stream:
        stream.seek(len(_PNG))
        while held < enough and not unpacker.eof:
            length, kind = struct.unpack(">I4s", stream.read(8))
            packed = stream.read(length)
            stream.seek(4, 1)
            while kind == b"IDAT" and packed and held < enough and not unpacker.eof:
                held += len(unpacker.decompress(packed, 1 << 20))
                packed = unpacker.unconsumed_tail
            if kind == b"IEND":
                break
    return held


def _no_grey(place: str, found: str) -> Refusal:
    return Refusal(place, found=found, expected="grey levels of 8 or 16 bits", remedy=_EXPORT)


# ---- TIFF ----


def _tiff(path: Path, name: str, size: int, order: str, found: list[Page]) -> Frames:
    kept = tuple(page for page in found if not page.reduced) or tuple(found)
    notes = ("thumbnails or masks beside the pictures were passed over",) if len(kept) < len(found) else ()
    for number, page in enumerate(kept):
        _check_size(page.columns, page.rows, _address(name, number, len(kept)))
    total = sum(page.decoded_bytes for page in kept)
    if total > MOST_BYTES:
        raise Refusal(
            name,
            found=f"a stack of {len(kept)} pages, {total / 1024**3:.1f} GiB unpacked",
            expected=f"at most {MOST_BYTES // 1024**3} GiB",
            remedy="Split the stack, or cut the frames down.",
        )
    if len(found) == 1 and found[0].declared_frames > 1:
        raise Refusal(
            name,
            found=f"{found[0].declared_frames} frames behind a single page directory",
            expected="a directory for each page",
            remedy="Save it as an ordinary multi-page TIFF, or in several files.",
        )
    frame, bits, lost = _tiff_frame(path, kept[0], order, _address(name, 0, len(kept)))
    saturated = None if kept[0].sample_format[0] == 3 else 1.0
    return Frames(path, name, bits, saturated, (*notes, *lost), frame, kept, order)


def _check_page(page: Page, order: str, place: str) -> None:
    """Refuse what is no picture in grey levels of 8 or 16 bits or floating point."""
    if page.photometric == 3:
        raise _no_grey(place, "a palette of colours")
    if page.photometric not in (0, 1, 2) or (page.photometric == 2) != (page.samples - page.extra_samples >= 3):
        raise _no_grey(place, f"pixels of {page.samples} channels that are neither grey nor red, green and blue")
    if page.compression not in _COMPRESSIONS:
        lossy = " (JPEG, which moves edges)" if page.compression in (6, 7, 34892) else ""
        raise Refusal(
            place,
            found=f"a compression of number {page.compression}{lossy}",
            expected="no compression, LZW, deflate or PackBits",
            remedy="Export it without compression.",
        )
    kinds = set(zip(page.sample_format, page.bits, strict=True))
    if len(kinds) != 1 or not kinds <= {(1, 8), (1, 16), (3, 16), (3, 32), (3, 64)}:
        found = {1: "", 2: "signed ", 3: "floating-point "}.get(page.sample_format[0], "undefined ")
        packed = ", packed" if page.bits[0] in (10, 12, 14) else ""
        raise _no_grey(place, f"{found}pixels of {'/'.join(map(str, page.bits))} bits{packed}")
    if page.fill_order != 1:
        raise _no_grey(place, "bits in reversed order")
    if page.photometric == 0 and page.sample_format[0] == 3:
        raise _no_grey(place, "floating-point pixels in which white is zero")
    if page.compression not in (1, *DEFLATE) and order == ">" and page.sample_format[0] == 3:
        # Pillow 13 returns such numbers with their bytes reversed.
        raise _no_grey(place, "floating-point pixels, most significant byte first, packed by LZW or PackBits")


def _tiff_frame(path: Path, page: Page, order: str, place: str) -> tuple[Frame, int, tuple[str, ...]]:
    """Decode one page; returns the frame, its bits, and what was lost."""
    _check_page(page, order, place)
    if page.decoded_bytes > MOST_FRAME_BYTES:
        raise _no_grey(place, f"a frame of {page.decoded_bytes / 1024**2:.0f} MiB unpacked")
    check_strips(page, path.stat().st_size, place)
    if page.compression != 1 and page.compression not in DEFLATE:
        return _decoded(path, page.number, (page.columns, page.rows), page.bits[0], place, page.photometric == 0)
    try:
        planes = stored_numbers(path, page, order)
    except Damaged as damage:
        raise _damaged(place, str(damage)) from None
    except OSError as error:
        raise _damaged(place, f"a file that cannot be read ({error.strerror or error})") from None
    grey = _one_channel(list(planes), page.extra_samples, place)
    return _scaled(grey, page.photometric == 0, place), page.bits[0], ()


# ---- both ----


def _decoded(
    path: Path, number: int, size: tuple[int, int], bits: int, place: str, white_is_zero: bool = False
) -> tuple[Frame, int, tuple[str, ...]]:
    """Decode through Pillow, which unpacks no more than a frame declares; as `_tiff_frame`."""
    from PIL import Image

    lost: tuple[str, ...] = ()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # about metadata that nobody here reads
            with Image.open(path, formats=("PNG", "TIFF")) as image:
                image.seek(number)
                if image.size != size:
                    raise OSError("its size is not the one it declares")
                # Pillow itself turns 8-bit pictures in which white is zero, and leaves the others as stored.
                turned = any("L;I" in str(tile[3]) for tile in image.tile)
                image.load()
                bands = len(image.getbands())
                planes = [np.asarray(image if bands == 1 else image.getchannel(band)) for band in range(bands)]
                alpha = int(image.mode in ("LA", "RGBA"))
    except _FAULTS as error:
        raise _damaged(place, f"pixels that cannot be unpacked ({error})") from None
    if planes[0].shape != size[::-1] or planes[0].dtype.kind not in "uf":
        raise _no_grey(place, f"pixels of the kind {planes[0].dtype}")
    if bits == 16 and planes[0].dtype.itemsize == 1:
        bits, lost = 8, ("16-bit colour channels: read with the upper 8 bits",)
    return _scaled(_one_channel(planes, alpha, place), white_is_zero and not turned, place), bits, lost


def _one_channel(planes: list[NDArray[Any]], extra: int, place: str) -> NDArray[Any]:
    """Return the grey levels of channels that are all equal, the last `extra` of them opacity."""
    colours, opacity = planes[: len(planes) - extra], planes[len(planes) - extra :]
    if any(not np.array_equal(colours[0], colour) for colour in colours[1:]):
        raise _no_grey(place, "a picture in colour: its channels differ")
    if any(layer.min() != layer.max() for layer in opacity):
        raise _no_grey(place, "a picture that is transparent in places")
    return colours[0]


def _scaled(stored: NDArray[Any], white_is_zero: bool, place: str) -> Frame:
    """Divide whole numbers by the largest one their bits hold; refuse what is no number."""
    if stored.dtype.kind == "f":
        with np.errstate(over="ignore"):  # what float32 cannot hold is refused with the rest
            frame = stored.astype(np.float32)
        bad = frame.size - int(np.count_nonzero(np.isfinite(frame)))
        if bad:
            raise Refusal(
                place,
                found=f"{bad} pixels that hold no number",
                expected="a number in every pixel",
                remedy="Export the frame as the camera took it, before any processing.",
            )
        return frame
    largest = np.iinfo(stored.dtype).max
    frame = stored.astype(np.float32)
    frame *= np.float32(1.0 / largest)
    if white_is_zero:
        np.subtract(1.0, frame, out=frame)
    return frame
