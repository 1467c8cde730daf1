"""Score the measurement engine on test sections whose every boundary is known: limits, rates and cost, as ratios.

    python benchmarks/measurement_bench.py                      everything, a few minutes
    python benchmarks/measurement_bench.py --only kinds --kinds easy,tem --seeds 0:5
    python benchmarks/measurement_bench.py --write              also benchmarks/results/measurement.json and the figure

Parts: kinds, lattice, disordered, isolated, traces, detection, cost, null. Bounds are Cramer-Rao bounds: of the period
of a periodic profile, and of a boundary of height D blurred by s: sqrt(2 sqrt(pi) s sigma^2 / W) / D.
"""

from __future__ import annotations

import argparse
import dataclasses
import json
import math
import resource
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT / "sample_images"))

from negatives import NEGATIVES, make_chatter, make_negative  # noqa: E402
from sections import KINDS, Recipe, Truth, make_section, render_section  # noqa: E402

from layerscan.records import Boundary, Exclusion, Layer, Measurement, Micrograph, PixelSize  # noqa: E402
from layerscan.settings import MeasureSettings  # noqa: E402

PARTS = ("kinds", "lattice", "disordered", "isolated", "traces", "detection", "cost", "null")
RESULTS = ROOT / "benchmarks" / "results"


def as_micrograph(image: np.ndarray, truth: Truth | None, *, pixel_size_nm: float = 1.0) -> Micrograph:
    """The picture as a reader would hand it over, the banner left out."""
    size = truth.pixel_size_nm if truth is not None else pixel_size_nm
    excluded: tuple[Exclusion, ...] = ()
    if truth is not None and truth.recipe.banner_rows:
        rows, columns = image.shape
        excluded = (Exclusion(region=(rows - truth.recipe.banner_rows, 0, rows, columns), reason="banner"),)
    pixels = image.astype(np.float32)
    return Micrograph(
        load=lambda: pixels, shape=image.shape, stored_type=str(image.dtype), excluded=excluded,
        pixel_size=PixelSize(row_nm=size, column_nm=size, u_relative=None, source="generator"),
    )  # fmt: skip


def measure(image: np.ndarray, truth: Truth | None) -> Measurement:
    from layerscan.measurement.measure import measure_micrograph

    return measure_micrograph(as_micrograph(image, truth), MeasureSettings())


# --- truth beside what was found ------------------------------------------------------------------------------------


@dataclasses.dataclass(kw_only=True)
class Match:
    """Found boundaries beside the true ones. Errors are px along the local normal, found minus true."""

    pairs: list[tuple[int, int]]  # (found, true)
    missed: list[int]
    invented: list[int]
    error: dict[int, float]  # true index -> mean error over the stations
    u: dict[int, float | None]  # true index -> stated u, px
    bound: dict[int, float]
    found_depth: dict[int, float]

    @property
    def right(self) -> bool:
        return not self.missed and not self.invented and bool(self.pairs)


def boundary_bound(truth: Truth, index: int) -> float:
    """Cramer-Rao bound of one boundary averaged over what the frame shows of it [px]."""
    columns = max(int(truth.visible_px[index]), 1)
    step = max(abs(float(truth.step[index])), 1e-6)
    blur = math.hypot(truth.blur_px, truth.recipe.projection_px / math.sqrt(12))
    return math.sqrt(2 * math.sqrt(math.pi) * blur / columns) * truth.noise / step


def match(found: Measurement, truth: Truth, *, share: float = 0.5) -> Match:
    """Pair every found boundary with the true one it runs along; the true ones in corners are optional."""
    required = truth.required(share)
    pairs: list[tuple[int, int]] = []
    invented: list[int] = []
    error: dict[int, float] = {}
    u: dict[int, float | None] = {}
    depth: dict[int, float] = {}
    taken: set[int] = set()
    size = truth.pixel_size_nm
    for boundary in found.boundaries:
        trace = boundary.trace
        if trace is None or len(trace.row_px) == 0:
            invented.append(boundary.index)
            continue
        best, median = truth.nearest_boundary(trace.row_px, trace.column_px)
        gaps = [truth.thickness_px[i] for i in (best - 1, best) if 0 <= i < len(truth.thickness_px)]
        reach = max(0.35 * min(gaps, default=10.0), 1.0)
        if best in taken or abs(median) > reach:
            invented.append(boundary.index)
            continue
        taken.add(best)
        pairs.append((boundary.index, best))
        distance = truth.boundary_distance(trace.row_px, trace.column_px, best)
        keep = np.abs(distance - median) < 6 + 4 * truth.blur_px
        error[best] = float(np.mean(distance[keep])) if keep.any() else median
        u[best] = None if boundary.u_nm is None else boundary.u_nm / size
        depth[best] = boundary.depth_nm / size
    missed = [i for i in np.flatnonzero(required).tolist() if i not in taken]
    bound = {i: boundary_bound(truth, i) for _, i in pairs}
    return Match(pairs=pairs, missed=missed, invented=invented, error=error, u=u, bound=bound, found_depth=depth)


def score_image(image: np.ndarray, truth: Truth) -> dict[str, Any]:
    """All figures of one picture."""
    found = measure(image, truth)
    row: dict[str, Any] = {"kind": truth.kind, "seed": truth.seed, "layered": found.layered}
    if not found.layered:
        return {**row, "right": False, "errors": int(truth.required().sum())}
    pairs = match(found, truth)
    row["right"] = pairs.right
    row["errors"] = len(pairs.missed) + len(pairs.invented)
    row["missed"], row["invented"] = pairs.missed, pairs.invented
    row["noise"] = truth.noise / truth.contrast
    size = truth.pixel_size_nm
    if found.period is not None and pairs.pairs:
        row["period_error"] = period_error(found, truth, pairs)
    strong = [i for _, i in pairs.pairs if truth.visible_px[i] > 0.2 * truth.visible_px.max()]
    errors = np.array([pairs.error[i] for i in strong])
    bounds = np.array([pairs.bound[i] for i in strong])
    if len(errors):
        row["rmse_px"] = float(np.sqrt(np.mean(errors**2)))
        row["bias_px"] = float(abs(errors.mean()))
        row["over_bound"] = float(np.sqrt(np.mean(errors**2)) / np.sqrt(np.mean(bounds**2)))
        row["boundary_pull"] = [float(pairs.error[i] / u) for i in strong if (u := pairs.u[i]) is not None and u > 0]
    row["layer_pull"] = layer_pulls(found, truth, dict(pairs.pairs), size)
    if found.orientation_deg is not None and truth.orientation_deg is not None:
        row["orientation_error_deg"] = abs((found.orientation_deg - truth.orientation_deg + 90) % 180 - 90)
    return row


def period_error(found: Measurement, truth: Truth, pairs: Match) -> float:
    """Relative error of the mean period against the realised one over the same boundaries."""
    assert found.period is not None
    per = 4 if truth.recipe.middle_fraction else 2
    indices = sorted(i for _, i in pairs.pairs)
    n = found.period.n
    best = math.inf
    for first in indices:  # the run that was used is not stated: the one of the same n that starts where it fits best
        last = first + per * n
        if last in pairs.error:
            true = truth.mean_period_px(first, last) * truth.pixel_size_nm
            best = min(best, abs(found.period.mean / true - 1))
    if not math.isfinite(best) and truth.period_px:
        best = abs(found.period.mean / (truth.period_px * truth.pixel_size_nm) - 1)
    return best


def layers_between(found: Measurement) -> list[tuple[Layer, Boundary, Boundary]]:
    """Each layer with the boundaries on both sides of it; layers cut off by the frame have one only, and go."""
    edges = found.boundaries
    best: list[tuple[Layer, Boundary, Boundary]] = []
    least = math.inf
    for offset in (0, -1):
        trio = [
            (layer, edges[i + offset], edges[i + offset + 1])
            for i, layer in enumerate(found.layers)
            if 0 <= i + offset < len(edges) - 1
        ]
        miss = [abs(b.depth_nm - a.depth_nm - layer.thickness_nm) for layer, a, b in trio]
        if trio and float(np.median(miss)) < least:
            least, best = float(np.median(miss)), trio
    return best


def layer_pulls(found: Measurement, truth: Truth, pairs: dict[int, int], size: float) -> list[float]:
    """Thickness error over stated uncertainty, of layers whose two boundaries are right."""
    pulls = []
    for layer, first, second in layers_between(found):
        a, b = pairs.get(first.index), pairs.get(second.index)
        if a is None or b is None or b != a + 1 or not layer.u_nm or not layer.complete:
            continue
        seen = truth.visible_from[a] & truth.visible_from[b]
        if seen.sum() < 0.2 * truth.visible_px.max():
            continue
        gap = (truth.boundary_depth_px[b] - truth.boundary_depth_px[a])[seen] * truth.normal_scale[seen]
        pulls.append(float((layer.thickness_nm - gap.mean() * size) / layer.u_nm))
    return pulls


# --- parts ----------------------------------------------------------------------------------------------------------


def run_kinds(kinds: list[str], seeds: range, verbose: bool) -> dict[str, Any]:
    out: dict[str, Any] = {}
    rows: list[dict[str, Any]] = []
    for kind in kinds:
        mine = [score_image(*make_section(kind, seed)) for seed in seeds]
        rows += mine
        out[kind] = summarise(mine)
        show(kind, out[kind])
        for row in mine:
            if verbose and not row["right"]:
                print("   wrong:", {k: v for k, v in row.items() if k not in ("boundary_pull", "layer_pull")})
    right = [row for row in rows if row["right"]]
    out["all"] = summarise(rows)
    out["all_right"] = summarise(right)
    show("all", out["all"])
    show("all right", out["all_right"])
    out["pulls"] = {
        "boundary": [round(p, 3) for row in right for p in row.get("boundary_pull", [])],
        "layer": [round(p, 3) for row in right for p in row.get("layer_pull", [])],
    }
    return out


def summarise(rows: list[dict[str, Any]]) -> dict[str, Any]:
    def median(name: str) -> float | None:
        values = [row[name] for row in rows if name in row and row["right"]]
        return float(np.median(values)) if values else None

    def worst(name: str) -> float | None:
        values = [row[name] for row in rows if name in row and row["right"]]
        return float(np.max(values)) if values else None

    def pull(name: str) -> float | None:
        values = [p for row in rows if row["right"] for p in row.get(name, [])]
        return float(np.sqrt(np.mean(np.square(values)))) if len(values) > 3 else None

    return {
        "images": len(rows),
        "layered": float(np.mean([row["layered"] for row in rows])) if rows else None,
        "right": float(np.mean([row["right"] for row in rows])) if rows else None,
        "at_most_one_error": float(np.mean([row["errors"] <= 1 for row in rows])) if rows else None,
        "period_error_median": median("period_error"),
        "period_error_worst": worst("period_error"),
        "rmse_px": median("rmse_px"),
        "bias_px": median("bias_px"),
        "scatter_over_bound": median("over_bound"),
        "boundary_pull_rms": pull("boundary_pull"),
        "layer_pull_rms": pull("layer_pull"),
    }


def run_lattice(seeds: range) -> dict[str, Any]:
    """Perfect lattice, 22 px: period RMSE over the Cramer-Rao bound of a strictly periodic profile."""
    out: dict[str, Any] = {}
    for noise in (0.1, 0.4):
        errors, stated, bound = [], [], 0.0
        for seed in seeds:
            recipe = Recipe(
                period_px=22.0, cv_dark=0.0, cv_bright=0.0, blur_px=1.2, noise=0.5 * noise, orientation_deg=90.0,
                phase_offset=float(np.random.default_rng(seed).random()), pixel_size_nm=1.0,
            )  # fmt: skip
            shape = (512, 96)
            image, truth = render_section(recipe, seed, shape, kind="lattice")
            found = measure(image, truth)
            bound = lattice_bound(recipe, shape)
            if found.period is not None and found.period.u:
                errors.append(found.period.mean - 22.0)
                stated.append(found.period.u)
        row = {"found": len(errors) / len(seeds)}
        if errors:
            row["rmse_over_bound"] = float(np.sqrt(np.mean(np.square(errors)))) / bound
            row["pull_rms"] = float(np.sqrt(np.mean(np.square(np.array(errors) / stated))))
        out[f"noise {noise}"] = row
        show(f"lattice, noise {noise}", row)
    return out


def lattice_bound(recipe: Recipe, shape: tuple[int, int]) -> float:
    p, s, f = recipe.period_px, recipe.blur_px, recipe.dark_fraction
    step = recipe.bright_level - recipe.dark_level
    m = np.arange(1, 20)
    amplitude = 2 * step / (math.pi * m) * np.abs(np.sin(math.pi * m * f)) * np.exp(-2 * (math.pi * m * s / p) ** 2)
    n, w = shape
    total = float(np.sum((m * amplitude) ** 2))
    return p**2 * math.sqrt(6 * recipe.noise**2 / (w * math.pi**2 * total * n * (n**2 - 1)))


def run_disordered(seeds: range) -> dict[str, Any]:
    """Disordered stack (CV 0.2): realised mean period over the bound of its two end boundaries."""
    ratios = []
    for seed in seeds:
        recipe = Recipe(
            period_px=22.0, cv_dark=0.2, cv_bright=0.2, law="lognormal", blur_px=1.2, noise=0.05, orientation_deg=90.0,
            phase_offset=float(np.random.default_rng(seed).random()), pixel_size_nm=1.0,
        )  # fmt: skip
        image, truth = render_section(recipe, seed, (512, 96), kind="disordered")
        found = measure(image, truth)
        pairs = match(found, truth) if found.layered else None
        if pairs is None or found.period is None or not pairs.pairs:
            continue
        error = period_error(found, truth, pairs) * found.period.mean
        inner = [pairs.bound[i] for _, i in pairs.pairs]
        ratios.append(error / (math.sqrt(2) * float(np.median(inner)) / found.period.n))
    row = {
        "found": len(ratios) / len(seeds),
        "rmse_over_bound": float(np.sqrt(np.mean(np.square(ratios)))) if ratios else None,
    }
    show("disordered, CV 0.2", row)
    return row


def run_isolated(seeds: range) -> dict[str, Any]:
    """Thin dark layers far apart, 5 and 2.5 blurs thick: boundary and thickness error over their bounds."""
    out: dict[str, Any] = {}
    for ratio in (5.0, 2.5):
        blur = 1.6
        h = ratio * blur
        period = 30.0
        errors, widths, pulls, flagged = [], [], [], []
        sigma = 0.0
        for seed in seeds:
            recipe = Recipe(
                period_px=period, dark_fraction=h / period, cv_dark=0.0, cv_bright=0.1, blur_px=blur, noise=0.1,
                orientation_deg=90.0, phase_offset=float(np.random.default_rng(seed).random()), pixel_size_nm=1.0,
            )  # fmt: skip
            image, truth = render_section(recipe, seed, (512, 96), kind="isolated")
            found = measure(image, truth)
            pairs = match(found, truth) if found.layered else None
            if pairs is None or not pairs.pairs:
                continue
            sigma = float(np.median(list(pairs.bound.values())))
            errors += list(pairs.error.values())
            for layer in found.layers:
                if layer.phase == "dark" and layer.complete:
                    widths.append(layer.thickness_nm - h)
                    flagged.append("not_resolved" in layer.flags)
                    if layer.u_nm:
                        pulls.append((layer.thickness_nm - h) / layer.u_nm)
        if not widths:
            out[f"h = {ratio} s"] = {"found": 0}
            continue
        bound = math.sqrt(2 * sigma**2 / (1 + math.exp(-(h**2) / (4 * blur**2))))
        row = {
            "boundary_over_bound": float(np.sqrt(np.mean(np.square(errors)))) / sigma,
            "thickness_over_bound": float(np.sqrt(np.mean(np.square(widths)))) / bound,
            "thickness_pull_rms": float(np.sqrt(np.mean(np.square(pulls)))) if pulls else None,
            "flagged_not_resolved": float(np.mean(flagged)),
        }
        out[f"h = {ratio} s"] = row
        show(f"isolated, h = {ratio} blurs", row)
    return out


def run_traces(seeds: range) -> dict[str, Any]:
    """Trace of each boundary against a minimum-cost path on the same field, and roughness, 1 px rms."""
    out: dict[str, Any] = {}
    for noise in (0.2, 0.5):
        ours, theirs, pulls, rough = [], [], [], []
        for seed in seeds:
            recipe = Recipe(
                period_px=28.0, cv_dark=0.05, cv_bright=0.05, blur_px=1.2, noise=0.5 * noise, orientation_deg=90.0,
                roughness_px=1.0, correlation_length_px=15.0, replication=0.3, pixel_size_nm=1.0,
            )  # fmt: skip
            image, truth = render_section(recipe, seed, (256, 512), kind="traces")
            found = measure(image, truth)
            if not found.layered:
                continue
            pairs = match(found, truth)
            for index, true in pairs.pairs:
                boundary = next(b for b in found.boundaries if b.index == index)
                if truth.visible_px[true] < 0.95 * truth.visible_px.max() or boundary.trace is None:
                    continue
                distance = truth.boundary_distance(boundary.trace.row_px, boundary.trace.column_px, true)
                ours.append(float(np.mean(distance**2)))
                pulls.append(float(np.mean((distance / np.maximum(boundary.trace.u_depth_nm, 1e-9)) ** 2)))
                if boundary.roughness_nm is not None:
                    rough.append(boundary.roughness_nm / truth.roughness_px[true])
                theirs.append(_minimum_cost_mse(image, truth, true))
        row = {
            "rmse_px": float(np.sqrt(np.mean(ours))) if ours else None,
            "over_minimum_cost_path": float(np.sqrt(np.mean(ours) / np.mean(theirs))) if ours else None,
            "trace_pull_rms": float(np.sqrt(np.mean(pulls))) if pulls else None,
            "roughness_over_true": float(np.median(rough)) if rough else None,
        }
        out[f"noise {noise}"] = row
        show(f"traces, noise {noise}", row)
    return out


def _minimum_cost_mse(image: np.ndarray, truth: Truth, index: int) -> float:
    """Mean squared error of scikit-image's path along the steepest gradient between the neighbouring boundaries."""
    from scipy.ndimage import gaussian_filter
    from skimage.graph import route_through_array

    row, _ = truth.trace(index)
    low, high = max(int(row.min()) - 8, 0), min(int(row.max()) + 9, image.shape[0])
    strip = gaussian_filter(image.astype(float), truth.blur_px)[low:high]
    cost = -np.gradient(strip, axis=0) * math.copysign(1.0, float(truth.step[index]))
    cost = cost - cost.min()
    cost = cost / cost.max() + 0.02
    first, last = int(np.argmin(cost[:, 0])), int(np.argmin(cost[:, -1]))
    path, _ = route_through_array(cost, (first, 0), (last, cost.shape[1] - 1), geometric=True)
    points = np.array(path, dtype=float)
    return float(np.mean(truth.boundary_distance(points[:, 0] + low, points[:, 1], index) ** 2))


def run_detection(kinds: list[str], seeds: range, negatives: int) -> dict[str, Any]:
    """Share of layered pictures found, alarms among pictures without layers, orientation error over its bound."""
    from layerscan.measurement.detection import detect_layers

    out: dict[str, Any] = {}
    for kind in kinds:
        found = 0
        for seed in seeds:
            image, truth = make_section(kind, seed)
            found += detect_layers(image.astype(np.float32), mask=_not_banner(truth)).layered
        out[kind] = found / len(seeds)
    each = max(negatives // len(NEGATIVES), 1)
    alarms = {
        kind: sum(detect_layers(make_negative(kind, seed).astype(np.float32)).layered for seed in range(each))
        for kind in NEGATIVES
    }
    out["negatives"] = each * len(NEGATIVES)
    out["alarms"] = alarms
    chatter = [detect_layers(make_chatter(seed)[0].astype(np.float32)) for seed in seeds]
    out["chatter_flagged"] = float(
        np.mean(["confirm_with_second_section" in one.flags or not one.layered for one in chatter])
    )
    out["orientation_over_bound"] = _orientation_over_bound(seeds)
    show("detection", out)
    return out


def run_null(seeds: range) -> dict[str, Any]:
    """Quantiles of the statistic over pictures without layers: where the p-value of a detection comes from."""
    from layerscan.measurement.detection import detect_layers

    found = [detect_layers(make_negative(kind, seed).astype(np.float32)) for kind in NEGATIVES for seed in seeds]
    statistic = np.array([one.statistic or 0.0 for one in found if "scan_lines" not in one.flags])
    share = (0.5, 0.2, 0.1, 0.05, 0.02, 0.01, 0.005, 0.001)
    out = {"pictures": len(statistic), **{f"share {s}": float(np.quantile(statistic, 1 - s)) for s in share}}
    show("null", out)
    return out


def _not_banner(truth: Truth) -> np.ndarray:
    mask = np.ones(truth.shape, dtype=bool)
    if truth.recipe.banner_rows:
        mask[-truth.recipe.banner_rows :] = False
    return mask


def _orientation_over_bound(seeds: range) -> float:
    """RMS orientation error over sigma / sqrt(sum (f' s)^2), the bound with the profile f known."""
    from layerscan.measurement.detection import detect_layers

    ratios = []
    for seed in seeds:
        angle = float(np.random.default_rng(seed).uniform(0, 180))
        recipe = Recipe(period_px=22.0, cv_dark=0.0, cv_bright=0.0, orientation_deg=angle, noise=0.15, blur_px=1.2)
        image, _ = render_section(recipe, seed, (256, 256))
        clean, _ = render_section(dataclasses.replace(recipe, noise=0.0), seed, (256, 256))
        found = detect_layers(image)
        if found.orientation_deg is None:
            continue
        a = math.radians(angle)
        y, x = np.mgrid[:256, :256] - 127.5
        slope_y, slope_x = np.gradient(clean.astype(float))
        side = -x * math.sin(a) + y * math.cos(a)
        turn = (slope_x * math.cos(a) + slope_y * math.sin(a)) * side
        bound = math.degrees(0.15 / math.sqrt(float(np.sum(turn**2))))
        ratios.append(((found.orientation_deg - angle + 90) % 180 - 90) / bound)
    return float(np.sqrt(np.mean(np.square(ratios))))


def run_cost(largest: int) -> dict[str, Any]:
    """Processor time of a whole measurement over one gaussian_filter(sigma=2) of the same float32 picture."""
    from scipy.ndimage import gaussian_filter

    out: dict[str, Any] = {}
    size = 512
    while size <= largest:
        image, truth = make_section("moderate", 1, (size, size))
        pixels = image.astype(np.float32)
        measure(image, truth)  # compile
        repeats = 3 if size <= 1024 else 1
        once = min(_processor_time(lambda: gaussian_filter(pixels, 2)) for _ in range(3))  # noqa: B023
        whole = min(_processor_time(lambda: measure(image, truth)) for _ in range(repeats))  # noqa: B023
        row = {"over_gaussian_filter": whole / once}
        if size >= 4096:
            row["peak_memory_gb"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
        out[f"{size} x {size}"] = row
        show(f"cost, {size} x {size}", row)
        size *= 4 if size >= 512 else 2
    return out


def _processor_time(task: Any) -> float:
    start = time.process_time()
    task()
    return time.process_time() - start


# --- output ---------------------------------------------------------------------------------------------------------


def show(name: str, row: dict[str, Any]) -> None:
    def text(value: Any) -> str:
        return f"{value:.4g}" if isinstance(value, float) else str(value)

    print(
        f"{name:24s}", "  ".join(f"{key} {text(value)}" for key, value in row.items() if value is not None), flush=True
    )


def draw_pulls(pulls: dict[str, list[float]], path: Path) -> None:
    """Histogram of error over stated uncertainty beside the standard normal density, as SVG."""
    import matplotlib

    matplotlib.use("svg")
    matplotlib.rcParams["svg.hashsalt"] = "layerscan"
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(1, 2, figsize=(8, 3), sharey=True)
    x = np.linspace(-5, 5, 201)
    for axis, (name, values) in zip(axes, pulls.items(), strict=True):
        axis.hist(np.clip(values, -5, 5), bins=np.linspace(-5, 5, 41), density=True, color="#7aa6c2")
        axis.plot(x, np.exp(-0.5 * x**2) / math.sqrt(2 * math.pi), color="#333333", lw=1.2)
        rms = math.sqrt(np.mean(np.square(values))) if values else math.nan
        axis.set_title(f"{name}: {len(values)} values, rms {rms:.2f}", fontsize=10)
        axis.set_xlabel("error / stated standard uncertainty")
    axes[0].set_ylabel("density")
    figure.tight_layout()
    figure.savefig(path, metadata={"Date": None, "Creator": None})
    plt.close(figure)


def parse_seeds(text: str) -> range:
    first, _, last = text.partition(":")
    return range(int(first), int(last)) if last else range(int(first))


def main(arguments: list[str] | None = None) -> dict[str, Any]:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", default=",".join(PARTS[:-1]), help=f"parts, separated by commas: {', '.join(PARTS)}")
    parser.add_argument("--kinds", default=",".join(KINDS))
    parser.add_argument("--seeds", default="0:12", help="FIRST:LAST, half-open, or a count")
    parser.add_argument("--negatives", type=int, default=180)
    parser.add_argument("--largest", type=int, default=2048, help="largest picture of the cost part")
    parser.add_argument("--write", action="store_true", help="write the results file and the figure")
    parser.add_argument("--verbose", action="store_true", help="say what went wrong in each picture")
    options = parser.parse_args(arguments)
    parts = options.only.split(",")
    kinds = options.kinds.split(",")
    seeds = parse_seeds(options.seeds)
    out: dict[str, Any] = {"seeds": options.seeds, "bars": BARS}
    if "kinds" in parts:
        out["kinds"] = run_kinds(kinds, seeds, options.verbose)
    if "lattice" in parts:
        out["lattice"] = run_lattice(seeds)
    if "disordered" in parts:
        out["disordered"] = run_disordered(seeds)
    if "isolated" in parts:
        out["isolated"] = run_isolated(seeds)
    if "traces" in parts:
        out["traces"] = run_traces(seeds)
    if "detection" in parts:
        out["detection"] = run_detection(kinds, seeds, options.negatives)
    if "null" in parts:
        out["null"] = run_null(seeds)
    if "cost" in parts:
        out["cost"] = run_cost(options.largest)
    if options.write:
        RESULTS.mkdir(exist_ok=True)
        pulls = out.get("kinds", {}).pop("pulls", None)
        if pulls and all(pulls.values()):
            draw_pulls(pulls, RESULTS / "measurement_pulls.svg")
        (RESULTS / "measurement.json").write_text(json.dumps(rounded(out), indent=2) + "\n", encoding="utf-8")
    return out


def rounded(value: Any) -> Any:
    """Four significant digits everywhere, so that the file does not change for nothing."""
    if isinstance(value, dict):
        return {key: rounded(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [rounded(item) for item in value]
    return float(f"{value:.4g}") if isinstance(value, float) else value


BARS = {
    "right": "0.95; easy, moderate, tem 1",
    "period_error": "median 0.0005, worst 0.005 on easy, moderate, tem",
    "lattice rmse_over_bound": 1.1,
    "disordered rmse_over_bound": 1.2,
    "isolated h = 5 s": "boundary 1.15, thickness 1.25",
    "isolated h = 2.5 s": 1.4,
    "pull": "0.9 to 1.2",
    "scatter_over_bound": "easy, moderate 1.3; tem 1.5; sem 2.5",
    "rmse_px": 0.075,
    "bias_px": 0.01,
    "over_minimum_cost_path at noise 0.5": 0.5,
    "roughness_over_true": "0.95 to 1.05",
    "detected": 0.98,
    "alarms": 0,
    "orientation_over_bound": 2,
    "cost over_gaussian_filter": 25,
    "peak_memory_gb": 3,
}

if __name__ == "__main__":
    main()
