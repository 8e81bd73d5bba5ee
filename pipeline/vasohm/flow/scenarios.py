"""What becomes of the network when some vessels change their radius, and by how much they must for a wanted effect."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.circulation import Circulation
from vasohm.flow.hematocrit import find_flow
from vasohm.flow.hydraulics import at_medians
from vasohm.flow.monte_carlo import DrawnState, ResistanceIntervals, ratio_bounds
from vasohm.flow.poiseuille import SegmentResistances
from vasohm.flow.rheology import BloodSettings, make_blood
from vasohm.flow.terminals import Terminals
from vasohm.network.graph import VesselClass
from vasohm.network.groups import sum_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph
from vasohm.uncertainty import COVERAGE_FACTOR_95, no_interval, quadrature

WIDEST_FACTOR = 10.0  # on a radius, that a study may ask for or be told; its inverse is the narrowest
LN_RATIO_ROUNDING = 1e-10  # of ln ratio, at which the search for a factor ends
SEARCH_TURNS = 60  # bisection alone narrows the widest bracket to rounding in fewer


@dataclass(frozen=True, slots=True)
class Scenario:
    """Change the radius of the chosen vessels; None in a condition means it does not matter.

    A vessel is chosen where its hydraulic radius is below `radius_um_below`, not below `radius_um_above`, and its class
    is `vessel_class`. Either `radius_factor` is given, or `wanted_ratio`: then each network is told the factor that
    brings its resistance to this multiple of what it was.
    """

    name: str
    radius_factor: float | None
    radius_um_below: float | None
    radius_um_above: float | None
    vessel_class: str | None
    wanted_ratio: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class ScenarioOutcomes:
    """One entry a network and scenario, by network, then in the study's order; NaN without a resistance."""

    network: IntArray  # from 0
    scenario: tuple[str, ...]
    n_segments_changed: IntArray
    radius_factor: FloatArray  # as given, or as found for a wanted ratio
    resistance_before_pa_s_m3: FloatArray
    resistance_after_pa_s_m3: FloatArray
    ratio: FloatArray  # after over before
    ratio_lo: FloatArray
    ratio_hi: FloatArray
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class _State:
    """The networks with one set of radii."""

    measured: MeasuredGraph
    resistances: SegmentResistances
    circulation: Circulation
    network_resistance_pa_s_m3: FloatArray  # (n_networks,)

    @property
    def drawn(self) -> DrawnState:
        found = self.resistances
        return DrawnState(self.measured, found.hematocrit, found.resistance_pa_s_m3, self.circulation.share)

    def weighted(self, ln_change: FloatArray) -> FloatArray:
        """Share of each segment times its change of ln R; 0 where no blood passes."""
        share = np.nan_to_num(self.circulation.share).reshape((-1,) + (1,) * (ln_change.ndim - 1))
        return np.asarray(share * np.where(share > 0, ln_change, 0.0))


def run_scenarios(
    measured: MeasuredGraph,
    terminals: Terminals,
    blood: BloodSettings,
    scenarios: Sequence[Scenario],
    intervals: ResistanceIntervals | None = None,
) -> ScenarioOutcomes:
    """Ask of every network what its resistance becomes when chosen vessels change their radius.

    Parameters
    ----------
    measured : MeasuredGraph
        Radii as measured; each scenario multiplies those of the chosen segments, and viscosity follows the new radii.
    terminals : Terminals
        Inlets and outlets, with their pressures or flows, the same before and after.
    blood : BloodSettings
        Viscosity law and the hematocrit that enters, the same before and after; cells part anew where it says so.
    scenarios : sequence of Scenario
        Any number.
    intervals : ResistanceIntervals, optional
        Networks whose interval was drawn there have that of their ratios drawn too, from the same numbers.

    Returns
    -------
    ScenarioOutcomes

    Raises
    ------
    DomainError
        A radius factor that is not positive and finite, or an unknown vessel class.

    Notes
    -----
    Errors of the radii act before and after alike, so most of the doubt cancels in the ratio: its ln moves with a
    segment's ln R by the segment's share after less its share before, and with each shared cause, the pixel size among
    them, by the difference of its effects on the two (first order, JCGM 100:2008, eq. 13; or draw by draw, see
    `vasohm.flow.monte_carlo`). Where a ratio is wanted, the interval is that of the ratio at the factor found.
    """
    made = make_blood(blood)

    def state(radius_factor: FloatArray) -> _State:
        radius_um = measured.radius_um * radius_factor[owner(measured.graph.offsets)]
        found = find_flow(measured, terminals, blood, radius_factor)
        resistances, circulation = found.resistances, found.circulation
        network_resistance, _ = at_medians(measured, terminals, circulation, resistances)
        return _State(replace(measured, radius_um=radius_um), resistances, circulation, network_resistance)

    before = state(np.ones(measured.graph.n_segments))
    network, shape = terminals.segment_network, (len(terminals.source), len(scenarios))
    changed, flags = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
    factor, after_r, ln_lo, ln_hi = (np.full(shape, np.nan) for _ in range(4))
    for column, scenario in enumerate(scenarios):
        chosen = _chosen(scenario, before.resistances.radius_hydraulic_um, measured.graph.vessel_class)
        changed[:, column] = np.bincount(network[chosen], minlength=shape[0])
        own = _own_factors(scenario, before, chosen, network, state)
        known = np.isfinite(own) | ~np.isfinite(before.network_resistance_pa_s_m3)
        after = state(np.where(chosen, np.nan_to_num(own, nan=1.0)[network], 1.0))
        factor[:, column] = own
        after_r[:, column] = np.where(known, after.network_resistance_pa_s_m3, np.nan)
        ln_hi[:, column] = COVERAGE_FACTOR_95 * _ln_ratio_se(before, after, network, shape[0])
        ln_lo[:, column] = -ln_hi[:, column]
        if intervals is not None:
            drawn = (intervals.draws > 0) & (changed[:, column] > 0) & np.isfinite(after_r[:, column])
            low, high = ratio_bounds(before.drawn, after.drawn, terminals, made, (intervals, drawn))
            ln_lo[drawn, column], ln_hi[drawn, column] = low[drawn], high[drawn]
        beyond = chosen & (after.resistances.flags & int(Flag.LAW_RANGE) > 0)
        flags[:, column] = np.where(np.bincount(network[beyond], minlength=shape[0]) > 0, int(Flag.LAW_RANGE), 0)
        flags[:, column] |= after.circulation.network_flags | np.where(known, 0, int(Flag.OUT_OF_REACH))
    before_r = np.repeat(before.network_resistance_pa_s_m3, shape[1])
    ratio = after_r.ravel() / before_r
    ratio_lo, ratio_hi = _bounded(ratio, ln_lo.ravel(), ln_hi.ravel())
    return ScenarioOutcomes(
        network=np.repeat(np.arange(shape[0]), shape[1]),
        scenario=tuple(scenario.name for scenario in scenarios) * shape[0],
        n_segments_changed=changed.ravel(),
        radius_factor=factor.ravel(),
        resistance_before_pa_s_m3=before_r,
        resistance_after_pa_s_m3=after_r.ravel(),
        ratio=ratio,
        ratio_lo=ratio_lo,
        ratio_hi=ratio_hi,
        flags=flags.ravel() | np.where(no_interval(ratio, ratio_lo), int(Flag.NO_INTERVAL), 0),
    )


def _chosen(scenario: Scenario, radius_um: FloatArray, vessel_class: IntArray) -> BoolArray:
    for name, value in (("radius_factor", scenario.radius_factor), ("wanted_ratio", scenario.wanted_ratio)):
        if value is not None and not (np.isfinite(value) and value > 0):
            msg = f"scenario {scenario.name!r}: {name} is {value}; it must be positive and finite."
            raise DomainError(msg)
    if (scenario.radius_factor is None) == (scenario.wanted_ratio is None):
        msg = f"scenario {scenario.name!r}: give either radius_factor or wanted_ratio."
        raise DomainError(msg)
    chosen = np.isfinite(radius_um)
    if scenario.radius_um_below is not None:
        chosen &= radius_um < scenario.radius_um_below
    if scenario.radius_um_above is not None:
        chosen &= radius_um >= scenario.radius_um_above
    if scenario.vessel_class is not None:
        if scenario.vessel_class.upper() not in VesselClass.__members__:
            msg = (
                f"scenario {scenario.name!r}: vessel_class is {scenario.vessel_class!r}; "
                "it must be arteriole, venule or capillary."
            )
            raise DomainError(msg)
        chosen &= vessel_class == VesselClass[scenario.vessel_class.upper()]
    return chosen


def _own_factors(
    scenario: Scenario, before: _State, chosen: BoolArray, network: IntArray, state: Callable[[FloatArray], _State]
) -> FloatArray:
    """Factor (n_networks,) on the radii of each network's chosen vessels; NaN where no factor gives the wanted ratio.

    Resistance falls as vessels widen, so the ln of the factor lies between 0 and that of `WIDEST_FACTOR`, or its
    negative: a secant search kept inside that bracket, for all networks at once. A network that the narrowest vessels
    close has a ratio beyond all bounds there.
    """
    n = len(before.network_resistance_pa_s_m3)
    if scenario.radius_factor is not None:
        return np.full(n, scenario.radius_factor)
    ln_wanted = float(np.log(scenario.wanted_ratio or 1.0))
    known = np.isfinite(before.network_resistance_pa_s_m3) & (np.bincount(network[chosen], minlength=n) > 0)

    def excess(ln_factor: FloatArray) -> FloatArray:
        after = state(np.where(chosen, np.exp(ln_factor)[network], 1.0)).network_resistance_pa_s_m3
        ratio = np.log(after / before.network_resistance_pa_s_m3)
        return np.where(known, np.where(np.isfinite(ratio), ratio, np.inf) - ln_wanted, 0.0)

    most = -np.sign(ln_wanted) * np.log(WIDEST_FACTOR)
    near, near_excess = np.zeros(n), np.full(n, -ln_wanted)
    share = sum_by(network, np.where(chosen, np.nan_to_num(before.circulation.share), 0.0), n)
    with np.errstate(divide="ignore"):  # half as far again as Poiseuille's law alone would ask for
        far = np.clip(1.5 * ln_wanted / (-4.0 * share), -np.log(WIDEST_FACTOR), np.log(WIDEST_FACTOR))
    far_excess = excess(far)
    short = np.sign(far_excess) == np.sign(near_excess)
    if short.any():
        near, near_excess = np.where(short, far, near), np.where(short, far_excess, near_excess)
        far = np.where(short, most, far)
        far_excess = np.where(short, excess(far), far_excess)
    reached = known & (np.sign(far_excess) != np.sign(near_excess))  # the excess changes its sign in the bracket
    found, last = far, np.zeros(n)
    for _ in range(SEARCH_TURNS):
        with np.errstate(invalid="ignore", divide="ignore"):
            secant = near - near_excess * (far - near) / (far_excess - near_excess)
        inside = np.isfinite(secant) & np.isfinite(far_excess)
        found = np.where(inside, secant, 0.5 * (near + far))
        here = np.where(reached, excess(np.where(reached, found, 0.0)), 0.0)
        if np.all(np.abs(here) < LN_RATIO_ROUNDING):
            break
        side = np.where(np.sign(here) == np.sign(far_excess), 1.0, -1.0)
        beyond = side > 0
        # an end that stays for a second time is given half of its excess, so that the other moves (Illinois rule)
        kept = np.where(side == last, 0.5, 1.0)
        near, near_excess = np.where(beyond, near, found), np.where(beyond, kept * near_excess, here)
        far, far_excess = np.where(beyond, found, far), np.where(beyond, here, kept * far_excess)
        last = side
    return np.where(reached, np.exp(found), np.nan)


def _bounded(ratio: FloatArray, ln_lo: FloatArray, ln_hi: FloatArray) -> tuple[FloatArray, FloatArray]:
    with np.errstate(over="ignore", invalid="ignore"):
        low, high = ratio * np.exp(ln_lo), ratio * np.exp(ln_hi)
    known = np.isfinite(low) & np.isfinite(high)
    return np.where(known, low, np.nan), np.where(known, high, np.nan)


def _ln_ratio_se(before: _State, after: _State, network: IntArray, n_networks: int) -> FloatArray:
    random = after.weighted(after.resistances.ln_random_se) - before.weighted(before.resistances.ln_random_se)
    shared = after.weighted(after.resistances.ln_shared) - before.weighted(before.resistances.ln_shared)
    causes = [sum_by(network, cause, n_networks) for cause in shared.T]
    return quadrature(np.sqrt(sum_by(network, np.square(random), n_networks)), *causes)
