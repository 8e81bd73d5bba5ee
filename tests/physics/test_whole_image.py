"""Densities, distances, avascular areas, dimension and lacunarity of patterns with closed forms and by other means."""

from dataclasses import astuple

import numpy as np
import pytest
from beds import bed, published, straight
from numpy.lib.stride_tricks import sliding_window_view
from scipy import ndimage, spatial, stats
from shapes import shape_of
from skimage import draw, measure, morphology

from vasohm.flags import Flag
from vasohm.network.densities import count_boxes, describe_filling, fit_dimension

SMALL = np.zeros((64, 64), dtype=bool)
ALL = np.ones((64, 64), dtype=bool)


def pattern(name):
    return next((inputs, told) for inputs, told in published("vessel_density_toy") if inputs["pattern"] == name)


def test_parallel_stripes():
    """Densities and mean calibre (Chu et al., J Biomed Opt 2016;21:066008) and gap of stripes, by geometry."""
    inputs, told = pattern("parallel stripes")
    pixel, width, period = 0.5, inputs["width_um"] / 0.5, inputs["period_um"] / 0.5
    mask = np.zeros((800, 800), dtype=bool)
    starts = np.arange(0, 800, int(period))
    for start in starts:
        mask[:, start : start + int(width)] = True
    mask[:, -1] = True  # the last gap is closed on both sides, as all others
    nodes, vessels = [], []
    for k, start in enumerate(starts):
        middle = start + width / 2 - 0.5
        nodes += [(middle, -0.5), (middle, 799.5)]
        vessels.append(straight(nodes, 2 * k, 2 * k + 1, inputs["width_um"] / 2, n=801))
    found = shape_of(bed(nodes, vessels, pixel_size_um=pixel), mask=mask, fov=np.ones_like(mask))
    whole, edge = found.whole, 1 / (told["area_density"] * 800)  # the closing column
    assert found.vessel_area_um2 / found.fov_area_um2 == pytest.approx(told["area_density"], rel=2 * edge)
    density = 1000 * whole.length_um / found.fov_area_um2
    assert density == pytest.approx(told["skeleton_density_per_mm"], rel=2 / 800)  # half a step at either end
    assert whole.area_um2 / whole.length_um == pytest.approx(told["diameter_index_um"])
    distances = found.filling.distances  # even between 0 and half a gap
    half = told["gap_um"] / 2
    assert distances.mean_um == pytest.approx(half / 2, rel=2 * pixel / told["gap_um"])
    assert distances.sd_um == pytest.approx(half / np.sqrt(12), rel=2 * pixel / told["gap_um"])
    np.testing.assert_allclose(distances.quantiles_um, half * np.array([0.05, 0.5, 0.95]), atol=pixel)


def test_a_square_mesh_counts_to_its_nodes():
    """By geometry, densities of Chu et al. 2016: 40 mm in 1 mm² though 10 um of each 50 lie inside crossing lumina."""
    inputs, told = pattern("square mesh of lines")
    period, width, n = inputs["period_um"], inputs["width_um"], 10
    nodes = [(period * (i + 0.5), period * (j + 0.5)) for j in range(n) for i in range(n)]
    vessels = []
    for j in range(n):
        for i in range(n):
            for step, last in ((1, i), (n, j)):
                if last < n - 1:
                    a, b = np.array(nodes[j * n + i]), np.array(nodes[j * n + i + step])
                    cut = (b - a) * width / 2 / period  # lumina begin where they leave the other's
                    ends = [tuple(a + cut), tuple(b - cut)]
                    vessel = straight(ends, 0, 1, width / 2)
                    vessels.append(type(vessel)(j * n + i, j * n + i + step, vessel.path_px, vessel.radius_um))
    side = int(period * (n - 1))
    fov = np.zeros((512, 512), dtype=bool)
    fov[: int(period * n), : int(period * n)] = True
    at = np.arange(512) % period
    line = (at >= (period - width) / 2) & (at < (period + width) / 2)
    found = shape_of(bed(nodes, vessels), mask=(line[:, None] | line[None, :]), fov=fov)
    total = n * side * 2
    assert found.whole.length_um == pytest.approx(total)
    assert 1000 * total / (period * n) ** 2 == pytest.approx(told["skeleton_density_per_mm"] * (n - 1) / n)
    assert found.vessel_area_um2 / found.fov_area_um2 == pytest.approx(told["area_density"])


def test_only_the_field_of_view_counts():
    nodes = [(10.0, 150.0), (289.0, 150.0)]
    mask, fov = np.zeros((300, 300), dtype=bool), np.zeros((300, 300), dtype=bool)
    mask[:, ::2] = True
    fov[20:276, 20:276] = True
    found = shape_of(bed(nodes, [straight(nodes, 0, 1, 3.0, n=280)], pixel_size_um=2.0), mask=mask, fov=fov)
    assert found.fov_area_um2 == 256 * 256 * 4.0
    assert found.vessel_area_um2 == 256 * 128 * 4.0
    assert found.whole.length_um == pytest.approx(256 * 2.0, rel=1 / 256)
    assert found.length_um == pytest.approx(279 * 2.0)
    assert found.filling.dimension.value == pytest.approx(2.0, abs=1e-12)  # every box holds a stripe


def test_distances_to_random_lines():
    """Lines of a Poisson process: distances fall off as exp(-2 L_A t), mean 1 / (2 L_A). Over 12 pictures.

    Contact distribution: Stoyan, Kendall and Mecke, Stochastic Geometry and its Applications (from memory).
    What is left of an exponential beyond a line's own width is the same exponential.
    """
    rng = np.random.default_rng(8)
    size, mean, n_pictures, pixel_um = 600, [], 12, 4.0
    for _ in range(n_pictures):
        mask = np.zeros((size, size), dtype=bool)
        reach = size / np.sqrt(2)
        intensity = 20e-3 * pixel_um / np.pi  # of lines by distance and angle: length in an area is pi times it
        for _ in range(rng.poisson(intensity * 2 * reach * np.pi)):
            angle, off = rng.uniform(0, np.pi), rng.uniform(-reach, reach)
            way, normal = np.array([np.cos(angle), np.sin(angle)]), np.array([-np.sin(angle), np.cos(angle)])
            start, stop = (size / 2 + off * normal + sign * 2 * size * way for sign in (-1, 1))
            y, x = draw.line(*np.rint([start[1], start[0], stop[1], stop[0]]).astype(int))
            seen = (x >= 0) & (y >= 0) & (x < size) & (y < size)
            mask[y[seen], x[seen]] = True
        mean.append(describe_filling(mask, np.ones_like(mask), pixel_um).distances.mean_um)
    told = pattern("Poisson line process")[1]["mean_distance_to_nearest_um"]
    scatter = 3 * np.std(mean, ddof=1) / np.sqrt(n_pictures)
    assert np.mean(mean) == pytest.approx(told, abs=scatter)
    assert scatter < 0.15 * told


def test_distances_are_those_of_a_search_tree_and_free_of_the_border():
    """Without a border in reach scipy's nearest neighbours; with one, the wider picture's distances."""
    rng = np.random.default_rng(3)
    mask = np.zeros((400, 400), dtype=bool)
    mask[rng.integers(0, 400, 150), rng.integers(0, 400, 150)] = True
    mask = ndimage.binary_dilation(mask, iterations=3)
    mask[[0, -1]] = mask[:, [0, -1]] = True
    found = describe_filling(mask, np.ones_like(mask), 2.0).distances
    away, _ = spatial.cKDTree(np.argwhere(mask)).query(np.argwhere(~mask))
    away = 2.0 * (away - 0.5)
    assert found.mean_um == pytest.approx(away.mean(), rel=1e-12)
    assert found.sd_um == pytest.approx(away.std(), rel=1e-12)
    np.testing.assert_allclose(found.quantiles_um, np.quantile(away, [0.05, 0.5, 0.95], method="inverted_cdf"))
    parts = [(slice(k, k + 130), slice(m, m + 130)) for k in (10, 135, 260) for m in (10, 135, 260)]
    alone = [describe_filling(mask[part], np.ones((130, 130), dtype=bool), 2.0).distances.mean_um for part in parts]
    naive = np.mean([2 * (ndimage.distance_transform_edt(~mask[part])[~mask[part]] - 0.5).mean() for part in parts])
    inner = away.mean()
    assert abs(np.mean(alone) - inner) < 3 * np.std(alone, ddof=1) / 3  # nine parts
    assert naive > np.mean(alone)  # vessels beyond the border left out seem further away


def test_what_the_border_hides_of_the_tissue_is_told():
    """One vessel at the edge of a field: of tissue beyond its middle nothing is known (product limits by hand).

    A vessel along the left border and a field of w px beyond it: the right half is nearer to the right border than to
    the vessel, so that all events lie in the left half. The estimate then is defective by what the rule leaves.
    """
    w, h = 40, 2001  # so long that the upper and lower border take little part
    mask = np.zeros((h, w + 1), dtype=bool)
    mask[:, 0] = True
    found = describe_filling(mask, np.ones_like(mask), 1.0).distances
    rows, columns = np.mgrid[:h, : w + 1]
    to_vessel, to_border = columns, np.minimum(w + 1 - columns, np.minimum(rows + 1, h - rows))
    seen, at = (to_vessel < to_border)[:, 1:], np.minimum(to_vessel, to_border)[:, 1:]
    survival = {0: 1.0}
    for d in range(1, w):
        dies, at_risk = ((at == d) & seen).sum(), (at >= d).sum()
        survival[d] = survival[d - 1] * (1 - dies / at_risk) if at_risk else survival[d - 1]
    assert found.unseen == pytest.approx(survival[w - 1], rel=0.03)  # equal distances count as to either
    assert 0.0 < found.unseen < 0.2
    assert found.flags == Flag.TISSUE_UNSEEN
    assert np.isnan(found.quantiles_um[2])
    assert np.isfinite(found.quantiles_um[1])
    assert found.mean_um == pytest.approx(sum(survival[d] for d in range(w // 2 + 1)) - 0.5, rel=0.03)
    closed = mask.copy()
    closed[:, -1] = True
    both = describe_filling(closed, np.ones_like(closed), 1.0).distances
    assert (both.unseen, both.flags) == (0.0, Flag.NONE)
    apart, field = np.zeros((9, 20), dtype=bool), np.zeros((9, 20), dtype=bool)
    apart[:, :3] = field[:, :3] = field[:, 11:] = True  # the tissue lies in a part of the field without a vessel
    nothing = describe_filling(apart, field, 1.0).distances
    assert (nothing.unseen, nothing.flags) == (1.0, Flag.TISSUE_UNSEEN)
    assert np.isnan(nothing.mean_um)


def test_the_largest_avascular_area_is_an_opening_and_a_connected_part():
    """scikit-image's opening by a disc and labels; a round hole in a fine mesh, as of a macula, with its own area."""
    y, x = np.mgrid[:400, :400]
    hole = np.hypot(x - 170.3, y - 220.8) <= 80
    mask = ((x % 16 < 3) | (y % 16 < 3)) & ~hole
    ring = np.abs(np.hypot(x - 170.3, y - 220.8) - 81) <= 1
    mask |= ring
    found = describe_filling(mask, np.ones_like(mask), 3.0).avascular
    perimeter = 2 * np.pi * 80 / (np.pi * 80**2)  # one pixel's ring, as part of the area
    assert found.area_um2 == pytest.approx(np.pi * 80**2 * 9, rel=perimeter)
    assert found.radius_um == pytest.approx(80 * 3.0, abs=3.0)
    assert (found.x_px, found.y_px) == (pytest.approx(170.3, abs=0.5), pytest.approx(220.8, abs=0.5))

    rng = np.random.default_rng(12)
    seeds = np.ones((120, 120), dtype=bool)
    seeds[rng.integers(0, 120, 40), rng.integers(0, 120, 40)] = False
    vessels = ndimage.distance_transform_edt(seeds) < 3
    found = describe_filling(vessels, np.ones_like(vessels), 1.0).avascular
    free = np.pad(~vessels, 1)
    away = ndimage.distance_transform_edt(free)
    half = away.max() / 2
    reach = int(half)
    disc = np.hypot(*np.mgrid[-reach : reach + 1, -reach : reach + 1]) <= half
    core = free & (away > half)
    label = measure.label(core, connectivity=1)
    opened = morphology.dilation(label == label.flat[np.argmax(away)], disc) & free
    assert found.area_um2 == opened.sum()
    assert morphology.opening(free, disc)[opened].all()


def test_an_avascular_area_beyond_the_border_is_not_guessed():
    """A picture empty on one side: the circle stays inside the field."""
    mask = np.zeros((200, 200), dtype=bool)
    mask[:, 100] = True
    found = describe_filling(mask, np.ones_like(mask), 1.0).avascular
    assert found.radius_um <= 50
    assert found.area_um2 <= 100 * 200


def carpet(rule, depth):
    result = np.ones((1, 1), dtype=bool)
    for _ in range(depth):
        result = np.kron(result, rule)
    return result


def koch(depth, size, corners):
    """Curve in which each piece is replaced by pieces through these corners of the unit piece; its corners drawn."""
    points = np.array([0, 1], dtype=complex)
    for _ in range(depth):
        parts = points[:-1, None] + np.diff(points)[:, None] * np.array([0, *corners])
        points = np.append(parts.ravel(), points[-1])
    between = np.arange(4) / 4  # pieces of at most 2 px
    points = (points[:-1, None] + np.diff(points)[:, None] * between).ravel() * (size - 1)
    mask = np.zeros((size, size), dtype=bool)
    mask[np.rint(points.imag - points.imag.min()).astype(int), np.rint(points.real).astype(int)] = True
    return mask


SETS = {
    "Koch curve": (koch(6, 1024, [1 / 3, (1 + np.exp(1j * np.pi / 3)) / 3, 2 / 3]), 0.03),
    "quadratic Koch (Minkowski sausage)": (
        koch(5, 1025, np.array([1, 1 + 1j, 2 + 1j, 2, 2 - 1j, 3 - 1j, 3]) / 4), 0.05,
    ),
    "Sierpinski triangle": (np.array([[(i & j) == 0 for j in range(512)] for i in range(512)]), 1e-12),
    "Sierpinski carpet": (carpet(np.array([[1, 1, 1], [1, 0, 1], [1, 1, 1]], dtype=bool), 6), 0.03),
    "Vicsek fractal": (carpet(np.array([[0, 1, 0], [1, 1, 1], [0, 1, 0]], dtype=bool), 6), 0.08),
    "four-corner Cantor dust ratio 1/4": (
        carpet(np.array([[1, 0, 0, 1], [0] * 4, [0] * 4, [1, 0, 0, 1]], dtype=bool), 5), 0.05,
    ),
    "four-corner Cantor dust ratio 1/3": (carpet(np.array([[1, 0, 1], [0] * 3, [1, 0, 1]], dtype=bool), 6), 0.08),
    "straight line": (np.arange(512)[:, None] + np.zeros((1, 512)) == 100, 1e-12),
    "filled square": (np.ones((512, 512), dtype=bool), 1e-12),
}  # fmt: skip


@pytest.mark.parametrize("name", SETS)
def test_box_dimension_of_known_sets(name):
    """Similarity dimension ln N / ln(1 / r) (Falconer, Fractal Geometry, 2014, ch. 9), by scikit-image and scipy.

    Sets of halves exactly; those of thirds and quarters to 0.08, as boxes of powers of two do not fit them.
    """
    told = next(value for inputs, value in published("fractal_dimension") if inputs["set"] == name)
    pixels, within = SETS[name]
    scales = count_boxes(pixels, np.ones_like(pixels))
    found = fit_dimension(scales)
    assert found.value == pytest.approx(told, abs=within)
    assert (found.least_px, found.most_px) == (2, scales.edge_px[-1])
    assert found.most_px <= min(pixels.shape) / 4 < 2 * found.most_px
    for edge, count in zip(scales.edge_px.tolist(), scales.n_occupied, strict=True):
        assert count == measure.block_reduce(pixels, (edge, edge), np.any).sum()
    line = stats.linregress(np.log(scales.edge_px), np.log(scales.n_occupied))
    assert found.value == pytest.approx(-line.slope, rel=1e-9)
    assert found.se == pytest.approx(line.stderr, rel=1e-6, abs=1e-7)


def test_lacunarity_of_random_pixels_and_of_gliding_boxes():
    """Allain and Cloitre 1991: 1 + (1 - p) / (p r²) for independent pixels; boxes slid by hand; 1 for a full one."""
    rng = np.random.default_rng(7)
    size = 1024
    for inputs, told in published("lacunarity_gliding_box"):
        box = inputs["box"]
        if box == "any":
            full = count_boxes(np.ones((256, 256), dtype=bool), np.ones((256, 256), dtype=bool))
            assert full.lacunarity.tolist() == [told] * len(full.edge_px)
        elif box > 1:
            p = inputs["density"]
            scales = count_boxes(rng.random((size, size)) < p, np.ones((size, size), dtype=bool))
            found = scales.lacunarity[scales.edge_px.tolist().index(box)]
            sampling = 4 * np.sqrt(2.0) * (told - 1) * box / size  # of a variance from size²/box² boxes apart
            assert found == pytest.approx(told, abs=sampling)
    mask = ndimage.gaussian_filter(rng.random((60, 70)), 2) > 0.5
    fov = np.hypot(*np.mgrid[-30:30, -35:35]) < 29
    scales = count_boxes(mask & fov, fov)
    first = np.flatnonzero(fov.any(axis=0))[0], np.flatnonzero(fov.any(axis=1))[0]
    for edge, found in zip(scales.edge_px[:2].tolist(), scales.lacunarity, strict=False):
        room = sliding_window_view(fov[first[1] :, first[0] :], (edge, edge)).all(axis=(2, 3))
        mass = sliding_window_view((mask & fov)[first[1] :, first[0] :], (edge, edge)).sum(axis=(2, 3))[room]
        assert found == pytest.approx(np.mean(mass.astype(float) ** 2) / mass.mean() ** 2, rel=1e-12)


def test_nothing_there_is_nothing_known():
    """An empty picture, and one without tissue: gaps, never a zero that would pass for a distance."""
    empty = describe_filling(SMALL, ALL, 1.0)
    full = describe_filling(ALL, ALL, 1.0)
    unseen = describe_filling(ALL, SMALL, 1.0)
    for found in (empty, full, unseen):
        assert np.isnan(found.distances.mean_um)
        assert np.isnan(found.avascular.area_um2)
    for found in (empty, unseen):
        assert np.isnan([found.dimension.value, found.dimension.se, found.lacunarity]).all()
    tiny = describe_filling(np.eye(8, dtype=bool), np.ones((8, 8), dtype=bool), 1.0)
    assert np.isnan(tiny.dimension.value)  # two edges make no line


def test_each_class_has_pixels_of_its_own():
    """Areas and distances of one class would hold the other's vessels."""
    nodes = [(0.0, 40.0), (199.0, 40.0), (0.0, 160.0), (199.0, 160.0)]
    vessels = [straight(nodes, 0, 1, 5.5, n=200), straight(nodes, 2, 3, 5.5, n=200)]
    mask = np.zeros((200, 200), dtype=bool)
    mask[35:46] = mask[155:166] = True
    found = shape_of(bed(nodes, vessels, classes=[1, 2]), mask=mask, fov=np.ones_like(mask)).classes
    fillings = {one.vessel_class.name: one.filling for one in found if one.vessel_class and one.from_um is None}
    alone = mask.copy()
    alone[100:] = False
    expected = describe_filling(alone, np.ones_like(mask), 1.0)
    np.testing.assert_equal(astuple(fillings["ARTERIOLE"].distances), astuple(expected.distances))
    assert fillings["ARTERIOLE"].dimension == expected.dimension
    np.testing.assert_equal(fillings["ARTERIOLE"].scales.lacunarity, expected.scales.lacunarity)
    assert fillings["VENULE"].distances.mean_um != fillings["ARTERIOLE"].distances.mean_um
