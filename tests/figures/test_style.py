import xml.etree.ElementTree as ET

import numpy as np
import pytest
from figures.made_records import make_colour, make_measurement, make_prediction

from layerscan.errors import SettingsError
from layerscan.figures import style
from layerscan.figures.export import write_drawing
from layerscan.figures.measurement import measurement_drawing
from layerscan.figures.prediction import prediction_drawing


def relative_luminance(colour: str) -> float:
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("colour", [style.BLACK, style.GREY, style.DARK_VERMILION])
def test_words_stand_out_from_white(colour):
    # WCAG 2.2, success criterion 1.4.3: contrast of text at least 4.5 to 1; formula of its definition of luminance
    assert 1.05 / (relative_luminance(colour) + 0.05) >= 4.5


def test_no_two_phases_share_colour_marker_or_dash():
    # rule of the project: nothing rests on colour alone
    for part in range(3):
        looks = [look[part] for look in style.PHASE_LOOK.values()]
        assert len(set(looks)) == len(looks)


@pytest.mark.parametrize(
    ("value", "u", "text"),
    # JCGM 100:2008, 7.2.6: u to at most two significant digits, the estimate to the same decimal
    [(10.05762, 0.027, "10.058 ± 0.027"), (151.2, 12.3, "151 ± 12"), (1234.0, 150.0, "1234 ± 150")],
)
def test_numbers_are_rounded_to_their_uncertainty(value, u, text):
    assert style.number_text(value, u) == text


def test_number_that_is_not_known_is_said_in_words():
    # rule of the project: unknown is never shown as a number
    assert style.number_text(float("nan")) == "not known"


@pytest.mark.parametrize(("span", "bar"), [(1400.0, 200.0), (999.0, 100.0), (26_000.0, 5000.0), (100.0, 20.0)])
def test_scale_bar_is_a_round_length_that_fits(span, bar):
    # rule of the project: 1, 2 or 5 times a power of ten, at most a fifth of the width
    assert style.nice_length(span) == pytest.approx(bar)


def test_picture_keeps_block_means_and_leaves_out_holes():
    # closed form: block means of a ramp; the hole's block mean is that of the pixels that are known
    image = np.arange(64, dtype=float).reshape(8, 8)
    whole, block = style.grey_picture(image, longest_px=4)
    holed = image.copy()
    holed[0, 0] = np.nan
    assert block == 2
    assert whole.shape == (4, 4)
    assert np.all(np.isfinite(style.grey_picture(holed, longest_px=4)[0]))
    assert np.all(np.diff(whole, axis=0) >= 0)
    assert np.all(style.grey_picture(np.full((5, 5), np.nan), longest_px=4)[0] == 1.0)


def test_picture_of_one_row_can_be_reduced():
    # bad shapes come from narrow regions: 3 x 8000 pixels must not vanish
    small, block = style.grey_picture(np.random.default_rng(1).random((3, 8000)), longest_px=800)
    assert small.shape == (1, 800)
    assert block == 10


@pytest.mark.parametrize(
    ("lab", "word"),
    # CIELAB hue angles of the unique hues: red 25, yellow 90, green 163, blue 235 to 246 degrees (from memory)
    [
        ((50, 60, 40), "red"),
        ((80, 0, 80), "yellow"),
        ((60, -50, 15), "green"),
        ((40, 5, -50), "blue"),
        ((50, 1, 1), "grey"),
    ],
)
def test_swatch_is_said_in_words(lab, word):
    from dataclasses import replace

    assert word in style.colour_words(replace(make_colour(), lab=lab))


def test_two_copies_of_a_figure_can_share_a_page():
    # HTML: an id is unique in its page
    svg = style.render_svg(prediction_drawing(make_prediction()))
    twice = style.prefix_names(svg, "b")
    names = [[node.get("id") for node in ET.fromstring(text).iter() if node.get("id")] for text in (svg, twice)]
    assert len(set(names[0])) == len(names[0]) > 5
    assert not set(names[0]) & set(names[1])


@pytest.mark.parametrize(("suffix", "start"), [("svg", b"<svg"), ("pdf", b"%PDF"), ("tif", b"II*\x00")])
def test_figures_leave_as_files_with_equal_bytes(tmp_path, suffix, start):
    # first bytes of each format; equal input, equal bytes
    drawing = prediction_drawing(make_prediction())
    first, second = (write_drawing(drawing, tmp_path / f"{n}.{suffix}", dots_per_inch=150) for n in "ab")
    assert first.read_bytes().startswith(start)
    assert first.read_bytes() == second.read_bytes()
    assert sorted(path.name for path in tmp_path.iterdir()) == [f"a.{suffix}", f"b.{suffix}"]


def test_tiff_says_600_dots_per_inch(tmp_path):
    # TIFF 6.0, tags XResolution (282) and ResolutionUnit (296, 2: inch)
    import tifffile

    path = write_drawing(prediction_drawing(make_prediction()), tmp_path / "a.tif")
    with tifffile.TiffFile(path) as file:
        page = file.pages[0]
        assert page.tags[282].value == (600, 1)
        assert page.tags[296].value == 2
        assert page.shape[1] == pytest.approx(9.0 * 600, abs=2)


def test_unknown_figure_format_is_refused(tmp_path):
    with pytest.raises(SettingsError, match=r"\.docx.*\.pdf"):
        write_drawing(prediction_drawing(make_prediction()), tmp_path / "a.docx")


def test_failed_figure_leaves_no_file(tmp_path):
    # rule of the project: a file is complete or absent
    drawing = measurement_drawing(*make_measurement())

    def fail(figure):
        raise OSError("disk full")

    from dataclasses import replace

    with pytest.raises(OSError, match="disk full"):
        write_drawing(replace(drawing, compose=fail), tmp_path / "a.pdf")
    assert list(tmp_path.iterdir()) == []
