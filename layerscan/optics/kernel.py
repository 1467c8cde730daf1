"""The arithmetic of the transfer calculation: plain loops that the compiler turns into vector code. No input checks.

The recursion carries the tangential fields (B, C) from the substrate to the incident medium,
``B' = cos(delta) B - i sin(delta)/eta C`` and ``C' = cos(delta) C - i eta sin(delta) B`` with ``delta = 2 pi kz d``
(exp(-iwt), n + ik), scaled so that nothing overflows. A tile of wavelengths lives in two buffers, one that is only
read and one that is written, with rows ``STRIDE`` apart. Phases are counted in half-turns: a whole half-turn changes
the sign of B and C together, which no reflectance sees, and taking it away is exact.

Wavelengths are the inner loop throughout, so that eight of them fit one vector instruction.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from llvmlite import ir  # type: ignore[import-untyped]
from numba import njit, types
from numba.extending import intrinsic

STRIDE = 144  # wavelengths in a tile: whole vectors, and 1152 bytes is no multiple of a memory page
LANES = 8  # tiles are padded to a multiple of this many
RENORMALISE = 24  # layers between two renormalisations
THICK = 50.0  # half-turns beyond which the phase is formed in two parts

# Rows of a tile of optical constants, per material: 2 kz/lambda in half-turns per nm, the same as its first 26 bits and
# the rest, decay of the power per nm, then for each of two polarisations the admittance and its reciprocal.
RATE, RATE_HIGH, RATE_LOW, DECAY_RATE, ETA = 0, 1, 2, 3, 4
ETA_ROWS = 4  # eta re, eta im, 1/eta re, 1/eta im
CONSTANT_ROWS = ETA + 2 * ETA_ROWS
# Rows of a tile of state: phase of the layer at hand, then for each polarisation B, C and the attenuation.
COS_RE, COS_IM, SIN_RE, SIN_IM, DECAY, FIELD = 0, 1, 2, 3, 4, 5
FIELD_ROWS = 5
STATE_ROWS = FIELD + 2 * FIELD_ROWS

# Interpolation at Chebyshev nodes, computed with 60 digits: sin(pi x)/x and cos(pi x) in x^2 for |x| <= 1/2 (errors
# 1.2e-16 and 1.0e-16), (exp(r) - 1 - r)/r^2 for |r| <= ln(2)/2 (error below 1e-16).
S0, S1, S2, S3, S4 = 3.141592653589793, -5.167712780049969, 2.5501640398773007, -0.5992645293189447, 0.0821458865731029
S5, S6, S7, S8 = -0.007370430505916944, 0.0004662998161898394, -2.1903497074626018e-05, 7.697826768224191e-07
C0, C1, C2, C3, C4 = 1.0, -4.934802200544676, 4.058712126416497, -1.335262768843447, 0.23533063012953284
C5, C6, C7, C8 = -0.025806888737002202, 0.0019295562724817132, -0.00010456655338748738, 4.149564353942586e-06
E0, E1, E2, E3, E4 = 0.5, 0.16666666666666669, 0.041666666666624164, 0.008333333333330065, 0.0013888888917196719
E5, E6, E7 = 0.00019841269863040545, 2.4801521322368692e-05, 2.7557268480310024e-06
E8, E9 = 2.7620075879983367e-07, 2.5100375832561234e-08
LOG2_E = 1.4426950408889634
LN2_HIGH, LN2_LOW = 0.6931471803691238, 1.9082149292705877e-10  # k * LN2_HIGH is exact for |k| < 2^20
SHIFTER = 6755399441055744.0  # 1.5 * 2^52: adding it rounds to an integer and leaves that in the low bits
EXP_MIN = -708.0
FLUX_FROM = 0.01  # transmittance from which on it is taken from the flux at the front
SPLITTER = 134217729.0  # 2^27 + 1 cuts a number into two of at most 26 bits (Dekker, Numer. Math. 18, 224, 1971)

# fused multiply-add, but nothing that reorders or assumes finite numbers
OPTIONS: dict[str, Any] = {"error_model": "numpy", "fastmath": {"contract"}}


def compile_cached(*signature: Any) -> Any:
    """``numba.njit`` with its cache on disk, or without where no folder can be written.

    The cache lies beside this file, or in the user's cache folder where that cannot be written; ``NUMBA_CACHE_DIR``
    moves it.
    """
    options: dict[str, Any] = {"nogil": True, **OPTIONS}

    def decorate(function: Any) -> Any:
        try:
            return njit(*signature, **{"cache": True, **options})(function)
        except (RuntimeError, OSError):  # neither folder can be written, or the disk is full
            return njit(*signature, **options)(function)

    return decorate


@intrinsic  # type: ignore[untyped-decorator]
def _power_of_two(typing_context: Any, shifted: Any) -> Any:
    """2^k from ``k + SHIFTER``: k moved from the low bits into the exponent."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        bits = builder.bitcast(args[0], ir.IntType(64))
        exponent = builder.add(builder.shl(bits, ir.Constant(bits.type, 52)), ir.Constant(bits.type, 1023 << 52))
        return builder.bitcast(exponent, args[0].type)

    return types.float64(types.float64), generate


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _sin(x: float, z: float) -> float:
    p = S8 * z + S7
    p = p * z + S6
    p = p * z + S5
    p = p * z + S4
    p = p * z + S3
    p = p * z + S2
    p = p * z + S1
    return (p * z + S0) * x


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _cos(z: float) -> float:
    p = C8 * z + C7
    p = p * z + C6
    p = p * z + C5
    p = p * z + C4
    p = p * z + C3
    p = p * z + C2
    p = p * z + C1
    return p * z + C0


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _expm1(y: float) -> float:
    """exp(y) - 1 for EXP_MIN <= y <= 0."""
    shifted = y * LOG2_E + SHIFTER
    k = shifted - SHIFTER
    r = (y - k * LN2_HIGH) - k * LN2_LOW
    p = E9 * r + E8
    p = p * r + E7
    p = p * r + E6
    p = p * r + E5
    p = p * r + E4
    p = p * r + E3
    p = p * r + E2
    p = p * r + E1
    p = p * r + E0
    power: float = _power_of_two(shifted)  # type: ignore[call-arg]
    return power * (p * r * r + r) + (power - 1.0)


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _row(buffer: Any, start: int) -> Any:
    return buffer[start : start + STRIDE]


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _turn(constants: Any, state: Any, count: int, thickness: float) -> None:
    """Cosine and sine of the real part of a layer's phase."""
    rate = _row(constants, RATE * STRIDE)
    cos, sin = _row(state, COS_RE * STRIDE), _row(state, SIN_RE * STRIDE)
    for i in range(count):
        x = rate[i] * thickness
        x -= np.rint(x)
        z = x * x
        cos[i] = _cos(z)
        sin[i] = _sin(x, z)


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _turn_thick(constants: Any, state: Any, count: int, thickness: float) -> None:
    """The same for many half-turns: rate and thickness are split so that the large product is exact."""
    high, low = _row(constants, RATE_HIGH * STRIDE), _row(constants, RATE_LOW * STRIDE)
    cos, sin = _row(state, COS_RE * STRIDE), _row(state, SIN_RE * STRIDE)
    scaled = thickness * SPLITTER
    thick_high = scaled - (scaled - thickness)
    thick_low = thickness - thick_high
    for i in range(count):
        x = high[i] * thick_high
        x -= np.rint(x)
        x += high[i] * thick_low + low[i] * thickness
        x -= np.rint(x)
        z = x * x
        cos[i] = _cos(z)
        sin[i] = _sin(x, z)


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _damp(constants: Any, state: Any, count: int, thickness: float) -> None:
    """Make cosine and sine complex, both times the decay of the amplitude, and keep the square of that decay."""
    rate = _row(constants, DECAY_RATE * STRIDE)
    c_re, c_im = _row(state, COS_RE * STRIDE), _row(state, COS_IM * STRIDE)
    s_re, s_im = _row(state, SIN_RE * STRIDE), _row(state, SIN_IM * STRIDE)
    decay = _row(state, DECAY * STRIDE)
    for i in range(count):
        c, s = c_re[i], s_re[i]
        y = -abs(rate[i]) * thickness
        lost = _expm1(max(y, EXP_MIN))
        cosh = 1.0 + 0.5 * lost
        sinh = -0.5 * lost if rate[i] > 0.0 else 0.5 * lost
        c_re[i] = c * cosh
        c_im[i] = -s * sinh
        s_re[i] = s * cosh
        s_im[i] = c * sinh
        decay[i] = 1.0 + lost if y > EXP_MIN else 0.0


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _advance_real(constants: Any, eta: int, state: Any, field: int, count: int) -> None:
    """Carry the fields through a layer with real kz: two real rotations."""
    admittance, reciprocal = _row(constants, eta), _row(constants, eta + 2 * STRIDE)
    cos, sin = _row(state, COS_RE * STRIDE), _row(state, SIN_RE * STRIDE)
    b_re, b_im = _row(state, field), _row(state, field + STRIDE)
    c_re, c_im = _row(state, field + 2 * STRIDE), _row(state, field + 3 * STRIDE)
    for i in range(count):
        c = cos[i]
        up = sin[i] * admittance[i]
        down = sin[i] * reciprocal[i]
        br, bi, cr, ci = b_re[i], b_im[i], c_re[i], c_im[i]
        b_re[i] = c * br + down * ci
        b_im[i] = c * bi - down * cr
        c_re[i] = c * cr + up * bi
        c_im[i] = c * ci - up * br


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _advance_complex(constants: Any, eta: int, state: Any, field: int, count: int) -> None:
    """Carry the fields through a layer with complex kz."""
    e_re, e_im = _row(constants, eta), _row(constants, eta + STRIDE)
    v_re, v_im = _row(constants, eta + 2 * STRIDE), _row(constants, eta + 3 * STRIDE)
    cos_re, cos_im = _row(state, COS_RE * STRIDE), _row(state, COS_IM * STRIDE)
    sin_re, sin_im = _row(state, SIN_RE * STRIDE), _row(state, SIN_IM * STRIDE)
    decay, kept = _row(state, DECAY * STRIDE), _row(state, field + 4 * STRIDE)
    b_re, b_im = _row(state, field), _row(state, field + STRIDE)
    c_re, c_im = _row(state, field + 2 * STRIDE), _row(state, field + 3 * STRIDE)
    for i in range(count):
        cr, ci, sr, si = cos_re[i], cos_im[i], sin_re[i], sin_im[i]
        up_re = sr * e_im[i] + si * e_re[i]  # -i sin eta
        up_im = si * e_im[i] - sr * e_re[i]
        down_re = sr * v_im[i] + si * v_re[i]  # -i sin / eta
        down_im = si * v_im[i] - sr * v_re[i]
        br, bi, hr, hi = b_re[i], b_im[i], c_re[i], c_im[i]
        b_re[i] = (cr * br - ci * bi) + (down_re * hr - down_im * hi)
        b_im[i] = (cr * bi + ci * br) + (down_re * hi + down_im * hr)
        c_re[i] = (cr * hr - ci * hi) + (up_re * br - up_im * bi)
        c_im[i] = (cr * hi + ci * hr) + (up_re * bi + up_im * br)
        kept[i] *= decay[i]


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _renormalise(state: Any, field: int, count: int) -> None:
    """Bring the fields back to order one and book the factor in the attenuation."""
    kept = _row(state, field + 4 * STRIDE)
    b_re, b_im = _row(state, field), _row(state, field + STRIDE)
    c_re, c_im = _row(state, field + 2 * STRIDE), _row(state, field + 3 * STRIDE)
    for i in range(count):
        factor = 1.0 / (abs(b_re[i]) + abs(b_im[i]) + abs(c_re[i]) + abs(c_im[i]))
        b_re[i] *= factor
        b_im[i] *= factor
        c_re[i] *= factor
        c_im[i] *= factor
        kept[i] *= factor * factor


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _start(constants: Any, eta: int, state: Any, field: int, count: int) -> None:
    """At the substrate B = 1 and C = eta; the attenuation starts as four times the real part of eta."""
    e_re, e_im = _row(constants, eta), _row(constants, eta + STRIDE)
    kept = _row(state, field + 4 * STRIDE)
    b_re, b_im = _row(state, field), _row(state, field + STRIDE)
    c_re, c_im = _row(state, field + 2 * STRIDE), _row(state, field + 3 * STRIDE)
    for i in range(count):
        b_re[i] = 1.0
        b_im[i] = 0.0
        c_re[i] = e_re[i]
        c_im[i] = e_im[i]
        kept[i] = 4.0 * e_re[i]


@njit(**OPTIONS)  # type: ignore[untyped-decorator]
def _finish(front: Any, state: Any, field: int, lossless: bool, amplitude: bool, first: Any, second: Any) -> None:
    """From the fields at the front: R and T, or real and imaginary part of the reflected amplitude.

    The admittance of the incident medium is front[0]/front[1], so that it may be infinite. Without loss the flux at
    the front is the transmitted one; taking it there keeps R + T = 1 however many layers there are. Where little is
    transmitted it would come out of a difference, and the attenuation booked on the way is the better one.
    """
    top, bottom = _row(front, 0), _row(front, STRIDE)
    kept = _row(state, field + 4 * STRIDE)
    b_re, b_im = _row(state, field), _row(state, field + STRIDE)
    c_re, c_im = _row(state, field + 2 * STRIDE), _row(state, field + 3 * STRIDE)
    for i in range(first.size):
        br, bi = b_re[i] * top[i], b_im[i] * top[i]
        cr, ci = c_re[i] * bottom[i], c_im[i] * bottom[i]
        sum_re, sum_im, rest_re, rest_im = br + cr, bi + ci, br - cr, bi - ci
        forward = sum_re * sum_re + sum_im * sum_im
        if amplitude:
            first[i] = (rest_re * sum_re + rest_im * sum_im) / forward
            second[i] = (rest_im * sum_re - rest_re * sum_im) / forward
        else:
            first[i] = (rest_re * rest_re + rest_im * rest_im) / forward
            flux = 4.0 * (br * cr + bi * ci) / forward
            booked = top[i] * bottom[i] * kept[i] / forward
            second[i] = flux if lossless and flux > FLUX_FROM else booked


@compile_cached(  # type: ignore[untyped-decorator]
    "void(float64[:,::1], float64[:,::1], boolean[::1], int64[:,::1], float64[:,::1], int64[::1], int64[::1], int64,"
    " int64, int64, int64, boolean, float64[:,:,:,::1], float64[:,:,:,::1])"
)
def run_tile(
    constants: Any,
    front: Any,
    real: Any,
    sequence: Any,
    thickness: Any,
    rows: Any,
    source: Any,
    angle: int,
    start: int,
    stop: int,
    count: int,
    amplitude: bool,
    first: Any,
    second: Any,
) -> None:
    """Reflectance and transmittance (or the amplitude's parts) of stacks over one tile of wavelengths at one angle.

    ``constants`` is (materials, rows x STRIDE), ``front`` (polarisations, 2 STRIDE); ``real`` says which materials
    have real kz over the whole tile. ``count`` wavelengths are calculated, padding included; results go to
    ``first`` and ``second``, (stacks, angles, polarisations, wavelengths), at ``rows``, ``angle`` and start to stop;
    ``source`` says which calculated polarisation each one there takes.
    """
    polarisations = front.shape[0]
    state = np.zeros(STATE_ROWS * STRIDE)
    layers = thickness.shape[1]
    for stack in range(sequence.shape[0]):
        lossless = True
        substrate = constants[sequence[stack, layers + 1]]
        for p in range(polarisations):
            _start(substrate, (ETA + p * ETA_ROWS) * STRIDE, state, (FIELD + p * FIELD_ROWS) * STRIDE, count)
        for step in range(layers):
            d = thickness[stack, layers - 1 - step]
            if d == 0.0:
                continue
            medium = sequence[stack, layers - step]
            own = constants[medium]
            if own[0] * d > THICK or own[count - 1] * d > THICK:
                _turn_thick(own, state, count, d)
            else:
                _turn(own, state, count, d)
            if not real[medium]:
                lossless = False
                _damp(own, state, count, d)
            for p in range(polarisations):
                eta, field = (ETA + p * ETA_ROWS) * STRIDE, (FIELD + p * FIELD_ROWS) * STRIDE
                if real[medium]:
                    _advance_real(own, eta, state, field, count)
                else:
                    _advance_complex(own, eta, state, field, count)
                if step % RENORMALISE == RENORMALISE - 1:
                    _renormalise(state, field, count)
        row = rows[stack]
        for q in range(source.size):
            _finish(
                front[source[q]],
                state,
                (FIELD + source[q] * FIELD_ROWS) * STRIDE,
                lossless,
                amplitude,
                first[row, angle, q, start:stop],
                second[row, angle, q, start:stop],
            )
