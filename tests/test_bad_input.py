"""Bad input of every kind: one line that says what to do, nothing else on stderr, and the batch goes on."""

from __future__ import annotations

import os
import random
import socket
import struct
import zlib

import numpy as np
import pytest
import tifffile
from picture_files import by_opencv, by_pillow, by_tifffile, chunk, codes, colours, png, tiff
from PIL import Image

from patternscore.errors import PatternscoreError, UnscorableFrame, UsageError
from patternscore.load import list_frames, load_frame, load_frames

GREY = codes()
WHOLE = {
    "png": by_pillow(GREY, "PNG"),
    "png of 16 bits": by_opencv(colours(top=65535), ".png"),
    "jpeg": by_pillow(GREY, "JPEG"),
    "progressive jpeg": by_pillow(GREY, "JPEG", progressive=True),
    "bmp": by_pillow(GREY, "BMP"),
    "gif": by_pillow(GREY, "GIF"),
    "webp": by_pillow(GREY, "WEBP"),
    "tiff": by_tifffile(GREY),
    "tiff, deflate": by_tifffile(GREY, compression="zlib"),
    "tiff, lzw": by_pillow(GREY, "TIFF", compression="tiff_lzw"),
    "tiff, lzw of 16 bits": by_opencv(colours(top=65535), ".tif"),
}


def refusal(path, **told):
    """The one line that refuses a file."""
    with pytest.raises(PatternscoreError) as caught:
        load_frame(path, **told)
    line = str(caught.value)
    assert line.isprintable()
    what, remedy = line.split("; ", 1)
    assert what.partition(": ")[2]
    assert remedy
    return line


def frame_or_refusal(path, **told):
    """Either frames of finite levels, or the one line that refuses the file."""
    try:
        frames = load_frames(path, **told)
    except PatternscoreError:
        return refusal(path, **told)
    return "read" if all(np.isfinite(frame.luma).all() for frame in frames) else ""


@pytest.fixture
def refused(tmp_path, capfd):
    """Write bytes, have them refused; nothing may reach stderr on the way."""

    def line(data, name="frame.png", **told):
        (tmp_path / name).write_bytes(data)
        said = refusal(tmp_path / name, **told)
        assert capfd.readouterr() == ("", "")
        assert said.startswith(f"{name}: ") or name in said
        return said

    return line


@pytest.mark.parametrize("part", [0.02, 0.5, 0.98])
@pytest.mark.parametrize("data", WHOLE.values(), ids=WHOLE.keys())
def test_a_file_cut_short_is_called_that(refused, data, part):
    assert "is broken or cut short" in refused(data[: int(len(data) * part)])


def test_an_empty_file_is_called_that(refused):
    assert refused(b"") == refused(b"", "frame.tif").replace("frame.tif", "frame.png")
    assert "is empty" in refused(b"")


@pytest.mark.parametrize(
    "data", [b"mtf50_h = 4.2\n", "Prüfbild".encode(), b"%PDF-1.7\n", b"PK\3\4", bytes(1000), b"\x89PNG"], ids=repr
)
def test_what_is_no_picture_is_called_that_whatever_its_name(refused, data):
    for name in ("frame.png", "frame.tif", "frame.jpg"):
        assert "is no picture; give a PNG, TIFF, BMP or JPEG file" in refused(data, name)


@pytest.mark.parametrize("magic", [b"\x89PNG\r\n\x1a\n", b"\xff\xd8\xff\xe0", b"GIF89a", b"BM", b"II*\0\x08\0\0\0"])
def test_a_head_without_a_picture_is_called_broken(refused, magic):
    assert "is broken or cut short" in refused(magic + bytes(40))


def bomb_png(width, height):
    return png(width, height, 8, 0, [b""])


def bomb_tiff(width, height):
    return tiff([(256, 4, 1, width), (257, 4, 1, height), (258, 3, 1, 8), (259, 3, 1, 8), (262, 3, 1, 1),
                 (273, 4, 1, 8), (277, 3, 1, 1), (278, 4, 1, height), (279, 4, 1, 100)], bytes(100))  # fmt: skip


def bomb_bmp(width, height):
    return b"BM" + struct.pack("<IHHIIiiHHIIiiII", 100, 0, 0, 54, 40, width, height, 1, 24, 0, 0, 0, 0, 0, 0)


def bomb_gif(width, height):
    return b"GIF89a" + struct.pack("<HHBBB", width, height, 0, 0, 0) + b"," + bytes(9) + b"\x02\x02\x4c\x01\0;"


@pytest.mark.parametrize("size", [(60000, 60000), (9000, 9000), (65000, 1100)], ids=str)
@pytest.mark.parametrize("made", [bomb_png, bomb_tiff, bomb_bmp, bomb_gif])
def test_a_header_that_claims_too_much_is_refused_before_decoding(refused, made, size):
    assert "too large for a video frame; save it at the grabber's own size" in refused(made(*size))


def test_data_that_unpack_without_end_are_refused(refused):
    packed = zlib.compress(bytes(200_000_000), 9)
    tags = [(256, 4, 1, 720), (257, 4, 1, 480), (258, 3, 1, 8), (259, 3, 1, 8), (262, 3, 1, 1),
            (273, 4, 1, 8 + 2 + 9 * 12 + 4), (277, 3, 1, 1), (278, 4, 1, 480), (279, 4, 1, len(packed))]  # fmt: skip
    assert "broken" in refused(tiff(tags, packed))


def test_text_that_unpacks_without_end_does_no_harm(tmp_path):
    bomb = chunk(b"zTXt", b"Comment\0\0" + zlib.compress(bytes(50_000_000), 9))
    data = png(720, 480, 8, 0, [bytes(row) for row in GREY], bomb)
    (tmp_path / "frame.png").write_bytes(data)
    assert "is broken" in frame_or_refusal(tmp_path / "frame.png")


@pytest.mark.parametrize("size", [(1, 1), (1, 480), (720, 1), (63, 480)], ids=str)
@pytest.mark.parametrize("kind", ["PNG", "TIFF", "BMP", "JPEG"])
def test_a_picture_too_small_for_a_pattern_is_refused(refused, size, kind):
    data = by_pillow(Image.new("L", size), kind)
    assert "is too small to hold a pattern; grab a whole frame" in refused(data)


def test_too_many_pages_are_refused(tmp_path, monkeypatch):
    monkeypatch.setattr("patternscore.load.MOST_SAMPLES", 720 * 480 * 2)
    with tifffile.TiffWriter(tmp_path / "run.tif") as file:
        for _ in range(3):
            file.write(GREY, metadata=None)
    with pytest.raises(UnscorableFrame, match=r"run\.tif: its pages are too many to read at once; split the file"):
        load_frames(tmp_path / "run.tif")
    assert len(load_frames(tmp_path / "run.tif", most=2)) == 2


def test_too_large_a_file_is_refused(refused, monkeypatch):
    monkeypatch.setattr("patternscore.load.LARGEST_FILE", 2**20)
    assert "is over 1 MiB, too large for a picture file" in refused(WHOLE["png"] + bytes(2**20))


def test_colours_for_printing_are_refused(refused):
    assert "made for printing; save it as grey or RGB" in refused(by_pillow(colours(), "JPEG", mode="CMYK"), "a.jpg")


@pytest.mark.parametrize("pixels", [np.zeros((480, 720), np.uint8), codes(480, 720, 5)], ids=["black", "snow"])
def test_a_picture_without_a_pattern_is_still_a_frame(tmp_path, pixels):
    (tmp_path / "frame.png").write_bytes(by_pillow(pixels, "PNG"))
    assert load_frame(tmp_path / "frame.png").rows == 480


def test_a_missing_file_is_called_that(tmp_path):
    assert "no such file; check the name" in refusal(tmp_path / "none.png")


def test_a_folder_is_called_that(tmp_path):
    with pytest.raises(UsageError, match="is a folder; name a picture file in it"):
        load_frame(tmp_path)


def test_a_name_that_is_none_is_called_that():
    assert "is no file name; check it" in refusal("frame\0.png")


def test_a_name_with_line_breaks_stays_on_one_line(tmp_path):
    name = "frame\n\x1b[31m\udcff.png"
    (tmp_path / name).write_bytes(b"no picture")
    assert "frame??[31m?.png: is no picture" in refusal(tmp_path / name)
    (tmp_path / name).write_bytes(WHOLE["png"])
    assert load_frame(tmp_path / name).name == "frame??[31m?.png"


def test_a_pipe_is_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "frame.png")
    assert "is no regular file" in refusal(tmp_path / "frame.png")


def test_devices_and_sockets_are_no_pictures(tmp_path):
    assert "is no regular file" in refusal("/dev/zero")
    with socket.socket(socket.AF_UNIX) as ear:
        ear.bind(os.path.relpath(tmp_path / "s"))
        assert "is no regular file" in refusal(tmp_path / "s")


def test_a_link_to_itself_is_refused(tmp_path):
    (tmp_path / "frame.png").symlink_to(tmp_path / "frame.png")
    assert "cannot be read" in refusal(tmp_path / "frame.png")


def test_a_file_that_may_not_be_read_is_called_that(tmp_path, monkeypatch):
    (tmp_path / "frame.png").write_bytes(WHOLE["png"])

    def forbidden(*_):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", forbidden)  # as root, modes forbid nothing
    assert "may not be read; check its permissions" in refusal(tmp_path / "frame.png")


@pytest.mark.parametrize("data", WHOLE.values(), ids=WHOLE.keys())
def test_broken_bytes_give_a_frame_or_one_line(data, tmp_path, capfd):
    fate = random.Random(1)
    path = tmp_path / "frame"
    for _ in range(12):
        broken = bytearray(data)
        for _ in range(fate.randrange(1, 6)):
            broken[fate.randrange(min(len(broken), fate.choice([64, 400, 10**9])))] = fate.randrange(256)
        path.write_bytes(broken)
        assert frame_or_refusal(path, standard="525", sample_rate=13.5)
    assert capfd.readouterr() == ("", "")


def test_frames_of_a_folder_come_in_natural_order(tmp_path):
    for name in ("10_a.png", "2_a.PNG", "1_a.tiff", "b.JPG", "notes.txt", ".hidden.png", "2_b.bmp"):
        (tmp_path / name).write_bytes(b"x")
    (tmp_path / "folder.png").mkdir()
    assert [path.name for path in list_frames(tmp_path)] == ["1_a.tiff", "2_a.PNG", "2_b.bmp", "10_a.png", "b.JPG"]


def test_a_session_folder_gives_its_frames(tmp_path):
    (tmp_path / "frames").mkdir()
    (tmp_path / "frames" / "1.png").write_bytes(b"x")
    assert [path.name for path in list_frames(str(tmp_path))] == ["1.png"]


def test_a_folder_without_frames_is_called_that(tmp_path):
    (tmp_path / "notes.txt").write_text("none")
    with pytest.raises(UsageError, match="holds no frames; put PNG, TIFF, BMP or JPEG files there"):
        list_frames(tmp_path)


@pytest.mark.parametrize("name", ["none", "notes.txt", "frame\0"])
def test_what_is_no_folder_is_called_that(tmp_path, name):
    (tmp_path / "notes.txt").write_text("none")
    with pytest.raises(UsageError, match="is no folder; name the folder that holds the frames"):
        list_frames(tmp_path / name)


def test_one_bad_frame_has_status_1_and_one_line(command, tmp_path):
    (tmp_path / "a.png").write_bytes(WHOLE["png"][:5000])
    status, out, err = command("score", tmp_path / "a.png")
    assert (status, out, len(err)) == (1, "", 1)
    assert err[0].startswith("patternscore: a.png: is broken or cut short")


def test_a_bad_frame_keeps_no_other_from_being_scored(command, tmp_path, good):
    files = {
        "1.png": WHOLE["png"][:5000], "2.png": good.read_bytes(), "3.png": b"", "4.png": by_pillow(GREY, "PNG"),
        "5.png": by_pillow(np.zeros((600, 800), np.uint8), "PNG"), "6.png": by_pillow(0 * GREY, "PNG"),
    }  # fmt: skip
    for name, data in files.items():
        (tmp_path / name).write_bytes(data)
    status, out, err = command("score", "--json", *(tmp_path / name for name in files))
    assert status == 1
    assert out.count('"card": 1') + out.count('"card":1') == 1
    assert len(err) == 5
    for number, line in zip((1, 3, 4, 5, 6), err, strict=True):
        assert f"{number}.png: " in line
        assert "; " in line
    status, out, err = command("compare", tmp_path, "--json", "-")
    assert (status, len(err)) == (1, 5)
    assert out.count("\n") == 1


def test_a_size_that_must_be_told_is_wrong_use(command, tmp_path):
    (tmp_path / "a.png").write_bytes(by_pillow(np.zeros((600, 800), np.uint8), "PNG"))
    status, _, err = command("score", tmp_path / "a.png")
    assert status == 2
    assert err == [
        "patternscore: a.png: 800 x 600 is no size of a known standard; name it with --standard 525 or 625 "
        "and the sample clock with --sample-rate"
    ]


@pytest.mark.parametrize("option", ["--plan", "--limits"])
@pytest.mark.parametrize("content", [None, b"", b"\xff\xfe\0", b"[[[", b"nonsense = 3", b"[" * 200_000])
def test_a_bad_plan_or_limits_file_is_wrong_use_in_one_line(command, tmp_path, option, content):
    (tmp_path / "a.png").write_bytes(WHOLE["png"])
    if content is not None:
        (tmp_path / "mine.toml").write_bytes(content)
    status, out, err = command("score", tmp_path / "a.png", option, tmp_path / "mine.toml")
    assert (status, out, len(err)) == (2, "", 1)
    assert "mine.toml" in err[0]
    assert "; " in err[0]


def test_a_folder_without_frames_is_wrong_use(command, tmp_path):
    status, out, err = command("compare", tmp_path)
    assert (status, out, len(err)) == (2, "", 1)
    assert "holds no frames" in err[0]
