"""The panel's logic without Qt and without a window: these run everywhere."""

import ast
import json
import math
import shlex
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from drawn_sections import PERIOD_PX, PIXEL_NM, draw_section, write_tiff
from layerscan.errors import InputError, SettingsError
from layerscan.records import (
    Average,
    Boundary,
    Detection,
    ImageSource,
    Layer,
    Measurement,
    PixelSize,
    Trace,
)
from layerscan.settings import CompareSettings, MeasureSettings, PredictSettings

from layerscan_napari import calls, colours, compute, desk, edits, images, pyramid, reader, traces
from layerscan_napari.budget import REST, DragBudget

PACKAGE = Path(compute.__file__).parent


def made_measurement(*, orientation_deg=0.0, leading=False, period_nm=100.0):
    """Four flat boundaries 40, 60, 40 nm apart in an image of 2 nm pixels, normal along the columns."""
    depths = [0.0, 40.0, 100.0, 140.0]
    station = np.arange(50)
    boundaries = tuple(
        Boundary(
            index=i,
            depth_nm=d,
            u_nm=0.5,
            roughness_nm=1.0 + i,
            trace=Trace(
                station=station,
                row_px=station.astype(float),
                column_px=np.full(50, 10 + d / 2),
                depth_nm=np.full(50, d),
                u_depth_nm=np.full(50, 0.5),
            ),
        )
        for i, d in enumerate(depths)
    )
    inner = [("dark", 40.0), ("bright", 60.0), ("dark", 40.0)]
    first = [Layer(index=0, phase="bright", thickness_nm=15.0, complete=False)] if leading else []
    layers = (
        *first,
        *(
            Layer(index=i + len(first), phase=p, thickness_nm=t, u_nm=0.7, sd_lateral_nm=2.0)
            for i, (p, t) in enumerate(inner)
        ),
    )
    return Measurement(
        version="0",
        settings=MeasureSettings().model_dump(),
        flags=("few_layers",),
        image=ImageSource(
            path="a.tif",
            sha256=None,
            page=0,
            shape=(50, 100),
            pixel_size=PixelSize(row_nm=2.0, column_nm=2.0, u_relative=None, source="tag"),
        ),
        structure="lamellae",
        layered=True,
        periodic=True,
        detection=Detection(layered=True, periodic=True, statistic=None, p_value=None, region=None),
        orientation_deg=orientation_deg,
        period=Average(mean=period_nm, u=1.0, sd=None, n=1),
        dark=Average(mean=40.0, u=0.5, sd=0.0, n=2),
        bright=Average(mean=60.0, u=0.5, sd=None, n=1),
        layers=layers,
        boundaries=boundaries,
    )


# --- nothing heavy, nothing of Qt ------------------------------------------------------------------------------------


def test_that_the_manifest_commands_import_without_the_heavy_parts():
    # issue: no heavy import at start; napari imports the reader's module when a file is dropped
    code = (
        "import sys, layerscan_napari.reader as r; r.get_reader('nothing.tif');"
        "print([m for m in ('numpy','scipy','qtpy','pyqtgraph','napari','numba','matplotlib') if m in sys.modules])"
    )
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == "[]"


@pytest.mark.parametrize("name", ["budget", "calls", "colours", "compute", "desk", "edits", "helper", "images", "notes",
                                  "overlays", "pyramid", "reader", "traces"])  # fmt: skip
def test_that_the_logic_is_free_of_qt(name):
    # issue, point 6: the panel's logic is kept free of Qt
    tree = ast.parse((PACKAGE / f"{name}.py").read_text(encoding="utf-8"))
    found = {node.module for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    found |= {alias.name for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    qt = {"qtpy", "pyqtgraph", "PySide6", "layerscan_napari.panel", "layerscan_napari.plots", "layerscan_napari.worker"}
    assert not {module for module in found if module and (module.split(".")[0] in qt or module in qt)}


def test_that_only_public_names_of_the_core_are_used():
    # issue: on the core's public functions only: no name with an underscore, no kernel
    for path in PACKAGE.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("layerscan."):
                assert not any(part.startswith("_") for part in node.module.split(".")), path
                assert not any(alias.name.startswith("_") for alias in node.names), path


# --- budget ----------------------------------------------------------------------------------------------------------


def test_that_a_part_of_unknown_cost_does_not_run_during_a_drag():
    budget = DragBudget(16)
    assert budget.fitting(("measure", "predict")) == ()
    budget.record("measure", 5)
    assert budget.fitting(("measure", "predict")) == ("measure",)
    budget.record("predict", 4)
    assert budget.fitting(("measure", "predict")) == ("measure", "predict")


def test_that_what_does_not_fit_together_follows_on_release():
    budget = DragBudget(16)
    budget.record("measure", 10)
    budget.record("predict", 9)
    assert budget.fitting(("measure", "predict")) == ("measure",)
    budget.record("measure", 40)
    budget.record("measure", 40)
    budget.record("measure", 40)
    assert budget.fitting(("measure", "predict")) == ()


def test_that_what_always_runs_is_set_aside():
    budget = DragBudget(16)
    budget.record("measure", 12)
    assert budget.fitting(("measure",)) == ("measure",)
    budget.record(REST, 5)
    assert budget.fitting(("measure",)) == ()


def test_that_one_slow_first_run_is_not_held_against_a_part():
    budget = DragBudget(16)
    budget.record("measure", 4000)  # compiles
    budget.record("measure", 6)
    assert budget.fitting(("measure",)) == ("measure",)
    budget.forget("measure")
    assert budget.cost_ms("measure") is None


# --- calls -----------------------------------------------------------------------------------------------------------


def test_that_a_call_reads_back_to_the_same_settings():
    settings = MeasureSettings(
        line=(10.25, 20, 300.5, 400), width="300 nm", pixel_size="2.5 +- 0.02 nm", obliquity="12 +- 3 deg", page=1,
        edits=("move 3 2.5 nm", "delete 7"),
    )  # fmt: skip
    words = shlex.split(calls.measure_call("/data/my 'odd' section.tif", settings))
    assert words[:3] == ["layerscan", "measure", "/data/my 'odd' section.tif"]
    options = list(zip(words[3::2], words[4::2], strict=True))
    assert ("--line", "10.25,20,300.5,400") in options
    assert ("--width", "300 nm") in options
    assert ("--page", "1") in options
    assert [value for name, value in options if name == "--edit"] == ["move 3 2.5 nm", "delete 7"]
    assert "--region" not in words


def test_that_predict_and_compare_calls_state_what_differs_from_the_defaults():
    call = calls.predict_call("m", PredictSettings(dark="n=1.56", bright="air", aperture=0.4), out="p")
    assert shlex.split(call) == shlex.split("layerscan predict m --dark n=1.56 --bright air --aperture 0.4 --out p")
    call = calls.compare_call("p", None, CompareSettings(lab=(50, -1.5, 2)))
    assert shlex.split(call) == ["layerscan", "compare", "p", "--lab", "50,-1.5,2"]


# --- corrections by hand ---------------------------------------------------------------------------------------------


def test_that_corrections_replace_each_other_and_can_be_taken_back():
    made = edits.move_boundary((), index=3, shift_nm=2.5)
    made = edits.move_boundary(made, index=3, shift_nm=4)
    assert made == ("move 3 4 nm",)
    assert edits.shift_of(made, index=3) == 4
    assert edits.shift_of(made, index=2) == 0
    made = edits.delete_boundary(made, index=3)
    made = edits.add_boundary(made, depth_nm=120.5)
    assert edits.add_boundary(made, depth_nm=120.5) == made == ("delete 3", "add 120.5 nm")
    assert edits.drop_correction(made, index=3) == ("add 120.5 nm",)
    assert edits.move_boundary(("move 1 2 nm",), index=1, shift_nm=0) == ()
    MeasureSettings(edits=made)  # the record reads them


# --- traces ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("leading", [False, True])
def test_that_a_point_is_placed_in_its_layer(leading):
    m = made_measurement(leading=leading)
    offset = int(leading)
    assert traces.layer_at(m, row_px=20, column_px=15).index == offset
    assert traces.layer_at(m, row_px=20, column_px=45).index == 1 + offset
    assert traces.layer_at(m, row_px=20, column_px=79).index == 2 + offset
    assert traces.layer_at(m, row_px=20, column_px=5) is None
    assert traces.layer_at(m, row_px=20, column_px=95) is None


def test_that_segments_carry_the_local_thickness_of_the_layer_behind_them():
    m = made_measurement()
    found = traces.traced_segments(m, most=80)
    assert found.vectors.shape == (80, 2, 2)
    for boundary, thickness in ((0, 40.0), (1, 60.0), (2, 40.0), (3, 40.0)):
        assert np.allclose(found.thickness_nm[found.boundary == boundary], thickness)
    assert set(found.layer[found.boundary == 3]) == {2}
    assert np.allclose(found.vectors[:, 1, 1], 0)


def test_that_a_gap_in_a_trace_is_not_bridged():
    m = made_measurement()
    trace = m.boundaries[0].trace
    keep = (trace.station < 10) | (trace.station >= 40)
    cut = Trace(**{n: getattr(trace, n)[keep] for n in ("station", "row_px", "column_px", "depth_nm", "u_depth_nm")})
    m = replace(m, boundaries=(replace(m.boundaries[0], trace=cut), *m.boundaries[1:]))
    found = traces.traced_segments(m)
    rows = found.vectors[found.boundary == 0]
    assert len(rows) == 9 + 9
    assert np.all(np.abs(rows[:, 1, 0]) <= 1)


def test_that_a_measurement_without_traces_has_no_segments():
    m = made_measurement()
    m = replace(m, boundaries=tuple(replace(b, trace=None) for b in m.boundaries))
    assert traces.traced_segments(m).vectors.shape == (0, 2, 2)
    assert traces.boundary_marks(m, width_px=10).shape == (0, 2, 2)


@pytest.mark.parametrize(("orientation", "across"), [(0.0, (1, 0)), (90.0, (0, 1)), (30.0, (3**0.5 / 2, -0.5))])
def test_that_marks_run_along_the_layers_through_their_boundary(orientation, across):
    # INTERFACE: the orientation is the direction of the layer normal, from +column towards +row
    m = made_measurement(orientation_deg=orientation)
    marks = traces.boundary_marks(m, width_px=10)
    assert marks.shape == (4, 2, 2)
    middle = marks[:, 0] + marks[:, 1] / 2
    assert np.allclose(middle[:, 1], [10, 30, 60, 80])
    assert abs(np.dot(marks[0, 1], across)) == pytest.approx(16)


def test_that_values_are_shown_to_the_second_digit_of_their_uncertainty():
    # JCGM 100:2008, 7.2.6: uncertainties are quoted to at most two significant digits
    assert traces.value_with_u(1234.56, 12.3) == "1235 ± 12 nm"
    assert traces.value_with_u(0.123456, 0.00123) == "0.1235 ± 0.0012 nm"
    assert traces.value_with_u(math.nan, 1) == traces.value_with_u(None, None) == "–"
    assert traces.average_in_words(Average(mean=100, u=1, sd=5, n=3)) == "100.0 ± 1.0 nm, spread 5 nm, n = 3"


def test_that_a_layer_in_words_says_thickness_roughness_and_uncertainty():
    m = made_measurement()
    text = traces.layer_in_words(m, m.layers[1])
    assert "Layer 1, bright: 60.00 ± 0.70 nm" in text
    assert "2 nm and 3 nm" in text


# --- colours ---------------------------------------------------------------------------------------------------------


def luminance(colour):
    # WCAG 2.2, definition of relative luminance
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("background", [(38, 41, 48), (239, 235, 233)])
def test_that_text_and_curves_stand_out_in_both_themes(background):
    # WCAG 2.2: 4.5 for text (1.4.3); 3 for parts of graphics (1.4.11), met in full by text, profile and boundaries
    chosen = colours.colours_for(background)
    back = luminance(chosen.background)

    def contrast(colour):
        low, high = sorted((luminance(colour), back))
        return (high + 0.05) / (low + 0.05)

    assert contrast(chosen.text) > 4.5
    for name in ("profile", "boundary", "dark", "predicted", "observed"):
        assert contrast(getattr(chosen, name)) > 3, name


# --- images ----------------------------------------------------------------------------------------------------------


class PlainLayer:
    """What the logic needs of a napari image layer."""

    ndim, rgb, multiscale, name = 2, False, False, "plain"

    def __init__(self, data, scale, unit, translate=(0.0, 0.0)):
        import pint

        self.data, self.scale, self.translate, self.metadata = data, scale, translate, {}
        self.units = (pint.Unit(unit), pint.Unit(unit))


@pytest.mark.parametrize(("unit", "factor"), [("nm", 1), ("um", 1e3), ("angstrom", 0.1), ("mm", 1e6)])
def test_that_a_layer_in_other_units_is_taken_to_nm(unit, factor):
    pytest.importorskip("pint")
    layer = PlainLayer(draw_section((30, 40)), (0.5, 0.25), unit, translate=(2.0, 0.0))
    size = images.micrograph_of_layer(layer).pixel_size
    assert (size.row_nm, size.column_nm) == pytest.approx((0.5 * factor, 0.25 * factor))
    place = images.overlay_placement(layer, images.micrograph_of_layer(layer))
    assert place["units"] == ("nm", "nm")
    assert place["translate"] == pytest.approx((2.0 * factor, 0.0))


def test_that_pixels_and_seconds_are_no_lengths():
    pytest.importorskip("pint")
    for unit in ("pixel", "second"):
        layer = PlainLayer(draw_section((30, 40)), (1.0, 1.0), unit)
        assert images.micrograph_of_layer(layer).pixel_size is None


def test_that_a_stated_pixel_size_keeps_the_pixels_and_its_words(section_file):
    pixels, held = images.keep_pixels(images.open_micrograph(section_file))
    fresh = images.with_pixel_size(held, "3 +- 0.03 nm")
    assert fresh.load() is pixels
    assert fresh.pixel_size.stated == "3 +- 0.03 nm"
    assert fresh.pixel_size.u_relative == pytest.approx(0.01)
    assert images.with_pixel_size(fresh, None).pixel_size.row_nm == pytest.approx(PIXEL_NM)
    with pytest.raises(SettingsError, match="3 parsec"):
        images.with_pixel_size(held, "3 parsec")


# --- reader ----------------------------------------------------------------------------------------------------------


def test_that_the_reader_gives_scale_units_and_axis_labels(section_file):
    ((pixels, options, kind),) = reader.get_reader(str(section_file))(str(section_file))
    assert kind == "image"
    assert options["scale"] == pytest.approx((PIXEL_NM, PIXEL_NM))
    assert options["units"] == ("nm", "nm")
    assert options["axis_labels"] == ("row", "column")
    assert options["metadata"]["layerscan"].load() is pixels  # one copy of the pixels


def test_that_a_file_without_a_pixel_size_opens_in_pixels(unscaled_file):
    _, options, _ = reader.read_image(unscaled_file)
    assert options["units"] == ("pixel", "pixel")
    assert options["metadata"]["layerscan"].pixel_size is None


def test_that_several_files_become_several_layers(section_file, unscaled_file):
    both = [str(section_file), str(unscaled_file)]
    assert len(reader.get_reader(both)(both)) == 2
    assert reader.get_reader([str(section_file), "missing.tif"]) is None


def test_that_every_sample_image_is_in_the_menu_and_opens_with_its_pixel_size():
    from importlib.resources import files

    import yaml
    from layerscan.demo import find_samples, list_samples
    from layerscan.uncertainty import parse_pixel_size

    from layerscan_napari import samples

    manifest = yaml.safe_load(files("layerscan_napari").joinpath("napari.yaml").read_text(encoding="utf-8"))
    offered = {item["key"] for item in manifest["contributions"]["sample_data"]}
    known = {one.image.removesuffix(".tif"): one for one in list_samples(find_samples())}
    assert offered == set(known)
    ((_, options, kind),) = samples.film_web_left()
    row, column = parse_pixel_size(known["film_web_left"].pixel_size)
    assert kind == "image"
    assert options["scale"] == pytest.approx((row.value, column.value))
    assert options["metadata"]["layerscan"].pixel_size.u_relative == pytest.approx(row.u / row.value)


def write_pyramid(path, pixels, *, below):
    import tifffile

    levels = [pixels, pixels[::2, ::2], pixels[::4, ::4]]
    options = {"tile": (64, 64), "photometric": "minisblack", "compression": "zlib"}
    size = {"resolution": (1e7 / PIXEL_NM, 1e7 / PIXEL_NM), "resolutionunit": "CENTIMETER"}
    with tifffile.TiffWriter(path) as file:
        file.write(levels[0], **options, **size, **({"subifds": 2} if below else {}))
        for level in levels[1:]:
            file.write(level, **options, subfiletype=1)
    return levels


@pytest.mark.parametrize("below", [True, False])
def test_that_a_tiled_pyramid_opens_as_one(tmp_path, below):
    # TIFF 6.0, section 15 (tiles), and Adobe's technical note 1 (SubIFDs), written by tifffile
    path = tmp_path / "pyramid.tif"
    levels = write_pyramid(path, draw_section((300, 410)), below=below)
    data, options, _ = reader.read_image(path)
    assert options["multiscale"] is True
    assert options["scale"] == pytest.approx((PIXEL_NM, PIXEL_NM))
    assert [level.shape for level in data] == [level.shape for level in levels]
    for lazy, level in zip(data, levels, strict=True):
        assert np.array_equal(np.asarray(lazy), level)
        assert np.array_equal(lazy[10:70, 33:90], level[10:70, 33:90])
        assert np.array_equal(lazy[5:60:3, ::7], level[5:60:3, ::7])
    assert np.array_equal(data[0][250:300, 400:410], levels[0][250:300, 400:410])
    assert np.array_equal(data[0][-1], levels[0][-1])
    with pytest.raises(IndexError, match="400"):
        data[0][400]


def test_that_other_files_are_no_pyramids(tmp_path, section_file):
    shape = (360, 480)
    assert pyramid.open_levels(section_file, shape=shape) is None
    stack = write_tiff(
        tmp_path / "stack.tif", np.stack([draw_section((64, 64))] * 3), tile=(32, 32), photometric="minisblack"
    )
    assert pyramid.open_levels(stack, shape=(64, 64)) is None
    broken = tmp_path / "broken.tif"
    broken.write_bytes(section_file.read_bytes()[:300])
    assert pyramid.open_levels(broken, shape=shape) is None


# --- the line --------------------------------------------------------------------------------------------------------


def test_that_a_drawn_line_is_what_can_be_typed():
    drawn = np.array([[10.123456, 20.98765], [100.5, 33.333333]], dtype=np.float32)
    line = compute.rounded_line(drawn)
    assert line == (10.12, 20.99, 100.5, 33.33)
    assert MeasureSettings(line=line).line == line


# --- saved work ------------------------------------------------------------------------------------------------------


def kept(**changes):
    return desk.Kept(**{"name": "a", "measurement": made_measurement(), **changes})


def test_that_saved_work_reopens_as_it_was(tmp_path):
    before = made_measurement(period_nm=98.0)
    held = desk.Desk(
        images=(
            desk.OpenImage(path=None, lines=(desk.LineEntry(line=(1, 2, 3, 4.5), width="20"),)),
            desk.OpenImage(path=None, field=desk.FieldResult(measurement=made_measurement(), unedited=before)),
        ),
        selected=1,
        measure=MeasureSettings(obliquity="5 deg"),
        predict=PredictSettings(dark="n=1.56", bright="air"),
        compare=CompareSettings(scale="free"),
        kept=(kept(name="first", note="left side, near the knife"), kept(name="second", unedited=before)),
    )
    path = desk.save_desk(tmp_path, held)
    again = desk.load_desk(path)
    assert (again.measure, again.predict, again.compare) == (held.measure, held.predict, held.compare)
    assert again.selected == 1
    assert again.images[0].lines == held.images[0].lines
    assert again.images[1].field.unedited.period.mean == 98.0
    assert [(k.name, k.note) for k in again.kept] == [(k.name, k.note) for k in held.kept]
    assert again.kept[0].unedited is None
    assert again.kept[1].unedited.period.mean == 98.0
    for one, other in zip(again.kept[0].measurement.boundaries, held.kept[0].measurement.boundaries, strict=True):
        assert np.array_equal(one.trace.row_px, other.trace.row_px)
    assert len(again.notes) == 2  # neither image came from a file


def test_that_saved_work_fits_its_schema(tmp_path):
    jsonschema = pytest.importorskip("jsonschema")
    path = desk.save_desk(tmp_path, desk.Desk(kept=(kept(),)))
    jsonschema.validate(json.loads(path.read_text()), desk.json_schema())


def test_that_a_moved_or_changed_image_is_said(tmp_path, section_file):
    copy = tmp_path / "copy.tif"
    copy.write_bytes(section_file.read_bytes())
    sha = images.open_micrograph(copy).sha256
    path = desk.save_desk(tmp_path / "work", desk.Desk(images=(desk.OpenImage(path=str(copy), sha256=sha),)))
    assert json.loads(path.read_text())["images"][0]["path"] == "../copy.tif"
    assert desk.load_desk(path).notes == ()
    write_tiff(copy, draw_section(noise=9.0))
    assert "has changed" in desk.load_desk(path).notes[0]
    copy.unlink()
    assert "was not found" in desk.load_desk(path).notes[0]


@pytest.mark.parametrize(
    ("text", "match"),
    [("{", "no JSON"), ('{"schema": "layerscan.desk/1"}', "version"), ('{"schema": "other/1"}', "schema")],
)
def test_that_what_is_no_saved_work_is_refused(tmp_path, text, match):
    (tmp_path / "desk.json").write_text(text)
    with pytest.raises(InputError, match=match):
        desk.load_desk(tmp_path)


def test_that_missing_saved_work_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"desk\.json"):
        desk.load_desk(tmp_path)


def test_that_settings_are_saved_alone_and_loaded(tmp_path):
    chosen = {
        "measure": MeasureSettings(compression="5 +- 2 %"),
        "predict": PredictSettings(dark="n=1.6", angle=30),
        "compare": CompareSettings(quantity="reflectance"),
    }
    desk.save_settings(tmp_path / "s.json", **chosen)
    again = desk.load_settings(tmp_path / "s.json")
    assert {name: getattr(again, name) for name in chosen} == chosen


def test_that_the_table_holds_every_kept_result(tmp_path):
    from layerscan.document_files import read_csv

    names = desk.export_results(tmp_path, (kept(name="Left side"), kept(name="right/side", note="thin, dark")))
    assert names == ("01-left-side", "02-right-side")
    rows = [row for _, row in read_csv(tmp_path / "table.csv", required=desk.TABLE_COLUMNS)]
    assert [row["period_nm"] for row in rows] == ["100", "100"]
    assert rows[1]["note"] == "thin, dark"
    assert {p.name for p in (tmp_path / "01-left-side").iterdir()} == {"calls.txt", "measurement"}


def test_that_names_stay_apart():
    assert desk.free_name("a", ["b"]) == "a"
    assert desk.free_name("a", ["a", "a 2"]) == "a 3"


# --- jobs on a real image --------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def line_job(section_file):
    _, micrograph = images.keep_pixels(images.open_micrograph(section_file))
    return compute.Job(
        micrograph=micrograph,
        measure=MeasureSettings(line=(180.0, 20.0, 180.0, 460.0), width="20"),
        predict=PredictSettings(dark="n=1.56", bright="air", draws=20),
    )


def test_that_a_drag_shows_the_same_numbers_as_the_release(line_job):
    budget = DragBudget(1e9)
    first = compute.refresh(line_job, budget)
    assert first.following == ("measure", "predict")
    final = compute.complete(line_job, budget)
    again = compute.refresh(line_job, budget)
    assert again.following == ()
    assert again.measurement.period == final.measurement.period
    assert np.array_equal(again.prediction.reflectance.value, final.prediction.reflectance.value)
    assert final.measurement.period.mean == pytest.approx(PERIOD_PX * PIXEL_NM, rel=0.02)


@pytest.mark.parametrize("line", [(180.0, 20.0, 180.0, 460.0), (180.0, 460.0, 180.0, 20.0), (300.0, 30.0, 60.0, 420.0)])
def test_that_the_quick_profile_is_that_of_the_measurement(line_job, line):
    # the measurement shears its band along the layers, so a narrow band is compared; both run the same way
    import layerscan

    job = replace(line_job, measure=MeasureSettings(line=line, width="3"))
    distance, intensity = compute.band_profile(job)
    exact = layerscan.measure(job.micrograph, settings=job.measure).profile
    assert distance[-1] == pytest.approx(math.hypot(line[2] - line[0], line[3] - line[1]) * PIXEL_NM, rel=0.01)
    both = min(len(intensity), len(exact.intensity))
    assert np.corrcoef(intensity[:both], exact.intensity[:both])[0, 1] > 0.95
    assert compute.refresh(job, DragBudget()).profile is not None


def test_that_an_edited_job_keeps_both_results(line_job):
    edited = replace(line_job, measure=line_job.measure.model_copy(update={"edits": ("move 3 4 nm",)}), predict=None)
    result = compute.complete(edited, DragBudget())
    assert "edited_by_hand" in result.measurement.flags
    assert "edited_by_hand" not in result.unedited.flags
    difference = result.measurement.layers[3].thickness_nm - result.unedited.layers[3].thickness_nm
    assert abs(difference) == pytest.approx(4, abs=0.3)


def test_that_an_interrupted_job_stops(line_job):
    from layerscan.errors import Interrupted

    def stop(what, fraction):
        raise Interrupted("now")

    with pytest.raises(Interrupted):
        compute.complete(replace(line_job, measure=MeasureSettings()), DragBudget(), stop)


def test_that_a_prediction_that_is_impossible_leaves_the_measurement(line_job):
    result = compute.complete(
        replace(line_job, predict=PredictSettings(dark="no such thing", bright="air")), DragBudget()
    )
    assert result.measurement.layers
    assert result.prediction is None
    assert "no such thing" in result.notes[0]
