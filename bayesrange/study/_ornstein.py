"""Ornstein–Uhlenbeck fit of one animal's positions at irregular times, with known location error.

Per axis, position = mean + OU(variance v, crossing time τ) + error(sd e_k); both axes share v and τ, each has its own
mean. Neighbouring fixes of the OU part are correlated by φ_k = exp(−Δ_k/τ), and its inverse correlation R⁻¹ is
tridiagonal because the process is Markov. With E = diag(e²),

    V = v R + E = R (v I + R⁻¹E),   log|V| = log|R| + log|v I + R⁻¹E|,   V⁻¹z = (v I + R⁻¹E)⁻¹ R⁻¹ z:

one tridiagonal factor, exact for any errors, 0 among them, in time linear in the number of fixes. The means are
integrated out (restricted likelihood: Patterson & Thompson 1971), which in a short record halves the downward bias of
τ, and with it the error towards too many effective fixes. Units: m, h.
"""

from dataclasses import dataclass, field

import numpy as np
from jaxtyping import Float
from numpy.typing import NDArray
from scipy.linalg import lapack
from scipy.optimize import brentq, minimize_scalar
from scipy.special import ndtri

_PROB = 0.95
_SCAN = 24  # crossing times tried before the search is refined
_SHORTEST = 0.1  # the shortest crossing time looked for, in shortest intervals: fixes are independent well before
_LOG_VARIANCE = (-8.0, 6.0)  # searched around the log of the sample variance


@dataclass(frozen=True)
class CrossingTime:
    """Crossing time τ with its 95 % profile-likelihood limits [h].

    `open_ended` says that the record is too short to bound τ from above: `upper_h` is then the record's length.
    """

    hours: float
    lower_h: float
    upper_h: float
    open_ended: bool


@dataclass(frozen=True)
class OrnsteinUhlenbeck:
    """The restricted likelihood of one animal's fixes.

    Attributes:
        interval_h: times between neighbouring fixes [h], > 0.
        place_m: easting and northing [m].
        error_m: standard deviation of the location error per axis [m].
    """

    interval_h: Float[NDArray, " intervals"]
    place_m: Float[NDArray, "fixes 2"]
    error_m: Float[NDArray, " fixes"]
    _rhs: Float[NDArray, "fixes 3"] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        """Centre the places, so that nothing is lost by large coordinates."""
        centred = self.place_m - self.place_m.mean(axis=0)
        object.__setattr__(self, "_rhs", np.column_stack([np.ones(len(centred)), centred]))

    def log_likelihood(self, tau_h: float, variance_m2: float) -> float:
        """Restricted log-likelihood of crossing time [h] and variance per axis [m²], constants left out."""
        log_det, one, square = self._terms(tau_h, variance_m2, self.error_m**2)
        return -log_det - np.log(one) - 0.5 * square

    def profile(self, tau_h: float) -> float:
        """The same at the best variance for this crossing time."""
        if not self.error_m.any():
            log_det, one, square = self._terms(tau_h, 1.0, self.error_m)
            freedom = len(self._rhs) - 1
            return -log_det - np.log(one) - freedom * (np.log(square / (2 * freedom)) + 1)
        centre = np.log(np.mean(self._rhs[:, 1:] ** 2))
        best = minimize_scalar(
            lambda log_v: -self.log_likelihood(tau_h, np.exp(log_v)),
            bounds=(centre + _LOG_VARIANCE[0], centre + _LOG_VARIANCE[1]),
            method="bounded",
            options={"xatol": 1e-4},
        )
        return -float(best.fun)

    def crossing_time(self) -> CrossingTime:
        """The most likely crossing time between a tenth of the shortest interval and the length of the record."""
        low, high = np.log(_SHORTEST * self.interval_h.min()), np.log(self.interval_h.sum())
        if not np.ptp(self.place_m, axis=0).any():
            return CrossingTime(np.exp(high), np.exp(low), np.exp(high), open_ended=True)
        scan = np.linspace(low, high, _SCAN)
        values = np.array([self.profile(np.exp(s)) for s in scan])
        k = int(np.argmax(values))
        best = minimize_scalar(
            lambda s: -self.profile(np.exp(s)),
            bounds=(scan[max(k - 1, 0)], scan[min(k + 1, _SCAN - 1)]),
            method="bounded",
            options={"xatol": 1e-3},
        )
        peak, top = (best.x, -best.fun) if -best.fun > values[k] else (scan[k], values[k])
        drop = top - ndtri((1 + _PROB) / 2) ** 2 / 2  # chi-square with one degree of freedom
        lower, upper = self._limit(peak, low, drop), self._limit(peak, high, drop)
        hours = np.exp([peak, lower, upper])
        return CrossingTime(float(hours[0]), float(hours[1]), float(hours[2]), open_ended=bool(upper >= high))

    def _limit(self, peak: float, bound: float, drop: float) -> float:
        """Where the profile falls to `drop` on the way from the peak to the bound (logs of hours), else the bound."""
        if peak == bound or self.profile(np.exp(bound)) >= drop:
            return bound
        return float(brentq(lambda s: self.profile(np.exp(s)) - drop, peak, bound, xtol=1e-3))

    def _terms(self, tau_h: float, variance: float, error_m2: Float[NDArray, " fixes"]) -> tuple[float, float, float]:
        """log|V|, 1ᵀV⁻¹1 and the sum over axes of zᵀPz, P = V⁻¹ less its part along the mean."""
        ratio = self.interval_h / tau_h
        beyond = 1 / np.expm1(np.minimum(2 * ratio, 700))  # φ²/(1 − φ²)
        off = -0.5 / np.sinh(np.minimum(ratio, 350))  # −φ/(1 − φ²)
        diagonal = np.ones(len(ratio) + 1)
        diagonal[:-1] += beyond
        diagonal[1:] += beyond
        rhs = diagonal[:, None] * self._rhs
        rhs[:-1] += off[:, None] * self._rhs[1:]
        rhs[1:] += off[:, None] * self._rhs[:-1]
        lower, middle, upper, upper2, pivots, _ = lapack.dgttrf(
            off * error_m2[:-1], variance + diagonal * error_m2, off * error_m2[1:]
        )
        solved, _ = lapack.dgttrs(lower, middle, upper, upper2, pivots, rhs)
        log_det = np.log(-np.expm1(-2 * ratio)).sum() + np.log(np.abs(middle)).sum()
        gram = self._rhs.T @ solved
        square = gram[1, 1] + gram[2, 2] - (gram[0, 1] ** 2 + gram[0, 2] ** 2) / gram[0, 0]
        return float(log_det), float(gram[0, 0]), float(square)
