"""A slow twin of the memory model's log-likelihood in NumPy and SciPy, from the fixes themselves and loops.

Everything is written out from mathematics.md, section 2. Only the quadrature nodes are the package's: they are random.
"""

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pandas as pd
import shapely
from inference._tiny_tracks import AREA, POND, SOUTH, WEST
from inference._twin import Ground, _bilinear
from scipy import special, stats

from bayesrange.memory import Steps, make_nodes

SUB_CELL = 12.5  # m: an eighth of the tiny study's cells


@dataclass
class TwinTrack:
    """One animal: stays [h, km], steps as they follow from its fixes, and what lies at their used places and nodes."""

    stays: list[tuple[float, float, float, float]]  # start, duration, x, y
    steps: Steps
    nodes: SimpleNamespace
    x: np.ndarray  # (steps, 1 + nodes), used place first
    y: np.ndarray
    layers: np.ndarray  # (steps, 1 + nodes, layers)
    allowed: np.ndarray  # (steps, nodes)


def steps_of(hours, x, y, shortest, tolerance=0.1, interval=1.0):
    """Steps by a loop over the fixes [h, km]."""
    rows = []
    for k in range(len(hours) - 1):
        if abs(hours[k + 1] - hours[k] - interval) > tolerance * interval + 1e-9:
            continue
        dx, dy = x[k + 1] - x[k], y[k + 1] - y[k]
        length, heading, turn, known = np.hypot(dx, dy), 0.0, 0.0, False
        if k and abs(hours[k] - hours[k - 1] - interval) <= tolerance * interval + 1e-9:
            before = np.array([x[k] - x[k - 1], y[k] - y[k - 1]])
            if np.hypot(*before) >= shortest:
                known, heading = True, np.arctan2(before[1], before[0])
                turn = np.angle(np.exp(1j * (np.arctan2(dy, dx) - heading))) if length >= shortest else 0.0
        rows.append((k, hours[k], x[k], y[k], x[k + 1], y[k + 1], length, heading, turn, known, length < shortest))
    return Steps(*(np.array(column) for column in zip(*rows)))


def stays_of(hours, x, y, interval=1.0):
    """Where time was spent: a gap in pieces on the straight line across it."""
    stays = []
    for k in range(len(hours) - 1):
        gap = hours[k + 1] - hours[k]
        pieces = max(1, round(gap / interval))
        for i in range(pieces):
            s = i / pieces
            stays.append((hours[k] + s * gap, gap / pieces, x[k] + s * (x[k + 1] - x[k]), y[k] + s * (y[k + 1] - y[k])))
    return stays


def twin_track(study, name, layers, count, seed, reference, shortest):
    """What the twin needs of one animal of the tiny study."""
    table = pd.read_csv(study.path.parent / "fixes.csv")
    time = pd.to_datetime(table["time"])
    hours = ((time - time.min()).dt.total_seconds() / 3600).to_numpy()
    own = (table["animal"] == name).to_numpy()
    hours, x, y = hours[own], table["x"].to_numpy()[own] / 1000, table["y"].to_numpy()[own] / 1000
    steps = steps_of(hours, x, y, shortest)
    nodes = make_nodes(steps, reference, count, seed)
    px = np.column_stack([np.where(steps.short, steps.x, steps.end_x), nodes.x])
    py = np.column_stack([np.where(steps.short, steps.y, steps.end_y), nodes.y])
    ground = Ground.of(study, layers)
    read = np.zeros((*px.shape, len(layers)))
    for place in np.ndindex(*px.shape):
        for k in range(len(layers)):
            with np.errstate(invalid="ignore"):  # far out there is nothing to read
                read[(*place, k)] = np.nan_to_num(_layer_at(ground, k, 1000 * px[place], 1000 * py[place]))
    # A sub-cell is habitable if its centre is.
    to_centre = [(np.floor((1000 * v - o) / SUB_CELL) + 0.5) * SUB_CELL for v, o in ((nodes.x, WEST), (nodes.y, SOUTH))]
    allowed = shapely.contains_xy(AREA.difference(POND), *to_centre)
    return TwinTrack(stays_of(hours, x, y), steps, nodes, px, py, read, allowed)


def twin_tracks(model, layers, shortest=0.001):
    """The twin's tracks of the animals of one task, with the package's nodes."""
    inputs, found = model.task.extra["inputs"], []
    for one in inputs.animals:
        k = list(model.plan.spec.animals).index(one.name)
        # The seed of an animal's nodes, whether or not it was made ready alone
        seed = model.study.settings.sampling.seed + 31 * k
        found.append(twin_track(model.study, one.name, layers, 16, seed, inputs.reference, shortest))
        if inputs.by_day:  # by day, then by night
            found[-1].layers = found[-1].layers * np.stack([one.day, ~one.day], 1)[:, None]
    return found


def _layer_at(ground, k, x, y):
    try:
        return _bilinear(ground, ground.layers[k], x, y)
    except ZeroDivisionError:
        return 0.0


def trace(own, decay, encoding_range):
    """M(z) before each step, by direct summation: hours spent near z, forgotten exponentially."""
    total = np.zeros(own.x.shape)
    for i, now in enumerate(own.steps.time):
        for start, duration, x, y in own.stays:
            if start < now - 1e-9:
                square = (own.x[i] - x) ** 2 + (own.y[i] - y) ** 2
                total[i] += duration * np.exp(-(now - start) / decay - square / (2 * encoding_range**2))
    return total


def log_likelihood(own, p, reference, shortest, hour):
    """Log-likelihood of each step of one animal, from its parameters [km, h]."""
    log_omega = own.layers @ np.atleast_1d(p.get("selection", np.zeros(own.layers.shape[-1])))
    if "reference_strength" in p:
        for strength, decay in (("reference_strength", "reference_decay"), ("working_strength", "working_decay")):
            remembered = trace(own, p[decay], p["encoding_range"])
            sign = 1 if strength == "reference_strength" else -1
            log_omega = log_omega + sign * p[strength] * remembered / (remembered + p["recall_half"])
    if "home_pull" in p:
        gap = np.sqrt((own.x - p["home_x"]) ** 2 + (own.y - p["home_y"]) ** 2 + 0.05**2)
        log_omega = log_omega - p["home_pull"] * gap
    wave = 2 * np.pi * hour / 24
    rhythm = p.get("step_rhythm", np.zeros(4))
    scales = p["step_scale"] * np.exp(
        np.stack([np.cos(wave), np.sin(wave), np.cos(2 * wave), np.sin(2 * wave)], 1) @ rhythm
    )
    s, kappa = own.steps, p["turn_concentration"]
    known = s.turn_known[:, None]
    law = stats.gamma(p["step_shape"], scale=scales[:, None])
    log_w = law.logpdf(own.nodes.radius) - stats.gamma(*reference[:1], scale=reference[1]).logpdf(own.nodes.radius)
    log_w = log_w + np.where(known, stats.vonmises(kappa).logpdf(own.nodes.turn), 0.0)
    above = np.where(own.allowed, log_w + log_omega[:, 1:], -np.inf)
    chosen = log_omega[:, 0] - special.logsumexp(above, axis=1) + special.logsumexp(log_w, axis=1)
    length = np.where(s.short, 1.0, s.length)
    turned = np.where(s.turn_known, stats.vonmises(kappa).logpdf(s.turn), -np.log(2 * np.pi))
    moved = stats.gamma(p["step_shape"], scale=scales).logpdf(length) - np.log(length) + turned
    rested = stats.gamma(p["step_shape"], scale=scales).logcdf(shortest)
    return np.where(s.short, rested, moved) + chosen
