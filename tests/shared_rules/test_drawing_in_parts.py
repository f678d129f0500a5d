"""Every design of the registry draws the same relabellings in parts, until resolved, as at once."""

import numpy as np

import tfstats as tfs
from tests.shared_rules.test_designs import every_case, run
from tfstats.permutation.schemes import planned_rows
from tfstats.results import planned_test


@every_case
def test_drawing_until_resolved_in_parts_is_drawing_at_once(case):
    contrast = case.make(4, units=11)
    # A level at some point's own p keeps the test drawing.
    p = run(case, contrast, permutations=2000).p_values.ravel()
    near = float(p[np.abs(p - 0.5).argmin()])
    result = run(case, contrast, permutations="until_resolved", alpha=near, most_permutations=1000, seed=5)
    assert result.null.size > 251
    rows = planned_rows(contrast, "two-sided", result.record.rows, 5, enumerate_all=False)
    assert not rows.enumerated and not result.enumerated and result.null.size == rows.count
    plan = planned_test(contrast, tfs.MaxStatistic(), robust=case.settings.get("robust"), alpha=near)
    null = plan.prepared.null(
        rows,
        summary="maximum",
        tail="two-sided",
        critical=np.inf,
        edges=plan.edges,
        threads=1,
        exponents=plan.exponents,
    )
    assert result.null.tobytes() == null.tobytes()
