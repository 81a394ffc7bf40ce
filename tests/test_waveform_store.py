from __future__ import annotations

import numpy as np
import numpy.testing as npt

from synthetic_gathers import waveform_store


def test_stored_waveforms_keep_weak_and_strong_samples():
    rng = np.random.default_rng(1)
    decades = 10.0 ** rng.uniform(-7, 0, (3, 5, 400))
    waveforms = 3e-4 * decades * rng.choice([-1.0, 1.0], decades.shape)
    found = waveform_store.unpack(*waveform_store.pack(waveforms))
    largest = np.max(np.abs(waveforms), axis=-1, keepdims=True)
    # Half a count of asinh(1e4) / 32767 = 3.02e-4: relative where large, times 1e-4 of the largest where small.
    half_count = 0.5 * np.arcsinh(1e4) / 32767
    assert np.all(np.abs(found - waveforms) <= 1.01 * half_count * np.hypot(waveforms, 1e-4 * largest))


def test_a_trace_of_zeros_stays_one():
    found = waveform_store.unpack(*waveform_store.pack(np.zeros((2, 30))))
    npt.assert_array_equal(found, 0.0)


def test_what_is_loaded_is_what_was_packed_and_the_bytes_are_the_same_every_time(tmp_path):
    # Steps from the largest to the smallest count overflow sixteen bits on the way: they must wrap back.
    waveforms = np.where(np.arange(60).reshape(2, 30) % 2 == 0, 1.0, -1.0)
    for name in ("a.npz", "b.npz"):
        waveform_store.save(tmp_path / name, waveforms, interval_s=0.25e-3, x_m=np.arange(2.0))
    found, arrays = waveform_store.load(tmp_path / "a.npz")
    npt.assert_allclose(found, waveforms, rtol=1e-6)
    assert float(arrays["interval_s"]) == 0.25e-3
    npt.assert_array_equal(arrays["x_m"], [0.0, 1.0])
    assert (tmp_path / "a.npz").read_bytes() == (tmp_path / "b.npz").read_bytes()
