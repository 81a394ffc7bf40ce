import numpy as np
import pytest

from interp.start import flat_start

GRID = 0.12  # neighbouring velocities of the search grid differ by up to 11 %


@pytest.mark.parametrize("wild_share", [0.0, 0.1])
def test_start_finds_the_ground_to_a_step_of_its_grid_with_and_without_wild_picks(wild_share):
    rng = np.random.default_rng(5)
    offset = np.tile(np.arange(2.0, 92.0, 3.0), 4)
    time = np.minimum(offset / 480.0, offset / 2100.0 + 2 * 0.012) + 5e-4 * rng.standard_normal(offset.size)
    wild = rng.random(offset.size) < wild_share
    time[wild] += rng.uniform(0.01, 0.05, wild.sum())
    start = flat_start(offset, time, np.full(offset.size, 5e-4))
    assert start.upper_m_s == pytest.approx(480, rel=GRID)
    assert start.lower_m_s == pytest.approx(2100, rel=2 * GRID)
    assert start.delay_s == pytest.approx(0.012, rel=2 * GRID)


def test_too_few_picks_are_refused():
    with pytest.raises(ValueError, match="at least three"):
        flat_start(np.array([1.0, 2.0]), np.array([0.1, 0.2]), np.array([1e-3, 1e-3]))


def test_times_before_their_time_breaks_are_refused():
    offset = np.arange(1.0, 10.0)
    with pytest.raises(ValueError, match="later than their time breaks, found 0"):
        flat_start(offset, offset / 500.0 - 1.0, np.full(9, 1e-3))
