"""Reading frames: every format, depth and kind of colour gives the levels that were written."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest
import skimage
from picture_files import bt601, by_opencv, by_pillow, chunk, codes, colours, png
from PIL import Image
from skimage.color import rgb2yuv

from patternscore.errors import UsageError
from patternscore.load import load_frame, load_frames
from patternscore.standard import ire_from_code

GREY, RGB = codes(), colours()
OPEN_DATA = Path(skimage.__file__).parent / "data"  # pictures that the package carries

GREY_FILES = {
    "png": by_pillow(GREY, "PNG"),
    "png by another writer": by_opencv(GREY, ".png"),
    "bmp": by_pillow(GREY, "BMP"),
    "tiff": by_pillow(GREY, "TIFF"),
    "tiff, lzw": by_opencv(GREY, ".tif"),
    "gif": by_pillow(GREY, "GIF"),
    "webp": by_pillow(GREY, "WEBP", lossless=True),
    "palette": by_pillow(GREY, "PNG", mode="P"),
    "grey with alpha": by_pillow(GREY, "PNG", mode="LA"),
    "grey as rgb": by_pillow(GREY, "PNG", mode="RGB"),
    "grey as rgba": by_pillow(GREY, "PNG", mode="RGBA"),
    "grey as rgb bmp": by_pillow(GREY, "BMP", mode="RGB"),
}
COLOUR_FILES = {
    "png": by_pillow(RGB, "PNG"),
    "bmp": by_pillow(RGB, "BMP"),
    "tiff": by_pillow(RGB, "TIFF"),
    "tiff, lzw": by_pillow(RGB, "TIFF", compression="tiff_lzw"),
    "webp": by_pillow(RGB, "WEBP", lossless=True),
    "rgba": by_pillow(RGB, "PNG", mode="RGBA"),
}


@pytest.fixture
def load(tmp_path):
    """Write bytes as a file and read it as a frame."""

    def from_bytes(data, name="frame.png", **told):
        (tmp_path / name).write_bytes(data)
        return load_frame(tmp_path / name, **told)

    return from_bytes


def assert_levels(frame, expected, levels="video", bits=8, atol=1e-3):
    np.testing.assert_allclose(frame.luma, ire_from_code(np.asarray(expected, float), levels, bits), atol=atol)


@pytest.mark.parametrize("data", GREY_FILES.values(), ids=GREY_FILES.keys())
def test_grey_levels_are_those_written_in_whatever_format(load, data):
    frame = load(data)
    assert_levels(frame, GREY)
    assert (frame.rows, frame.samples, frame.luma.dtype) == (480, 720, np.float32)
    assert frame.code_step == pytest.approx(100 / 219)


@pytest.mark.parametrize("data", COLOUR_FILES.values(), ids=COLOUR_FILES.keys())
def test_luma_of_colours_has_the_weights_of_the_digital_standard(load, data):
    # Source: ITU-R BT.601, as OpenCV's conversion to grey has it.
    assert_levels(load(data), bt601(RGB), atol=2e-3)


def test_luma_of_one_colour_each(load):
    # Source: ITU-R BT.601: 0.299 R + 0.587 G + 0.114 B.
    for channel, weight in enumerate((0.299, 0.587, 0.114)):
        pixels = np.zeros((480, 720, 3), np.uint8)
        pixels[..., channel] = 200
        assert_levels(load(by_pillow(pixels, "PNG")), np.full((480, 720), 200 * weight), atol=2e-3)


@pytest.mark.parametrize("channels", [1, 3, 4])
def test_sixteen_bits_are_kept_in_png(load, channels):
    pixels = codes(top=65535) if channels == 1 else colours(top=65535, alpha=65535 if channels == 4 else None)
    luma = pixels if channels == 1 else bt601(pixels)
    frame = load(by_opencv(pixels, ".png"))
    assert_levels(frame, luma, bits=16, atol=2e-3)
    assert frame.code_step == pytest.approx(100 / 219 / 256)


def test_sixteen_bit_grey_with_alpha_is_grey(load):
    grey = codes(top=65535)
    rows = [np.stack([row, np.full_like(row, 65535)], 1).astype(">u2").tobytes() for row in grey]
    assert_levels(load(png(720, 480, 16, 4, rows)), grey, bits=16)


def test_colour_management_in_the_file_is_left_alone(load):
    rows = [row.astype(">u2").tobytes() for row in codes(top=65535)]
    plain = load(png(720, 480, 16, 0, rows))
    tagged = load(png(720, 480, 16, 0, rows, chunk(b"gAMA", (22000).to_bytes(4, "big"))))
    np.testing.assert_array_equal(plain.luma, tagged.luma)


@pytest.mark.parametrize("bits", [8, 10, 12])
@pytest.mark.parametrize("way", ["shifted", "repeated"])
@pytest.mark.parametrize("levels", ["video", "full"])
def test_fewer_bits_in_a_file_of_sixteen_are_recognised(load, bits, way, levels):
    own = codes(top=2**bits - 1).astype(np.uint16)
    held = own << (16 - bits)
    if way == "repeated":
        held = held | (own >> (2 * bits - 16))
    frame = load(by_opencv(held, ".png"), levels=levels)
    assert_levels(frame, own, levels, bits)
    assert frame.code_step == pytest.approx(ire_from_code(1.0, levels, bits) - ire_from_code(0.0, levels, bits))


def test_bt601_codes_of_ten_bits_are_black_and_white(load):
    # Source: ITU-R BT.601: 64 and 940 at 10 bits.
    pixels = np.full((480, 720), 64 << 6, np.uint16)
    pixels[:, 360:] = 940 << 6
    pixels[0, 0] = 65 << 6
    frame = load(by_opencv(pixels, ".png"))
    assert frame.luma[5, 5] == pytest.approx(0.0)
    assert frame.luma[5, 700] == pytest.approx(100.0)


@pytest.mark.parametrize(("levels", "black", "white"), [("video", 16, 235), ("full", 0, 255)])
def test_range_says_which_codes_are_black_and_white(load, levels, black, white):
    pixels = GREY.copy()
    pixels[0, :2] = black, white
    frame = load(by_pillow(pixels, "PNG"), levels=levels)
    np.testing.assert_allclose(frame.luma[0, :2], [0, 100], atol=1e-4)
    assert frame.levels == levels
    low, high = ire_from_code(0.0, levels), ire_from_code(255.0, levels)
    assert (frame.code_floor, frame.code_ceiling) == pytest.approx((low, high))


def test_single_bits_are_the_ends_of_the_codes(load):
    bits = GREY > 127
    data = by_pillow(Image.fromarray(bits), "PNG")
    assert_levels(load(data), np.where(bits, 255, 0))


def test_jpeg_luma_is_the_stored_one(load):
    frame = load(by_pillow(GREY, "JPEG", quality=100), "frame.jpg")
    assert np.abs(frame.luma - ire_from_code(GREY.astype(float))).max() < 2.0
    smooth = np.dstack([np.tile(np.linspace(30, 220, 720), (480, 1))] * 3).astype(np.uint8)
    smooth[..., 2] = 255 - smooth[..., 2]
    frame = load(by_pillow(smooth, "JPEG", quality=100), "colour.jpg")
    assert_levels(frame, bt601(smooth), atol=1.0)


@pytest.mark.parametrize("name", ["chelsea.png", "coffee.png", "motorcycle_left.png"])
def test_colour_pictures_of_open_data_agree_with_another_librarys_luma(name):
    # Source: scikit-image's BT.601 luma (the Y of YUV) of pictures that it carries.
    pixels = skimage.io.imread(OPEN_DATA / name)
    frame = load_frame(OPEN_DATA / name, standard="525", sample_rate=13.5)
    expected = ire_from_code(255.0 * rgb2yuv(pixels[..., :3])[..., 0])
    np.testing.assert_allclose(frame.luma, expected, atol=0.02)


@pytest.mark.parametrize("name", ["rocket.jpg", "hubble_deep_field.jpg"])
def test_jpegs_of_open_data_agree_where_decoding_to_rgb_clips_nothing(name):
    pixels = skimage.io.imread(OPEN_DATA / name)
    clear = ((pixels > 2) & (pixels < 253)).all(axis=2)
    frame = load_frame(OPEN_DATA / name, standard="525", sample_rate=20.0)
    expected = ire_from_code(255.0 * rgb2yuv(pixels)[..., 0])
    assert clear.mean() > 0.1
    assert np.abs(frame.luma - expected)[clear].max() < 0.6  # R, G and B are rounded to codes, of 0.46 IRE each


@pytest.mark.parametrize("name", ["camera.png", "coins.png", "page.png", "brick.png", "clock_motion.png"])
def test_grey_pictures_of_open_data_keep_their_codes(name):
    pixels = skimage.io.imread(OPEN_DATA / name)
    assert_levels(load_frame(OPEN_DATA / name, standard="625", sample_rate=13.5), pixels)


def test_pages_of_open_data_are_frames(monkeypatch):
    monkeypatch.setattr("patternscore.decode.SMALLEST", 8)  # they are 15 x 10
    frames = load_frames(OPEN_DATA / "multipage.tif", standard="525", sample_rate=13.5)
    pages = skimage.io.imread(OPEN_DATA / "multipage.tif")
    assert len(frames) == 2
    for frame, page in zip(frames, pages, strict=True):
        assert_levels(frame, page)


def test_an_animation_of_open_data_gives_its_pictures(monkeypatch):
    monkeypatch.setattr("patternscore.decode.SMALLEST", 8)  # they are 14 x 25
    frames = load_frames(OPEN_DATA / "no_time_for_that_tiny.gif", standard="525", sample_rate=13.5)
    assert len(frames) == 24
    assert len({frame.luma.shape for frame in frames}) == 1
    assert [frame.name for frame in frames[:2]] == [f"no_time_for_that_tiny.gif page {page}" for page in (1, 2)]


@pytest.mark.parametrize(("kind", "options"), [("TIFF", {}), ("PNG", {}), ("WEBP", {"lossless": True})])
def test_pages_come_in_order(tmp_path, kind, options):
    pictures = [codes(seed=seed) for seed in range(3)]
    first, *others = (Image.fromarray(picture) for picture in pictures)
    first.save(tmp_path / "run", kind, save_all=True, append_images=others, **options)
    frames = load_frames(tmp_path / "run")
    assert len(frames) == 3
    for frame, picture in zip(frames, pictures, strict=True):
        assert_levels(frame, picture)
    assert len(load_frames(tmp_path / "run", most=2)) == 2


def test_a_frame_carries_its_name_and_the_digest_of_its_file(load):
    data = by_pillow(GREY, "PNG")
    frame = load(data, "07_peaking.png")
    assert frame.name == "07_peaking.png"
    assert frame.sha256 == hashlib.sha256(data).hexdigest()


def test_content_tells_the_format_and_not_the_name(load):
    assert_levels(load(by_pillow(GREY, "PNG"), "frame.jpg"), GREY)


@pytest.mark.parametrize(
    ("samples", "rows", "standard", "clock"),
    [
        (720, 480, "525", 13.5), (720, 486, "525", 13.5), (704, 480, "525", 13.5), (640, 480, "525", 135 / 11),
        (720, 576, "625", 13.5), (704, 576, "625", 13.5), (768, 576, "625", 14.75),
    ],
)  # fmt: skip
def test_known_sizes_need_not_be_told(load, samples, rows, standard, clock):
    # Source: BT.601 for 13.5 MHz; square-pixel clocks by common practice.
    frame = load(by_pillow(codes(rows, samples)[:rows], "PNG") if rows % 8 == 0 else _padded(samples, rows))
    assert (frame.standard.name, frame.sample_rate) == (standard, pytest.approx(clock))


def _padded(samples, rows):
    return by_pillow(np.full((rows, samples), 100, np.uint8), "PNG")


@pytest.mark.parametrize(("samples", "rows", "clock"), [(360, 240, 6.75), (1440, 480, 27.0), (5760, 1920, 109.3)])
def test_other_sizes_are_read_as_told(load, samples, rows, clock):
    frame = load(_padded(samples, rows), standard="525", sample_rate=clock)
    assert (frame.samples, frame.rows, frame.sample_rate) == (samples, rows, clock)


def test_what_is_told_counts_before_what_the_size_tells(load):
    frame = load(_padded(720, 480), standard="625", sample_rate=14.0)
    assert (frame.standard.name, frame.sample_rate) == ("625", 14.0)


@pytest.mark.parametrize(
    ("told", "remedy"),
    [
        ({}, "name it with --standard 525 or 625 and the sample clock with --sample-rate"),
        ({"standard": "525"}, "name the sample clock with --sample-rate"),
        ({"sample_rate": 13.5}, "name it with --standard 525 or 625"),
    ],
)
def test_an_unknown_size_says_what_to_tell(load, told, remedy):
    with pytest.raises(UsageError) as refusal:
        load(_padded(800, 600), "card.png", **told)
    assert str(refusal.value) == f"card.png: 800 x 600 is no size of a known standard; {remedy}"


@pytest.mark.parametrize("clock", [0.0, -3.0, 13.5e6, float("nan"), float("inf")])
def test_a_clock_that_is_none_is_refused(load, clock):
    with pytest.raises(UsageError, match="is no sample clock of a frame; give one from 1 to 1000"):
        load(_padded(800, 600), standard="525", sample_rate=clock)


def test_a_clock_too_slow_for_the_samples_is_refused(load):
    with pytest.raises(UsageError, match=r"1440 samples at 13.5 MHz last longer than a line of 63.6 us"):
        load(_padded(1440, 480), standard="525", sample_rate=13.5)


def test_a_standard_that_is_none_is_refused(load):
    with pytest.raises(UsageError, match="819 is no scanning standard; name 525 or 625"):
        load(_padded(720, 480), standard="819")


def test_a_range_that_is_none_is_refused(load):
    with pytest.raises(UsageError, match='legal is no range of codes; name "video" or "full"'):
        load(_padded(720, 480), levels="legal")
