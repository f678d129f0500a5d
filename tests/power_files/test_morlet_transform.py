"""morlet_power against a direct sum over samples, and what it refuses to estimate."""

import numpy as np
import pandas as pd
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs


def direct(signal, rate, frequency, cycles):
    """The formula of the docstring, sample by sample."""
    times = np.arange(signal.size) / rate
    sigma = cycles / (2 * np.pi * frequency)
    lags = times[:, None] - times[None, :]
    wavelet = np.exp(-(lags**2) / (2 * sigma**2)) * np.exp(2j * np.pi * frequency * lags)
    steps = np.arange(-2 * signal.size, 2 * signal.size + 1) / rate
    energy = np.sum(np.exp(-(steps**2) / sigma**2)) / rate
    power = 2 * np.abs(wavelet @ (signal - signal.mean()) / rate) ** 2 / energy
    power[(times < 3 * sigma - 1e-12) | (times[-1] - times < 3 * sigma - 1e-12)] = np.nan
    return power


def transformed(signals, rate=100.0, **more):
    more = {"frequencies": [5.0, 12.0, 30.0], "wavelet_cycles": 5.0, "start": -1.0, **more}
    trials, channels, _ = np.shape(signals)
    table = more.pop("trials", pd.DataFrame({"side": (["left", "right"] * trials)[:trials]}))
    return tfs.morlet_power(
        signals,
        sampling_rate=rate,
        channels=[f"C{number}" for number in range(channels)],
        trials=table,
        subject="S1",
        **more,
    )


@settings(deadline=None, max_examples=40)
@given(
    st.integers(200, 420),
    st.floats(60, 200),
    st.integers(1, 7),
    st.floats(1.0, 8.0),
    st.floats(0.02, 0.49),
    st.integers(0, 99),
)
def test_equals_the_direct_sum(samples, rate, every, cycles, share, seed):
    frequency = share * rate
    if 6 * cycles / (2 * np.pi * frequency) > (samples - 1) / rate:
        return
    signal = 3.0 + np.random.default_rng(seed).normal(size=samples)
    power = transformed(signal[None, None], rate, frequencies=[frequency], wavelet_cycles=cycles, every=every)
    expected = direct(signal, rate, frequency, cycles)[::every]
    known = ~np.isnan(expected)
    np.testing.assert_array_equal(~np.isnan(power.values[0, 0, 0]), known)
    scale = expected[known].max() if known.any() else 1.0
    np.testing.assert_allclose(power.values[0, 0, 0][known], expected[known], rtol=0, atol=1e-6 * scale)


def test_keeping_each_kth_time_keeps_the_numbers():
    signals = np.random.default_rng(1).normal(size=(3, 2, 333))
    everything = transformed(signals)
    for every in (2, 3, 10):
        part = transformed(signals, every=every)
        np.testing.assert_allclose(part.values, everything.values[..., ::every], rtol=1e-6)
        np.testing.assert_allclose(part.times, everything.times[::every], rtol=0, atol=1e-12)


def test_signals_do_not_touch_each_other(monkeypatch):
    from tfstats.power_files import morlet_transform

    signals = np.random.default_rng(2).normal(size=(5, 3, 200))
    whole = transformed(signals, frequencies=[10.0, 20.0])
    monkeypatch.setattr(morlet_transform, "_BATCH_VALUES", 500)  # a batch or two of one signal
    np.testing.assert_allclose(transformed(signals, frequencies=[10.0, 20.0]).values, whole.values, rtol=1e-12)
    signals[2, 1, 50] = np.nan
    gap = transformed(signals, frequencies=[10.0, 20.0])
    assert np.isnan(gap.values[2, 1]).all()
    gap.values[2, 1] = whole.values[2, 1]
    np.testing.assert_allclose(gap.values, whole.values, rtol=1e-12)


def test_float32_stays_and_integers_become_float64():
    signals = np.random.default_rng(3).normal(size=(2, 2, 300)) * 50
    exact = transformed(signals)
    single = transformed(signals.astype(np.float32))
    assert single.values.dtype == np.float32
    np.testing.assert_allclose(single.values, exact.values, rtol=1e-3, atol=1e-5 * np.nanmean(exact.values))
    assert transformed(signals.astype(np.int16)).values.dtype == np.float64


def test_what_is_recorded():
    power = transformed(np.random.default_rng(4).normal(size=(2, 2, 300)), wavelet_cycles=[3, 4, 5], every=2)
    assert power.scaling == "density" and power.wavelet_cycles.tolist() == [3.0, 4.0, 5.0]
    assert power.notes == (
        "Power was computed from raw trials by complex Morlet wavelets of unit energy (3 to 5 cycles, 3 frequencies from "
        "5 to 30 Hz, kept at 50 Hz); times closer than 3 sigma_t to either end of a trial were left out.",
    )


def test_induced_power_is_that_of_what_differs_from_the_average():
    rng = np.random.default_rng(5)
    evoked = {"left": 40 * np.sin(np.arange(300) / 3), "right": 40 * np.cos(np.arange(300) / 3)}
    noise = rng.normal(size=(8, 2, 300))
    table = pd.DataFrame({"side": ["left", "right"] * 4, "all": ["one"] * 8})
    signals = noise + np.stack([evoked[side] for side in table["side"]])[:, None]
    induced = transformed(signals, trials=table, subtract_average_by="side")
    rest = noise.copy()
    for side in ("left", "right"):
        mine = (table["side"] == side).to_numpy()
        rest[mine] -= rest[mine].mean(axis=0)
    np.testing.assert_allclose(induced.values, transformed(rest, trials=table).values, rtol=1e-6)
    assert induced.notes[1] == "The average signal over trials of the same side was subtracted (induced power)."
    wrong = transformed(signals, trials=table, subtract_average_by="all")
    assert np.nanmean(wrong.values) > 10 * np.nanmean(induced.values)
    signals[0, 0] = np.nan
    with_gap = transformed(signals, trials=table, subtract_average_by="side")
    assert np.isnan(with_gap.values[0, 0]).all() and np.isfinite(with_gap.values[2, 0]).any()
