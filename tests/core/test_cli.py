"""The command line as its user meets it: documents on standard output, words on standard error, exit codes."""

import json
import subprocess
import sys

import jsonschema
import numpy as np
import pytest
import sections
import tifffile

from layerscan import cli, documents


def run(capfd, *words):
    """Run one command in this process; returns (exit code, standard output, standard error)."""
    capfd.readouterr()
    code = cli.run([str(w) for w in words])
    out, err = capfd.readouterr()
    return code, out, err


@pytest.fixture(scope="module")
def image(tmp_path_factory):
    """An easy section of 320 x 320 pixels of 2 nm, stored with its resolution in pixels per centimetre."""
    pixels, truth = sections.make_section("easy", 3, shape=(320, 320))
    path = tmp_path_factory.mktemp("cli") / "section.tif"
    tifffile.imwrite(path, pixels, resolution=(5e6, 5e6), resolutionunit="CENTIMETER")
    return path, truth


@pytest.fixture(scope="module")
def measured(image, tmp_path_factory):
    """The folder that ``measure --out`` leaves."""
    folder = tmp_path_factory.mktemp("measured")
    assert cli.run(["measure", str(image[0]), "--pixel-size", "2 +- 0.02 nm", "--out", str(folder)]) == 0
    return folder


def validate(text, what):
    document = json.loads(text)
    jsonschema.Draft202012Validator(documents.schema(what)).validate(document)
    return document


def test_help_answers_without_heavy_imports():
    # what --help imports, not how long it takes: time belongs in the benchmarks
    code = (
        "import sys; from layerscan import cli; cli.run(['--help']);"
        "print([m for m in ('numpy', 'pydantic', 'scipy', 'numba', 'pandas', 'matplotlib') if m in sys.modules])"
    )
    answer = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert answer.stdout.splitlines()[-1] == "[]"
    assert "does the imaged structure explain" in answer.stdout


@pytest.mark.parametrize("name", list(cli.COMMANDS))
def test_each_command_explains_itself(capfd, name):
    code, out, _ = run(capfd, name, "--help")
    assert code == 0
    assert out.startswith(f"Usage: layerscan {name}")


def test_inspect_prints_one_document(capfd, image):
    code, out, _ = run(capfd, "inspect", image[0], "--json")
    document = validate(out, "inspection")
    assert code == 0
    assert document["image"]["pixel_size_nm"] == pytest.approx([2.0, 2.0])
    assert document["image"]["u_pixel_size_relative"] is None
    assert "calibration_uncertainty_unknown" in document["flags"]


def test_measure_prints_what_it_writes(capfd, image, measured):
    code, out, err = run(capfd, "measure", image[0], "--pixel-size", "2 +- 0.02 nm", "--json")
    document = validate(out, "measurement")
    assert code == 0
    saved = json.loads((measured / "measurement.json").read_text())
    assert {**document, "image": None} == {**saved, "image": None}
    assert document["period_nm"]["mean"] == pytest.approx(2 * image[1].period_px, rel=2e-3)
    assert document["period_nm"]["u"] >= 0.0099 * document["period_nm"]["mean"]
    assert "note:" in err
    assert {"layers.csv", "traces.csv", "figure.svg"} <= {p.name for p in measured.iterdir()}


def test_the_chain_from_image_to_conclusion(capfd, measured, tmp_path):
    words = ("--dark", "n=1.36", "--bright", "n=1.56", "--substrate", "absorber", "--lit-side", "start", "--draws", 50)
    code, out, _ = run(capfd, "predict", measured, *words, "--json", "--out", tmp_path / "light")
    light = validate(out, "prediction")
    assert code == 0
    assert len(light["wavelength_nm"]) == 401
    observed = tmp_path / "light" / "spectrum.csv"
    code, out, _ = run(capfd, "compare", tmp_path / "light", observed, "--json")
    answer = validate(out, "comparison")
    assert code == 0
    assert answer["rms"] == pytest.approx(0, abs=1e-6)
    code, out, _ = run(
        capfd, "compare", tmp_path / "light", tmp_path / "light" / "spectrum.csv", "--out", tmp_path / "c"
    )
    assert code == 0
    assert (tmp_path / "c" / "comparison.json").is_file()
    for document in (tmp_path / "light" / "prediction.json", tmp_path / "c" / "comparison.json"):
        code, out, _ = run(capfd, "verify", document)
        assert (code, out.splitlines()[0]) == (0, "equal")


def test_verify_says_what_changed(capfd, image, measured, tmp_path):
    code, out, _ = run(capfd, "verify", measured / "measurement.json", "--json")
    assert code == 0
    assert validate(out, "verification")["equal"] is True
    document = json.loads((measured / "measurement.json").read_text())
    document["period_nm"]["mean"] += 1.0
    document["image"]["path"] = str(image[0])
    (tmp_path / "measurement.json").write_text(json.dumps(document))
    code, out, _ = run(capfd, "verify", tmp_path / "measurement.json")
    assert code == 1
    assert "period_nm.mean: saved" in out


def test_no_layers_is_an_answer_with_its_own_exit_code(capfd, tmp_path):
    tifffile.imwrite(tmp_path / "flat.tif", np.full((200, 200), 80, np.uint8))
    code, out, _ = run(capfd, "measure", tmp_path / "flat.tif", "--pixel-size", "2 nm", "--json", "--out", tmp_path)
    document = validate(out, "measurement")
    assert code == 4
    assert document["layered"] is False
    assert document["period_nm"] is None
    assert document["layers"] == []
    assert (tmp_path / "measurement.json").is_file()


@pytest.mark.parametrize(
    ("words", "code", "message"),
    [
        (["measure", "missing.tif"], 3, "missing.tif"),
        (["measure", "PLAIN"], 3, "Pixel size of 'plain.tif' is unknown"),
        (["measure", "PLAIN", "--pixel-size", "2"], 2, "no unit"),
        (["measure", "PLAIN", "--pixel-size", "0 nm"], 2, "must be positive"),
        (["measure", "PLAIN", "--pixel-size", "2 parsec"], 2, "unit 'parsec'"),
        (["measure", "PLAIN", "--pixel-size", "2 nm", "--region", "1,2,3"], 2, "is not 4 whole numbers"),
        (["measure", "PLAIN", "--pixel-size", "2 nm", "--width", "20"], 2, "belongs to a line"),
        (["measure", "PLAIN", "--pixel-size", "2 nm", "--region", "0,0,900,900"], 3, "900"),
        (["predict", "nowhere"], 3, "nowhere"),
        (["predict", "LAYERS", "--angle", "95"], 2, "angle"),
        (["predict", "LAYERS", "--wavelengths", "780:380:1"], 2, "must increase"),
        (["compare", "nowhere", "LAYERS"], 3, "nowhere"),
        (["materials", "kitin"], 3, "chitin"),
        (["verify", "LAYERS"], 3, "no JSON"),
        (["measures"], 2, "The nearest is 'measure'"),
    ],
)
def test_wrong_input_gives_a_message_and_nothing_on_standard_output(capfd, tmp_path, monkeypatch, words, code, message):
    monkeypatch.chdir(tmp_path)
    tifffile.imwrite(tmp_path / "plain.tif", np.random.default_rng(1).integers(0, 255, (64, 64)).astype(np.uint8))
    (tmp_path / "layers.csv").write_text("thickness_nm,material\n90,n=1.5\n")
    named = {"PLAIN": "plain.tif", "LAYERS": "layers.csv"}
    got, out, err = run(capfd, *[named.get(w, w) for w in words])
    assert (got, out) == (code, "")
    assert message in err
    assert "Traceback" not in err


def test_a_study_from_the_command_line(capfd, image, tmp_path):
    (tmp_path / "a.tif").write_bytes(image[0].read_bytes())
    (tmp_path / "STUDY.toml").write_text(
        '[study]\ntitle = "invented"\n[[images]]\nfile = "a.tif"\ngroup = "g"\nspecimen = "s"\n'
        'pixel_size = "2 +- 0.02 nm"\n'
    )
    code, out, _ = run(capfd, "study", tmp_path / "STUDY.toml", "--check", "--json")
    assert code == 0
    assert validate(out, "study_check")["to_measure"] == 1
    code, out, _ = run(capfd, "study", tmp_path / "STUDY.toml", "--workers", 1, "--json", "--out", tmp_path / "out")
    outcome = validate(out, "study")
    assert (code, outcome["done"], outcome["failed"]) == (0, 1, 0)
    code, out, _ = run(capfd, "report", tmp_path / "out", "--json")
    assert (code, validate(out, "study")["done"]) == (0, 1)
    code, out, err = run(capfd, "report", tmp_path / "nothing")
    assert (code, out) == (3, "")
    assert "nothing" in err
