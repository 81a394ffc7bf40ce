"""The elastic modeller against closed forms: direct, head and Rayleigh waves, whole waveforms, reciprocity.

Its own default spacing where nothing else is said: the grid that users get.
"""

import numpy as np
import pytest
from lamb import rayleigh_speed_m_s
from lamb import surface_velocity as half_space_velocity
from layered_reference import surface_velocity as layered_velocity

from synthetic_gathers.elastic import PEAK_FORCE_N_M, simulate
from synthetic_gathers.model import Layer, LayeredModel
from synthetic_gathers.wavelets import hammer

INTERVAL_S = 0.25e-3
GRAVEL, SLATE = (520.0, 260.0, 1750.0), (2450.0, 1250.0, 2350.0)  # vp, vs m/s, density kg/m3


def level(elevation_m):
    return lambda x_m: np.full(np.shape(x_m), elevation_m)


def plane(elevation_m, slope_rad):
    """Elevations of a plane that rises by `slope_rad` and has `elevation_m` at x = 0."""
    return lambda x_m: elevation_m + np.tan(slope_rad) * np.asarray(x_m, dtype=np.float64)


def half_space(layer, slope_rad=0.0):
    return LayeredModel(plane(0.0, slope_rad), (Layer(*layer),), ())


def flat_layer(depth_m):
    return LayeredModel(level(0.0), (Layer(*GRAVEL), Layer(*SLATE)), (level(-depth_m),))


def samples_s(duration_s):
    return INTERVAL_S * np.arange(round(duration_s / INTERVAL_S))


def misfit(trace, reference):
    return np.linalg.norm(trace - reference, axis=-1) / np.linalg.norm(reference, axis=-1)


def lag_s(later, earlier):
    """Time by which a trace is behind another: the peak of their correlation, on samples 16 times finer."""
    size = 2 * later.size
    product = np.fft.rfft(later, size) * np.conj(np.fft.rfft(earlier, size))
    place = int(np.argmax(np.fft.irfft(product, 16 * size)))
    return (place if place < 8 * size else place - 16 * size) * INTERVAL_S / 16


def reaches_s(trace, onset_s, share):
    """Time at which the first swing after the onset, upward and so negative, reaches a share of its own peak."""
    up = -np.asarray(trace, dtype=np.float64)
    peak = int(onset_s / INTERVAL_S) + 4
    while not (up[peak] > 0 and up[peak] > up[peak - 1] and up[peak] >= up[peak + 1]):
        peak += 1
    after = int(np.argmax(up[: peak + 1] > share * up[peak]))
    return (after - (up[after] - share * up[peak]) / (up[after] - up[after - 1])) * INTERVAL_S


# --- a half-space: Lamb's problem -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("poisson_ratio", "published"),
    # cR / beta for Poisson's ratios of 1/4 and 1/2: Lord Rayleigh (1885), On waves propagated along the plane surface
    # of an elastic solid, Proc. London Math. Soc. 17, 4-11: 0.9194 and 0.9554 (0.9553).
    [(0.25, 0.9194), (0.4999999, 0.9553)],
)
def test_the_reference_itself_has_the_published_rayleigh_speeds(poisson_ratio, published):
    ratio = np.sqrt((2 - 2 * poisson_ratio) / (1 - 2 * poisson_ratio))
    assert rayleigh_speed_m_s(200.0 * ratio, 200.0) / 200.0 == pytest.approx(published, abs=1e-4)


@pytest.mark.parametrize("poisson_ratio", [0.25, 0.4, 0.45])
def test_rayleigh_waves_run_at_the_speed_of_the_rayleigh_equation(poisson_ratio):
    # Rayleigh (1885), and the approximation of I. A. Viktorov (1967), Rayleigh and Lamb Waves, Plenum:
    # cR / beta = (0.87 + 1.12 nu) / (1 + nu), good to 0.5 %; from memory.
    vs_m_s = 200.0
    vp_m_s = vs_m_s * np.sqrt((2 - 2 * poisson_ratio) / (1 - 2 * poisson_ratio))
    traces = simulate(
        half_space((vp_m_s, vs_m_s, 1800.0)),
        0.0,
        [10.0, 20.0],
        duration_s=0.18,
        interval_s=INTERVAL_S,
        wavelet=hammer(50.0),
    )
    speed_m_s = 10.0 / lag_s(traces[1], traces[0])
    # 0.3 to 0.45 % slow by the dispersion of the grid at 8 points to the shortest wave, 20 to the dominant one.
    assert speed_m_s == pytest.approx(rayleigh_speed_m_s(vp_m_s, vs_m_s), rel=5e-3)
    assert speed_m_s == pytest.approx(vs_m_s * (0.87 + 1.12 * poisson_ratio) / (1 + poisson_ratio), rel=1e-2)


def test_the_surface_of_a_half_space_moves_as_lamb_says_and_closer_by_the_second_order():
    # Whole waveforms in m/s, the force of 1000 N/m included; H. Lamb (1904), see lamb.py.
    ground, wavelet, duration_s = (400.0, 200.0, 1700.0), hammer(50.0), 0.06
    exact = PEAK_FORCE_N_M * half_space_velocity(wavelet, samples_s(duration_s), 6.0, *ground)
    options = {"duration_s": duration_s, "interval_s": INTERVAL_S, "wavelet": wavelet}
    default, half, quarter = (
        misfit(simulate(half_space(ground), 0.0, [6.0], spacing_m=spacing_m, **options)[0], exact)
        for spacing_m in (0.24, 0.12, 0.06)
    )
    # 0.24 m is the default. A wave 0.4 % slow over 30 ms is 0.12 ms late: 0.05 of the norm at 50 to 80 Hz.
    assert default < 0.07
    # Second order: fourfold. Were edges thinner in metres on finer grids, the last halving would give 2.4.
    assert default / half > 3.0
    assert half / quarter > 3.0


@pytest.mark.parametrize(("slope_deg", "allowed"), [(0.0, 0.05), (10.0, 0.15)])
def test_a_sloping_surface_moves_as_lamb_says(slope_deg, allowed):
    # Lamb (1904), load and motion split along and across the slope. The staircase of the surface makes surface waves
    # 0.8 % slow at 10 degrees, 0.3 ms at 10 m: that is 0.12 of the norm here, and 0.04 on the flat.
    slope_rad, wavelet, along_m = np.deg2rad(slope_deg), hammer(50.0), np.array([5.0, 10.0])
    duration_s = 0.09
    time_s = samples_s(duration_s)
    exact = [PEAK_FORCE_N_M * half_space_velocity(wavelet, time_s, s_m, *GRAVEL, slope_rad) for s_m in along_m]
    found = simulate(
        half_space(GRAVEL, slope_rad),
        0.0,
        along_m * np.cos(slope_rad),
        duration_s=duration_s,
        interval_s=INTERVAL_S,
        wavelet=wavelet,
        spacing_m=0.25,
    )
    assert np.all(misfit(found, np.array(exact)) < allowed)


def test_the_direct_wave_arrives_at_offset_over_velocity():
    # t = x / V1 (definition). P along the surface starts weakly: what must not be there before, and what must be
    # there soon after, is told by Lamb's solution on the same samples.
    wavelet, duration_s, offset_m = hammer(60.0), 0.08, np.array([8.0, 16.0, 32.0])
    traces = simulate(half_space(GRAVEL), 0.0, offset_m, duration_s=duration_s, interval_s=INTERVAL_S, wavelet=wavelet)
    time_s = samples_s(duration_s)
    for trace, x_m in zip(traces, offset_m, strict=True):
        onset_s, shear_s = x_m / GRAVEL[0], x_m / GRAVEL[1]
        exact = PEAK_FORCE_N_M * half_space_velocity(wavelet, time_s, x_m, *GRAVEL)
        largest = np.abs(exact[time_s < shear_s]).max()
        # Finite differences are not strictly causal; -60 dB of the P wave is far below the noise of any record.
        assert np.abs(trace[time_s <= onset_s]).max() < 1e-3 * largest
        # 1 % and 10 % of the first swing, as late as in the exact wave to 0.1 ms: a picker reads to 0.2 ms at best.
        for share in (0.01, 0.1):
            assert reaches_s(trace, onset_s, share) == pytest.approx(reaches_s(exact, onset_s, share), abs=0.1e-3)


# --- a layer over a half-space: head waves ---------------------------------------------------------------------------


@pytest.fixture(scope="module")
def over_rock():
    """Offsets, exact traces and modelled traces over 5 m of gravel on slate, up to 0.1 s."""
    offset_m, duration_s, wavelet = np.array([20.0, 40.0, 80.0]), 0.1, hammer(60.0)
    exact = [layered_velocity(wavelet, 60.0, samples_s(duration_s), x_m, GRAVEL, SLATE, 5.0) for x_m in offset_m]
    found = simulate(flat_layer(5.0), 0.0, offset_m, duration_s=duration_s, interval_s=INTERVAL_S, wavelet=wavelet)
    return offset_m, PEAK_FORCE_N_M * np.array(exact), found


def flat_head_wave_s(offset_m, depth_m):
    """t = x / V2 + 2 h sqrt(1 / V1^2 - 1 / V2^2) (Telford, Geldart, Sheriff 1990, Applied Geophysics, section 4.3)."""
    return offset_m / SLATE[0] + 2 * depth_m * np.sqrt(1 / GRAVEL[0] ** 2 - 1 / SLATE[0] ** 2)


def test_the_exact_head_wave_is_still_at_the_head_wave_time_and_grows_slowly_after_it(over_rock):
    # The reference against the closed form, and how much of a late reading is physics. With a force that starts like
    # t^3 the velocity of a two-dimensional direct wave starts like t^2.5, of a head wave, which is integrated once
    # more, like t^3.5 (L. Cagniard 1939, Reflexion et refraction des ondes seismiques progressives, from memory;
    # exponents derived).
    # 16.2 ms of push then reach 1 % of the first swing 0.65 ms (direct) and 1.72 ms (head wave) after the onset, and
    # 10 % after 1.68 and 3.46 ms; between these two lies a head wave near its critical distance.
    offset_m, exact, _ = over_rock
    for trace, x_m in zip(exact, offset_m, strict=True):
        onset_s = flat_head_wave_s(x_m, 5.0)
        swing = np.abs(trace[: int((onset_s + 0.01) / INTERVAL_S)]).max()
        # What comes round in time is damped by exp(-12): 1e-5 of ground roll that is up to 100 times stronger.
        assert np.abs(trace[samples_s(0.1) <= onset_s]).max() < 1e-3 * swing
        assert 0.65e-3 < reaches_s(trace, onset_s, 0.01) - onset_s < 1.72e-3
        assert 1.68e-3 < reaches_s(trace, onset_s, 0.1) - onset_s < 3.46e-3


def test_head_waves_of_flat_layers_arrive_when_they_must_and_grow_as_they_must(over_rock):
    # Head-wave time from Telford et al., growth from the sum of plane waves (Bouchon and Aki 1977).
    offset_m, exact, found = over_rock
    for trace, reference, x_m in zip(found, exact, offset_m, strict=True):
        onset_s = flat_head_wave_s(x_m, 5.0)
        before = samples_s(0.1) <= onset_s - INTERVAL_S
        first = slice(0, int((onset_s + 0.012) / INTERVAL_S))
        # -60 dB and 0.1 ms as for the direct wave; found -75 dB and 0.07 ms, of which half the spacing leaves 0.01 ms.
        assert np.abs(trace[before]).max() < 1e-3 * np.abs(reference[first]).max()
        for share in (0.01, 0.1, 0.5):
            assert reaches_s(trace, onset_s, share) == pytest.approx(reaches_s(reference, onset_s, share), abs=0.1e-3)
        # 12 ms, one swing up and one down: 0.07 ms late at the default spacing is 3 % of the norm.
        assert misfit(trace[first], reference[first]) < 0.04


def test_the_whole_trace_of_a_layer_over_rock_is_that_of_the_sum_of_plane_waves(over_rock):
    # Reflections, guided and converted waves, and from the edges what they send back; at 20 m ground roll as well,
    # which is 0.4 % of 80 ms late: 0.11 of the norm. Elsewhere 0.03.
    _offset_m, exact, found = over_rock
    assert np.all(misfit(found, exact) < 0.15)


@pytest.mark.slow
def test_half_the_spacing_brings_the_head_wave_to_a_hundredth_of_a_millisecond():
    wavelet, x_m, duration_s = hammer(60.0), 20.0, 0.045
    onset_s = flat_head_wave_s(x_m, 5.0)
    exact = layered_velocity(wavelet, 60.0, samples_s(duration_s), x_m, GRAVEL, SLATE, 5.0)
    options = {"duration_s": duration_s, "interval_s": INTERVAL_S, "wavelet": wavelet}
    late_s = []
    for spacing_m in (0.26, 0.13):
        trace = simulate(flat_layer(5.0), 0.0, [x_m], spacing_m=spacing_m, **options)[0]
        late_s.append(reaches_s(trace, onset_s, 0.1) - reaches_s(exact, onset_s, 0.1))
    # Second order: 0.07 ms late, then a quarter of that; the reading itself is good to 0.01 ms (linear in 0.25 ms).
    assert abs(late_s[1]) < 0.02e-3
    assert abs(late_s[1]) < 0.5 * abs(late_s[0])


def dipping_head_wave_s(offset_m, perpendicular_m, dip_rad):
    """t = x sin(ic + dip) / V1 + 2 d cos(ic) / V1, d perpendicular under the shot, dip positive away from it.

    Repository geoscixyz/gpg, content/seismic/refraction/seismic_refraction_dipping_layers.rst.
    """
    critical_rad = np.arcsin(GRAVEL[0] / SLATE[0])
    return (offset_m * np.sin(critical_rad + dip_rad) + 2 * perpendicular_m * np.cos(critical_rad)) / GRAVEL[0]


def test_head_waves_of_a_dipping_refractor_arrive_when_they_must_in_both_directions():
    dip_rad, length_m = np.deg2rad(10.0), 40.0
    near_m = 3.0 * np.cos(dip_rad)  # perpendicular depth where 3 m lie under the ground; the far end lies deeper
    model = LayeredModel(level(0.0), (Layer(*GRAVEL), Layer(*SLATE)), (plane(-3.0, -dip_rad),))
    options = {"duration_s": 0.08, "interval_s": INTERVAL_S, "wavelet": hammer(60.0)}
    far_m = near_m + length_m * np.sin(dip_rad)
    ends_s = []
    for source_m, perpendicular_m, dip in ((0.0, near_m, dip_rad), (length_m, far_m, -dip_rad)):
        offset_m = np.array([30.0, 35.0, 40.0])
        traces = simulate(model, source_m, np.abs(source_m - offset_m), **options)
        onset_s = dipping_head_wave_s(offset_m, perpendicular_m, dip)
        read_s = np.array([reaches_s(trace, onset, 0.1) for trace, onset in zip(traces, onset_s, strict=True)])
        # As late as over a flat refractor at the depth halfway, 2.1 to 2.4 ms, which is physics (above), and then by
        # what the grid adds, 0.05 ms: an apparent velocity (V1 / sin(ic + dip)) wrong by 1 % would be 0.15 ms.
        halfway_m = perpendicular_m + 0.5 * offset_m * np.sin(dip)
        late_s = [
            reaches_s(
                layered_velocity(hammer(60.0), 60.0, samples_s(0.08), x_m, GRAVEL, SLATE, depth_m),
                flat_head_wave_s(x_m, depth_m),
                0.1,
            )
            - flat_head_wave_s(x_m, depth_m)
            for x_m, depth_m in zip(offset_m, halfway_m, strict=True)
        ]
        np.testing.assert_allclose(read_s - onset_s, late_s, atol=0.1e-3)
        ends_s.append(read_s[2])
    # Reciprocal time: the same both ways, on nodes of the same grid.
    assert ends_s[0] == pytest.approx(ends_s[1], abs=0.01e-3)


# --- reciprocity -----------------------------------------------------------------------------------------------------


def exchange_misfit(model, spacing_m):
    """Misfit between the traces of two shots 10 m apart that change places with their geophone, over 0.1 s."""
    options = {"duration_s": 0.1, "interval_s": INTERVAL_S, "wavelet": hammer(40.0), "spacing_m": spacing_m}
    forth = simulate(model, 2.0, [12.0], **options)[0]
    return misfit(simulate(model, 12.0, [2.0], **options)[0], forth)


# Betti's theorem (K. Aki, P. G. Richards, Quantitative Seismology, section 2.3): vertical force and vertical motion
# change places, over any ground. 0.3 m is the default spacing here.
SOIL, ROCK = Layer(400.0, 200.0, 1700.0), Layer(2000.0, 1000.0, 2200.0)


def test_source_and_geophone_change_places_without_changing_the_trace_on_flat_ground():
    # Over a dipping rockhead, so that the two ends differ. What is left, 0.3 %, are the cells next to the surface,
    # where the order of the stencils changes; a source half a cell off its place would leave 24 %.
    assert exchange_misfit(LayeredModel(level(0.0), (SOIL, ROCK), (plane(-3.0, 0.1),)), 0.3) < 5e-3


@pytest.mark.slow
def test_reciprocity_over_hills_holds_better_on_finer_grids():
    # The theorem holds for the differential equation; over a staircase of cells it holds to the error of the
    # staircase, and that must go away with it: spacing to 2/3, error to 2/3 or less (second order: 0.44).
    def surface(x_m):
        return 50.0 + 2.0 * np.sin(x_m / 6.0) + 0.1 * x_m

    model = LayeredModel(surface, (SOIL, ROCK), (lambda x_m: surface(x_m) - 3.0 - np.cos(x_m / 4.0),))
    coarse, fine = exchange_misfit(model, 0.3), exchange_misfit(model, 0.2)
    assert coarse < 0.06
    assert fine < 2.0 / 3.0 * coarse
