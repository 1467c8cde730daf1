"""Reflectance and transmittance of one stack at one wavelength with 50 digits: characteristic matrices in mpmath.

Written for these tests from M. Born, E. Wolf, Principles of Optics, section 1.6; shares nothing with the package.
"""

from __future__ import annotations

from collections.abc import Sequence

from mpmath import mp, mpc, mpf


def reflect(
    index: Sequence[complex], thickness_nm: Sequence[float], wavelength_nm: float, aoi_deg: float, polarisation: str
) -> tuple[float, float]:
    """R and T of media ``index`` (incident first, substrate last) with ``thickness_nm`` of the layers between them."""
    with mp.workdps(50):
        n = [mpc(x.real, x.imag) if isinstance(x, complex) else mpc(x) for x in index]
        sine = n[0] * mp.sin(mpf(aoi_deg) * mp.pi / 180)
        cosine = mp.mpf(0) if aoi_deg == 90 else mp.cos(mpf(aoi_deg) * mp.pi / 180)
        kz = [n[0] * cosine, *(_forward(mp.sqrt(x * x - sine * sine)) for x in n[1:])]
        tiny = mpf(10) ** -40
        kz = [x if abs(x) > tiny else mpc(tiny) for x in kz]
        eta = kz if polarisation == "s" else [x * x / k for x, k in zip(n, kz, strict=True)]
        b, c = mpc(1), eta[-1]
        for j in range(len(thickness_nm), 0, -1):
            delta = 2 * mp.pi * kz[j] * mpf(thickness_nm[j - 1]) / mpf(wavelength_nm)
            cos, sin = mp.cos(delta), mp.sin(delta)
            b, c = cos * b - 1j * sin / eta[j] * c, cos * c - 1j * eta[j] * sin * b
        below = abs(eta[0] * b + c) ** 2
        reflectance = abs(eta[0] * b - c) ** 2 / below
        transmittance = 4 * eta[0].real * eta[-1].real / below
        return float(reflectance), float(transmittance)


def _forward(kz: mpc) -> mpc:
    return -kz if kz.imag < 0 and abs(kz.real) < abs(kz.imag) * mpf(10) ** -30 else kz
