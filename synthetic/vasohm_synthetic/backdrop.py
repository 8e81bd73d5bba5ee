"""What lies behind the vessels, and what the camera makes of the light."""

import numpy as np
from scipy.ndimage import gaussian_filter

from vasohm_synthetic.arrays import AnyIntImage, FloatArray
from vasohm_synthetic.optics import Backdrop, Camera
from vasohm_synthetic.scene import Scene


def illuminate(scene: Scene, backdrop: Backdrop, rng: np.random.Generator) -> FloatArray:
    """Brightness of the backdrop as a factor [y, x]: slope, vignette, texture, optic disc, dark centre."""
    height, width = scene.shape
    y, x = np.mgrid[:height, :width].astype(float)
    middle_x, middle_y = 0.5 * (width - 1), 0.5 * (height - 1)
    angle = np.deg2rad(backdrop.slope_deg)
    along = (x - middle_x) * np.cos(angle) + (y - middle_y) * np.sin(angle)
    edge = np.hypot(middle_x, middle_y) if scene.fov is None else scene.fov.radius_px
    shade = 1.0 + backdrop.slope * along / width
    shade *= 1.0 - backdrop.vignette * np.minimum(np.hypot(x - middle_x, y - middle_y) / edge, 1.2) ** 2
    if scene.disc is not None and backdrop.disc > 0:
        from_rim = np.hypot(x - scene.disc.x_px, y - scene.disc.y_px) - scene.disc.radius_px
        shade *= 1.0 + backdrop.disc / (1.0 + np.exp(np.clip(from_rim / 2.5, -50, 50)))
    if scene.centre is not None and backdrop.centre > 0:
        from_centre = np.hypot(x - scene.centre.x_px, y - scene.centre.y_px) / scene.centre.radius_px
        shade *= 1.0 - backdrop.centre * np.exp(-0.5 * from_centre**2)
    if backdrop.texture_sd > 0:
        shade *= 1.0 + backdrop.texture_sd * _unit_noise(scene.shape, backdrop.texture_px / np.sqrt(2.0), rng)
    return np.maximum(shade, 0.0)


def expose(light: FloatArray, scene: Scene, camera: Camera, rng: np.random.Generator) -> FloatArray:
    """Add photon noise and Gaussian noise, and black out what lies outside the field of view."""
    picture = np.maximum(light, 0.0)
    if scene.fov is not None:
        y, x = np.mgrid[: scene.shape[0], : scene.shape[1]].astype(float)
        picture = np.where(scene.fov.holds(x, y), picture, 0.0)
    if camera.photons > 0:
        picture = rng.poisson(picture * camera.photons) / camera.photons
    if camera.noise_sd > 0:
        picture = picture + camera.noise_sd * _unit_noise(scene.shape, camera.noise_blur_px, rng)
    return picture


def digitise(picture: FloatArray, bits: int) -> AnyIntImage:
    """Round fractions of full scale to whole grey levels of 8 or 16 bits; what lies beyond is cut."""
    full = 2**bits - 1
    return np.rint(np.clip(picture, 0.0, 1.0) * full).astype(np.uint8 if bits == 8 else np.uint16)


def _unit_noise(shape: tuple[int, int], blur_px: float, rng: np.random.Generator) -> FloatArray:
    """Gaussian noise of unit variance, blurred by `blur_px`; the covariance's correlation length is sqrt(2) blur."""
    if blur_px == 0:
        return rng.standard_normal(shape)
    pad = int(np.ceil(4 * blur_px)) + 1
    white = rng.standard_normal((shape[0] + 2 * pad, shape[1] + 2 * pad))
    smooth = gaussian_filter(white, blur_px, mode="constant", truncate=4.0)[pad:-pad, pad:-pad]
    kernel = np.zeros(2 * pad + 1)
    kernel[pad] = 1.0
    kernel = gaussian_filter(kernel, blur_px, mode="constant", truncate=4.0)
    unit: FloatArray = smooth / np.sum(kernel**2)  # separable: the variance is the product of two sums
    return unit
