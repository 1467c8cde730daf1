import json
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from layerscan import documents, records
from layerscan.document_files import csv_text, dump_json, plain, read_csv, write_file
from layerscan.document_models import DOCUMENTS
from layerscan.errors import InputError
from layerscan.layer_tables import layer_table, read_layer_table
from layerscan.verification import find_changes

ROOT = Path(__file__).resolve().parents[2]


def make_measurement(path="a.tif"):
    """Three complete layers between four boundaries that run along the columns; invented numbers."""
    depth = [0.0, 40.0, 140.0, 180.0]
    stations = np.arange(5)
    boundaries = tuple(
        records.Boundary(
            index=i,
            depth_nm=d,
            u_nm=0.2,
            roughness_nm=1.0,
            trace=records.Trace(
                station=stations,
                row_px=np.full(5, 10 + d / 2.0),
                column_px=stations * 4.0,
                depth_nm=np.full(5, d) + 0.1 * i * (stations - 2),
                u_depth_nm=np.full(5, 0.5),
            ),
        )
        for i, d in enumerate(depth)
    )
    layers = tuple(
        records.Layer(index=i, phase=p, thickness_nm=t, u_nm=0.3, sd_lateral_nm=0.4)
        for i, (p, t) in enumerate((("dark", 40.0), ("bright", 100.0), ("dark", 40.0)))
    )
    size = records.PixelSize(row_nm=2.0, column_nm=2.0, u_relative=0.01, source="stated by the user", stated="2 nm")
    return records.Measurement(
        version="0.1.0",
        settings={"pixel_size": "2 nm", "page": 0},
        flags=("few_layers",),
        image=records.ImageSource(path=path, sha256="00", page=0, shape=(100, 20), pixel_size=size),
        structure="lamellae",
        layered=True,
        periodic=True,
        detection=records.Detection(layered=True, periodic=True, statistic=40.0, p_value=1e-6, region=(0, 0, 90, 20)),
        orientation_deg=90.0,
        u_orientation_deg=0.1,
        spacing=records.Spacing(value=140.0, u=1.5, method="power spectrum"),
        period=records.Average(mean=140.0, u=1.4, sd=None, n=1),
        dark=records.Average(mean=40.0, u=0.4, sd=0.1, n=2),
        bright=records.Average(mean=100.0, u=1.0, sd=None, n=1),
        layers=layers,
        boundaries=boundaries,
        budget=(
            records.BudgetRow(
                quantity="period_nm", component="calibration", kind="B", distribution="normal", relative=0.01, u_nm=1.4,
                sensitivity=1.0, share=0.99,
            ),
        ),
        statistics=records.StackStatistics(limited_by="calibration"),
        profile=records.Profile(
            depth_nm=np.arange(4.0), intensity=np.array([1.0, np.nan, 2.0, 3.0]),
            frequency_per_nm=np.arange(3.0), power=np.arange(3.0),
        ),
        start_cut_by_frame=False,
        end_cut_by_frame=True,
    )  # fmt: skip


def test_a_measurement_comes_back_as_it_was_written(tmp_path):
    written = make_measurement(path=None)
    document = documents.write_measurement(tmp_path, written, figure="<svg/>")
    back = documents.read_measurement(tmp_path)
    assert documents.measurement_document(back) == document == json.loads((tmp_path / "measurement.json").read_text())
    for a, b in zip(written.boundaries, back.boundaries, strict=True):
        for name in ("station", "row_px", "column_px", "depth_nm", "u_depth_nm"):
            np.testing.assert_allclose(getattr(a.trace, name), getattr(b.trace, name), rtol=1e-8)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["figure.svg", "layers.csv", "measurement.json", "traces.csv"]


def test_unknown_is_null_and_never_a_number(tmp_path):
    nothing = replace(
        make_measurement(), layered=False, periodic=False, structure="none", spacing=None, period=None, dark=None,
        bright=None, layers=(), boundaries=(), budget=(), statistics=None, profile=None, orientation_deg=None,
        u_orientation_deg=None, start_cut_by_frame=None, end_cut_by_frame=None,
    )  # fmt: skip
    document = documents.write_measurement(tmp_path, nothing)
    for name in ("spacing_nm", "period_nm", "dark_nm", "middle_nm", "bright_nm", "orientation_deg"):
        assert document[name] is None
    assert documents.read_measurement(tmp_path).layers == ()


@pytest.mark.parametrize("what", sorted(DOCUMENTS))
def test_the_shipped_schema_is_the_one_in_force(what):
    shipped = json.loads((ROOT / "layerscan" / "schemas" / f"{what}.schema.json").read_text(encoding="utf-8"))
    assert shipped == documents.schema(what), "run: python -c 'from layerscan.documents import ...write_schemas'"
    jsonschema.Draft202012Validator.check_schema(shipped)


def test_documents_fit_their_schema_and_a_broken_one_does_not():
    validator = jsonschema.Draft202012Validator(documents.schema("measurement"))
    document = documents.measurement_document(make_measurement())
    validator.validate(document)
    with pytest.raises(jsonschema.ValidationError, match="thickness_nm"):
        validator.validate({**document, "layers": [{"index": 0}]})


def test_our_models_use_no_deprecated_pydantic():
    # the warning that the pytest configuration has to ignore for others' sake
    code = "import layerscan.settings, layerscan.document_models"
    subprocess.run([sys.executable, "-W", "error", "-c", code], check=True)


@hypothesis_settings(deadline=None, derandomize=True, max_examples=50)
@given(
    st.recursive(
        st.none() | st.booleans() | st.integers(-(2**53), 2**53) | st.floats() | st.text(),
        lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
    )
)
def test_whatever_is_made_plain_is_valid_json_without_changes(value):
    document = {"value": plain(value)}
    assert json.loads(dump_json(document)) == document
    assert find_changes(document, json.loads(dump_json(document))) == ()


def test_a_file_is_complete_or_absent(tmp_path, monkeypatch):
    path = tmp_path / "a.json"
    write_file(path, "old")

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(InputError, match="No space left on device"):
        write_file(path, "new")
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.json"]


def test_a_folder_that_cannot_be_made_is_said(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="cannot be written"):
        write_file(tmp_path / "file" / "a.json", "x")


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "no JSON"),
        ("[1]", "no document"),
        ("{}", "schema ''"),
        ('{"schema": "layerscan.measurement/2"}', "Update layerscan"),
        ('{"schema": "layerscan.prediction/1"}', "is a prediction document"),
        ('{"schema": "layerscan.measurement/1"}', "does not fit"),
    ],
)
def test_says_why_a_document_cannot_be_read(tmp_path, text, match):
    (tmp_path / "measurement.json").write_text(text)
    with pytest.raises(InputError, match=match):
        documents.read_measurement(tmp_path)


def test_says_that_a_document_is_missing(tmp_path):
    with pytest.raises(InputError, match="does not exist"):
        documents.read_prediction(tmp_path)


def test_traces_of_other_boundaries_are_refused(tmp_path):
    documents.write_measurement(tmp_path, make_measurement(path=None))
    with open(tmp_path / "traces.csv", "a") as stream:
        stream.write("9,0,1,1,1,1\n")
    with pytest.raises(InputError, match="traces boundary 9"):
        documents.read_measurement(tmp_path)


def test_layers_for_optics_carry_thickness_at_each_station():
    table = layer_table(make_measurement())
    assert table.u_scale_relative == pytest.approx(0.01)
    assert table.station_thickness_nm.shape == (5, 3)
    np.testing.assert_allclose(table.station_thickness_nm[2], [40.0, 100.0, 40.0])
    np.testing.assert_allclose(table.station_thickness_nm[4], [40.2, 100.2, 40.2])
    assert table.station_step_nm == pytest.approx(8.0)


def test_a_table_made_by_hand_is_read(tmp_path):
    path = tmp_path / "layers.csv"
    path.write_text("material;thickness_nm;u_nm\nn=1.56; 90 ;1\nair;120;\n")
    table = read_layer_table(path)
    assert table.u_scale_relative is None  # the second layer states no u
    assert [(x.material, x.thickness_nm, x.u_nm, x.phase) for x in table.layers] == [
        ("n=1.56", 90.0, 1.0, "other"),
        ("air", 120.0, None, "other"),
    ]


def test_the_largest_common_part_of_the_uncertainties_counts_as_calibration(tmp_path):
    path = tmp_path / "layers.csv"
    path.write_text("material,thickness_nm,u_nm\nn=1.56,100,2\nair,120,1.2\n")
    assert read_layer_table(path).u_scale_relative == pytest.approx(0.01)


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("material\nair\n", "no column 'thickness_nm'"),
        ("thickness_nm\n90\n", "neither a column 'material' nor 'phase'"),
        ("thickness_nm,material\n", "no layers"),
        ("thickness_nm,material\n-3,air\n", "line 2: thickness_nm is '-3'"),
        ("thickness_nm,material\nthin,air\n", "line 2: thickness_nm is 'thin'"),
        ("thickness_nm,material\n,air\n", "line 2: thickness_nm is ''"),
        ("thickness_nm,phase\n3,blue\n", "phase is 'blue'"),
        ("thickness_nm,material\n3,\n", "neither phase nor material"),
        ("thickness_nm,material,u_nm\n3,air,-1\n", "u_nm is '-1'"),
        ("thickness_nm,material,complete\n3,air,perhaps\n", "complete is 'perhaps'"),
    ],
)
def test_says_what_is_wrong_with_a_table(tmp_path, text, match):
    path = tmp_path / "layers.csv"
    path.write_text(text)
    with pytest.raises(InputError, match=match):
        read_layer_table(path)


def test_no_layers_no_table(tmp_path):
    documents.write_measurement(tmp_path, replace(make_measurement(path=None), layers=(), boundaries=()))
    with pytest.raises(InputError, match="holds no layers"):
        read_layer_table(tmp_path)


def test_csv_has_empty_cells_for_unknown(tmp_path):
    write_file(tmp_path / "a.csv", csv_text(("a", "b"), [(None, True), (float("nan"), 0.1)]))
    assert (tmp_path / "a.csv").read_text() == "a,b\n,true\n,0.1\n"
    assert read_csv(tmp_path / "a.csv", required=("a",))[0] == (2, {"a": "", "b": "true"})


def test_changes_name_the_field():
    saved = {"layers": [{"thickness_nm": 1.0}], "flags": ["a"], "x": True}
    assert find_changes(saved, {"layers": [{"thickness_nm": 1.0 + 1e-12}], "flags": ["a"], "x": True}) == ()
    now = {"layers": [{"thickness_nm": 1.1}], "flags": [], "x": 1}
    fields = [field for field, _, _ in find_changes(saved, now)]
    assert fields == ["layers[0].thickness_nm", "flags: number of entries"]
