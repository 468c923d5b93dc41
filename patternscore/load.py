"""Reads frames from picture files: PNG, TIFF, BMP, JPEG, GIF, WebP; 8 and 16 bit; grey and colour."""

from __future__ import annotations

import hashlib
import io
import os
import re
import stat
import warnings
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UnscorableFrame, UsageError
from patternscore.frame import Frame, frame_from_codes
from patternscore.standard import KNOWN_SIZES, Levels, Standard, standard_named

Array = npt.NDArray[Any]
SUFFIXES = (".png", ".tif", ".tiff", ".bmp", ".jpg", ".jpeg", ".gif", ".webp")
LARGEST_FILE = 512 * 1024 * 1024  # bytes
LARGEST_PICTURE = 64_000_000  # samples: far beyond any frame, small enough to decode safely
MOST_PAGES = 600
SMALLEST = 64  # samples and lines
LUMA_WEIGHTS = (0.299, 0.587, 0.114)  # ITU-R BT.601: luma from R, G, B
_TIFF_MAGIC = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")


def load_frame(
    path: Path | str,
    *,
    standard: str | None = None,
    sample_rate: float | None = None,
    levels: Levels = "video",
) -> Frame:
    """Read the first picture of a file as a frame.

    Parameters
    ----------
    path : Path
    standard : {"525", "625"}, optional
        Needed where the size does not tell.
    sample_rate : float, optional
        Sample clock in MHz; needed where the size does not tell.
    levels : {"video", "full"}
        How codes stand for levels: 16 to 235, or the whole range.

    Raises
    ------
    UnscorableFrame
        When the file holds no readable picture; the message says what to do.
    UsageError
        When the picture's size needs a standard and a clock.
    """
    return load_frames(path, standard=standard, sample_rate=sample_rate, levels=levels, most=1)[0]


def load_frames(
    path: Path | str,
    *,
    standard: str | None = None,
    sample_rate: float | None = None,
    levels: Levels = "video",
    most: int = MOST_PAGES,
) -> list[Frame]:
    """Read all pictures of a file (pages, or pictures of an animation) as frames; see ``load_frame``."""
    path = Path(path)
    data = _read(path)
    digest = hashlib.sha256(data).hexdigest()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            pictures = _decode(data, path.name, most)
    except UnscorableFrame:
        raise
    except Exception as error:  # decoders raise anything at all on broken data; none of it may reach a user
        reason = " ".join(str(error).split())[:80] or type(error).__name__
        raise UnscorableFrame(f"{path.name}: broken or cut short ({reason}); grab it again") from None
    frames = []
    for number, picture in enumerate(pictures):
        name = path.name if len(pictures) == 1 else f"{path.name} page {number + 1}"
        luma, notes = _luma(picture, name)
        frame = _frame(luma, name, standard, sample_rate, levels, digest)
        frames.append(replace(frame, notes=(*notes, *_range_notes(luma, levels))))
    return frames


def _read(path: Path) -> bytes:
    """Bytes of a regular file of a sensible size."""
    try:
        status = os.stat(path)
        if stat.S_ISDIR(status.st_mode):
            raise UsageError(f"{path}: is a folder; score its files, or use compare {path}")
        if not stat.S_ISREG(status.st_mode):
            raise UnscorableFrame(f"{path}: is no regular file; name a picture file")
        if status.st_size == 0:
            raise UnscorableFrame(f"{path.name}: is empty; grab it again")
        if status.st_size > LARGEST_FILE:
            raise UnscorableFrame(
                f"{path.name}: {status.st_size // 2**20} MiB is too large for a frame; save it as PNG"
            )
        return path.read_bytes()
    except FileNotFoundError:
        raise UnscorableFrame(f"{path}: no such file; check the name") from None
    except OSError as error:
        raise UnscorableFrame(f"{path}: cannot be read ({error.strerror}); check its permissions") from None
    except ValueError:
        raise UnscorableFrame(f"{path!s}: is no file name; check it") from None


def _decode(data: bytes, name: str, most: int) -> list[Array]:
    if data[:4] in _TIFF_MAGIC:
        return _decode_tiff(data, name, most)
    from PIL import Image, UnidentifiedImageError

    try:
        picture = Image.open(io.BytesIO(data), formats=["PNG", "BMP", "JPEG", "GIF", "WEBP"])
    except UnidentifiedImageError:
        raise UnscorableFrame(f"{name}: is no picture; give a PNG, TIFF, BMP or JPEG file") from None
    with picture:
        _check_size(*picture.size, name)
        if picture.format == "PNG" and data[24:25] == b"\x10":
            picture.load()  # raises where data are missing, which the next decoder would paper over
            return [_decode_deep(data)]
        pages = min(getattr(picture, "n_frames", 1), most)
        found = []
        for page in range(pages):
            picture.seek(page)
            found.append(_plain(picture))
        return found


def _plain(picture: Any) -> Array:
    """Pixels of a picture of 8 bits or less, palettes and the like resolved."""
    if picture.mode in ("L", "RGB", "RGBA", "I;16", "I;16B"):
        return np.array(picture)
    if picture.mode == "LA":
        return np.array(picture)
    has_alpha = picture.mode in ("PA", "La", "RGBa") or "transparency" in picture.info
    if picture.mode in ("1", "L"):
        return np.array(picture.convert("L"))
    return np.array(picture.convert("RGBA" if has_alpha else "RGB"))


def _decode_deep(data: bytes) -> Array:
    """16-bit PNG, grey or colour, with all its bits."""
    import cv2

    found = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if found is None:
        raise ValueError("16-bit PNG could not be decoded")
    pixels: Array = np.asarray(found)
    if pixels.ndim == 3 and pixels.shape[2] in (3, 4):
        order = [2, 1, 0, 3][: pixels.shape[2]]
        pixels = pixels[..., order]
    return pixels


def _decode_tiff(data: bytes, name: str, most: int) -> list[Array]:
    import tifffile

    found = []
    with tifffile.TiffFile(io.BytesIO(data)) as file:
        for number, page in enumerate(file.pages):
            if number >= most:
                break
            rows, samples = page.shape[:2] if page.shape[-1] <= 4 or len(page.shape) == 2 else page.shape[-2:]
            _check_size(int(samples), int(rows), name)
            found.append(_tiff_page(page, data, number))
    if not found:
        raise UnscorableFrame(f"{name}: holds no picture; grab it again")
    return found


def _tiff_page(page: Any, data: bytes, number: int) -> Array:
    try:
        pixels: Array = np.asarray(page.asarray())
    except ValueError as error:
        if "imagecodecs" not in str(error):
            raise
        from PIL import Image  # knows the compressions that need a codec of their own

        with Image.open(io.BytesIO(data)) as picture:
            picture.seek(number)
            return _plain(picture)
    if pixels.ndim == 3 and pixels.shape[0] in (3, 4) and pixels.shape[2] > 4:
        pixels = np.moveaxis(pixels, 0, -1)  # planes one after another
    if getattr(page, "photometric", None) is not None and int(page.photometric) == 0:
        pixels = np.iinfo(pixels.dtype).max - pixels if pixels.dtype.kind == "u" else ~pixels
    return pixels.astype(np.uint8) * 255 if pixels.dtype == bool else pixels


def _check_size(width: int, height: int, name: str) -> None:
    if width < SMALLEST or height < SMALLEST:
        raise UnscorableFrame(f"{name}: {width} x {height} is too small to hold a pattern; grab a whole frame")
    if width * height > LARGEST_PICTURE:
        raise UnscorableFrame(
            f"{name}: {width} x {height} is too large for a video frame; save it at the grabber's own size"
        )


def _luma(pixels: Array, name: str) -> tuple[Array, list[str]]:
    """Codes as float32 on a scale of 8 bits, and what was noticed."""
    notes: list[str] = []
    if pixels.dtype == np.uint8:
        scale = 1.0
    elif pixels.dtype == np.uint16:
        scale = 1.0 / 256.0
    elif pixels.dtype.kind == "f":
        if not np.isfinite(pixels).all():
            raise UnscorableFrame(f"{name}: holds values that are no numbers; export it as 16-bit integers")
        raise UnscorableFrame(f"{name}: holds fractions instead of codes; export it as 8- or 16-bit integers")
    else:
        raise UnscorableFrame(f"{name}: {pixels.dtype} samples are not supported; export it as 8 or 16 bit")
    if pixels.ndim == 2:
        return pixels.astype(np.float32) * np.float32(scale), notes
    channels = pixels.shape[2]
    if channels in (2, 4) and int(pixels[..., -1].min()) < np.iinfo(pixels.dtype).max:
        notes.append("The file has a transparency channel; it was ignored.")
    if channels <= 2:
        return pixels[..., 0].astype(np.float32) * np.float32(scale), notes
    if channels > 4:
        raise UnscorableFrame(f"{name}: has {channels} channels; export it as grey or RGB")
    weights = (np.array(LUMA_WEIGHTS) * scale).astype(np.float32)
    return np.asarray(pixels[..., :3].astype(np.float32) @ weights), notes


def _frame(
    codes: Array, name: str, standard: str | None, sample_rate: float | None, levels: Levels, digest: str
) -> Frame:
    rows, samples = codes.shape
    found, clock = standard_of(samples, rows, name, standard, sample_rate)
    return frame_from_codes(codes, found, clock, levels=levels, name=name, sha256=digest)


def standard_of(
    samples: int, rows: int, name: str, standard: str | None, sample_rate: float | None
) -> tuple[Standard, float]:
    """Standard and sample clock of a frame size, or as told."""
    known = KNOWN_SIZES.get((samples, rows))
    if sample_rate is not None and not 1.0 <= sample_rate <= 1000.0:
        raise UsageError(f"{sample_rate:g} MHz is no sample clock of a frame; give one from 1 to 1000")
    if standard is not None and sample_rate is not None:
        return standard_named(standard), sample_rate
    if known is None:
        raise UsageError(
            f"{name}: {samples} x {rows} is no size of a known standard; name it with --standard 525 or 625 "
            "and the sample clock with --sample-rate"
        )
    return standard_named(standard or known[0]), sample_rate or known[1]


def _range_notes(codes: Array, levels: Levels) -> list[str]:
    """Say where codes do not fit the range they are said to have."""
    if levels == "full":
        return []
    low, high = float((codes < 1.0).mean()), float((codes > 254.0).mean())
    if low > 0.002 and high > 0.002:
        return ["Codes reach 0 and 255: if the file is full-range, say --levels full."]
    return []


def list_frames(folder: Path | str) -> list[Path]:
    """Picture files of a folder (or of its ``frames`` folder), 2 before 10.

    Raises
    ------
    UsageError
        When there is no such folder, or no picture in it.
    """
    folder = Path(folder)
    if not folder.is_dir():
        raise UsageError(f"{folder}: is no folder; name the folder that holds the frames")
    for place in (folder, folder / "frames"):
        if place.is_dir():
            try:
                found = [
                    file
                    for file in place.iterdir()
                    if file.suffix.lower() in SUFFIXES and not file.name.startswith(".")
                ]
            except OSError as error:
                raise UsageError(f"{place}: cannot be read ({error.strerror}); check its permissions") from None
            if found:
                return sorted(found, key=lambda file: natural(file.name))
    raise UsageError(f"{folder}: holds no frames; put PNG, TIFF, BMP or JPEG files there")


def natural(name: str) -> list[tuple[int, int, str]]:
    """Sorting key that puts 2 before 10."""
    parts = re.split(r"(\d+)", name.lower())
    return [(0, int(part), "") if part.isdigit() else (1, 0, part) for part in parts]
