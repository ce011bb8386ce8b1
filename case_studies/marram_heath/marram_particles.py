"""Particles that walk with the drift of a territorial group, and whose own density makes the scent.

Each particle obeys dX = s ds + √2 dW, where s is the drift per unit diffusion [1/km] and the clock runs in
diffusion × time [km²]:

    s_i = −β ∇ρ_i − α ∇F̃_i + γ ∇h,   ρ_i = √(|x − c_i|² + ε²)

(Holgate 1971, Okubo 1980 for the pull home.) Foreign scent F̃_i: histogram of the other groups' particles on the cells,
times adults and area per adult, smoothed by a Gaussian of sd δ normalised inside the area. No steady-state equation is
solved anywhere. Positions are in km from the south-west corner of the cells; row 0 is the SOUTH.
"""

from dataclasses import dataclass

import numpy as np
import shapely
from marram_place import CELL_M, Place
from shapely.affinity import affine_transform

CELL_KM = CELL_M / 1000.0
OUTSIDE, INSIDE, EDGE = 0, 1, 2


@dataclass(frozen=True)
class Truth:
    """What is true on the heath.

    Attributes:
        localising: β, pull towards the sett [1/km].
        avoidance: α, movement down the gradient of foreign scent [1].
        resource: γ, movement up the standardised layer [per sd].
        perception_km: δ, distance over which scent is perceived [km].
        softening_km: ε, rounds off the cone at the sett [km].
        diffusion_km2_h: D [km²/h]; sets how fast fixes forget, not where animals live.
    """

    localising: float = 4.0
    avoidance: float = 0.3
    resource: float = 0.5
    perception_km: float = 0.2
    softening_km: float = 0.05
    diffusion_km2_h: float = 0.02


class Walker:
    """Moves particles of all groups over a place; rejects the steps that leave it."""

    def __init__(self, place: Place, truth: Truth):
        self.place, self.truth = place, truth
        self.ny, self.nx = place.share.shape
        self.setts_km = (place.setts_m - (place.west_m, place.south_m)) / 1000.0
        self.area_km = affine_transform(place.area, [1e-3, 0, 0, 1e-3, -place.west_m / 1e3, -place.south_m / 1e3])
        shapely.prepare(self.area_km)
        self.status = self._cell_status()
        nodes_y, nodes_x = ((np.arange(n + 2) - 0.5) * CELL_KM for n in (self.ny, self.nx))
        self.smooth_y = self._gaussian(nodes_y, nodes_y[1:-1])
        self.smooth_x = self._gaussian(nodes_x, nodes_x[1:-1])
        self.smooth_area = self.smooth_y @ (place.share * CELL_KM**2) @ self.smooth_x.T

    def _cell_status(self) -> np.ndarray:
        """Mark cells wholly inside, crossed by the edge, or outside (also: no sub-cell centre inside)."""
        east, north = np.meshgrid(np.arange(self.nx) * CELL_KM, np.arange(self.ny) * CELL_KM)
        boxes = shapely.box(east, north, east + CELL_KM, north + CELL_KM)
        inside = np.where(shapely.contains(self.area_km, boxes), INSIDE, EDGE)
        return np.pad(np.where(self.place.share > 0, inside, OUTSIDE), 1, constant_values=OUTSIDE)

    def _gaussian(self, at: np.ndarray, source: np.ndarray) -> np.ndarray:
        return np.exp(-0.5 * ((at[:, None] - source) / self.truth.perception_km) ** 2)

    def inside(self, xy: np.ndarray) -> np.ndarray:
        """Tell which of the (n, 2) positions [km] lie in the area."""
        column = np.clip(np.floor(xy[:, 0] / CELL_KM).astype(int) + 1, 0, self.nx + 1)
        row = np.clip(np.floor(xy[:, 1] / CELL_KM).astype(int) + 1, 0, self.ny + 1)
        status = self.status[row, column]
        result = status == INSIDE
        near = np.flatnonzero(status == EDGE)
        result[near] = shapely.contains_xy(self.area_km, xy[near])
        return result

    def counts(self, xy: np.ndarray, group: np.ndarray) -> np.ndarray:
        """Count particles by group and cell: (groups, ny, nx)."""
        column, row = (xy / CELL_KM).astype(int).T
        flat = (group * self.ny + row) * self.nx + column
        groups = len(self.place.adults)
        return np.bincount(flat, minlength=groups * self.ny * self.nx).reshape(groups, self.ny, self.nx)

    def potential(self, mass: np.ndarray) -> np.ndarray:
        """Return α F̃_i − γ h at cell centres and a ring around them, (groups, ny + 2, nx + 2).

        Args:
            mass: (groups, ny, nx) share of each group's particles in each cell.
        """
        scent = self.place.adults[:, None, None] * self.place.a0_km2 * mass
        perceived = self.smooth_y @ scent @ self.smooth_x.T / self.smooth_area
        foreign = perceived.sum(axis=0) - perceived
        return self.truth.avoidance * foreign - self.truth.resource * self.place.standard_layer

    def walk(
        self,
        xy: np.ndarray,
        group: np.ndarray,
        potential: np.ndarray,
        steps: int,
        step: float,
        rng: np.random.Generator,
    ) -> np.ndarray:
        """Take Euler–Maruyama steps in a fixed potential; a step out of the area is not taken.

        Args:
            xy: (n, 2) positions [km], all inside.
            group: (n,) index of each particle's group.
            potential: of `potential`; read as bilinear between cell centres, and its exact gradient taken.
            steps: number of steps.
            step: length of a step in diffusion × time [km²].
            rng: source of randomness.

        Returns:
            (n, 2) positions [km] after the last step.
        """
        width = self.nx + 2
        flat, offset = potential.ravel(), group * (width * (self.ny + 2))
        sett, noise_sd = self.setts_km[group], np.sqrt(2.0 * step)
        pull, rounding = self.truth.localising, self.truth.softening_km**2
        for _ in range(steps):
            at = xy / CELL_KM + 0.5
            node = at.astype(int)
            part_x, part_y = (at - node).T
            corner = offset + node[:, 1] * width + node[:, 0]
            sw, se, nw, ne = (flat[corner + shift] for shift in (0, 1, width, width + 1))
            home = xy - sett
            drift = home * (-pull / np.sqrt(np.einsum("ij,ij->i", home, home) + rounding))[:, None]
            drift[:, 0] -= ((se - sw) * (1 - part_y) + (ne - nw) * part_y) / CELL_KM
            drift[:, 1] -= ((nw - sw) * (1 - part_x) + (ne - se) * part_x) / CELL_KM
            proposed = xy + drift * step + noise_sd * rng.standard_normal(xy.shape)
            xy = np.where(self.inside(proposed)[:, None], proposed, xy)
        return xy


@dataclass(frozen=True)
class Stationary:
    """What a run of particles found.

    Attributes:
        density: (groups, ny, nx) time-averaged density on the cells' part inside the area [1/km²]; 0 outside.
        points: (groups, ny, nx) particle positions counted in each cell.
        potential: (groups, ny + 2, nx + 2) potential of the converged scent and the layer.
        xy: (groups, particles, 2) last positions [km].
    """

    density: np.ndarray
    points: np.ndarray
    potential: np.ndarray
    xy: np.ndarray


def stationary_density(
    place: Place,
    truth: Truth,
    rng: np.random.Generator,
    particles: int = 4000,
    blocks: int = 1200,
    steps: int = 20,
    step: float = 1e-4,
) -> Stationary:
    """Let particles make their own scent until both stand still, and average their density.

    After each block of `steps` the scent is renewed from the running mean of all histograms, in which block k has a
    weight proportional to k (gain 2/(k + 1)): Monte Carlo noise falls, and the start is forgotten. The density returned
    is the plain average over the last half of the blocks, one histogram a block.

    Args:
        place: the area with groups and layer.
        truth: the true parameters.
        rng: source of randomness.
        particles: particles per group.
        blocks: number of renewals of the scent.
        steps: steps between renewals.
        step: length of a step in diffusion × time [km²]: 1e-4 moves a particle by 14 m per axis.
    """
    walker = Walker(place, truth)
    groups = len(place.adults)
    group = np.repeat(np.arange(groups), particles)
    xy = _start(walker, group, rng)
    mean = walker.counts(xy, group) / particles
    points = np.zeros(mean.shape, np.int64)
    for block in range(1, blocks + 1):
        xy = walker.walk(xy, group, walker.potential(mean), steps, step, rng)
        counts = walker.counts(xy, group)
        mean += (counts / particles - mean) * 2.0 / (block + 1)
        if 2 * block > blocks:
            points += counts
    share = np.where(place.share > 0, place.share, np.inf)
    density = points / points.sum(axis=(1, 2), keepdims=True) / (share * CELL_KM**2)
    return Stationary(density, points, walker.potential(mean), xy.reshape(groups, -1, 2))


def _start(walker: Walker, group: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Scatter particles round their setts by 0.3 km per axis, redrawing those outside the area."""
    xy = walker.setts_km[group] + 0.3 * rng.standard_normal((len(group), 2))
    while (out := np.flatnonzero(~walker.inside(xy))).size:
        xy[out] = walker.setts_km[group[out]] + 0.3 * rng.standard_normal((len(out), 2))
    return xy
