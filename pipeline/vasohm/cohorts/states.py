"""One bed as it was measured in one picture, and what of its doubt another picture of it shares."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from vasohm.arrays import BoolArray, FloatArray, freeze
from vasohm.cohorts.matching import track
from vasohm.cohorts.registration import Picture
from vasohm.flow.poiseuille import local_exponent
from vasohm.flow.rheology import Blood
from vasohm.network.learn import PROFILE_SE
from vasohm.uncertainty import quadrature

PIXEL, HEMATOCRIT, PLASMA, LAYER, SCALE, OPTICS = range(6)
N_CAUSES = 6


@dataclass(frozen=True, slots=True)
class Setup:
    """What all pictures of a study were measured with."""

    blood: Blood
    plasma_layer_um: float
    plasma_layer_se_um: float


@dataclass(frozen=True, slots=True, eq=False)
class State:
    """A measured picture: its row of `image`, its tables and its field of view; numbers are floats, texts are texts."""

    image_id: str
    image: Mapping[str, str | float]
    tables: Mapping[str, pd.DataFrame]  # segments, points, nodes, networks
    fov: BoolArray  # (h, w)

    @property
    def pixel_size_um(self) -> float:
        return float(self.image["pixel_size_um"])

    @property
    def picture(self) -> Picture:
        lines = track(self.tables["points"], self.tables["segments"], self.pixel_size_um, reaching=True)
        return Picture(lines, self.fov, self.pixel_size_um)

    def column(self, table: str, name: str) -> FloatArray:
        return self.tables[table][name].to_numpy(np.float64)


@dataclass(frozen=True, slots=True, eq=False)
class Doubt:
    """How far the segments of one state are known: random parts, and the change for one standard uncertainty a cause.

    The columns of the causes are `PIXEL` (what is wrong with both pixel sizes alike), `HEMATOCRIT`, `PLASMA`, `LAYER`,
    `SCALE` (by how much both pixel sizes disagree) and `OPTICS` (blur, profile and contrast, estimated from the picture
    itself).
    """

    radius_random_se: FloatArray  # (n,) of the mean of ln radius
    resistance_random_se: FloatArray  # (n,) of ln R, without that of the length between its nodes
    of_radius: FloatArray  # (n, N_CAUSES)
    of_resistance: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True)
class Discord:
    """In what a picture disagrees with the one it is held against."""

    ln_scale: float = 0.0  # of the pixel sizes
    profile: bool = False  # whether each took its vessels to be imaged in another way


def doubt_of(state: State, setup: Setup, discord: Discord) -> Doubt:
    """Take apart the doubt of a state's segments by cause.

    Parameters
    ----------
    state : State
    setup : Setup
    discord : Discord
        What adds to the doubt of one of the two states.

    Notes
    -----
    To first order (JCGM 100:2008, eq. 13) with p = d ln(mu r^-4) / d ln r at the hydraulic radius r and c = 1 - plasma
    layer / r: a relative change d of the pixel size moves ln R by (1 + p c) d, one of a plasma layer by p d / r, those
    of hematocrit and plasma as the law says. What is left of the stated shared part is the picture's own.
    """
    radius, length = state.column("segments", "radius_hydraulic_um"), state.column("segments", "length_um")
    hematocrit = state.column("segments", "hematocrit")
    known = np.isfinite(radius) & (radius > 0) & np.isfinite(hematocrit)
    radius, cells = np.where(known, radius, 1.0), np.where(known, hematocrit, 0.0)
    viscosity = setup.blood.viscosity(radius, cells)
    exponent = local_exponent(setup.blood, radius, cells, viscosity)
    column = 1.0 - setup.plasma_layer_um / radius
    pixel = relative_pixel_se(state)
    of_resistance = np.zeros((len(radius), N_CAUSES))
    of_resistance[:, PIXEL] = (1.0 + exponent * column) * pixel
    of_resistance[:, HEMATOCRIT] = setup.blood.ln_change_with_hematocrit(radius, cells, viscosity)
    of_resistance[:, PLASMA] = setup.blood.ln_change_with_plasma(radius, cells, viscosity)
    of_resistance[:, LAYER] = exponent * setup.plasma_layer_se_um / radius
    rest = np.square(state.column("segments", "ln_resistance_shared_se")) - np.square(of_resistance).sum(axis=1)
    rest = np.maximum(rest, 0.0) + np.square(exponent * PROFILE_SE * discord.profile)
    of_resistance[:, OPTICS] = -np.sqrt(rest)
    of_radius = of_resistance / exponent[:, None]
    of_radius[:, PIXEL] = column * pixel
    of_radius[:, [HEMATOCRIT, PLASMA]] = 0.0
    of_resistance[:, SCALE], of_radius[:, SCALE] = (1.0 + exponent * column), column
    of_resistance[:, SCALE] *= discord.ln_scale
    of_radius[:, SCALE] *= discord.ln_scale
    length_var = np.square(state.column("segments", "length_se_um")) - np.square(length * pixel)
    of_length = np.divide(np.maximum(length_var, 0.0), length**2, out=np.zeros(len(length)), where=length > 0)
    random = np.sqrt(np.maximum(np.square(state.column("segments", "ln_resistance_random_se")) - of_length, 0.0))
    return Doubt(random / np.abs(exponent), random, of_radius, of_resistance)


def relative_pixel_se(state: State) -> float:
    """Relative standard uncertainty of the pixel size; 0 where nobody told it."""
    told = float(state.image["pixel_size_se_um"])
    return told / state.pixel_size_um if np.isfinite(told) else 0.0


def shared_causes(a: State, b: State) -> BoolArray:
    """Tell for which causes one error acts on both states, (N_CAUSES,).

    The pixel size: how far both disagree is seen where one picture lies on the other, so what remains acts on both
    alike. The hematocrit where it is one value. The viscosity of plasma and the plasma layer are the study's. The
    optics never: each picture tells its own.
    """
    of_a, of_b = (np.unique(one.column("segments", "hematocrit")) for one in (a, b))
    return np.array([True, np.array_equal(of_a, of_b), True, True, False, False])


def ratio_shared_se(of_a: FloatArray, of_b: FloatArray, shared: BoolArray) -> FloatArray:
    """Standard uncertainty of ln(b / a) from the causes: differences of those in common, both of the others.

    Parameters
    ----------
    of_a, of_b : (..., N_CAUSES) arrays
        Changes of ln a and ln b for one standard uncertainty of each cause.
    shared : (N_CAUSES,) bool array
    """
    parts = np.where(shared, of_b - of_a, np.hypot(of_a, of_b))
    return quadrature(*np.moveaxis(parts, -1, 0))


def hindrance(radius_um: FloatArray, hematocrit: FloatArray, blood: Blood) -> FloatArray:
    """Local mu r^-4 in mPa.s/um4; NaN where the radius is not known."""
    known = np.isfinite(radius_um) & (radius_um > 0) & np.isfinite(hematocrit)
    radius, cells = np.where(known, radius_um, 1.0), np.where(known, hematocrit, 0.0)
    value = blood.viscosity(radius, cells) / radius**4
    return np.where(known & np.isfinite(value), value, np.nan)
