"""TIFF pages as arrays of codes: any byte order, strips or tiles, planes or pixels, 1 to 16 bits."""

from __future__ import annotations

import io
import zlib
from collections.abc import Iterator
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.decode import TURNED, Picture, check_size, deep_pixels, plain_pixels, silent_stderr
from patternscore.errors import UnscorableFrame

# Values of tags as the TIFF 6.0 specification numbers them.
_NONE, _PACKBITS, _DEFLATE = 1, 32773, (8, 32946)
_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE, _YCBCR = 0, 1, 2, 3, 6
_READABLE = (_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE)
_PAGE_TABLE = 10_000  # entries followed before a file is taken to be broken


def tiff_pictures(data: bytes, name: str, most: int) -> Iterator[Picture]:
    """Pages of a TIFF file, without thumbnails and masks, ``most`` at most.

    Raises
    ------
    UnscorableFrame
        When a page cannot be a frame.
    ValueError
        When there is no page, or its data are not there: the file is broken.
    """
    import tifffile

    with tifffile.TiffFile(io.BytesIO(data)) as file:
        given = 0
        for number, page in enumerate(file.pages):
            if given == most or number >= _PAGE_TABLE:
                return
            if not isinstance(page, tifffile.TiffPage):
                page = page.aspage()
            if page.is_reduced or page.is_mask:
                continue
            yield _picture(page, data, number, name)
            given += 1
        if not given:
            raise ValueError("no page is found")


def _picture(page: Any, data: bytes, number: int, name: str) -> Picture:
    width, height = int(page.imagewidth), int(page.imagelength)
    if not (width and height):
        raise ValueError("a page has no size")
    check_size(width, height, name)
    if page.dtype is None or page.dtype.kind not in "ub" or page.bitspersample > 16:
        raise UnscorableFrame(f"{name}: {_kind(page)}; export it as 8- or 16-bit integers")
    turned = int(page.tags.valueof(274, 1)) not in (0, 1)
    notes = (TURNED,) if turned else ()
    if int(page.compression) in (_NONE, _PACKBITS, *_DEFLATE):
        _check_data(page, data)
        return Picture(_own(page, name), notes)
    if turned:  # the libraries below would turn it
        raise _unsupported(page, name)
    return Picture(_by_other_means(page, data, number, name), notes)


def _kind(page: Any) -> str:
    """Say what samples a page has that cannot be codes."""
    if page.dtype is None or page.dtype.kind != "f":
        return f"has samples of type {page.dtype}"
    return "holds fractions instead of codes"


def _unsupported(page: Any, name: str) -> UnscorableFrame:
    return UnscorableFrame(f"{name}: {page.compression.name} compression is not read here; save it uncompressed")


def _check_data(page: Any, data: bytes) -> None:
    """Refuse pages whose data are missing, or would unpack to more than they should."""
    ends = [offset + count for offset, count in zip(page.dataoffsets, page.databytecounts, strict=True)]
    held = sum(page.databytecounts)
    if not ends or max(ends) > len(data) or 0 in page.databytecounts:
        raise ValueError("data are missing")
    whole = int(np.prod(page.shape)) * page.dtype.itemsize
    if int(page.compression) == _NONE and 8 * held < int(np.prod(page.shape)) * page.bitspersample:
        raise ValueError("data are missing")
    if int(page.compression) in _DEFLATE and held * 1032 > 4 * whole + 2**24:  # 1032: most that deflate can expand
        for offset, count in zip(page.dataoffsets, page.databytecounts, strict=True):
            unpacker = zlib.decompressobj()
            unpacker.decompress(data[offset : offset + count], 2 * whole + 2**20)
            if not unpacker.eof:
                raise ValueError("data unpack to more than the picture")


def _own(page: Any, name: str) -> npt.NDArray[Any]:
    photometric = int(page.photometric)
    if photometric not in _READABLE:
        raise UnscorableFrame(f"{name}: has {page.photometric.name} colours; save it as grey or RGB")
    pixels: npt.NDArray[Any] = np.asarray(page.asarray())
    if page.planarconfig == 2 and pixels.ndim == 3:
        pixels = np.moveaxis(pixels, 0, -1)
    if pixels.ndim > 3 or pixels.shape[:2] != (page.imagelength, page.imagewidth):
        raise UnscorableFrame(f"{name}: is a volume and no picture; save its frames as pages")
    if photometric == _PALETTE:
        return np.asarray(np.asarray(page.colormap, dtype=np.uint16).T[pixels])
    bits = int(page.bitspersample)
    if bits < 8:
        pixels = (pixels.astype(np.uint16) * 255 // (2**bits - 1)).astype(np.uint8)
    elif 8 < bits < 16:
        pixels = pixels << (16 - bits)
    return np.asarray(np.iinfo(pixels.dtype).max - pixels) if photometric == _WHITE_IS_ZERO else pixels


def _by_other_means(page: Any, data: bytes, number: int, name: str) -> npt.NDArray[Any]:
    """Decode compressions that need a codec of their own: 8 bits by Pillow, 16 by OpenCV, as each is right in."""
    if page.bitspersample <= 8:
        from PIL import Image

        with silent_stderr(), Image.open(io.BytesIO(data), formats=["TIFF"]) as picture:
            picture.seek(number)
            if picture.mode not in ("1", "L", "LA", "P", "RGB", "RGBA", "YCbCr"):
                raise _unsupported(page, name)
            return plain_pixels(picture)
    grey = int(page.photometric) in (_WHITE_IS_ZERO, _BLACK_IS_ZERO) and page.samplesperpixel == 1
    colour = int(page.photometric) == _RGB and page.samplesperpixel in (3, 4) and page.planarconfig == 1
    if page.bitspersample != 16 or number or not (grey or colour):
        raise _unsupported(page, name)
    pixels = deep_pixels(data)
    return 65535 - pixels if int(page.photometric) == _WHITE_IS_ZERO else pixels
