"""The chart as a file: PNG or TIFF levels, SVG or PDF drawing."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from patternscore.chart.raster import render
from patternscore.errors import UsageError
from patternscore.standard import Standard

RASTER_SUFFIXES = (".png", ".tif", ".tiff")
DRAWING_SUFFIXES = (".svg", ".pdf")
LARGEST = 64_000_000  # samples in a picture


def write_chart(path: Path | str, standard: Standard, width: int, height: int, bits: int = 16) -> None:
    """Write the chart in the format that the file name's ending says.

    Parameters
    ----------
    path : Path
        ``.png`` or ``.tif``: 0 is black, full scale is peak white, linear in video level.
        ``.svg`` or ``.pdf``: a drawing of 4:3 for printing.
    width, height : int
        Samples and lines of a PNG or TIFF; not used for a drawing.
    bits : {8, 16}
        Depth of a PNG or TIFF.

    Raises
    ------
    UsageError
        For a size, depth or file ending that cannot be had.
    """
    path = Path(path)
    suffix = path.suffix.lower()
    if suffix in DRAWING_SUFFIXES:
        from patternscore.chart.drawing import write_drawing

        write_drawing(path, standard)
    elif suffix in RASTER_SUFFIXES:
        _write_raster(path, standard, width, height, bits)
    else:
        known = ", ".join(RASTER_SUFFIXES + DRAWING_SUFFIXES)
        raise UsageError(f"{path.name}: {suffix or 'no ending'} is no format of a chart; end the name in {known}")


def _write_raster(path: Path, standard: Standard, width: int, height: int, bits: int) -> None:
    import cv2

    if bits not in (8, 16):
        raise UsageError(f"{path.name}: {bits} bits cannot be written; ask for 8 or 16")
    if width < 64 or height < 48 or width * height > LARGEST:
        raise UsageError(f"{path.name}: {width} x {height} is no size for a chart; ask for 64 x 48 to 64 megapixels")
    full = 2**bits - 1
    levels = np.rint(render(standard, width, height) * np.float32(full / 100.0))
    codes = levels.astype(np.uint16 if bits == 16 else np.uint8)
    if path.suffix.lower() == ".png":
        done, data = cv2.imencode(".png", codes)
    else:  # deflate of plain samples, which every reader takes
        deflate = [cv2.IMWRITE_TIFF_COMPRESSION, 8, cv2.IMWRITE_TIFF_PREDICTOR, 1]
        done, data = cv2.imencode(".tiff", codes, deflate)
    if not done:
        raise UsageError(f"{path.name}: the picture could not be encoded; try another format")
    try:
        path.write_bytes(data.tobytes())
    except OSError as error:
        raise UsageError(f"{path}: cannot be written ({error.strerror}); name another place") from None
