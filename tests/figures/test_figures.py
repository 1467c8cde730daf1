import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest
from figures.made_records import bell, make_colour, make_measurement, make_prediction

from layerscan.errors import InputError
from layerscan.figures import style
from layerscan.figures.comparison import draw_comparison
from layerscan.figures.materials import draw_medium
from layerscan.figures.measurement import draw_measurement
from layerscan.figures.prediction import draw_prediction
from layerscan.figures.series import draw_series
from layerscan.records import Agreement, Comparison, Medium, Peak, Series, SeriesPoint, Spectrum

SVG = "{http://www.w3.org/2000/svg}"


def words(svg: str) -> list[str]:
    return ["".join(node.itertext()) for node in ET.fromstring(svg).iter(f"{SVG}text")]


def make_comparison(**changes: object) -> Comparison:
    base = Comparison(
        version="0",
        settings={},
        flags=(),
        peak_difference_nm=47.0,
        u_peak_difference_nm=6.1,
        fwhm_difference_nm=1.0,
        rms=0.1,
        delta_e00=23.4,
        agreement=Agreement(
            statistic=7.7, p_value=1e-9, conclusion="contradicts", passing_peak_range_nm=(533.0, 557.0)
        ),
        reasons=(),
        sentence="Predicted 545 nm, observed 498 nm.",
        observed_colour=make_colour("#2f8fb0"),
        observed_peaks=(Peak(order=None, wavelength_nm=498.0, u_wavelength_nm=0.6, reflectance=0.6, fwhm_nm=60.0),),
    )
    return replace(base, **changes)


def make_observed(kind: str = "reflectance") -> Spectrum:
    wavelength = np.arange(350.0, 900.0)
    value = bell(wavelength, 498.0)
    value = {"reflectance": value, "transmittance": 1 - value, "absorbance": -np.log10(1 - value)}[kind]
    return Spectrum(wavelength_nm=wavelength, value=value, kind=kind)


ALL = {
    "measurement": lambda: draw_measurement(*make_measurement()),
    "no layers": lambda: draw_measurement(*make_measurement(layered=False)),
    "prediction": lambda: draw_prediction(make_prediction()),
    "no peak": lambda: draw_prediction(replace(make_prediction(), peaks=(), swapped=None)),
    "comparison": lambda: draw_comparison(make_comparison(), make_prediction(), make_observed()),
    "colour only": lambda: draw_comparison(make_comparison(observed_peaks=()), make_prediction(), None),
}


@pytest.mark.parametrize("name", ALL)
def test_figure_is_equal_small_labelled_svg(name):
    # rules of the project: equal bytes, under 400 kB, title and description for those who cannot see it (SVG 2, 5.8)
    svg = ALL[name]()
    assert svg == ALL[name]()
    assert len(svg.encode()) < 400_000
    root = ET.fromstring(svg)
    assert root.get("role") == "img"
    title, description = root.find(f"{SVG}title"), root.find(f"{SVG}desc")
    assert root.get("aria-labelledby") == f"{title.get('id')} {description.get('id')}"
    assert len(description.text) > 40
    assert "<script" not in svg
    assert not re.search(r'(?:href|src)="(?!#|data:image/)', svg)  # nothing is fetched


def test_measurement_shows_what_the_issue_asks_for():
    # what figure.svg must show: numbers of both phases, scale bar, direction, lit side, profile, distributions
    text = " ".join(words(draw_measurement(*make_measurement(), lit_side="end")))
    for part in (
        "86.10 ± 0.88 nm",
        "dark: 52.10 ± 0.55 nm",
        "bright: 34.00 ± 0.40 nm",
        "200 nm",
        "depth",
        "light",
        "not resolved on its own",
        "cut off by the frame",
        "Profile",
        "Power spectrum",
        "Dark layers",
        "Bright layers",
    ):
        assert part in text


def test_lit_side_moves_the_mark():
    # the mark stands at the first layer for start, at the last for end
    start, end = (draw_measurement(*make_measurement(), lit_side=side) for side in ("start", "end"))
    assert start != end
    assert "The end of the stack faces the light" in end


def test_figure_without_layers_says_so_and_states_no_thickness():
    # no number where no honest number exists
    text = " ".join(words(draw_measurement(*make_measurement(layered=False))))
    assert "No layered structure was found" in text
    assert "±" not in text


def test_unresolved_and_left_out_are_hatched():
    # hatching is drawn as SVG patterns: one for what was left out, one more for unresolved layers
    plain, _ = make_measurement()
    resolved = replace(plain, layers=tuple(replace(layer, flags=()) for layer in plain.layers))
    _, micrograph = make_measurement()
    count = [draw_measurement(m, micrograph).count("<pattern") for m in (plain, resolved)]
    assert count[0] > count[1] >= 1


@pytest.mark.parametrize(
    "name", ["a<b>&\"'.tif", "$x_1$ \\frac.tif", "a\x00\x1b\n.tif", "</svg><script>alert(1)</script>.tif"]
)
def test_file_names_are_text_and_nothing_else(name):
    # a file name may hold anything that a file system allows
    svg = draw_measurement(*make_measurement(path=name))
    ET.fromstring(svg)
    assert "<script" not in svg


def test_image_without_pixel_size_is_drawn_in_pixels():
    # unknown is never 1: the axes say pixels and there is no scale bar
    measurement, micrograph = make_measurement(layered=False)
    unknown = replace(measurement, image=replace(measurement.image, pixel_size=None))
    text = " ".join(words(draw_measurement(unknown, micrograph)))
    assert "column (pixels)" in text
    assert "nm" not in text


def test_line_mode_shows_the_line_and_a_tick_for_each_boundary():
    # along a line every trace has one station; nothing outside the line is hatched as left out
    measurement, micrograph = make_measurement()
    boundaries = tuple(
        replace(b, trace=replace(b.trace, **{name: getattr(b.trace, name)[:1] for name in vars(b.trace)}))
        for b in measurement.boundaries
    )
    on_line = replace(measurement, settings={"line": (30.0, 40.0, 360.0, 60.0)}, boundaries=boundaries)
    field, line = (draw_measurement(m, micrograph) for m in (replace(measurement, boundaries=()), on_line))
    yellow = [svg.lower().count(style.YELLOW.lower()) for svg in (field, line)]
    assert yellow[1] - yellow[0] >= len(boundaries) + 1


def test_headline_says_where_calibration_is_left_out():
    measurement, micrograph = make_measurement()
    unknown = replace(measurement, flags=("calibration_uncertainty_unknown",))
    assert "u without calibration" in " ".join(words(draw_measurement(unknown, micrograph)))


@pytest.mark.parametrize("periods", [1, 2, 90])
def test_few_and_many_layers_can_be_drawn(periods):
    # 180 traces stay under the size limit
    assert len(draw_measurement(*make_measurement(periods=periods)).encode()) < 400_000


def test_stack_without_traces_statistics_or_profile_can_be_drawn():
    # every optional part of the record may be None
    measurement, micrograph = make_measurement()
    bare = replace(
        measurement,
        statistics=None,
        profile=None,
        dark=None,
        bright=None,
        period=None,
        spacing=None,
        boundaries=tuple(replace(b, trace=None) for b in measurement.boundaries),
        layers=tuple(replace(layer, u_nm=None) for layer in measurement.layers),
    )
    assert "no repeating period" in " ".join(words(draw_measurement(bare, micrograph)))


def test_prediction_labels_orders_and_both_assignments():
    text = " ".join(words(draw_prediction(make_prediction(order=2))))
    for part in ("order 2", "545 nm", "95 % of the draws", "swapped: dark air, bright chitin", "nearest in sRGB"):
        assert part in text


def test_comparison_shows_band_conclusion_and_both_colours():
    svg = draw_comparison(make_comparison(), make_prediction(), make_observed())
    text = " ".join(words(svg))
    for part in ("does not explain", "would have passed", "CIEDE2000 23.4", "observed", "predicted", "498 nm"):
        assert part in text
    assert "533 to 557 nm" in svg  # in the description


@pytest.mark.parametrize("kind", ["transmittance", "absorbance"])
def test_transmittance_is_compared_on_an_axis_of_transmittance(kind):
    # like with like: A = -log10 T, so both show the same curve
    svg = draw_comparison(make_comparison(), make_prediction(), make_observed(kind))
    assert "transmittance (0 to 1)" in words(svg)


def test_series_names_every_colour():
    # text alternatives of the row of swatches
    prediction = make_prediction()
    points = tuple(
        SeriesPoint(value=v, reflectance=prediction.reflectance, peaks=prediction.peaks, colour=make_colour(c))
        for v, c in ((0.0, "#3fa267"), (30.0, "#3fa2a0"), (60.0, "#3f60a0"))
    )
    svg = draw_series(replace(prediction, series=Series(name="angle", unit="deg", points=points)))
    for part in ("0 deg: peak 545 nm", "30 deg", "#3f60a0"):
        assert part in svg
    assert "image/png" in svg  # the coloured map keeps its colours


def test_prediction_without_series_is_refused():
    with pytest.raises(InputError, match=r"no series.*vary="):
        draw_series(make_prediction())


def test_material_range_is_marked():
    medium = Medium(
        name="invented <glass>",
        index=(lambda w: 1.5 + 5000 / w**2 + 0.01j,),
        range_nm=(400.0, 700.0),
        u_index=0.01,
        source="nobody",
        status="convention",
    )
    svg = draw_medium(medium)
    ET.fromstring(svg)
    text = " ".join(words(svg))
    assert "outside the range of the source" in text
    assert "extinction coefficient" in text
    constant = Medium(name="n=1.56", index=(lambda w: np.full_like(w, 1.56, dtype=complex),))
    assert "outside" not in " ".join(words(draw_medium(constant)))
