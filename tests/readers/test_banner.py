"""A banner is left out; a horizontal layer, a resin or a substrate never is."""

from __future__ import annotations

import numpy as np
import pytest
from PIL import Image, ImageDraw, ImageFont
from scipy.ndimage import gaussian_filter

from layerscan.readers.banner import find_banner
from layerscan.readers.images import from_array, open_image

ROWS, COLUMNS = 400, 512
TEXT = "HV 10.00 kV   WD 5.0 mm   mag 20 000 x   1 um"


def specimen(seed=0, *, rows=ROWS, noise=12.0):
    """Tilted layers with noise, 8 bit."""
    rng = np.random.default_rng(seed)
    row, column = np.mgrid[:rows, :COLUMNS]
    wave = np.sin(2 * np.pi * (row + 0.2 * column) / 23)
    return np.clip(120 + 50 * wave + rng.normal(0, noise, wave.shape), 0, 255).astype(np.uint8)


def banner(*, height, paper, ink, size=14, frame=0):
    """A strip with text, a scale bar and an optional frame, drawn by Pillow."""
    picture = Image.new("L", (COLUMNS, height), paper)
    draw = ImageDraw.Draw(picture)
    draw.text((8, height // 4), TEXT, fill=ink, font=ImageFont.load_default(size))
    draw.rectangle((400, height // 2, 490, height // 2 + 3), fill=ink)
    if frame:
        draw.rectangle((0, 0, COLUMNS - 1, height - 1), outline=ink, width=frame)
    return np.asarray(picture)


@pytest.mark.parametrize(("paper", "ink"), [(0, 255), (255, 0), (128, 255), (30, 200)])
@pytest.mark.parametrize("height", [24, 40, 70])
@pytest.mark.parametrize("frame", [0, 1, 2])
def test_banner_is_found_at_its_row(paper, ink, height, frame):
    # drawn with a known first row
    page = specimen()
    page[-height:] = banner(height=height, paper=paper, ink=ink, frame=frame)
    found = find_banner(page.astype(np.float32))
    assert found is not None
    assert found.region == (ROWS - height, 0, ROWS, COLUMNS)
    assert "banner" in found.reason


def test_banner_at_the_top():
    # the page turned over
    page = specimen()
    page[:40] = banner(height=40, paper=0, ink=255)
    assert find_banner(page.astype(np.float32)).region == (0, 0, 40, COLUMNS)


@pytest.mark.parametrize("offset", [0.0, -3000.0, 1e5])
@pytest.mark.parametrize("factor", [1.0, 257.0])
def test_grey_scale_does_not_matter(offset, factor):
    # change that must not matter: 8 to 16 bit, offset
    page = specimen()
    page[-40:] = banner(height=40, paper=255, ink=0)
    found = find_banner((page * factor + offset).astype(np.float32))
    assert found.region == (ROWS - 40, 0, ROWS, COLUMNS)


def test_banner_survives_jpeg(tmp_path):
    # JPEG alters the constant background a little
    page = specimen()
    page[-40:] = banner(height=40, paper=0, ink=255)
    Image.fromarray(page).save(tmp_path / "a.jpg", quality=90)
    found = open_image(tmp_path / "a.jpg", pixel_size_nm=1.0).excluded
    assert len(found) == 1
    assert abs(found[0].region[0] - (ROWS - 40)) <= 2


def horizontal_layers(period, *, noise, blur=1.0, levels=(40, 210), waviness=0.0, seed=1):
    rng = np.random.default_rng(seed)
    row, column = np.mgrid[:ROWS, :COLUMNS]
    depth = row + waviness * np.sin(2 * np.pi * column / 300)
    stripes = np.where((depth % period) < period / 2, *levels).astype(float)
    return np.clip(gaussian_filter(stripes, blur) + rng.normal(0, noise, stripes.shape), 0, 255)


@pytest.mark.parametrize("period", [6, 17, 40, 90, 160, 230])
@pytest.mark.parametrize("noise", [0.0, 2.0, 15.0])
@pytest.mark.parametrize("waviness", [0.0, 3.0])
@pytest.mark.parametrize("levels", [(40, 210), (210, 40), (0, 255), (255, 0)])
def test_horizontal_layers_are_specimen(period, noise, waviness, levels):
    # a stack parallel to the edge of the picture, saturated levels included
    page = horizontal_layers(period, noise=noise, waviness=waviness, levels=levels)
    assert find_banner(page.astype(np.float32)) is None
    assert find_banner(np.round(page).astype(np.float32)) is None


@pytest.mark.parametrize("level", [0, 20, 128, 255])
@pytest.mark.parametrize("noise", [0.0, 1.0, 10.0])
@pytest.mark.parametrize("height", [10, 50, 110])
def test_resin_and_substrate_are_specimen(level, noise, height):
    # a smooth strip with a straight edge, clipped at black or white, without any text
    rng = np.random.default_rng(3)
    page = specimen().astype(float)
    page[-height:] = np.clip(level + rng.normal(0, noise, (height, COLUMNS)), 0, 255)
    assert find_banner(np.round(page).astype(np.float32)) is None


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("count", [12, 40, 150, 400])
def test_resin_with_particles_is_specimen(seed, count):
    # bright specks in a clipped black strip with a straight edge: the hardest look-alike
    rng = np.random.default_rng(seed)
    page = specimen().astype(float)
    strip = np.zeros((90, COLUMNS))
    strip[rng.integers(4, 86, count), rng.integers(4, COLUMNS - 4, count)] = 1.0
    specks = gaussian_filter(strip, rng.uniform(1.0, 2.5)) * 4000
    page[-90:] = np.clip(specks, 0, 255)
    assert find_banner(np.round(page).astype(np.float32)) is None


def test_constant_and_tiny_pages():
    # nothing to find
    assert find_banner(np.zeros((100, 100), np.float32)) is None
    assert find_banner(np.zeros((3, 3), np.float32)) is None
    page = np.full((100, 100), np.nan, np.float32)
    page[0, 0] = 1.0
    assert find_banner(page) is None


def test_noise_only_has_no_banner():
    # white noise, 8 bit
    page = np.random.default_rng(5).integers(0, 256, (300, 300)).astype(np.float32)
    assert find_banner(page) is None


def test_arrays_keep_what_the_caller_excludes():
    # an array in memory is the caller's own business
    page = specimen()
    page[-40:] = banner(height=40, paper=0, ink=255)
    assert from_array(page, pixel_size_nm=1.0).excluded == ()


def test_short_text_is_enough():
    # a banner with little more than its scale
    picture = Image.new("L", (COLUMNS, 40), 0)
    ImageDraw.Draw(picture).text((8, 10), "500 nm  x20k", fill=255, font=ImageFont.load_default(14))
    page = specimen()
    page[-40:] = np.asarray(picture)
    assert find_banner(page.astype(np.float32)).region == (ROWS - 40, 0, ROWS, COLUMNS)


@pytest.mark.parametrize("seed", range(8))
def test_generated_sections(seed):
    # sections of the sample generator, whose banner rows are known; without their banner and turned they have none
    sections = pytest.importorskip("sections", reason="the sample generator is not on the path")
    shape = (384, 512)
    rows = sections.draw_recipe("sem", seed, shape).banner_rows
    page = np.asarray(sections.make_section("sem", seed, shape)[0], dtype=np.float32)
    if rows:
        assert find_banner(page).region == (shape[0] - rows, 0, *shape)
    specimen_only = page[: shape[0] - rows]
    assert find_banner(specimen_only) is None
    assert find_banner(np.ascontiguousarray(specimen_only.T)) is None
