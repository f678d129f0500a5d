"""Exact texts of refused settings: drawing until resolved, tail approximation, families of tests."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

PLACES = {"channels": ["Fz"], "frequencies": [4, 8], "times": [0.0, 0.1, 0.2], "unit": "decibel"}


def maps_of(subjects=8, conditions=("a", "b", "c"), seed=0, **columns):
    names = [f"S{number}" for number in range(subjects)]
    values = np.random.default_rng(seed).normal(size=(subjects, len(conditions), 1, 2, 3))
    return tfs.ConditionMaps(
        values, subjects=names, conditions=list(conditions),
        participants=pd.DataFrame({"participant_id": names, **columns}), **PLACES,
    )  # fmt: skip


def paired(subjects=8, first="a", second="b"):
    return tfs.paired(maps_of(subjects), first, second)


def result_of(contrast, **settings):
    return tfs.permutation_test(contrast, tfs.MaxStatistic(), alpha=0.5, **settings)


def refused(make):
    with pytest.raises(tfs.InputError) as caught:
        make()
    return list(caught.value.problems)


@pytest.mark.parametrize(
    ("settings", "texts"),
    [
        (
            {"permutations": "enough"},
            ["permutations: expected a whole number or \"until_resolved\", got 'enough'; 10000 is the usual number."],
        ),
        (
            {"most_permutations": 5000},
            ['most_permutations: expected None unless permutations = "until_resolved", got 5000; leave it out.'],
        ),
        (
            {"most_permutations": 10.5, "alpha": 2},
            [
                "most_permutations: expected a whole number of at least 1000, got 10.5; 100000 is the usual bound.",
                'most_permutations: expected None unless permutations = "until_resolved", got 10.5; leave it out.',
                "alpha: expected a number between 0 and 1, got 2; write 0.05 for five percent.",
            ],
        ),
        (
            {"permutations": "until_resolved", "most_permutations": 10},
            ["most_permutations: expected a whole number of at least 1000, got 10; 100000 is the usual bound."],
        ),
        (
            {"permutations": "until_resolved", "most_permutations": 1000, "alpha": 0.0005},
            [
                "paired, a - b: expected enough subjects for a p of 0.0005, got 8, whose smallest p is 0.007812 (two-sided); "
                "at least 12 subjects are needed."
            ],
        ),
        ({"tail_approximation": "yes"}, ["tail_approximation: expected True or False, got 'yes'; leave it out."]),
        (
            {"permutations": "until_resolved", "tail_approximation": True},
            [
                'tail_approximation: expected False with permutations = "until_resolved", whose decisions are counts, got True; '
                "leave out one of the two."
            ],
        ),
    ],
)
def test_settings_of_one_test(settings, texts):
    assert refused(lambda: tfs.permutation_test(paired(), tfs.ClusterMass(), **settings)) == texts


def test_too_few_subjects_or_relabellings_until_resolved():
    settings = {"permutations": "until_resolved"}
    assert refused(lambda: tfs.permutation_test(paired(5), tfs.MaxStatistic(), **settings)) == [
        "paired, a - b: expected enough subjects for a p of 0.05, got 5, whose smallest p is 0.0625 (two-sided); at least 6 "
        "subjects are needed."
    ]
    groups = tfs.between_groups(maps_of(6, group=list("xxyyyy")), "group", "x", "y", condition="a")
    assert refused(lambda: tfs.permutation_test(groups, tfs.MaxStatistic(), **settings)) == [
        "between_groups, x - y (a): expected enough subjects for a p of 0.05, got 15 distinct relabellings, whose smallest p is "
        "0.06667 (two-sided); add subjects until 1 over the number of relabellings is at most 0.05."
    ]
    settings = {"permutations": "until_resolved", "most_permutations": 1000, "alpha": 0.0005}
    assert refused(lambda: tfs.permutation_test(paired(16), tfs.MaxStatistic(), **settings)) == [
        "most_permutations: expected enough relabellings for a p of 0.0005, got 1000, whose smallest p is 0.001; ask for at "
        "least 2000, better 10000."
    ]


@pytest.mark.parametrize(
    ("settings", "text"),
    [
        (
            {"permutations": "until_resolved"},
            "permutations: expected a whole number for FalseDiscoveryRate, which has a p for every point, got "
            "'until_resolved'; 10000 is the usual number.",
        ),
        (
            {"tail_approximation": True},
            "tail_approximation: expected False for FalseDiscoveryRate, got True; leave it out.",
        ),
    ],
)
def test_settings_that_the_false_discovery_rate_cannot_take(settings, text):
    assert refused(lambda: tfs.permutation_test(paired(), tfs.FalseDiscoveryRate(), **settings)) == [text]


def test_families_without_members():
    one = result_of(paired())
    assert refused(lambda: tfs.family_of_tests([one, one]))[0].startswith(
        "family_of_tests: expected a mapping of name to at least two results, got [<ContrastResult"
    )
    assert refused(lambda: tfs.family_of_tests({"one": one, "two": "p = .03"})) == [
        'family_of_tests, "two": expected a ContrastResult, got str; run permutation_test first.'
    ]


def test_families_whose_relabellings_differ():
    """Each item by its name, and all of one result together."""
    one = result_of(paired(16), permutations=300)
    two = result_of(paired(16, "c"), permutations=200, seed=3, alternative="less")
    remedy = "test them with the same subjects and settings."
    assert refused(lambda: tfs.family_of_tests({"one": one, "two": two})) == [
        f'family_of_tests, "two": expected the number of relabellings of "one" (300), got 200; {remedy}',
        f'family_of_tests, "two": expected the seed of "one" (0), got 3; {remedy}',
        f'family_of_tests, "two": expected the alternative of "one" (two-sided), got less; {remedy}',
    ]
    maps = maps_of(8, sex=list("fmfmfmfm"), group=list("xxxxyyyy"))
    by_sex, by_group = (
        result_of(tfs.between_groups(maps, column, *pair, condition="a"))
        for column, pair in (("sex", ("f", "m")), ("group", ("x", "y")))
    )
    # As many allocations of either grouping, visited in orders that have nothing to do with each other.
    assert by_sex.enumerated and by_sex.null.size == by_group.null.size == 70
    assert refused(lambda: tfs.family_of_tests({"sex": by_sex, "group": by_group})) == [
        'family_of_tests, "group": expected the groups of "sex" (8: 1, 0, 1, 0 ...), got 8: 1, 1, 1, 1 ...; ' + remedy
    ]
    four = maps_of(4, conditions=["a", "b", "c", "d"])
    first, second = (
        result_of(tfs.repeated_measures(four, list(conditions), scheme="labels")) for conditions in ("abc", "abd")
    )
    assert refused(lambda: tfs.family_of_tests({"c": first, "d": second})) == [
        'family_of_tests, "d": expected the conditions of "c" (3: a, b, c), got 3: a, b, d; ' + remedy
    ]
    flipped, shuffled = result_of(paired(8), permutations=70), by_sex
    assert refused(lambda: tfs.family_of_tests({"flipped": flipped, "shuffled": shuffled})) == [
        f'family_of_tests, "shuffled": expected the relabellings of "flipped" (sign_flips), got shuffle; {remedy}',
        f'family_of_tests, "shuffled": expected the enumeration of "flipped" (False), got True; {remedy}',
    ]


def test_families_drawn_until_resolved():
    one, two = (result_of(paired(16, *pair), permutations="until_resolved") for pair in ("ab", "cb"))
    assert refused(lambda: tfs.family_of_tests({"one": one, "two": two}))[:2][0] == (
        f'family_of_tests, "one": expected a number of relabellings that was set before, got {one.record.rows}, drawn until '
        "resolved; give permutations as a whole number."
    )
