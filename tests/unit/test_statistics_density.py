"""Adaptive density estimates against densities whose regions of highest density are known."""

import numpy as np
import pytest
from scipy import stats
from scipy.ndimage import label as connected

from scanfit.results import Axis
from scanfit.statistics.credible import credible_intervals, credible_region, inside_intervals, marginal_density
from scanfit.statistics.density import estimate, sample_range
from scanfit.statistics.kernels import smooth
from scanfit.statistics.levels import LEVELS

FREE = Axis("x", "x", "linear")
UNIT = Axis("u", "u", "linear", 0.0, 1.0)
SIZE = 3000


def region_of(x, y, axes=(FREE, FREE), weights=None):
    region = credible_region(x, y, np.ones(len(x)) if weights is None else weights, axes)
    assert region is not None
    return region


def area(region, label):
    cell = np.prod([edge[1] - edge[0] for edge in region.density.edges])
    return np.count_nonzero(region.density.height >= region.heights[label]) * cell


def pieces(region, label):
    """Connected parts of a region, and holes in it; reference: scipy's labelling."""
    inside = region.density.height >= region.heights[label]
    return connected(inside)[1], connected(~np.pad(inside, 1))[1] - 1


def exact_areas(density, x, y):
    """Areas of the highest-density regions of a known density, by summing it on a fine grid."""
    height = density(*np.meshgrid(x, y, indexing="ij")).ravel()
    cell = (x[1] - x[0]) * (y[1] - y[0])
    held = np.cumsum(np.sort(height)[::-1]) * cell
    assert held[-1] == pytest.approx(1.0, abs=0.005)
    return {label: np.searchsorted(held, level) * cell for label, level in LEVELS.items()}


def band(rng, size, thickness=0.1):
    """A parabola of normal thickness: a shear of a normal density, which leaves areas unchanged."""
    x = rng.normal(size=size)
    return x, 0.5 * np.square(x) + thickness * rng.normal(size=size)


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("correlation", [0.0, 0.95])
def test_area_of_normal_density(seed, correlation):
    x, y = np.random.default_rng(seed).multivariate_normal([0, 0], [[1, correlation], [correlation, 1]], SIZE).T
    region = region_of(x, y)
    for label, level in LEVELS.items():
        expected = np.pi * stats.chi2.ppf(level, 2) * np.sqrt(1.0 - correlation**2)
        assert area(region, label) == pytest.approx(expected, rel=0.08)
        assert pieces(region, label) == (1, 0)


@pytest.mark.parametrize("seed", range(3))
def test_thin_curved_band(seed):
    region = region_of(*band(np.random.default_rng(seed), SIZE))
    for label, limit in (("68", 1.35), ("95", 1.7)):
        expected = np.pi * stats.chi2.ppf(LEVELS[label], 2) * 0.1
        assert 0.9 < area(region, label) / expected < limit
        assert pieces(region, label)[0] == 1


@pytest.mark.parametrize("seed", range(3))
def test_thin_band_beside_broad_component(seed):
    """What one width for all cannot do: the width that the band needs breaks the broad part into speckles."""
    rng = np.random.default_rng(seed)
    x, y = band(rng, SIZE)
    broad = rng.random(SIZE) < 0.5
    x, y = np.where(broad, 1.2 * rng.normal(size=SIZE), x), np.where(broad, 4.0 + 0.8 * rng.normal(size=SIZE), y)

    def density(a, b):
        thin = stats.norm.pdf(a) * stats.norm.pdf(b - 0.5 * np.square(a), scale=0.1)
        return 0.5 * thin + 0.5 * stats.norm.pdf(a, scale=1.2) * stats.norm.pdf(b, 4.0, 0.8)

    exact = exact_areas(density, np.linspace(-6, 6, 1200), np.linspace(-1, 12, 2000))
    region = region_of(x, y)
    assert area(region, "68") == pytest.approx(exact["68"], rel=0.35)
    assert area(region, "95") == pytest.approx(exact["95"], rel=0.15)
    assert sum(pieces(region, "95")) <= 4


def test_two_modes_of_unequal_width():
    rng = np.random.default_rng(1)
    narrow = rng.random(2 * SIZE) < 0.2
    x, y = (np.where(narrow, 8.0 + 0.15 * rng.normal(size=2 * SIZE), rng.normal(size=2 * SIZE)) for _ in range(2))

    def density(a, b):
        wide, narrow = (stats.norm.pdf(a, m, s) * stats.norm.pdf(b, m, s) for m, s in ((0.0, 1.0), (8.0, 0.15)))
        return 0.8 * wide + 0.2 * narrow

    exact = exact_areas(density, np.linspace(-5, 9, 1500), np.linspace(-5, 9, 1500))
    region = region_of(x, y)
    for label in LEVELS:
        assert area(region, label) == pytest.approx(exact[label], rel=0.08)
        assert pieces(region, label) == (2, 0)


@pytest.mark.parametrize("size", [1500, 20_000])
def test_flat_density_is_not_depleted_at_edges(size):
    x, y = np.random.default_rng(2).random((2, size))
    height = region_of(x, y, (UNIT, UNIT)).density.height
    scatter = 4.0 / np.sqrt(size)  # some hundred points on each edge
    assert np.mean([height[0], height[-1], height[:, 0], height[:, -1]]) == pytest.approx(1.0, abs=0.02 + scatter)
    assert np.mean(height[::255, ::255]) == pytest.approx(1.0, abs=0.15 + scatter)
    assert height.std() < 0.05 + 4.0 / np.sqrt(size)


def test_band_that_ends_at_a_bound_is_continued_not_folded():
    """The image of a slanting band must not show as a barb on the other side."""
    rng = np.random.default_rng(3)
    x = rng.random(SIZE)
    y = 0.2 + 0.6 * x + 0.01 * rng.normal(size=SIZE)
    region = region_of(x, y, (UNIT, FREE))
    height, (across, along) = region.density.height, region.density.centres
    last = height[-1] / height[-1].sum()
    assert last @ along == pytest.approx(0.2 + 0.6 * across[-1], abs=0.01)
    assert np.sqrt(last @ np.square(along - last @ along)) < 0.02


def test_weights_make_no_difference_to_the_region():
    rng = np.random.default_rng(4)
    x, y = rng.uniform(-5.0, 5.0, (2, 30_000))
    region = region_of(x, y, weights=stats.norm.pdf(x) * stats.norm.pdf(y))
    assert area(region, "95") == pytest.approx(np.pi * stats.chi2.ppf(LEVELS["95"], 2), rel=0.08)


def test_estimate_is_deterministic_and_normalised():
    points = np.random.default_rng(5).normal(size=(SIZE, 2))
    once, twice = (estimate(points, np.ones(SIZE), [(-5.0, 5.0), (-4.0, 6.0)]) for _ in range(2))
    assert np.array_equal(once.height, twice.height)
    assert once.height.sum() * (10.0 / 256) ** 2 == pytest.approx(1.0)
    assert once.height.min() >= 0.0


def test_order_of_the_points_does_not_matter():
    rng = np.random.default_rng(6)
    points, weights = rng.normal(size=(SIZE, 2)), rng.random(SIZE)
    order = rng.permutation(SIZE)
    one, other = (estimate(points[k], weights[k], [(-5.0, 5.0)] * 2).height for k in (np.arange(SIZE), order))
    assert one == pytest.approx(other, rel=1e-6, abs=1e-9)


def test_single_kernel_has_the_covariance_it_was_given():
    mass = np.zeros((200, 200))
    mass[80, 120] = 2.0
    # Wide and narrow kernels: wide ones take the way over larger cells.
    for covariance in ([9.0, 2.0, 4.0], [400.0, -150.0, 225.0]):
        heights, _ = smooth(mass, np.flatnonzero(mass), np.array(covariance)[:, np.newaxis], (False, False))
        x, y = np.meshgrid(np.arange(200.0), np.arange(200.0), indexing="ij")
        found = np.cov(np.array([x.ravel(), y.ravel()]), aweights=heights.ravel(), ddof=0)  # reference: numpy
        assert heights.sum() == pytest.approx(2.0)
        assert found[0, 0] == pytest.approx(covariance[0], rel=0.05)
        assert found[0, 1] == pytest.approx(covariance[1], rel=0.05)
        assert found[1, 1] == pytest.approx(covariance[2], rel=0.1)  # 0.6^2 is added to every variance


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("size", [300, 1500, 6000])
def test_marginal_of_one_mode_is_not_spiky(seed, size):
    density = marginal_density(np.random.default_rng(seed).normal(size=size), np.ones(size), FREE)
    assert np.mean(np.abs(density.height - stats.norm.pdf(density.centres[0]))) < 0.25 * size**-0.4
    high = density.height[density.height > 0.1 * density.height.max()]
    turns = np.count_nonzero(np.diff(np.sign(np.diff(high))))
    assert turns <= (3 if size == 300 else 1)


def test_spike_on_a_broad_marginal_keeps_its_height():
    rng = np.random.default_rng(7)
    values = np.where(rng.random(SIZE) < 0.3, 0.02 * rng.normal(size=SIZE), rng.normal(size=SIZE))
    density = marginal_density(values, np.ones(SIZE), FREE)
    exact = 0.3 * stats.norm.pdf(0.0, scale=0.02) + 0.7 * stats.norm.pdf(0.0)
    assert density.height.max() == pytest.approx(exact, rel=0.3)
    broad = np.abs(density.centres[0]) > 0.3
    high = density.height[broad & (density.centres[0] > 0)]
    assert np.count_nonzero(np.diff(np.sign(np.diff(high[high > 0.03])))) <= 1


def test_interval_of_a_flat_density_is_not_cut_into_pieces():
    for seed in range(5):
        values = np.random.default_rng(seed).random(2000)
        density = marginal_density(values, np.ones(2000), UNIT)
        ((low, high),) = credible_intervals(density, LEVELS["95"], UNIT)
        grid = density.centres[0]
        assert np.array_equal(inside_intervals(density, LEVELS["95"]), (grid >= low) & (grid <= high))


def test_range_has_room_unless_the_density_is_cut_off():
    rng = np.random.default_rng(8)
    free = (-np.inf, np.inf)
    normal, flat = rng.normal(size=SIZE), rng.random(SIZE)
    low, high = sample_range(normal, np.ones(SIZE), *free)
    assert low < normal.min() - 0.2
    assert high > normal.max() + 0.2
    assert sample_range(flat, np.ones(SIZE), *free) == pytest.approx((flat.min(), flat.max()), abs=1e-3)
    assert sample_range(flat, np.ones(SIZE), 0.0, 1.0) == (0.0, 1.0)
    atom = np.minimum(normal, 0.5)
    assert sample_range(atom, np.ones(SIZE), *free)[1] == 0.5
