"""Source wavelets: causal, smooth at the start, with the spectrum their names promise."""

import numpy as np
import pytest

from synthetic_gathers.wavelets import damped, hammer, weight_drop

FAMILIES = [hammer(50.0), weight_drop(35.0), damped(50.0), damped(80.0, damping=0.8)]
each_family = pytest.mark.parametrize("wavelet", FAMILIES, ids=lambda w: f"{w.name}_{w.dominant_hz:g}")


@each_family
def test_a_wavelet_is_exactly_zero_until_the_blow(wavelet):
    assert np.all(wavelet(np.linspace(-0.1, 0.0, 101)) == 0.0)
    assert wavelet(1e-4) > 0.0


@each_family
def test_a_wavelet_starts_with_the_cube_of_time(wavelet):
    early_s = 1e-4 / wavelet.dominant_hz
    # Twice the time, eight times the force; the next term of the series is below 1e-3 so early.
    assert wavelet(2 * early_s) / wavelet(early_s) == pytest.approx(8.0, rel=2e-3)


@each_family
def test_the_spectrum_of_the_rate_of_force_peaks_at_the_dominant_frequency(wavelet):
    interval_s = 2e-5
    force = wavelet(np.arange(0.0, 1.0, interval_s))
    frequency_hz = np.fft.rfftfreq(16 * force.size, interval_s)
    spectrum = frequency_hz * np.abs(np.fft.rfft(force, 16 * force.size))
    # Padded to 16 s: the frequencies are 0.06 Hz apart, 0.2 % of the lowest dominant frequency here.
    assert frequency_hz[np.argmax(spectrum)] == pytest.approx(wavelet.dominant_hz, rel=3e-3)


@each_family
def test_a_wavelet_peaks_at_one_and_is_over_after_its_duration(wavelet):
    force = np.abs(wavelet(np.linspace(0.0, 3 * wavelet.duration_s, 60001)))
    # 20000 points to the duration: the peak is missed by less than 1e-6.
    assert force.max() == pytest.approx(1.0, abs=1e-5)
    assert force[20001:].max() < 1e-6


@pytest.mark.parametrize("wavelet", [hammer(50.0), weight_drop(35.0)], ids=lambda w: w.name)
def test_a_blow_pushes_one_way(wavelet):
    assert wavelet(np.linspace(0.0, 1.0, 10001)).min() >= 0.0


def test_the_damped_wavelet_is_minimum_phase():
    interval_s = 1e-4
    force = damped(50.0)(np.arange(0.0, 1.6, interval_s))
    amplitude = np.abs(np.fft.fft(force))
    # Minimum phase is the Hilbert transform of the log amplitude (Oppenheim and Schafer, Discrete-Time Signal
    # Processing; from memory): fold the cepstrum forward and transform back.
    cepstrum = np.fft.ifft(np.log(amplitude)).real
    half = force.size // 2
    cepstrum[1:half] *= 2.0
    cepstrum[half + 1 :] = 0.0
    rebuilt = np.fft.ifft(np.exp(np.fft.fft(cepstrum))).real
    # Sampling s^-4 poles adds zeros near the Nyquist frequency, a shift of about one sample (0.5 % of a cycle).
    lag = min(np.linalg.norm(np.roll(rebuilt, k) - force) for k in range(-2, 3))
    assert lag / np.linalg.norm(force) < 0.05


@each_family
def test_nearly_all_energy_lies_below_the_highest_frequency(wavelet):
    interval_s = 1e-4
    force = wavelet(np.arange(0.0, 2.0, interval_s))
    frequency_hz = np.fft.rfftfreq(force.size, interval_s)
    energy = (frequency_hz * np.abs(np.fft.rfft(force))) ** 2
    below = energy[frequency_hz <= wavelet.highest_hz].sum() / energy.sum()
    # 99 % by definition; bins are 0.5 Hz wide and hold up to 0.1 % each on that flank.
    assert below == pytest.approx(0.99, abs=1.5e-3)


@pytest.mark.parametrize("family", [hammer, weight_drop, damped])
@pytest.mark.parametrize("frequency_hz", [0.0, -5.0, np.nan, np.inf])
def test_a_dominant_frequency_that_makes_no_sense_is_refused(family, frequency_hz):
    with pytest.raises(ValueError, match="dominant_hz"):
        family(frequency_hz)


def test_a_damping_that_makes_no_sense_is_refused():
    with pytest.raises(ValueError, match="damping"):
        damped(50.0, damping=0.0)
