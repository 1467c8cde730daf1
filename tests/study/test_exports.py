from __future__ import annotations

import csv
import io

import pandas as pd
import pytest

from layerscan.errors import InputError
from layerscan.study.exports import neutralise, table_csv, write_exports
from layerscan.study.results import LAYER_COLUMNS, StudyResults


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", "  =1", "=cmd|' /C calc'!A0", "＝1"])
def test_texts_that_a_spreadsheet_would_run_are_made_harmless(text):
    # OWASP, "CSV injection": cells that begin with = + - @, tab or carriage return
    assert neutralise(text) == "'" + text


@pytest.mark.parametrize("text", ["", "lot 7", "a=b", "1-2", "'quoted'", "µm", "x\n=y"])
def test_other_texts_stay_as_they_are(text):
    # nothing else may change
    assert neutralise(text) == text


def test_numbers_keep_their_sign_and_unknown_is_empty():
    # a negative number is no formula; RFC 4180 quoting
    text = table_csv(["a", "b", "c", "d", "e"], [{"a": -1.5, "b": None, "c": True, "d": '=x,"y"', "e": float("nan")}])
    assert list(csv.reader(io.StringIO(text)))[1] == ["-1.5", "", "true", '\'=x,"y"', ""]


def test_csv_and_parquet_say_the_same(tmp_path):
    # two writers, one table
    write_exports(tmp_path, StudyResults(facts={}, images=()))
    table = pd.read_parquet(tmp_path / "layers.parquet")
    assert tuple(table.columns) == LAYER_COLUMNS == tuple(pd.read_csv(tmp_path / "layers.csv").columns)


def test_an_export_that_fails_leaves_the_former_one(tmp_path, monkeypatch):
    # written to a temporary name, flushed, renamed
    write_exports(tmp_path, StudyResults(facts={}, images=()))
    before = (tmp_path / "results.csv").read_bytes()

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", full)
    with pytest.raises(InputError, match="No space left on device"):
        write_exports(tmp_path, StudyResults(facts={}, images=()))
    assert (tmp_path / "results.csv").read_bytes() == before
    names = {"results.csv", "results.parquet", "layers.csv", "layers.parquet"}
    assert {path.name for path in tmp_path.iterdir()} == names
