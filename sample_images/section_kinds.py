"""Recipes of the named kinds of test sections, from easy to brutal. Used by ``sections.py``."""

from __future__ import annotations

from typing import Any

import numpy as np

KINDS = ("easy", "moderate", "tem", "sem", "hard", "brutal")


def _levels(rng: np.random.Generator, contrast: float) -> dict[str, float]:
    middle = rng.uniform(0.42, 0.58)
    return {"dark_level": middle - contrast / 2, "bright_level": middle + contrast / 2}


def _third_levels(rng: np.random.Generator, levels: dict[str, float], chance: float) -> dict[str, float]:
    out: dict[str, float] = {}
    low, high = levels["dark_level"], levels["bright_level"]
    if rng.random() < chance:
        out["resin_level"] = float(low + rng.choice([-0.3, 0.35, 0.5]) * (high - low))
    if rng.random() < chance:
        out["substrate_level"] = float(low + rng.choice([0.5, 0.65, 1.3]) * (high - low))
    return {name: float(np.clip(value, 0.03, 0.97)) for name, value in out.items()}


def _easy(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.35, 0.55)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(16, size / 11),
        "dark_fraction": rng.uniform(0.38, 0.62),
        "law": str(rng.choice(["normal", "lognormal", "lattice"])),
        "cv_dark": rng.uniform(0.0, 0.07),
        "cv_bright": rng.uniform(0.0, 0.07),
        "wave_amplitude_px": rng.uniform(0, 2),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0, 0.4),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.6),
        "blur_px": rng.uniform(0.8, 1.4),
        "noise": contrast * rng.uniform(0.04, 0.2),
        "bits": rng.choice([8, 16, None]),
        **levels,
    }  # fmt: skip


def _moderate(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.25, 0.5)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(14, size / 12),
        "dark_fraction": rng.uniform(0.32, 0.68),
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.04, 0.14),
        "cv_bright": rng.uniform(0.04, 0.14),
        "correlation": float(rng.choice([0, 0, 0.5])),
        "chirp": float(rng.choice([0, 0, 0.3, -0.3])),
        "radius_px": float(rng.uniform(3, 10) * size) if rng.random() < 0.4 else None,
        "wave_amplitude_px": rng.uniform(1, 6),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.2, 0.9),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(0.9, 1.6),
        "noise": contrast * rng.uniform(0.15, 0.45),
        "shading": rng.uniform(0, 0.15),
        "gamma": float(rng.choice([1, 1, rng.uniform(0.85, 1.2)])),
        "bits": rng.choice([8, 16]),
        **levels, **_third_levels(rng, levels, 0.3),
    }  # fmt: skip


def _tem(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.15, 0.4)
    levels = _levels(rng, contrast)
    period = rng.uniform(20, size / 11)
    dark = rng.uniform(0.35, 0.65)
    thin = period * min(dark, 1 - dark)
    return {
        "period_px": period, "dark_fraction": dark,
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.03, 0.12),
        "cv_bright": rng.uniform(0.03, 0.12),
        "wave_amplitude_px": rng.uniform(0, 5),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.1, 0.7),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(0.9, 1.5),
        "projection_px": float(min(rng.uniform(0, 5), 0.45 * thin)),
        "mass_thickness": True,
        "dose": float(np.exp(rng.uniform(np.log(60), np.log(600)))),
        "noise": 0.01,
        "shading": rng.uniform(0, 0.1),
        "bits": rng.choice([16, None]),
        **levels, **_third_levels(rng, levels, 0.35),
    }  # fmt: skip


def _sem(rng: np.random.Generator, size: int) -> dict[str, Any]:
    contrast = rng.uniform(0.25, 0.45)
    levels = _levels(rng, contrast)
    return {
        "period_px": rng.uniform(18, size / 11),
        "dark_fraction": rng.uniform(0.33, 0.67),
        "law": str(rng.choice(["normal", "lognormal"])),
        "cv_dark": rng.uniform(0.04, 0.14),
        "cv_bright": rng.uniform(0.04, 0.14),
        "wave_amplitude_px": rng.uniform(0, 5),
        "wave_length_px": rng.uniform(0.6, 1.5) * size,
        "roughness_px": rng.uniform(0.2, 0.9),
        "correlation_length_px": rng.uniform(10, 40),
        "replication": rng.uniform(0, 0.8),
        "blur_px": rng.uniform(1.0, 1.8),
        "edge_bump": rng.uniform(0.05, 0.3),
        "edge_bump_px": rng.uniform(1.2, 2.4),
        "noise": contrast * rng.uniform(0.15, 0.45),
        "curtains": rng.uniform(0, 0.06),
        "charging": contrast * rng.uniform(0, 0.1),
        "shading": rng.uniform(0, 0.15),
        "gamma": rng.uniform(0.7, 1.4),
        "bits": 8, "inverted": False,
        "banner_rows": int(size * 0.08) if rng.random() < 0.5 else 0,
        **levels, **_third_levels(rng, levels, 0.35),
    }  # fmt: skip


def _hard(rng: np.random.Generator, size: int) -> dict[str, Any]:
    base = _moderate(rng, size)
    contrast = base["bright_level"] - base["dark_level"]
    base.update(
        cv_dark=rng.uniform(0.08, 0.2), cv_bright=rng.uniform(0.08, 0.2),
        period_px=rng.uniform(14, size / 14),
        wave_amplitude_px=rng.uniform(3, 12), wave_length_px=rng.uniform(0.5, 1.2) * size,
        radius_px=float(rng.uniform(0.9, 3) * size) if rng.random() < 0.4 else None,
        roughness_px=rng.uniform(0.4, 1.2), noise=contrast * rng.uniform(0.3, 0.7),
        curtains=rng.uniform(0, 0.06), charging=contrast * rng.uniform(0, 0.1),
        cracks=int(rng.integers(0, 3)), debris=int(rng.integers(0, 4)),
        missing=int(rng.random() < 0.3), terminations=int(rng.random() < 0.4),
        edge_bump=float(rng.choice([0, rng.uniform(0, 0.25)])), bits=8,
    )  # fmt: skip
    return base


def _brutal(rng: np.random.Generator, size: int) -> dict[str, Any]:
    base = _hard(rng, size)
    contrast = base["bright_level"] - base["dark_level"]
    inside = rng.random() < 0.2
    base.update(
        period_px=rng.uniform(10, size / 14), dark_fraction=rng.uniform(0.22, 0.78),
        noise=contrast * rng.uniform(0.5, 1.1),
        drift_px=float(rng.normal(0, 8)), drift_wander_px=rng.uniform(0, 1.5),
        jpeg_quality=int(rng.integers(50, 90)) if rng.random() < 0.5 else None,
        banner_rows=int(size * 0.08) if rng.random() < 0.3 else 0,
        cracks=int(rng.integers(0, 4)), debris=int(rng.integers(0, 6)),
    )  # fmt: skip
    if inside:
        base.update(
            radius_px=0.35 * size, centre=(rng.uniform(0.2, 0.8) * size, rng.uniform(0.2, 0.8) * size),
            wave_amplitude_px=rng.uniform(0, 4), drift_px=0.0, resin_level=None, substrate_level=None,
            terminations=0, missing=0,
        )  # fmt: skip
    return base


DRAWS = {"easy": _easy, "moderate": _moderate, "tem": _tem, "sem": _sem, "hard": _hard, "brutal": _brutal}
