from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from figures.made_records import bell, make_prediction

from layerscan.comparison.compare import compare_light
from layerscan.comparison.model import rebuild_stack
from layerscan.errors import InputError, Interrupted, SettingsError
from layerscan.optics.predict import predict_light
from layerscan.records import Layer, LayerTable, Spectrum
from layerscan.settings import CompareSettings, PredictSettings

REAL = Path(__file__).resolve().parents[2] / ".." / "shared" / "real"
ABSOLUTE = CompareSettings()


def make_table(*, scale=1.0, layers=20, thickness=(90.0, 120.0), u_scale=0.01, seed=3):
    """Dark and bright layers with some disorder; u of a layer holds the common scale."""
    rng = np.random.default_rng(seed)
    nm = [thickness[i % 2] * (1 + 0.03 * rng.standard_normal()) * scale for i in range(layers)]
    return LayerTable(
        layers=tuple(
            Layer(
                index=i, phase=("dark", "bright")[i % 2], thickness_nm=d, u_nm=float(d * np.hypot(u_scale or 0, 0.004))
            )
            for i, d in enumerate(nm)
        ),
        source="layers.csv",
        u_scale_relative=u_scale,
    )


def make_settings(**changes):
    base = {"dark": "chitin", "bright": "air", "substrate": "absorber", "incident": "air", "lit_side": "start"}
    return PredictSettings(**{**base, "draws": 100, **changes})


@pytest.fixture(scope="module")
def prediction():
    return predict_light(make_table(), make_settings())


def seen_of(prediction, *, noise=0.003, kind="reflectance"):
    curve = prediction.transmittance if kind == "transmittance" else prediction.reflectance
    value = curve.value + np.random.default_rng(1).normal(0, noise, curve.value.size)
    return Spectrum(wavelength_nm=curve.wavelength_nm, value=value, kind=kind, source="seen.csv", sha256="ab" * 32)


def names(comparison):
    return [reason.parameters[0].split(" (at")[0] for reason in comparison.reasons]


@pytest.mark.parametrize("kind", ["reflectance", "transmittance"])
def test_a_prediction_explains_itself(prediction, kind):
    # identity: its own spectrum with some noise
    answer = compare_light(prediction, seen_of(prediction, kind=kind), ABSOLUTE)
    assert answer.agreement.conclusion == "explains"
    assert abs(answer.peak_difference_nm) < 1.5
    assert answer.rms == pytest.approx(0.003, rel=0.15)
    assert answer.delta_e00 < 1.0
    assert "does not prove a mechanism" in answer.sentence
    assert "not_colour_of_iridescence" in answer.flags
    assert answer.observed_sha256 == "ab" * 32


def test_three_u_away_contradicts_and_the_scale_that_would_do_is_named(prediction):
    # closed form: without dispersion the wavelength of a peak is proportional to all thicknesses; dispersion adds 1 %
    u = prediction.peaks[0].u_wavelength_nm
    factor = 1 - 4 * u / prediction.peaks[0].wavelength_nm
    seen = seen_of(predict_light(make_table(scale=factor), make_settings(draws=0)))
    answer = compare_light(prediction, seen, ABSOLUTE)
    assert answer.agreement.conclusion == "contradicts"
    assert answer.agreement.p_value < 0.01
    assert answer.peak_difference_nm == pytest.approx(4 * u, abs=2.5)
    reason = answer.reasons[names(answer).index("scale of all thicknesses")]
    assert reason.values[0] == pytest.approx(factor, abs=0.003)
    assert reason.u[0] == pytest.approx(answer.u_peak_difference_nm / prediction.peaks[0].wavelength_nm, rel=0.1)
    assert f"{answer.agreement.passing_peak_range_nm[0]:.0f} to" in answer.sentence


@pytest.mark.parametrize(
    ("change", "best"),
    [
        ({"dark": "air", "bright": "chitin"}, "chitin and air swapped"),
        ({"bright": "water"}, "index in the gaps (air assumed)"),
        ({"angle": 40.0}, "angle of incidence (deg)"),
    ],
)
def test_the_true_change_comes_first(prediction, change, best):
    # simulation: the observation is calculated with one thing changed, and that one must be named
    seen = seen_of(predict_light(make_table(), make_settings(**{**change, "draws": 0})))
    answer = compare_light(prediction, seen, ABSOLUTE)
    assert answer.agreement.conclusion == "contradicts"
    assert names(answer)[0] == best
    evidence = [reason.evidence for reason in answer.reasons]
    assert evidence == sorted(evidence, reverse=True)
    assert best.split(" (")[0] in answer.sentence


def test_true_angle_and_index_are_recovered(prediction):
    # simulation: value needed within 3 u of the true one
    for change, name, truth in (({"angle": 40.0}, "angle of incidence (deg)", 40.0),
                                ({"bright": "water"}, "index in the gaps (air assumed)", 1.334)):  # fmt: skip
        seen = seen_of(predict_light(make_table(), make_settings(**{**change, "draws": 0})))
        answer = compare_light(prediction, seen, ABSOLUTE)
        reason = answer.reasons[names(answer).index(name)]
        assert abs(reason.values[0] - truth) < 3 * reason.u[0]


def test_thickness_and_index_look_alike_for_one_peak_at_normal_incidence():
    # n and d enter the phase as their product and Fresnel terms as ratios of n: one peak at normal incidence
    # cannot tell them apart; where the height is free, not even one of the two indices
    settings = make_settings(dark="n=1.58", bright="n=1.50", incident="n=1.5", substrate="n=1.5")
    prediction = predict_light(make_table(layers=20, u_scale=0.003), settings)
    shifted = make_table(layers=20, u_scale=0.003, scale=0.985)
    seen = seen_of(predict_light(shifted, settings.model_copy(update={"draws": 0})))
    answer = compare_light(prediction, seen, ABSOLUTE)
    assert answer.agreement.conclusion == "contradicts"
    reason = answer.reasons[names(answer).index("scale of all thicknesses")]
    assert "index of all layers" in reason.indistinguishable_from
    assert "cannot tell" in answer.sentence
    assert "several stated angles" in answer.sentence
    free = compare_light(prediction, seen, CompareSettings(scale="free"))
    alike = free.reasons[names(free).index("scale of all thicknesses")].indistinguishable_from
    assert any(name.startswith("index of n=1.5") for name in alike)


def test_scale_is_recovered_from_a_narrow_high_order():
    # shared facts, optics_checks: nacre-like 450/30 nm shows orders 534 and 400 nm in the visible; scale of truth 0.95
    settings = make_settings(dark="n=1.43", bright="n=1.683", incident="n=1.33", substrate="n=1.43")
    prediction = predict_light(make_table(layers=41, thickness=(30.0, 450.0)), settings)
    truth = make_table(layers=41, thickness=(30.0, 450.0), scale=0.95)
    seen = seen_of(predict_light(truth, settings.model_copy(update={"draws": 0})), noise=0.01)
    answer = compare_light(prediction, replace(seen, value=0.6 * seen.value), ABSOLUTE)
    assert names(answer)[0] == "scale of all thicknesses"
    assert answer.reasons[0].values[0] == pytest.approx(0.95, abs=0.003)
    assert "times as high" not in answer.sentence


def test_gap_in_the_layers_leaves_the_medium_in_front_alone(prediction):
    model = rebuild_stack(prediction)
    gap = next(row for row in model.main_materials() if model.names[row] == "air")
    changed = model.with_index(gap, 1.33, at_nm=500.0)
    assert model.names[model.sequence[0]] == "air"
    assert changed.index_at(changed.sequence[0], 500.0) == model.index_at(0, 500.0)
    assert changed.index_at(gap, 500.0) == pytest.approx(1.33)


def test_lit_side_is_a_reason_where_the_stack_is_chirped_and_absorbs():
    # shared facts, optics_checks: an absorbing chirped stack shows another colour from each end
    nm = np.linspace(70, 115, 40)
    layers = tuple(
        Layer(index=i, phase=("dark", "bright")[i % 2], thickness_nm=float(d), u_nm=float(0.008 * d))
        for i, d in enumerate(nm)
    )
    table = LayerTable(layers=layers, source="t", u_scale_relative=0.007)
    settings = make_settings(dark="n=1.70+0.06i", bright="n=1.40", incident="n=1.4", substrate="n=1.4", draws=60)
    prediction = predict_light(table, settings)
    other = predict_light(table, settings.model_copy(update={"lit_side": "end", "draws": 0}))
    answer = compare_light(prediction, seen_of(other), ABSOLUTE)
    assert answer.agreement.conclusion == "contradicts"
    assert "lit from the other end" in names(answer)


def test_unknown_calibration_cannot_tell(prediction):
    # the honest answer is "cannot tell until one is given"
    unknown = predict_light(make_table(u_scale=None), make_settings())
    answer = compare_light(unknown, seen_of(prediction), ABSOLUTE)
    assert answer.agreement.conclusion == "cannot_tell"
    assert answer.agreement.passing_peak_range_nm is None
    assert "pixel size has no stated uncertainty" in answer.sentence
    assert "Next: state the uncertainty of the pixel size" in answer.sentence


def test_no_draws_cannot_tell(prediction):
    answer = compare_light(predict_light(make_table(), make_settings(draws=0)), seen_of(prediction), ABSOLUTE)
    assert answer.agreement.conclusion == "cannot_tell"
    assert answer.u_peak_difference_nm is None
    assert "no uncertainty" in answer.sentence


def test_flat_observation_has_no_peak(prediction):
    wavelength = np.arange(380.0, 781.0)
    flat = Spectrum(wavelength_nm=wavelength, value=np.full(401, 0.2), kind="reflectance")
    answer = compare_light(prediction, flat, ABSOLUTE)
    assert answer.agreement.conclusion == "cannot_tell"
    assert "no_peak" in answer.flags
    assert (answer.peak_difference_nm, answer.fwhm_difference_nm, answer.reasons) == (None, None, ())


def test_free_scale_ignores_the_height(prediction):
    # change that must not matter: half the height
    seen = seen_of(prediction)
    half = replace(seen, value=seen.value * 0.5)
    free = compare_light(prediction, half, CompareSettings(scale="free"))
    assert free.scale == pytest.approx(2.0, rel=0.01)
    assert free.rms < 0.01
    assert free.agreement.conclusion == "explains"
    absolute = compare_light(prediction, replace(seen, value=seen.value * 0.2), ABSOLUTE)
    assert "0.2 times as high" in absolute.sentence


def test_infrared_has_no_colour():
    table = make_table(thickness=(160.0, 215.0))
    prediction = predict_light(table, make_settings(wavelengths="700:1300:1", draws=60))
    curve = prediction.reflectance
    seen = Spectrum(wavelength_nm=curve.wavelength_nm[100:], value=curve.value[100:], kind="reflectance")
    answer = compare_light(prediction, seen, ABSOLUTE)
    assert answer.delta_e00 is None
    assert answer.observed_colour is None
    assert "partial_overlap" in answer.flags


def test_colour_alone(prediction):
    near = compare_light(prediction, None, CompareSettings(lab=prediction.colour.lab))
    far = compare_light(prediction, None, CompareSettings(lab=(40.0, 60.0, 40.0)))
    assert near.agreement.conclusion in ("explains", "cannot_tell")
    assert near.delta_e00 == pytest.approx(0.0, abs=1e-9)
    assert far.agreement.conclusion == "contradicts"
    assert {"not_colour_of_iridescence", "observed_uncertainty_unknown"} <= set(far.flags)
    assert far.observed_colour.lab == (40.0, 60.0, 40.0)
    assert "measure one" in far.sentence


@pytest.mark.parametrize(
    ("settings", "spectrum", "message"),
    [
        ({}, False, "either an observed spectrum or"),
        ({"lab": (50, 0, 0)}, True, "not both"),
        ({"lab": (50, 0, 0), "scale": "free"}, False, "no spectrum to scale"),
        ({"lab": (50, 0, 0), "quantity": "transmittance"}, False, "reflected light"),
        ({"lab": (500, 0, 0)}, False, "is no colour"),
        ({"quantity": "absorbance"}, True, "quantity says absorbance"),
    ],
)
def test_wrong_questions_are_refused(prediction, settings, spectrum, message):
    with pytest.raises(SettingsError, match=message):
        compare_light(prediction, seen_of(prediction) if spectrum else None, CompareSettings(**settings))


def test_interruption_passes_through(prediction):
    def stop(what, fraction):
        raise Interrupted("stop")

    with pytest.raises(Interrupted):
        compare_light(prediction, seen_of(prediction), ABSOLUTE, progress=stop)


def test_material_that_is_gone_is_said_and_the_answer_stands(prediction):
    sequence = tuple("gone.csv" if name == "chitin" else name for name in prediction.structure.sequence)
    lost = replace(prediction, structure=replace(prediction.structure, sequence=sequence))
    answer = compare_light(lost, seen_of(prediction), ABSOLUTE)
    assert answer.agreement.conclusion == "explains"
    assert answer.reasons == ()
    assert "gone.csv" in answer.sentence


def test_rebuilt_stack_is_the_predicted_one(prediction):
    # identity: the flat stack without draws gives the nominal curve
    model = rebuild_stack(prediction)
    curve = np.interp(prediction.reflectance.wavelength_nm, model.wavelength_nm, model.curve())
    assert np.max(np.abs(curve - prediction.reflectance.value)) < 2e-3  # interpolated on another grid


def test_turning_and_swapping_twice_change_nothing(prediction):
    model = rebuild_stack(prediction)
    first, second = model.main_materials()
    for back in (model.turned().turned(), model.swapped(first, second).swapped(first, second), model.repeated(1)):
        assert back.sequence == model.sequence
        assert np.array_equal(back.thickness_nm, model.thickness_nm)
    assert len(model.repeated(3).thickness_nm) == 3 * len(model.thickness_nm)


def test_stack_with_equal_ends_has_one_layer_at_the_seam():
    table = make_table(layers=21)
    model = rebuild_stack(predict_light(table, make_settings(draws=0)))
    twice = model.repeated(2)
    assert len(twice.thickness_nm) == 41
    assert all(a != b for a, b in zip(twice.sequence[1:-1], twice.sequence[2:-1], strict=False))


def test_huge_stack_is_compared_without_reasons():
    # a stack of 50,000 layers would be calculated some two hundred times
    prediction = make_prediction()
    many = tuple([90.0, 130.0] * 25_000)
    sequence = ("air", *(["chitin", "air"] * 25_000), "absorber matched to air")
    huge = replace(prediction, structure=replace(prediction.structure, thickness_nm=many, sequence=sequence))
    wavelength = np.arange(380.0, 781.0)
    seen = Spectrum(wavelength_nm=wavelength, value=bell(wavelength, 500.0), kind="reflectance")
    assert "50000 layers that would take too long" in compare_light(huge, seen, ABSOLUTE).sentence


def test_prediction_without_its_layers_gives_no_reasons():
    prediction = make_prediction()
    bare = replace(prediction, structure=replace(prediction.structure, thickness_nm=()))
    wavelength = np.arange(380.0, 781.0)
    seen = Spectrum(wavelength_nm=wavelength, value=bell(wavelength, 500.0), kind="reflectance")
    answer = compare_light(bare, seen, ABSOLUTE)
    assert answer.agreement.conclusion == "contradicts"
    assert "does not say material and thickness" in answer.sentence


def contradictions(pairs, seed):
    """Stacks whose true thicknesses scatter about the measured ones as stated; how many are contradicted."""
    from layerscan.comparison import agreement as agree
    from layerscan.comparison.quantities import like_with_like

    rng = np.random.default_rng(seed)
    measured = make_table(layers=12, u_scale=0.02)
    prediction = predict_light(measured, make_settings(dark="n=1.56", draws=4000))  # u itself to 1 %
    count = 0
    for _ in range(pairs):
        factor = 1 + 0.02 * rng.standard_normal()
        own = [layer.thickness_nm * 0.004 * rng.standard_normal() for layer in measured.layers]
        layers = tuple(
            replace(layer, thickness_nm=(layer.thickness_nm + error) * factor)
            for layer, error in zip(measured.layers, own, strict=True)
        )
        truth = predict_light(replace(measured, layers=layers), make_settings(dark="n=1.56", draws=0))
        shift = 0.5 * rng.standard_normal()
        value = truth.reflectance.value + rng.normal(0, 0.004, truth.reflectance.value.size)
        seen = Spectrum(wavelength_nm=truth.reflectance.wavelength_nm + shift, value=value, kind="reflectance")
        pair = like_with_like(prediction, seen, ABSOLUTE)
        match = agree.match_peaks(agree.predicted_peaks(pair, prediction), agree.observed_peaks(pair))
        count += agree.judge_peaks(match, calibrated=True).agreement.conclusion == "contradicts"
    return count


def test_true_structures_are_contradicted_as_often_as_stated():
    # coverage through the optics: 5 % of 150, binomial 99.8 % bounds 1 to 16
    assert 1 <= contradictions(150, 21) <= 16


@pytest.mark.slow
def test_true_structures_are_contradicted_as_often_as_stated_long():
    # coverage through the optics: 5 % of 2000, binomial 99.8 % bounds 71 to 131
    assert 71 <= contradictions(2000, 22) <= 131


@pytest.mark.skipif(not (REAL / "reflectance").is_dir(), reason="needs ../shared/real/reflectance")
def test_film_of_known_thickness_meets_its_measured_reflectance(tmp_path):
    # arXiv:2602.06316, data commit 12b07215: diamond film 286 nm on glass, gap 0 nm; RMS <= 0.02 over 450-800 nm
    import json

    from layerscan.readers.spectra import open_spectrum

    folder = REAL / "reflectance"
    tables = {table["material"]: table for table in json.loads((folder / "index_tables.json").read_text())}
    rows = zip(*(tables["PCD"][key] for key in ("wavelength", "real", "complex")), strict=True)
    (tmp_path / "diamond.csv").write_text("wavelength_nm,n,k\n" + "\n".join(f"{w},{n},{k}" for w, n, k in rows))
    layers = (Layer(index=0, phase="dark", thickness_nm=286.0, u_nm=3.0),)
    table = LayerTable(layers=layers, source="film", u_scale_relative=0.01)
    settings = make_settings(
        dark=str(tmp_path / "diamond.csv"), bright=None, substrate="n=1.53", wavelengths="450:800:1"
    )
    prediction = predict_light(table, settings)
    mirror = np.loadtxt(folder / "mirror_reference.csv", delimiter=",")
    for repeat in range(3):
        seen = open_spectrum(folder / f"gap_0nm_{repeat}.csv", quantity="reflectance")
        value = seen.value * np.interp(seen.wavelength_nm, mirror[:, 0], mirror[:, 1] / 100)
        answer = compare_light(prediction, replace(seen, value=value), ABSOLUTE)
        assert answer.rms <= 0.02
        assert answer.agreement.conclusion != "contradicts"


@pytest.mark.skipif(not (REAL / "spectra").is_dir(), reason="needs ../shared/real/spectra")
def test_wing_peaks_of_the_angle_series_are_read():
    # bird-spectra package data, commit eb197864: the peak moves from 520.3 nm at 15 deg to 429.4 nm at 70 deg
    from layerscan.comparison.agreement import observed_peaks
    from layerscan.comparison.quantities import like_with_like
    from layerscan.readers.spectra import open_spectrum

    for column, place in ((1, 520.3), (12, 429.4)):
        seen = open_spectrum(REAL / "spectra" / "wing_patch_15_to_70deg.csv", quantity="reflectance", column=column)
        pair = like_with_like(make_prediction(), seen, CompareSettings(scale="free"))
        best = max(observed_peaks(pair), key=lambda peak: peak.reflectance)
        assert best.wavelength_nm == pytest.approx(place, abs=12.0)


def test_ranges_that_do_not_meet_are_refused(prediction):
    wavelength = np.arange(900.0, 1000.0)
    seen = Spectrum(wavelength_nm=wavelength, value=bell(wavelength, 950.0), kind="reflectance")
    with pytest.raises(InputError, match="share 0 nm"):
        compare_light(prediction, seen, ABSOLUTE)


def test_colours_are_those_of_what_was_compared(prediction):
    # like with like: light that passes has the colour of the transmittance, and doubts of the reader are carried on
    seen = replace(seen_of(prediction, kind="transmittance"), doubts=("Taken as percent.",))
    answer = compare_light(prediction, seen, ABSOLUTE)
    assert answer.predicted_colour.lab != prediction.colour.lab
    assert answer.notes == ("Taken as percent.",)
    assert answer.delta_e00 < 1.5
