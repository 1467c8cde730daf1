"""Reflectance and transmittance of stacks of flat, homogeneous, isotropic layers."""

from __future__ import annotations

import itertools
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from layerscan.errors import InputError, SettingsError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from layerscan.records import BoolArray, ComplexArray, FloatArray, IntArray

POLARISATIONS = ("s", "p")
THREAD_WORK = 4_000_000  # layers x wavelengths x angles below which a second thread does not pay
MEMORY_LIMIT = 4 << 30  # bytes of results that one call may hold
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
    angles = check_angles(aoi_deg)
    for name in polarisations:
        if name not in POLARISATIONS:
            raise SettingsError(
                f"Polarisation '{name}' is not known. Give 's' or 'p' (their mean is unpolarised light)."
            )
    if not len(polarisations):
        raise SettingsError("No polarisation was given. Give 's', 'p' or both.")
    shape = (order.shape[0], angles.size, len(polarisations), wavelength.size)
    needed = 16.0 * float(np.prod(np.array(shape, dtype=float)))
    if needed > MEMORY_LIMIT:
        raise InputError(
            f"{shape[0]} stacks x {shape[1]} angles x {shape[2]} polarisations x {shape[3]} wavelengths need "
            f"{needed / 2**30:.1f} GB of results. Calculate in parts."
        )
    kinds = [POLARISATIONS.index(name) for name in polarisations]
    return _run(n, order, thickness, wavelength, angles, kinds, threads)


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


def tangential_rate(n: ComplexArray, incident: FloatArray, aoi_deg: float) -> ComplexArray:
    """``kz/k0`` of each medium, (materials, wavelengths), for light from a medium of real index at ``aoi_deg``.

    Formed from (n - a)(n + a) so that nothing cancels near the critical angle; never exactly zero.
    """
    if aoi_deg == 0.0:
        kz = n.copy()
    else:
        a = incident * np.sin(np.radians(aoi_deg))
        kz = np.sqrt((n - a) * (n + a))
        lossless = n.imag == 0
        kz.imag[lossless] = np.abs(kz.imag[lossless])
    kz[kz == 0] = KZ_FLOOR
    return kz


def _cosine(aoi_deg: float) -> float:
    """Cosine that is exactly 0 at 90 degrees."""
    return float(np.sin(np.radians(90.0 - aoi_deg)))


def _run(
    n: ComplexArray,
    order: IntArray,
    thickness: FloatArray,
    wavelength: FloatArray,
    angles: FloatArray,
    kinds: list[int],
    threads: int | None,
) -> tuple[FloatArray, FloatArray]:
    """Group by incident medium and angle, cut wavelengths into tiles, share the work between threads."""
    distinct = sorted(set(kinds))
    shared = bool(np.all(angles == 0.0)) and len(distinct) > 1
    calculated = distinct[:1] if shared else distinct
    shape = (order.shape[0], angles.size, len(calculated), wavelength.size)
    reflectance, transmittance = np.empty(shape), np.empty(shape)
    jobs: list[Callable[[], None]] = []
    workers = _threads(threads, order.shape[0] * order.shape[1] * wavelength.size * angles.size * len(calculated))
    first_media = np.unique(order[:, 0])
    for medium in first_media:
        rows = None if first_media.size == 1 else np.flatnonzero(order[:, 0] == medium)
        part = (order, thickness) if rows is None else (np.ascontiguousarray(order[rows]), thickness[rows])
        for number, angle in enumerate(angles):
            out = (reflectance[:, number], transmittance[:, number])
            jobs += _jobs(n, int(medium), part, rows, wavelength, float(angle), calculated, out, workers)
    if workers > 1 and len(jobs) > 1:
        with ThreadPoolExecutor(workers) as pool:
            for done in [pool.submit(job) for job in jobs]:
                done.result()
    else:
        for job in jobs:
            job()
    if calculated == kinds:
        return reflectance, transmittance
    pick = [0 if shared else calculated.index(kind) for kind in kinds]
    return np.ascontiguousarray(reflectance[:, :, pick]), np.ascontiguousarray(transmittance[:, :, pick])


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


def _jobs(
    n: ComplexArray,
    medium: int,
    part: tuple[IntArray, FloatArray],
    rows: NDArray[np.int64] | None,
    wavelength: FloatArray,
    angle: float,
    kinds: list[int],
    out: tuple[FloatArray, FloatArray],
    workers: int,
) -> list[Callable[[], None]]:
    """One call for each share of the stacks and each tile of wavelengths."""
    from layerscan.optics import kernel

    order, thickness = part
    stacks = order.shape[0]
    tiles = -(-wavelength.size // kernel.STRIDE)
    width = -(-wavelength.size // (tiles * kernel.LANES)) * kernel.LANES
    shares = 1 if workers == 1 else min(stacks, 4 * workers)
    edges = np.linspace(0, stacks, shares + 1).astype(int)
    jobs: list[Callable[[], None]] = []
    for start in range(0, wavelength.size, width):
        stop = min(start + width, wavelength.size)
        constants, front, real = _tile(n[:, start:stop], medium, wavelength[start:stop], angle, kinds)

        def job(
            first: int, last: int, start: int = start, stop: int = stop,
            tables: tuple[FloatArray, FloatArray, BoolArray] = (constants, front, real),
        ) -> None:  # fmt: skip
            shape = (last - first, len(kinds), kernel.STRIDE)
            r, t = np.empty(shape), np.empty(shape)
            count = -(-(stop - start) // kernel.LANES) * kernel.LANES
            kernel.run_tile(*tables, order[first:last], thickness[first:last], len(kinds), count, r, t)
            where = slice(first, last) if rows is None else rows[first:last]
            out[0][where, :, start:stop] = r[:, :, : stop - start]
            out[1][where, :, start:stop] = t[:, :, : stop - start]

        jobs += [partial(job, int(a), int(b)) for a, b in itertools.pairwise(edges)]
    return jobs


def _tile(
    n: ComplexArray, medium: int, wavelength: FloatArray, angle: float, kinds: list[int]
) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Optical constants of one tile as the kernel takes them: constants, front, real."""
    from layerscan.optics import kernel

    materials, count = n.shape
    incident = n[medium].real
    kz = tangential_rate(n, incident, angle)
    constants = np.zeros((materials, kernel.CONSTANT_ROWS, kernel.STRIDE))
    front = np.zeros((len(kinds), 2, kernel.STRIDE))
    rate = 2.0 * kz.real / wavelength
    exact = 2 * kz.real.astype(np.longdouble) / wavelength
    split = rate * 134217729.0
    high = split - (split - rate)
    constants[:, kernel.RATE, :count] = rate
    constants[:, kernel.RATE_HIGH, :count] = high
    constants[:, kernel.RATE_LOW, :count] = exact - high
    constants[:, kernel.DECAY_RATE, :count] = 4.0 * np.pi * kz.imag / wavelength
    cosine = _cosine(angle)
    for p, kind in enumerate(kinds):
        eta = kz if kind == 0 else n * n / kz if angle else n
        row = kernel.ETA + p * kernel.ETA_ROWS
        inverse = 1.0 / eta
        constants[:, row, :count] = eta.real
        constants[:, row + 1, :count] = eta.imag
        constants[:, row + 2, :count] = inverse.real
        constants[:, row + 3, :count] = inverse.imag
        front[p, 0, :count] = incident * cosine if kind == 0 else incident
        front[p, 1, :count] = 1.0 if kind == 0 else cosine
    constants[:, :, count:] = constants[:, :, count - 1 : count]  # padding that is calculated and thrown away
    front[:, :, count:] = front[:, :, count - 1 : count]
    real = np.ascontiguousarray((kz.imag == 0).all(axis=1))
    return constants.reshape(materials, -1), front.reshape(len(kinds), -1), real
