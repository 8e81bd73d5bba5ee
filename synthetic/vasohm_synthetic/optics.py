"""How the scene becomes a picture: profile, contrast, blur, backdrop and camera."""

from collections.abc import Mapping
from dataclasses import dataclass, field

PROFILES = ("slab", "cylinder", "absorber")
POLARITIES = ("dark", "bright")
BLUR_IN = ("light", "density")
MAX_DENSITY = 5.0  # 0.7 % of the light is left
MAX_BLUR_PX = 50.0  # wider blurs leave no vessel to be seen, and would fill the memory
MAX_NOISE_BLUR_PX = 20.0
MAX_TEXTURE_PX = 500.0
MAX_PHOTONS = 1e12  # the noise is 1e-6 then


@dataclass(frozen=True, slots=True)
class Channel:
    """One colour of the camera: the backdrop's brightness and a factor on the contrast of each class of vessel."""

    background: float = 0.6  # fraction of full scale
    gains: Mapping[str, float] = field(default_factory=dict)  # by vessel class; absent: 1


@dataclass(frozen=True, slots=True)
class Backdrop:
    """What lies behind the vessels; all as fractions of the background."""

    slope: float = 0.0  # rise over the picture's width
    slope_deg: float = 0.0  # its direction, from right towards down
    vignette: float = 0.0  # light lost at the corner, or at the edge of a round field of view
    texture_sd: float = 0.0
    texture_px: float = 8.0  # correlation length of the texture
    disc: float = 0.0  # an optic disc is brighter by this
    centre: float = 0.0  # the centre of a fundus is darker by this


@dataclass(frozen=True, slots=True)
class Camera:
    """Noise and digits."""

    photons: float = 0.0  # at full scale; 0: no photon noise
    noise_sd: float = 0.0  # Gaussian, fraction of full scale
    noise_blur_px: float = 0.0  # blur that correlates the Gaussian noise; its variance stays
    bits: int = 8  # 8 or 16


@dataclass(frozen=True, slots=True)
class Optics:
    """Image formation.

    The profile of a vessel of radius r at distance x from its axis, chord = 2 sqrt(r^2 - x^2):
    slab ``contrast``; cylinder ``contrast * chord / (2 reference_radius_px)``; absorber
    ``contrast * (1 - exp(-absorption_per_px * chord))``. Profiles add where vessels cross (an absorber adds its
    chords), and are those of the union of the lumens where vessels of one layer join.

    A bright vessel's profile is added light (fraction of full scale), blurred by a Gaussian and averaged over the
    pixel. A dark vessel's profile P is optical density: with ``blur_in = "light"`` the transmitted light exp(-P)
    is blurred and averaged, as a lens and a sensor do; with ``"density"`` P itself is, so that -ln of the picture
    is exactly the blurred profile. For small P the two agree to second order.
    """

    profile: str = "cylinder"
    polarity: str = "dark"
    contrast: float = 0.3
    reference_radius_px: float = 5.0
    absorption_per_px: float = 0.1
    blur_px: float = 1.0
    blur_in: str = "light"
    reflex: float = 0.0  # share of its effect on the light that a vessel loses on its axis
    reflex_width: float = 0.25  # its standard deviation, fraction of the radius
    reflex_radius_px: float = 3.0  # thinner vessels show none
    supersample: int = 4
    channels: tuple[Channel, ...] = (Channel(),)
    backdrop: Backdrop = field(default_factory=Backdrop)
    camera: Camera = field(default_factory=Camera)


def optics_problems(optics: Optics) -> list[str]:
    """Say everything that is impossible about an image formation; empty where nothing is."""
    backdrop, camera = optics.backdrop, optics.camera
    checks = [
        (optics.profile in PROFILES, f"profile {optics.profile!r} is none of {PROFILES}"),
        (optics.polarity in POLARITIES, f"polarity {optics.polarity!r} is none of {POLARITIES}"),
        (optics.blur_in in BLUR_IN, f"blur_in {optics.blur_in!r} is none of {BLUR_IN}"),
        (optics.contrast > 0, f"contrast {optics.contrast:g} is not positive"),
        (
            optics.polarity != "dark" or optics.contrast <= MAX_DENSITY,
            f"contrast {optics.contrast:g} of a dark vessel is an optical density: at most {MAX_DENSITY:g}",
        ),
        (
            optics.polarity != "bright" or optics.contrast <= 1,
            f"contrast {optics.contrast:g} of a bright vessel is a fraction of full scale: at most 1",
        ),
        (optics.reference_radius_px > 0, f"reference_radius_px {optics.reference_radius_px:g} is not positive"),
        (optics.absorption_per_px > 0, f"absorption_per_px {optics.absorption_per_px:g} is not positive"),
        (0 <= optics.blur_px <= MAX_BLUR_PX, _beyond("blur_px", optics.blur_px, MAX_BLUR_PX)),
        (0 <= optics.reflex <= 1, f"reflex {optics.reflex:g} is not within 0 and 1"),
        (optics.reflex_width > 0, f"reflex_width {optics.reflex_width:g} is not positive"),
        (1 <= optics.supersample <= 16, f"supersample {optics.supersample} is not within 1 and 16"),
        (len(optics.channels) in (1, 3), f"{len(optics.channels)} channels: a picture has 1 or 3"),
        (0 <= backdrop.vignette < 1, f"vignette {backdrop.vignette:g} is not within 0 and 1"),
        (abs(backdrop.slope) < 2, f"slope {backdrop.slope:g} makes the background negative"),
        (backdrop.texture_sd >= 0, f"texture_sd {backdrop.texture_sd:g} is negative"),
        (0 < backdrop.texture_px <= MAX_TEXTURE_PX, _beyond("texture_px", backdrop.texture_px, MAX_TEXTURE_PX)),
        (backdrop.disc >= 0, f"disc {backdrop.disc:g} is negative"),
        (0 <= backdrop.centre < 1, f"centre {backdrop.centre:g} is not within 0 and 1"),
        (0 <= camera.photons <= MAX_PHOTONS, _beyond("photons", camera.photons, MAX_PHOTONS)),
        (camera.noise_sd >= 0, f"noise_sd {camera.noise_sd:g} is negative"),
        (
            0 <= camera.noise_blur_px <= MAX_NOISE_BLUR_PX,
            _beyond("noise_blur_px", camera.noise_blur_px, MAX_NOISE_BLUR_PX),
        ),
        (camera.bits in (8, 16), f"bits {camera.bits} is neither 8 nor 16"),
    ]
    checks += [
        (0 < channel.background <= 1, f"background {channel.background:g} is not within 0 and 1")
        for channel in optics.channels
    ]
    checks += [
        (gain >= 0, f"gains {vessel_class} {gain:g} is negative")
        for channel in optics.channels
        for vessel_class, gain in channel.gains.items()
    ]
    return [problem for fine, problem in checks if not fine]


def _beyond(name: str, value: float, most: float) -> str:
    return f"{name} {value:g} is not within 0 and {most:g}"
