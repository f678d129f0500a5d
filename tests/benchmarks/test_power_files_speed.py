"""Speed of reading and transforming power, as ratios against plain h5py and scipy in the same run.

Run with `pytest tests/benchmarks --benchmark-enable`; the ratio is in `extra_info`.  Nothing here can fail on time.
"""

import time

import h5py
import numpy as np
import pandas as pd
import scipy.fft

import tfstats as tfs


def seconds(work, repeats=3):
    taken = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        taken.append(time.perf_counter() - start)
    return min(taken)


def test_morlet_power_against_its_ffts(benchmark):
    """One real FFT a signal and one short inverse FFT a frequency are what no way around exists for."""
    rows, samples, frequencies, every = 400, 961, 40, 4
    signals = np.random.default_rng(0).normal(size=(rows // 8, 8, samples)).astype(np.float32)
    length = every * scipy.fft.next_fast_len(-(-samples * 5 // 4 // every))

    def plain():
        scipy.fft.rfft(signals.reshape(rows, samples), length, axis=1)
        short = np.zeros((rows, length // every), dtype=np.complex64)
        for _ in range(frequencies):
            scipy.fft.ifft(short, axis=1)

    def ours():
        return tfs.morlet_power(
            signals, sampling_rate=160, start=-2.0, frequencies=np.geomspace(2, 70, frequencies),
            wavelet_cycles=np.linspace(3, 10, frequencies), channels=[f"C{number}" for number in range(8)],
            trials=pd.DataFrame(index=range(rows // 8)), subject="S1", every=every,
        )  # fmt: skip

    assert benchmark(ours).values.dtype == np.float32
    benchmark.extra_info["times the FFTs alone"] = seconds(ours) / seconds(plain)


def test_blocks_against_plain_reading(benchmark, tmp_path):
    shape = (60, 32, 40, 200)
    with h5py.File(tmp_path / "S1.h5", "w") as file:
        file["power"] = np.random.default_rng(1).exponential(size=shape).astype(np.float32)
        file["frequencies"], file["times"] = np.geomspace(2, 80, 40), np.arange(200) / 100
        file["channels"] = [f"C{number}" for number in range(32)]

    def plain():
        with h5py.File(tmp_path / "S1.h5") as file:
            return sum(float(file["power"][trial : trial + 30].max()) for trial in range(0, 60, 30))

    def ours():
        return sum(float(block.max()) for _, block in tfs.read_power(tmp_path / "S1.h5").blocks())

    assert benchmark(ours) > 0
    benchmark.extra_info["times plain h5py"] = seconds(ours) / seconds(plain)
