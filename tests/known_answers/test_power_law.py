"""Exponents of noises with a known power law, by both scalings of wavelets, and the spectrum of AR(1) in closed form.

White 0, pink 1, Brownian 2: common practice.  AR(1): S(f) = 1 / (1 - 2 phi cos(2 pi f / fs) + phi^2), any textbook of time
series (Box & Jenkins 1970), from memory.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

RATE = 250.0


def autoregressive_spectrum(frequencies, phi):
    return 1.0 / (1.0 - 2.0 * phi * np.cos(2 * np.pi * frequencies / RATE) + phi**2)


def noise(exponent, trials, samples, seed):
    """Gaussian noise whose power spectral density is f^-exponent, shaped in the frequency domain."""
    random = np.random.default_rng(seed)
    long = 4 * samples
    spectrum = np.fft.rfft(random.normal(size=(trials, long)))
    frequencies = np.fft.rfftfreq(long, 1 / RATE)
    spectrum[:, 0] = 0
    spectrum[:, 1:] *= frequencies[1:] ** (-exponent / 2)
    return np.fft.irfft(spectrum, long)[:, :samples]


@pytest.mark.parametrize("exponent", [0.0, 1.0, 1.7, 2.0])
@pytest.mark.parametrize("level", [-26.0, 0.0, 3.0])
def test_an_exact_power_law_is_found_exactly(exponent, level):
    frequencies = np.geomspace(2, 80, 30)
    density = 10.0**level * frequencies**-exponent
    fit = tfs.fit_power_law(density, frequencies)
    assert (fit.exponent, fit.level_at_1_hz) == (pytest.approx(exponent, abs=1e-9), pytest.approx(level, abs=1e-9))
    # Wavelets of unit gain: power grows with the bandwidth, which grows with frequency.
    fit = tfs.fit_power_law(density * frequencies, frequencies, scaling="amplitude")
    assert (fit.exponent, fit.level_at_1_hz) == (pytest.approx(exponent, abs=1e-9), pytest.approx(level, abs=1e-9))
    cycles = np.linspace(3, 10, 30)
    fit = tfs.fit_power_law(density * frequencies / cycles, frequencies, scaling="amplitude", wavelet_cycles=cycles)
    assert fit.exponent == pytest.approx(exponent, abs=1e-9)


@pytest.mark.parametrize("exponent", [0.0, 1.0, 2.0])
def test_white_pink_and_brownian_noise_by_wavelets_of_unit_energy(exponent):
    signals = noise(exponent, 60, 750, seed=1)[:, None]
    frequencies = np.geomspace(4, 60, 12)
    power = tfs.morlet_power(
        signals, sampling_rate=RATE, start=-1.0, frequencies=frequencies, wavelet_cycles=6, channels=["Cz"],
        trials=pd.DataFrame({"memory": ["a"] * 60}), subject="S1", every=5,
    )  # fmt: skip
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(unit="none"))
    rows = tfs.power_law_maps(maps, (0.0, 1.0))
    assert rows.exponent.values.item() == pytest.approx(exponent, abs=0.12)
    assert rows.exponent.unit == "exponent" and rows.level.unit == "log10 power"


@pytest.mark.parametrize("exponent", [0.0, 1.0, 2.0])
def test_white_pink_and_brownian_noise_by_wavelets_of_unit_gain(exponent):
    """The wavelets are made here: exp(-t^2 / 2 sigma^2) exp(2 pi i f t), scaled so that a sine at f keeps its amplitude."""
    signals = noise(exponent, 60, 750, seed=2)
    frequencies = np.geomspace(4, 60, 12)
    spectrum = []
    for frequency in frequencies:
        sigma = 6 / (2 * np.pi * frequency)
        seconds = np.arange(-int(4 * sigma * RATE), int(4 * sigma * RATE) + 1) / RATE
        envelope = np.exp(-(seconds**2) / (2 * sigma**2))
        wavelet = 2 * envelope / envelope.sum() * np.exp(2j * np.pi * frequency * seconds)
        made = np.array([np.convolve(signal, wavelet, mode="valid") for signal in signals])
        spectrum.append(np.mean(np.abs(made) ** 2))
    assert tfs.fit_power_law(spectrum, frequencies, scaling="amplitude").exponent == pytest.approx(exponent, abs=0.12)
    # Read as density the same power would be one too flat.
    assert tfs.fit_power_law(spectrum, frequencies).exponent == pytest.approx(exponent - 1, abs=0.12)


@pytest.mark.parametrize("phi", [0.5, 0.9])
@pytest.mark.parametrize("centre", [5.0, 20.0, 60.0])
def test_the_local_exponent_of_an_autoregression_in_closed_form(phi, centre):
    """-d log S / d log f = w 2 phi sin w / (1 - 2 phi cos w + phi^2), w = 2 pi f / fs."""
    frequencies = centre * np.linspace(0.99, 1.01, 9)
    angle = 2 * np.pi * centre / RATE
    expected = angle * 2 * phi * np.sin(angle) / (1 - 2 * phi * np.cos(angle) + phi**2)
    fit = tfs.fit_power_law(autoregressive_spectrum(frequencies, phi), frequencies)
    assert fit.exponent == pytest.approx(expected, rel=2e-3)


def test_the_bend_of_an_autoregression():
    """Far below half the sampling rate AR(1) is flat below fs (1 - phi) / (2 pi sqrt(phi)) and falls with exponent 2 above."""
    phi, frequencies = 0.9, np.arange(0.5, 25.1, 0.5)
    fit = tfs.fit_power_law(autoregressive_spectrum(frequencies, phi), frequencies, bend=True)
    assert fit.bend_frequency == pytest.approx(RATE * (1 - phi) / (2 * np.pi * np.sqrt(phi)), rel=0.03)
    assert fit.exponent == pytest.approx(2.0, abs=0.06)
    assert fit.level_at_1_hz == pytest.approx(np.log10(autoregressive_spectrum(1.0, phi)), abs=0.01)


def test_periodograms_of_a_simulated_autoregression_agree_with_its_closed_form():
    random = np.random.default_rng(3)
    phi, trials, samples = 0.8, 200, 500
    signals = np.zeros((trials, samples + 200))
    steps = random.normal(size=signals.shape)
    for sample in range(1, signals.shape[1]):
        signals[:, sample] = phi * signals[:, sample - 1] + steps[:, sample]
    taper = np.hanning(samples)  # against leakage from the steep part
    periodogram = np.mean(np.abs(np.fft.rfft(taper * signals[:, 200:])) ** 2, axis=0) / np.sum(taper**2)
    frequencies = np.fft.rfftfreq(samples, 1 / RATE)
    part = (frequencies >= 2) & (frequencies <= 80)
    simulated = tfs.fit_power_law(periodogram[part], frequencies[part])
    closed = tfs.fit_power_law(autoregressive_spectrum(frequencies[part], phi), frequencies[part])
    assert simulated.exponent == pytest.approx(closed.exponent, abs=0.03)
    assert simulated.level_at_1_hz == pytest.approx(closed.level_at_1_hz, abs=0.08)  # extrapolated below 2 Hz
