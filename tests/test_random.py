"""Standard normals: known answers from numpy's own generator, and independence of tile and path order."""

import numpy as np
import pytest
from scipy import stats

from hedgesim.kernels.random import ZIGGURAT, continue_normals, fill_normals


@pytest.mark.parametrize("seed", [0, 5, 99])
def test_the_same_sfc64_state_gives_the_normals_of_numpy(seed):
    # Source: numpy's Generator(SFC64).standard_normal on the same state (O'Neill's and numpy's SFC64, 256-level ziggurat).
    bits = np.random.SFC64(seed)
    state = bits.state["state"]["state"].reshape(4, 1).copy()
    expected = np.random.Generator(bits).standard_normal(200_000)
    ours = np.empty((200_000, 1))
    continue_normals(state, ours)
    assert np.abs(ours[:, 0] - expected).max() < 1e-14
    assert np.array_equal(state[:, 0], bits.state["state"]["state"])


def test_the_ziggurat_has_the_published_area_and_tail():
    # Marsaglia and Tsang (2000), J. Statistical Software 5(8): r = 3.6541528853610088, v = 0.00492867323399 for 256 levels.
    _, width, height = ZIGGURAT
    assert width[255] * 2**52 == pytest.approx(3.6541528853610088, rel=1e-15)
    area = width[0] * 2**52 * height[255]
    assert area == pytest.approx(0.00492867323399, rel=1e-11)
    # Every strip has the same area: width of the strip times the rise of the density.
    x = width * 2**52
    strips = x[2:] * (height[1:-1] - height[2:])
    assert strips == pytest.approx(area, rel=1e-12)


def test_a_path_has_the_same_normals_in_any_tile():
    whole = np.empty((50, 300))
    fill_normals(9, 0, 1000, whole)
    part = np.empty((50, 7))
    fill_normals(9, 0, 1123, part)
    assert np.array_equal(whole[:, 123:130], part)


def test_seed_stream_and_path_each_change_the_normals():
    base, other_seed, other_stream, other_path = (np.empty((20, 1)) for _ in range(4))
    fill_normals(0, 0, 0, base)
    fill_normals(1, 0, 0, other_seed)
    fill_normals(0, 1, 0, other_stream)
    fill_normals(0, 0, 1, other_path)
    for other in (other_seed, other_stream, other_path):
        assert not np.isclose(base, other).any()


def test_normals_are_standard_and_uncorrelated_across_looks_paths_and_streams():
    z = np.empty((100, 20_000))
    fill_normals(3, 0, 0, z)
    n = z.size
    # Standard errors of the first four moments of n normals: 1, sqrt 2, sqrt 15, sqrt 96 over sqrt n.
    for power, mean, sd in ((1, 0.0, 1.0), (2, 1.0, 2.0**0.5), (3, 0.0, 15.0**0.5), (4, 3.0, 96.0**0.5)):
        assert abs((z**power).mean() - mean) < 4 * sd / n**0.5
    assert stats.kstest(z[0], "norm").pvalue > 1e-4
    other = np.empty_like(z)
    fill_normals(3, 1, 0, other)
    for a, b in ((z[:-1], z[1:]), (z[:, :-1], z[:, 1:]), (z, other)):
        assert abs((a * b).mean()) < 4 / a.size**0.5
    assert (np.abs(z) > 3.6541528853610088).mean() == pytest.approx(2 * stats.norm.sf(3.6541528853610088), rel=0.2)
