"""Curvature of curves with closed forms, inflections, and what smoothing takes away."""

import numpy as np
import pytest
from beds import Vessel, bed, published, straight
from scipy import integrate, ndimage
from shapes import shape_of

from vasohm.network.graph import NodeKind
from vasohm.network.tortuosity import SIGMA_PX, describe_curves


def curve(x, y, px_per_unit, pixel_size_um=1.0):
    """One vessel along a curve, a point a pixel."""
    s = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))]) * px_per_unit
    at = np.linspace(0, s[-1], round(s[-1]) + 1)
    path = np.stack([np.interp(at, s, x), np.interp(at, s, y)], axis=1) * px_per_unit
    nodes = [tuple(path[0]), tuple(path[-1])]
    return bed(nodes, [Vessel(0, 1, path, np.full(len(path), 3.0))], pixel_size_um=pixel_size_um)


def arc(turn, radius_px, **known):
    at = np.linspace(0, turn, 20001)
    return curve(np.cos(at), np.sin(at), radius_px, **known)


@pytest.mark.parametrize(("case", "turn", "radius"), [(0, np.pi, 1.0), (1, np.pi / 2, 2.0), (2, np.pi / 3, 1.0)])
def test_arcs_have_the_curvature_of_their_closed_forms(case, turn, radius):
    """Hart et al. 1999, tau 1 to 3: to the ends of an arc, however long, and in any unit."""
    _, told = published("tortuosity_indices")[case]
    unit_um = 50.0  # one unit of length of the published curves
    measured = arc(turn, radius * unit_um / 0.5, pixel_size_um=0.5)
    found = describe_curves(measured)
    polygon = (0.5 / (radius * unit_um)) ** 2 + 1 / len(
        measured.s_um
    )  # steps for an arc, and one turn less than points
    assert shape_of(measured).tortuosity[0] == pytest.approx(told["arc_over_chord"], rel=polygon)
    assert found.curvature_rad[0] == pytest.approx(told["total_curvature"], rel=polygon)
    squared = told["total_squared_curvature"] / unit_um
    assert found.squared_curvature_per_um[0] == pytest.approx(squared, rel=2 * polygon)
    assert found.inflections[0] == 0
    whole = shape_of(measured).whole
    assert whole.curvature_per_mm == pytest.approx(1000 * told["tc_over_arc"] / unit_um, rel=2 * polygon)
    assert whole.squared_curvature_per_mm2 == pytest.approx(1e6 * told["tsc_over_arc"] / unit_um**2, rel=2 * polygon)


@pytest.mark.parametrize("case", range(3, 7))
def test_sines_have_the_curvature_of_their_integrals(case):
    inputs, told = published("tortuosity_indices")[case]
    x = np.linspace(0, 2 * np.pi, 200001)
    px_per_unit = 1000.0
    measured = curve(x, inputs["A"] * np.sin(x), px_per_unit)
    found = describe_curves(measured)
    tightest_px = px_per_unit / inputs["A"]  # radius of curvature at the crest
    flattened = 4 * (SIGMA_PX / tightest_px) ** 2 * (1 + inputs["A"] ** 2) + 1e-3
    assert shape_of(measured).tortuosity[0] == pytest.approx(told["arc_over_chord"], rel=1e-6)
    assert found.curvature_rad[0] == pytest.approx(told["total_curvature"], rel=flattened)
    squared = told["total_squared_curvature"] / px_per_unit
    assert found.squared_curvature_per_um[0] == pytest.approx(squared, rel=2 * flattened)
    assert found.inflections[0] == told["interior_inflections"]


@pytest.mark.parametrize(("wave_px", "lost", "lost_square"), [(120, 0.01, 0.04), (60, 0.05, 0.14), (30, 0.19, 0.41)])
def test_fast_bends_lose_what_is_stated(wave_px, lost, lost_square):
    """The description of the columns would mislead whoever compares small vessels. To half of the last digit told."""
    amplitude, k = wave_px / 12, 2 * np.pi / wave_px
    x = np.linspace(0, 5 * wave_px, 200001)
    found = describe_curves(curve(x, amplitude * np.sin(k * x), 1.0))

    def curvature(at):
        return amplitude * k**2 * np.sin(k * at) / (1 + (amplitude * k * np.cos(k * at)) ** 2) ** 1.5

    def speed(at):
        return np.hypot(1, amplitude * k * np.cos(k * at))

    half = wave_px / 2
    total = 10 * integrate.quad(lambda at: abs(curvature(at)) * speed(at), 0, half)[0]
    squared = 10 * integrate.quad(lambda at: curvature(at) ** 2 * speed(at), 0, half)[0]
    assert 1 - found.curvature_rad[0] / total == pytest.approx(lost, abs=0.006)
    assert 1 - found.squared_curvature_per_um[0] / squared == pytest.approx(lost_square, abs=0.006)
    assert found.inflections[0] == 9  # ten half waves


def test_a_straight_vessel_with_noise_has_no_inflection():
    """Bends that turn by less than 0.2 rad are not told from noise of a quarter of a pixel."""
    rng = np.random.default_rng(1)
    x = np.linspace(0, 300, 301)
    noise = np.convolve(rng.normal(0, 1, 301), np.exp(-0.5 * (np.arange(-8, 9) / 2.5) ** 2), "same")
    found = describe_curves(curve(x, 0.25 * noise / noise.std(), 1.0))
    assert found.inflections[0] == 0
    straight_line = describe_curves(curve(x, 0 * x, 1.0))
    assert straight_line.curvature_rad[0] == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("half_wave_px", [100, 400])
@pytest.mark.parametrize("turn_rad", [0.3, 1.0])
def test_noise_does_not_part_a_long_bend(half_wave_px, turn_rad):
    """A gentle S has one inflection, however its turns waver by noise of 0.15 px, three times that of drawn tubes."""
    rng = np.random.default_rng(3)
    x = np.linspace(0, 2 * half_wave_px, 2 * half_wave_px + 1)
    k = np.pi / half_wave_px
    for _ in range(10):
        noise = ndimage.gaussian_filter1d(rng.normal(0, 1, len(x)), 2.5)
        found = describe_curves(curve(x, turn_rad / (2 * k) * np.sin(k * x) + 0.15 * noise / noise.std(), 1.0))
        assert found.inflections[0] == 1


def test_the_straight_way_into_a_branching_does_not_count():
    """A child that is led into its node at 60° would gain a radian that the vessel does not have."""
    nodes = [(0.0, 100.0), (100.0, 100.0), (200.0, 100.0), (108.0, 113.86)]
    bent = np.concatenate([np.linspace(nodes[1], nodes[3], 17), np.linspace(nodes[3], (208.0, 113.86), 101)[1:]])
    vessels = [straight(nodes, 0, 1, 8.0, n=101), straight(nodes, 1, 2, 7.0, n=101)]
    measured = bed([*nodes[:3], tuple(bent[-1])], [*vessels, Vessel(1, 3, bent, np.full(len(bent), 5.0))])
    assert describe_curves(measured).curvature_rad[2] < 0.05


def test_too_short_a_vessel_has_no_curvature_and_a_ring_no_tortuosity():
    nodes = [(0.0, 0.0), (9.0, 0.0)]
    short = shape_of(bed(nodes, [straight(nodes, 0, 1, 2.0, n=10)]))
    assert np.isnan(short.curves.curvature_rad[0])
    assert np.isnan(short.whole.curvature_per_mm)
    at = np.linspace(0, 2 * np.pi, 401)
    ring = Vessel(0, 0, 100 + 50 * np.stack([np.cos(at), np.sin(at)], axis=1), np.full(401, 4.0))
    found = shape_of(bed([(150.0, 100.0)], [ring], kinds=[NodeKind.LOOP]))
    assert np.isnan(found.tortuosity[0])
    assert np.isnan(found.whole.tortuosity_mean)
    assert found.curves.curvature_rad[0] == pytest.approx(2 * np.pi, rel=2 / 400)
    assert found.network_loops.tolist() == [1]


def test_classes_of_vessels_and_of_calibre_are_summed_apart():
    """Rows of classes.csv: all, each class, and each class of calibre within it."""
    at = np.linspace(0, np.pi / 2, 158)
    quarter = 100 * np.stack([np.cos(at), np.sin(at)], axis=1) + 150
    nodes = [(0.0, 10.0), (200.0, 10.0), tuple(quarter[0]), tuple(quarter[-1]), (0.0, 400.0), (300.0, 400.0)]
    vessels = [straight(nodes, 0, 1, 5.0, n=201), Vessel(2, 3, quarter, np.full(158, 5.0))]
    vessels.append(straight(nodes, 4, 5, 12.0, n=301))
    found = {
        (one.vessel_class.name, one.from_um): one.shape
        for one in shape_of(bed(nodes, vessels, classes=[1, 2, 2])).classes
    }
    assert list(found) == [
        ("NONE", None), ("NONE", 0.0), ("NONE", 10.0),
        ("ARTERIOLE", None), ("ARTERIOLE", 0.0), ("VENULE", None), ("VENULE", 0.0), ("VENULE", 10.0),
    ]  # fmt: skip
    assert found["ARTERIOLE", None].tortuosity_mean == pytest.approx(1.0)
    assert found["VENULE", 0.0].tortuosity_mean == pytest.approx(np.pi / np.sqrt(8), rel=1e-4)
    assert found["VENULE", 10.0].length_um == pytest.approx(300.0)
    assert found["VENULE", 0.0].curvature_per_mm == pytest.approx(1000 / 100, rel=2 / 157)
    whole = found["NONE", None]
    assert whole.n_segments == 3
    assert whole.area_um2 == pytest.approx(2 * (5 * 200 + 5 * 50 * np.pi + 12 * 300), rel=1e-4)
