"""Records made by hand for the tests of figures, comparison and pages: no other room is needed to make them."""

from __future__ import annotations

import numpy as np

from layerscan.records import (
    Average,
    Boundary,
    BudgetRow,
    Colour,
    Detection,
    Exclusion,
    ImageSource,
    Layer,
    Measurement,
    Micrograph,
    Peak,
    PhaseStatistics,
    PixelSize,
    PredictedStructure,
    Prediction,
    Profile,
    Spacing,
    Spectrum,
    StackStatistics,
    SwappedAssignment,
    Trace,
)

NM_PER_PX = 2.5


def make_measurement(
    *,
    path: str = "shell_03.tif",
    rows: int = 420,
    columns: int = 560,
    periods: int = 10,
    layered: bool = True,
    seed: int = 1,
) -> tuple[Measurement, Micrograph]:
    """A tilted wavy stack of dark and bright layers, drawn and described by the same numbers."""
    rng = np.random.default_rng(seed)
    thickness = np.empty(2 * periods + 1)
    thickness[0::2] = rng.normal(34, 2.5, periods + 1)  # bright, nm
    thickness[1::2] = rng.normal(52, 4.0, periods)  # dark
    depth = np.concatenate([[0.0], np.cumsum(thickness)])
    angle = np.radians(97.0)
    row, column = np.mgrid[0:rows, 0:columns].astype(float)
    along = (column * np.cos(angle) + row * np.sin(angle)) * NM_PER_PX - 60 + 8 * np.sin(column / 70)
    number = np.searchsorted(depth, along)
    image = np.where(number % 2 == 1, 0.75, 0.3) + rng.normal(0, 0.08, (rows, columns))
    image[rows - 40 :] = 0.05
    pixel_size = PixelSize(row_nm=NM_PER_PX, column_nm=NM_PER_PX, u_relative=0.01, source="typed by the user")
    banner = Exclusion(region=(rows - 40, 0, rows, columns), reason="information banner")
    source = ImageSource(
        path=path, sha256="0" * 64, page=0, shape=(rows, columns), pixel_size=pixel_size, excluded=(banner,)
    )
    micrograph = Micrograph(
        load=lambda: image.astype(np.float32), shape=(rows, columns), pixel_size=pixel_size, excluded=(banner,)
    )
    if not layered:
        nothing = Detection(layered=False, periodic=False, statistic=2.1, p_value=0.62, region=None)
        return (
            Measurement(
                version="0",
                settings={},
                flags=("no_layers_found",),
                image=source,
                structure="none",
                layered=False,
                periodic=False,
                detection=nothing,
            ),
            micrograph,
        )
    traces = _traces(depth, angle, columns)
    layers = [
        Layer(
            index=i,
            phase="bright" if i % 2 == 0 else "dark",
            thickness_nm=float(t),
            u_nm=float(0.01 * t + 0.4),
            complete=0 < i < 2 * periods,
            flags=("not_resolved",) if i in (5, 6) else (),
        )
        for i, t in enumerate(thickness)
    ]
    profile_depth = np.arange(0, depth[-1], NM_PER_PX)
    grey = np.where(np.searchsorted(depth, profile_depth) % 2 == 1, 0.75, 0.3) + rng.normal(0, 0.01, profile_depth.size)
    power = np.abs(np.fft.rfft(grey - grey.mean())) ** 2
    frequency = np.fft.rfftfreq(profile_depth.size, NM_PER_PX)
    measurement = Measurement(
        version="0",
        settings={"pixel_size": "2.5 +- 0.025 nm"},
        flags=("tilt_uncorrected", "ends_cut_by_frame"),
        image=source,
        structure="lamellae",
        layered=True,
        periodic=True,
        detection=Detection(
            layered=True, periodic=True, statistic=55.0, p_value=1e-6, region=(20, 15, rows - 40, columns - 15)
        ),
        orientation_deg=97.0,
        u_orientation_deg=0.2,
        spacing=Spacing(value=86.2, u=0.9, method="power spectrum"),
        period=Average(mean=86.1, u=0.88, sd=4.7, n=periods - 1),
        dark=Average(mean=52.1, u=0.55, sd=3.9, n=periods),
        bright=Average(mean=34.0, u=0.4, sd=2.4, n=periods - 1),
        layers=tuple(layers),
        boundaries=tuple(
            Boundary(
                index=i, depth_nm=float(d), u_nm=0.4, trace=trace, flags=("boundary_incomplete",) if i == 4 else ()
            )
            for i, (d, trace) in enumerate(zip(depth[1:-1], traces, strict=True))
        ),
        budget=(
            BudgetRow(
                quantity="period_nm",
                component="pixel size",
                kind="B",
                distribution="normal",
                relative=0.01,
                u_nm=0.86,
                sensitivity=34.4,
                share=0.95,
            ),
            BudgetRow(
                quantity="period_nm",
                component="boundary fit",
                kind="A",
                distribution="normal",
                relative=0.002,
                u_nm=0.19,
                sensitivity=1.0,
                share=0.05,
                degrees_of_freedom=18,
            ),
        ),
        statistics=StackStatistics(
            phases=(
                PhaseStatistics(
                    phase="dark", n=periods, mean_nm=52.1, sd_nm=3.9, skewness=0.1, law="normal", law_p_value=0.6
                ),
            ),
            limited_by="pixel size",
            next_measurement="Calibrate the pixel size to 0.5 %.",
        ),
        profile=Profile(depth_nm=profile_depth, intensity=grey, frequency_per_nm=frequency, power=power),
        start_cut_by_frame=True,
        end_cut_by_frame=True,
    )
    return measurement, micrograph


def _traces(depth: np.ndarray, angle: float, columns: int) -> list[Trace]:
    column = np.arange(15.0, columns - 15, 4)
    traces = []
    for value in depth[1:-1]:
        row = ((value + 60 - 8 * np.sin(column / 70)) / NM_PER_PX - column * np.cos(angle)) / np.sin(angle)
        station = np.arange(column.size, dtype=np.int64)
        traces.append(
            Trace(
                station=station,
                row_px=row,
                column_px=column,
                depth_nm=np.full(column.size, value),
                u_depth_nm=np.full(column.size, 1.0),
            )
        )
    return traces


def make_colour(srgb: str = "#3fa267", *, in_gamut: bool = True) -> Colour:
    return Colour(
        xyz=(20.0, 30.0, 18.0),
        xy=(0.29, 0.44),
        lab=(61.7, -45.0, 24.0),
        srgb=srgb,
        in_gamut=in_gamut,
        dominant_wavelength_nm=532.0,
        excitation_purity=0.4,
        delta_e00_95=6.2,
    )


def bell(
    wavelength: np.ndarray, centre: float, *, height: float = 0.6, fwhm: float = 60.0, base: float = 0.03
) -> np.ndarray:
    return base + (height - base) * np.exp(-4 * np.log(2) * ((wavelength - centre) / fwhm) ** 2)


def make_prediction(
    *,
    centre: float = 545.0,
    u_nm: float | None = 6.0,
    fwhm: float = 60.0,
    flags: tuple[str, ...] = (),
    order: int | None = 1,
    settings: dict[str, object] | None = None,
) -> Prediction:
    """A prediction whose reflectance is one bell; nothing in it was calculated by the optics room."""
    wavelength = np.arange(380.0, 781.0)
    value = bell(wavelength, centre, fwhm=fwhm)
    u = u_nm or 0.0
    shifted = [bell(wavelength, centre + k * u, fwhm=fwhm) for k in np.linspace(-1.96, 1.96, 21)]
    lower, upper = np.min(shifted, axis=0) * 0.95, np.minimum(np.max(shifted, axis=0) * 1.04, 1.0)
    reflectance = Spectrum(
        wavelength_nm=wavelength,
        value=value,
        kind="reflectance",
        lower=lower if u_nm else None,
        upper=upper if u_nm else None,
    )
    other = bell(wavelength, centre - 40, fwhm=fwhm, height=0.5)
    swapped = SwappedAssignment(
        dark="air",
        bright="chitin",
        reflectance=Spectrum(wavelength_nm=wavelength, value=other, kind="reflectance"),
        peaks=(Peak(order=1, wavelength_nm=centre - 40, u_wavelength_nm=None, reflectance=0.5, fwhm_nm=fwhm),),
        colour=make_colour("#3a7fb0", in_gamut=False),
    )
    return Prediction(
        version="0",
        settings=settings or {"dark": "chitin", "bright": "air", "draws": 500},
        flags=flags,
        structure=PredictedStructure(
            layers=20,
            layers_seen=20,
            sequence=("air", *(["chitin", "air"] * 10), "absorber"),
            thickness_nm=tuple([90.0, 130.0] * 10),
            source="layers.csv",
            sha256=None,
        ),
        conditions={"aoi_deg": 0.0, "aperture": 0.0, "polarisation": "unpolarised"},
        reflectance=reflectance,
        transmittance=Spectrum(wavelength_nm=wavelength, value=1 - value, kind="transmittance"),
        peaks=(Peak(order=order, wavelength_nm=centre, u_wavelength_nm=u_nm, reflectance=0.6, fwhm_nm=fwhm),),
        colour=make_colour(),
        swapped=swapped,
        materials=(
            {
                "name": "chitin",
                "role": "dark",
                "source": "invented",
                "doi": None,
                "status": "convention",
                "range_nm": (380.0, 780.0),
                "u_index": 0.01,
            },
        ),
    )
