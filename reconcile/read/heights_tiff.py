"""Heights in a TIFF file: its header held against the file first, then decoded."""

from __future__ import annotations

import logging
import warnings
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from reconcile.campaign.refusal import Place, Refusal
from reconcile.read.tiff import Damaged, Page, check_strips, pages

MOST_POINTS = 64 * 10**6
_FEWEST_BITS = 16  # 8-bit heights are a picture of a map
_PALETTE = 3
_FLOATING = 3
_UNSIGNED = 1
_GDAL_NODATA = (
    42113  # the mark of a missing point, in the tag of the library that defined it; several instruments write it
)
# What the libraries raise on files that they cannot make sense of.
_TROUBLE = (
    ValueError,
    TypeError,
    KeyError,
    IndexError,
    OSError,
    EOFError,
    OverflowError,
    AttributeError,
    RuntimeError,
    SyntaxError,
)


def read_tiff_heights(path: Path, name: str) -> tuple[NDArray[np.float64], tuple[str, ...], float | None]:
    """Return the numbers of a TIFF of heights, what a person should know, and its declared mark of a missing point.

    Parameters
    ----------
    path : the file
    name : its address in messages

    Raises
    ------
    Refusal
        It cannot be opened or decoded, holds more than one map or channel, or more than 64 million points.
    """
    page = _checked_page(path, name)
    told: tuple[str, ...] = ()
    if page.sample_format[0] != _FLOATING:
        told = (f"whole numbers of {page.bits[0]} bits taken as heights",)
    try:
        heights, no_data = _whole(path, page) if page.compression == 1 else (_unpacked(path), None)
    except _TROUBLE as error:
        raise _unreadable(name, str(error)) from None
    if heights.shape != (page.rows, page.columns):
        raise _no_map(name, f"an array of shape {heights.shape}")
    return heights, told, no_data


def _checked_page(path: Path, name: str) -> Page:
    """Return the one page of heights, after everything that its header declares was held against the file."""
    try:
        with path.open("rb") as file:
            size = path.stat().st_size
            begin = file.read(4)
            if not begin:
                raise Refusal(
                    Place(name), found="an empty file", expected="a TIFF of heights", remedy="Export the map again."
                )
            if begin not in {b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"}:
                raise Refusal(
                    Place(name),
                    found="a file that is no TIFF",
                    expected="a TIFF of heights, as its ending says",
                    remedy="Export the map again, or give the file the ending that it should have.",
                )
            full = [page for page in pages(file, size)[1] if not page.reduced]  # small previews are no maps
    except OSError as error:
        raise Refusal(
            Place(name),
            found=f"a file that cannot be opened ({error.strerror})",
            expected="a readable file",
            remedy="Check it.",
        ) from None
    except Damaged as damage:
        raise _unreadable(name, str(damage)) from None
    if not full:
        raise _unreadable(name, "no page but previews")
    if len(full) > 1 or full[0].declared_frames > 1:
        raise _no_map(name, f"{max(len(full), full[0].declared_frames)} pages")
    _check_declared(full[0], name)
    check_strips(full[0], size, name)
    return full[0]


def _check_declared(page: Page, name: str) -> None:
    """Refuse a page that is too large, or holds anything but one number a point."""
    if page.rows * page.columns > MOST_POINTS:
        raise Refusal(
            Place(name),
            found=f"a header that declares {page.rows} rows of {page.columns} points",
            expected=f"at most {MOST_POINTS // 10**6} million points",
            remedy="Cut the map to the crater and its surround.",
        )
    if page.samples != 1 or page.photometric == _PALETTE:
        raise _no_map(name, "colours")
    bits, floating = page.bits[0], page.sample_format[0] == _FLOATING
    if page.sample_format[0] not in {1, 2, 3} or bits not in {8, 16, 32, 64} or (floating and bits < 32):
        raise _no_map(name, f"points of {bits} bits in a form that is neither whole nor floating numbers")
    if bits < _FEWEST_BITS:
        raise _no_map(name, f"whole numbers of {bits} bits: a picture of a map")
    # Compressed points go through a library that knows no others; it does not tell 32-bit whole numbers of either sign.
    if page.compression != 1 and not ((floating and bits == 32) or (bits == 16 and page.sample_format[0] == _UNSIGNED)):
        raise Refusal(
            Place(name),
            found=f"compressed points of {bits} bits",
            expected="32-bit float heights",
            remedy="Export the map as 32-bit float, or without compression.",
        )


def _whole(path: Path, page: Page) -> tuple[NDArray[np.float64], float | None]:
    import tifffile

    log = logging.getLogger("tifffile")  # it logs what it also raises
    level = log.level
    log.setLevel(logging.CRITICAL + 1)
    try:
        with tifffile.TiffFile(path) as file:
            found = file.pages[page.number].aspage()
            tag = found.tags.get(_GDAL_NODATA)
            return found.asarray().astype(np.float64), None if tag is None else _number(str(tag.value))
    finally:
        log.setLevel(level)


def _unpacked(path: Path) -> NDArray[np.float64]:
    """Decode compressed heights with a library that stops where the declared size is reached."""
    from PIL import Image

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", Image.DecompressionBombWarning)  # the size was checked
        with Image.open(path) as picture:
            return np.asarray(picture, dtype=np.float64)


def _number(text: str) -> float | None:
    try:
        return float(text.strip("\0 "))
    except ValueError:
        return None


def _unreadable(name: str, why: str) -> Refusal:
    reason = why.splitlines()[0][:120] if why.strip() else "no reason given"
    return Refusal(
        Place(name),
        found=f"a TIFF that cannot be read ({reason})",
        expected="a whole TIFF of heights",
        remedy="The file may have been cut short: export the map again.",
    )


def _no_map(name: str, found: str) -> Refusal:
    return Refusal(
        Place(name),
        found=found,
        expected="one height a point: a TIFF of one page and one channel",
        remedy="Export the heights as 32-bit float, without colours.",
    )
