"""What a solve returns, and the sentences that its result codes stand for."""

from typing import NamedTuple

import jax.numpy as jnp
from jaxtyping import Array, Float, Int

SOLVED = 0
NOT_CONVERGED = 1
NO_STEADY_SCENT = 2
NOT_FINITE = 3
TOO_STEEP = 4

SENTENCES = {
    SOLVED: "The steady state was found.",
    NOT_CONVERGED: "The steady state did not converge within the allowed steps: the coupling between groups is too "
    "strong for these parameters, or two groups share one home.",
    NO_STEADY_SCENT: "Over-marking is so strong that marks grow without bound in at least one cell (m Q ≥ 1).",
    NOT_FINITE: "The steady state is not a number: a parameter is infinite or not a number.",
    TOO_STEEP: "The drift between two neighbouring cells is beyond what double precision holds (|w| > 600): a term is "
    "far too strong for cells of this size.",
}


class SolveError(ArithmeticError):
    """A steady state that was asked for directly (`throw=True`) and not found."""


class Solution(NamedTuple):
    """Steady state of every group (a pytree of arrays).

    Attributes:
        log_density: log u_i at cell centres, −inf outside the area [log 1/km²].
        foreign: F̃_i, perceived foreign scent [1]; 0 outside.
        result: a key of `SENTENCES`.
        steps: fixed-point steps taken.
        residual: last relative residual.
        load: largest m Q over the cells (over-marking).
    """

    log_density: Float[Array, "groups ny nx"]
    foreign: Float[Array, "groups ny nx"]
    result: Int[Array, ""]
    steps: Int[Array, ""]
    residual: Float[Array, ""]
    load: Float[Array, ""]

    @property
    def density(self) -> Float[Array, "groups ny nx"]:
        """u_i [1/km²]; integrates to 1 over the habitable area."""
        return jnp.exp(self.log_density)


def result_code(
    log_density: Float[Array, "groups ny nx"],
    residual: Float[Array, ""],
    load: Float[Array, ""],
    tolerance: float,
    inside: Array,
) -> Int[Array, ""]:
    """Code of a finished solve, the worst first."""
    bad_number = jnp.any(jnp.isnan(log_density) & inside[None]) | jnp.any(log_density == jnp.inf) | jnp.isnan(residual)
    code = jnp.where(residual <= tolerance, SOLVED, NOT_CONVERGED)
    code = jnp.where(load >= 1, NO_STEADY_SCENT, code)
    return jnp.where(bad_number, NOT_FINITE, code)
