"""How a tube of radius r is imaged: slab, cylinder and absorber under blur; arrays only.

A tube across its axis is seen as its light path (`cylinder`: proportional to the chord; `absorber`: what the chord
absorbs; `slab`: constant across the lumen), blurred by a Gaussian that holds the optics, the pixel and the sampling.
All three are one family of the absorption coefficient mu: infinite, 0, and between.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from scipy import fft
from scipy.interpolate import CubicSpline
from scipy.special import ndtr

from vasohm.arrays import Float32Array, FloatArray, IntArray, freeze

PHASES = 8  # table positions a pixel; the cubic between them errs by < 2e-5 of contrast for blur >= 0.45 px
TAIL = 6.0  # standard deviations beyond which blur is nothing
LAYERS_PER_PX = 16  # grid onto which the layers of a tube are spread
XI_STEP = 0.25  # of xi = sqrt(1 + (r/s)^2) - 1, linear in r^2 when thin and in r when wide
PIXEL_VARIANCE = 1.0 / 12.0  # of a unit pixel projected on any direction
# of cubic and quintic splines, measured on rotated sharp edges at these blurs
SPLINE_PSF_PX = (0.3, 0.5, 0.7, 1.0, 1.5, 3.0)
SPLINE_VARIANCE = {3: (0.035, 0.023, 0.013, 0.007, 0.003, 0.0), 5: (0.018, 0.012, 0.005, 0.002, 0.001, 0.0)}
THINNEST_PX = 0.05  # no image tells thinner vessels apart; also keeps exp() of a failing fit finite


@dataclass(frozen=True, slots=True)
class Optics:
    """How the image shows a tube: family, absorption per pixel, and the standard deviation of all blur in pixels."""

    family: str
    mu_per_px: float  # absorber only; 0 elsewhere
    s_px: float


@dataclass(frozen=True, slots=True, eq=False)
class ProfileTable:
    """Blurred profiles of unit area on a grid of radius and position, ready for bicubic interpolation.

    `cells` is flat float32 over (xi, phase, channel, x): channels are p, dp/dxi, dp/dx, d2p/dxi dx; x runs in whole
    pixels from -half_px, shifted by phase / PHASES.
    """

    optics: Optics
    radius_max_px: float
    half_px: int
    n_xi: int
    cells: Float32Array

    def __post_init__(self) -> None:
        freeze(self)


def total_blur_px(psf_px: float, order: int = 3) -> float:
    """Return the blur seen in strips sampled by a spline of this order: optics, pixel, and the sampling itself."""
    return float(np.sqrt(psf_px**2 + PIXEL_VARIANCE + spline_variance(psf_px, order)))


def optical_blur_px(s_px: float, order: int = 3) -> float:
    """Return the blur of the optics alone, the inverse of `total_blur_px` (0 where the pixel explains it all)."""
    psf = np.sqrt(max(s_px**2 - PIXEL_VARIANCE, 0.0))
    for _ in range(20):
        psf = np.sqrt(max(s_px**2 - PIXEL_VARIANCE - spline_variance(float(psf), order), 0.0))
    return float(psf)


def spline_variance(psf_px: float, order: int) -> float:
    """Return the variance (px^2) that sampling by a spline adds to an image blurred by `psf_px` and the pixel."""
    return float(np.interp(psf_px, SPLINE_PSF_PX, SPLINE_VARIANCE[order]))


# --- area and height of a tube of unit contrast ---------------------------------------------------------------------


def ln_area(optics: Optics, ln_r: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return ln K and d ln K / d ln r, K the area under the profile of unit contrast.

    K = 2 r (slab), pi r^2 (cylinder), r kappa(2 mu r) with kappa(t) = pi (I1(t) - L1(t)), modified Bessel and
    Struve functions, for the absorber.
    """
    if optics.family == "slab":
        return np.log(2.0) + ln_r, np.ones_like(ln_r)
    if optics.family == "cylinder":
        return np.log(np.pi) + 2.0 * ln_r, np.full_like(ln_r, 2.0)
    ln_tau, ln_kappa, slope = _absorbed_area()
    where = np.log(2.0 * optics.mu_per_px) + ln_r
    return ln_r + np.interp(where, ln_tau, ln_kappa), 1.0 + np.interp(where, ln_tau, slope)


def ln_height(optics: Optics, ln_r: FloatArray) -> FloatArray:
    """Return the logarithm of the unblurred profile's central height at unit contrast."""
    if optics.family == "slab":
        return np.zeros_like(ln_r)
    if optics.family == "cylinder":
        return np.log(2.0) + ln_r
    return np.log(-np.expm1(-2.0 * optics.mu_per_px * np.exp(ln_r)))


def height_slope(optics: Optics, ln_r: FloatArray) -> FloatArray:
    """Return the derivative of `ln_height` by ln r."""
    if optics.family == "slab":
        return np.zeros_like(ln_r)
    if optics.family == "cylinder":
        return np.ones_like(ln_r)
    tau = 2.0 * optics.mu_per_px * np.exp(ln_r)
    return np.asarray(tau / np.expm1(tau))


def photometric_ln_radius(optics: Optics, ln_k: FloatArray) -> FloatArray:
    """Return the ln r whose tube of unit contrast has the area exp(`ln_k`)."""
    grid = np.linspace(np.log(THINNEST_PX), np.log(1e4), 1200)
    return np.interp(ln_k, ln_area(optics, grid)[0], grid)


@lru_cache(maxsize=1)
def _absorbed_area() -> tuple[FloatArray, FloatArray, FloatArray]:
    """Ln tau, ln kappa(tau) and the slope of the one over the other."""
    angle, weight = _quadrature(400)
    ln_tau = np.linspace(np.log(1e-6), np.log(1e3), 2200)
    absorbed = -np.expm1(-np.exp(ln_tau)[:, None] * np.sin(angle))
    ln_kappa = np.log(2.0 * absorbed @ (weight * np.sin(angle)))
    return ln_tau, ln_kappa, np.gradient(ln_kappa, ln_tau)


@lru_cache(maxsize=8)
def _quadrature(n: int) -> tuple[FloatArray, FloatArray]:
    node, weight = np.polynomial.legendre.leggauss(n)
    return (node + 1.0) * (np.pi / 4.0), weight * (np.pi / 4.0)


# --- the table ------------------------------------------------------------------------------------------------------


@lru_cache(maxsize=12)
def profile_table(optics: Optics, radius_max_px: float, half_px: int) -> ProfileTable:
    """Tabulate blurred profiles for radii up to `radius_max_px` and positions up to `half_px` from the axis."""
    s = optics.s_px
    n_xi = int(np.ceil((np.hypot(1.0, radius_max_px / s) - 1.0) / XI_STEP)) + 2
    xi = XI_STEP * np.arange(n_xi)
    radius = s * np.sqrt((1.0 + xi) ** 2 - 1.0)
    x = np.arange((half_px + 1) * PHASES + 1) / PHASES
    weights = _layer_weights(optics, radius[1:])
    value, slope = _blur_layers(weights, x, s)
    first = np.exp(-0.5 * (x / s) ** 2) / (s * np.sqrt(2.0 * np.pi))
    value = np.vstack([first, value])
    slope = np.vstack([-first * x / s**2, slope])
    value, slope = np.stack([np.stack([whole, _xi_slope(n_xi) @ whole], axis=1) for whole in (value, slope)])
    by_x = np.concatenate([value, slope], axis=1).astype(np.float32)
    mirrored = by_x[:, :, :0:-1] * np.array([1, 1, -1, -1], np.float32)[:, None]
    fine = np.concatenate([mirrored, by_x], axis=2)[:, :, PHASES:]
    n_x = 2 * half_px + 1
    cells = np.stack([fine[:, :, k::PHASES][:, :, :n_x] for k in range(PHASES + 1)], axis=1)
    return ProfileTable(optics, radius_max_px, half_px, n_xi, cells.ravel())


def _layer_weights(optics: Optics, radius: FloatArray) -> FloatArray:
    """Spread the layers of each tube of unit area onto a grid of half-widths: (n_radii, n_layers).

    A tube is a sum of slabs of half-width r cos(phi). Cubic Lagrange weights keep the first three moments; a
    layer is odd in its half-width, so what falls below zero comes back with the other sign.
    """
    if optics.family == "slab":
        half_width, height = radius[:, None], np.ones((len(radius), 1))
    else:
        n_nodes = int(min(400, 64 * np.ceil((24 + 5 * radius[-1] / optics.s_px) / 64)))
        angle, weight = _quadrature(n_nodes)
        half_width = radius[:, None] * np.cos(angle)
        tau = 2.0 * optics.mu_per_px * radius[:, None]
        height = weight * np.cos(angle) * np.exp(-tau * np.sin(angle))
    height = height / (2.0 * np.sum(height * half_width, axis=1, keepdims=True))
    place = half_width * LAYERS_PER_PX
    low = np.floor(place)
    t = place - low
    lagrange = (
        -t * (t - 1) * (t - 2) / 6,
        (t + 1) * (t - 1) * (t - 2) / 2,
        -(t + 1) * t * (t - 2) / 2,
        (t + 1) * t * (t - 1) / 6,
    )
    n_layers = int(np.ceil(radius[-1] * LAYERS_PER_PX)) + 4
    row = np.arange(len(radius))[:, None] * n_layers
    spread = np.zeros(len(radius) * n_layers)
    for k, share in enumerate(lagrange):
        at = low + (k - 1)
        sign = np.where(at < 0, -1.0, 1.0)
        index = (row + np.abs(at)).astype(np.int64)
        spread += np.bincount(index.ravel(), (sign * share * height).ravel(), len(spread))
    return spread.reshape(len(radius), n_layers)


def _blur_layers(weights: FloatArray, x: FloatArray, s: float) -> tuple[FloatArray, FloatArray]:
    """Blurred profiles and their slopes at x >= 0, from the weights of the layers.

    A sum of slabs is a staircase: the profile is its convolution with the blur's share of each step's width, the
    slope that of the layers' edges with the blur itself.
    """
    reach = int(np.ceil(TAIL * s * LAYERS_PER_PX))
    share = np.diff(ndtr(np.arange(-reach - 1, reach + 2) / (LAYERS_PER_PX * s)))[None]
    u = np.arange(-reach, reach + 1) / (LAYERS_PER_PX * s)
    bell = (np.exp(-0.5 * u**2) / (s * np.sqrt(2.0 * np.pi)))[None]
    high = np.cumsum(weights[:, ::-1], axis=1)[:, ::-1]
    stairs = np.concatenate([high[:, :0:-1], high[:, 1:]], axis=1)
    edges = np.concatenate([weights[:, :0:-1], 0 * weights[:, :1], -weights[:, 1:]], axis=1)
    value, slope = _convolved(stairs, share), _convolved(edges, bell)
    first, step = weights.shape[1] - 1 + reach, LAYERS_PER_PX // PHASES
    value, slope = value[:, first::step][:, : len(x)], slope[:, first::step][:, : len(x)]
    beyond = ((0, 0), (0, len(x) - value.shape[1])), ((0, 0), (0, len(x) - slope.shape[1]))
    return np.pad(value, beyond[0]), np.pad(slope, beyond[1])


def _convolved(rows: FloatArray, kernel: FloatArray) -> FloatArray:
    """Convolve every row with one kernel (1, k), at full length."""
    full = rows.shape[1] + kernel.shape[1] - 1
    n = fft.next_fast_len(full, real=True)
    return np.asarray(fft.irfft(fft.rfft(rows, n) * fft.rfft(kernel, n), n)[:, :full])


@lru_cache(maxsize=16)
def _xi_slope(n_xi: int) -> FloatArray:
    """Matrix (n_xi, n_xi) from values on the grid of xi to the slopes there of the cubic spline through them."""
    xi = XI_STEP * np.arange(n_xi)
    slope: FloatArray = CubicSpline(xi, np.eye(n_xi), axis=0)(xi, 1)
    return slope


# --- looking up -----------------------------------------------------------------------------------------------------


def tube_strips(
    table: ProfileTable, half_width: int, ln_r: FloatArray, ln_contrast: FloatArray, offset: FloatArray
) -> Float32Array:
    """Return model strips at x = -half_width..half_width and their derivatives.

    Parameters
    ----------
    half_width : samples on each side, 1 px apart.
    ln_r, ln_contrast, offset : (n,) ln of the radius in px, ln of the contrast, position of the axis in px.

    Returns
    -------
    (n, 3, 2 half_width + 1) float32: the strip, its derivative by ln r, its derivative by the offset.
    """
    place = _place(table, ln_r, np.clip(-half_width - offset + table.half_px, 0.0, 2.0 * (table.half_px - half_width)))
    radial, radial_slope = _hermite(place.in_xi, XI_STEP)
    across, across_slope = _hermite(place.in_x, 1.0 / PHASES)
    ln_k, dln_k = ln_area(table.optics, place.ln_r)
    area = np.exp(ln_k + ln_contrast)
    weights = np.empty((3, 16, len(area)))
    weights[0] = _outer(area * radial, across)
    weights[1] = _outer(area * place.xi_slope * radial_slope, across)
    weights[1] += dln_k * weights[0]
    weights[2] = _outer(-area * radial, across_slope)
    windows = sliding_window_view(table.cells, 2 * half_width + 1)
    rows: Float32Array = windows[place.corners]
    return np.matmul(np.ascontiguousarray(weights.transpose(2, 0, 1), np.float32), rows)


def tube_light(table: ProfileTable, ln_r: FloatArray, ln_contrast: FloatArray, x: FloatArray) -> FloatArray:
    """Light (n,) of tubes at the distances x (n,) px from their axes; beyond the table that at its border."""
    place = _place(table, ln_r, np.clip(x + table.half_px, 1.0, 2.0 * table.half_px - 1.0))
    radial, across = _hermite(place.in_xi, XI_STEP)[0], _hermite(place.in_x, 1.0 / PHASES)[0]
    light: FloatArray = np.einsum("kn,nk->n", _outer(radial, across), table.cells[place.corners])
    return np.exp(ln_area(table.optics, place.ln_r)[0] + ln_contrast) * light


@dataclass(frozen=True, slots=True, eq=False)
class _Place:
    """Cells of a table: the ln r served, where between its grid points, and flat indices of the corners (n, 16)."""

    ln_r: FloatArray
    in_xi: FloatArray
    xi_slope: FloatArray  # d xi / d ln r
    in_x: FloatArray
    corners: IntArray  # in the order of `_outer`


def _place(table: ProfileTable, ln_r: FloatArray, x: FloatArray) -> _Place:
    """Find radii and positions `x`, counted in px from the table's first, both (n,)."""
    ln_r = np.clip(ln_r, np.log(THINNEST_PX), np.log(table.radius_max_px))
    rho2 = np.exp(2.0 * ln_r) / table.optics.s_px**2
    root = np.sqrt(1.0 + rho2)
    xi = (root - 1.0) / XI_STEP
    xi_low = np.minimum(xi.astype(np.int64), table.n_xi - 2)
    whole = x.astype(np.int64)
    fine = (x - whole) * PHASES
    phase = np.minimum(fine.astype(np.int64), PHASES - 1)
    n_x = 2 * table.half_px + 1
    corner = (np.arange(2)[:, None, None] * (PHASES + 1) + np.arange(2)[None, :, None]) * 4 + np.arange(4)
    first = (xi_low * (PHASES + 1) + phase) * (4 * n_x) + whole
    return _Place(ln_r, xi - xi_low, rho2 / root, fine - phase, first[:, None] + corner.ravel() * n_x)


def _hermite(t: FloatArray, step: float) -> tuple[FloatArray, FloatArray]:
    """Weights (4, n): value and slope at one end, then at the other, of a cubic and of its derivative."""
    u = 1.0 - t
    tu = t * u
    value, slope = np.empty((2, 4, len(t)))
    value[2] = t**2 * (1 + 2 * u)
    value[0] = 1 - value[2]
    np.multiply(step * tu, u, out=value[1])
    np.multiply(-step * tu, t, out=value[3])
    np.multiply(6 / step, tu, out=slope[2])
    np.negative(slope[2], out=slope[0])
    np.multiply(u, u - 2 * t, out=slope[1])
    np.multiply(t, t - 2 * u, out=slope[3])
    return value, slope


def _outer(radial: FloatArray, across: FloatArray) -> FloatArray:
    """Weights (16, n) in the order (end in xi, end in x, channel)."""
    out = np.empty((16, radial.shape[1]))
    for k in range(16):
        # channels are (value, by xi, by x, by both): the x part varies slower
        xi_end, x_end, by_x, by_xi = k >> 3, (k >> 2) & 1, (k >> 1) & 1, k & 1
        np.multiply(radial[2 * xi_end + by_xi], across[2 * x_end + by_x], out=out[k])
    return out
