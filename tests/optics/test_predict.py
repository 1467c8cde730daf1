"""From a layer table to light: facts of the trade, what must and must not matter, draws, flags, bad input."""

import csv
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from layerscan.errors import InputError, Interrupted, MaterialError, SettingsError
from layerscan.optics.colour import dominant_wavelength
from layerscan.optics.materials import read_table
from layerscan.optics.predict import predict_light
from layerscan.optics.transfer import reflectance_transmittance
from layerscan.records import FLAGS, Layer, LayerTable
from layerscan.settings import PredictSettings

REAL = Path(__file__).resolve().parents[2].parent / "shared" / "real" / "reflectance"


def table(pairs, dark, bright, *, u=None, first="dark", **options):
    """An alternating table; ``dark`` and ``bright`` are thicknesses or one thickness per pair."""
    other = "bright" if first == "dark" else "dark"
    thickness = {"dark": np.broadcast_to(dark, pairs), "bright": np.broadcast_to(bright, pairs)}
    layers = [
        Layer(index=2 * i + j, phase=phase, thickness_nm=float(thickness[phase][i]), u_nm=u)
        for i in range(pairs)
        for j, phase in enumerate((first, other))
    ]
    return LayerTable(layers=tuple(layers), source="made for a test", **options)


def predict(layer_table, /, **settings):
    return predict_light(layer_table, PredictSettings(**{"draws": 0, **settings}))


# --- facts of the trade ---------------------------------------------------------------------------------------------


def test_what_is_not_reflected_is_transmitted():
    # common practice, no source: without absorption R + T = 1, so that the two colours are complementary
    light = predict(table(20, 95, 110), dark="n=1.56", bright="n=1.34", incident="air", substrate="air")
    np.testing.assert_allclose(light.reflectance.value + light.transmittance.value, 1.0, atol=1e-13)
    from layerscan.optics.colour import colour_of_spectrum

    through = colour_of_spectrum(light.transmittance.wavelength_nm, light.transmittance.value)
    white = np.array([0.3127, 0.3290])
    one, two = np.array(light.colour.xy) - white, np.array(through.xy) - white
    cosine = one @ two / np.linalg.norm(one) / np.linalg.norm(two)
    assert cosine < -0.99  # on opposite sides of the white
    opposite = dominant_wavelength(tuple(white - one))[0]
    assert through.dominant_wavelength_nm == pytest.approx(opposite, abs=3)


def test_fifty_bilayers_of_mineral_lamellae():
    # common practice, no source: 110 nm lamellae of index 1.6, bilayer optical path 240 nm, peak near 480 nm
    light = predict(table(50, 110, (240 - 1.6 * 110) / 1.48), dark="n=1.6", bright="n=1.48", incident="n=1.33")
    assert light.peaks[0].wavelength_nm == pytest.approx(480, abs=2)


def test_weak_contrast_needs_many_layers_and_gives_a_narrow_band():
    # common practice, no source: of the order of a hundred layers for 90 % at low contrast, few at high contrast
    def needed(high, low):
        for pairs in range(1, 200):
            light = predict(
                table(pairs, 125 / high, 125 / low), dark=f"n={high}", bright=f"n={low}", incident="n=1.33",
                wavelengths="480:520:1",
            )  # fmt: skip
            if light.reflectance.value.max() >= 0.9:
                return 2 * pairs
        return 400

    assert 60 <= needed(1.60, 1.54) <= 140
    assert needed(1.60, 1.33) <= 24
    weak = predict(table(60, 125 / 1.6, 125 / 1.54), dark="n=1.6", bright="n=1.54", incident="n=1.33")
    strong = predict(table(12, 125 / 1.6, 125 / 1.33), dark="n=1.6", bright="n=1.33", incident="n=1.33")
    assert weak.peaks[0].fwhm_nm < 0.35 * strong.peaks[0].fwhm_nm
    assert weak.colour.excitation_purity > strong.colour.excitation_purity


def test_band_shifts_to_shorter_wavelengths_with_angle():
    # Bragg-Snell: m lambda = 2 sum d sqrt(n^2 - sin^2), to the few nm by which a finite stack departs from it
    light = predict(table(30, 95, 110), dark="n=1.56", bright="n=1.34", incident="air", vary="angle=0:60:20")
    found = [point.peaks[0].wavelength_nm for point in light.series.points]
    sine = np.sin(np.radians([0, 20, 40, 60]))
    bragg = 2 * (95 * np.sqrt(1.56**2 - sine**2) + 110 * np.sqrt(1.34**2 - sine**2))
    assert (np.diff(found) < 0).all()
    np.testing.assert_allclose(found, bragg, rtol=0.02)


def test_nacre_shows_its_higher_orders():
    # 450 nm tablets and 30 nm organic layers, 1.683/1.43: first order near 1600 nm, visible orders 534 and 400 nm
    light = predict(
        table(30, 450, 30), dark="n=1.683", bright="n=1.43", incident="n=1.33", wavelengths="380:1800:1"
    )  # fmt: skip
    orders = {peak.order: peak.wavelength_nm for peak in light.peaks}
    assert orders[1] == pytest.approx(1600, abs=20)
    assert orders[3] == pytest.approx(534, abs=2)
    assert orders[4] == pytest.approx(400, abs=2)


def test_swapping_dark_and_bright_moves_the_peak():
    # 130/40 nm, 1.56/1.34, 30 bilayers in 1.33: 514 nm, swapped 474 nm (facts table, recomputed)
    light = predict(table(30, 130, 40), dark="n=1.56", bright="n=1.34", incident="n=1.33")
    assert light.peaks[0].wavelength_nm == pytest.approx(514, abs=1)
    assert light.swapped.peaks[0].wavelength_nm == pytest.approx(474, abs=1)
    assert (light.swapped.dark, light.swapped.bright) == ("n=1.34", "n=1.56")
    assert "phase_assignment_assumed" in light.flags


def test_absorbing_chirped_stack_differs_from_its_two_ends():
    # common practice, no source: absorption hides the far end, so that each end shows its own band
    period = np.linspace(0.8, 1.5, 40)
    layers = table(40, 75 * period, 88 * period)
    options = {"dark": "n=1.56+0.06i", "bright": "n=1.34", "incident": "n=1.33", "wavelengths": "350:900:1"}
    front, back = (predict(layers, lit_side=side, **options) for side in ("start", "end"))
    first, second = (light.reflectance.wavelength_nm[np.argmax(light.reflectance.value)] for light in (front, back))
    assert second - first > 150
    np.testing.assert_allclose(front.transmittance.value, back.transmittance.value, atol=1e-12)  # reciprocity of T


def test_absorbing_backing_keeps_the_colour_vivid():
    # common practice, no source: over a bright backing the whole spectrum comes back, over an absorber the band alone
    layers = table(6, 95, 110)
    options = {"dark": "chitin", "bright": "air", "incident": "air"}
    backed = predict(layers, substrate="absorber", **options)
    bright = predict(layers, substrate="n=1.2+7i", **options)
    assert backed.colour.excitation_purity > bright.colour.excitation_purity + 0.1
    assert backed.colour.xyz[1] < bright.colour.xyz[1]


def test_wider_cone_moves_the_band_to_shorter_wavelengths():
    # facts table: 12 bilayers 1.56/1.34, 532 nm at NA 0.1, 498 nm at 0.75
    scale = 532 / 593.6
    layers = table(12, 95 * scale, 110 * scale)
    narrow, wide = (
        predict(layers, dark="n=1.56", bright="n=1.34", incident="air", aperture=na).peaks[0].wavelength_nm
        for na in (0.1, 0.75)
    )
    assert narrow == pytest.approx(532, abs=1)
    assert wide == pytest.approx(498, abs=3)


@pytest.mark.skipif(not REAL.is_dir(), reason="needs ../shared/real/reflectance beside the project")
@pytest.mark.parametrize("repeat", [0, 1, 2])
def test_measured_film_on_glass(tmp_path, repeat):
    # arXiv 2602.06316 data: 286 nm diamond film on glass 1.53, 450-800 nm, mirror-corrected; normal incidence
    def read(path):
        rows = [row for row in csv.reader(path.read_text().splitlines()) if len(row) == 2]
        return np.array([[float(x) for x in row] for row in rows])

    measured, mirror = read(REAL / f"gap_0nm_{repeat}.csv"), read(REAL / "mirror_reference.csv")
    entry = next(e for e in json.loads((REAL / "index_tables.json").read_text()) if e["material"] == "PCD")
    rows = zip(entry["wavelength"], entry["real"], entry["complex"], strict=True)
    path = tmp_path / "film.txt"
    path.write_text("nm\n" + "\n".join(f"{w} {n} {abs(k)}" for w, n, k in rows))
    assert read_table(path).range_nm[0] < 450
    film = LayerTable(
        layers=(Layer(index=0, phase="other", thickness_nm=286.0, material=str(path)),), source="film on glass"
    )
    light = predict(film, incident="air", substrate="n=1.53", wavelengths="450:800:1")
    wavelength = light.reflectance.wavelength_nm
    percent = np.interp(wavelength, measured[:, 0], measured[:, 1])
    reference = np.interp(wavelength, mirror[:, 0], mirror[:, 1])
    reference = reference / 100 if reference.max() > 1.5 else reference
    assert np.sqrt(np.mean((percent / 100 * reference - light.reflectance.value) ** 2)) <= 0.02


# --- what must and must not matter ----------------------------------------------------------------------------------


def test_prediction_is_the_array_function():
    # no absorber, no cone, no slit: the very numbers of reflectance_transmittance
    light = predict(table(5, 95, 110), dark="n=1.56", bright="n=1.34", incident="air", substrate="n=1.5", angle=30)
    wavelength = np.arange(380.0, 781.0)
    np.testing.assert_array_equal(light.reflectance.wavelength_nm, wavelength)
    index = np.array([light_index(medium, wavelength) for medium in ("air", "n=1.56", "n=1.34", "n=1.5")])
    r, t = reflectance_transmittance(index, [[0, *[1, 2] * 5, 3]], [[95.0, 110.0] * 5], wavelength, aoi_deg=(30.0,))
    np.testing.assert_allclose(light.reflectance.value, r[0, 0].mean(axis=0), atol=1e-14)
    np.testing.assert_allclose(light.transmittance.value, t[0, 0].mean(axis=0), atol=1e-14)


def light_index(name, wavelength):
    from layerscan.optics.materials import find_medium, index_of

    return index_of(find_medium(name), wavelength)


def test_lit_from_the_end_is_the_table_upside_down():
    # depth grows along the normal; lit_side end starts at the last layer
    chirp = np.linspace(1, 1.5, 9)
    options = {"dark": "n=1.56+0.02i", "bright": "n=1.34", "substrate": "n=1.5"}
    layers = table(9, 95 * chirp, 110)
    turned = replace(layers, layers=layers.layers[::-1])
    one, two = predict(layers, lit_side="end", **options), predict(turned, lit_side="start", **options)
    np.testing.assert_allclose(one.reflectance.value, two.reflectance.value, atol=1e-14)
    assert one.structure.thickness_nm == two.structure.thickness_nm
    assert one.structure.thickness_nm[0] == 110
    assert one.structure.sequence[0] == "air"
    assert one.structure.sequence[-1] == "n=1.5"


def test_own_material_of_a_layer_counts_before_its_phase():
    # a hand-made table names materials; phases then need none
    layers = tuple(
        replace(layer, material="n=1.56" if layer.phase == "dark" else "n=1.34") for layer in table(8, 95, 110).layers
    )
    named = predict(LayerTable(layers=layers, source="hand-made"))
    phased = predict(table(8, 95, 110), dark="n=1.56", bright="n=1.34")
    np.testing.assert_array_equal(named.reflectance.value, phased.reflectance.value)
    assert named.swapped is None
    assert "phase_assignment_assumed" not in named.flags


def test_incomplete_ends_are_left_out_and_said():
    # layers cut off by the frame have no thickness
    whole = table(8, 95, 110)
    cut = [replace(whole.layers[0], complete=False), *whole.layers[1:-1], replace(whole.layers[-1], complete=False)]
    light = predict(replace(whole, layers=tuple(cut)), dark="n=1.56", bright="n=1.34")
    assert light.structure.layers == light.structure.layers_seen == 14
    assert "layers_left_out" in light.flags
    assert any("2 incomplete end layers" in note for note in light.notes)


def test_absorber_sends_nothing_back():
    # index-matched to the real part of the last layer: as if the last layer went on for ever
    light = predict(table(1, 95, 300), dark="n=1.56", bright="n=1.34+0.01i", substrate="absorber", incident="n=1.34")
    index = np.array([1.34, 1.56, 1.34 + 0.01j, 1.34])[:, None] * np.ones(401)
    r, _ = reflectance_transmittance(index, [[0, 1, 2, 3]], [[95.0, 300.0]], light.reflectance.wavelength_nm)
    np.testing.assert_allclose(light.reflectance.value, r[0, 0, 0], atol=1e-14)
    assert light.structure.sequence[-1] == "absorber matched to n=1.34+0.01i"


@pytest.mark.parametrize(("cut", "matched"), [("start", "n=1.34"), ("end", "n=1.56")])
def test_absorber_matches_the_last_of_all_layers(cut, matched):
    # further layers beyond the far end change which medium is the last; ahead of the stack they do not
    layers = replace(table(5, 95, 110), start_cut_by_frame=cut == "start", end_cut_by_frame=cut == "end")
    light = predict(layers, dark="n=1.56", bright="n=1.34", substrate="absorber", layers=15)
    assert light.structure.sequence[-1] == f"absorber matched to {matched}"
    assert light.structure.sequence[-2] == matched


def test_absorber_follows_the_drawn_index():
    # it stays matched in every draw: a half-space of the same uncertain index reflects nothing at the back
    layers = LayerTable(layers=(Layer(index=0, phase="dark", thickness_nm=500.0, u_nm=50.0),), source="x")
    light = predict(layers, dark="n=1.5 +- 0.05", substrate="absorber", incident="n=1", draws=50)
    np.testing.assert_allclose(np.ptp(light.reflectance.upper), 0.0, atol=1e-12)  # no fringes


def test_bandwidth_smooths_and_keeps_the_ends():
    # a wider slit lowers the band, and the first value is that of a calculation reaching further out
    layers = table(30, 130, 40)
    options = {"dark": "n=1.56", "bright": "n=1.34", "incident": "n=1.33"}
    sharp, wide = predict(layers, **options), predict(layers, bandwidth=20, **options)
    assert wide.reflectance.value.max() < sharp.reflectance.value.max()
    further = predict(layers, bandwidth=20, wavelengths="360:800:1", **options)
    np.testing.assert_allclose(wide.reflectance.value, further.reflectance.value[20:-20], atol=1e-12)


def test_truncated_range_flags_the_colour():
    # colour needs 380 to 780 nm
    light = predict(table(8, 95, 110), dark="n=1.56", bright="n=1.34", wavelengths="450:700:1")
    assert "spectrum_truncated" in light.flags


@pytest.mark.parametrize("seen", [9, 10])
def test_repeated_layers_make_the_order_whatever_the_end(seen):
    # an odd layer at the end changes neither period nor order
    layers = table(10, 95, 110).layers[: 2 * seen - 1]
    light = predict(LayerTable(layers=layers, source="x"), dark="n=1.56", bright="n=1.34", incident="n=1.34")
    assert [peak.order for peak in light.peaks] == [1]


def test_order_is_doubted_where_the_period_is_not_one():
    # a regular stack has its first order at its Bragg wavelength; a strongly chirped one has its band elsewhere
    regular = predict(table(30, 130, 40), dark="n=1.56", bright="n=1.34", incident="n=1.33")
    assert "order_uncertain" not in regular.flags
    chirp = np.linspace(0.8, 1.5, 40)
    chirped = predict(
        table(40, 75 * chirp, 88 * chirp), dark="n=1.56+0.06i", bright="n=1.34", incident="n=1.33",
        wavelengths="350:900:1",
    )  # fmt: skip
    assert "order_uncertain" in chirped.flags


# --- draws ----------------------------------------------------------------------------------------------------------

DRAWN = {"dark": "n=1.56", "bright": "n=1.34", "incident": "n=1.33", "draws": 400}


def test_calibration_alone_moves_the_peak_in_proportion():
    # all lengths scale together: u(lambda) = lambda u(scale); constant indices
    light = predict(table(30, 130, 40, u=0.0, u_scale_relative=0.01), **DRAWN)
    (peak,) = light.peaks
    assert peak.wavelength_nm == pytest.approx(514.4, abs=1.0)
    assert peak.u_wavelength_nm == pytest.approx(0.01 * peak.wavelength_nm, rel=0.12)


def test_common_scale_in_u_is_not_counted_twice():
    # each layer's u contains calibration: u = scale u x thickness leaves nothing of its own
    layers = table(30, 130, 40, u_scale_relative=0.01)
    only_scale = tuple(replace(layer, u_nm=0.01 * layer.thickness_nm) for layer in layers.layers)
    one = predict(replace(layers, layers=only_scale), **DRAWN).peaks[0]
    two = predict(table(30, 130, 40, u=0.0, u_scale_relative=0.01), **DRAWN).peaks[0]
    assert one.u_wavelength_nm == pytest.approx(two.u_wavelength_nm, rel=1e-6)


def test_index_uncertainty_moves_the_peak_by_its_share():
    # d lambda / d n = 2 d for the Bragg wavelength 2 (n1 d1 + n2 d2)
    light = predict(table(30, 130, 40, u=0.0, u_scale_relative=0.0), **{**DRAWN, "dark": "n=1.56 +- 0.01"})
    assert light.peaks[0].u_wavelength_nm == pytest.approx(2 * 130 * 0.01, rel=0.12)
    assert "index_uncertainty_unknown" in light.flags  # of the bright layers


def test_independent_layers_average_out():
    # lambda = 2 sum(n d)/N: u = 2/N sqrt(N (n1^2 + n2^2)) u_layer, the weights of a finite band aside
    light = predict(table(40, 130, 40, u=2.0, u_scale_relative=0.0), **DRAWN)
    expected = 2 / 40 * np.sqrt(40 * (1.56**2 + 1.34**2)) * 2.0
    assert light.peaks[0].u_wavelength_nm == pytest.approx(expected, rel=0.5)


def test_traced_boundaries_share_their_errors():
    # the same u per layer gives a smaller u of the peak where layers lie between traced boundaries
    layers = table(40, 130, 40, u=2.0, u_scale_relative=0.0)
    thickness = np.array([layer.thickness_nm for layer in layers.layers])
    traced = replace(layers, station_thickness_nm=np.repeat(thickness[None], 4, axis=0), station_step_nm=50.0)
    assert predict(traced, **DRAWN).peaks[0].u_wavelength_nm < 0.5 * predict(layers, **DRAWN).peaks[0].u_wavelength_nm


def test_spread_of_scale_broadens_the_mean_curve_not_the_members():
    # facts table: 4 % scale spread, height and width belong to single curves
    exact = predict(table(30, 130, 40), **{**DRAWN, "draws": 0}).peaks[0]
    light = predict(table(30, 130, 40, u=0.0, u_scale_relative=0.04), **DRAWN)
    assert light.peaks[0].fwhm_nm == pytest.approx(exact.fwhm_nm, rel=0.03)
    assert light.peaks[0].reflectance == pytest.approx(exact.reflectance, abs=0.005)
    wide = light.reflectance.wavelength_nm[light.reflectance.upper > 0.5]
    assert wide[-1] - wide[0] > 2 * exact.fwhm_nm


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_limits_hold_a_new_draw_as_often_as_they_say(seed):
    # coverage: structures drawn afresh from the stated uncertainty lie within lower and upper at about 95 % of points
    layers = table(20, 130, 40, u=3.0, u_scale_relative=0.01)
    light = predict(layers, **{**DRAWN, "seed": seed})
    rng = np.random.default_rng(100 + seed)
    inside = []
    for _ in range(60):
        scale = 1 + 0.01 * rng.standard_normal()
        fresh = []
        for layer in layers.layers:
            own = np.sqrt(3.0**2 - (0.01 * layer.thickness_nm) ** 2)
            thick = (layer.thickness_nm + own * rng.standard_normal()) * scale
            fresh.append(replace(layer, thickness_nm=thick))
        curve = predict(replace(layers, layers=tuple(fresh)), **{**DRAWN, "draws": 0}).reflectance.value
        inside.append(np.mean((curve >= light.reflectance.lower) & (curve <= light.reflectance.upper)))
    assert np.mean(inside) == pytest.approx(0.95, abs=0.03)


@pytest.mark.parametrize("traced", [False, True])
def test_interval_of_the_peak_holds_the_truth(traced):
    # coverage: structures measured with the stated errors; value +- 2 u holds the true peak as often as it says
    rng = np.random.default_rng(11)
    truth = table(20, 130, 40)
    exact = predict(truth, **{**DRAWN, "draws": 0}).peaks[0].wavelength_nm
    thickness = np.array([layer.thickness_nm for layer in truth.layers])
    inside = []
    for number in range(60):
        scale = 1 + 0.005 * rng.standard_normal()
        boundary = 2.0 / np.sqrt(2) * rng.standard_normal(41)
        own = np.diff(boundary) if traced else 2.0 * rng.standard_normal(40)
        seen = (thickness + own) * scale
        layers = tuple(
            replace(layer, thickness_nm=float(d), u_nm=float(np.hypot(2.0, 0.005 * d)))
            for layer, d in zip(truth.layers, seen, strict=True)
        )
        measured = LayerTable(
            layers=layers, source="x", u_scale_relative=0.005, station_step_nm=50.0,
            station_thickness_nm=np.repeat(seen[None], 2, axis=0) if traced else None,
        )  # fmt: skip
        peak = predict(measured, **{**DRAWN, "draws": 100, "seed": number}).peaks[0]
        inside.append(abs(peak.wavelength_nm - exact) <= 2 * peak.u_wavelength_nm)
    assert 0.85 <= np.mean(inside) <= 1.0


def test_colour_radius_holds_the_draws():
    # delta_e00_95 grows with the uncertainty and vanishes without any
    radius = [
        predict(table(30, 130, 40, u=0.0, u_scale_relative=u), **DRAWN).colour.delta_e00_95 for u in (0.0, 0.005, 0.02)
    ]
    assert radius[0] == pytest.approx(0.0, abs=1e-9)
    assert radius[0] < radius[1] < radius[2]


def test_same_seed_same_prediction_other_seed_other_draws():
    # seeded and reproducible
    layers = table(10, 130, 40, u=2.0, u_scale_relative=0.01)
    one, two, other = (predict(layers, **{**DRAWN, "draws": 50, "seed": seed}) for seed in (1, 1, 2))
    np.testing.assert_array_equal(one.reflectance.upper, two.reflectance.upper)
    assert one.peaks == two.peaks
    assert (one.reflectance.upper != other.reflectance.upper).any()


def test_further_layers_are_drawn_and_said():
    # more layers than were seen raise the reflectance of a weak stack; the nominal curve is one draw
    rng = np.random.default_rng(0)
    layers = table(10, 95 + rng.normal(0, 3, 10), 110 + rng.normal(0, 3, 10), u=0.5, u_scale_relative=0.0)
    options = {**DRAWN, "bright": "n=1.50", "draws": 100}
    few, many = predict(layers, **options), predict(layers, layers=80, **options)
    assert many.structure.layers == 80
    assert many.structure.layers_seen == 20
    assert many.structure.thickness_nm[:20] == few.structure.thickness_nm
    assert "layers_extended" in many.flags
    assert many.peaks[0].reflectance > few.peaks[0].reflectance + 0.2


@pytest.mark.parametrize(("cut", "place"), [("start", slice(60, 80)), ("end", slice(0, 20)), ("both", slice(0, 20))])
def test_further_layers_lie_where_the_frame_cut(cut, place):
    # beyond the end that the frame cut off; where both or none were cut, at the far end
    rng = np.random.default_rng(0)
    layers = table(10, 95 + rng.normal(0, 3, 10), 110 + rng.normal(0, 3, 10))
    layers = replace(layers, start_cut_by_frame=cut in ("start", "both"), end_cut_by_frame=cut in ("end", "both"))
    light = predict(layers, dark="n=1.56", bright="n=1.5", layers=80)
    assert light.structure.thickness_nm[place] == tuple(layer.thickness_nm for layer in layers.layers)
    assert set(light.structure.sequence[1:-1:2]) == {"n=1.56"}  # the pattern goes on


def test_fewer_layers_than_seen_are_those_nearest_the_light():
    # lit from the end, the last layers are the nearest
    light = predict(table(10, 95, np.arange(100.0, 110)), dark="n=1.56", bright="n=1.5", layers=4, lit_side="end")
    assert light.structure.thickness_nm == (109.0, 95.0, 108.0, 95.0)


def test_lateral_mean_is_given_where_boundaries_were_traced():
    # stations that differ lower the specular band; equal stations leave the nominal curve
    layers = table(12, 95, 110, u=1.0, u_scale_relative=0.0)
    thickness = np.array([layer.thickness_nm for layer in layers.layers])
    rng = np.random.default_rng(2)
    same = np.repeat(thickness[None], 20, axis=0)
    rough = same + 15 * rng.standard_normal(same.shape)
    rough += thickness - rough.mean(axis=0)
    options = {**DRAWN, "draws": 20}
    flat = predict(replace(layers, station_thickness_nm=same, station_step_nm=20.0), **options)
    np.testing.assert_allclose(flat.lateral.value, flat.reflectance.value, atol=1e-12)
    light = predict(replace(layers, station_thickness_nm=rough, station_step_nm=20.0), **options)
    assert light.lateral.value.max() < light.reflectance.value.max() - 0.03
    assert any("20 lateral positions" in note for note in light.notes)
    assert predict(layers, **options).lateral is None


# --- series ---------------------------------------------------------------------------------------------------------


def test_scale_series_moves_the_peak_in_proportion():
    # constant indices: no length but the thicknesses
    light = predict(table(30, 130, 40), dark="n=1.56", bright="n=1.34", incident="n=1.33", vary="scale=0.9:1.2:0.1")
    found = np.array([point.peaks[0].wavelength_nm for point in light.series.points])
    np.testing.assert_allclose(found / found[1], [0.9, 1.0, 1.1, 1.2], rtol=2e-3)
    assert [point.value for point in light.series.points] == pytest.approx([0.9, 1.0, 1.1, 1.2])
    assert (light.series.name, light.series.unit) == ("scale", "1")


@pytest.mark.parametrize("ratio", [0.46, 0.3])
def test_strain_series_follows_poisson(ratio):
    # thickness scales by (1 + strain)^-ratio
    light = predict(
        table(30, 130, 40), dark="n=1.56", bright="n=1.34", incident="n=1.33", vary="strain=0:0.2:0.1",
        poisson_ratio=ratio,
    )  # fmt: skip
    found = np.array([point.peaks[0].wavelength_nm for point in light.series.points])
    np.testing.assert_allclose(found / found[0], (1 + np.array([0, 0.1, 0.2])) ** -ratio, rtol=2e-3)


def test_layer_series_raises_the_peak():
    # more bilayers reflect more
    light = predict(table(30, 130, 40), dark="n=1.56", bright="n=1.5", incident="n=1.5", vary="layers=10:60:10")
    heights = [point.reflectance.value.max() for point in light.series.points]
    assert (np.diff(heights) > 0).all()


def test_immersion_series_lowers_the_front_reflection():
    # matching the incident medium to the first layer takes away its front reflection
    layers = LayerTable(layers=(Layer(index=0, phase="dark", thickness_nm=5e4),), source="slab")
    light = predict(layers, dark="n=1.5", substrate="n=1.5", vary="immersion=1:1.5:0.25")
    means = [point.reflectance.value.mean() for point in light.series.points]
    assert means == pytest.approx([0.04, (0.25 / 2.75) ** 2, 0.0], abs=1e-9)


def test_aperture_series_equals_single_predictions():
    # each point is the prediction under that setting
    options = {"dark": "n=1.56", "bright": "n=1.34", "incident": "n=1.33"}
    light = predict(table(12, 95, 110), vary="aperture=0:0.8:0.4", **options)
    for point in light.series.points:
        alone = predict(table(12, 95, 110), aperture=point.value, **options)
        np.testing.assert_array_equal(point.reflectance.value, alone.reflectance.value)
        assert point.colour == alone.colour


# --- records, flags, errors -----------------------------------------------------------------------------------------


def test_record_is_complete():
    # settings as given, flags defined, materials with their source, conditions
    light = predict(table(8, 95, 110), dark="chitin", bright="air")
    assert light.settings == PredictSettings(draws=0, dark="chitin", bright="air").model_dump()
    assert set(light.flags) <= set(FLAGS)
    assert {"lit_side_assumed", "incident_assumed", "substrate_assumed", "index_extrapolated"} <= set(light.flags)
    assert any("Index of chitin used up to 80 nm outside the 400 to 700 nm" in note for note in light.notes)
    assert [record["name"] for record in light.materials] == ["air", "chitin"]
    assert light.materials[1]["doi"] == "10.1364/OE.19.024061"
    assert light.conditions["incident"] == "air"
    assert light.conditions["lit_side"] == "start"
    stated = predict(
        table(8, 95, 110), dark="chitin", bright="air", incident="air", substrate="air", lit_side="start",
        wavelengths="400:700:1",
    )  # fmt: skip
    assert not {"lit_side_assumed", "incident_assumed", "substrate_assumed", "index_extrapolated"} & set(stated.flags)


@pytest.mark.parametrize(
    ("settings", "error", "message"),
    [
        ({"dark": "chitin"}, SettingsError, r"bright layers have no material.*--bright"),
        ({"bright": "chitin"}, SettingsError, r"dark layers have no material.*--dark"),
        ({"dark": "chitn", "bright": "air"}, MaterialError, "nearest names are chitin"),
        ({"dark": "n=1.5", "bright": "n=1.3", "incident": "n=1.4+0.1i"}, SettingsError, "absorbs"),
        ({"dark": "n=1.5", "bright": "n=1.3", "wavelengths": "900:1700:1"}, SettingsError, "no colour exists"),
        ({"dark": "n=1.5", "bright": "n=1.3", "aperture": 1.2}, SettingsError, "aperture of 1.2"),
        ({"dark": "n=1.5", "bright": "n=1.3", "draws": 100_000, "wavelengths": "380:780:0.1"}, SettingsError, "draws"),
        ({"dark": "n=1.5", "bright": "n=1.3", "vary": "strain=-1:0:0.5"}, SettingsError, "strain -1 leaves no layers"),
        ({"dark": "n=1.5", "bright": "n=1.3", "vary": "angle=80:100:10"}, SettingsError, "angle"),
    ],
)
def test_bad_settings_are_named(settings, error, message):
    # the message says which thing and what to give
    with pytest.raises(error, match=message):
        predict(table(8, 95, 110), **settings)


@pytest.mark.parametrize(
    ("layers", "error", "message"),
    [
        ((), InputError, "no complete layer"),
        ((Layer(index=0, phase="dark", thickness_nm=5.0, complete=False),), InputError, "no complete layer"),
        ((Layer(index=3, phase="dark", thickness_nm=-5.0),), InputError, "Layer 3 .* thickness of -5.0 nm"),
        ((Layer(index=3, phase="dark", thickness_nm=float("nan")),), InputError, "thickness of nan nm"),
        ((Layer(index=3, phase="other", thickness_nm=5.0),), SettingsError, "Layer 3 is neither dark"),
    ],
)
def test_bad_layers_are_named(layers, error, message):
    # the message says which layer
    with pytest.raises(error, match=message):
        predict(LayerTable(layers=layers, source="bad.csv"), dark="n=1.5")


def test_interruption_passes_through():
    # the caller's Interrupted comes out as it is
    def stop(what, fraction):
        if "drawing" in what:
            raise Interrupted("stopped by the caller")

    with pytest.raises(Interrupted, match="stopped by the caller"):
        predict_light(table(8, 95, 110, u=1.0), PredictSettings(dark="n=1.5", bright="n=1.3"), progress=stop)


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_common_uncertainty_comes_out_whole_whatever_the_seed(seed):
    # law: a peak scales with all thicknesses, so u(peak)/peak = u(scale); constant indices, no other uncertainty
    layers = tuple(Layer(index=i, phase="dark" if i % 2 else "bright", thickness_nm=90.0, u_nm=0.9) for i in range(24))
    table = LayerTable(layers=layers, source="made here", u_scale_relative=0.01)
    settings = PredictSettings(dark="n=1.35", bright="n=1.56", substrate="absorber", seed=seed, draws=400)
    peak = max(predict_light(table, settings).peaks, key=lambda p: p.reflectance)
    assert peak.u_wavelength_nm == pytest.approx(0.01 * peak.wavelength_nm, rel=0.03)
