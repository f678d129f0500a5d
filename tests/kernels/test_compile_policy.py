"""Where compiled code is kept, and how many signatures a kernel has."""

import os
import subprocess
import sys
import warnings
from pathlib import Path

import numpy as np
import pytest

from tfstats.kernels import compile_policy, flip_chunk, relabelling_panels, runs
from tfstats.permutation.group_engine import null_of_groups
from tfstats.permutation.sign_flip_engine import null_of_sign_flips


@pytest.fixture
def fresh_folder():
    compile_policy.cache_folder.cache_clear()
    yield
    compile_policy.cache_folder.cache_clear()


def test_kernels_are_kept_in_a_folder_named_after_their_source(fresh_folder):
    folder = compile_policy.cache_folder()
    assert folder.is_dir()
    assert folder.name.startswith("kernels-")


def test_folders_are_tried_in_order_and_none_is_one_notice(fresh_folder, monkeypatch, tmp_path):
    asked = []

    def refuse(folder, private):
        asked.append(folder)
        return False

    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path / "chosen"))
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "user"))
    monkeypatch.setattr(compile_policy, "_usable", refuse)
    with warnings.catch_warnings(record=True) as seen:
        warnings.simplefilter("always")
        assert compile_policy.cache_folder() is None
        assert compile_policy.cache_folder() is None
    assert len(seen) == 1
    assert "set NUMBA_CACHE_DIR" in str(seen[0].message)
    assert asked[0] == tmp_path / "chosen"
    assert asked[1] == Path(compile_policy.__file__).resolve().parent / "__pycache__"
    assert len(asked) == 4


def test_a_private_folder_that_others_may_write_is_not_used(tmp_path):
    folder = tmp_path / "private"
    folder.mkdir()
    folder.chmod(0o777)
    if hasattr(os, "getuid"):
        assert not compile_policy._usable(folder, True)
    folder.chmod(0o700)
    assert compile_policy._usable(folder, True)


def test_a_file_in_the_place_of_a_folder_is_not_used(tmp_path):
    (tmp_path / "file").write_text("x", encoding="utf-8")
    assert not compile_policy._usable(tmp_path / "file", False)


def test_source_changes_change_the_folder(tmp_path):
    (tmp_path / "one.py").write_text("a", encoding="utf-8")
    before = compile_policy._source_fingerprint(tmp_path)
    (tmp_path / "one.py").write_text("b", encoding="utf-8")
    assert compile_policy._source_fingerprint(tmp_path) != before


def test_two_engines_leave_one_signature_for_each_kind_of_float():
    values = np.random.default_rng(0).standard_normal((6, 1, 3, 5))
    flips = np.random.default_rng(1).integers(0, 2, (20, 6)).astype(np.uint8)
    members = np.tile(np.array([1, 1, 1, 0, 0, 0], np.uint8), (5, 1))
    for kind in (np.float32, np.float64):
        for layout in (values, values[::-1], np.asfortranarray(values)):
            for summary in ("mass", "extent", "maximum", "enhanced"):
                null_of_sign_flips(layout.astype(kind), flips, summary=summary, tail="two-sided", critical=1.0)
                null_of_groups(
                    layout.astype(kind), members, statistic="welch_score", summary=summary, tail="greater", critical=1.0
                )
    for kernel in (
        flip_chunk.flip_chunk,
        relabelling_panels.panel_of_runs,
        relabelling_panels.panel_maxima,
        relabelling_panels.panel_maps,
    ):
        assert len(kernel.signatures) == 2, kernel
    assert len(relabelling_panels.summaries_of_lists.signatures) == 1
    assert len(flip_chunk.sort_rows.signatures) == 1
    assert runs.largest_of_runs.targetoptions["nogil"] is True


def test_no_kernel_is_parallel_or_free_with_nan():
    for module in (flip_chunk, relabelling_panels, runs):
        kernels = [thing for thing in vars(module).values() if hasattr(thing, "targetoptions")]
        assert kernels
        for kernel in kernels:
            assert kernel.targetoptions["nogil"] is True
            assert kernel.targetoptions["error_model"] == "numpy"
            assert not kernel.targetoptions.get("parallel", False)
            assert not kernel.targetoptions.get("fastmath", False)


@pytest.mark.slow
def test_a_home_that_cannot_be_written_still_computes(tmp_path):
    """A process without home and with a read-only package keeps its kernels in the temporary folder."""
    script = (
        "import numpy as np\n"
        "from tfstats.kernels import compile_policy\n"
        "compile_policy._candidates = lambda folder, real=compile_policy._candidates: [c for c in real(folder) if c[1]]\n"
        "from tfstats.kernels.runs import row_starts_word\n"
        "assert row_starts_word(0, 64) == 1\n"
        "print(compile_policy.cache_folder())\n"
    )
    environment = {k: v for k, v in os.environ.items() if k not in ("HOME", "XDG_CACHE_HOME", "NUMBA_CACHE_DIR")}
    environment |= {"TMPDIR": str(tmp_path), "LC_ALL": "C"}
    done = subprocess.run([sys.executable, "-c", script], env=environment, capture_output=True, text=True, check=True)
    assert str(tmp_path) in done.stdout
