r"""A run folded into a small Chebyshev tensor, so that no evaluation walks through its samples again.

The end position is :math:`W\,G(a, b)` with :math:`a = k_L/W`, :math:`b = k_R/W`, and G is entire. Around a centre
:math:`(a_0, b_0)` write :math:`a = a_0(1 + s - \delta)`, :math:`b = b_0(1 + s + \delta)`. At a point of the path with
counts (L, R) the heading is :math:`(1 + s)p + \delta q` with :math:`p = b_0R - a_0L`, :math:`q = b_0R + a_0L`, and an
interval advances :math:`(1 + s)w + \delta h`, so

.. math:: G = (1 + s)\sum_j w_j e^{i(1+s)p_j}e^{i\delta q_j} + \delta\sum_j h_j e^{i(1+s)p_j}e^{i\delta q_j}

with two Gauss points per sample (error at most :math:`\alpha^4/4320` of the advance of a sample that turns by
:math:`\alpha`; samples that turn too far for the wanted error are cut). The phases separate, so the values on a tensor
grid of nodes are two matrix products. The Chebyshev coefficients of :math:`e^{izx}` on [-1, 1] are Bessel functions
:math:`J_k(z)`, which gives the degree for a wanted error and a bound on the error in advance. The box is as wide as
8 rad of phase allow, at most 8 % in s and 1 % in delta.

The heading is exactly linear in (a, b) and is not approximated. The rolling-noise covariance is kept at the centre:
it only weighs, so that its change over the box moves an estimate to second order.

References
----------
.. [1] Trefethen: Approximation Theory and Approximation Practice. SIAM 2013, chapters 4 and 8.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np
from scipy.special import jv

from registry.numerics.arrays import Complex, Float
from registry.numerics.rolling_noise import GAUSS_POINTS, noise_covariance

MAP_VERSION = 1

_PHASE_LIMIT_RAD = 8.0
_COMMON_LIMIT = 0.08
_DIFFERENCE_LIMIT = 0.01
_SAMPLE_TURN_LIMIT_RAD = 0.1
#: Error of two Gauss points on [0, 1] for a function whose fourth derivative is at most one.
_GAUSS_ERROR = 1.0 / 4320.0
#: Share of the wanted error that the Gauss points may take; the Chebyshev degrees get what is left.
_GAUSS_SHARE = 0.25
#: Samples are cut so many times in all, and no more: about a second's work.
_MAX_CUTS = 500_000
#: Samples whose phase factors are in memory at one time.
_CHUNK = 2048
#: Samples in one matrix product: so few that the linear algebra never splits it over threads, whose waiting for one
#: another costs more than the product on a busy machine.
_BLOCK = 64
#: Wanted bound on the error of the end position: a two-hundredth of a millimetre, far below any closure.
WANTED_ERROR_M = 5e-6
_HEADER = struct.Struct("<BBB5x16d")
#: Where each element of a symmetric (3, 3) matrix stands in its stored upper triangle.
_SYMMETRIC = np.array([[0, 1, 2], [1, 3, 4], [2, 4, 5]])


@dataclass(frozen=True)
class ClosureMap:
    """One folded run.

    Attributes
    ----------
    centre : (3,) float
        (k_L, k_R, W) at the middle of the box, metres.
    half_width : (2,) float
        Of the box in common and in difference change, relative.
    totals : (2,) float
        Net ticks left and right; the heading is exact from these.
    noise : (3, 3) float
        End pose covariance for q = 1 m at the centre.
    coefficients : (m, n) complex
        Chebyshev coefficients of G.
    error_m : float
        Bound on the error of the end position inside the box.
    """

    centre: Float
    half_width: Float
    totals: Float
    noise: Float
    coefficients: Complex
    error_m: float


def fold(left_ticks: Float, right_ticks: Float, centre: Float, wanted_error_m: float = WANTED_ERROR_M) -> ClosureMap:
    """Fold a run around a parameter set.

    Parameters
    ----------
    left_ticks, right_ticks : (n,) float
        Signed increments per sample.
    centre : (3,) float
        Metres per tick left and right, effective width in metres.
    wanted_error_m : float
        The degrees are the smallest whose error bound is below this.
    """
    centre = np.asarray(centre, dtype=np.float64)
    a, b, width = centre[0] / centre[2], centre[1] / centre[2], float(centre[2])
    moving = (left_ticks != 0) | (right_ticks != 0)
    left, right = a * left_ticks[moving], b * right_ticks[moving]
    half_width = _half_width(left, right)
    advance, turn = _largest(left, right, half_width)
    reach_m = width * float(advance.sum())
    parts = _parts(turn, reach_m, wanted_error_m)
    gauss_error_m = width * _GAUSS_ERROR * float((advance * (turn / parts) ** 4).sum())
    z_common, z_difference = half_width * _reaches(left, right)
    orders, error = _orders(z_common, z_difference, (wanted_error_m - gauss_error_m) / max(reach_m, 1e-12))
    common, difference = (_nodes(order) for order in orders)
    if float(parts.max(initial=1.0)) > 1.0:
        # The path does not depend on how the samples are cut.
        times = parts.astype(np.int64)
        left, right = np.repeat(left / parts, times), np.repeat(right / parts, times)
    values = _values(left, right, half_width[0] * common, half_width[1] * difference)
    return ClosureMap(
        centre=centre,
        half_width=half_width,
        totals=np.array([left_ticks.sum(), right_ticks.sum()]),
        noise=noise_covariance(left_ticks[moving], right_ticks[moving], centre),
        coefficients=_transform(orders[0]) @ values @ _transform(orders[1]).T,
        error_m=error * reach_m + gauss_error_m,
    )


def _reaches(left: Float, right: Float) -> Float:
    """The largest phases (2,) of the common and of the difference change anywhere along the path, radians."""
    return np.array([np.abs(np.cumsum(phase)).max(initial=0.0) for phase in (right - left, right + left)])


def _half_width(left: Float, right: Float) -> Float:
    """Half widths (2,) of the box: as wide as the phase limit allows."""
    return np.minimum([_COMMON_LIMIT, _DIFFERENCE_LIMIT], _PHASE_LIMIT_RAD / np.maximum(_reaches(left, right), 1e-12))


def _largest(left: Float, right: Float, half_width: Float) -> tuple[Float, Float]:
    """The largest advance (over the width) and turn of every sample anywhere in the box."""
    double_advance, turn = np.abs(right + left), np.abs(right - left)
    common, difference = 1.0 + half_width[0], half_width[1]
    return 0.5 * (common * double_advance + difference * turn), common * turn + difference * double_advance


def _parts(turn: Float, reach_m: float, wanted_error_m: float) -> Float:
    """Into how many parts each sample is cut, so that two Gauss points a part are enough."""
    limit = min(_SAMPLE_TURN_LIMIT_RAD, (_GAUSS_SHARE * wanted_error_m / (_GAUSS_ERROR * max(reach_m, 1e-12))) ** 0.25)
    return np.asarray(np.maximum(1.0, np.ceil(turn / limit)))


def is_foldable(left_ticks: Float, right_ticks: Float, centre: Float) -> bool:
    """Whether :func:`fold` would take these counts in reasonable time.

    A step of a broken counter may turn the vehicle thousands of times between two samples; cutting it into small
    turns would take minutes and say nothing.
    """
    centre = np.asarray(centre, dtype=np.float64)
    left, right = centre[0] / centre[2] * left_ticks, centre[1] / centre[2] * right_ticks
    advance, turn = _largest(left, right, _half_width(left, right))
    parts = _parts(turn, float(centre[2]) * float(advance.sum()), WANTED_ERROR_M)
    return bool(float((parts - 1.0).sum()) <= _MAX_CUTS)


def _nodes(order: int) -> Float:
    return np.cos(np.pi * (np.arange(order) + 0.5) / order)


def _transform(order: int) -> Float:
    """Matrix (order, order) from values at the nodes to Chebyshev coefficients."""
    degree = np.arange(order)[:, None]
    matrix = 2.0 / order * np.cos(np.pi * degree * (np.arange(order)[None, :] + 0.5) / order)
    matrix[0] *= 0.5
    return matrix


def _orders(z_common: float, z_difference: float, wanted: float) -> tuple[tuple[int, int], float]:
    """Numbers of nodes for two phases and the relative error bound they give.

    Interpolation at N nodes errs by at most twice the tail of the coefficients from N on; the linear factor in front
    of the exponential moves the tail by one. A tensor errs by the first direction's error plus the second's times the
    Lebesgue constant of the first.
    """
    degrees = np.arange(1, 61)
    tails = []
    for z in (z_common, z_difference):
        coefficient = 2.0 * np.abs(jv(np.arange(0, 100), z))
        tail = np.cumsum(coefficient[::-1])[::-1]
        tails.append(2.0 * tail[np.maximum(degrees - 1, 0)])
    lebesgue = 1.0 + 2.0 / np.pi * np.log(degrees + 1.0)
    first = int(np.argmax(tails[0] <= 0.5 * wanted)) if np.any(tails[0] <= 0.5 * wanted) else degrees.size - 1
    second_tail = lebesgue[first] * tails[1]
    second = int(np.argmax(second_tail <= 0.5 * wanted)) if np.any(second_tail <= 0.5 * wanted) else degrees.size - 1
    return (int(degrees[first]), int(degrees[second])), float(tails[0][first] + second_tail[second])


def _values(left: Float, right: Float, common: Float, difference: Float) -> Complex:
    """G on the tensor grid of nodes, in chunks of samples so that the memory does not grow with the run."""
    weighted = np.zeros((2, common.size, difference.size), dtype=np.complex128)
    p_before = q_before = 0.0
    for begin in range(0, left.size, _CHUNK):
        turn = right[begin : begin + _CHUNK] - left[begin : begin + _CHUNK]
        double_advance = right[begin : begin + _CHUNK] + left[begin : begin + _CHUNK]
        p_end, q_end = p_before + np.cumsum(turn), q_before + np.cumsum(double_advance)
        p = _blocks([p_end + (point - 1.0) * turn for point in GAUSS_POINTS])
        q = _blocks([q_end + (point - 1.0) * double_advance for point in GAUSS_POINTS])
        phases = _phase_factors(p, common) * np.exp(1j * p)
        turning = _phase_factors(q, difference).transpose(0, 2, 1)
        # Half the weight for each of the two Gauss points.
        for index, weight in enumerate((0.25 * double_advance, 0.25 * turn)):
            weighted[index] += ((phases * _blocks([weight, weight])) @ turning).sum(axis=0)
        p_before, q_before = float(p_end[-1]), float(q_end[-1])
    return np.asarray((1.0 + common)[:, None] * weighted[0] + difference[None, :] * weighted[1])


def _blocks(parts: list[Float]) -> Float:
    """Arrays end to end, (blocks, 1, samples in a block), filled up with zeros that carry no weight."""
    size = sum(part.size for part in parts)
    padded = np.zeros(-(-size // _BLOCK) * _BLOCK)
    np.concatenate(parts, out=padded[:size])
    return padded.reshape(-1, 1, _BLOCK)


def _phase_factors(phase: Float, nodes: Float) -> Complex:
    """exp(i node phase), (blocks, nodes, samples). The nodes are symmetric, so half of them are conjugates of the other
    half.
    """
    count = nodes.size
    half = (count + 1) // 2
    angle = nodes[None, :half, None] * phase
    result = np.empty((phase.shape[0], count, phase.shape[2]), dtype=np.complex128)
    np.cos(angle, out=result.real[:, :half])
    np.sin(angle, out=result.imag[:, :half])
    np.conj(result[:, : count // 2][:, ::-1], out=result[:, half:])
    return result


def encode(item: ClosureMap) -> bytes:
    """A map as bytes: version, shape, then centre, box, totals, noise (upper triangle), bound and coefficients,
    little-endian.
    """
    rows, columns = item.coefficients.shape
    upper = item.noise[np.triu_indices(3)]
    numbers = [*item.centre, *item.half_width, *item.totals, *upper, item.error_m, 0.0, 0.0]
    return (
        _HEADER.pack(MAP_VERSION, rows, columns, *numbers) + np.ascontiguousarray(item.coefficients, "<c16").tobytes()
    )


def decode(blob: bytes) -> ClosureMap:
    """The inverse of :func:`encode`.

    Raises
    ------
    ValueError
        When the bytes are not a map of this version.
    """
    if len(blob) < _HEADER.size or blob[0] != MAP_VERSION:
        raise ValueError(f"not a closure map of version {MAP_VERSION}")
    rows, columns = blob[1], blob[2]
    if rows * columns == 0 or len(blob) != _HEADER.size + 16 * rows * columns:
        raise ValueError("a closure map of the wrong length")
    if not np.isfinite(np.frombuffer(blob, "<f8", offset=8)).all():
        raise ValueError("a closure map with numbers that are not finite")
    numbers = np.frombuffer(blob, "<f8", 16, offset=8)
    coefficients = np.frombuffer(blob, "<c16", offset=_HEADER.size).reshape(rows, columns)
    return ClosureMap(
        centre=numbers[:3],
        half_width=numbers[3:5],
        totals=numbers[5:7],
        noise=numbers[7:13][_SYMMETRIC],
        coefficients=coefficients,
        error_m=float(numbers[13]),
    )
