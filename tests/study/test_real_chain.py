from __future__ import annotations

import numpy as np
import tifffile

from layerscan.document_files import file_sha256
from layerscan.study import session
from layerscan.study.ledger import Ledger
from layerscan.study.notebook import open_study


def draw_lamellae(period_px: float, seed: int) -> np.ndarray:
    """Invented flat layers, blurred by a logistic edge of 1 px, with noise."""
    rng = np.random.default_rng(seed)
    depth = np.arange(160.0)
    phase = (depth % period_px) / period_px
    distance = np.minimum(np.abs(phase - 0.4), np.minimum(phase, 1 - phase)) * period_px
    sign = np.where(phase < 0.4, -1, 1)
    profile = 110 + 50 * sign * np.tanh(distance / 1.0)
    return np.clip(profile[:, None] + rng.normal(0, 6, (160, 160)), 0, 255).astype(np.uint8)


PLAN = """
[measure]
pixel_size = "10 +- 0.1 nm"
[predict]
dark = "n=1.56"
bright = "n=1.0"
substrate = "absorber"
incident = "n=1.0"
lit_side = "start"
draws = 20
wavelengths = "400:700:5"
[[images]]
file = "{group}_{specimen}_{section}.tif"
[[spectra]]
file = "{group}_{specimen}.csv"
quantity = "reflectance"
"""


def test_images_go_through_measurement_prediction_and_comparison(tmp_path):
    # the true period is known: 20 and 21 pixels of 10 nm
    for group, period in (("A", 20.0), ("B", 21.0)):
        for specimen in range(2):
            name = f"{group}_{group.lower()}{specimen}"
            tifffile.imwrite(tmp_path / f"{name}_0.tif", draw_lamellae(period, seed=specimen + ord(group)))
    grid = np.arange(400, 701, 5.0)
    rows = [f"{w:g},{0.05 + 0.5 * np.exp(-(((w - 450) / 30) ** 2)):.4f}" for w in grid]
    (tmp_path / "A_a0.csv").write_text("\n".join(["wavelength_nm,reflectance", *rows]) + "\n")
    (tmp_path / "STUDY.toml").write_text(PLAN)
    outcome = session.run_study(tmp_path, workers=1)
    assert (outcome.done, outcome.failures, outcome.exit_code) == (4, (), 0)
    study = open_study(tmp_path)
    periods = study.images.set_index("path")["period_nm"].astype(float)
    assert np.allclose(periods[["A_a0_0.tif", "A_a1_0.tif"]], 200.0, rtol=0.01)
    assert np.allclose(periods[["B_b0_0.tif", "B_b1_0.tif"]], 210.0, rtol=0.01)
    assert study.images["predicted_peak_nm"].notna().all()
    image = study.results.images[0]
    folder = tmp_path / image.folder
    assert (folder / "measurement.json").is_file()
    assert (folder / "prediction" / "prediction.json").is_file()
    assert image.task.picture[:2] == b"\xff\xd8"  # a JPEG
    assert len(image.task.picture) < 30_000
    assert {line[0] for line in image.task.extras["lines"]} <= {"boundary", "doubtful"}
    assert image.task.input_sha256 == file_sha256(tmp_path / "A_a0_0.tif")
    answer = next(iter(image.compare.values())).document
    assert answer["agreement"]["conclusion"] in ("explains", "contradicts", "cannot_tell")
    page = (tmp_path / "report.html").read_text()
    assert "A_a0_0.tif" in page
    # without its files a prediction is made from a new measurement, and the ledger stays the same
    with Ledger(tmp_path) as ledger:
        before = ledger.content()
    again = session.run_study(tmp_path, workers=1)
    assert again.worked_on == 0
    with Ledger(tmp_path) as ledger:
        assert ledger.content() == before
