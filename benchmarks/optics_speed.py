"""Speed of the transfer calculation: ratios to tmm and tmm_faster, and to what the machine's multiply-adds allow.

    python benchmarks/optics_speed.py

One run on one core, processor time, best of several repeats taken in turn; only the two-thread figure is by the clock.
Job a: one stack of 101 layers x 401 wavelengths at normal incidence; b: 1000 such stacks; c: one stack at 20 angles.
Both polarisations are asked for everywhere, and tmm_faster always calculates both; tmm does one at a time and is
timed on a few wavelengths and scaled up. Results: benchmarks/results/optics.json, ratios only.
"""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

for variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ[variable] = "1"

import numpy as np  # noqa: E402
from numba import njit  # noqa: E402

from layerscan.optics.transfer import reflectance_transmittance  # noqa: E402

LAYERS, WAVELENGTHS, STACKS = 101, 401, 1000
WAVELENGTH = np.linspace(380.0, 780.0, WAVELENGTHS)
ANGLES = np.linspace(0.0, 76.0, 20)
TARGETS = {"a": 20, "b": 50, "c": 30}
# per layer and wavelength at normal incidence: phase 3, its square 1, cosine 8 fused, sine 8 fused and 1, two factors,
# fields 4 products and 4 fused; a fused multiply-add counts as two
FLOPS = 3 + 1 + 16 + 17 + 2 + 4 + 8


def processor_time(function: Callable[[], object], repeats: int) -> float:
    best = np.inf
    for _ in range(repeats):
        start = time.process_time()
        function()
        best = min(best, time.process_time() - start)
    return best


def clock_time(function: Callable[[], object]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


@njit(fastmath={"contract"}, error_model="numpy", nogil=True)
def multiply_add(x, a, b, rounds):
    for _ in range(rounds):
        for i in range(x.size):
            v = x[i]
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            v = v * a + b
            x[i] = v
    return x[0]


def peak_flops() -> float:
    """Multiply-adds per second that compiled code reaches on this core, counted as two each."""
    x = np.linspace(0.1, 1.0, 144)
    multiply_add(x, 0.9, 0.1, 1)
    rounds = 20_000
    return 144 * 16 * 2 * rounds / processor_time(lambda: multiply_add(x, 0.9, 0.1, rounds), 20)


def two_threads_over_one(run: Callable[[int], object]) -> float | None:
    """Gain of a second thread by the clock, or None where bare arithmetic on two threads shows no second core."""
    arrays = [np.linspace(0.1, 1.0, 144), np.linspace(0.1, 1.0, 144)]

    def burn(x: np.ndarray) -> object:
        return multiply_add(x, 0.9, 0.1, 40_000)

    with ThreadPoolExecutor(2) as pool:
        one = min(clock_time(lambda: [burn(x) for x in arrays]) for _ in range(10))
        two = min(clock_time(lambda: list(pool.map(burn, arrays))) for _ in range(20))
    if one / two < 1.8:
        return None
    pairs = [(clock_time(lambda: run(1)), clock_time(lambda: run(2))) for _ in range(30)]
    return min(first for first, _ in pairs) / min(second for _, second in pairs)


def draws_over_kernel() -> float:
    """Whole prediction with 500 draws over the transfer calculation of 500 such stacks."""
    from layerscan.optics.predict import predict_light
    from layerscan.records import Layer, LayerTable
    from layerscan.settings import PredictSettings

    layers = tuple(
        Layer(index=i, phase="dark" if i % 2 else "bright", thickness_nm=100.0, u_nm=2.0) for i in range(100)
    )
    table = LayerTable(layers=layers, source="invented", u_scale_relative=0.01)
    settings = PredictSettings(dark="n=1.56 +- 0.01", bright="n=1.34", incident="n=1.33", draws=500)
    index = np.array([1.33, 1.56, 1.34])[:, None] * np.ones(WAVELENGTHS)
    stacks = np.repeat([[0, *[2, 1] * 50, 0]], 500, axis=0), np.full((500, 100), 100.0)
    predict_light(table, settings)
    whole = processor_time(lambda: predict_light(table, settings), 7)
    return whole / processor_time(lambda: reflectance_transmittance(index, *stacks, WAVELENGTH, threads=1), 7)


def main() -> None:
    import tmm
    import tmm_faster

    rng = np.random.default_rng(1)
    thickness = rng.normal(100.0, 10.0, (STACKS, LAYERS))
    sequence = np.repeat(np.array([[0, *[1, 2] * (LAYERS // 2), 1, 3]]), STACKS, axis=0)
    index = np.array([1.0, 1.56, 1.34, 1.5], dtype=complex)[:, None] * np.ones(WAVELENGTHS)
    matrix = np.ascontiguousarray(index[sequence[0]].T)
    lists = [[0.0, *row.tolist(), 0.0] for row in thickness]
    wavelengths = WAVELENGTH.tolist()

    def ours(stacks: int, angles: np.ndarray, threads: int = 1) -> tuple[np.ndarray, np.ndarray]:
        return reflectance_transmittance(
            index, sequence[:stacks], thickness[:stacks], WAVELENGTH, aoi_deg=angles, threads=threads
        )

    def theirs(stacks: int, angles: np.ndarray) -> dict[str, np.ndarray]:
        for number in range(stacks):
            result = tmm_faster.calc_coherent(matrix, lists[number], angles.tolist(), wavelengths)
        return result

    def classic(wavelength_count: int, angle: float) -> None:
        for wavelength in WAVELENGTH[:wavelength_count]:
            for polarisation in "sp":
                tmm.coh_tmm(polarisation, matrix[0], [np.inf, *thickness[0], np.inf], np.radians(angle), wavelength)

    normal = np.array([0.0])
    ours(1, normal)
    check = theirs(1, ANGLES)
    r, t = ours(1, ANGLES)
    for name, kind, values in (("R_s", 0, r), ("R_p", 1, r), ("T_s", 0, t), ("T_p", 1, t)):
        difference = abs(check[name].T - values[0, :, kind]).max()
        assert difference < 1e-9, (name, difference)

    spectrum = WAVELENGTHS * processor_time(lambda: classic(3, 0.0), 5) / 3  # both polarisations at 401 wavelengths
    jobs = {
        "a": (lambda: [ours(1, normal) for _ in range(20)], 20, lambda: theirs(1, normal), 1, spectrum),
        "b": (lambda: ours(STACKS, normal), 1, lambda: theirs(20, normal), 20 / STACKS, spectrum * STACKS),
        "c": (lambda: ours(1, ANGLES), 1, lambda: theirs(1, ANGLES), 1, spectrum * ANGLES.size),
    }
    results: dict[str, dict[str, float | None]] = {}
    for name, (own, own_count, other, other_part, classic_time) in jobs.items():
        own_time, other_time = np.inf, np.inf
        for _ in range(7):
            own_time = min(own_time, processor_time(own, 1) / own_count)
            other_time = min(other_time, processor_time(other, 1) / other_part)
        results[name] = {
            "times_tmm_faster": round(other_time / own_time, 1),
            "times_tmm": round(classic_time / own_time),
            "target_times_tmm_faster": TARGETS[name],
        }
        print(f"job {name}: {other_time / own_time:.0f} times tmm_faster (target {TARGETS[name]}), "
              f"{classic_time / own_time:.0f} times tmm; {own_time * 1e3:.3g} ms here")  # fmt: skip
        if name == "b":
            limit = FLOPS * LAYERS * WAVELENGTHS * STACKS / peak_flops()
            results[name]["times_arithmetic_limit"] = round(own_time / limit, 2)
            results[name]["target_times_arithmetic_limit"] = 3
            print(f"job b: {own_time / limit:.2f} times the arithmetic limit (target at most 3)")
    results["draws"] = {"times_bare_kernel": round(draws_over_kernel(), 2)}
    print(f"500 draws of 100 layers with peaks, limits and colour: {results['draws']['times_bare_kernel']} times the "
          "transfer calculation alone")  # fmt: skip
    gain = two_threads_over_one(lambda threads: ours(STACKS, normal, threads))
    results["b"]["two_threads_over_one"] = None if gain is None else round(gain, 2)
    results["b"]["target_two_threads_over_one"] = 1.7
    if gain is None:
        print("job b: two threads not measured, other work holds one of the two cores")
    else:
        print(f"job b: two threads {gain:.2f} times one, by the clock (target 1.7)")
    path = Path(__file__).parent / "results" / "optics.json"
    path.parent.mkdir(exist_ok=True)
    path.write_text(json.dumps(results, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
