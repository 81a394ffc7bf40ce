import numpy as np
import numpy.testing as npt
import pytest

from picker.moveout import Moveout, path_posterior, smooth_times

TIME_S = 0.001 * np.arange(40)


def enumerated(likelihood, offset_m, moveout, slack_s):
    """The posterior of path_posterior by going through every path: times and classes of slowness of three traces."""
    slowness = moveout.slowness_s_m()
    classes, times = slowness.size, TIME_S.size
    interval = TIME_S[1] - TIME_S[0]
    mixing = np.array([[moveout.faster ** (q - p) if p <= q else moveout.slower ** (p - q) for p in range(classes)]
                       for q in range(classes)])  # fmt: skip
    mixing /= mixing.sum(axis=1, keepdims=True)
    inside = ((offset_m / moveout.fastest_m_s - slack_s)[:, None] <= TIME_S) & (
        (offset_m / moveout.slowest_m_s + slack_s)[:, None] >= TIME_S
    )
    allowed = inside[:, None, :] & (
        slowness[None, :, None] * offset_m[:, None, None] <= 1.33 * np.maximum(TIME_S, 0) + slack_s
    )
    allowed = allowed * np.where(slowness > 0, 1.0, 0.1)[None, :, None]
    state = likelihood[:, None, :] * allowed
    lag = np.abs(TIME_S[:, None] - TIME_S[None, :]) / interval
    steps = []
    for i in range(1, offset_m.size):
        run = offset_m[i] - offset_m[i - 1]
        decay = np.exp(-interval / (moveout.residual_s + moveout.residual_s_m * run))
        smooth = (1 - decay) / (1 + decay) * decay**lag
        step = np.zeros((classes, times, classes, times))
        for q in range(classes):
            shift = slowness[q] * run / interval
            whole = int(np.floor(shift))
            move = np.zeros((times, times))
            for t in range(times):
                for u, share in ((t + whole, 1 - (shift - whole)), (t + whole + 1, shift - whole)):
                    if 0 <= u < times:
                        move[t, u] += share
            step[q] = np.einsum("tu,uv,p->tpv", move, smooth, mixing[q]).reshape(times, classes, times)
        steps.append(step)
    forward = [state[0]]
    for i, step in enumerate(steps, start=1):
        forward.append(np.einsum("qt,qtpv->pv", forward[-1], step) * state[i])
    backward = [np.ones((classes, times))]
    for i in range(offset_m.size - 1, 0, -1):
        backward.insert(0, np.einsum("qtpv,pv->qt", steps[i - 1], backward[0] * state[i]))
    posterior = np.array([(f * b).sum(axis=0) for f, b in zip(forward, backward, strict=True)])
    return posterior / posterior.sum(axis=1, keepdims=True)


@pytest.mark.parametrize("seed", range(3))
def test_the_posterior_is_that_of_summing_over_every_path(seed):
    rng = np.random.default_rng(seed)
    offset_m = np.array([2.0, 4.0, 7.0])
    moveout = Moveout(slowness_steps=6)
    likelihood = rng.uniform(size=(3, TIME_S.size)) ** 6 + 1e-3
    found = path_posterior(likelihood, offset_m, TIME_S, moveout, 0.005)
    # the same sums in another order: rounding
    npt.assert_allclose(found, enumerated(likelihood, offset_m, moveout, 0.005), rtol=0, atol=1e-9)


def test_the_path_keeps_to_the_velocities_allowed():
    offset_m = np.arange(1, 21) * 2.0
    moveout = Moveout(fastest_m_s=3000.0, slowest_m_s=400.0)
    time_s = 0.001 * np.arange(200)
    posterior = path_posterior(np.ones((20, 200)), offset_m, time_s, moveout, 0.002)
    outside = (time_s < (offset_m / 3000.0 - 0.002)[:, None]) | (time_s > (offset_m / 400.0 + 0.002)[:, None])
    assert posterior[outside].max() == 0
    npt.assert_allclose(posterior.sum(axis=1), 1.0, rtol=1e-9)


def test_a_trace_that_shows_nothing_is_found_from_its_neighbours():
    offset_m = np.arange(1, 13) * 3.0
    time_s = 0.001 * np.arange(120)
    truth = 0.012 + offset_m / 1500.0
    likelihood = np.exp(-0.5 * ((time_s - truth[:, None]) / 0.001) ** 2) + 1e-6
    likelihood[6] = 1.0
    posterior = path_posterior(likelihood, offset_m, time_s, Moveout(), 0.005)
    # neighbours 3 m away bound the time to a fraction of their spacing over the slowest velocity in play
    assert abs(time_s @ posterior[6] - truth[6]) < 0.002
    mean = time_s @ posterior[6]
    assert 0.0003 < np.sqrt(((time_s - mean) ** 2) @ posterior[6]) < 0.004


def test_one_wild_trace_does_not_bend_the_path():
    offset_m = np.arange(1, 13) * 3.0
    time_s = 0.001 * np.arange(120)
    truth = 0.012 + offset_m / 1500.0
    likelihood = np.exp(-0.5 * ((time_s - truth[:, None]) / 0.001) ** 2) + 1e-6
    wild = truth.copy()
    wild[6] = 0.09
    likelihood[6] = np.exp(-0.5 * ((time_s - wild[6]) / 0.001) ** 2) + 1e-6
    posterior = path_posterior(likelihood, offset_m, time_s, Moveout(), 0.005)
    assert abs(time_s @ posterior[5] - truth[5]) < 0.001
    assert posterior[6, 80:].sum() < 0.01


def test_smoothing_keeps_the_sum_and_the_middle():
    values = np.zeros((1, 201))
    values[0, 100] = 1.0
    smooth = smooth_times(values, 0.001, 0.002)[0]
    npt.assert_allclose(smooth.sum(), 1.0, rtol=1e-9)  # the tails end 50 scales from the middle
    npt.assert_allclose(smooth, smooth[::-1], atol=1e-15)
