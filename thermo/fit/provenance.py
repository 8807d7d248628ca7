"""What a fit's dataset says besides: window of trust, residual tests, and where it came from."""

from __future__ import annotations

import hashlib
import json
import math
import platform
from collections.abc import Sequence
from importlib import metadata
from pathlib import Path
from typing import Any

import numpy as np

from thermo.fit.residual_tests import along, durbin_watson, noticed_runs
from thermo.fit.result import FitResult
from thermo.fit.window import Window

LIBRARIES = ("numpy", "scipy", "numba", "xarray", "netCDF4", "matplotlib")


def check_arrays(result: FitResult) -> dict[str, Any]:
    """The window's edges, the residual tests and the points left out, for a fit dataset."""
    window = result.window
    names = [item.data.name for item in result.sets]
    runs, watson = [], []
    for item in result.sets:
        order = along(item.data.temperature, item.data.field)
        share = item.residual / np.where(item.uncertainty > 0, item.uncertainty, 1.0)
        runs.append(noticed_runs(share[order]))
        watson.append(durbin_watson(share[order]))
    arrays: dict[str, Any] = {"dataset_runs": runs, "dataset_durbin_watson": watson}
    if window is None:
        return arrays
    arrays["dataset_window"] = [window.lower.get(name, math.nan) for name in names]
    return arrays | excluded_arrays(window, names)


def excluded_arrays(window: Window, names: Sequence[str]) -> dict[str, Any]:
    """The points left out of the data sets of these names; nothing where there are none."""
    gone = [(k, window.excluded[name]) for k, name in enumerate(names) if name in window.excluded]
    if not gone:
        return {}
    return {
        "excluded_temperature": np.concatenate([d.temperature for _, d in gone]),
        "excluded_field": np.concatenate([d.field for _, d in gone]),
        "excluded_observed": np.concatenate([d.value / d.to_si for _, d in gone]),
        "excluded_dataset": np.concatenate([np.full(d.n_points, k) for k, d in gone]),
    }


def check_attributes(result: FitResult) -> dict[str, str | int | float]:
    """The window in words, and versions and digests to trace the result by."""
    found: dict[str, str | int | float] = {
        "software": json.dumps(software()),
        "data_digests": json.dumps(
            {item.data.name: digest(item.data.file) for item in result.sets}, ensure_ascii=False
        ),
        "study_digest": hashlib.sha256(result.study.text.encode()).hexdigest(),
    }
    if result.window is not None:
        found["window"] = str(result.window)
        found["window_status"] = result.window.status
        found["window_other_sites"] = result.window.other
    return found


def digest(path: str) -> str:
    """SHA-256 of a file as it is now; "" where it cannot be read any more."""
    try:
        return hashlib.sha256(Path(path).read_bytes()).hexdigest()
    except OSError:
        return ""


def software() -> dict[str, str]:
    """Versions of what computed the result."""
    found = {"Python": platform.python_version()}
    for name in LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    return found
