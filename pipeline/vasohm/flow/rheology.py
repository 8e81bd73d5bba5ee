"""What a viscosity law is, the laws by name, and blood: a law with its constants."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from types import MappingProxyType, ModuleType

import numpy as np
from numpy.typing import ArrayLike

from vasohm.arrays import BoolArray, FloatArray
from vasohm.errors import DomainError, PluginError
from vasohm.flow.laws import (
    constant,
    haynes_marginal_zone,
    kiani_hudetz,
    pries_in_vitro,
    pries_in_vivo,
    pries_secomb_surface_layer,
)
from vasohm.plugins import PluginKind, load_plugin, plugin_names, refuse_plugin

HIGHEST_HEMATOCRIT = 0.75  # above it cells are packed and no law was measured
HEMATOCRIT_STEP = 1e-6  # of a one-sided difference: slopes to about 1e-6
PLASMA_STEP = 1e-6  # relative, of a one-sided difference
HUMAN_CELL_VOLUME_FL = 92.0  # of the blood that the laws were fitted to; that of rats is 55 fL


@dataclass(frozen=True, slots=True)
class BloodSettings:
    """Blood as the study file describes it; `hematocrit` is the discharge hematocrit entering the network.

    `hematocrit_se` is its standard uncertainty, and that of a hematocrit which sheet or terminals give instead. Where
    cells part, it is the same absolute change in every segment, also where the hematocrit is above or below this one.
    """

    law: str
    hematocrit: float
    hematocrit_se: float
    plasma_viscosity_mpa_s: float
    viscosity_mpa_s: float  # of law "constant"
    parameters: Mapping[str, float]
    plasma_viscosity_se_mpa_s: float = 0.0  # standard uncertainty of the viscosity of plasma
    red_cell_volume_fl: float | None = None  # diameters scale with its cube root against human cells; None: they do not
    split_law: str | None = None  # of `vasohm.flow.phase_separation`; None leaves one hematocrit to a whole network
    density_kg_m3: float = 1050.0  # whole blood at 37 degrees Celsius: Trudnowski & Rico, Clin Chem 1974;20:615-616
    heart_rate_per_min: float | None = None


@dataclass(frozen=True, slots=True)
class ViscosityLaw:
    """A published relation of apparent viscosity to radius and hematocrit.

    `viscosity(radius_um, hematocrit, *, plasma_viscosity_mpa_s, parameters)` is elementwise (the two arrays broadcast
    against each other) and returns mPa·s.
    """

    viscosity: Callable[..., FloatArray]
    valid_radius_um: tuple[float, float]
    valid_hematocrit: tuple[float, float]
    citation: str  # authors, year, DOI, equation
    scales_with_cells: bool = True  # its diameters are those of vessels with human cells, and may be scaled to others
    # Constants that a study must give in [blood.parameters], with values to show the law by.
    example_parameters: Mapping[str, float] = field(default_factory=dict)


def _published(
    law: ModuleType, *, scales_with_cells: bool = True, example_parameters: Mapping[str, float] | None = None
) -> ViscosityLaw:
    valid = (law.VALID_RADIUS_UM, law.VALID_HEMATOCRIT)
    return ViscosityLaw(law.viscosity, *valid, law.CITATION, scales_with_cells, example_parameters or {})


LAWS: Mapping[str, ViscosityLaw] = MappingProxyType(
    {
        "constant": _published(constant, scales_with_cells=False, example_parameters={"viscosity_mpa_s": 3.0}),
        "pries-in-vitro": _published(pries_in_vitro),
        "pries-in-vivo": _published(pries_in_vivo),
        "pries-secomb-surface-layer": _published(pries_secomb_surface_layer),
        "kiani-hudetz": _published(kiani_hudetz),
        "haynes-marginal-zone": _published(
            haynes_marginal_zone,
            scales_with_cells=False,
            example_parameters={"core_viscosity_mpa_s": 4.0, "marginal_zone_um": 2.0},
        ),
    }
)


PLUGINS = PluginKind("vasohm.viscosity_laws", "viscosity law", tuple(LAWS))


def law_names() -> tuple[str, ...]:
    """Names of all laws that a study can ask for, without importing other packages' laws."""
    return plugin_names(PLUGINS)


def get_law(name: str) -> ViscosityLaw:
    """Return the law of that name, importing it where another package registers it.

    Raises
    ------
    PluginError
        No law has this name, two have it, or the package that registers it fails to give it.
    """
    value = load_plugin(PLUGINS, name)
    if value is None:
        return LAWS[name]
    if isinstance(value, ViscosityLaw):
        return value
    if not callable(value):
        raise refuse_plugin(PLUGINS, name, value, "a function or a ViscosityLaw")
    return ViscosityLaw(value, (0.0, np.inf), (0.0, HIGHEST_HEMATOCRIT), "no source given")


@dataclass(frozen=True, slots=True)
class Blood:
    """A law with its constants: all about blood but radius and hematocrit."""

    law_name: str
    law: ViscosityLaw
    plasma_viscosity_mpa_s: float
    parameters: Mapping[str, float]
    hematocrit_se: float  # of every segment's hematocrit alike, absolute, also where cells part
    plasma_viscosity_se_mpa_s: float = 0.0
    diameter_factor: float = 1.0  # on diameters within the law, from the volume of the cells

    def viscosity(self, radius_um: FloatArray, hematocrit: FloatArray) -> FloatArray:
        """Apparent viscosity in mPa·s, shape of both arguments broadcast; infinite where no blood can pass.

        Raises
        ------
        DomainError
            A radius that is not positive, or a hematocrit outside 0 to 0.75.
        PluginError
            The law returned another shape, not-a-number or a value that is not positive.
        """
        _require(radius_um, radius_um > 0, "radius_um", "must be positive")
        inside = (hematocrit >= 0) & (hematocrit <= HIGHEST_HEMATOCRIT)
        _require(
            hematocrit, inside, "hematocrit", f"must lie between 0 and {HIGHEST_HEMATOCRIT} (a fraction, not per cent)"
        )
        value = np.asarray(
            self.law.viscosity(
                self.diameter_factor * radius_um,
                hematocrit,
                plasma_viscosity_mpa_s=self.plasma_viscosity_mpa_s,
                parameters=self.parameters,
            )
        )
        wanted = np.broadcast_shapes(radius_um.shape, hematocrit.shape)
        if value.shape != wanted:
            msg = (
                f"law {self.law_name!r} returned shape {value.shape} where {wanted} was asked; it must be elementwise."
            )
            raise PluginError(msg)
        if not np.all(value > 0):
            bad = value[~(value > 0)].flat[0]
            msg = f"law {self.law_name!r} returned a viscosity of {bad} mPa·s; it must be positive."
            raise PluginError(msg)
        return value.astype(np.float64, copy=False)

    def ln_change_with_hematocrit(
        self, radius_um: FloatArray, hematocrit: FloatArray, viscosity_mpa_s: FloatArray
    ) -> FloatArray:
        """Change of ln viscosity for one standard uncertainty of the hematocrit; `viscosity_mpa_s` is that of both.

        By a one-sided difference towards the middle of the range of hematocrit; 0 where no blood can pass.
        """
        if self.hematocrit_se == 0.0:
            return np.zeros(np.shape(viscosity_mpa_s))
        step = np.where(hematocrit < 0.5 * HIGHEST_HEMATOCRIT, HEMATOCRIT_STEP, -HEMATOCRIT_STEP)
        moved = self.viscosity(radius_um, hematocrit + step)
        both = np.isfinite(moved) & np.isfinite(viscosity_mpa_s)
        ratio = np.divide(moved, viscosity_mpa_s, out=np.ones(both.shape), where=both)
        return np.asarray(np.log(ratio) / step * self.hematocrit_se)

    def ln_change_with_plasma(
        self, radius_um: FloatArray, hematocrit: FloatArray, viscosity_mpa_s: FloatArray
    ) -> FloatArray:
        """Change of ln viscosity for one standard uncertainty of plasma viscosity; `viscosity_mpa_s` is that of both.

        By a one-sided difference; 0 where no blood can pass.
        """
        if self.plasma_viscosity_se_mpa_s == 0.0:
            return np.zeros(np.shape(viscosity_mpa_s))
        thicker = replace(self, plasma_viscosity_mpa_s=self.plasma_viscosity_mpa_s * (1.0 + PLASMA_STEP))
        moved = thicker.viscosity(radius_um, hematocrit)
        both = np.isfinite(moved) & np.isfinite(viscosity_mpa_s)
        ratio = np.divide(moved, viscosity_mpa_s, out=np.ones(both.shape), where=both)
        return np.asarray(np.log(ratio) / PLASMA_STEP * self.plasma_viscosity_se_mpa_s / self.plasma_viscosity_mpa_s)

    def outside_range(self, radius_um: FloatArray, hematocrit: FloatArray) -> BoolArray:
        """Whether the law is used beyond the radii or hematocrits it was fitted to."""
        (least_um, most_um), (least, most) = self.law.valid_radius_um, self.law.valid_hematocrit
        radius_um = self.diameter_factor * radius_um
        return (radius_um < least_um) | (radius_um > most_um) | (hematocrit < least) | (hematocrit > most)


def _require(value: FloatArray, fine: BoolArray, name: str, rule: str) -> None:
    if not np.all(fine):
        bad = np.flatnonzero(~fine)
        msg = f"{name} is {value.flat[bad[0]]} at position {bad[0]} ({bad.size} such values); it {rule}."
        raise DomainError(msg)


def make_blood(settings: BloodSettings) -> Blood:
    """Find the law that the settings name and give it its constants.

    Raises
    ------
    DomainError
        A plasma viscosity that is not positive, or an uncertainty that is negative.
    PluginError
        See `get_law`.
    """
    parameters = dict(settings.parameters)
    if settings.law == "constant":
        parameters["viscosity_mpa_s"] = settings.viscosity_mpa_s
    for name in ("hematocrit_se", "plasma_viscosity_se_mpa_s"):
        if not 0 <= getattr(settings, name) < np.inf:
            msg = f"{name} is {getattr(settings, name)}; a standard uncertainty is 0 or more."
            raise DomainError(msg)
    made = _blood(settings.law, settings.plasma_viscosity_mpa_s, parameters, settings.hematocrit_se)
    factor = diameter_factor(settings.red_cell_volume_fl) if made.law.scales_with_cells else 1.0
    return replace(made, plasma_viscosity_se_mpa_s=settings.plasma_viscosity_se_mpa_s, diameter_factor=factor)


def diameter_factor(red_cell_volume_fl: float | None) -> float:
    """Diameter of the vessel with human cells that is like one with cells of this volume, over its own; 1 for None.

    Cells of one shape are in vessels what their size is to the diameter: (92 fL / volume)^(1/3).

    Raises
    ------
    DomainError
        A volume that is not positive.
    """
    if red_cell_volume_fl is None:
        return 1.0
    if not 0 < red_cell_volume_fl < np.inf:
        msg = f"red_cell_volume_fl is {red_cell_volume_fl}; it must be positive (human 92, rat 55)."
        raise DomainError(msg)
    return float((HUMAN_CELL_VOLUME_FL / red_cell_volume_fl) ** (1.0 / 3.0))


def _blood(
    law: str, plasma_viscosity_mpa_s: float, parameters: Mapping[str, float], hematocrit_se: float = 0.0
) -> Blood:
    if not 0 < plasma_viscosity_mpa_s < np.inf:
        msg = f"plasma_viscosity_mpa_s is {plasma_viscosity_mpa_s}; it must be positive (about 1.2 at 37 °C)."
        raise DomainError(msg)
    return Blood(law, get_law(law), plasma_viscosity_mpa_s, MappingProxyType(dict(parameters)), hematocrit_se)


def apparent_viscosity(
    law: str,
    radius_um: ArrayLike,
    hematocrit: ArrayLike,
    *,
    plasma_viscosity_mpa_s: float = 1.2,
    parameters: Mapping[str, float] | None = None,
) -> FloatArray:
    """Apparent viscosity of blood in a vessel.

    Parameters
    ----------
    law : str
        A registered law: `law_names` lists them.
    radius_um : array_like
        Lumen radius in micrometres, positive.
    hematocrit : array_like
        Discharge hematocrit, a fraction from 0 to 0.75; broadcasts against `radius_um`.
    plasma_viscosity_mpa_s : float
        Viscosity of plasma in mPa·s.
    parameters : mapping, optional
        Further constants of the law, such as ``{"viscosity_mpa_s": 3.0}`` of law ``constant``.

    Returns
    -------
    array
        Apparent viscosity in mPa·s, in the shape of both broadcast. Infinite where the law lets no blood pass.

    Raises
    ------
    DomainError
        A radius, hematocrit, plasma viscosity or parameter outside what is defined.
    PluginError
        An unknown law, or one of another package that fails.

    Notes
    -----
    Outside the range a law was fitted to, its formula is evaluated all the same.

    References
    ----------
    Each law carries its own: ``get_law(law).citation``.
    """
    blood = _blood(law, plasma_viscosity_mpa_s, parameters or {})
    radius, cells = np.asarray(radius_um, dtype=np.float64), np.asarray(hematocrit, dtype=np.float64)
    value: FloatArray = blood.viscosity(radius, cells)[()]
    return value
