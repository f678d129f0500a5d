"""Components found among runs, against the full graph; rows with more runs than are looked at together."""

import numpy as np
import pytest

from tests.plain_versions import relabelled_maps as plain
from tfstats.kernels.runs import append_runs, largest_of_runs, row_starts_word, run_lists, run_workspace


def runs_of(statistic, critical, tail="two-sided"):
    """The runs of a map in one list, by the kernels, word by word."""
    shape = statistic.shape
    flat = statistic.ravel()
    beyond = plain.beyond_map(statistic, critical, tail).ravel()
    places, masses, _ = run_lists(1, flat.size + 64)
    masses[:] = np.nan
    number = 0
    for first in range(0, flat.size, 64):
        word = sum(1 << k for k in np.flatnonzero(beyond[first : first + 64]).tolist())
        values = np.zeros(64)
        values[: len(flat[first : first + 64])] = flat[first : first + 64]
        number = append_runs(
            np.uint64(word), np.uint64(row_starts_word(first, shape[2])), values, first, places[0], masses[0], number
        )
    return places, masses, number


@pytest.mark.parametrize("wide", [True, False])
@pytest.mark.parametrize("by_extent", [True, False])
@pytest.mark.parametrize(
    ("shape", "critical"),
    [
        ((1, 9, 500), 0.0),  # rows with about 250 runs, several words long
        ((1, 9, 500), 0.9),
        ((1, 40, 7), 0.3),
        ((5, 6, 33), 0.5),
        ((4, 1, 130), 0.2),
        ((3, 70, 1), 0.2),
        ((1, 3, 400), -1.0),  # all points beyond: stretches of 400 cut into runs of at most 64
    ],
)
def test_largest_component_is_that_of_the_full_graph(shape, critical, by_extent, wide):
    generator = np.random.default_rng(abs(hash(shape)) % 1000)
    edges = np.array([(a, b) for b in range(shape[0]) for a in range(b) if generator.random() < 0.6], np.int64).reshape(
        -1, 2
    )
    for smooth in (1, 4):
        statistic = generator.standard_normal(shape)
        statistic[..., ::smooth] += 0.5
        if critical < 0:
            statistic = np.abs(statistic) + 0.1
        places, masses, number = runs_of(statistic, max(critical, 0.0))
        space = run_workspace(places.shape[1] // 2, shape)
        got = largest_of_runs(
            places[0], masses[0], number, shape[2], shape[1] * shape[2], edges, by_extent, wide, *space
        )
        summary = "extent" if by_extent else "mass"
        expected = plain.summary_of_map(statistic, summary, "two-sided", max(critical, 0.0), edges)
        assert got == pytest.approx(expected, rel=1e-12)


def test_many_runs_over_one_wide_run():
    # 100 runs of one point in one row, all of them joined by one long stretch in the next.
    statistic = np.zeros((1, 2, 200))
    statistic[0, 0, ::2] = 2.0
    statistic[0, 1] = 3.0
    places, masses, number = runs_of(statistic, 1.0)
    for wide in (True, False):
        space = run_workspace(places.shape[1] // 2, (1, 2, 200))
        none = np.zeros((0, 2), np.int64)
        assert largest_of_runs(places[0], masses[0], number, 200, 400, none, False, wide, *space) == 800.0
        assert largest_of_runs(places[0], masses[0], 0, 200, 400, none, False, wide, *space) == 0.0


def test_a_list_that_is_too_short_says_how_many_runs_there_are():
    places, masses, _ = run_lists(1, 2)
    values = np.ones(64)
    word = np.uint64(0b1010101)
    assert append_runs(word, np.uint64(0), values, 0, places[0], masses[0], 0) == 4
