"""Make the sample images, their truth, the observed spectra and the table. Everything is invented; seeds are fixed.

    python sample_images/make_samples.py [FOLDER]

Two lots. *Nacre*: platelets of a shell plate, about 450 nm of mineral (bright) and 32 nm of organic material (dark),
whose third and fourth orders lie in the visible. *Film*: 32 co-extruded layers of two polymers whose thickness drifts
across the web. Spectra are calculated from the true layers of each image, with the bandwidth and noise of an
instrument, except for one specimen that was measured in another state than it was imaged in (swollen): there the answer
must be "no".
"""

from __future__ import annotations

import csv
import dataclasses
import hashlib
import json
import sys
from pathlib import Path
from typing import Any

import numpy as np

HERE = Path(__file__).resolve().parent
if str(HERE) not in sys.path:
    sys.path.insert(0, str(HERE))

from sections import Recipe, Truth, render_section  # noqa: E402

WAVELENGTH_NM = np.arange(400.0, 781.0, 2.0)


@dataclasses.dataclass(frozen=True, kw_only=True)
class Sample:
    """One image with what belongs to it."""

    name: str
    lot: str
    specimen: str
    what: str
    recipe: Recipe
    seed: int
    shape: tuple[int, int]
    ome: bool
    dark: str
    bright: str
    swelling: float = 0.0  # relative growth of every layer between imaging and measuring the spectrum
    u_pixel_size: str = "1 %"


def _nacre(**changes: Any) -> Recipe:
    base = Recipe(
        period_px=96.4, dark_fraction=32 / 482, law="lognormal", cv_dark=0.08, cv_bright=0.03, orientation_deg=92.0,
        wave_amplitude_px=4.0, wave_length_px=700.0, roughness_px=0.6, correlation_length_px=25.0, replication=0.4,
        dark_level=0.25, bright_level=0.68, blur_px=1.1, noise=0.07, shading=0.06, edge_bump=0.05, edge_bump_px=1.6,
        bits=8, pixel_size_nm=5.0,
    )  # fmt: skip
    return dataclasses.replace(base, **changes)


def _film(mean_nm: float, **changes: Any) -> Recipe:
    base = Recipe(
        period_px=2 * mean_nm / 3.0, dark_fraction=0.5, law="normal", cv_dark=0.03, cv_bright=0.03, layers=32,
        orientation_deg=90.0, wave_amplitude_px=2.5, wave_length_px=500.0, roughness_px=0.5, correlation_length_px=20.0,
        replication=0.5, dark_level=0.35, bright_level=0.68, resin_level=0.52, substrate_level=0.52, blur_px=1.3,
        noise=0.06, shading=0.05, bits=8, pixel_size_nm=3.0,
    )  # fmt: skip
    return dataclasses.replace(base, **changes)


NACRE = {"lot": "nacre", "dark": "n=1.53 +- 0.01", "bright": "aragonite", "ome": False}
FILM = {"lot": "film", "dark": "polystyrene-zhang", "bright": "pmma-tomson"}
SAMPLES = (
    Sample(
        name="nacre_plate_1", specimen="plate 1", what="shell plate, polished section, backscattered electrons",
        seed=11, shape=(1264, 416), recipe=_nacre(banner_rows=48), **NACRE,
    ),
    Sample(
        name="nacre_plate_2", specimen="plate 2", what="shell plate, section turned in the field, curtains", seed=12,
        shape=(832, 832), recipe=_nacre(orientation_deg=63.0, curtains=0.02, noise=0.09, charging=0.01), **NACRE,
    ),
    Sample(
        name="nacre_plate_3", specimen="plate 3", what="shell plate, imaged dry; its spectrum was measured wet",
        seed=13, shape=(1216, 416),
        recipe=_nacre(orientation_deg=84.0, gamma=1.1, inverted=False), swelling=0.06, **NACRE,
    ),
    Sample(
        name="film_web_left", specimen="web left", what="co-extruded film, microtome section, stained", seed=21,
        shape=(1152, 352), recipe=_film(84.0), ome=True, **FILM,
    ),
    Sample(
        name="film_web_centre", specimen="web centre", what="co-extruded film, microtome section, stained", seed=22,
        shape=(1216, 352), recipe=_film(92.0, orientation_deg=97.0, noise=0.08), ome=False, **FILM,
    ),
    Sample(
        name="film_web_right", specimen="web right", what="co-extruded film, microtome section, stained", seed=23,
        shape=(1264, 352), recipe=_film(100.0, orientation_deg=88.0, banner_rows=48), ome=False, **FILM,
    ),
)  # fmt: skip
COLUMNS = (
    "image", "spectrum", "truth", "lot", "specimen", "what", "origin", "licence", "pixel_size", "known_period_nm",
    "known_dark_nm", "known_bright_nm", "known_layers", "known_orientation_deg", "dark", "bright", "incident",
    "substrate", "lit_side", "quantity", "expected", "sha256_image", "sha256_spectrum",
)  # fmt: skip


def draw_sample(sample: Sample) -> tuple[np.ndarray, Truth]:
    """The picture of one sample and its truth."""
    return render_section(sample.recipe, sample.seed, sample.shape, kind=sample.lot)


def true_layers(truth: Truth) -> list[tuple[str, float]]:
    """Phase and thickness [nm] of the layers whose both boundaries the frame shows over a third of their length."""
    kept = truth.required(0.3)
    return [
        (phase, float(thickness * truth.pixel_size_nm))
        for i, (phase, thickness) in enumerate(zip(truth.layer_phase, truth.thickness_px, strict=True))
        if kept[i] and kept[i + 1]
    ]


def observed_reflectance(sample: Sample, layers: list[tuple[str, float]]) -> np.ndarray:
    """Reflectance of the layers in air on an index-matched absorber, seen with 4 nm of bandwidth and some noise."""
    from scipy.ndimage import gaussian_filter1d

    from layerscan.optics.materials import find_medium, index_of
    from layerscan.optics.transfer import reflectance_transmittance

    fine = np.arange(WAVELENGTH_NM[0] - 20, WAVELENGTH_NM[-1] + 20.5, 0.5)
    inside = np.clip(fine, WAVELENGTH_NM[0], WAVELENGTH_NM[-1])  # the catalogue's range ends there
    media = {"dark": find_medium(sample.dark.split(" +-")[0]), "bright": find_medium(sample.bright)}
    index = np.stack([np.ones(len(fine)), index_of(media["dark"], inside), index_of(media["bright"], inside)])
    number = {"dark": 1, "bright": 2}
    sequence = np.array([[0, *(number[phase] for phase, _ in layers), number[layers[-1][0]]]])
    thickness = np.array([[t * (1 + sample.swelling) for _, t in layers]])
    reflectance, _ = reflectance_transmittance(index, sequence, thickness, fine, threads=1)
    seen = gaussian_filter1d(reflectance[0, 0].mean(axis=0), 4.0 / 2.3548 / 0.5)
    value = np.interp(WAVELENGTH_NM, fine, seen)
    noise = np.random.default_rng(sample.seed + 500).normal(0, 0.002, len(value))
    return np.clip(value * (1 + 2 * noise) + noise, 0, 1)


def write_image(path: Path, image: np.ndarray, sample: Sample) -> None:
    """TIFF whose standard tags state the pixel size: resolution in pixels per centimetre, or OME metadata."""
    import tifffile

    size = sample.recipe.pixel_size_nm
    if sample.ome:
        metadata = {
            "axes": "YX", "PhysicalSizeX": size, "PhysicalSizeXUnit": "nm", "PhysicalSizeY": size,
            "PhysicalSizeYUnit": "nm", "UUID": f"urn:uuid:00000000-0000-5000-8000-{sample.seed:012d}",
        }  # fmt: skip
        tifffile.imwrite(path, image, ome=True, metadata=metadata, compression="deflate", predictor=True, software="")
        return
    per_cm = round(1e7 / size)
    tifffile.imwrite(
        path, image, resolution=(per_cm, per_cm), resolutionunit="CENTIMETER", compression="deflate", predictor=True,
        metadata=None, software="", description=f"Invented sample image: {sample.what}. Public domain (CC0).",
    )  # fmt: skip


def write_spectrum(path: Path, value: np.ndarray, sample: Sample) -> None:
    """The nacre spectra as plain CSV in percent, the film's as an instrument with decimal commas writes them."""
    lines = [f"# Invented spectrum, {sample.lot}, {sample.specimen}. Public domain (CC0)."]
    if sample.lot == "nacre":
        lines += ["wavelength_nm,reflectance_percent"]
        lines += [f"{w:.0f},{100 * r:.3f}" for w, r in zip(WAVELENGTH_NM, value, strict=True)]
    else:
        lines += ["Wavelength [nm];Reflectance [%]"]
        lines += [f"{w:.1f};{100 * r:.3f}".replace(".", ",") for w, r in zip(WAVELENGTH_NM, value, strict=True)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8", newline="\n")


def _mean(layers: list[tuple[str, float]], phase: str) -> float:
    return float(np.mean([t for name, t in layers if name == phase]))


def make_sample(sample: Sample, folder: Path) -> dict[str, Any]:
    """Write one sample's files; returns its row of the table."""
    image, truth = draw_sample(sample)
    layers = true_layers(truth)
    paths = {
        "image": folder / f"{sample.name}.tif",
        "spectrum": folder / f"{sample.name}_spectrum.csv",
        "truth": folder / f"{sample.name}_truth.json",
    }
    write_image(paths["image"], image, sample)
    write_spectrum(paths["spectrum"], observed_reflectance(sample, layers), sample)
    summary = {**truth.summary(), "seen_layers": [{"phase": p, "thickness_nm": t} for p, t in layers]}
    text = json.dumps(_rounded(summary), indent=1)
    paths["truth"].write_text(text + "\n", encoding="utf-8", newline="\n")
    assert truth.period_px is not None
    return {
        **{name: path.name for name, path in paths.items()},
        "lot": sample.lot, "specimen": sample.specimen, "what": sample.what, "origin": "invented (make_samples.py)",
        "licence": "CC0-1.0",
        "pixel_size": f"{sample.recipe.pixel_size_nm:g} +- {0.01 * sample.recipe.pixel_size_nm:g} nm",
        "known_period_nm": f"{truth.period_px * truth.pixel_size_nm:.2f}",
        "known_dark_nm": f"{_mean(layers, 'dark'):.2f}", "known_bright_nm": f"{_mean(layers, 'bright'):.2f}",
        "known_layers": len(layers), "known_orientation_deg": f"{truth.orientation_deg:.2f}",
        "dark": sample.dark, "bright": sample.bright, "incident": "air", "substrate": "absorber", "lit_side": "start",
        "quantity": "reflectance", "expected": "contradicts" if sample.swelling else "explains",
        "sha256_image": hashlib.sha256(paths["image"].read_bytes()).hexdigest(),
        "sha256_spectrum": hashlib.sha256(paths["spectrum"].read_bytes()).hexdigest(),
    }  # fmt: skip


def _rounded(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _rounded(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_rounded(item) for item in value]
    return float(f"{value:.6g}") if isinstance(value, float) else value


def make_all(folder: Path) -> Path:
    """Write every sample and ``table.csv``; returns the table's path."""
    folder.mkdir(parents=True, exist_ok=True)
    rows = [make_sample(sample, folder) for sample in SAMPLES]
    table = folder / "table.csv"
    with table.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, COLUMNS, lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
    return table


if __name__ == "__main__":
    print(make_all(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE))
