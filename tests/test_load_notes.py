"""What a frame says about its file: range, transparency, turned pictures, codes in the wrong bits."""

from __future__ import annotations

import numpy as np
import pytest
from picture_files import by_opencv, by_pillow, chunk, codes, colours
from PIL import Image

from patternscore.chain import Chain, responses
from patternscore.load import load_frame
from patternscore.standard import code_from_ire

FULL = "if the file is full-range, say --levels full"
VIDEO = "if the file is video-range, leave out --levels full"
VEILED = "A transparency channel hides part of the picture; it was ignored."


@pytest.fixture
def notes(tmp_path):
    def of(data, **told):
        (tmp_path / "frame").write_bytes(data)
        return load_frame(tmp_path / "frame", **told).notes

    return of


def coded(frame):
    """The frame's codes as an 8-bit file."""
    levels = code_from_ire(frame.luma, frame.levels)
    return by_pillow(np.clip(np.rint(levels), 0, 255).astype(np.uint8), "PNG")


@pytest.mark.parametrize("noise_db", [None, 40.0, 30.0])
def test_a_full_range_file_read_as_video_is_suspected(notes, grabbed, noise_db):
    data = coded(grabbed(Chain(levels="full", noise_db=noise_db)))
    assert FULL in notes(data)[0]
    assert notes(data, levels="full") == ()


@pytest.mark.parametrize("noise_db", [None, 40.0])
def test_a_video_range_file_read_as_full_is_suspected(notes, grabbed, noise_db):
    data = coded(grabbed(Chain(noise_db=noise_db)))
    assert VIDEO in notes(data, levels="full")[0]
    assert notes(data) == ()


@pytest.mark.parametrize(
    "chain",
    [
        Chain(noise_db=20.0),
        Chain(gain=1.2),
        Chain(response=(responses.second_order(3.0, 0.2),), noise_db=40.0),
        Chain(response=(responses.second_order(1.0, 0.2),), noise_db=40.0),
        Chain(gain=1.1, response=(responses.second_order(3.0, 0.3),)),
    ],
    ids=["noise", "gain", "ringing", "slow ringing", "gain and ringing"],
)
def test_a_video_range_file_that_clips_is_not_suspected(notes, grabbed, chain):
    assert notes(coded(grabbed(chain))) == ()


@pytest.mark.parametrize("level", [0, 16, 128, 235, 255])
def test_a_file_of_one_level_is_not_suspected(notes, level):
    assert notes(by_pillow(np.full((480, 720), level, np.uint8), "PNG")) == ()


def test_snow_is_not_suspected(notes):
    snow = np.random.default_rng(0).integers(0, 256, (480, 720), dtype=np.uint8)
    assert notes(by_pillow(snow, "PNG")) == ()


@pytest.mark.parametrize("bits", [10, 12])
def test_codes_in_the_lowest_bits_are_said_to_be_there(notes, bits):
    low = codes(top=2**bits - 1).astype(np.uint16)
    (note,) = notes(by_opencv(low, ".png"))
    assert note == f"All codes lie in the lowest {bits} of 16 bits: shift them up by {16 - bits} when saving."


@pytest.mark.parametrize("top", [255, 65535])
def test_transparency_counts_only_where_it_hides_something(notes, top):
    whole = colours(top=top, alpha=top)
    assert notes(by_opencv(whole, ".png")) == ()
    whole[10, 10, 3] = top - 1
    assert notes(by_opencv(whole, ".png")) == (VEILED,)


def test_transparent_grey_of_a_palette_counts_where_it_occurs(notes):
    grey = np.clip(codes(), 1, 255)
    palette = Image.fromarray(grey).convert("P")
    assert notes(by_pillow(palette, "PNG", transparency=0)) == ()
    assert notes(by_pillow(palette, "PNG", transparency=int(grey[5, 5]))) == (VEILED,)


def test_transparency_changes_no_level(tmp_path):
    seen = colours(alpha=255)
    veiled = seen.copy()
    veiled[..., 3] = np.arange(720) % 256
    for name, pixels in (("seen.png", seen), ("veiled.png", veiled)):
        (tmp_path / name).write_bytes(by_opencv(pixels, ".png"))
    np.testing.assert_array_equal(load_frame(tmp_path / "seen.png").luma, load_frame(tmp_path / "veiled.png").luma)


@pytest.mark.parametrize("kind", ["PNG", "JPEG", "WEBP"])
def test_a_turned_picture_is_read_as_stored_and_says_so(notes, tmp_path, kind):
    exif = Image.Exif()
    exif[0x0112] = 6  # Exif: to be turned by a quarter
    picture = Image.fromarray(colours())
    turned, upright = (by_pillow(picture, kind, exif=tag) for tag in (exif, Image.Exif()))
    assert notes(turned) == ("The file asks to be shown turned or mirrored; its lines were taken as they are stored.",)
    assert notes(upright) == ()
    assert (load_frame(tmp_path / "frame").rows, load_frame(tmp_path / "frame").samples) == (480, 720)


def test_an_animation_of_sixteen_bits_says_that_one_picture_was_read(notes):
    data = by_opencv(colours(top=65535), ".png")
    control = chunk(b"acTL", (2).to_bytes(4, "big") + (0).to_bytes(4, "big"))
    assert "only the first was read" in notes(data[:33] + control + data[33:])[0]
