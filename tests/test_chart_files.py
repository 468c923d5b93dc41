"""The chart as a file: levels in PNG and TIFF, a drawing in SVG and PDF."""

from __future__ import annotations

import os
import re
import subprocess
import sys
import xml.etree.ElementTree as ET

import numpy as np
import PIL.Image
import pytest
import tifffile

from patternscore.chart import render, write_chart
from patternscore.chart.drawing import HIGH_INCHES, drawn
from patternscore.errors import UsageError
from patternscore.standard import STANDARD_525, STANDARD_625

SVG = "{http://www.w3.org/2000/svg}"
KINDS = ("png", "tif", "svg", "pdf")


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    """Folder with a chart of every kind."""
    folder = tmp_path_factory.mktemp("charts")
    for kind in KINDS:
        write_chart(folder / f"chart.{kind}", STANDARD_525, 352, 264)
    return folder


@pytest.mark.parametrize("name", ["chart.png", "CHART.TIF", "chart.tiff"])
def test_a_picture_file_is_linear_in_level_from_black_to_peak_white(name, tmp_path):
    write_chart(tmp_path / name, STANDARD_525, 720, 480)
    codes = np.asarray(PIL.Image.open(tmp_path / name)) if name.endswith("png") else tifffile.imread(tmp_path / name)
    assert codes.shape == (480, 720)
    assert codes.max() == 65535
    assert codes.min() == 0
    np.testing.assert_allclose(codes / 655.35, render(STANDARD_525, 720, 480), atol=0.5 / 655 + 1e-5)


def test_a_png_of_eight_bits_can_be_had(tmp_path):
    write_chart(tmp_path / "chart.png", STANDARD_625, 768, 576, bits=8)
    picture = PIL.Image.open(tmp_path / "chart.png")
    assert picture.mode == "L"
    np.testing.assert_allclose(np.asarray(picture) / 2.55, render(STANDARD_625, 768, 576), atol=0.5 / 2.55 + 1e-4)


def test_an_svg_is_a_drawing_of_four_by_three_without_text_or_date(files):
    root = ET.parse(files / "chart.svg").getroot()
    left, top, width, height = map(float, root.attrib["viewBox"].split())
    assert (left, top) == (0, 0)
    assert width / height == pytest.approx(4 / 3)
    assert not list(root.iter(f"{SVG}text"))  # lettering is outlines: no font is needed to show it
    assert not list(root.iter(f"{SVG}image"))
    assert len(list(root.iter(f"{SVG}path"))) > 200
    assert "date" not in (files / "chart.svg").read_text().lower()


def test_a_pdf_page_is_exactly_the_picture(files):
    data = (files / "chart.pdf").read_bytes()
    assert data.startswith(b"%PDF-")
    box = re.search(rb"/MediaBox \[\s*([\d. ]+)\]", data)
    assert box is not None
    left, bottom, right, top = map(float, box[1].split())
    assert (left, bottom) == (0, 0)
    assert (right - left) / (top - bottom) == pytest.approx(4 / 3)
    assert b"Date" not in data


def test_the_drawing_shows_the_same_picture_as_the_levels():
    canvas = drawn(STANDARD_625).canvas
    canvas.figure.set_dpi(960 / HIGH_INCHES)
    canvas.draw()
    seen = np.asarray(canvas.buffer_rgba())[..., 0] / 2.55
    assert seen.shape == (960, 1280)
    difference = np.abs(seen - render(STANDARD_625, 1280, 960))
    # The plotting library rounds upright rims to whole samples and shows bursts in slices.
    assert difference.mean() < 0.5
    assert np.median(difference) < 0.21  # 8 bits
    assert np.count_nonzero(difference > 20) < 0.005 * difference.size


def test_the_users_own_plotting_settings_do_not_change_a_drawing(files, tmp_path):
    import matplotlib

    with matplotlib.rc_context({"savefig.bbox": "tight", "savefig.dpi": 33, "path.simplify": True}):
        write_chart(tmp_path / "chart.svg", STANDARD_525, 0, 0)
    assert (tmp_path / "chart.svg").read_bytes() == (files / "chart.svg").read_bytes()


def test_another_run_of_the_program_gives_the_same_bytes(files, tmp_path):
    code = (
        "import sys; from patternscore.chart import write_chart; from patternscore.standard import STANDARD_525;"
        "[write_chart(f'{sys.argv[1]}/chart.{kind}', STANDARD_525, 352, 264) for kind in sys.argv[2:]]"
    )
    environment = os.environ | {"PYTHONHASHSEED": "7"}
    subprocess.run([sys.executable, "-c", code, str(tmp_path), *KINDS], check=True, env=environment)
    for kind in KINDS:
        assert (tmp_path / f"chart.{kind}").read_bytes() == (files / f"chart.{kind}").read_bytes(), kind


@pytest.mark.parametrize(
    ("name", "size", "bits", "advice"),
    [
        ("chart.gif", (720, 480), 16, r"\.gif is no format of a chart; end the name in \.png"),
        ("chart", (720, 480), 16, "no ending is no format of a chart"),
        ("chart.png", (40, 30), 16, "40 x 30 is no size for a chart; ask for 64 x 48"),
        ("chart.png", (100_000, 100_000), 16, "ask for 64 x 48 to 64 megapixels"),
        ("chart.png", (720, 480), 12, "12 bits cannot be written; ask for 8 or 16"),
        ("missing/chart.png", (720, 480), 16, "name another place"),
        ("missing/chart.svg", (720, 480), 16, "name another place"),
    ],
)
def test_what_cannot_be_written_says_what_to_do(name, size, bits, advice, tmp_path):
    with pytest.raises(UsageError, match=advice):
        write_chart(tmp_path / name, STANDARD_525, *size, bits=bits)


def test_the_plotting_library_is_not_needed_to_import_the_chart():
    code = "import patternscore.chart, sys; sys.exit('matplotlib' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
