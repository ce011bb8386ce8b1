"""From a study and a model card to a posterior: cards, priors, NumPyro models, sampling in parallel processes.

Names load when they are asked for, so that listing cards needs no JAX and a worker process needs no maps.
"""

import importlib
from typing import Any

_WHERE = {
    "Card": "_cards", "cards": "_cards", "find_card": "_cards", "read_card": "_cards",
    "Scales": "_scales", "make_scales": "_scales",
    "Run": "_run", "open_run": "_run", "fit": "_fit",
    "fit_periods": "_fit_periods", "plan_periods": "_fit_periods", "PeriodFit": "_fit_periods",
    "study_periods": "_fit_periods", "differences": "_differences", "between_periods": "_differences",
    "Differences": "_differences",
    "RangeSpec": "_range_data", "RangeData": "_range_data",
    "make_spec": "_range_build", "make_data": "_range_build", "make_setting": "_range_build",
    "Program": "_program", "Whitening": "_program", "as_arrays": "_program", "find_start": "_start",
    "fix_entries": "_fix_entries", "range_model": "_range_model", "log_likelihood": "_range_model",
    "isopleth_levels": "_derived", "overlaps": "_derived", "rank_mass": "_derived",
}  # fmt: skip

__all__ = sorted(_WHERE)


def __getattr__(name: str) -> Any:
    if name in _WHERE:
        return getattr(importlib.import_module(f"bayesrange.inference.{_WHERE[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
