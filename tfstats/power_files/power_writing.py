"""write_power: one subject's power in a file that needs no further words."""

from __future__ import annotations

from os import PathLike, fspath
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import Problems, refusal
from tfstats.power_files.formats import format_of
from tfstats.power_files.layout import DIMENSIONS
from tfstats.power_files.trial_power import TrialPower

__all__ = ["write_power"]


def write_power(path: str | PathLike[str], power: TrialPower) -> None:
    """Write one subject's power so that `read_power` returns it without further words.

    Parameters
    ----------
    path : path
        Its ending chooses the format: `.npz`, `.npy` (all but the values go to `.labels.npz` beside it), `.h5`,
        `.hdf5`, `.mat` (version 5, at most 2 GiB), `.nc` (needs the extra `labelled`).
    power : TrialPower

    Raises
    ------
    InputError
        An ending that is not known, trial columns that the format cannot hold.

    Notes
    -----
    Names in the file: power (trials, channels, frequencies, times), frequencies, times, channels, subject, axes,
    power_unit, scaling, wavelet_cycles and notes (what was done to the values) where known, and trials.COLUMN for each
    trial column.  The file appears under its name only when whole.  HDF5 is written block by block.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tempfile, pathlib, tfstats as tfs
    >>> power = tfs.TrialPower(np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
    ...     channels=["Fz"], trials=pd.DataFrame({"memory": ["recalled", "missed"]}), subject="S1")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     tfs.write_power(pathlib.Path(folder) / "S1.h5", power)
    ...     tfs.read_power(pathlib.Path(folder) / "S1.h5")
    <TrialPower S1: 2 trials x 1 channels x 3 frequencies x 4 times>
    """
    place = Path(path)
    where = f"write_power, {fspath(path)}"
    if not isinstance(power, TrialPower):
        raise refusal(where, "a TrialPower", type(power).__name__, "make one with TrialPower(...)")
    chosen = format_of(place, where)
    parts: dict[str, Any] = {
        "frequencies": power.frequencies,
        "times": power.times,
        "channels": np.array(power.channels, dtype=np.str_),
        "subject": np.array(power.subject, dtype=np.str_),
        "axes": np.array(DIMENSIONS, dtype=np.str_),
    }
    for name in ("power_unit", "scaling"):
        if getattr(power, name) is not None:
            parts[name] = np.array(getattr(power, name), dtype=np.str_)
    if power.wavelet_cycles is not None:
        parts["wavelet_cycles"] = power.wavelet_cycles
    if power.notes:
        parts["notes"] = np.array(power.notes, dtype=np.str_)
    problems = Problems()
    for column in power.trials.columns:
        with problems.gathering():
            parts[f"trials.{column}"] = _written_column(power.trials[column], str(column), where)
    problems.raise_if_any()
    chosen.write(place, power, parts)


def _written_column(column: pd.Series[Any], name: str, where: str) -> NDArray[Any]:
    if not name or "/" in name or "\0" in name:
        raise refusal(f"{where}, trial column", "a name without a slash", repr(name), "rename the column")
    cells = column.tolist()
    kinds = {type(cell) for cell in cells if not pd.isna(cell)}
    if kinds <= {bool, np.bool_} and kinds and not column.isna().any():
        return np.array(cells, dtype=bool)
    if kinds and kinds <= {int, float} and column.dtype.kind in "iuf":
        return np.asarray(column.to_numpy())
    if kinds and kinds <= {int, float, np.int64, np.float64}:
        return np.array([np.nan if pd.isna(cell) else cell for cell in cells], dtype=np.float64)
    return np.array(["n/a" if pd.isna(cell) else label_text(cell) for cell in cells], dtype=np.str_)
