"""Picture files for tests of reading: made from codes in every format, and by hand where no library writes them."""

from __future__ import annotations

import io
import struct
import zlib

import cv2
import numpy as np
import tifffile
from PIL import Image


def codes(rows=480, samples=720, seed=0, top=255):
    """Codes of a coarse, random pattern with a little grain: compresses like a frame, and every code occurs."""
    random = np.random.default_rng(seed)
    coarse = random.integers(8, 248, (rows // 8, samples // 8))
    whole = np.kron(coarse, np.ones((8, 8))) + random.integers(-8, 8, (rows, samples))
    depth = np.uint8 if top == 255 else np.uint16
    return np.clip(whole * (top / 255) + random.integers(0, max(top // 256, 1), whole.shape), 0, top).astype(depth)


def colours(rows=480, samples=720, seed=0, top=255, alpha=None):
    """Three channels that have nothing in common, and a fourth of one value if asked for."""
    planes = [codes(rows, samples, seed + number, top) for number in range(3)]
    if alpha is not None:
        planes.append(np.full_like(planes[0], alpha))
    return np.dstack(planes)


def bt601(pixels):
    """Luma of 8- or 16-bit RGB, by OpenCV's own weights where it has them (8 and 16 bit), as codes."""
    return cv2.cvtColor(pixels[..., :3].astype(np.float32), cv2.COLOR_RGB2GRAY)


def by_pillow(pixels, kind, mode=None, **options):
    """Bytes of a file written by Pillow, converted to a mode first if asked for."""
    picture = pixels if isinstance(pixels, Image.Image) else Image.fromarray(pixels)
    if mode is not None:
        picture = picture.convert(mode)
    data = io.BytesIO()
    picture.save(data, kind, **options)
    return data.getvalue()


def by_opencv(pixels, suffix):
    """Bytes of a file written by OpenCV, which knows 16-bit PNG, and TIFF with LZW."""
    if pixels.ndim == 3:
        pixels = pixels[..., [2, 1, 0, 3][: pixels.shape[2]]]
    return cv2.imencode(suffix, pixels)[1].tobytes()


def by_tifffile(pixels, **options):
    """Bytes of a TIFF of one page."""
    data = io.BytesIO()
    tifffile.imwrite(data, pixels, metadata=None, **options)
    return data.getvalue()


def chunk(kind, content):
    """One chunk of a PNG file."""
    return struct.pack(">I", len(content)) + kind + content + struct.pack(">I", zlib.crc32(kind + content))


def png(width, height, depth, colour, rows, *extra):
    """PNG by hand: header as given, ``rows`` of bytes without filter, further chunks before the data."""
    head = struct.pack(">IIBBBBB", width, height, depth, colour, 0, 0, 0)
    data = zlib.compress(b"".join(b"\0" + row for row in rows), 1)
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + b"".join(extra) + chunk(b"IDAT", data) + chunk(b"IEND", b"")


def tiff(tags, body=b""):
    """TIFF of one page by hand: tags (number, type, count, value or offset), and what follows the directory."""
    entries = b"".join(struct.pack("<HHII", *tag) for tag in sorted(tags))
    return b"II*\0" + struct.pack("<IH", 8, len(tags)) + entries + struct.pack("<I", 0) + body
