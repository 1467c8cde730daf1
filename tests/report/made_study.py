"""A study summary made by hand for the tests of its page."""

from __future__ import annotations

import io

import numpy as np
from figures.made_records import bell, make_colour
from PIL import Image

from layerscan.records import Average, BudgetRow
from layerscan.report.cautions import CAUTIONS, RELEASE_CAUTION
from layerscan.report.summary import (
    DesignRow,
    DriftRow,
    Estimate,
    FactTable,
    Failure,
    ImageRow,
    LayerPoint,
    LightPair,
    LineFit,
    Lot,
    MaterialSource,
    MethodsFacts,
    OverlayArea,
    OverlayLine,
    PeakPair,
    PlanningRow,
    ReleaseDecision,
    RunFacts,
    SensitivityRow,
    SpecimenRow,
    StudySummary,
    TableRow,
    TestRow,
    Thumbnail,
    VarianceComponent,
    VarianceComponents,
)


def make_thumbnail(seed: int = 1, *, width: int = 240, height: int = 180) -> Thumbnail:
    rng = np.random.default_rng(seed)
    rows = np.arange(height)[:, None]
    grey = 128 + 60 * np.sign(np.sin(rows / 4.0)) + rng.normal(0, 22, (height, width))
    buffer = io.BytesIO()
    Image.fromarray(np.clip(grey, 0, 255).astype(np.uint8)).save(buffer, "JPEG", quality=60)
    return Thumbnail(
        media_type="image/jpeg", data=buffer.getvalue(), width_px=width, height_px=height, image_px_per_px=4.0,
        pixel_size_nm=10.0,
    )  # fmt: skip


def make_image(
    number: int, *, group: str, specimen: str, text: str = "", layers: int = 40, **changes: object
) -> ImageRow:
    lines = tuple(
        OverlayLine(
            kind="doubtful" if k == 3 else "edited" if k == 5 else "boundary",
            points=tuple((8.0 + 4.2 * k + np.sin(c / 30), float(c)) for c in range(0, 240, 8)),
        )
        for k in range(min(layers, 36))
    )
    fields: dict[str, object] = {
        "key": f"i{number:05d}", "path": f"{group}/{specimen}/image_{number}{text}.tif", "group": group,
        "specimen": specimen, "section": "1", "state": "done", "attempts": 1, "layered": True, "periodic": True,
        "period": Average(mean=86.0, u=0.9, sd=4.0, n=19), "dark": Average(mean=52.0, u=0.6, sd=3.0, n=20),
        "bright": Average(mean=34.0, u=0.4, sd=2.0, n=19),
        "layers": tuple(
            LayerPoint(index=k, phase=("dark", "bright")[k % 2], thickness_nm=52.0 - 18 * (k % 2) + 0.1 * k, u_nm=0.8,
                       complete=0 < k < layers - 1, resolved=k != 7)
            for k in range(layers)
        ),
        "flags": ("tilt_uncorrected",), "rejected": (f"information banner{text}",), "thumbnail": make_thumbnail(number),
        "overlay": lines, "areas": (OverlayArea(kind="rejected", area=(165, 0, 180, 240), reason=f"banner{text}"),),
        "figure": f"figures/i{number:05d}.svg",
    }  # fmt: skip
    return ImageRow(**{**fields, **changes})


def make_estimate(mean: float, *, quantity: str = "period_nm", **changes: object) -> Estimate:
    fields: dict[str, object] = {
        "quantity": quantity, "mean": mean, "u": 1.1, "u_sampling": 0.7, "u_systematic": 0.85, "sd": 1.5,
        "low": mean - 2.4, "high": mean + 2.4, "n_specimens": 4, "n_images": 12, "n_layers": 240,
    }  # fmt: skip
    return Estimate(**{**fields, **changes})


def make_summary(*, text: str = "", images: int = 8, finished: bool = True) -> StudySummary:
    """A study of two groups. ``text`` is put into every text that a file name, metadata or a user can fill."""
    groups = (f"lot A{text}", f"lot B{text}")
    specimens = [(group, f"s{k}{text}") for group in groups for k in range(4)]
    rows = tuple(
        make_image(n, group=specimens[n % 8][0], specimen=specimens[n % 8][1], text=text) for n in range(images)
    )
    if images >= 8:
        failed = make_image(9001, group=groups[0], specimen=f"s0{text}", text=text, state="failed", layers=0,
                            reason=f"unreadable{text}", thumbnail=None, overlay=(), areas=(), rejected=(),
                            layered=None)  # fmt: skip
        flat = make_image(9002, group=groups[1], specimen=f"s1{text}", text=text, layered=False, layers=0, overlay=())
        rows = (*rows[:-2], failed, flat)
    wavelength = tuple(float(w) for w in range(380, 781, 2))
    predicted = tuple(float(v) for v in bell(np.array(wavelength), 545.0))
    observed = tuple(float(v) for v in bell(np.array(wavelength), 551.0))
    lot = Lot(lot=f"L-17{text}", roll=None, operator=f"operator{text}", method="film", method_revision="2")
    return StudySummary(
        title=f"Sample study{text}",
        question=f"Do the lots differ?{text}",
        quantity="period_nm",
        finished=finished,
        counts={"done": images - 1, "failed": 1, "missing": 0 if finished else 3},
        measured=f"{images} images of 8 specimens in 2 groups.{text}",
        answer=f"The period of lot A is 3.1 ± 1.5 nm larger.{text}",
        answer_limits=(f"pixel size{text}", "specimens"),
        cautions=CAUTIONS,
        design=tuple(
            DesignRow(
                group=g,
                specimens=4,
                images_planned=12,
                images_done=11,
                images_failed=1,
                images_excluded=0,
                images_missing=0,
                layers=240,
                spectra=4,
            )
            for g in groups
        ),
        table=tuple(
            TableRow(
                group=g,
                quantity=q,
                mean_nm=86.0,
                cv_percent=4.6,
                n_layers=240,
                n_images=11,
                n_specimens=4,
                u_nm=1.1,
                expanded_nm=2.2,
                notes=(f"note{text}",),
            )
            for g in groups
            for q in ("period", "dark", "bright")
        ),
        groups=tuple((g, (make_estimate(86.0 + 3 * k),)) for k, g in enumerate(groups)),
        specimens=tuple(
            SpecimenRow(
                group=g,
                specimen=s,
                position=float(k),
                estimates=(make_estimate(85.0 + k, n_images=3),),
                predicted_peak_nm=540.0 + k,
                u_predicted_peak_nm=6.0,
                observed_peak_nm=543.0 + k,
                u_observed_peak_nm=0.6,
                conclusion="explains",
                predicted_colour=make_colour(),
                observed_colour=make_colour("#2f8fb0"),
            )
            for k, (g, s) in enumerate(specimens)
        ),
        images=rows,
        variance=(
            VarianceComponents(
                quantity="period_nm",
                unit="nm",
                method="REML",
                reml_criterion=123.4,
                notes=(f"note{text}",),
                components=(
                    VarianceComponent(level="specimen", sd=1.5, low=0.8, high=2.9, share=0.6, boundary=False),
                    VarianceComponent(level="image", sd=0.0, low=0.0, high=None, share=0.0, boundary=True),
                    VarianceComponent(level="layer", sd=1.2, low=1.1, high=1.3, share=0.4, boundary=False),
                ),
            ),
        ),
        tests=(
            TestRow(
                quantity="period",
                unit="nm",
                name="Welch's t test",
                compares=groups,
                statistic_name="t",
                statistic=2.4,
                degrees_of_freedom=(5.7,),
                p_value=0.055,
                difference=3.1,
                low=-0.1,
                high=6.3,
                effect_size_name="Hedges g",
                effect_size=1.5,
                n=(4, 4),
                sentence=f"No difference is shown.{text}",
            ),
            TestRow(
                quantity="period",
                unit="nm",
                name="equivalence",
                compares=groups,
                possible=False,
                sentence="No margin was stated.",
            ),
        ),
        sensitivity=(
            SensitivityRow(what="without exclusions", group=groups[0], quantity="period", estimate=None, p_value=None),
        ),
        drift=(
            DriftRow(
                group=groups[1],
                quantity="period_nm",
                along="web position",
                position_unit="m",
                slope=0.4,
                u_slope=0.1,
                low=0.1,
                high=0.7,
                p_value=0.02,
                points=((0.0, 85.0, 1.0), (1.0, 85.5, 1.0), (2.0, 85.9, None)),
                sentence=f"Thicker along the web.{text}",
            ),
        ),
        planning=(
            PlanningRow(
                wanted="interval of 1 nm",
                specimens_per_group=9,
                images_per_specimen=3,
                layers_per_image=20,
                reached=0.98,
                sentence="9 specimens per group give 1 nm.",
            ),
        ),
        light=tuple(
            LightPair(
                group=g,
                specimen=s,
                kind="reflectance",
                wavelength_nm=wavelength,
                predicted=predicted,
                lower=tuple(0.9 * v for v in predicted),
                upper=tuple(1.05 * v for v in predicted),
                orders=((1, 545.0), (None, 420.0)),
                predicted_colour=make_colour(),
                observed_path=f"spectra/{s}.csv" if k % 4 else None,
                observed_spot=None,
                observed_reference=f"mirror{text}",
                observed_wavelength_nm=wavelength if k % 4 else None,
                observed=observed if k % 4 else None,
                observed_colour=make_colour("#2f8fb0") if k % 4 else None,
                conclusion="explains" if k % 4 else None,
                sentence=f"It explains.{text}" if k % 4 else "",
                delta_e00=4.2,
                reasons=(f"scale 1.01{text}",),
            )
            for k, (g, s) in enumerate(specimens[:5])
        ),
        peaks=tuple(
            PeakPair(
                group=g,
                specimen=s,
                order=1,
                predicted_nm=540.0 + 3 * k,
                u_predicted_nm=6.0,
                observed_nm=543.0 + 3 * k,
                u_observed_nm=0.6,
                kind="reflectance",
                conclusion="explains",
            )
            for k, (g, s) in enumerate(specimens)
        ),
        line=LineFit(
            n=8,
            slope=1.02,
            u_slope=0.1,
            intercept_nm=-8.0,
            u_intercept_nm=55.0,
            covariance=None,
            slope_interval=None,
            intercept_interval=None,
            pivot_nm=550.0,
            offset_nm=3.0,
            u_offset_nm=2.0,
            chi_square=3.0,
            degrees_of_freedom=6,
            p_value=0.8,
            p_one_to_one=0.4,
            method="York 2004",
            sentence=f"Agrees with 1:1.{text}",
        ),
        budget=(
            BudgetRow(
                quantity="period_nm",
                component=f"pixel size{text}",
                kind="B",
                distribution="normal",
                relative=0.01,
                u_nm=0.86,
                sensitivity=1.0,
                share=0.6,
            ),
        ),
        limited_by="pixel size",
        next_measurement=None,
        decisions=tuple(
            ReleaseDecision(
                group=groups[0],
                name="period",
                unit="nm",
                value=86.0,
                u=1.1,
                low=80.0,
                high=None,
                guard_band=1.8,
                accept_low=81.8,
                accept_high=None,
                rule="guarded acceptance",
                probability_conforming=0.999,
                decision=d,
                reason=f"inside{text}",
                lot=lot,
                caution=RELEASE_CAUTION,
            )
            for d in ("pass", "fail", "undecided")
        ),
        failures=(
            Failure(
                key="x", path=f"bad{text}.tif", task="measure", kind="unreadable", reason=f"empty{text}", attempts=3
            ),
        ),
        lot=lot,
        facts=(FactTable(title="Preparation", rows=(("Fixation", None), ("Stain", f"osmium{text}"))),),
        methods=MethodsFacts(
            version="0.1.0",
            n_groups=2,
            n_specimens=8,
            n_images=images,
            n_layers=240,
            n_spectra=5,
            quantity="period_nm",
            pixel_size_sources=(f"typed{text}",),
            pixel_size_range_nm=(2.5, 2.5),
            corrections=(),
            layer_definition="A layer reaches from boundary to boundary",
            uncertainty="Uncertainty follows JCGM 100",
            statistics=("Welch's t test on specimen means",),
            optics="Reflectance was calculated",
            materials=(
                MaterialSource(
                    name=f"chitin{text}",
                    role="dark",
                    source="Leertouwer 2011",
                    doi="10.1364/OE.19.024061",
                    status="published",
                    range_nm=(400.0, 700.0),
                    u_index=None,
                ),
            ),
            comparison=None,
            exclusions=(f"a.tif: torn{text}",),
            hand_edits=1,
            seeds={"draws": 1},
        ),
        run=RunFacts(
            command=f"layerscan study STUDY.toml{text}",
            plan_path="STUDY.toml",
            plan_sha256="0" * 64,
            ledger="ledger.sqlite",
            versions={"layerscan": "0.1.0", "numpy": "2"},
            seeds={},
            settings={"measure": {"region": None, "line": text}},
            settings_sha256="1" * 64,
            started=None,
            finished=None,
            processor_seconds=None,
            how_to_run_again=("layerscan study STUDY.toml",),
        ),
        flags=("tilt_uncorrected",),
    )
