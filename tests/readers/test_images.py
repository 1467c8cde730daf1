"""Pixels of every format come back as they were written, grey, float32, of the planned shape."""

from __future__ import annotations

import gzip
import hashlib

import mrcfile
import numpy as np
import pytest
import tifffile
from PIL import Image

from layerscan.errors import CalibrationError, InputError, MissingExtraError
from layerscan.readers.images import from_array, open_image

RNG = np.random.default_rng(7)
PICTURE = RNG.integers(0, 256, (37, 53)).astype(np.uint8)


def open_plain(path, **options):
    return open_image(path, pixel_size_nm=2.0, **options)


@pytest.mark.parametrize(
    "dtype", ["uint8", "uint16", "uint32", "int8", "int16", "int32", "float16", "float32", "float64"]
)
@pytest.mark.parametrize("compression", [None, "zlib"])
def test_tiff_types(tmp_path, dtype, compression):
    # TIFF 6.0, SampleFormat and BitsPerSample, written by tifffile
    path = tmp_path / "a.tif"
    written = (PICTURE // 2).astype(dtype)
    tifffile.imwrite(path, written, compression=compression)
    image = open_plain(path)
    assert image.stored_type == dtype
    assert image.shape == PICTURE.shape
    loaded = image.load()
    assert loaded.dtype == np.float32
    np.testing.assert_array_equal(loaded, written.astype(np.float32))


@pytest.mark.parametrize("byteorder", ["<", ">"])
@pytest.mark.parametrize("bigtiff", [False, True])
def test_tiff_byte_orders_and_bigtiff(tmp_path, byteorder, bigtiff):
    # TIFF 6.0 II and MM; BigTIFF with 64 bit offsets
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE.astype(np.uint16), byteorder=byteorder, bigtiff=bigtiff)
    np.testing.assert_array_equal(open_plain(path).load(), PICTURE)


@pytest.mark.parametrize("layout", [{"tile": (16, 16)}, {"rowsperstrip": 5}, {"tile": (32, 16), "compression": "lzw"}])
def test_tiff_layouts(tmp_path, layout):
    # TIFF 6.0, strips and tiles
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, **layout)
    np.testing.assert_array_equal(open_plain(path).load(), PICTURE)


@pytest.mark.parametrize("planar", ["contig", "separate"])
def test_rgb_becomes_luminance(tmp_path, planar):
    # ITU-R BT.709-6, item 3.2: 0.2126 R + 0.7152 G + 0.0722 B
    path = tmp_path / "a.tif"
    colour = RNG.integers(0, 256, (37, 53, 3)).astype(np.uint8)
    stored = colour if planar == "contig" else np.moveaxis(colour, -1, 0)
    tifffile.imwrite(path, stored, photometric="rgb", planarconfig=planar)
    expected = colour @ np.array([0.2126, 0.7152, 0.0722])
    np.testing.assert_allclose(open_plain(path).load(), expected, rtol=1e-6)


@pytest.mark.parametrize("suffix", ["tif", "png"])
def test_grey_stored_as_rgb_comes_back_exactly(tmp_path, suffix):
    # equal samples have no colour, so luminance is the sample itself
    path = tmp_path / f"a.{suffix}"
    Image.fromarray(np.repeat(PICTURE[..., None], 3, axis=2)).save(path)
    np.testing.assert_array_equal(open_plain(path).load(), PICTURE)


def test_transparent_pixels_are_holes(tmp_path):
    # alpha 0: nothing was recorded there
    path = tmp_path / "a.png"
    colour = np.repeat(PICTURE[..., None], 4, axis=2)
    colour[..., 3] = 255
    colour[:5, :5, 3] = 0
    Image.fromarray(colour).save(path)
    loaded = open_plain(path).load()
    assert np.isnan(loaded[:5, :5]).all()
    np.testing.assert_array_equal(loaded[5:], PICTURE[5:])


def test_min_is_white_is_inverted(tmp_path):
    # TIFF 6.0, PhotometricInterpretation 0: 0 is imaged as white
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, photometric="miniswhite")
    np.testing.assert_array_equal(open_plain(path).load(), 255.0 - PICTURE)


@pytest.mark.parametrize("photometric", ["minisblack", "miniswhite"])
def test_one_bit(tmp_path, photometric):
    # TIFF 6.0, bilevel images
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE > 127, photometric=photometric)
    expected = PICTURE > 127 if photometric == "minisblack" else PICTURE <= 127
    np.testing.assert_array_equal(open_plain(path).load(), expected.astype(np.float32))


@pytest.mark.parametrize("compression", [None, "jpeg"])
def test_luminance_and_colour_differences(tmp_path, compression):
    # TIFF 6.0, section 21: Y of a grey picture is its grey value, stored plainly or within JPEG
    path = tmp_path / "a.tif"
    grey = np.tile(np.linspace(20, 220, 64), (48, 1)).astype(np.uint8)
    picture = Image.fromarray(np.repeat(grey[..., None], 3, axis=2)).convert("YCbCr")
    if compression is None:
        picture.save(path)
    else:
        tifffile.imwrite(path, np.asarray(picture.convert("RGB")), photometric="rgb", compression="jpeg")
    np.testing.assert_allclose(open_plain(path).load(), grey, atol=4)


def test_printing_colours_are_refused(tmp_path):
    # neither grey nor RGB
    path = tmp_path / "a.tif"
    Image.fromarray(np.repeat(PICTURE[..., None], 3, axis=2)).convert("CMYK").save(path)
    with pytest.raises(InputError, match="4 samples per pixel of a kind that is neither grey nor RGB"):
        open_plain(path)
    Image.fromarray(np.repeat(PICTURE[..., None], 3, axis=2)).convert("CMYK").save(tmp_path / "a.jpg")
    with pytest.raises(InputError, match="CMYK colours, neither grey nor RGB"):
        open_plain(tmp_path / "a.jpg")


def test_palettes(tmp_path):
    # TIFF 6.0, ColorMap: a plain grey ramp leaves the numbers, another palette is looked up
    path = tmp_path / "ramp.tif"
    ramp = np.repeat(np.arange(256, dtype=np.uint16)[None] * 257, 3, axis=0)
    tifffile.imwrite(path, PICTURE, photometric="palette", colormap=ramp)
    np.testing.assert_array_equal(open_plain(path).load(), PICTURE)
    tifffile.imwrite(path, PICTURE, photometric="palette", colormap=ramp[:, ::-1].copy())
    np.testing.assert_array_equal(open_plain(path).load(), (255.0 - PICTURE) * 257)


def test_pages(tmp_path):
    # three pages written one by one
    path = tmp_path / "a.tif"
    with tifffile.TiffWriter(path) as writer:
        for number in range(3):
            writer.write(PICTURE + np.uint8(number), contiguous=False)
    for number in range(3):
        image = open_plain(path, page=number)
        assert (image.page, image.page_count) == (number, 3)
        np.testing.assert_array_equal(image.load(), PICTURE + np.uint8(number))


@pytest.mark.parametrize("page", [3, -1, 10**9])
@pytest.mark.parametrize("suffix", ["tif", "mrc", "npy"])
def test_page_out_of_range(tmp_path, page, suffix):
    # bad input
    path = tmp_path / f"a.{suffix}"
    stack = np.stack([PICTURE] * 3)
    if suffix == "tif":
        tifffile.imwrite(path, stack, photometric="minisblack")
    elif suffix == "npy":
        np.save(path, stack)
    else:
        with mrcfile.new(path) as mrc:
            mrc.set_data(stack.astype(np.int16))
    with pytest.raises(InputError, match=f"Page {page} of 'a.{suffix}' does not exist: it has pages 0 to 2"):
        open_plain(path, page=page)


@pytest.mark.parametrize("page", [0.5, "1", True])
def test_page_is_a_whole_number(tmp_path, page):
    # a page is counted
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    with pytest.raises(InputError, match="no whole number"):
        open_plain(path, page=page)


@pytest.mark.parametrize("mode", ["L", "I;16", "RGB", "P", "1"])
def test_png_modes(tmp_path, mode):
    # PNG specification, colour types and depths, written by Pillow
    path = tmp_path / "a.png"
    if mode == "I;16":
        written = PICTURE.astype(np.uint16) * 257
        Image.fromarray(written).save(path)
    else:
        picture = Image.fromarray(PICTURE).convert(mode)
        picture.save(path)
        written = np.asarray(picture.convert("L"))
    np.testing.assert_allclose(open_plain(path).load(), written, atol=1.0 if mode == "P" else 0)


def test_jpeg_is_near_and_says_so(tmp_path):
    # JPEG is lossy: within a few grey values on a smooth picture
    path = tmp_path / "a.jpg"
    smooth = np.tile(np.linspace(20, 220, 80), (40, 1)).astype(np.uint8)
    Image.fromarray(smooth).save(path, quality=95)
    image = open_plain(path)
    np.testing.assert_allclose(image.load(), smooth, atol=4)
    assert any("JPEG" in doubt for doubt in image.doubts)


@pytest.mark.parametrize("dtype", ["int8", "int16", "uint16", "float32", "float16"])
def test_mrc_sections(tmp_path, dtype):
    # MRC2014, written by mrcfile; a page is a section, the voxel size is in Angstrom
    path = tmp_path / "a.mrc"
    stack = (np.stack([PICTURE, PICTURE[::-1]]) // 2).astype(dtype)
    with mrcfile.new(path) as mrc:
        mrc.set_data(stack)
        mrc.voxel_size = 25.0
    for page in range(2):
        image = open_image(path, page=page)
        assert image.pixel_size.row_nm == pytest.approx(2.5)
        assert (image.page_count, image.stored_type) == (2, dtype)
        np.testing.assert_array_equal(image.load(), stack[page].astype(np.float32))


def test_mrc_voxel_size_zero_is_unknown(tmp_path):
    # mrcfile: voxel size 0 means unknown (mrcfile#68 asks the same)
    path = tmp_path / "a.mrc"
    with mrcfile.new(path) as mrc:
        mrc.set_data(PICTURE.astype(np.int16))
        mrc.voxel_size = 0.0
    with pytest.raises(CalibrationError, match="voxel size in its header is 0"):
        open_image(path)


def test_mrc_voxel_size_one_angstrom_is_doubted(tmp_path):
    # 1 Angstrom is also what programs write when they know none; common practice, no source
    path = tmp_path / "a.mrc"
    with mrcfile.new(path) as mrc:
        mrc.set_data(PICTURE.astype(np.int16))
        mrc.voxel_size = 1.0
    assert any("exactly 1 Angstrom" in doubt for doubt in open_image(path).pixel_size.doubts)


def test_packed_mrc(tmp_path):
    # gzip of the same bytes gives the same picture
    path = tmp_path / "a.mrc"
    with mrcfile.new(path) as mrc:
        mrc.set_data(PICTURE.astype(np.int16))
        mrc.voxel_size = 20.0
    packed = tmp_path / "b.mrc.gz"
    packed.write_bytes(gzip.compress(path.read_bytes()))
    np.testing.assert_array_equal(open_image(packed).load(), open_image(path).load())


def test_complex_is_refused(tmp_path):
    # bad input: complex numbers are no intensities
    path = tmp_path / "a.mrc"
    with mrcfile.new(path) as mrc:
        mrc.set_data(PICTURE.astype(np.complex64))
    with pytest.raises(InputError, match="complex numbers"):
        open_plain(path)
    tifffile.imwrite(tmp_path / "a.tif", PICTURE.astype(np.complex64))
    with pytest.raises(InputError, match="complex numbers"):
        open_plain(tmp_path / "a.tif")


def test_infinities_become_holes_and_all_nan_is_refused(tmp_path):
    # bad input: NaN and infinities
    path = tmp_path / "a.tif"
    values = PICTURE.astype(np.float32)
    values[0, 0], values[0, 1], values[1, 1] = np.inf, -np.inf, np.nan
    tifffile.imwrite(path, values)
    loaded = open_plain(path).load()
    assert np.isnan(loaded).sum() == 3
    assert np.isfinite(loaded).sum() == loaded.size - 3
    tifffile.imwrite(path, np.full((9, 9), np.nan, np.float32))
    with pytest.raises(InputError, match="no finite value"):
        open_plain(path)


@pytest.mark.parametrize("shape", [(3, 3), (1, 1), (1, 50), (50, 1), (8, 4000), (4000, 8)])
@pytest.mark.parametrize("suffix", ["tif", "png", "npy", "mrc"])
def test_odd_shapes_open(tmp_path, shape, suffix):
    # aim: a 3x3 or 8x4000 image
    path = tmp_path / f"a.{suffix}"
    values = (np.arange(shape[0] * shape[1]) % 251).reshape(shape).astype(np.uint8)
    if suffix == "tif":
        tifffile.imwrite(path, values)
    elif suffix == "png":
        Image.fromarray(values).save(path)
    elif suffix == "npy":
        np.save(path, values)
    else:
        with mrcfile.new(path) as mrc:
            mrc.set_data(values.astype(np.int16))
    image = open_plain(path)
    assert image.shape == shape
    np.testing.assert_array_equal(image.load(), values)


def test_pixels_are_read_when_asked_for(tmp_path):
    # the record holds no pixels: a file that changes afterwards is read as it then is
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    image = open_plain(path)
    tifffile.imwrite(path, PICTURE[:, ::-1].copy())
    np.testing.assert_array_equal(image.load(), PICTURE[:, ::-1])
    path.unlink()
    with pytest.raises(InputError, match="no longer there"):
        image.load()


def test_hash_is_that_of_the_file(tmp_path):
    # FIPS 180-4 by hashlib
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE)
    assert open_plain(path).sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_missing_empty_folder_and_other_files(tmp_path):
    # bad input
    with pytest.raises(InputError, match="There is no file"):
        open_plain(tmp_path / "none.tif")
    with pytest.raises(InputError, match="is a folder"):
        open_plain(tmp_path)
    empty = tmp_path / "empty.tif"
    empty.touch()
    with pytest.raises(InputError, match="is empty"):
        open_plain(empty)
    notes = tmp_path / "notes.txt"
    notes.write_text("not a picture")
    with pytest.raises(InputError, match="no image that is read here"):
        open_plain(notes)
    fake = tmp_path / "fake.tif"
    fake.write_text("not a picture")
    with pytest.raises(InputError, match="no TIFF file: it begins otherwise"):
        open_plain(fake)
    with pytest.raises(InputError, match=r"cannot be opened|no file"):
        open_plain("a\0b.tif")


def test_wrong_suffix_does_not_matter(tmp_path):
    # the first bytes say what a file is
    path = tmp_path / "a.jpg"
    tifffile.imwrite(path, PICTURE)
    assert open_plain(path).file_format == "TIFF"


@pytest.mark.parametrize("keep", [4, 8, 100, 0.5, 0.95])
@pytest.mark.parametrize("suffix", ["tif", "png", "jpg", "mrc", "npy", "bmp"])
def test_truncated_files(tmp_path, suffix, keep):
    # bad input: cut short
    path = tmp_path / f"a.{suffix}"
    if suffix == "tif":
        tifffile.imwrite(path, PICTURE)
    elif suffix == "npy":
        np.save(path, PICTURE)
    elif suffix == "mrc":
        with mrcfile.new(path) as mrc:
            mrc.set_data(PICTURE.astype(np.int16))
    else:
        Image.fromarray(PICTURE).save(path)
    raw = path.read_bytes()
    path.write_bytes(raw[: keep if isinstance(keep, int) else int(len(raw) * keep)])
    with pytest.raises(InputError, match=r"'a\.\w+' (is|cannot|claims|has)"):
        open_plain(path)


def test_other_files_are_not_followed(tmp_path):
    # OME FileName may point anywhere; only this file's own pages are read
    secret = tmp_path / "elsewhere" / "b.ome.tif"
    secret.parent.mkdir()
    tifffile.imwrite(secret, 255 - PICTURE, ome=True)
    path = tmp_path / "a.ome.tif"
    tifffile.imwrite(path, PICTURE, ome=True, metadata={"axes": "YX"})
    raw = path.read_bytes()
    with tifffile.TiffFile(path) as tif:
        text = tif.pages[0].description
    changed = text.replace("<TiffData", f'<TiffData FileName="{secret}"').replace("<UUID", "<UUID FileName='b'")
    tifffile.imwrite(path, PICTURE, description=changed.encode(), metadata=None)
    assert raw != path.read_bytes()
    np.testing.assert_array_equal(open_plain(path).load(), PICTURE)


def test_missing_extra_says_what_to_install(tmp_path, monkeypatch):
    # optional dependency: the message names the command
    path = tmp_path / "a.dm3"
    path.write_bytes(b"\0\0\0\3 something")
    monkeypatch.setattr("layerscan.readers.instruments.find_spec", lambda name: None)
    with pytest.raises(MissingExtraError, match=r'pip install "layerscan\[instruments\]"'):
        open_plain(path)


def test_channels_of_a_grey_picture(tmp_path):
    # detectors stored as samples of one page: the first is read and that is said
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, np.stack([PICTURE, 255 - PICTURE], axis=-1), photometric="minisblack", planarconfig="contig")
    image = open_plain(path)
    np.testing.assert_array_equal(image.load(), PICTURE)
    assert any("2 channels" in doubt for doubt in image.doubts)


def test_from_array_does_not_copy_float32():
    # a big picture must not be held twice
    values = np.ones((5, 5), np.float32)
    assert from_array(values, pixel_size_nm=1.0).load() is values
    assert from_array(values.tolist(), pixel_size_nm=None).pixel_size is None


def test_from_array_takes_masks_and_refuses_ragged_rows():
    # a mask says where nothing was recorded; rows of different length are no picture
    values = np.ma.masked_greater(np.arange(12.0).reshape(3, 4), 9)
    loaded = from_array(values, pixel_size_nm=1.0).load()
    assert np.isnan(loaded).sum() == 2
    with pytest.raises(InputError, match="no array of numbers"):
        from_array([[1.0, 2.0], [3.0]], pixel_size_nm=1.0)
