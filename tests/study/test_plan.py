from __future__ import annotations

import os
from pathlib import Path

import pytest

from layerscan.errors import InputError, SettingsError
from layerscan.study.plan import read_plan
from layerscan.study.tables import find_line

ONE = '[[images]]\nfile = "a.txt"\nspecimen = "1"\n'


def test_pattern_fills_group_specimen_and_section(make_study, lots):
    # our own layout: each {name} stands for a part without '/'
    plan = read_plan(make_study(lots))
    assert len(plan.images) == 12
    first = plan.images[0]
    assert (first.group, first.specimen, first.section) == ("A", "a0", "0")
    assert len({image.key for image in plan.images}) == 12
    assert plan.problems == ()


def test_unknown_key_is_refused_with_the_nearest_name_and_its_line(make_study, lots):
    # issue: "unknown keys refused with the nearest name, the place in the file said"
    folder = make_study(lots, '[study]\ntitle = "x"\nquestoin = "y"\n[[images]]\nfile = "images/A_a0_0.txt"\n')
    with pytest.raises(
        SettingsError, match=r"STUDY\.toml, line 3, study\.questoin: unknown key .* nearest is 'question'"
    ):
        read_plan(folder)


@pytest.mark.parametrize(
    ("plan", "message"),
    [
        (
            ONE + '[[images]]\nfile = "b.txt"\nspeciemn = "1"\n',
            r"line 6, images\[2\]\.speciemn: unknown key 'speciemn'. The nearest is 'specimen'",
        ),
        (
            'images = [{file = "a.txt", specimen = "1", grup = "A"}]\n',
            r"line 1, images\[1\]\.grup: unknown key 'grup'. The nearest is 'group'",
        ),
        (
            '[measure]\npixel_sizes = "1 nm"\n' + ONE,
            r"line 2, measure\.pixel_sizes: 'pixel_sizes' is no setting .* nearest is 'pixel_size'",
        ),
        ('[measure]\npixel_size = "1 furlong"\n' + ONE, r"line 2, measure\.pixel_size.*furlong"),
        ('[preparation]\nknive = "x"\n' + ONE, r"nearest is 'knife'"),
        (
            '[limits]\nrule = "guarded"\n[limits.perid]\nhigh = "3 nm"\n' + ONE,
            r"limits\.perid: unknown key 'perid'. The nearest is 'period'",
        ),
        ('[limits.period]\nlow = "5 nm"\nhigh = "3 nm"\n' + ONE, r"low '5 nm' lies above high '3 nm'"),
        ("[limits.period]\n" + ONE, r"needs 'low' or 'high'"),
        (ONE + "exclude = true\n", r"line 4, images\[1\]\.exclude: true is no text"),
        ('[[images]]\nspecimen = "1"\n', r"names either 'file' or 'table'"),
        ('[[images]]\nfile = "a.txt"\n', r"line 1, images\[1\]: 'a.txt' has no specimen"),
        ('[[images]]\nfile = "{grp}.txt"\n', r"unknown part '\{grp\}'. The nearest is '\{group\}'"),
        ('[[image]]\nfile = "a.txt"\n', r"lists no images \('image' is there; did you mean it\?\)"),
        ("images = 7\n", r"line 1, images: .*"),
        ('[study]\nadjust = "dunnett"\n' + ONE, "Give reference_group too"),
        ('[lot]\ncalibration_due = "soon"\n' + ONE, "is no date"),
    ],
)
def test_mistakes_are_told_with_their_place(make_study, plan, message):
    # our own wording; each message names the place, what came and what is needed
    folder = make_study({"a.txt": "1 2", "b.txt": "3 4"}, plan)
    with pytest.raises(SettingsError, match=message):
        read_plan(folder)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"[study\n", "no valid TOML: .*line 1"),
        (b"\xff\xfe\x00", "not UTF-8 at byte 0"),
        (b"x = " + b"[" * 5000 + b"]" * 5000, "nested too deeply|no valid TOML"),
        (b"", "lists no images"),
    ],
)
def test_a_file_that_is_no_toml_is_refused(tmp_path, content, message):
    # bad input
    (tmp_path / "STUDY.toml").write_bytes(content)
    with pytest.raises((InputError, SettingsError), match=message):
        read_plan(tmp_path)


def test_a_missing_plan_and_an_endless_one_are_refused(tmp_path, monkeypatch):
    # bad input; the limit itself is ours
    with pytest.raises(InputError, match="cannot be read"):
        read_plan(tmp_path / "STUDY.toml")
    monkeypatch.setattr("layerscan.study.plan.MAX_PLAN_BYTES", 10)
    (tmp_path / "STUDY.toml").write_text("# more than ten bytes\n")
    with pytest.raises(InputError, match="Put the rows into a CSV file"):
        read_plan(tmp_path)


def test_csv_rows_override_shared_settings(make_study):
    # issue: "two tables, inline, CSV or glob patterns ... overridden per row"
    table = (
        "file;group;specimen;region;measure.obliquity;predict.dark;exclude\n"
        "a.txt;A;1;0,0,10,20;5 deg;chitin;\nb.txt;A;2;;;;torn\n\n"
    )
    plan = (
        '[measure]\npixel_size = "2 nm"\n'
        '[predict]\ndark = "water"\nbright = "air"\n'
        '[[images]]\ntable = "list.csv"\nsection = "s"\n'
    )
    found = read_plan(make_study({"a.txt": "1", "b.txt": "2", "list.csv": table}, plan))
    a, b = found.images
    assert (a.measure.pixel_size, a.measure.region, a.measure.obliquity) == ("2 nm", (0, 0, 10, 20), "5 deg")
    assert (a.predict.dark, a.predict.bright) == ("chitin", "air")
    assert (b.measure, b.predict, b.exclude, b.section) == (found.measure, found.predict, "torn", "s")
    assert a.place == "list.csv, line 2"


@pytest.mark.parametrize(
    ("table", "message"),
    [
        (
            "file,specimen,messure.page\na.txt,1,0\n",
            "line 1: unknown column 'messure.page'. The nearest is 'measure.page'",
        ),
        ("file,specimen,measure.page\na.txt,1,x\n", "list.csv, line 2: page"),
        ("file,specimen\na.txt\n", "list.csv, line 2: 1 cells where the header has 2"),
        ("file,specimen\na.txt,\n", "list.csv, line 2: 'a.txt' has no specimen"),
        ("specimen\n1\n", "no column 'file'"),
        ("file,file\na.txt,a.txt\n", "a column stands twice"),
        ("file,specimen,region\na.txt,1,here\n", "list.csv, line 2: 'here' are not numbers"),
        ("file,specimen\na.txt,1\na.txt,1\n", "list.csv, line 3: image 'a.txt' stands twice, also at list.csv, line 2"),
    ],
)
def test_csv_mistakes_are_told_with_their_line(make_study, table, message):
    # bad input
    with pytest.raises((SettingsError, InputError), match=message):
        read_plan(make_study({"a.txt": "1", "list.csv": table}, 'images = "list.csv"\n'))


@pytest.mark.parametrize("name", ["../x.txt", "/etc/hostname", "sub/../../x.txt", "link.txt", "out/x.txt"])
def test_paths_stay_inside_the_study_unless_allowed(make_study, tmp_path, name):
    # issue: "Paths stay inside the study's folder unless allowed"; symbolic links count as where they lead
    (tmp_path / "x.txt").write_text("1 2")
    plan = f'[[images]]\nfile = "{name}"\nspecimen = "1"\n'
    folder = make_study({"sub/a.txt": "1"}, plan)
    os.symlink(tmp_path / "x.txt", folder / "link.txt")
    os.symlink(tmp_path, folder / "out")
    with pytest.raises(InputError, match="lies outside the study's folder"):
        read_plan(folder)
    (folder / "STUDY.toml").write_text("[study]\nallow_outside = true\n" + plan)
    assert len(read_plan(folder).images) == 1


@pytest.mark.parametrize(
    ("name", "message"),
    [("a\\u0000b.tif", "holds a null character"), ("[z-a]*.tif", "cannot be read .*bad character range")],
)
def test_names_that_no_file_can_have_are_refused(make_study, name, message):
    # bad input
    with pytest.raises((InputError, SettingsError), match=message):
        read_plan(make_study({}, f'[[images]]\nfile = "{name}"\nspecimen = "1"\n'))


def test_a_file_name_that_is_no_unicode_is_refused(make_study):
    # POSIX names are bytes; what cannot be written into a report is refused before anything runs
    folder = make_study({}, '[[images]]\nfile = "*.tif"\nspecimen = "1"\n')
    (folder / os.fsdecode(b"\xff.tif")).write_text("1")
    with pytest.raises(InputError, match="no valid Unicode"):
        read_plan(folder)


def test_an_absolute_pattern_is_refused_too(make_study):
    # a glob must not list what lies outside
    with pytest.raises(InputError, match="lies outside"):
        read_plan(make_study({}, '[[images]]\nfile = "/etc/host*"\nspecimen = "1"\n'))


def test_missing_files_and_patterns_without_files_are_problems_not_errors(make_study):
    # issue: "--check says what would run and what is missing"
    plan = (
        '[study]\ngroups = ["A", "C"]\n'
        '[[images]]\nfile = "a.txt"\ngroup = "A"\nspecimen = "1"\n'
        '[[images]]\nfile = "gone.txt"\ngroup = "A"\nspecimen = "2"\n'
        '[[images]]\nfile = "*.tiff"\nspecimen = "3"\n'
    )
    found = read_plan(make_study({"a.txt": "1"}, plan))
    texts = [p.text for p in found.problems if p.severity == "missing"]
    assert texts == ["image 'gone.txt' is missing", "no file matches '*.tiff'", "group 'C' has no image"]


def test_one_name_in_two_groups_is_two_specimens_and_spectra_must_say_which(make_study):
    # specimens are nested in groups; a spectrum that names only "1" could be of either
    images = (
        '[[images]]\nfile = "a.txt"\ngroup = "A"\nspecimen = "1"\n'
        '[[images]]\nfile = "b.txt"\ngroup = "B"\nspecimen = "1"\n'
    )
    folder = make_study({"a.txt": "1", "b.txt": "2", "s.csv": "1"}, images)
    notes = [p.text for p in read_plan(folder).problems]
    assert "specimen '1' occurs in the groups A, B: taken as different specimens" in notes
    assert "group 'A' has one specimen: no test and no interval can be made for it" in notes
    (folder / "STUDY.toml").write_text(images + '[[spectra]]\nfile = "s.csv"\nspecimen = "1"\n')
    with pytest.raises(SettingsError, match=r"occurs in the groups A, B\. Say which one: add group"):
        read_plan(folder)
    (folder / "STUDY.toml").write_text(images + '[[spectra]]\nfile = "s.csv"\nspecimen = "1"\ngroup = "B"\n')
    assert read_plan(folder).spectra[0].group == "B"


def test_one_file_may_give_several_images_by_page_or_region(make_study):
    # two regions of one image are two rows with two keys
    plan = (
        '[[images]]\nfile = "a.txt"\nspecimen = "1"\nregion = [0, 0, 5, 5]\n'
        '[[images]]\nfile = "a.txt"\nspecimen = "1"\nregion = [5, 0, 9, 5]\n'
    )
    found = read_plan(make_study({"a.txt": "1"}, plan))
    assert len({image.key for image in found.images}) == 2


def test_a_long_manifest_is_read_row_by_row(tmp_path):
    # issue: "a manifest of a million rows"; here 20,000, the million and its cost are in benchmarks/study_engine.py
    rows = [f"i/{k}.tif,A,{k % 50}" for k in range(20_000)]
    (tmp_path / "list.csv").write_text("\n".join(["file,group,specimen", *rows]))
    (tmp_path / "STUDY.toml").write_text('images = "list.csv"\n')
    images = read_plan(tmp_path).images
    assert len({image.key for image in images}) == 20_000
    assert len({id(image.measure) for image in images}) == 1
    problems = read_plan(tmp_path).problems
    assert len(problems) == 1001
    assert "19000 more problems are not listed" in problems[-1].text


def test_more_rows_than_the_limit_are_refused_with_the_reason(tmp_path, monkeypatch):
    # bad input
    monkeypatch.setattr("layerscan.study.plan.MAX_ROWS", 10)
    (tmp_path / "STUDY.toml").write_text('images = "list.csv"\n')
    (tmp_path / "list.csv").write_text("file,specimen\n" + "\n".join(f"{k}.tif,1" for k in range(12)))
    with pytest.raises(InputError, match=r"more than 10 images\. Split the study"):
        read_plan(tmp_path)


def test_lines_are_found_in_tables_arrays_and_inline_tables():
    # our own finder against a text with known lines
    text = (
        "[study]\ntitle = 'x'\n\n"
        "[[images]]\nfile = 'a'\n"
        "[[images]]\nfile = 'b'\nmeasure = { page = 1 }\n"
        "[limits.period]\nhigh = '1 nm'\n"
    )
    assert find_line(text, ("study", "title")) == 2
    assert find_line(text, ("images", 1, "file")) == 7
    assert find_line(text, ("images", 1, "measure", "page")) == 8
    assert find_line(text, ("limits", "period", "high")) == 10
    assert find_line(text, ("study", "level")) is None or find_line(text, ("study", "level")) == 1


def test_dates_and_numbers_count_as_text_where_words_are_wanted(make_study):
    # TOML has dates and numbers; a position or date may be given as either
    plan = (
        "[imaging]\ncalibration_date = 2024-05-01\naccelerating_voltage = 5\n"
        '[[images]]\nfile = "a.txt"\nspecimen = 7\nposition = 1.5\n'
    )
    found = read_plan(make_study({"a.txt": "1"}, plan))
    assert (found.tables.imaging.calibration_date, found.tables.imaging.accelerating_voltage) == ("2024-05-01", "5")
    assert (found.images[0].specimen, found.images[0].position) == ("7", "1.5")


def test_a_folder_stands_for_its_plan(make_study, lots):
    # convenience: the folder that holds a STUDY.toml
    folder = make_study(lots)
    assert read_plan(folder).path == read_plan(Path(folder) / "STUDY.toml").path
