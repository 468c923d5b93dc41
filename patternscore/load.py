"""Reads frames from picture files: PNG, TIFF, BMP, JPEG, GIF, WebP; 8 and 16 bit; grey and colour."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import get_args

from patternscore.decode import decode
from patternscore.errors import UnscorableFrame, UsageError
from patternscore.files import read_bytes, shown
from patternscore.frame import Frame, frame_from_codes
from patternscore.luma import luma_codes
from patternscore.standard import KNOWN_SIZES, Levels, Standard, standard_named

SUFFIXES = (".png", ".tif", ".tiff", ".bmp", ".jpg", ".jpeg", ".gif", ".webp")
LARGEST_FILE = 512 * 1024 * 1024  # bytes
MOST_PAGES = 600
MOST_SAMPLES = 256_000_000  # of all pages together: a GiB of levels


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
        How codes stand for levels: 16 to 235 (of 8 bits), or the whole range.

    Raises
    ------
    UnscorableFrame
        When the file holds no readable picture; the message says what to do.
    UsageError
        When the picture's size needs a standard and a clock.

    Notes
    -----
    Luma of colours is 0.299 R + 0.587 G + 0.114 B (ITU-R BT.601). Files made from video in RGB often have the
    whole range: the frame then carries a note, and ``levels="full"`` reads it.
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
    """Read all pictures of a file (pages, or pictures of an animation) as frames; see ``load_frame``.

    Parameters
    ----------
    most : int
        Pictures to read at most.
    """
    if levels not in get_args(Levels):
        raise UsageError(f'{levels} is no range of codes; name "video" or "full"')
    data = read_bytes(path, LARGEST_FILE)
    name = shown(Path(path).name)
    frames = list(_frames(data, name, standard, sample_rate, levels, most))
    digest = hashlib.sha256(data).hexdigest()
    if len(frames) == 1:
        return [replace(frames[0], sha256=digest)]
    return [replace(frame, sha256=digest, name=f"{name} page {number}") for number, frame in enumerate(frames, start=1)]


def _frames(
    data: bytes, name: str, standard: str | None, sample_rate: float | None, levels: Levels, most: int
) -> Iterator[Frame]:
    total = 0
    for picture in decode(data, name, most):
        rows, samples = picture.pixels.shape[:2]
        total += rows * samples
        if total > MOST_SAMPLES:
            raise UnscorableFrame(f"{name}: its pages are too many to read at once; split the file")
        found, clock = standard_of(samples, rows, name, standard, sample_rate)
        codes = luma_codes(picture, name, levels)
        frame = frame_from_codes(codes.luma, found, clock, levels=levels, bits=codes.bits, name=name)
        yield replace(frame, notes=codes.notes)


def standard_of(
    samples: int, rows: int, name: str, standard: str | None, sample_rate: float | None
) -> tuple[Standard, float]:
    """Standard and sample clock of a frame size, or as told.

    Raises
    ------
    UsageError
        When the size is no known one and not both are told, or the clock does not fit.
    """
    known = KNOWN_SIZES.get((samples, rows))
    if sample_rate is not None and not 1.0 <= sample_rate <= 1000.0:
        raise UsageError(f"{sample_rate:g} MHz is no sample clock of a frame; give one from 1 to 1000")
    if known is None and (standard is None or sample_rate is None):
        raise UsageError(f"{name}: {samples} x {rows} is no size of a known standard; {_wanted(standard, sample_rate)}")
    named, usual = known or ("", 0.0)
    found, clock = standard_named(standard or named), sample_rate or usual
    if samples / clock > found.line_us:
        raise UsageError(
            f"{name}: {samples} samples at {clock:g} MHz last longer than a line of {found.line_us:.1f} us; "
            "check --sample-rate"
        )
    return found, clock


def _wanted(standard: str | None, sample_rate: float | None) -> str:
    if sample_rate is not None:
        return "name it with --standard 525 or 625"
    if standard is not None:
        return "name the sample clock with --sample-rate"
    return "name it with --standard 525 or 625 and the sample clock with --sample-rate"


def list_frames(folder: Path | str) -> list[Path]:
    """Picture files of a folder (or of its ``frames`` folder), 2 before 10.

    Raises
    ------
    UsageError
        When there is no such folder, or no picture in it.
    """
    folder = Path(folder)
    for place in (folder, folder / "frames"):
        if found := _pictures_in(place, place == folder):
            return sorted(found, key=lambda file: natural(file.name))
    raise UsageError(f"{shown(folder)}: holds no frames; put PNG, TIFF, BMP or JPEG files there")


def _pictures_in(place: Path, named: bool) -> list[Path]:
    """Picture files of one folder; only the one that was named must be there."""
    try:
        return [file for file in place.iterdir() if _is_picture(file)]
    except (FileNotFoundError, NotADirectoryError, ValueError):
        if named:
            raise UsageError(f"{shown(place)}: is no folder; name the folder that holds the frames") from None
        return []
    except OSError as error:
        raise UsageError(f"{shown(place)}: cannot be read ({error.strerror}); check its permissions") from None


def _is_picture(file: Path) -> bool:
    return file.suffix.lower() in SUFFIXES and not file.name.startswith(".") and not file.is_dir()


def natural(name: str) -> list[tuple[int, int, str]]:
    """Sorting key that puts 2 before 10."""
    parts = re.split(r"([0-9]+)", name.lower())
    return [(0, int(part), "") if part.isdecimal() and part.isascii() else (1, 0, part) for part in parts]
