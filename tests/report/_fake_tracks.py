"""A made-up place and tracks over it: walks that prefer a layer and ground where the animal was before."""

import numpy as np
import pandas as pd

CELL_M = 100.0
WEST_M, SOUTH_M = 418_000.0, 6_120_000.0
NX, NY = 70, 56
RANGE_M, SHORTEST_M, RECORD_H = 150.0, 10.0, 700


def place() -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Cell centres x, y [m], the habitable share with a lake, and a layer in raw units."""
    x, y = WEST_M + CELL_M * (np.arange(NX) + 0.5), SOUTH_M + CELL_M * (np.arange(NY) + 0.5)
    column, row = np.meshgrid(np.arange(NX), np.arange(NY))
    habitable = np.ones((NY, NX))
    habitable[(column - 38) ** 2 + 2 * (row - 30) ** 2 < 22] = 0.0
    habitable[column + row > NX + NY - 14] = 0.0
    layer = 40 + 25 * np.sin(column / 7.0) * np.cos(row / 6.0 + 0.4)
    return x, y, habitable, np.where(habitable > 0, layer, np.nan)


def walk(at: int, rng, x, y, habitable, layer) -> np.ndarray:
    """Hourly positions [m] of one animal; each step is picked from candidates by forage and what is remembered."""
    east, north = np.meshgrid(x, y)
    forage = np.nan_to_num((layer - np.nanmean(layer)) / np.nanstd(layer), nan=-50.0)
    here = np.array([WEST_M + 2200 + 600 * (at % 5), SOUTH_M + 1500 + 900 * (at // 3)], dtype=float)
    trace, track = np.zeros(layer.shape), [here]
    for _ in range(RECORD_H):
        length = rng.gamma(1.2, 130.0, size=24) * (rng.random() > 0.05)
        angle = rng.uniform(0, 2 * np.pi, size=24)
        end = here + length[:, None] * np.column_stack([np.cos(angle), np.sin(angle)])
        column = np.clip(((end[:, 0] - WEST_M) / CELL_M).astype(int), 0, NX - 1)
        row = np.clip(((end[:, 1] - SOUTH_M) / CELL_M).astype(int), 0, NY - 1)
        score = 0.5 * forage[row, column] + 3 * trace[row, column] / (trace[row, column] + 5.0)
        weight = np.exp(score - score.max()) * (habitable[row, column] > 0)
        trace = trace * np.exp(-1 / 520) + np.exp(-((east - here[0]) ** 2 + (north - here[1]) ** 2) / 2 / RANGE_M**2)
        here = end[rng.choice(24, p=weight / weight.sum())]
        track.append(here)
    return np.array(track)


def tracks(names, x, y, habitable, layer) -> pd.DataFrame:
    """All fixes: animal, hour, x, y [m], time; 3 % of the hours are missing."""
    rng, parts = np.random.default_rng(7), []
    for at, name in enumerate(names):
        xy = walk(at, rng, x, y, habitable, layer)
        table = pd.DataFrame({"animal": name, "hour": np.arange(len(xy)), "x": xy[:, 0], "y": xy[:, 1]})
        keep = rng.random(len(table)) > 0.03
        keep[[0, -1]] = True
        parts.append(table[keep])
    fixes = pd.concat(parts, ignore_index=True)
    fixes["time"] = pd.Timestamp("2031-04-02 06:00") + pd.to_timedelta(fixes["hour"], unit="h")
    return fixes


def steps_of(track: pd.DataFrame) -> tuple[pd.DataFrame, dict[str, int]]:
    """Steps of one animal that count, with their kinds, and the counts of run.json."""
    xy, hours = track[["x", "y"]].to_numpy(), np.diff(track["hour"])
    move = np.diff(xy, axis=0)
    length, heading = np.hypot(*move.T), np.arctan2(move[:, 1], move[:, 0])
    nominal, short = hours == 1, np.hypot(*move.T) < SHORTEST_M
    known = np.r_[False, nominal[:-1] & ~short[:-1]]
    kind = np.where(short, "short", np.where(known, "full", "turn unknown"))
    turn = np.where(kind == "full", np.angle(np.exp(1j * np.r_[0, np.diff(heading)])), np.nan)
    table = pd.DataFrame(
        {
            "animal": track["animal"].iloc[0], "time": track["time"].to_numpy()[:-1], "length_m": length, "turn": turn,
            "kind": kind, "start_x": xy[:-1, 0], "start_y": xy[:-1, 1], "x": xy[1:, 0], "y": xy[1:, 1],
        }
    )[nominal]  # fmt: skip
    counts = {
        "fixes": len(track), "steps": len(table), "not_nominal": int((~nominal).sum()),
        "turn_unknown": int((table["kind"] == "turn unknown").sum()), "short": int((table["kind"] == "short").sum()),
        "off_ground": 0, "learning": 0, "intervals": len(track) - 1, "without_nodes": 0,
    }  # fmt: skip
    return table, counts
