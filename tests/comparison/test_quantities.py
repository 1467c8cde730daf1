from dataclasses import replace

import numpy as np
import pytest
from figures.made_records import bell, make_prediction

from layerscan.comparison.quantities import like_with_like, noise_of
from layerscan.errors import InputError, SettingsError
from layerscan.records import Spectrum
from layerscan.settings import CompareSettings


def observed(wavelength=None, value=None, **fields):
    wavelength = np.arange(350.0, 850.0) if wavelength is None else np.asarray(wavelength, dtype=float)
    value = bell(wavelength, 545.0) if value is None else np.asarray(value, dtype=float)
    return Spectrum(wavelength_nm=wavelength, value=value, **{"kind": "reflectance", "source": "seen.csv", **fields})


def test_absorbance_is_compared_as_transmittance():
    # IUPAC Gold Book, absorbance: A = -log10 T
    prediction = make_prediction()
    spectrum = prediction.transmittance
    pair = like_with_like(
        prediction, observed(spectrum.wavelength_nm, -np.log10(spectrum.value), kind="absorbance"), CompareSettings()
    )
    assert pair.kind == "transmittance"
    assert np.allclose(pair.observed, pair.predicted, atol=1e-12)
    assert "10^-A" in pair.notes[0]


@pytest.mark.parametrize("factor", [0.3, 2.0])
def test_free_scale_finds_the_factor(factor):
    # closed form: least squares of proportional curves gives the inverse factor
    prediction = make_prediction()
    seen = observed(prediction.reflectance.wavelength_nm, prediction.reflectance.value * factor)
    pair = like_with_like(prediction, seen, CompareSettings(scale="free"))
    assert pair.scale == pytest.approx(1 / factor, rel=1e-12)
    assert np.allclose(pair.observed, pair.predicted)
    assert "scale_free" in pair.flags


def test_free_scale_does_not_depend_on_where_the_band_lies():
    # change that must not matter: the same band 80 nm away
    prediction = make_prediction(centre=545.0)
    wavelength = prediction.reflectance.wavelength_nm
    seen = observed(wavelength, 0.5 * bell(wavelength, 465.0))
    assert like_with_like(prediction, seen, CompareSettings(scale="free")).scale == pytest.approx(2.0, rel=0.01)


def test_noise_is_found_under_a_sharp_band():
    # simulation of known noise; a median absolute deviation of 1000 correlated values scatters by about 5 %
    wavelength = np.arange(350.0, 850.0, 0.5)
    value = bell(wavelength, 545.0, fwhm=20.0) + np.random.default_rng(1).normal(0, 0.01, wavelength.size)
    assert noise_of(value) == pytest.approx(0.01, rel=0.15)
    assert noise_of(np.zeros(2)) == 0.0


def test_other_declared_quantity_is_refused():
    with pytest.raises(SettingsError, match=r"is reflectance, quantity says transmittance.*open|Open"):
        like_with_like(make_prediction(), observed(), CompareSettings(quantity="transmittance"))


@pytest.mark.parametrize("low", [781.0, 770.0, 1200.0])
def test_ranges_that_do_not_meet_are_refused_with_both(low):
    with pytest.raises(InputError, match=rf"380 to 780 nm.*{low:.0f} to .*share \d+ nm"):
        like_with_like(make_prediction(), observed(np.arange(low, low + 400)), CompareSettings())


def test_partial_overlap_is_flagged_and_full_cover_is_not():
    part = like_with_like(make_prediction(), observed(np.arange(450.0, 900.0)), CompareSettings())
    whole = like_with_like(make_prediction(), observed(np.arange(300.0, 900.0)), CompareSettings())
    assert "partial_overlap" in part.flags
    assert part.wavelength_nm[0] == 450.0
    assert "partial_overlap" not in whole.flags


def test_height_above_a_mirror_points_to_the_reference():
    # a specular specimen against a white diffuser reads above 1 (shared facts, optics_checks)
    wavelength = np.arange(350.0, 850.0)
    pair = like_with_like(make_prediction(), observed(wavelength, 3 * bell(wavelength, 545.0)), CompareSettings())
    assert "specular_reference_suspected" in pair.flags


@pytest.mark.parametrize(
    ("wavelength", "value", "message"),
    [
        ([400, 500, 500, 600, 700], [0.1] * 5, "do not increase"),
        ([700, 600, 500, 450, 400], [0.1] * 5, "do not increase"),
        ([400, 500, 600], [0.1] * 3, "3 values at 3 wavelengths"),
        ([400, 500, 600, 650, 700], [0.1, np.nan, 0.1, 0.1, 0.1], "not finite"),
        ([400, 500, 600, 650, 700], [0.1, np.inf, 0.1, 0.1, 0.1], "not finite"),
        ([400, 500, 600, 650, 700], [0.1] * 4, "4 values at 5 wavelengths"),
    ],
)
def test_spectra_that_cannot_be_used_are_refused(wavelength, value, message):
    with pytest.raises(InputError, match=message):
        like_with_like(make_prediction(), observed(wavelength, value), CompareSettings())


def test_dark_spectrum_cannot_be_scaled():
    with pytest.raises(InputError, match="all zero"):
        like_with_like(
            make_prediction(), observed(np.arange(350.0, 850.0), np.zeros(500)), CompareSettings(scale="free")
        )


def test_stated_uncertainty_is_used_for_noise():
    seen = observed()
    pair = like_with_like(make_prediction(), replace(seen, u=np.full(500, 0.02)), CompareSettings())
    assert pair.noise == pytest.approx(0.02)
    assert "observed_uncertainty_unknown" not in pair.flags
