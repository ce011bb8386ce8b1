"""Places from bearings by maximum likelihood, many sets at once.

Observer i of a set stands at z_i and takes the azimuth θ_i of the animal at z: θ_i ~ von Mises(μ_i(z), κ_i), μ_i the
true azimuth. The estimate maximises Σ κ_i cos(θ_i − μ_i). Azimuths are in radians, clockwise from the y axis of the
plane in which x and y are [m]. Sets have unequal numbers of bearings: rows are padded with weight 0.

Source: Lenth (1981), Technometrics 23:149, whose equal κ is here one κ a bearing.
"""

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from jaxtyping import Bool, Float
from numpy.typing import NDArray

MOST_ROUNDS = 200
NEAREST_M = 1.0
"""A place nearer to a station than this is none: at a station the azimuth of the place is undefined."""

_STEP_M = 1e-7
_HALVINGS = 40
_ROUNDING = 1e-15
_CONTRADICTS = float(np.cos(np.radians(20)))
_FAR = 1e4  # a place further off than this many times the stations' spread is none: the bearings do not meet

type Azimuths = Float[NDArray, "sets bearings"]
type Stations = Float[NDArray, "sets bearings 2"]


class Places(NamedTuple):
    """Estimated places [m] and whether the search for each converged."""

    place: Float[NDArray, "sets 2"]
    converged: Bool[NDArray, " sets"]


def locate(station: Stations, azimuth: Azimuths, weight: Azimuths) -> Places:
    """Maximum-likelihood place of each set.

    The search climbs from the point that is nearest to all lines and from the likeliest of seven points along each ray.
    Of the two ends the one that fewer bearings contradict is taken (a bearing taken the wrong way round draws the
    likeliest point to its station), then the likelier one.

    Args:
        station: where each bearing was taken [m]; any place for padding.
        azimuth: of each bearing [rad].
        weight: κ of each bearing up to a common factor, 0 for padding.
    """
    centre = station[:, :1].copy()
    near = station - centre
    best, height = near[:, 0], np.full(len(near), -np.inf)
    for start in _along_rays(near, azimuth, weight):
        other = _height(start, near, azimuth, weight)
        best = np.where((other > height)[:, None], start, best)
        height = np.maximum(height, other)
    ends = [_climb(start, near, azimuth, weight) for start in (best, _nearest_to_lines(near, azimuth, weight))]
    worth = [_agreement(end.place, near, azimuth, weight) for end in ends]
    second = worth[1] > worth[0]
    place = np.where(second[:, None], ends[1].place, ends[0].place)
    return Places(place + centre[:, 0], np.where(second, ends[1].converged, ends[0].converged))


def crossing(station: Float[NDArray, "sets 2 2"], azimuth: Float[NDArray, "sets 2"]) -> Places:
    """Where the two rays of each pair meet; not converged where they do not, or on a station."""
    ray = np.stack([np.sin(azimuth), np.cos(azimuth)], axis=-1)
    apart = station[:, 1] - station[:, 0]
    along = _solve(np.stack([ray[:, 0], -ray[:, 1]], axis=-1), apart)
    met = (along > NEAREST_M).all(axis=1) & (along < _FAR * np.hypot(*apart.T)[:, None]).all(axis=1)
    return Places(station[:, 0] + along[:, :1] * ray[:, 0], met)


def residuals(place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths) -> Azimuths:
    """Azimuth taken minus azimuth of the place, from −π to π [rad]."""
    away = place[:, None] - station
    difference = azimuth - np.arctan2(away[..., 0], away[..., 1])
    return (difference + np.pi) % (2 * np.pi) - np.pi


def residual_cosine(
    place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths
) -> Azimuths:
    """Cosine of each residual; below 0 the place is behind the observer. 1 for padding."""
    return np.where(weight > 0, np.cos(residuals(place, station, azimuth)), 1.0)


def directions(place: Float[NDArray, "sets 2"], station: Stations) -> Stations:
    """Gradient of each azimuth of the place by the place [rad/m]; 0 on the station itself."""
    away = place[:, None] - station
    square = (away**2).sum(axis=-1)
    turned = np.stack([away[..., 1], -away[..., 0]], axis=-1)
    return np.divide(turned, square[..., None], out=np.zeros_like(turned), where=square[..., None] > 0)


def information(place: Float[NDArray, "sets 2"], station: Stations, weight: Azimuths) -> Float[NDArray, "sets 2 2"]:
    """Expected information on the place [1/m²], Σ κ ∇μ ∇μᵀ, for weights that are κ."""
    gradient = directions(place, station)
    return np.einsum("sb,sbi,sbj->sij", weight, gradient, gradient)


def lenth_information(
    place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths
) -> Float[NDArray, "sets 2 2"]:
    """Lenth's estimate of the same, with the azimuths as taken: the inverse of his covariance Q [1/m²]."""
    star_s, star_c, s, c = _terms(place, station, azimuth, weight)
    cross = -0.5 * (star_s * c + star_c * s).sum(axis=1)
    rows = [(star_s * s).sum(axis=1), cross, cross, (star_c * c).sum(axis=1)]
    return np.stack(rows, axis=-1).reshape(-1, 2, 2)


def leverages(place: Float[NDArray, "sets 2"], station: Stations, weight: Azimuths) -> Azimuths:
    """Share of each bearing's error that the estimated place follows: κ ∇μᵀ I⁻¹ ∇μ; they sum to 2 in a set."""
    gradient = directions(place, station)
    solved = np.linalg.solve(information(place, station, weight), np.swapaxes(gradient, 1, 2))
    return weight * np.einsum("sbi,sib->sb", gradient, solved)


def concentration(mean_cosine: Float[NDArray, " sets"]) -> Float[NDArray, " sets"]:
    """κ of one set from its mean residual cosine, by Lenth's approximation."""
    rest = 1 - mean_cosine
    return 1 / (2 * rest + rest**2 * (0.48794 - 0.82905 * mean_cosine - 1.3915 * mean_cosine**2) / mean_cosine)


def crossing_angle(azimuth: Azimuths, weight: Azimuths) -> Float[NDArray, " sets"]:
    """Largest angle at which two lines of a set cross, from 0 to π/2 [rad]."""
    angle = np.abs(np.sin(azimuth[:, :, None] - azimuth[:, None, :]))
    both = (weight[:, :, None] > 0) & (weight[:, None, :] > 0)
    return np.arcsin(np.clip(np.where(both, angle, 0.0).max(axis=(1, 2)), 0, 1))


def _terms(
    place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths
) -> tuple[Azimuths, Azimuths, Azimuths, Azimuths]:
    """Lenth's s*, c*, s and c, the first two weighted; 0 for padding."""
    away = place[:, None] - station
    cube = (away**2).sum(axis=-1) ** 1.5
    share = np.divide(weight, cube, out=np.zeros_like(weight), where=weight > 0)
    return share * away[..., 1], share * away[..., 0], np.cos(azimuth), np.sin(azimuth)


def _agreement(
    place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths
) -> Float[NDArray, " sets"]:
    """The height, but with no bearing counted as further off than 20°; −∞ without a place."""
    cosine = np.maximum(residual_cosine(place, station, azimuth, weight), _CONTRADICTS)
    return np.where(np.isfinite(place).all(axis=1), (weight * cosine).sum(axis=1), -np.inf)


def _height(place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths) -> NDArray:
    return (weight * residual_cosine(place, station, azimuth, weight)).sum(axis=1)


def _solve(a: NDArray, b: NDArray) -> NDArray:
    """2 × 2 systems; NaN where there is no answer."""
    determinant = a[:, 0, 0] * a[:, 1, 1] - a[:, 0, 1] * a[:, 1, 0]
    top = np.stack([a[:, 1, 1] * b[:, 0] - a[:, 0, 1] * b[:, 1], a[:, 0, 0] * b[:, 1] - a[:, 1, 0] * b[:, 0]], axis=1)
    sound = (np.abs(determinant) > 0)[:, None]
    return np.divide(top, determinant[:, None], out=np.full_like(top, np.nan), where=sound)


def _nearest_to_lines(station: Stations, azimuth: Azimuths, weight: Azimuths) -> Float[NDArray, "sets 2"]:
    """Least squares of the distances to the lines of all bearings."""
    normal = np.stack([np.cos(azimuth), -np.sin(azimuth)], axis=-1)
    offset = (normal * station).sum(axis=-1)
    a = np.einsum("sb,sbi,sbj->sij", weight, normal, normal)
    return _solve(a, np.einsum("sb,sbi,sb->si", weight, normal, offset))


def _spread(station: Stations, weight: Azimuths) -> Float[NDArray, " sets"]:
    """Largest distance of a set's stations from its first [m]."""
    return np.where(weight > 0, np.hypot(station[..., 0], station[..., 1]), 0).max(axis=1)


def _along_rays(station: Stations, azimuth: Azimuths, weight: Azimuths) -> Iterator[Float[NDArray, "sets 2"]]:
    """Points ahead of each observer, from an eighth of the stations' spread to eight times it."""
    ray = np.stack([np.sin(azimuth), np.cos(azimuth)], axis=-1)
    spread = _spread(station, weight)[:, None]
    for i in range(azimuth.shape[1]):
        for power in range(-3, 4):
            yield station[:, i] + 2.0**power * spread * ray[:, i]


def _climb(start: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths) -> Places:
    """Fisher scoring with halved steps, which never descends; done once a step is below a tenth of a micrometre.

    There is no place where the climb ends on a station (its own bearing says nothing there) or far off.
    """
    place, converged = start.copy(), np.zeros(len(start), dtype=bool)
    limit = _FAR * _spread(station, weight)
    going = np.flatnonzero(np.isfinite(place).all(axis=1))
    for _ in range(MOST_ROUNDS):
        if going.size == 0:
            break
        given = station[going], azimuth[going], weight[going]
        step = _scoring_step(place[going], *given)
        new = _not_lower(place[going], step, *given)
        moved = np.abs(new - place[going]).max(axis=1)
        place[going] = new
        away = np.where(given[2] > 0, np.hypot(*np.moveaxis(new[:, None] - given[0], -1, 0)), np.inf).min(axis=1)
        lost = ~np.isfinite(step).all(axis=1) | (away < NEAREST_M) | (away > limit[going])
        converged[going[~lost & (moved < _STEP_M)]] = True
        going = going[~lost & (moved >= _STEP_M)]
    return Places(place, converged)


def _scoring_step(
    place: Float[NDArray, "sets 2"], station: Stations, azimuth: Azimuths, weight: Azimuths
) -> Float[NDArray, "sets 2"]:
    gradient = directions(place, station)
    slope = np.einsum("sb,sbi->si", weight * np.sin(residuals(place, station, azimuth)), gradient)
    return _solve(np.einsum("sb,sbi,sbj->sij", weight, gradient, gradient), slope)


def _not_lower(
    place: Float[NDArray, "sets 2"],
    step: Float[NDArray, "sets 2"],
    station: Stations,
    azimuth: Azimuths,
    weight: Azimuths,
) -> Float[NDArray, "sets 2"]:
    """The place after the longest of the step, its half, its quarter … that does not lower the likelihood."""
    floor = _height(place, station, azimuth, weight) - _ROUNDING * weight.sum(axis=1)
    share = np.ones(len(place))
    for _ in range(_HALVINGS):
        lower = ~(_height(place + share[:, None] * step, station, azimuth, weight) >= floor)
        if not lower.any():
            break
        share[lower] /= 2
    return place + np.where(lower, 0.0, share)[:, None] * step
