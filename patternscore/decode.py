"""From the bytes of a picture file to arrays of codes, whatever the format, with no word on stderr."""

from __future__ import annotations

import io
import logging
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UnscorableFrame

LARGEST_PICTURE = 64_000_000  # samples: far beyond any frame, small enough to decode safely
SMALLEST = 64  # samples and lines: no pattern shows in fewer
_ORIENTATION = 0x0112  # Exif and TIFF tag; 1 is upright
_PNG, _TIFF = b"\x89PNG\r\n\x1a\n", (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
_MAGIC = (_PNG, *_TIFF, b"\xff\xd8\xff", b"GIF8", b"BM", b"RIFF")
_FORMATS = ("PNG", "BMP", "JPEG", "GIF", "WEBP")
TURNED = "The file asks to be shown turned or mirrored; its lines were taken as they are stored."


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """One decoded picture.

    Attributes
    ----------
    pixels : (rows, samples) or (rows, samples, channels) unsigned integers
        Grey, grey and alpha, RGB, or RGB and alpha.
    notes : tuple of str
        What was noticed.
    """

    pixels: npt.NDArray[Any]
    notes: tuple[str, ...] = ()


def decode(data: bytes, name: str, most: int) -> Iterator[Picture]:
    """Pictures of a file one after another, ``most`` at most.

    Parameters
    ----------
    data : bytes
        The whole file; what it is told by its content, not by its name.
    name : str
        For messages.

    Raises
    ------
    UnscorableFrame
        When it is no picture, is broken, or is of a kind that holds no video frame.
    """
    pictures = _tiff(data, name, most) if data[:4] in _TIFF else _common(data, name, most)
    while True:
        try:
            with quiet():
                picture = next(pictures, None)
        except UnscorableFrame:
            raise
        except Exception as error:  # decoders raise anything at all on broken data; none of it may reach a user
            raise UnscorableFrame(f"{name}: is broken or cut short{_reason(error)}; grab or copy it again") from None
        if picture is None:
            return
        yield picture


@contextmanager
def quiet() -> Iterator[None]:
    """Keep warnings and log lines of the decoders off stderr."""
    ear = logging.NullHandler()
    loggers = [logging.getLogger(name) for name in ("tifffile", "PIL")]
    for logger in loggers:
        logger.addHandler(ear)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        for logger in loggers:
            logger.removeHandler(ear)


def _reason(error: Exception) -> str:
    """What the decoder said, where it says it to people."""
    said = " ".join(str(error).partition("(")[0].split())
    return f" ({said})" if isinstance(error, OSError) and 0 < len(said) <= 80 else ""


@contextmanager
def silent_stderr() -> Iterator[None]:
    """Keep what C libraries write to file descriptor 2 from getting there, for as short as can be."""
    try:
        kept = os.dup(2)
    except OSError:  # closed already: nothing gets there
        yield
        return
    nowhere = os.open(os.devnull, os.O_WRONLY)
    try:
        os.dup2(nowhere, 2)
        yield
    finally:
        os.dup2(kept, 2)
        os.close(nowhere)
        os.close(kept)


def check_size(width: int, height: int, name: str) -> None:
    """Refuse by the header what no frame can be, before anything is decoded.

    Raises
    ------
    UnscorableFrame
    """
    if width < SMALLEST or height < SMALLEST:
        raise UnscorableFrame(f"{name}: {width} x {height} is too small to hold a pattern; grab a whole frame")
    if width * height > LARGEST_PICTURE:
        raise UnscorableFrame(
            f"{name}: {width} x {height} is too large for a video frame; save it at the grabber's own size"
        )


def _tiff(data: bytes, name: str, most: int) -> Iterator[Picture]:
    from patternscore.tiff import tiff_pictures  # its library takes a third of a second to import

    return tiff_pictures(data, name, most)


def _common(data: bytes, name: str, most: int) -> Iterator[Picture]:
    with _opened(data, name) as picture:
        width, height = picture.size
        check_size(width, height, name)
        if picture.mode in ("CMYK", "LAB", "HSV", "YCCK"):
            raise UnscorableFrame(f"{name}: has {picture.mode} colours, made for printing; save it as grey or RGB")
        notes = (TURNED,) if picture.getexif().get(_ORIENTATION, 1) not in (0, 1) else ()
        pages = int(getattr(picture, "n_frames", 1))
        if data.startswith(_PNG) and data[24] == 16 and picture.mode != "I;16":
            if pages > 1:
                notes = (*notes, "Of the pictures of this animation only the first was read: they are of 16 bits.")
            picture.load()  # raises where data are missing, which the next decoder would paper over
            yield Picture(deep_pixels(data), notes)
            return
        if picture.format == "JPEG":
            picture.draft("L", picture.size)  # luma as stored: the same weights, and no trip through RGB
        for page in range(min(pages, most)):
            picture.seek(page)
            yield Picture(plain_pixels(picture), notes)


def _opened(data: bytes, name: str) -> Any:
    from PIL import Image, UnidentifiedImageError

    try:
        return Image.open(io.BytesIO(data), formats=_FORMATS)
    except Image.DecompressionBombError:
        raise UnscorableFrame(
            f"{name}: claims to be far too large for a video frame; save it at the grabber's own size"
        ) from None
    except UnidentifiedImageError:
        if data.startswith(_MAGIC):
            raise UnscorableFrame(f"{name}: is broken or cut short; grab or copy it again") from None
        raise UnscorableFrame(f"{name}: is no picture; give a PNG, TIFF, BMP or JPEG file") from None


def plain_pixels(picture: Any) -> npt.NDArray[Any]:
    """Pixels of an opened picture, palettes and single bits resolved to 8-bit codes.

    Parameters
    ----------
    picture : PIL.Image.Image

    Returns
    -------
    (rows, samples) or (rows, samples, channels) uint8 or uint16
    """
    veiled = "transparency" in picture.info
    if picture.mode in ("RGBA", "LA", "I;16") or (picture.mode in ("L", "RGB") and not veiled):
        return np.array(picture)
    if picture.mode in ("1", "L"):
        return np.array(picture.convert("LA" if veiled and picture.mode == "L" else "L"))
    veiled = veiled or picture.mode in ("PA", "La", "RGBa")
    return np.array(picture.convert("RGBA" if veiled else "RGB"))


def deep_pixels(data: bytes) -> npt.NDArray[Any]:
    """Pixels of a 16-bit file with all their bits, channels in the order of RGB.

    Raises
    ------
    ValueError
        When the file cannot be decoded.
    """
    import cv2

    with silent_stderr():
        found = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if found is None:
        raise ValueError("its data cannot be decoded")
    pixels: npt.NDArray[Any] = np.asarray(found)
    if pixels.ndim == 3 and pixels.shape[2] in (3, 4):
        pixels = pixels[..., [2, 1, 0, 3][: pixels.shape[2]]]
    return pixels
