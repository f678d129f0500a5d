"""Morlet wavelets and spectra against formulas and against what open recordings are known to show.

Widths: sigma_t = n / (2 pi f), sigma_f = f / n, full width at half maximum of a Gaussian 2.3548 sigma, of its square
1.6651 sigma (common practice; the numbers at 10 Hz and 7 cycles were computed from these formulas).  AR(1) spectrum:
Box & Jenkins 1970, Time Series Analysis (from memory).  Chi-square law of single-trial power: Percival & Walden 1993,
Spectral Analysis for Physical Applications (from memory).  Recordings: Schalk et al. 2004, IEEE TBME 51:1034, and
Zyma et al. 2019, Data 4:14, with rough values computed once by plain Welch or Morlet power in numpy and scipy.
"""

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import scipy.signal

import tfstats as tfs

DATA = Path(__file__).resolve().parents[3] / "shared" / "data"
recordings_present = pytest.mark.skipif(
    not (DATA / "fist_movement.npz").is_file(), reason="the open recordings are not beside the checkout"
)


def one_signal(signal, rate, **more):
    more = {"frequencies": [10.0], "wavelet_cycles": 7, "start": 0.0, **more}
    return tfs.morlet_power(
        np.asarray(signal)[None, None], sampling_rate=rate, channels=["Oz"], trials=pd.DataFrame(index=range(1)),
        subject="S1", **more,
    )  # fmt: skip


def width_at_half(axis, curve):
    half = curve.max() / 2
    above = np.flatnonzero(curve >= half)
    first, last = above[0], above[-1]
    low = np.interp(half, [curve[first - 1], curve[first]], [axis[first - 1], axis[first]])
    high = np.interp(-half, [-curve[last], -curve[last + 1]], [axis[last], axis[last + 1]])
    return high - low


def test_widths_in_time_at_10_hz_and_7_cycles():
    rate = 1000.0
    impulse = np.zeros(4001)
    impulse[2000] = 1.0
    power = one_signal(impulse, rate)
    curve = np.nan_to_num(power.values[0, 0, 0])
    assert width_at_half(power.times, curve) == pytest.approx(0.1855, abs=5e-4)  # of power
    assert width_at_half(power.times, np.sqrt(curve)) == pytest.approx(0.2623, abs=5e-4)  # of the envelope
    # NaN closer than 3 sigma_t = 3 x 0.1114 s to either end.
    known = power.times[~np.isnan(power.values[0, 0, 0])]
    assert known[0] == pytest.approx(0.3342, abs=1e-3) and 4.0 - known[-1] == pytest.approx(0.3342, abs=1e-3)


def test_width_in_frequency_at_10_hz_and_7_cycles():
    rate, seconds = 500.0, np.arange(5000) / 500.0
    around = np.arange(5.0, 15.0, 0.05)
    curve = np.array([
        one_signal(np.sin(2 * np.pi * frequency * seconds), rate, every=50).values[0, 0, 0, 50] for frequency in around
    ])  # fmt: skip
    # Amplitude falls with sigma_f = 10 / 7 = 1.4286 Hz; power with sigma_f / sqrt 2.
    assert width_at_half(around, np.sqrt(curve)) / 2.3548 == pytest.approx(1.4286, abs=5e-3)
    assert width_at_half(around, curve) / 1.6651 == pytest.approx(1.4286, abs=5e-3)


def test_an_event_reaches_two_sigma_with_a_quarter_percent_of_its_energy():
    # Share of a wavelet's energy that lies across an event 2 sigma_t away: half of erfc(2) = 0.0023.
    rate = 1000.0
    sigma = 7 / (2 * np.pi * 10)
    impulse = np.zeros(4001)
    impulse[2000] = 1.0
    curve = np.nan_to_num(one_signal(impulse, rate).values[0, 0, 0])
    far = np.arange(4001) / rate - 2.0 > 2 * sigma
    assert curve[far].sum() / curve.sum() == pytest.approx(0.0023, abs=1e-4)


def test_a_sinusoid_has_its_power_per_hertz():
    # Amplitude a: power a^2 / 2, spread by the wavelet's equivalent bandwidth 2 sqrt(pi) sigma_f... = |W(f)|^2 a^2 / 2.
    seconds = np.arange(4000) / 500.0
    power = one_signal(3.0 * np.sin(2 * np.pi * 10 * seconds), 500.0)
    sigma = 7 / (2 * np.pi * 10)
    expected = 2 * (3.0 / 2) ** 2 * 2 * np.sqrt(np.pi) * sigma
    np.testing.assert_allclose(power.values[0, 0, 0, 1000:3000], expected, rtol=1e-6)


def many(signals, rate, frequencies, cycles=7, **more):
    return tfs.morlet_power(
        signals[:, None], sampling_rate=rate, start=0.0, frequencies=frequencies, wavelet_cycles=cycles, channels=["Oz"],
        trials=pd.DataFrame(index=range(len(signals))), subject="S1", **more,
    )  # fmt: skip


def test_white_noise_has_two_variances_a_sampling_rate():
    noise = np.random.default_rng(6).normal(scale=1.5, size=(300, 1000))
    power = many(noise, 250.0, [4, 10, 30, 60, 110])
    mean = np.nanmean(power.values, axis=(0, 1, 3))
    np.testing.assert_allclose(mean / (2 * 1.5**2 / 250), 1.0, atol=0.04)


@pytest.mark.parametrize("coefficient", [0.5, 0.9, -0.6])
def test_first_order_autoregression(coefficient):
    # S(f) = 1 / (1 - 2 c cos(2 pi f / rate) + c^2), two-sided over unit noise; per Hz one-sided times 2 / rate.
    rate, rng = 200.0, np.random.default_rng(7)
    noise = rng.normal(size=(200, 1600))
    signals = scipy.signal.lfilter([1.0], [1.0, -coefficient], noise, axis=1)[:, 400:]
    frequencies = np.array([5.0, 10.0, 20.0, 40.0, 60.0, 80.0])
    power = many(signals, rate, frequencies, 12, every=4)
    spectrum = 2 / rate / (1 - 2 * coefficient * np.cos(2 * np.pi * frequencies / rate) + coefficient**2)
    mean = np.nanmean(power.values, axis=(0, 1, 3))
    np.testing.assert_allclose(10 * np.log10(mean / spectrum), 0.0, atol=0.35)


def test_single_trials_are_chi_square_with_two_degrees_of_freedom():
    # Mean of decibels 2.5068 dB below the decibels of the mean, their SD 5.5700 dB.
    noise = np.random.default_rng(8).normal(size=(20_000, 101))
    power = many(noise, 100.0, [20.0], 5, every=50)
    values = power.values[:, 0, 0, 1]
    decibels = 10 * np.log10(values)
    assert decibels.mean() - 10 * np.log10(values.mean()) == pytest.approx(-2.5068, abs=0.12)
    assert decibels.std(ddof=1) == pytest.approx(5.5700, abs=0.12)


def test_on_pink_noise_unit_energy_wavelets_return_exponent_one():
    rng, rate, size = np.random.default_rng(9), 256.0, 2048
    bins = np.fft.rfftfreq(size, 1 / rate)
    spectrum = (rng.normal(size=(300, bins.size)) + 1j * rng.normal(size=(300, bins.size))) / np.sqrt(
        np.maximum(bins, 0.125)
    )
    power = many(np.fft.irfft(spectrum, size, axis=1), rate, np.geomspace(3, 60, 12), 6, every=8)
    mean = np.nanmean(power.values, axis=(0, 1, 3))
    slope = np.polyfit(np.log10(power.frequencies), np.log10(mean), 1)[0]
    assert -slope == pytest.approx(1.0, abs=0.05)


def recordings():
    spec = importlib.util.spec_from_file_location("recordings", DATA / "recordings.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@recordings_present
def test_eyes_closed_against_open():
    """8-13 Hz rises by about 10 dB at O1, Oz and O2."""
    data = recordings().eyes_open_closed()
    means = {}
    for state in ("open", "closed"):
        power = tfs.morlet_power(
            data[state], sampling_rate=data["sampling_rate"], start=0.0, frequencies=np.arange(8, 14), wavelet_cycles=5,
            channels=data["channels"], trials=pd.DataFrame(index=range(len(data[state]))), subject="S1", every=4,
        ).select(channels=["O1", "Oz", "O2"])  # fmt: skip
        means[state] = np.nanmean(power.values, axis=(0, 2, 3))
    change = 10 * np.log10(means["closed"] / means["open"])
    np.testing.assert_allclose(change, 10.0, atol=3.0)


@recordings_present
@pytest.mark.parametrize(
    ("runs", "expected"), [((3, 7, 11), {"C3": -1.9, "C4": -1.8, "Cz": 0.0}), ((4, 8, 12), {"C3": -1.8, "C4": -0.9})]
)
def test_fist_movement_against_its_own_baseline(runs, expected):
    """8-13 Hz falls over both motor areas after the cue, hardly at Cz; less over the right one when imagined."""
    data = recordings().fist_movement(runs=runs)
    # Average reference (common practice): against the recording's own, the change is smaller and less local.
    signals = data["trials"] - data["trials"].mean(axis=1, keepdims=True)
    power = tfs.morlet_power(
        signals, sampling_rate=data["sampling_rate"], start=data["start"], frequencies=np.arange(8, 14),
        wavelet_cycles=7, channels=data["channels"], trials=pd.DataFrame({"side": data["side"]}), subject="S1", every=4,
    )  # fmt: skip
    for channel, change in expected.items():
        means = [
            np.nanmean(power.select(channels=[channel], times=window).values) for window in ((-2.0, -0.5), (0.5, 3.5))
        ]
        assert 10 * np.log10(means[1] / means[0]) == pytest.approx(change, abs=0.8)
