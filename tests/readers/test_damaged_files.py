"""Damaged and hostile files: a valid image or an error in plain words, never another exception."""

from __future__ import annotations

import gzip
import struct
from collections import Counter
from pathlib import Path

import mrcfile
import numpy as np
import pytest
import tifffile
from PIL import Image

from layerscan.errors import InputError, LayerscanError
from layerscan.readers.images import open_image

PICTURE = np.random.default_rng(11).integers(0, 256, (24, 30)).astype(np.uint8)


def make_files(folder):
    """Small files of many kinds, each with a scale of its own."""
    resolution = {"resolution": (4e6, 4e6), "resolutionunit": 3}
    tifffile.imwrite(folder / "plain.tif", PICTURE, **resolution)
    tifffile.imwrite(folder / "tiled.tif", PICTURE.astype(np.uint16), tile=(16, 16), compression="zlib", **resolution)
    tifffile.imwrite(folder / "lzw.tif", PICTURE, compression="lzw", predictor=True, **resolution)
    tifffile.imwrite(
        folder / "rgb.tif", np.stack([PICTURE] * 3, axis=-1), photometric="rgb", rowsperstrip=4, **resolution
    )
    tifffile.imwrite(folder / "pages.tif", np.stack([PICTURE] * 3).astype(np.float32), photometric="minisblack")
    tifffile.imwrite(
        folder / "ome.ome.tif", PICTURE, ome=True, metadata={"axes": "YX", "PhysicalSizeX": 2.0, "PhysicalSizeY": 2.0}
    )
    tifffile.imwrite(folder / "unit.tif", PICTURE, description="unit=nm\n", resolution=(0.5, 0.5), metadata=None)
    tifffile.imwrite(folder / "jpeg.tif", PICTURE, compression="jpeg")
    tifffile.imwrite(folder / "big.tif", PICTURE, bigtiff=True, byteorder=">")
    Image.fromarray(PICTURE).save(folder / "a.png", dpi=(5e6, 5e6))
    Image.fromarray(PICTURE.astype(np.uint16) * 200).save(folder / "b.png")
    Image.fromarray(PICTURE).save(folder / "a.jpg", dpi=(50_000, 50_000))
    Image.fromarray(PICTURE).save(folder / "a.bmp")
    np.save(folder / "a.npy", PICTURE)
    for name, dtype in (("a.mrc", np.int16), ("b.mrc", np.float32)):
        with mrcfile.new(folder / name) as mrc:
            mrc.set_data(np.stack([PICTURE, PICTURE]).astype(dtype))
            mrc.voxel_size = 20.0
    (folder / "c.mrc.gz").write_bytes(gzip.compress((folder / "a.mrc").read_bytes()))
    return sorted(folder.iterdir())


def damage(raw, rng):
    """Cut, overwrite, insert or remove bytes; half of the damage hits the first 400 bytes, where headers lie."""
    data = bytearray(raw)
    for _ in range(int(rng.integers(1, 4))):
        reach = min(len(data), 400) if rng.random() < 0.5 else len(data)
        at = int(rng.integers(0, max(reach, 1)))
        kind = rng.integers(0, 5)
        if kind == 0:
            del data[at:]
        elif kind == 1:
            data[at : at + 1] = bytes([int(rng.integers(0, 256))])
        elif kind == 2:
            extreme = [0, 1, 0xFFFFFFFF, 0x7FFFFFFF, 0x80000000, 0xFFFF][int(rng.integers(0, 6))]
            data[at : at + 4] = struct.pack("<I", extreme)
        elif kind == 3:
            data[at:at] = rng.bytes(int(rng.integers(1, 9)))
        else:
            del data[at : at + int(rng.integers(1, 9))]
    return bytes(data)


def try_to_open(path, page):
    """Open a damaged file; says "refused" or "opened", anything but a plain error escapes."""
    try:
        image = open_image(path, page=page, require_pixel_size=False)
        pixels = image.load()
    except LayerscanError as error:
        return "refused" if path.name in str(error) else "refused without a name"
    assert pixels.shape == image.shape
    assert pixels.dtype == np.float32
    assert np.isfinite(pixels).any()
    size = image.pixel_size
    assert size is None or (0 < size.row_nm < 1e7 and 0 < size.column_nm < 1e7)
    return "opened"


def run_fuzz(folder, count, seed):
    sources = make_files(folder)
    rng = np.random.default_rng(seed)
    outcomes = Counter()
    for number in range(count):
        source = sources[number % len(sources)]
        path = folder / f"damaged.{source.name.split('.', 1)[1]}"
        path.write_bytes(damage(source.read_bytes(), rng))
        outcomes[try_to_open(path, int(rng.integers(0, 2)))] += 1
    return outcomes


def test_200_damaged_files(tmp_path):
    # seeded mutations of files that this test makes; both outcomes must occur, else the damage is of no use
    outcomes = run_fuzz(tmp_path, 200, seed=1)
    assert outcomes["refused"] >= 40
    assert outcomes["opened"] >= 20
    assert outcomes["refused"] + outcomes["opened"] == 200


@pytest.mark.slow
def test_3000_damaged_files(tmp_path):
    # the same with more seeds
    outcomes = run_fuzz(tmp_path, 3000, seed=2)
    assert outcomes["refused"] >= 600
    assert outcomes["opened"] >= 300
    assert outcomes["refused"] + outcomes["opened"] == 3000


@pytest.mark.parametrize("name", ["plain.tif", "lzw.tif", "a.png", "a.mrc", "unit.tif"])
def test_whole_files_open(tmp_path, name):
    # the files that are damaged elsewhere are sound
    make_files(tmp_path)
    assert open_image(tmp_path / name).pixel_size is not None


def directory(entries, next_offset=0):
    """A TIFF directory from (code, type, count, value) with values that fit into four bytes."""
    body = struct.pack("<H", len(entries))
    for code, kind, count, value in entries:
        packed = struct.pack("<H", value) + b"\0\0" if kind == 3 and count == 1 else struct.pack("<I", value)
        body += struct.pack("<HHI", code, kind, count) + packed
    return body + struct.pack("<I", next_offset)


def test_sparse_tiles_that_ask_for_gigabytes(tmp_path):
    # 134 bytes: one tile of 60000 x 60000 that is not stored; TIFF 6.0, section 15
    side = 60_000
    entries = [(256, 4, 1, side), (257, 4, 1, side), (258, 3, 1, 8), (259, 3, 1, 1), (262, 3, 1, 1), (277, 3, 1, 1)]
    entries += [(322, 4, 1, side), (323, 4, 1, side), (324, 4, 1, 0), (325, 4, 1, 0)]
    path = tmp_path / "sparse.tif"
    path.write_bytes(b"II*\0" + struct.pack("<I", 8) + directory(entries))
    assert path.stat().st_size <= 140
    with pytest.raises(InputError, match="pixels"):
        open_image(path, require_pixel_size=False)
    smaller = [(c, k, n, 40_000 if v == side else v) for c, k, n, v in entries]
    path.write_bytes(b"II*\0" + struct.pack("<I", 8) + directory(smaller))
    with pytest.raises(InputError, match=r"claims 40000 x 40000 pixels .* only 0 bytes are stored"):
        open_image(path, require_pixel_size=False)


def test_strips_that_share_their_bytes(tmp_path):
    # a thousand strips, all at the same place of a small file, ask for 1.6 GB
    side, strips, size = 40_000, 1000, 1_600_000
    head = 8 + len(directory([(0, 3, 1, 0)] * 9))
    entries = [(256, 4, 1, side), (257, 4, 1, side), (258, 3, 1, 8), (259, 3, 1, 1), (262, 3, 1, 1)]
    entries += [(273, 4, strips, head), (277, 3, 1, 1), (278, 4, 1, 40), (279, 4, strips, head + 4 * strips)]
    path = tmp_path / "shared.tif"
    places = struct.pack("<I", head + 8 * strips) * strips + struct.pack("<I", size) * strips
    path.write_bytes(b"II*\0" + struct.pack("<I", 8) + directory(entries) + places + bytes(size))
    with pytest.raises(InputError, match=r"claims 40000 x 40000 pixels .* stored for them"):
        open_image(path, require_pixel_size=False)


def test_tiles_without_data_are_holes(tmp_path):
    # a tile with offset and length 0 holds no data
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, np.tile(PICTURE[:16, :16], (3, 3)), tile=(16, 16))
    with tifffile.TiffFile(path) as tif:
        page = tif.pages[0]
        counts, offsets = page.tags[325], page.tags[324]
        raw = bytearray(path.read_bytes())
        for tag in (counts, offsets):
            width = 2 if tag.dtype == 3 else 4
            raw[tag.valueoffset + 4 * width : tag.valueoffset + 5 * width] = bytes(width)
    path.write_bytes(raw)
    image = open_image(path, require_pixel_size=False)
    loaded = image.load()
    assert np.isnan(loaded[16:32, 16:32]).all()
    assert np.isfinite(loaded).sum() == 8 * 256
    assert any("1 of 9" in doubt for doubt in image.doubts)


@pytest.mark.parametrize("pages", [3000, 100_001])
def test_many_linked_pages(tmp_path, pages):
    # directories that follow each other; at most 100,000 are accepted
    entries = [(256, 3, 1, 1), (257, 3, 1, 1), (258, 3, 1, 8), (259, 3, 1, 1), (262, 3, 1, 1), (273, 4, 1, 4)]
    entries += [(277, 3, 1, 1), (278, 3, 1, 1), (279, 4, 1, 1)]
    size = len(directory(entries))
    path = tmp_path / "many.tif"
    with path.open("wb") as file:
        file.write(b"II*\0" + struct.pack("<I", 8))
        for number in range(pages):
            file.write(directory(entries, 0 if number == pages - 1 else 8 + (number + 1) * size))
    if pages > 100_000:
        with pytest.raises(InputError, match="at most 100000 are read"):
            open_image(path, require_pixel_size=False)
    else:
        assert open_image(path, page=pages - 1, require_pixel_size=False).page_count == pages


def test_linked_pages_that_run_in_a_circle(tmp_path):
    # the directory names itself as the next one
    entries = [(256, 3, 1, 1), (257, 3, 1, 1), (258, 3, 1, 8), (259, 3, 1, 1), (262, 3, 1, 1), (273, 4, 1, 4)]
    entries += [(277, 3, 1, 1), (278, 3, 1, 1), (279, 4, 1, 1)]
    path = tmp_path / "circle.tif"
    path.write_bytes(b"II*\0" + struct.pack("<I", 8) + directory(entries, 8))
    assert try_to_open(path, 0) in ("refused", "opened")
    with pytest.raises(InputError, match=r"Page 7 .* does not exist"):
        open_image(path, page=7, require_pixel_size=False)


def test_packed_map_that_expands(tmp_path):
    # gzip of zeros: 1.5 MB unpack to 1.6 GB; only one section is unpacked, within a limit
    with mrcfile.new(tmp_path / "a.mrc") as mrc:
        mrc.set_data(np.zeros((2, 8, 8), np.int16))
    header = bytearray((tmp_path / "a.mrc").read_bytes()[:1024])
    header[:12] = struct.pack("<3i", 60_000, 30_000, 1)
    path = tmp_path / "bomb.mrc.gz"
    path.write_bytes(gzip.compress(bytes(header) + bytes(1_000_000)))
    with pytest.raises(InputError, match="claims 30000 x 60000 pixels"):
        open_image(path, require_pixel_size=False)
    header[:12] = struct.pack("<3i", 1000, 1000, 100_000)
    path.write_bytes(gzip.compress(bytes(header) + bytes(1_000_000)))
    with pytest.raises(InputError, match="too deep in a compressed file"):
        open_image(path, require_pixel_size=False, page=50_000)


def test_extended_header_that_is_not_there(tmp_path):
    # an extension of 2 GiB in a small file
    with mrcfile.new(tmp_path / "a.mrc") as mrc:
        mrc.set_data(np.zeros((2, 8, 8), np.int16))
    raw = bytearray((tmp_path / "a.mrc").read_bytes())
    raw[92:96] = struct.pack("<i", 2**31 - 1)
    (tmp_path / "a.mrc").write_bytes(raw)
    with pytest.raises(InputError, match="cut short or no MRC"):
        open_image(tmp_path / "a.mrc", require_pixel_size=False)


def test_png_that_claims_gigapixels(tmp_path):
    # IHDR says 60000 x 60000; the size is checked before decoding
    import zlib

    ihdr = b"IHDR" + struct.pack(">IIBBBBB", 60_000, 60_000, 8, 0, 0, 0, 0)
    chunk = struct.pack(">I", 13) + ihdr + struct.pack(">I", zlib.crc32(ihdr))
    path = tmp_path / "a.png"
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + chunk + b"\0\0\0\0IDAT" + struct.pack(">I", zlib.crc32(b"IDAT")))
    with pytest.raises(InputError, match="pixels"):
        open_image(path, require_pixel_size=False)


def test_npy_that_claims_more_than_it_has(tmp_path):
    # the header says 10^9 rows
    path = tmp_path / "a.npy"
    np.save(path, PICTURE)
    path.write_bytes(path.read_bytes().replace(b"(24, 30)", b"(1000000000, 30)"[:8].ljust(8)))
    assert try_to_open(path, 0) == "refused"


def test_pickled_arrays_are_refused(tmp_path):
    # a pickle can run code
    path = tmp_path / "a.npy"
    np.save(path, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    with pytest.raises(InputError, match="cannot be read as NPY"):
        open_image(path, require_pixel_size=False)


def test_entities_in_a_description(tmp_path):
    # entity expansion in XML: not read at all
    bomb = '<?xml version="1.0"?><!DOCTYPE a [<!ENTITY b "bbbb"><!ENTITY c "&b;&b;">]><OME>&c;</OME>'
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, PICTURE, description=bomb, metadata=None)
    image = open_image(path, require_pixel_size=False)
    assert any("entities" in doubt for doubt in image.doubts)


def test_damaged_private_tag_costs_no_picture(tmp_path):
    # a maker's tag full of noise
    path = tmp_path / "a.tif"
    noise = np.random.default_rng(1).bytes(500)
    for code in (34118, 34682, 33560, 65009):
        tifffile.imwrite(path, PICTURE, extratags=[(code, 1, len(noise), noise, True)], metadata=None)
        assert open_image(path, pixel_size_nm=2.0).load().shape == PICTURE.shape


@pytest.mark.slow
@pytest.mark.parametrize("name", ["decimal_comma.dm3", "series.ser", "blank_frame.emd", "tem_tag33560.tif"])
def test_damaged_instrument_files(tmp_path, name):
    # files that nobody here made, damaged: each decoder works in a process of its own
    source = Path(__file__).resolve().parents[2].parent / "shared" / "real" / "readers" / name
    if not source.is_file():
        pytest.skip("the folder of real files is not here")
    pytest.importorskip("rsciio", reason="RosettaSciIO is not installed")
    rng = np.random.default_rng(8)
    outcomes = Counter()
    for _ in range(15):
        path = tmp_path / f"damaged{source.suffix}"
        path.write_bytes(damage(source.read_bytes(), rng))
        outcomes[try_to_open(path, 0)] += 1
    assert outcomes["refused"] + outcomes["opened"] == 15
    assert outcomes["refused"] >= 5
