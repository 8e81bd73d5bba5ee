"""Tubes drawn with exactly known radius, and the information bound of their images; no line of the code under test.

Straight tubes are drawn from the closed form across their axis: light path, convolved with the Gaussian of the optics
and with the two boxes into which a square pixel projects. Others are drawn on a four times finer grid.
"""

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter
from scipy.spatial import cKDTree
from scipy.special import ndtr


def light_path(family, mu, r, x):
    """Unblurred profile of unit contrast."""
    chord = 2.0 * np.sqrt(np.maximum(r**2 - x**2, 0.0))
    if family == "slab":
        return (np.abs(x) < r).astype(float)
    return chord if family == "cylinder" else -np.expm1(-mu * chord)


def height(family, mu, r):
    return {"slab": 1.0, "cylinder": 2.0 * r, "absorber": -np.expm1(-2.0 * mu * r)}[family]


def gaussian_profile(family, mu, r, s, x):
    """Profile of unit contrast under a Gaussian of sd s, by midpoint quadrature over the angle on the rim."""
    if family == "slab":
        return ndtr((x + r) / s) - ndtr((x - r) / s)
    n = int(400 + 40 * r / s)
    angle = (np.arange(n) + 0.5) * np.pi / n - np.pi / 2
    t = r * np.sin(angle)
    chord = 2.0 * r * np.cos(angle)
    seen = chord if family == "cylinder" else -np.expm1(-mu * chord)
    weight = seen * r * np.cos(angle) * np.pi / n
    bell = np.exp(-0.5 * ((np.asarray(x)[..., None] - t) / s) ** 2) / (s * np.sqrt(2 * np.pi))
    return bell @ weight


def pixel_profile(family, mu, r, sigma, *, angle, x_max):
    """(x, profile) on a fine grid: optics and the pixel's projections |cos| and |sin| wide."""
    step = 1.0 / 64
    x = np.arange(-int(x_max * 64), int(x_max * 64) + 1) * step
    profile = gaussian_profile(family, mu, r, sigma, x)
    for width in (abs(np.cos(angle)), abs(np.sin(angle))):
        if width > step:
            integral = np.concatenate([[0.0], np.cumsum(0.5 * (profile[1:] + profile[:-1])) * step])
            profile = (np.interp(x + width / 2, x, integral) - np.interp(x - width / 2, x, integral)) / width
    return x, profile


@dataclass
class Scene:
    """A picture and the lines in it; truth at each point of each line."""

    signal: np.ndarray
    noise_sd: np.ndarray
    x: list
    y: list
    radius: list
    valid: np.ndarray

    def flat(self):
        offsets = np.concatenate([[0], np.cumsum([len(x) for x in self.x])]).astype(np.int64)
        return np.concatenate(self.x), np.concatenate(self.y), offsets, np.concatenate(self.radius)


def straight_tubes(family, r, sigma, cnr, rng, *, mu=0.0, n=120, length=60, noise_blur=0.0, contrast_sd=0.0):
    """`n` straight tubes of one radius at random angle and phase, each in its own tile, unit noise.

    `cnr` is the unblurred central height over the noise. Tiles are stacked into one picture.
    """
    margin = int(2 * r + 6 * sigma + 14)
    side = length + 2 * margin
    columns = int(np.ceil(np.sqrt(n)))
    picture = np.zeros((side * int(np.ceil(n / columns)), side * columns))
    valid = np.ones(picture.shape, bool)  # without the tubes beyond the ends of their lines
    xs, ys, radii = [], [], []
    grid_y, grid_x = np.mgrid[:side, :side]
    for k in range(n):
        angle = rng.uniform(0, np.pi)
        cx, cy = (side - 1) / 2 + rng.uniform(-0.5, 0.5, 2)
        nx, ny = -np.sin(angle), np.cos(angle)
        distance = (grid_x - cx) * nx + (grid_y - cy) * ny
        x, profile = pixel_profile(family, mu, r, sigma, angle=angle, x_max=margin)
        scale = cnr / height(family, mu, r) * np.exp(contrast_sd * rng.standard_normal())
        top, left = (k // columns) * side, (k % columns) * side
        picture[top : top + side, left : left + side] = scale * np.interp(distance, x, profile, right=0, left=0)
        along = np.abs((grid_x - cx) * np.cos(angle) + (grid_y - cy) * np.sin(angle))
        valid[top : top + side, left : left + side] = (along < length / 2 + 3) | (np.abs(distance) > r + 4 * sigma + 2)
        s = np.arange(length) - (length - 1) / 2
        xs.append(left + cx + s * np.cos(angle))
        ys.append(top + cy + s * np.sin(angle))
        radii.append(np.full(length, float(r)))
    return Scene(*_with_noise(picture, rng, noise_blur), xs, ys, radii, valid)


def varying_tubes(family, tubes, sigma, rng, *, mu=0.0, noise_blur=0.0, off_px=0.0, columns=6):
    """Straight tubes with any radius along them, each in its own tile, drawn four times finer; unit noise.

    `tubes` is a list of (radius at points 1 px apart, contrast). Given lines lie up to `off_px` beside the axis: a
    sine of random phase.
    """
    fine = 4
    blocks, valids, xs, ys, radii = [], [], [], [], []
    widest = max(np.max(r) for r, _ in tubes)
    longest = max(len(r) for r, _ in tubes)
    margin = int(2 * widest + 5 * sigma + 12)
    side = longest + 2 * margin
    grid = (np.arange(side * fine) + 0.5) / fine - 0.5
    gy, gx = np.meshgrid(grid, grid, indexing="ij")
    for radius, contrast in tubes:
        angle = rng.uniform(0, np.pi)
        cx, cy = (side - 1) / 2 + rng.uniform(-0.5, 0.5, 2)
        across = -(gx - cx) * np.sin(angle) + (gy - cy) * np.cos(angle)
        along = (gx - cx) * np.cos(angle) + (gy - cy) * np.sin(angle)
        s = np.arange(len(radius)) - (len(radius) - 1) / 2
        local = np.interp(along, s, radius)
        sharp = contrast * _fine_light(family, mu, local, np.abs(across), fine)
        blurred = gaussian_filter(sharp.astype(np.float32), sigma * fine, truncate=5)
        blocks.append(blurred.reshape(side, fine, side, fine).mean(axis=(1, 3)))
        seen = (np.abs(along) < len(radius) / 2 + 3) | (np.abs(across) > local + 4 * sigma + 2)
        valids.append(seen[fine // 2 :: fine, fine // 2 :: fine])
        top, left = ((len(xs) // columns) * side, (len(xs) % columns) * side)
        shift = off_px * np.sin(2 * np.pi * (s / 50 + rng.uniform()))
        xs.append(left + cx + s * np.cos(angle) - shift * np.sin(angle))
        ys.append(top + cy + s * np.sin(angle) + shift * np.cos(angle))
        radii.append(np.asarray(radius, float))
    empty = np.zeros((side, side))
    while len(blocks) % columns:
        blocks.append(empty)
        valids.append(np.ones((side, side), bool))
    picture, valid = (
        np.vstack([np.hstack(parts[k : k + columns]) for k in range(0, len(parts), columns)])
        for parts in (blocks, valids)
    )
    return Scene(*_with_noise(picture, rng, noise_blur), xs, ys, radii, valid)


def wandering_radius(r, sd, correlation_px, length, rng):
    """Radius whose logarithm is a Gaussian process with a Gaussian covariance."""
    s = np.arange(length)
    covariance = sd**2 * np.exp(-0.5 * ((s[:, None] - s) / correlation_px) ** 2)
    values, vectors = np.linalg.eigh(covariance)
    return r * np.exp(vectors @ (np.sqrt(np.maximum(values, 0)) * rng.standard_normal(length)))


def _fine_light(family, mu, radius, distance, fine):
    if family == "slab":  # share of a fine pixel inside the rim
        return np.clip((radius - distance) * fine + 0.5, 0.0, 1.0)
    nodes = (np.arange(4) + 0.5) / (4 * fine) - 0.5 / fine
    return np.mean([light_path(family, mu, radius, np.abs(distance + node)) for node in nodes], axis=0)


def _with_noise(picture, rng, noise_blur):
    noise = rng.standard_normal(picture.shape)
    if noise_blur > 0:
        noise = gaussian_filter(noise, noise_blur)
        noise /= noise.std()
    return (picture + noise).astype(np.float32), np.ones(picture.shape, np.float32)


def drawn_tubes(family, lines, sigma, rng, *, mu=0.0, shape, noise_blur=0.0, noise=1.0, union=(), reflex=0.0):
    """Tubes of varying radius along any line, drawn four times finer, blurred and binned.

    `lines` is a list of (x, y, radius, contrast), points 1 px apart or closer; lights add up, but for the lines whose
    indices stand in `union`: there the greatest path counts, as where vessels join.
    """
    fine = 4
    total = np.zeros((shape[0] * fine, shape[1] * fine))
    joined = np.zeros_like(total)
    for k, (x, y, r, contrast) in enumerate(lines):
        light = _draw(family, mu, (x, y, r), contrast, shape=total.shape, fine=fine)
        if reflex:
            light = light - reflex * contrast * _draw_reflex(family, mu, (x, y, r), total.shape, fine)
        if k in union:
            joined = np.maximum(joined, light)
        else:
            total += light
    blurred = gaussian_filter(total + joined, sigma * fine, truncate=6)
    picture = blurred.reshape(shape[0], fine, shape[1], fine).mean(axis=(1, 3))
    noisy, sd = _with_noise(picture / noise, rng, noise_blur)
    return Scene(
        (noisy * noise).astype(np.float32),
        (sd * noise).astype(np.float32),
        *([np.asarray(line[k], float) for line in lines] for k in range(3)),
        np.ones(shape, bool),
    )


def _nearest(line, box, fine):
    """Distance of each fine pixel in a box to a polyline resampled at 1/8 px, and the radius there."""
    x, y, r = line
    s = np.concatenate([[0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))])
    u = np.linspace(0, s[-1], int(s[-1] * 8) + 2)
    px, py, pr = (np.interp(u, s, v) for v in (x, y, r))
    rows, columns = box
    gy, gx = np.meshgrid((rows + 0.5) / fine - 0.5, (columns + 0.5) / fine - 0.5, indexing="ij")
    distance, index = cKDTree(np.column_stack([px, py])).query(np.column_stack([gx.ravel(), gy.ravel()]))
    return distance.reshape(gx.shape), pr[index].reshape(gx.shape)


def _box(line, shape, fine):
    x, y, r = line
    reach = np.max(r) + 2
    rows = np.arange(max(int((np.min(y) - reach) * fine), 0), min(int((np.max(y) + reach) * fine), shape[0]))
    columns = np.arange(max(int((np.min(x) - reach) * fine), 0), min(int((np.max(x) + reach) * fine), shape[1]))
    return rows, columns


def _draw(family, mu, line, contrast, *, shape, fine):
    box = _box(line, shape, fine)
    distance, radius = _nearest(line, box, fine)
    out = np.zeros(shape)
    seen = _fine_light(family, mu, radius, distance, fine)
    out[np.ix_(*box)] = contrast * seen
    return out


def _draw_reflex(family, mu, line, shape, fine):
    """A bright streak along the axis: Gaussian of sd r / 4, as high as the tube is deep."""
    box = _box(line, shape, fine)
    distance, radius = _nearest(line, box, fine)
    tall = {"slab": np.ones_like(radius), "cylinder": 2 * radius, "absorber": -np.expm1(-2 * mu * radius)}[family]
    out = np.zeros(shape)
    out[np.ix_(*box)] = tall * np.exp(-0.5 * (distance / (0.25 * radius)) ** 2)
    return out


def radius_bound(family, r, s, cnr, length, *, mu=0.0, known_contrast=False):
    """Cramer-Rao bound of ln r of a straight tube `length` px long; contrast, offset and linear background unknown.

    Fisher information of strips |x| <= r + 3 s + 3 at 1 px steps under independent unit noise; derivatives by central
    differences of the quadrature profile.
    """
    half = np.ceil(r + 3 * s + 3)
    x = np.arange(-half, half + 1)
    scale = cnr / height(family, mu, r)
    h = 1e-4

    def model(ln_r, offset):
        return scale * gaussian_profile(family, mu, np.exp(ln_r), s, x - offset)

    l = np.log(r)
    columns = [
        (model(l + h, 0.0) - model(l - h, 0.0)) / (2 * h),
        (model(l, h) - model(l, -h)) / (2 * h),
        np.ones_like(x),
        x,
    ]
    if not known_contrast:
        columns.append(model(l, 0.0))
    design = np.column_stack(columns)
    return float(np.sqrt(np.linalg.inv(length * design.T @ design)[0, 0]))
