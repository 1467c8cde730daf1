"""Container files: decoded in a process of their own, with a deadline, a memory limit, and no way to other files."""

from __future__ import annotations

import numpy as np
import pytest

from layerscan.errors import CalibrationError, InputError
from layerscan.readers import instruments
from layerscan.readers.container_worker import describe_axis, frame_count
from layerscan.readers.images import open_image

PICTURE = np.random.default_rng(2).integers(0, 255, (20, 24)).astype(np.uint8)


def write_container(path, data, *, scales=(2.0, 3.0), units=("nm", "nm")):
    """A file as the optional library itself writes it."""
    hspy = pytest.importorskip("rsciio.hspy", reason="RosettaSciIO is not installed")
    axes = [{"size": n, "scale": 1.0, "units": "s", "navigate": True, "index_in_array": 0} for n in data.shape[:-2]]
    axes += [
        {"size": n, "scale": s, "units": u, "name": name, "navigate": False, "index_in_array": data.ndim - 2 + k}
        for k, (n, s, u, name) in enumerate(zip(data.shape[-2:], scales, units, "yx", strict=True))
    ]
    for axis in axes:
        axis |= {"offset": 0.0, "_type": "UniformDataAxis", "is_binned": False}
    signal = {
        "data": data,
        "axes": axes,
        "metadata": {"General": {"title": "a"}, "Signal": {"signal_type": ""}},
        "original_metadata": {},
        "learning_results": {},
        "tmp_parameters": {},
        "attributes": {"_lazy": False, "ragged": False},
        "package_info": {},
        "models": {},
    }
    hspy.file_writer(str(path), signal)
    return path


def test_picture_and_axes_come_back(tmp_path):
    # written by RosettaSciIO; each axis keeps its own scale
    image = open_image(write_container(tmp_path / "a.hspy", PICTURE))
    np.testing.assert_array_equal(image.load(), PICTURE)
    assert (image.pixel_size.row_nm, image.pixel_size.column_nm) == (2.0, 3.0)


def test_stack_of_pictures(tmp_path):
    # a navigation axis counts pages
    path = write_container(tmp_path / "a.hspy", np.stack([PICTURE, PICTURE[::-1], PICTURE + 1]))
    image = open_image(path, page=1)
    assert image.page_count == 3
    np.testing.assert_array_equal(image.load(), PICTURE[::-1])
    with pytest.raises(InputError, match="pages 0 to 2"):
        open_image(path, page=3)


@pytest.mark.parametrize(("units", "match"), [(("1/nm", "1/nm"), "no picture of lengths"), ((None, None), "no unit")])
def test_axes_that_are_no_lengths(tmp_path, units, match):
    # diffraction patterns, and axes without a unit
    path = write_container(tmp_path / "a.hspy", PICTURE, units=units)
    with pytest.raises(CalibrationError, match=match):
        open_image(path)


@pytest.mark.parametrize("kind", ["external link", "soft link", "external storage", "virtual"])
def test_hdf5_reaches_no_other_file(tmp_path, kind):
    # external storage returned the bytes of a system file; HDF5 file format, external file list and virtual layout
    path = write_container(tmp_path / "a.hspy", PICTURE)
    h5py = pytest.importorskip("h5py", reason="h5py is not installed")
    other = tmp_path / "secret.bin"
    other.write_bytes(bytes(480))
    with h5py.File(path, "r+") as file:
        if kind == "external link":
            file["x"] = h5py.ExternalLink(str(other), "/data")
        elif kind == "soft link":
            file["x"] = h5py.SoftLink("/Experiments")
        elif kind == "external storage":
            file.create_dataset("x", shape=(480,), dtype="u1", external=[(str(other), 0, 480)])
        else:
            layout = h5py.VirtualLayout(shape=(480,), dtype="u1")
            layout[:] = h5py.VirtualSource(str(other), "d", shape=(480,))
            file.create_virtual_dataset("x", layout)
    with pytest.raises(InputError, match="which are not followed"):
        open_image(path)


def test_hdf5_that_asks_for_gigabytes(tmp_path):
    # a few kB with a fill value ask for 74 GiB
    path = write_container(tmp_path / "a.hspy", PICTURE)
    h5py = pytest.importorskip("h5py", reason="h5py is not installed")
    with h5py.File(path, "r+") as file:
        (group,) = file["Experiments"].values()
        del group["data"]
        group.create_dataset("data", shape=(200_000, 400_000), dtype="u1", chunks=(1000, 1000), fillvalue=7)
        for name in group:
            if name.startswith("axis"):
                group[name].attrs["size"] = 200_000 if name.endswith("0") else 400_000
    assert path.stat().st_size < 1_000_000
    with pytest.raises(InputError, match=r"memory|allocate"):
        open_image(path)


def test_deadline(tmp_path, monkeypatch):
    # a decoder that hangs is stopped
    path = write_container(tmp_path / "a.hspy", PICTURE)
    monkeypatch.setattr(instruments, "DEADLINE_S", 0.01)
    with pytest.raises(InputError, match="was not decoded within 0 s"):
        open_image(path)


def test_worker_that_dies(tmp_path, monkeypatch):
    # a crash in a C library ends the worker only
    path = write_container(tmp_path / "a.hspy", PICTURE)
    monkeypatch.setattr(instruments.sys, "executable", "/bin/false")
    with pytest.raises(InputError, match="ended without an answer"):
        open_image(path)


@pytest.mark.parametrize("name", ["a.dm3", "a.dm4", "a.ser", "a.emi", "a.emd", "a.hdf5"])
def test_noise_is_refused(tmp_path, name):
    # bad input: no container at all
    pytest.importorskip("rsciio", reason="RosettaSciIO is not installed")
    path = tmp_path / name
    path.write_bytes(np.random.default_rng(4).bytes(3000))
    with pytest.raises(InputError, match=f"'{name}' cannot be read"):
        open_image(path)


def test_frames_and_axes_of_a_signal():
    # spectra and maps of spectra hold no pictures
    def signal(shape, navigate):
        return {"data": np.zeros(shape), "axes": [{"navigate": flag} for flag in navigate]}

    assert frame_count(signal((4, 5), (False, False))) == 1
    assert frame_count(signal((3, 2, 4, 5), (True, True, False, False))) == 6
    assert frame_count(signal((4, 5, 100), (True, True, False))) == 0
    assert frame_count(signal((100,), (False,))) == 0
    assert describe_axis({"scale": np.float64(2), "units": None}) == {"scale": 2.0, "unit": None}
