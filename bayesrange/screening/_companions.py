"""Animals that travel together: how many of their simultaneous fixes are near each other."""

import itertools

import numpy as np
import pandas as pd
from scipy.sparse import coo_array
from scipy.spatial import cKDTree

NEAR_M = 100.0
FEWEST = 10  # simultaneous fixes of a pair
TOGETHER = 0.5  # share within 100 m from which two animals travel together
_TENTH, _MOST_H = 0.1, 5 / 60
_AT_ONCE = 50_000  # fixes


def travelling_pairs(fixes: pd.DataFrame, interval_h: float) -> pd.DataFrame:
    """Pairs of animals with at least 10 simultaneous fixes, most often together first.

    Simultaneous: at one time when rounded to a tenth of the commonest interval, at most five minutes.

    Args:
        fixes: animal, time, x, y [m]; no animal twice at one time.
        interval_h: the commonest interval.

    Returns:
        first, second, simultaneous, near (within 100 m), share.
    """
    slot_h = min(_TENTH * interval_h, _MOST_H) if np.isfinite(interval_h) else _MOST_H
    hours = (fixes["time"] - fixes["time"].min()).dt.total_seconds().to_numpy(dtype=float) / 3600
    animal, names = pd.factorize(fixes["animal"], sort=True)
    table = pd.DataFrame({"slot": np.round(hours / slot_h).astype(np.int64), "animal": animal})
    table[["x", "y"]] = fixes[["x", "y"]].to_numpy(dtype=float)
    table = table.drop_duplicates(["slot", "animal"])
    table = table[table.duplicated("slot", keep=False)].sort_values("slot", kind="stable")
    if table.empty:
        return _listed(names, np.zeros((len(names), len(names))), np.zeros((len(names), len(names))))
    slot = pd.factorize(table["slot"])[0]
    there = coo_array((np.ones(len(table)), (slot, table["animal"])), shape=(slot[-1] + 1, len(names))).tocsr()
    both = (there.T @ there).toarray()
    return _listed(names, both, _near(table, slot, len(names)))


def _near(table: pd.DataFrame, slot: np.ndarray, animals: int) -> np.ndarray:
    """How often each two animals were within 100 m: neighbours in easting, northing and a third axis far apart."""
    near = np.zeros((animals, animals))
    place, animal = table[["x", "y"]].to_numpy(dtype=float) / NEAR_M, table["animal"].to_numpy()
    cuts = np.flatnonzero(np.diff(slot // max(1, _AT_ONCE * (slot[-1] + 1) // len(slot)))) + 1
    for first, end in itertools.pairwise([0, *cuts.tolist(), len(slot)]):
        at = np.column_stack([place[first:end], 3.0 * (slot[first:end] - slot[first])])
        pairs = cKDTree(at).query_pairs(1.0, output_type="ndarray") + first
        np.add.at(near, (animal[pairs[:, 0]], animal[pairs[:, 1]]), 1.0)
    return near + near.T


def _listed(names: pd.Index, both: np.ndarray, near: np.ndarray) -> pd.DataFrame:
    first, second = np.triu_indices(len(names), 1)
    pairs = pd.DataFrame(
        {
            "first": names[first].astype(str),
            "second": names[second].astype(str),
            "simultaneous": both[first, second].astype(int),
            "near": near[first, second].astype(int),
        }
    )
    pairs = pairs[pairs["simultaneous"] >= FEWEST]
    pairs = pairs.assign(share=pairs["near"] / pairs["simultaneous"])
    return pairs.sort_values(["share", "simultaneous"], ascending=False, ignore_index=True)
