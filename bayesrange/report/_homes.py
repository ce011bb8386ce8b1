"""Home centres, known or estimated, with the interval of an estimated one."""

from dataclasses import dataclass

import numpy as np

from bayesrange.report._read import Contents


@dataclass(frozen=True)
class Home:
    """A home centre; intervals hold the share `prob` of the posterior, per axis, and are points if it is known [km]."""

    x_km: float
    y_km: float
    known: bool
    x_interval_km: tuple[float, float]
    y_interval_km: tuple[float, float]


def homes(run: Contents) -> dict[str, Home | None]:
    """The home of every group: as given, else the posterior median; None for a card without homes."""
    estimated = _estimated(run)
    if "home_x" not in run.constant:
        return {name: estimated.get(name) for name in run.groups}
    found: dict[str, Home | None] = {}
    for at, name in enumerate(run.groups):
        x, y = (float(run.constant[key].values[at]) / 1e3 for key in ("home_x", "home_y"))
        if np.isfinite(x) and np.isfinite(y):
            found[name] = Home(x, y, True, (x, x), (y, y))
        else:
            found[name] = estimated.get(name)
    return found


def _estimated(run: Contents) -> dict[str, Home]:
    if "home_x" not in run.posterior:
        return {}
    tail = (1 - run.prob) / 2
    found = {}
    for name in run.posterior["home_group"].values.astype(str):
        draws = [run.posterior[key].sel(home_group=name).values / 1e3 for key in ("home_x", "home_y")]
        (x_low, x, x_high), (y_low, y, y_high) = (np.quantile(axis, [tail, 0.5, 1 - tail]).tolist() for axis in draws)
        found[str(name)] = Home(x, y, False, (x_low, x_high), (y_low, y_high))
    return found
