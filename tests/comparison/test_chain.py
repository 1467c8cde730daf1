"""From pictures whose every boundary is known to the conclusion: how often a true structure is contradicted."""

import numpy as np
import pytest
from sections import make_section

import layerscan
from layerscan.comparison.compare import compare_light
from layerscan.readers.images import from_array
from layerscan.records import Layer, LayerTable, Spectrum
from layerscan.settings import CompareSettings

PERIOD_NM, U_PIXEL = 185.0, 0.01
LIGHT = {"dark": "n=1.585", "bright": "n=1.49", "incident": "air", "substrate": "n=1.49", "lit_side": "start",
         "wavelengths": "380:900:1"}  # fmt: skip


def true_layers(found, truth):
    """True thickness [px] of each complete measured layer: the stretch of the truth that fits best, from either end."""
    inner = [layer for layer in found.layers if layer.complete]
    measured, phases = np.array([layer.thickness_nm for layer in inner]), [layer.phase for layer in inner]
    best = None
    for turn in (1, -1):
        thickness, names = truth.thickness_px[::turn], list(truth.layer_phase[::turn])
        for start in range(len(thickness) - len(measured) + 1):
            part = thickness[start : start + len(measured)]
            if names[start : start + len(measured)] == phases:
                misfit = float(np.std(part / measured))
                best = min(best, (misfit, start, turn)) if best else (misfit, start, turn)
    if best is None:
        return None
    _, start, turn = best
    return [
        (phase, float(px))
        for phase, px in zip(phases, truth.thickness_px[::turn][start : start + len(measured)], strict=True)
    ]


def conclusions(kinds, seeds):
    """Conclusions over pictures whose pixel size is stated with an error drawn from its stated uncertainty."""
    rng = np.random.default_rng(9)
    answers = []
    for kind in kinds:
        for seed in seeds:
            image, truth = make_section(kind, seed)
            nm_per_px = PERIOD_NM / truth.period_px
            stated = nm_per_px * (1 + U_PIXEL * rng.standard_normal())
            found = layerscan.measure(from_array(image, pixel_size_nm=stated, u_relative=U_PIXEL))
            layers = true_layers(found, truth)
            if layers is None:
                continue
            table = LayerTable(
                layers=tuple(
                    Layer(index=i, phase=phase, thickness_nm=px * nm_per_px, u_nm=0.0)
                    for i, (phase, px) in enumerate(layers)
                ),
                source="truth",
                u_scale_relative=0.0,
            )
            light = layerscan.predict(table, draws=0, **LIGHT).reflectance
            seen = Spectrum(
                wavelength_nm=light.wavelength_nm + 0.5 * rng.standard_normal(),
                value=light.value + rng.normal(0, 0.004, light.value.size),
                kind="reflectance",
            )
            prediction = layerscan.predict(found, draws=300, seed=seed, **LIGHT)
            answers.append(compare_light(prediction, seen, CompareSettings()).agreement.conclusion)
    return answers


def test_true_structures_are_seldom_contradicted():
    # coverage through the whole chain: 5 % of 8, binomial 99.9 % bound 3; and the answer is not "cannot tell"
    answers = conclusions(("easy",), range(1, 9))
    assert len(answers) == 8
    assert answers.count("contradicts") <= 3
    assert answers.count("explains") >= 5


@pytest.mark.slow
def test_true_structures_are_seldom_contradicted_long():
    # coverage through the whole chain: 5 % of at least 72, binomial 99.8 % bounds of 80 are 0 to 11
    answers = conclusions(("easy", "moderate", "tem", "sem"), range(1, 21))
    assert len(answers) >= 72
    assert answers.count("contradicts") <= 11
    assert answers.count("explains") >= 0.85 * len(answers)
