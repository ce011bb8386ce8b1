"""How much information fixes in quick succession carry: one weight a fix.

An animal's n fixes count as N_eff = 1ᵀR⁻¹1 = 1 + Σ tanh(Δ_k/2τ) independent ones, R the correlation of an
Ornstein–Uhlenbeck process with crossing time τ (the effective size of the generalised least squares mean). Each
interval's share goes half to its two ends, and the 1 is split over the first and the last fix.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from jaxtyping import Float
from numpy.typing import NDArray

from bayesrange.study._ornstein import CrossingTime, OrnsteinUhlenbeck

FEWEST_FIXES = 10


@dataclass(frozen=True)
class Weights:
    """Fix weights and where they come from.

    Attributes:
        weight: one a fix, in the order of the fixes given, above 0 and at most 1; they sum to the effective number.
        table: by animal: animal, fixes, crossing_time_h with its 95 % limits crossing_time_lower_h and _upper_h (NaN
            where it was taken from other animals), effective.
        warnings: sentences for the user.
    """

    weight: Float[NDArray, " fixes"]
    table: pd.DataFrame
    warnings: list[str]

    @property
    def effective(self) -> float:
        """The number of independent fixes that would carry the same information."""
        return float(self.weight.sum())

    @property
    def sentence(self) -> str:
        """What stands on the first screen: "1,512 fixes carry the information of about 190 independent ones"."""
        return f"{self.weight.size:,} fixes carry the information of about {self.effective:,.0f} independent ones"


def autocorrelation_weights(fixes: pd.DataFrame) -> Weights:
    """Weights of a study's fixes from one Ornstein–Uhlenbeck fit an animal.

    Takes columns animal, time, x, y [m] and error_m [m]; no animal may have two fixes at one time. With a column group,
    an animal that switches groups has a fit in each: two ranges in one would look like a long crossing time. Where a
    record is too short to bound the crossing time from above, the record's length is taken (few effective fixes: the
    cautious end). Below 10 fixes the median of the others is taken, or without any others the animal counts once.
    """
    fixes = fixes.assign(animal=_records(fixes))
    parts = {str(animal): _Track(rows) for animal, rows in fixes.reset_index(drop=True).groupby("animal", sort=True)}
    fitted = {animal: t.crossing_time() for animal, t in parts.items() if t.size >= FEWEST_FIXES}
    pooled = float(np.median([used_hours(time) for time in fitted.values()])) if fitted else np.inf
    weight, rows = np.zeros(len(fixes)), []
    for animal, track in parts.items():
        time = fitted.get(animal)
        hours = used_hours(time) if time else pooled
        weight[track.positions] = interval_weights(track.interval_h, hours)
        limits = (time.lower_h, time.upper_h) if time else (np.nan, np.nan)
        rows.append((animal, track.size, hours, *limits, weight[track.positions].sum()))
    columns = ["animal", "fixes", "crossing_time_h", "crossing_time_lower_h", "crossing_time_upper_h", "effective"]
    return Weights(weight, pd.DataFrame(rows, columns=columns), _warnings(parts, fitted, pooled))


def interval_weights(interval_h: Float[NDArray, " intervals"], tau_h: float) -> Float[NDArray, " fixes"]:
    """Weights of one animal's fixes from the times between them and the crossing time [h]."""
    share = np.tanh(interval_h / (2 * tau_h))
    weight = np.zeros(len(interval_h) + 1)
    weight[:-1] += share / 2
    weight[1:] += share / 2
    weight[0] += 0.5
    weight[-1] += 0.5
    return weight


def used_hours(time: CrossingTime) -> float:
    """The crossing time that weights use: the cautious end where the record does not bound it."""
    return time.upper_h if time.open_ended else time.hours


def _records(fixes: pd.DataFrame) -> pd.Series:
    """Name of the record that each fix belongs to: the animal, of one that switches groups with its group."""
    animal = fixes["animal"].astype(str)
    if "group" not in fixes:
        return animal
    switches = fixes.groupby("animal")["group"].transform("nunique") > 1
    return animal.where(~switches, animal + " in " + fixes["group"].astype(str))


class _Track:
    """One animal's fixes in the order of time, with their places in the table."""

    def __init__(self, rows: pd.DataFrame):
        rows = rows.sort_values("time", kind="stable")
        self.positions = rows.index.to_numpy()
        self.size = len(rows)
        self.interval_h = rows["time"].diff().dt.total_seconds().to_numpy(dtype=float)[1:] / 3600
        self._rows = rows

    def crossing_time(self) -> CrossingTime:
        places = self._rows[["x", "y"]].to_numpy(dtype=float)
        return OrnsteinUhlenbeck(self.interval_h, places, self._rows["error_m"].to_numpy(dtype=float)).crossing_time()


def _warnings(tracks: dict[str, _Track], fitted: dict[str, CrossingTime], pooled: float) -> list[str]:
    said = []
    for animal, time in fitted.items():
        if time.open_ended:
            said.append(
                f'The record of "{animal}" ({time.upper_h:.0f} h) is too short to show how long it takes to cross its '
                "range; the whole record was taken, so that its fixes count little."
            )
    few = [animal for animal in tracks if animal not in fitted]
    if few:
        source = f"the median of the others was taken ({pooled:.1f} h)" if fitted else "each animal counts as one fix"
        said.append(f"Fewer than {FEWEST_FIXES} fixes to fit a crossing time of {', '.join(few)}: {source}.")
    return said
