"""How a wildcat walks: hourly steps of a gamma–von Mises law, weighted by cover and by what it remembers.

An hour's end point z is drawn from k(z) ω(z) / ∫ k ω by rejection: places drawn from the step law k are kept with
probability ω(z)/Ω, where Ω is above any ω. This is exact: nothing is integrated, no end points are listed. A memory
is a map of fine nodes on which every hour spent leaves a Gaussian; reading between the nodes is the only
approximation, of order 2 in their spacing. Nothing here comes from the package.
"""

import numpy as np
from varrow_cats import ENCODING_RANGE_M, Cat
from varrow_place import CoverReader, Place, bilinear

NODE_M = 10.0  # spacing of the memory's nodes
REACH = 6.0  # standard deviations at which an hour's mark ends: 1.5e-8 of its height
PROPOSALS = 128  # places tried at once
MOST_PROPOSALS = 1_000_000  # an end point that is not found by then will not be


class Memory:
    """Hours spent near each node [h], forgotten exponentially.

    The nodes hold hours / `_worth`, and forgetting only lowers `_worth`: the same product with less work.
    """

    def __init__(self, place: Place, decay_h: float, node_m: float = NODE_M) -> None:
        west, south, east, north = place.area.bounds
        self._first = np.array([west - node_m, south - node_m])
        self._node_m = node_m
        self._x = np.arange(west - node_m, east + 2 * node_m, node_m)
        self._y = np.arange(south - node_m, north + 2 * node_m, node_m)
        self._nodes = np.zeros((len(self._y), len(self._x)))
        self._worth = 1.0
        self._decay_h = decay_h
        self.most = 0.0  # hours at a place where the whole past was spent: no node has more

    def spend(self, xy: np.ndarray, hours: float) -> None:
        """Let these hours go by at a place (2,) [m]: they leave their mark, then everything fades by them."""
        columns, along = self._mark(self._x, xy[0])
        rows, up = self._mark(self._y, xy[1])
        self._nodes[rows, columns] += (hours / self._worth * up)[:, None] * along
        kept = np.exp(-hours / self._decay_h)
        self._worth *= kept
        self.most = (self.most + hours) * kept
        if self._worth < 1e-100:
            self._nodes *= self._worth
            self._worth = 1.0

    def __call__(self, xy: np.ndarray) -> np.ndarray:
        """Hours remembered (n,) at places (n, 2) [m] in the area's bounding box."""
        return self._worth * bilinear(self._nodes, self._first, self._node_m, xy)

    def _mark(self, at: np.ndarray, here: float) -> tuple[slice, np.ndarray]:
        """The nodes within reach along one axis, and the Gaussian on them."""
        within = REACH * ENCODING_RANGE_M
        near = slice(*np.searchsorted(at, (here - within, here + within)))
        return near, np.exp(-0.5 * ((at[near] - here) / ENCODING_RANGE_M) ** 2)


class Weight:
    """ω of one cat at one time: cover, attraction of remembered places, aversion from those just visited."""

    def __init__(self, place: Place, cat: Cat, node_m: float = NODE_M) -> None:
        self._cover, self._cat = CoverReader(place), cat
        self.reference = Memory(place, cat.reference_decay, node_m)
        self.working = Memory(place, cat.working_decay, node_m)

    def spend(self, xy: np.ndarray, hours: float) -> None:
        """Let hours go by at a place (2,) [m], for both memories."""
        self.reference.spend(xy, hours)
        self.working.spend(xy, hours)

    def log(self, xy: np.ndarray) -> np.ndarray:
        """Log ω (n,) at habitable places (n, 2) [m]."""
        recalled, put_off = self._recall(self.reference(xy)), self._recall(self.working(xy))
        cat = self._cat
        return cat.selection * self._cover(xy) + cat.reference_strength * recalled - cat.working_strength * put_off

    def log_bound(self) -> float:
        """A number that log ω is below everywhere: each term at its own best."""
        cat = self._cat
        cover = max(cat.selection * self._cover.lowest, cat.selection * self._cover.highest)
        recalled, put_off = self._recall(self.reference.most), self._recall(self.working.most)
        return cover + max(cat.reference_strength * recalled, 0.0) + max(-cat.working_strength * put_off, 0.0)

    def _recall(self, hours):
        return hours / (hours + self._cat.recall_half)


def end_point(
    place: Place, cat: Cat, weight: Weight, xy: np.ndarray, heading: float, rng: np.random.Generator
) -> tuple[np.ndarray, float]:
    """Draw where an hour's step ends.

    Args:
        place: where.
        cat: who.
        weight: ω now.
        xy: (2,) where the step starts [m].
        heading: direction of the last step [rad, anticlockwise from east]; NaN: none, any direction is as likely.
        rng: source of randomness.

    Returns:
        The end (2,) [m], and the direction of the step.
    """
    bound = weight.log_bound()
    for _ in range(MOST_PROPOSALS // PROPOSALS):
        length = rng.gamma(cat.step_shape, cat.step_scale, PROPOSALS)
        turn = rng.vonmises(0.0, cat.turn_concentration, PROPOSALS)
        direction = rng.uniform(-np.pi, np.pi, PROPOSALS) if np.isnan(heading) else heading + turn
        ends = xy + length[:, None] * np.column_stack([np.cos(direction), np.sin(direction)])
        threshold = bound + np.log1p(-rng.random(PROPOSALS))  # 1 − u is never 0
        kept = place.habitable(ends)
        kept[kept] = threshold[kept] < weight.log(ends[kept])
        if kept.any():
            first = int(np.argmax(kept))
            return ends[first], float(direction[first])
    raise RuntimeError(f"no end point found around {xy}: the animal cannot leave this place")


def walk(place: Place, cat: Cat, start: np.ndarray, steps: int, rng: np.random.Generator) -> np.ndarray:
    """Positions (steps + 1, 2) [m], one an hour, of an animal that knows nothing at the start."""
    weight = Weight(place, cat)
    track = np.empty((steps + 1, 2))
    track[0], heading = start, np.nan
    for step in range(steps):
        track[step + 1], heading = end_point(place, cat, weight, track[step], heading, rng)
        weight.spend(track[step], 1.0)  # the hour that has just gone counts from now on
    return track
