"""How often a study without any effect is called significant somewhere: for every design and correction.

Each cell simulates studies by `null_studies`, tests each at .05 and counts those with any point in the mask.  A cell fails when
the exact binomial interval of its rate (Clopper & Pearson 1934, Biometrika 26:404) lies above the level.  The interval of that
verdict has the confidence 1 - .05/400, so that about 400 cells together raise one false complaint in twenty runs; the table
shows the ordinary 95 % interval.  Cells in `WEAK_POINTS` are known to reject too often: they must lie where they are known to.

The full run takes hours on one core:

    FALSE_ALARM_TABLE=rates.tsv python -m pytest -m slow tests/false_alarms/test_family_wise_rates.py

`FALSE_ALARM_TABLE` names the table, written a line a cell as the run goes; without it the table lies in pytest's temporary
folder and its path is printed at the end (-s).  `FALSE_ALARM_STUDIES` is the number of studies a cell, 1000 if left out.
An ordinary run looks at a few cells of 200 studies.
"""

from __future__ import annotations

import os
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tests.false_alarms import null_studies
from tfstats.corrections import CORRECTIONS
from tfstats.foundations.errors import InputError

ALPHA = 0.05
STUDIES = int(os.environ.get("FALSE_ALARM_STUDIES", "1000"))
VERDICT = 1 - 0.05 / 400
COLUMNS = (
    "design",
    "units",
    "data",
    "correction",
    "alternative",
    "level",
    "studies",
    "rejected",
    "rate",
    "low",
    "high",
)
EVERY_CORRECTION = tuple(CORRECTIONS)
MAIN_CORRECTIONS = ("cluster_mass", "maximum")


def interval(rejected, studies, confidence):
    exact = stats.binomtest(rejected, studies).proportion_ci(confidence, method="exact")
    return exact.low, exact.high


@dataclass(frozen=True)
class Group:
    """Studies that several corrections share."""

    design: str
    units: int
    data: str
    corrections: tuple[str, ...] = MAIN_CORRECTIONS
    alternative: str = "two-sided"
    level: float = ALPHA
    robust: str | None = None
    relabellings: int = 200
    forming_p: float = 0.05
    """Clusters are formed at .05 here: at .01 a small plane seldom holds one and the test would be easy to pass."""

    def correction(self, kind):
        return CORRECTIONS[kind](**({"forming_p": self.forming_p} if kind.startswith("cluster_") else {}))

    def __str__(self):
        return f"{self.design}, n{self.units}, {self.data}" + (f", {self.robust}" if self.robust else "")


def rejections(make, group, studies):
    """By correction, how many studies hold a point of corrected p at most the level."""
    rejected = dict.fromkeys(group.corrections, 0)
    for study in range(studies):
        rng = np.random.default_rng([zlib.crc32(str(group).encode()), study])
        contrast = make(rng, group.units, group.data)
        for kind in rejected:
            result = tfs.permutation_test(
                contrast, group.correction(kind), permutations=group.relabellings, seed=study,
                alternative=group.alternative, alpha=group.level, robust=group.robust, threads=1,
            )  # fmt: skip
            rejected[kind] += bool(result.mask.any())
    return rejected


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    """A function that writes one line of the table."""
    named = os.environ.get("FALSE_ALARM_TABLE")
    path = Path(named) if named else tmp_path_factory.mktemp("rates") / "family_wise_rates.tsv"
    if not path.exists():
        path.write_text("\t".join(COLUMNS) + "\n", encoding="utf-8")

    def write(group, kind, studies, rejected):
        low, high = interval(rejected, studies, 0.95)
        design = group.design + (f", {group.robust}" if group.robust else "")
        cells = (design, group.units, group.data, kind, group.alternative, group.level, studies, rejected,
                 f"{rejected / studies:.4f}", f"{low:.4f}", f"{high:.4f}")  # fmt: skip
        with path.open("a", encoding="utf-8") as lines:
            lines.write("\t".join(str(cell) for cell in cells) + "\n")

    yield write
    print(f"\nfamily-wise rates: {path}")


def check(group, studies, table, make=None):
    too_often = []
    for kind, rejected in rejections(make or null_studies.DESIGNS[group.design], group, studies).items():
        table(group, kind, studies, rejected)
        low, high = interval(rejected, studies, VERDICT)
        if low > group.level:
            too_often.append(f"{kind} {rejected} of {studies}, {low:.3f} to {high:.3f}")
    assert not too_often, f"{group}, level {group.level}: {'; '.join(too_often)}"


def units_of(design):
    """Subjects; trials are more, since a circle of n labels has n places only."""
    return (24, 48, 96) if design.startswith("trialwise") else (8, 16, 32)


def groups():
    for design in null_studies.DESIGNS:
        few, middle, many = units_of(design)
        yield Group(design, middle, "gaussian", EVERY_CORRECTION)
        yield Group(design, few, "gaussian")
        yield Group(design, many, "gaussian")
        for data in harder_data(design):
            yield Group(design, few, data)
            yield Group(design, middle, data)
            yield Group(design, many, data)
    for robust in ("trimmed", "rank"):
        for units in (8, 16, 32):
            yield Group("paired", units, "gaussian", robust=robust)
            yield Group("paired", units, "skewed", robust=robust)


def harder_data(design):
    """What the design must bear: differences of skewed conditions are symmetric, the skewed values themselves are not."""
    if design.startswith("trialwise"):
        shuffles = "assigned" in design  # autocorrelated labels were not drawn at random: a known weak point
        return () if shuffles else ("autocorrelated",)
    if design.startswith("trial_effect"):
        return ("autocorrelated",)
    if design == "paired, from trials":
        return ("skewed",)
    if design in (
        "against_zero",
        "repeated_measures, labels",
        "repeated_measures, a:b:c",
        "trend",
        "weighted",
        "interaction",
    ):
        return ("unequal",) if "labels" not in design else ("skewed",)
    return ("skewed", "unequal")


@pytest.mark.slow
@pytest.mark.parametrize("group", list(groups()), ids=str)
def test_no_more_false_alarms_than_the_level(group, table):
    check(group, STUDIES, table)


@dataclass(frozen=True)
class WeakPoint:
    """Where a design is known to reject too often, and how often it is known to."""

    group: Group
    make: object
    low: float
    high: float


def point(design, units, data, alternative="two-sided", level=ALPHA):
    return Group(design, units, data, ("maximum",), alternative, level)


def default_clusters(design):
    return Group(design, 32, "unequal", ("cluster_mass",), forming_p=0.01)


# The rates are those of the project's rules of statistics, simulated there with 400 to 2,000 studies a cell; those marked
# "here" were measured with these studies, 400 a cell, and are not in the rules.
WEAK_POINTS = (
    WeakPoint(point("against_zero, exponential", 16, "skewed", "less", 0.025), null_studies.skewed_point, 0.07, 0.08),
    WeakPoint(default_clusters("Welch, 8 against 24, SD 3:1"), null_studies.unequal_groups(False), 0.11, 0.11),
    WeakPoint(default_clusters("pooled, 8 against 24, SD 3:1"), null_studies.unequal_groups(True), 0.63, 0.63),
    WeakPoint(
        point("Welch, 8 against 24, SD 3:1", 32, "unequal"), null_studies.unequal_groups(False), 0.16, 0.25
    ),  # here
    WeakPoint(
        point("pooled, 8 against 24, SD 3:1", 32, "unequal"), null_studies.unequal_groups(True), 0.77, 0.86
    ),  # here
    WeakPoint(point("slope, spread grows", 16, "unequal"), null_studies.spread_grows_with_score, 0.14, 0.24),  # here
    WeakPoint(point("labels, SD 1:1:3", 16, "unequal"), null_studies.unequal_conditions("labels"), 0.07, 0.10),
    WeakPoint(point("shuffled trials, AR .6", 200, "drift"), null_studies.drifting_point("assigned", 0.6), 0.13, 0.13),
    WeakPoint(point("shuffled trials, AR .9", 200, "drift"), null_studies.drifting_point("assigned", 0.9), 0.45, 0.45),
    WeakPoint(point("shifted trials, AR .6", 200, "drift"), null_studies.drifting_point("behaviour", 0.6), 0.06, 0.06),
    WeakPoint(point("shifted trials, AR .9", 200, "drift"), null_studies.drifting_point("behaviour", 0.9), 0.07, 0.07),
)


@pytest.mark.slow
@pytest.mark.parametrize("weak", WEAK_POINTS, ids=lambda weak: f"{weak.group}, {weak.group.corrections[0]}")
def test_known_weak_points_are_where_they_are_known_to_be(weak, table):
    elsewhere = []
    for kind, rejected in rejections(weak.make, weak.group, STUDIES).items():
        table(weak.group, kind, STUDIES, rejected)
        low, high = interval(rejected, STUDIES, VERDICT)
        # What was printed with two digits is itself an estimate from a like number of studies.
        if high < weak.low - 0.005 or low > weak.high + 0.005:
            elsewhere.append(f"{kind} {rejected} of {STUDIES}, {low:.3f} to {high:.3f}")
    assert not elsewhere, f"{weak.group}: known {weak.low} to {weak.high}, got {'; '.join(elsewhere)}"


@pytest.mark.slow
def test_flips_bear_unequal_variances_of_conditions(table):
    group = Group("signs, SD 1:1:3", 16, "unequal", ("maximum",))
    check(group, STUDIES, table, null_studies.unequal_conditions("signs"))


FEW = (
    Group("paired", 8, "skewed", relabellings=60),
    Group("repeated_measures, signs", 8, "unequal", ("maximum",), relabellings=60),
    Group("between_groups, Welch", 16, "gaussian", ("cluster_mass",), relabellings=60),
    Group("slope, nuisance", 8, "gaussian", ("maximum",), relabellings=60),
)


@pytest.mark.parametrize("group", FEW, ids=str)
def test_a_few_cells(group, table):
    check(group, 200, table)


def test_a_rate_above_the_level_is_told(table):
    """The counting itself: values with a mean of half an SD are no null, and the check says so."""

    def shifted(rng, n, data):
        return tfs.against_zero(null_studies.maps_of(null_studies.values_of(rng, n, 1, data) + 0.5), "a")

    with pytest.raises(AssertionError, match="level 0.05: maximum"):
        check(Group("shifted", 16, "gaussian", ("maximum",)), 60, table, shifted)


def test_every_design_has_its_studies():
    from tfstats.contrasts import DESIGNS

    names = {name.split(",")[0] for name in null_studies.DESIGNS}
    assert set(DESIGNS) <= names


def test_the_studies_are_what_they_say():
    """Unit variance at each point, spectrum over time that falls about as 1/f, neighbours alike, skewness of an exponential."""
    rng = np.random.default_rng(1)
    maps = null_studies.fields(rng, 4000)
    assert maps.std(axis=0) == pytest.approx(np.ones(maps.shape[1:]), abs=0.06)
    spectrum = (np.abs(np.fft.rfft(maps[:, 5], axis=-1)) ** 2).mean(axis=0)
    cycles = np.arange(spectrum.size)
    assert -1.8 < np.polyfit(np.log(cycles[1:5]), np.log(spectrum[1:5]), 1)[0] < -0.6
    assert np.mean(maps[:, 5, 10] * maps[:, 6, 10]) > 0.6
    assert stats.skew(null_studies.skewed(maps[:, 5, 10])) == pytest.approx(2.0, abs=0.5)
    series = null_studies.autoregressive(rng, 5000, 0.9)[:, 0]
    assert np.mean(series[1:] * series[:-1]) == pytest.approx(0.9, abs=0.08)


def test_a_level_that_cannot_be_reached_is_refused_rather_than_counted():
    rng = np.random.default_rng(0)
    with pytest.raises(InputError, match="at least 6 subjects"):
        tfs.permutation_test(null_studies.paired(rng, 5, "gaussian"), tfs.MaxStatistic())
