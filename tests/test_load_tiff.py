"""TIFF in all its ways of holding the same samples, and frames that are pages of one file."""

from __future__ import annotations

import io

import numpy as np
import pytest
import tifffile
from picture_files import bt601, by_opencv, by_pillow, by_tifffile, codes, colours
from PIL import Image

from patternscore.errors import UnscorableFrame
from patternscore.load import load_frame, load_frames
from patternscore.standard import ire_from_code

SIZE = {"rows": 96, "samples": 144}
TOLD = {"standard": "525", "sample_rate": 13.5}
PIXELS = {
    ("grey", 8): codes(**SIZE),
    ("grey", 16): codes(**SIZE, top=65535),
    ("rgb", 8): colours(**SIZE),
    ("rgb", 16): colours(**SIZE, top=65535),
}


@pytest.fixture
def load(tmp_path):
    def from_bytes(data):
        (tmp_path / "frame.tif").write_bytes(data)
        return load_frame(tmp_path / "frame.tif", **TOLD)

    return from_bytes


def assert_luma(frame, pixels):
    expected = bt601(pixels) if pixels.ndim == 3 else pixels.astype(float)
    bits = 16 if pixels.dtype == np.uint16 else 8
    np.testing.assert_allclose(frame.luma, ire_from_code(expected, "video", bits), atol=2e-3)


@pytest.mark.parametrize("order", ["<", ">"], ids=["little-endian", "big-endian"])
@pytest.mark.parametrize("tile", [None, (32, 48)], ids=["strips", "tiles"])
@pytest.mark.parametrize("compression", [None, "zlib"], ids=["plain", "deflate"])
@pytest.mark.parametrize(("kind", "bits"), PIXELS)
def test_layout_and_compression_change_nothing(load, kind, bits, compression, tile, order):
    pixels = PIXELS[kind, bits]
    told = {"photometric": "rgb" if kind == "rgb" else "minisblack", "byteorder": order, "tile": tile}
    assert_luma(load(by_tifffile(pixels, compression=compression, predictor=bool(compression), **told)), pixels)


@pytest.mark.parametrize("bits", [8, 16])
@pytest.mark.parametrize("compression", [None, "zlib"], ids=["plain", "deflate"])
def test_planes_one_after_another_are_colours(load, bits, compression):
    pixels = PIXELS["rgb", bits]
    planes = np.moveaxis(pixels, -1, 0)
    assert_luma(load(by_tifffile(planes, photometric="rgb", planarconfig="separate", compression=compression)), pixels)


@pytest.mark.parametrize("bits", [8, 16])
@pytest.mark.parametrize("compression", [None, "zlib"], ids=["plain", "deflate"])
def test_white_is_zero_is_turned_round(load, bits, compression):
    pixels = PIXELS["grey", bits]
    data = by_tifffile(np.iinfo(pixels.dtype).max - pixels, photometric="miniswhite", compression=compression)
    assert_luma(load(data), pixels)


@pytest.mark.parametrize(("kind", "bits"), PIXELS)
def test_lzw_keeps_all_bits(load, kind, bits):
    assert_luma(load(by_opencv(PIXELS[kind, bits], ".tif")), PIXELS[kind, bits])


@pytest.mark.parametrize("compression", ["tiff_lzw", "packbits", "tiff_adobe_deflate"])
@pytest.mark.parametrize("mode", ["L", "P", "LA", "RGBA"])
def test_other_writers_files_are_read(load, mode, compression):
    pixels = PIXELS["grey", 8]
    assert_luma(load(by_pillow(pixels, "TIFF", mode=mode, compression=compression)), pixels)


@pytest.mark.parametrize("compression", [None, "group4", "packbits"])
def test_single_bits_are_black_and_white(load, compression):
    bits = Image.fromarray(PIXELS["grey", 8] > 127)
    assert_luma(load(by_pillow(bits, "TIFF", compression=compression)), np.array(bits.convert("L")))


def test_jpeg_inside_is_read(load):
    flat = np.full((96, 144, 3), 120, np.uint8)
    frame = load(by_pillow(flat, "TIFF", compression="jpeg"))
    np.testing.assert_allclose(frame.luma, ire_from_code(120.0), atol=0.5)


def test_thumbnails_and_masks_are_no_frames(tmp_path):
    with tifffile.TiffWriter(tmp_path / "run.tif") as file:
        for seed in range(3):
            file.write(codes(**SIZE, seed=seed), metadata=None)
            file.write(codes(64, 64), subfiletype=1, metadata=None)
    frames = load_frames(tmp_path / "run.tif", **TOLD)
    assert len(frames) == 3
    for seed, frame in enumerate(frames):
        assert_luma(frame, codes(**SIZE, seed=seed))
    assert frames[2].name == "run.tif page 3"
    assert len({frame.sha256 for frame in frames}) == 1


def test_pages_may_differ_in_kind(tmp_path):
    with tifffile.TiffWriter(tmp_path / "run.tif") as file:
        for pixels in PIXELS.values():
            file.write(pixels, metadata=None, photometric="rgb" if pixels.ndim == 3 else "minisblack")
    for frame, pixels in zip(load_frames(tmp_path / "run.tif", **TOLD), PIXELS.values(), strict=True):
        assert_luma(frame, pixels)


def test_lines_are_taken_as_stored_and_a_turned_file_says_so(load):
    pixels = PIXELS["grey", 8]
    frame = load(by_tifffile(pixels, extratags=[(274, 3, 1, 6, True)]))
    assert_luma(frame, pixels)
    assert frame.notes == ("The file asks to be shown turned or mirrored; its lines were taken as they are stored.",)


@pytest.mark.parametrize(
    ("pixels", "told", "complaint"),
    [
        (PIXELS["grey", 8].astype(np.float32), {}, "holds fractions instead of codes; export it as 8- or 16-bit"),
        (np.full((96, 144), np.nan, np.float32), {}, "holds fractions instead of codes; export it as 8- or 16-bit"),
        (np.full((96, 144), np.inf, np.float64), {}, "holds fractions instead of codes; export it as 8- or 16-bit"),
        (PIXELS["grey", 8].astype(np.int16), {}, "has samples of type int16; export it as 8- or 16-bit"),
        (PIXELS["grey", 8].astype(np.uint32), {}, "has samples of type uint32; export it as 8- or 16-bit"),
        (np.zeros((96, 144), np.complex64), {}, "has samples of type complex64; export it as 8- or 16-bit"),
        (np.zeros((96, 144, 4), np.uint8), {"photometric": "separated"}, "has SEPARATED colours; save it as grey"),
        (np.zeros((96, 144, 6), np.uint8), {"planarconfig": "contig"}, "has 6 channels; export it as grey or RGB"),
        (np.zeros((64, 96, 144), np.uint8), {"volumetric": True, "tile": (16, 16, 16)}, "is a volume and no picture"),
    ],
    ids=["float", "nan", "inf", "signed", "long", "complex", "cmyk", "six channels", "volume"],
)
def test_samples_that_are_no_codes_are_refused_with_a_remedy(load, pixels, told, complaint):
    with pytest.raises(UnscorableFrame, match=f"^frame.tif: {complaint}"):
        load(by_tifffile(pixels, **told))


@pytest.mark.parametrize("compression", ["tiff_lzw", "jpeg"])
def test_colours_for_printing_are_refused_in_any_compression(load, compression):
    data = by_pillow(colours(**SIZE), "TIFF", mode="CMYK", compression=compression)
    with pytest.raises(UnscorableFrame, match="save it uncompressed"):
        load(data)


def test_a_file_without_pages_is_refused(load):
    with pytest.raises(UnscorableFrame, match="is broken or cut short; grab or copy it again"):
        load(b"II*\0\0\0\0\0")


def test_a_directory_that_leads_to_itself_ends(load):
    data = bytearray(by_tifffile(PIXELS["grey", 8]))
    with tifffile.TiffFile(io.BytesIO(bytes(data))) as file:
        entries = len(file.pages[0].tags)
    data[8 + 2 + 12 * entries : 8 + 6 + 12 * entries] = (8).to_bytes(4, "little")
    assert_luma(load(bytes(data)), PIXELS["grey", 8])
