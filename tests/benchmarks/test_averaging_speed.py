"""Speed of averaging over trials and of power laws, as ratios against plain numpy in the same run.

Run with `pytest tests/benchmarks/test_averaging_speed.py --benchmark-enable`, or print the table with
`python -m tests.benchmarks.test_averaging_speed`.  Nothing here can fail on time.
"""

from __future__ import annotations

import statistics
import time

import numpy as np
import pandas as pd
import pytest
import scipy.fft

import tfstats as tfs

PAIRS = 9

# 300 trials x 64 channels x 60 frequencies x 300 times of float32 are 1.4 GB: sixteen channels at a time, as a file is read.
SHAPE = (300, 16, 60, 300)

CASES = {
    "average_first, decibel": {},
    "average_first, jackknife": {"trial_counts": "jackknife"},
    "trial_first, decibel": {"order": "trial_first"},
    "trial_by_reference, decibel": {"order": "trial_by_reference"},
    "trial_first, percent change": {"order": "trial_first", "unit": "percent_change"},
    "trial_first, z score": {"order": "trial_first", "unit": "z_score"},
}


def ratio(ours, plain, pairs=PAIRS):
    """Median over pairs of calls, one after the other, so that both meet the same load."""
    ours(), plain()
    found = []
    for _ in range(pairs):
        times = []
        for work in (ours, plain):
            start = time.perf_counter()
            work()
            times.append(time.perf_counter() - start)
        found.append(times[0] / times[1])
    return statistics.median(found)


def power_of(shape=SHAPE, dtype=np.float32):
    values = np.random.default_rng(0).standard_exponential(size=shape, dtype=dtype)
    values += np.asarray(1e-6, dtype)
    return tfs.TrialPower(
        values,
        frequencies=np.geomspace(2, 80, shape[2]),
        times=np.arange(shape[3]) * 0.01 - 1.0,
        channels=[f"C{number}" for number in range(shape[1])],
        trials=pd.DataFrame({"memory": ["recalled", "missed"] * (shape[0] // 2)}),
        subject="S1",
    )


def averaging(name, power):
    choice = dict(CASES[name])
    remedy = {"trial_counts": choice.pop("trial_counts", "as_recorded")}
    baseline = tfs.Baseline((-0.5, -0.2), **choice)

    def work():
        return tfs.condition_maps([power], "memory", baseline, **remedy)

    return work


@pytest.fixture(scope="module")
def power():
    return power_of((60, 4, 30, 200))


@pytest.mark.parametrize("name", CASES)
def test_averaging_against_the_sum_over_trials(benchmark, name, power):
    work = averaging(name, power)
    assert np.isfinite(benchmark(work).values).all()
    if benchmark.enabled:
        large = power_of()
        values = large.values
        benchmark.extra_info["times np.sum over trials"] = ratio(averaging(name, large), lambda: np.sum(values, axis=0))


def wavelets(rows=1600, every=4, samples=961, frequencies=40):
    signals = np.random.default_rng(0).normal(size=(rows // 8, 8, samples)).astype(np.float32)
    length = every * scipy.fft.next_fast_len(-(-samples * 9 // 8 // every))
    short = np.zeros((rows, length // every), dtype=np.complex64)

    def plain():
        scipy.fft.rfft(signals.reshape(rows, samples), length, axis=1)
        for _ in range(frequencies):
            scipy.fft.ifft(short, axis=1)

    def ours():
        return tfs.morlet_power(
            signals, sampling_rate=160, start=-2.0, frequencies=np.geomspace(2, 70, frequencies),
            wavelet_cycles=np.linspace(3, 10, frequencies), channels=[f"C{number}" for number in range(8)],
            trials=pd.DataFrame(index=range(rows // 8)), subject="S1", every=every,
        )  # fmt: skip

    return ours, plain


def lines(spectra=20000, frequencies=60):
    axis = np.geomspace(2, 80, frequencies)
    power = np.random.default_rng(0).gamma(20, 1 / 20, size=(spectra, frequencies)) / axis
    x, y = np.log10(axis), np.log10(power)

    def ours():
        return tfs.fit_power_law(power, axis)

    def plain():
        """The same medians by numpy, some thousand slopes at a time."""
        first, second = np.triu_indices(frequencies, 1)
        for start in range(0, spectra, 1000):
            some = y[start : start + 1000]
            np.median((some[:, second] - some[:, first]) / (x[second] - x[first]), axis=1, overwrite_input=True)

    return ours, plain


def test_power_laws_against_medians_by_numpy(benchmark):
    ours, _ = lines(spectra=200)
    assert benchmark(ours).exponent.shape == (200,)
    if benchmark.enabled:
        benchmark.extra_info["times medians by numpy"] = ratio(*lines(), pairs=3)


def main():
    power = power_of()
    values = power.values
    for name in CASES:
        along = ratio(averaging(name, power), lambda: np.sum(values, axis=0))
        whole = ratio(averaging(name, power), lambda: np.sum(values))
        print(f"{name:32s} {along:6.2f} x np.sum over trials, {whole:6.2f} x np.sum of all")
    for every in (1, 4):
        print(f"{'morlet_power, every=' + str(every):32s} {ratio(*wavelets(every=every)):6.2f} x its FFTs, one thread")
    print(f"{'power laws':32s} {ratio(*lines(), pairs=3):6.2f} x medians by numpy")


if __name__ == "__main__":
    main()
