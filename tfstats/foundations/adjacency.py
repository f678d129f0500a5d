"""Which channels are neighbours: from positions on a sphere, from distances, or from a list of pairs."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest, one_of
from tfstats.foundations.errors import Problems, listed, refusal

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["SPHERE_TOLERANCE", "channel_adjacency"]

RULES = ("distance", "pairs", "sphere")
POSITION = ("x", "y", "z")

SPHERE_TOLERANCE = 0.2
"""Share of the fitted radius by which a position may lie off the sphere: heads are not round (10 to 15 %), while flat
layouts and electrodes inside the head are far beyond."""

_LEAST_FOR_SPHERE = 5


def channel_adjacency(electrodes: pd.DataFrame, *, rule: str = "sphere", farthest: float | None = None) -> pd.DataFrame:
    """Which channels are neighbours, for clusters that join channels.

    Parameters
    ----------
    electrodes : pandas.DataFrame
        Columns name, x, y, z as in the `electrodes.tsv` of the BIDS standard, in any unit of length; for "pairs"
        the columns first and second.
    rule : "sphere", "distance" or "pairs"
        "sphere": the Delaunay triangulation of the positions projected from the sphere onto a plane.
        "distance": all pairs no farther apart than `farthest`.  "pairs": the pairs as listed.
    farthest : float, optional
        In the unit of the positions.  Needed by "distance"; with "sphere" longer edges are left out.

    Returns
    -------
    pandas.DataFrame of bool
        names x names, symmetric, False on the diagonal.

    Raises
    ------
    InputError
        Columns that are not there, channels without a position (named), names twice, positions that are not on a sphere.

    Notes
    -----
    A sphere is fitted by least squares; each position must lie within 20 % of its radius.  The positions are then
    projected stereographically from the point opposite their centre: circles stay circles, so that the triangles in
    the plane are those on the sphere (Brown 1979, Information Processing Letters 9:223), less those that would
    close it below.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> electrodes = pd.DataFrame({"name": ["Cz", "Fz", "Pz", "C3", "C4"], "x": [0, 0, 0, -0.7, 0.7],
    ...     "y": [0, 0.7, -0.7, 0, 0], "z": [1, 0.714, 0.714, 0.714, 0.714]})
    >>> adjacency = tfs.channel_adjacency(electrodes)
    >>> adjacency.loc["Cz"].tolist(), bool(adjacency.loc["Fz", "Pz"])
    ([False, True, True, True, True], False)
    """
    import pandas as pd

    where = "channel_adjacency"
    problems = Problems()
    with problems.gathering():
        one_of(rule, RULES, f"{where}, rule")
    if not isinstance(electrodes, pd.DataFrame):
        problems.add(where, "a DataFrame of electrodes", type(electrodes).__name__, "read the table with pandas")
    if farthest is not None and (isinstance(farthest, bool) or not _positive(farthest)):
        problems.add(f"{where}, farthest", "a distance above 0", repr(farthest), "give it in the unit of the positions")
    if farthest is None and rule == "distance":
        problems.add(
            f"{where}, farthest", "a distance for the rule distance", "none", "give the largest distance of neighbours"
        )
    if farthest is not None and rule == "pairs":
        problems.add(f"{where}, farthest", "no distance for the rule pairs", repr(farthest), "leave it out")
    problems.raise_if_any()
    if rule == "pairs":
        names, joined = _from_pairs(electrodes, where)
    else:
        names, positions = _positions(electrodes, where)
        if rule == "distance":
            joined = _within(positions, float(farthest or 0.0), where)
        else:
            joined = _on_sphere(positions, names, where)
            if farthest is not None:
                joined &= _within(positions, float(farthest), where)
    return pd.DataFrame(joined, index=names, columns=names)


def _positive(value: Any) -> bool:
    try:
        return float(value) > 0 and bool(np.isfinite(float(value)))
    except (TypeError, ValueError):
        return False


def _check_columns(table: pd.DataFrame, wanted: Sequence[str], where: str) -> None:
    problems, present = Problems(), [str(name) for name in table.columns]
    for column in wanted:
        if column not in present:
            problems.add(where, f'a column "{column}"', listed(present), f"{closest(column, present)}rename the column")
    problems.raise_if_any()


def _positions(table: pd.DataFrame, where: str) -> tuple[list[str], NDArray[np.float64]]:
    import pandas as pd

    _check_columns(table, ("name", *POSITION), where)
    problems = Problems()
    names = [label_text(cell) for cell in table["name"].tolist()]
    twice = {name for name in names if names.count(name) > 1}
    if twice:
        problems.add(where, "each electrode once", f"{listed(twice)} more than once", "keep one row of each")
    numbers = [pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=np.float64) for column in POSITION]
    positions = np.stack(numbers, axis=1) if names else np.empty((0, 3))
    unknown = [name for name, row in zip(names, positions) if not np.all(np.isfinite(row))]
    if unknown:
        problems.add(
            where,
            "a position for every electrode",
            f"none for {listed(unknown)}",
            "give positions, leave them out or use pairs",
        )
    if not names:
        problems.add(where, "at least one electrode", "none", "give the electrodes")
    problems.raise_if_any()
    return names, positions


def _from_pairs(table: pd.DataFrame, where: str) -> tuple[list[str], NDArray[np.bool_]]:
    _check_columns(table, ("first", "second"), where)
    pairs = [
        (label_text(one), label_text(other)) for one, other in zip(table["first"].tolist(), table["second"].tolist())
    ]
    problems = Problems()
    selves = [one for one, other in pairs if one == other]
    if selves:
        problems.add(where, "pairs of two channels", f"{listed(selves)} with itself", "drop these rows")
    if any(name in ("", "nan", "None") for pair in pairs for name in pair):
        problems.add(where, "two names in each row", "an empty cell", "fill in or drop the row")
    if not pairs:
        problems.add(where, "at least one pair", "none", "give the pairs")
    problems.raise_if_any()
    names = list(dict.fromkeys(name for pair in pairs for name in pair))
    place = {name: number for number, name in enumerate(names)}
    joined = np.zeros((len(names), len(names)), dtype=bool)
    for one, other in pairs:
        joined[place[one], place[other]] = joined[place[other], place[one]] = True
    return names, joined


def _within(positions: NDArray[np.float64], farthest: float, where: str) -> NDArray[np.bool_]:
    apart = np.linalg.norm(positions[:, None] - positions[None], axis=2)
    joined = np.asarray(apart <= farthest * (1 + 1e-9))
    np.fill_diagonal(joined, False)
    if len(positions) > 1 and not joined.any():
        nearest = apart[~np.eye(len(apart), dtype=bool)].min()
        raise refusal(
            f"{where}, farthest",
            f"at least the smallest distance of two electrodes, {nearest:.4g}",
            f"{farthest:g}",
            "give it in the unit of the positions",
        )
    return joined


def _on_sphere(positions: NDArray[np.float64], names: Sequence[str], where: str) -> NDArray[np.bool_]:
    from scipy.spatial import Delaunay

    remedy = 'use rule "distance" with farthest, or "pairs"'
    if len(names) < _LEAST_FOR_SPHERE:
        raise refusal(where, f"at least {_LEAST_FOR_SPHERE} positions to fit a sphere", f"{len(names)}", remedy)
    middle = positions.mean(axis=0)
    size = float(np.abs(positions - middle).max())
    if size == 0.0 or np.linalg.svd((positions - middle) / size, compute_uv=False)[-1] < 1e-3 * np.sqrt(len(names)):
        raise refusal(where, "positions on a sphere", "positions in a plane", remedy)
    centre, radius = _fitted_sphere(positions)
    away = positions - centre
    distance = np.linalg.norm(away, axis=1)
    off = np.abs(distance - radius) / radius
    if off.max() > SPHERE_TOLERANCE:
        beyond = [name for name, share in zip(names, off) if share > SPHERE_TOLERANCE]
        raise refusal(
            where,
            f"positions within {SPHERE_TOLERANCE:.0%} of a sphere (radius {radius:.4g})",
            f"{listed(beyond)} up to {off.max():.0%} off it",
            remedy,
        )
    directions = away / distance[:, None]
    repeated = np.linalg.norm(directions[:, None] - directions[None], axis=2) < 1e-6
    np.fill_diagonal(repeated, False)
    if repeated.any():
        pair = [names[int(number)] for number in np.argwhere(repeated)[0]]
        raise refusal(where, "a position of its own for each electrode", f"the same for {listed(pair)}", "correct them")
    triangles = Delaunay(_stereographic(directions)).simplices
    joined = np.zeros((len(names), len(names)), dtype=bool)
    for one, other in ((0, 1), (1, 2), (2, 0)):
        joined[triangles[:, one], triangles[:, other]] = joined[triangles[:, other], triangles[:, one]] = True
    return joined


def _fitted_sphere(positions: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
    """Centre and radius that minimise the squared distances from the sphere's surface."""
    from scipy.optimize import least_squares

    scale = float(np.abs(positions).max())
    points = positions / scale
    # |p|^2 = 2 p.c + (r^2 - |c|^2) is linear in c: a start for the geometric fit.
    system = np.column_stack([2 * points, np.ones(len(points))])
    guess = np.linalg.lstsq(system, np.sum(points**2, axis=1), rcond=None)[0]
    found = least_squares(
        lambda four: np.linalg.norm(points - four[:3], axis=1) - four[3],
        np.append(guess[:3], np.sqrt(max(guess[3] + guess[:3] @ guess[:3], 1e-12))),
    ).x
    return found[:3] * scale, float(abs(found[3]) * scale)


def _stereographic(directions: NDArray[np.float64]) -> NDArray[np.float64]:
    """Unit vectors onto a plane, seen from the point opposite their centre."""
    middle = directions.mean(axis=0)
    length = float(np.linalg.norm(middle))
    top = middle / length if length > 1e-9 else np.array([0.0, 0.0, 1.0])
    # Two axes at right angles to the top complete the frame.
    helper = np.eye(3)[int(np.argmin(np.abs(top)))]
    first = np.cross(top, helper)
    first /= np.linalg.norm(first)
    second = np.cross(top, first)
    height = directions @ top
    depth = np.maximum(1.0 + height, 1e-9)
    return np.column_stack([directions @ first / depth, directions @ second / depth])
