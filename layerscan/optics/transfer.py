"""Reflectance and transmittance of stacks of flat, homogeneous, isotropic layers."""

from __future__ import annotations

import itertools
import os
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np

from layerscan.errors import InputError, SettingsError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

    from layerscan.records import BoolArray, ComplexArray, FloatArray, IntArray

POLARISATIONS = ("s", "p")
THREAD_WORK = 4_000_000  # layers x wavelengths x angles below which a second thread does not pay
MEMORY_LIMIT = 4 << 30  # bytes of results that one call may hold
CONSTANTS_AT_ONCE = 200_000  # values of n over angles, materials and wavelengths prepared at once
KZ_FLOOR = 1e-100  # stands for kz = 0 (critical angle, grazing incidence), which enters only as sin(kz d)/kz


def reflectance_transmittance(
    index: ArrayLike,
    sequence: ArrayLike,
    thickness_nm: ArrayLike,
    wavelength_nm: ArrayLike,
    *,
    aoi_deg: Sequence[float] | float = (0.0,),
    polarisations: Sequence[str] = POLARISATIONS,
    allow_gain: bool = False,
    threads: int | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Calculate reflectance and transmittance of many stacks, coherently and exactly.

    Parameters
    ----------
    index : (materials, wavelengths) complex array
        Refractive index n + ik of each material (fields as exp(-iwt), so k > 0 absorbs).
    sequence : (stacks, layers + 2) int array
        Which material each medium is: first the incident medium, which must not absorb, last the substrate.
    thickness_nm : (stacks, layers) float array
        Thickness of each layer; zero leaves a layer out.
    wavelength_nm : (wavelengths,) float array
        Wavelength in vacuum, in any order.
    aoi_deg : sequence of float
        Angles of incidence in the incident medium, 0 to 90.
    polarisations : sequence of {"s", "p"}
        Which polarisations, in the order of the result.
    allow_gain : bool
        Take k < 0 as a medium with gain instead of refusing it.
    threads : int, optional
        Threads that share the stacks and angles; None takes those that ``NUMBA_NUM_THREADS`` or the machine allows.

    Returns
    -------
    reflectance, transmittance : (stacks, angles, polarisations, wavelengths) float array
        Power per unit area of the interface over that of the incident light. At 90 degrees R is 1 and T is 0.

    Raises
    ------
    InputError
        Shapes that do not fit, an empty stack or spectrum, NaN, a negative thickness, a material number that does not
        exist, an absorbing incident medium, k < 0 without ``allow_gain``, or a result larger than memory allows.
    SettingsError
        An angle outside 0 to 90 degrees or an unknown polarisation.

    Notes
    -----
    Scaled admittance recursion from the substrate up. With the tangential fields B (electric) and C (magnetic),
    R = |eta0 B - C|^2 / |eta0 B + C|^2 and T = 4 eta0 Re(eta_s) |scale|^2 / |eta0 B + C|^2; eta is kz for s and n^2/kz
    for p light. T is the ratio of fluxes, which for p light into an absorbing substrate is not Re(n_s cos)/Re(n_0 cos)
    times |t|^2. Evanescent and absorbing layers carry their decay apart, so thick ones end in 0, never in NaN.
    It cannot see roughness, scattering, finite coherence or anisotropy; see ``conditions`` and ``ensemble`` for the
    cone, the bandwidth and the spread of a real specimen.

    References
    ----------
    .. [1] M. Born, E. Wolf, Principles of Optics, 7th ed. (1999), section 1.6: characteristic matrix of a stack.
    .. [2] S. J. Byrnes, Multilayer optical calculations, arXiv:1603.02720, section 2 and appendices.

    Examples
    --------
    A quarter-wave film of MgF2-like index on glass: ((1.52 - 1.38**2)/(1.52 + 1.38**2))**2.

    >>> R, T = reflectance_transmittance([[1.0], [1.38], [1.52]], [[0, 1, 2]], [[550 / 4 / 1.38]], [550.0])
    >>> round(float(R[0, 0, 0, 0]), 6)
    0.012601
    """
    n, order, thickness, wavelength = check_stacks(index, sequence, thickness_nm, wavelength_nm, allow_gain=allow_gain)
    angles, kinds = check_angles(aoi_deg), check_polarisations(polarisations)
    check_memory(16.0 * order.shape[0] * angles.size * len(kinds) * wavelength.size)
    return _run(n, order, thickness, wavelength, angles, kinds, threads=threads)


def reflected_amplitude(
    index: ArrayLike,
    sequence: ArrayLike,
    thickness_nm: ArrayLike,
    wavelength_nm: ArrayLike,
    *,
    aoi_deg: Sequence[float] | float = (0.0,),
    polarisations: Sequence[str] = POLARISATIONS,
    threads: int | None = None,
) -> ComplexArray:
    """Calculate the reflected amplitude of many stacks, for what adds before it is squared.

    Parameters
    ----------
    index, sequence, thickness_nm, wavelength_nm, aoi_deg, polarisations, threads
        As in ``reflectance_transmittance``.

    Returns
    -------
    (stacks, angles, polarisations, wavelengths) complex array
        Reflected over incident tangential electric field at the front of the stack, fields as exp(-iwt).

    Raises
    ------
    InputError, SettingsError
        As in ``reflectance_transmittance``.
    """
    n, order, thickness, wavelength = check_stacks(index, sequence, thickness_nm, wavelength_nm)
    angles, kinds = check_angles(aoi_deg), check_polarisations(polarisations)
    check_memory(32.0 * order.shape[0] * angles.size * len(kinds) * wavelength.size)
    real, imaginary = _run(n, order, thickness, wavelength, angles, kinds, amplitude=True, threads=threads)
    return real + 1j * imaginary


def absorbed_per_layer(
    index: ArrayLike,
    sequence: ArrayLike,
    thickness_nm: ArrayLike,
    wavelength_nm: ArrayLike,
    *,
    aoi_deg: Sequence[float] | float = (0.0,),
    polarisations: Sequence[str] = POLARISATIONS,
    allow_gain: bool = False,
) -> FloatArray:
    """Calculate the fraction of the incident power that each layer absorbs.

    Parameters
    ----------
    index, sequence, thickness_nm, wavelength_nm, aoi_deg, polarisations, allow_gain
        As in ``reflectance_transmittance``.

    Returns
    -------
    (stacks, angles, polarisations, layers, wavelengths) float array
        Negative in a layer with gain. With R and T it sums to 1.

    Raises
    ------
    InputError, SettingsError
        As in ``reflectance_transmittance``.

    Notes
    -----
    The flux Re(B C*) below a layer over that above it, layer by layer from the front.
    """
    n, order, thickness, wavelength = check_stacks(index, sequence, thickness_nm, wavelength_nm, allow_gain=allow_gain)
    angles, kinds = check_angles(aoi_deg), check_polarisations(polarisations)
    shape = (order.shape[0], angles.size, len(kinds), thickness.shape[1], wavelength.size)
    check_memory(8.0 * float(np.prod(np.array(shape, dtype=float))))
    absorbed = np.empty(shape)
    for medium in np.unique(order[:, 0]):
        rows = np.flatnonzero(order[:, 0] == medium)
        kz_all = tangential_rate(n, n[medium].real, angles)
        for number, angle in enumerate(angles):
            cosine = np.sin(np.radians(90.0 - angle))
            for place, kind in enumerate(kinds):
                kz = kz_all[number]
                eta = kz if kind == 0 else n * n / kz
                top = n[medium].real * (cosine if kind == 0 else 1.0)
                bottom = 1.0 if kind == 0 else cosine
                absorbed[rows, number, place] = _absorbed(
                    n, kz / wavelength, eta, top, bottom, order[rows], thickness[rows]
                )
    return absorbed


def _absorbed(
    n: ComplexArray,
    rate: ComplexArray,
    eta: ComplexArray,
    top: FloatArray,
    bottom: FloatArray | float,
    order: IntArray,
    thickness: FloatArray,
) -> FloatArray:
    """Absorbed fractions, (stacks, layers, wavelengths), at one angle and polarisation."""
    layers = thickness.shape[1]
    b, c = np.ones((order.shape[0], n.shape[1]), dtype=complex), eta[order[:, -1]]
    passed = np.ones((order.shape[0], layers, n.shape[1]))
    for layer in range(layers - 1, -1, -1):
        medium = order[:, layer + 1]
        delta = 2 * np.pi * rate[medium] * thickness[:, layer, None]
        decay = np.exp(-abs(delta.imag))
        cos, sin = _scaled_cosine_sine(delta)
        below = (b * c.conj()).real * decay**2
        b, c = cos * b - 1j * sin / eta[medium] * c, cos * c - 1j * eta[medium] * sin * b
        above = (b * c.conj()).real
        lossy = (n[medium].imag != 0) & (above != 0)
        np.divide(below, above, out=passed[:, layer], where=lossy)
        size = abs(b) + abs(c)
        b, c = b / size, c / size
    flux = 4 * top * bottom * (b * c.conj()).real / abs(top * b + bottom * c) ** 2
    through = np.cumprod(passed, axis=1)
    before = np.concatenate([np.ones_like(through[:, :1]), through[:, :-1]], axis=1)
    result: FloatArray = flux[:, None] * before * (1 - passed)
    return result


def _scaled_cosine_sine(delta: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    """cos and sin of a complex phase, both times exp(-|Im|)."""
    lost = np.expm1(-2 * abs(delta.imag))
    cosh, sinh = 1 + lost / 2, -np.sign(delta.imag) * lost / 2
    cos, sin = np.cos(delta.real), np.sin(delta.real)
    return cos * cosh - 1j * sin * sinh, sin * cosh + 1j * cos * sinh


def check_polarisations(polarisations: Sequence[str]) -> list[int]:
    """Polarisations as numbers (0 is s, 1 is p), refused where unknown."""
    for name in polarisations:
        if name not in POLARISATIONS:
            raise SettingsError(
                f"Polarisation '{name}' is not known. Give 's' or 'p' (their mean is unpolarised light)."
            )
    if not len(polarisations):
        raise SettingsError("No polarisation was given. Give 's', 'p' or both.")
    return [POLARISATIONS.index(name) for name in polarisations]


def check_memory(needed: float) -> None:
    """Refuse a result that would not fit."""
    if needed > MEMORY_LIMIT:
        raise InputError(
            f"This many stacks, angles, polarisations and wavelengths need {needed / 2**30:.1f} GB of results; "
            f"{MEMORY_LIMIT / 2**30:.0f} GB is the most for one call. Calculate in parts."
        )


def check_angles(aoi_deg: Sequence[float] | float) -> FloatArray:
    """Angles of incidence as an array, refused outside 0 to 90 degrees."""
    angles = np.atleast_1d(np.asarray(aoi_deg, dtype=np.float64))
    if angles.ndim != 1 or not angles.size:
        raise SettingsError("Angle of incidence: give one or more numbers from 0 to 90 degrees.")
    wrong = angles[~((angles >= 0) & (angles <= 90))]
    if wrong.size:
        raise SettingsError(f"Angle of incidence {wrong[0]:g} degrees lies outside 0 to 90. Give angles in that range.")
    return angles


def check_stacks(
    index: ArrayLike,
    sequence: ArrayLike,
    thickness_nm: ArrayLike,
    wavelength_nm: ArrayLike,
    *,
    allow_gain: bool = False,
) -> tuple[ComplexArray, IntArray, FloatArray, FloatArray]:
    """Check what describes the stacks and give it as contiguous arrays."""
    wavelength = np.ascontiguousarray(wavelength_nm, dtype=np.float64)
    n = np.ascontiguousarray(index, dtype=np.complex128)
    order = np.asarray(sequence)
    thickness = np.ascontiguousarray(thickness_nm, dtype=np.float64)
    if wavelength.ndim != 1 or not wavelength.size:
        raise InputError(f"wavelength_nm has shape {wavelength.shape}; a non-empty one-dimensional array is needed.")
    if not (np.isfinite(wavelength).all() and wavelength.min() > 0):
        raise InputError(
            "wavelength_nm holds values that are not finite and positive. Give wavelengths in vacuum in nm."
        )
    if n.ndim != 2 or n.shape[1] != wavelength.size or not n.shape[0]:
        raise InputError(
            f"index has shape {n.shape}; (materials, {wavelength.size}) is needed, one n + ik per wavelength."
        )
    if order.ndim != 2 or order.shape[1] < 2 or not order.shape[0]:
        raise InputError(
            f"sequence has shape {order.shape}; (stacks, layers + 2) is needed, incident and substrate included."
        )
    if order.dtype.kind not in "iu":
        raise InputError(f"sequence holds {order.dtype}; whole material numbers are needed.")
    if thickness.shape != (order.shape[0], order.shape[1] - 2):
        raise InputError(
            f"thickness_nm has shape {thickness.shape}; (stacks, layers) = {(order.shape[0], order.shape[1] - 2)} is "
            "needed, one thickness per layer between incident medium and substrate."
        )
    if order.min() < 0 or order.max() >= n.shape[0]:
        wrong = int(order.max() if order.max() >= n.shape[0] else order.min())
        raise InputError(f"sequence names material {wrong}; index has materials 0 to {n.shape[0] - 1}.")
    if thickness.size and not (np.isfinite(thickness).all() and thickness.min() >= 0):
        raise InputError("thickness_nm holds values that are negative or not finite. Give thicknesses >= 0 in nm.")
    if not np.isfinite(n.view(np.float64)).all():
        raise InputError("index holds values that are not finite. Give n + ik at every wavelength.")
    if not (n.real >= 0).all() or not (abs(n) > 0).all():
        raise InputError("index holds n < 0 or n + ik = 0. Give a refractive index with n > 0.")
    if not allow_gain and n.imag.min() < 0:
        raise InputError(
            f"index holds k = {n.imag.min():g} < 0, a medium with gain. Give n + ik with k >= 0 for absorption, "
            "or allow_gain=True if gain is meant."
        )
    incident = np.unique(order[:, 0])
    if (n.imag[incident] != 0).any():
        raise InputError(
            f"The incident medium (material {incident[(n.imag[incident] != 0).any(axis=1)][0]}) absorbs; reflectance "
            "is not defined there. Give an incident medium with k = 0."
        )
    return n, np.ascontiguousarray(order, dtype=np.int64), thickness, wavelength


def tangential_rate(n: ComplexArray, incident: FloatArray, aoi_deg: FloatArray) -> ComplexArray:
    """``kz/k0`` of each medium, (angles, materials, wavelengths), for light from a medium of real index.

    Formed from (n - a)(n + a) so that nothing cancels near the critical angle; never exactly zero.
    """
    a = incident * np.sin(np.radians(aoi_deg.astype(incident.dtype)))[:, None]
    a = a[:, None, :]
    kz: ComplexArray = np.sqrt((n - a) * (n + a))
    kz[aoi_deg == 0] = n
    kz[kz == 0] = KZ_FLOOR
    return kz


def _run(
    n: ComplexArray,
    order: IntArray,
    thickness: FloatArray,
    wavelength: FloatArray,
    angles: FloatArray,
    kinds: list[int],
    *,
    amplitude: bool = False,
    threads: int | None = None,
) -> tuple[FloatArray, FloatArray]:
    """Group stacks by incident medium, prepare optical constants, share the work between threads."""
    distinct = sorted(set(kinds))
    shared = bool(np.all(angles == 0.0)) and len(distinct) > 1  # at normal incidence s and p are the same
    calculated = distinct[:1] if shared else distinct
    source = np.array([0 if shared else calculated.index(kind) for kind in kinds])
    shape = (order.shape[0], angles.size, len(kinds), wavelength.size)
    first, second = np.empty(shape), np.empty(shape)
    workers = _threads(threads, order.size * wavelength.size * angles.size)
    incident_media = np.unique(order[:, 0])
    for medium in incident_media:
        rows = np.flatnonzero(order[:, 0] == medium)
        work = _Work(
            order=order if rows.size == order.shape[0] else order[rows],
            thickness=thickness if rows.size == order.shape[0] else thickness[rows],
            rows=rows, source=source, amplitude=amplitude, first=first, second=second,
        )  # fmt: skip
        thickest = float(work.thickness.max(initial=0.0))
        for angle, wave in _blocks(angles.size, wavelength.size, n.shape[0]):
            tables = prepare_constants(n[:, wave], int(medium), wavelength[wave], angles[angle], calculated, thickest)
            _share(_jobs(tables, work, angle.start, wave.start, workers), workers)
    return first, second


def _blocks(angles: int, wavelengths: int, materials: int) -> Iterator[tuple[slice, slice]]:
    """Angles and wavelengths whose optical constants are prepared together; few where there are many materials."""
    wave = min(max(CONSTANTS_AT_ONCE // materials, 1), wavelengths)
    together = max(CONSTANTS_AT_ONCE // (materials * wave), 1)
    for start in range(0, wavelengths, wave):
        for angle in range(0, angles, together):
            yield slice(angle, min(angle + together, angles)), slice(start, min(start + wave, wavelengths))


def _threads(threads: int | None, work: int) -> int:
    if threads is None:
        if work < THREAD_WORK:
            return 1
        allowed = os.environ.get("NUMBA_NUM_THREADS", "")
        cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
        return int(allowed) if allowed.isdigit() and int(allowed) > 0 else cores
    if threads < 1:
        raise SettingsError(f"threads is {threads}; 1 or more is needed.")
    return threads


def _share(jobs: list[Callable[[], None]], workers: int) -> None:
    """Run the jobs, on several threads where that was asked for; the kernel lets go of the interpreter."""
    if workers == 1 or len(jobs) == 1:
        for job in jobs:
            job()
        return
    with ThreadPoolExecutor(workers) as pool:
        for done in [pool.submit(job) for job in jobs]:
            done.result()


@dataclass(frozen=True, kw_only=True, eq=False)
class _Work:
    """Stacks lit from one medium, and where their results go.

    ``rows`` places them among all stacks; ``source`` says which calculated polarisation each one of the results takes;
    ``first`` and ``second`` are R and T, or real and imaginary part of the amplitude.
    """

    order: IntArray
    thickness: FloatArray
    rows: IntArray
    source: IntArray
    amplitude: bool
    first: FloatArray
    second: FloatArray


@dataclass(frozen=True, kw_only=True, eq=False)
class Constants:
    """Optical constants as the kernel takes them, cut into tiles of ``width`` wavelengths of which the last is padded.

    ``media`` is (angles, tiles, materials, rows x stride), ``front`` (angles, tiles, polarisations, 2 stride), ``real``
    (angles, tiles, materials) says which media have real kz in the whole tile.
    """

    media: FloatArray
    front: FloatArray
    real: BoolArray
    width: int
    wavelengths: int


def prepare_constants(
    n: ComplexArray, medium: int, wavelength: FloatArray, angles: FloatArray, kinds: list[int], thickest_nm: float
) -> Constants:
    """Optical constants for stacks lit from ``medium``, for each angle."""
    from layerscan.optics import kernel

    tiles = -(-wavelength.size // kernel.STRIDE)
    width = -(-wavelength.size // (tiles * kernel.LANES)) * kernel.LANES
    padding = tiles * width - wavelength.size
    if padding:  # calculated and thrown away
        wavelength = np.concatenate([wavelength, np.repeat(wavelength[-1:], padding)])
        n = np.concatenate([n, np.repeat(n[:, -1:], padding, axis=1)], axis=1)
    kz = tangential_rate(n, n[medium].real, angles)
    shape = (angles.size, n.shape[0], tiles, width)
    media = np.zeros((angles.size, tiles, n.shape[0], kernel.CONSTANT_ROWS, kernel.STRIDE))
    rows = media.transpose(3, 0, 2, 1, 4)[..., :width]  # a view: rows, angles, materials, tiles, wavelengths

    def put(row: int, values: FloatArray) -> None:
        rows[row] = values.reshape(shape)

    rate = 2.0 * kz.real / wavelength
    put(kernel.RATE, rate)
    if rate.max() * thickest_nm > kernel.THICK:
        scaled = rate * kernel.SPLITTER
        high = scaled - (scaled - rate)
        long: Any = n.astype(np.clongdouble)  # 64 bits of mantissa where the machine has them
        exact = tangential_rate(long, long[medium].real, angles).real * 2 / wavelength
        put(kernel.RATE_HIGH, high)
        put(kernel.RATE_LOW, (exact - high).astype(np.float64))
    real = (kz.imag == 0).reshape(shape).all(axis=3).transpose(0, 2, 1)
    lossless = bool(real.all())
    if not lossless:
        put(kernel.DECAY_RATE, 4.0 * np.pi * kz.imag / wavelength)
    cosine = np.sin(np.radians(90.0 - angles))[:, None, None]  # exactly 0 at 90 degrees
    incident = n[medium].real.reshape(tiles, width)
    front = np.ones((angles.size, tiles, len(kinds), 2, kernel.STRIDE))
    for p, kind in enumerate(kinds):
        eta = kz if kind == 0 else n * n / kz
        inverse = 1.0 / eta
        row = kernel.ETA + p * kernel.ETA_ROWS
        put(row, eta.real)
        put(row + 2, inverse.real)
        if not lossless:
            put(row + 1, eta.imag)
            put(row + 3, inverse.imag)
        front[:, :, p, 0, :width] = incident * cosine if kind == 0 else incident
        front[:, :, p, 1, :width] = 1.0 if kind == 0 else cosine
    return Constants(
        media=media.reshape(*media.shape[:3], -1),
        front=front.reshape(*front.shape[:3], -1),
        real=np.ascontiguousarray(real),
        width=width,
        wavelengths=wavelength.size - padding,
    )


def _jobs(
    tables: Constants, work: _Work, first_angle: int, first_wavelength: int, workers: int
) -> list[Callable[[], None]]:
    """One call of the kernel for each angle, tile of wavelengths and share of the stacks."""
    from layerscan.optics import kernel

    def job(angle: int, tile: int, begin: int, end: int) -> None:
        start = first_wavelength + tile * tables.width
        stop = first_wavelength + min((tile + 1) * tables.width, tables.wavelengths)
        kernel.run_tile(
            tables.media[angle, tile], tables.front[angle, tile], tables.real[angle, tile], work.order[begin:end],
            work.thickness[begin:end], work.rows[begin:end], work.source, first_angle + angle, start, stop,
            tables.width, work.amplitude, work.first, work.second,
        )  # fmt: skip

    stacks = work.order.shape[0]
    shares = 1 if workers == 1 else min(stacks, 2 * workers)
    edges = np.linspace(0, stacks, shares + 1).astype(int)
    angles, tiles = tables.media.shape[:2]
    return [
        partial(job, angle, tile, int(begin), int(end))
        for angle in range(angles)
        for tile in range(tiles)
        for begin, end in itertools.pairwise(edges)
    ]
