"""Maps: limits, axes, outlines, marks."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from matplotlib.collections import LineCollection, QuadMesh

import tfstats as tfs
from tfstats.reporting import plane_maps
from tfstats.reporting.plane_axes import (
    add_axes,
    around_centre,
    blank_figure,
    cell_edges,
    draw_colour_bar,
    frequency_ticks,
    from_floor,
    plain,
    shortened,
)
from tfstats.reporting.plane_maps import outline_segments

DRAWN = {
    "difference": plane_maps.draw_difference,
    "statistic": plane_maps.draw_statistic,
    "effect size": plane_maps.draw_effect_size,
}


def outlines(ax):
    return [
        part for part in ax.collections if isinstance(part, LineCollection) and part.get_label() == "corrected mask"
    ]


def texts(ax):
    return " | ".join(text.get_text() for text in ax.texts)


@pytest.mark.parametrize("kind", DRAWN)
def test_scale_is_symmetric_and_the_mask_outlined_only_where_it_is(kind, make_result, axes):
    result = make_result()
    inside = [channel for channel in range(3) if result.mask[channel].any()]
    outside = [channel for channel in range(3) if not result.mask[channel].any()]
    assert inside and outside
    assert DRAWN[kind](axes, result, inside[0]) is axes
    assert len(outlines(axes)) == 1
    assert "uncorrected" in texts(axes)
    other = add_axes(blank_figure(85, 60), 12, 10, 55, 40)
    DRAWN[kind](other, result, outside[0])
    assert not outlines(other)
    assert "uncorrected" in texts(other)


def test_limits(make_result):
    result = make_result()
    for scale in (
        plane_maps.condition_scale(result, [0]),
        plane_maps.difference_scale(result),
        plane_maps.statistic_scale(result),
        plane_maps.effect_scale(result),
    ):
        assert scale.low == -scale.high
    assert plane_maps.difference_scale(result).high >= np.nanmax(np.abs(result.estimate))


def test_conditions_of_ratios_are_symmetric_about_one(make_result, make_maps):
    result = make_result(maps=make_maps(unit="ratio"))
    scale = plane_maps.condition_scale(result, [0, 1])
    assert scale.high - 1 == pytest.approx(1 - scale.low)
    assert plane_maps.difference_scale(result).low == -plane_maps.difference_scale(result).high


def test_power_without_a_baseline_has_a_sequential_scale(make_result, make_maps):
    maps = make_maps(unit="ratio")
    power = tfs.ConditionMaps(
        maps.values, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit="power",
    )  # fmt: skip
    scale = plane_maps.condition_scale(make_result(maps=power), [0])
    assert scale.logarithmic
    assert scale.colours.name == "cividis"
    ax = draw_colour_bar(add_axes(blank_figure(20, 60), 5, 5, 3, 50), scale)
    assert ax.get_yscale() == "log"


def test_one_wild_point_does_not_flatten_the_rest():
    values = np.concatenate([np.random.default_rng(0).normal(size=2000), [500.0]])
    scale = around_centre([values], "x")
    assert scale.high < 20
    assert scale.clipped_above and not scale.clipped_below
    ax = draw_colour_bar(add_axes(blank_figure(20, 60), 5, 5, 3, 50), scale)
    assert len(ax.patches) == 1


@pytest.mark.parametrize("values", [np.zeros(4), np.full(4, np.nan), np.array([])])
def test_scales_of_nothing(values):
    scale = around_centre([values], "x")
    assert (scale.low, scale.high) == (-1.0, 1.0)
    assert from_floor([values], "x").low < from_floor([values], "x").high


@given(arrays(bool, st.tuples(st.integers(1, 5), st.integers(1, 6))))
def test_outline_is_every_edge_between_inside_and_outside(mask):
    rows, columns = mask.shape
    across, up = np.arange(columns + 1.0), 2.0 ** np.arange(rows + 1)
    expected = set()
    for row in range(rows):
        for column in range(columns):
            if not mask[row, column]:
                continue
            for neighbour, edge in (
                ((row - 1, column), ((column, up[row]), (column + 1, up[row]))),
                ((row + 1, column), ((column, up[row + 1]), (column + 1, up[row + 1]))),
                ((row, column - 1), ((column, up[row]), (column, up[row + 1]))),
                ((row, column + 1), ((column + 1, up[row]), (column + 1, up[row + 1]))),
            ):
                inside = 0 <= neighbour[0] < rows and 0 <= neighbour[1] < columns and mask[neighbour]
                if not inside:
                    expected.add(edge)
    found = [tuple(tuple(point) for point in segment) for segment in outline_segments(mask, across, up)]
    assert len(found) == len(set(found))
    assert set(found) == expected


def test_frequency_axis_is_logarithmic_with_ticks_in_hz(make_result, axes):
    plane_maps.draw_difference(axes, make_result(), 0)
    assert axes.get_yscale() == "log"
    assert [label.get_text() for label in axes.get_yticklabels()] == ["4", "8", "16"]
    assert axes.get_ylabel() == "frequency (Hz)"
    assert axes.get_xlabel() == "time from event (s)"


def test_ticks_of_narrow_and_wide_axes():
    assert frequency_ticks(7.5, 13.5) == [8.0, 10.0, 12.0]
    assert frequency_ticks(1.9, 130.0) == [2.0, 4.0, 8.0, 16.0, 32.0, 64.0, 128.0]
    assert frequency_ticks(9.9, 10.1)


def test_cells_reach_to_the_midpoints():
    assert cell_edges(np.array([0.0, 0.1, 0.3])) == pytest.approx([-0.05, 0.05, 0.2, 0.4])
    assert cell_edges(np.array([4.0, 8.0]), logarithmic=True) == pytest.approx(np.array([4, 8, 16]) / np.sqrt(2))
    assert cell_edges(np.array([8.0]), logarithmic=True) == pytest.approx([8 / np.sqrt(2), 8 * np.sqrt(2)])


def test_event_and_baseline_are_marked_where_the_axis_shows_them(make_result, make_maps, axes):
    maps = make_maps()
    plane_maps.draw_difference(axes, make_result(maps=maps), 0, baseline_window=(-0.5, -0.2))
    assert any(np.all(np.asarray(line.get_xdata()) == 0.0) for line in axes.lines)
    assert "baseline" in texts(axes)
    later = add_axes(blank_figure(85, 60), 12, 10, 55, 40)
    late = make_result(maps=maps.select(times=(0.2, 0.9)))
    plane_maps.draw_difference(later, late, 0, baseline_window=(-0.5, -0.2))
    assert not later.lines
    assert "baseline" not in texts(later)


def test_what_lies_outside_the_mask_is_paler(make_result, axes):
    result = make_result()
    plane_maps.draw_statistic(axes, result, 0)
    scale = plane_maps.statistic_scale(result, [0])
    mesh = next(part for part in axes.collections if isinstance(part, QuadMesh))
    drawn = np.asarray(mesh.get_array())
    full = scale.rgba(result.statistic[0])
    mask = result.mask[0]
    assert np.array_equal(drawn[mask], full[mask])
    assert np.all(drawn[~mask][:, :3].sum(axis=1) > full[~mask][:, :3].sum(axis=1))


def test_untested_points_are_hatched(make_result, make_maps, axes):
    result = make_result(maps=make_maps(gap=True))
    assert not result.tested.all()
    plane_maps.draw_statistic(axes, result, 2)
    assert axes.patch.get_visible() and axes.patch.get_hatch()
    mesh = next(part for part in axes.collections if isinstance(part, QuadMesh))
    assert np.asarray(mesh.get_array())[0, 0, 3] == 0


def test_clusters_are_numbered_at_a_point_inside(make_result, axes):
    result = make_result()
    plane_maps.draw_statistic(axes, result, 0)
    number = str(result.significant["cluster"].iloc[0])
    mark = next(text for text in axes.texts if text.get_text() == number)
    time, frequency = mark.xy
    place = (0, list(result.frequencies).index(frequency), list(result.times).index(time))
    assert result.cluster_labels[place] == int(number)


def test_labels_are_text_and_no_formula():
    assert plain("$x^2$\nsecond") == r"\$x^2\$ second"
    assert len(shortened("a" * 300)) == 38
