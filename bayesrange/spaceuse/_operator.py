"""Balance of animals on the cells: drifts on faces and Scharfetter–Gummel fluxes.

A face lies between two neighbouring cells, the first of them west or south. Its drift w is the drift per unit
diffusion times the cell edge [1], positive towards the second cell; for a gradient it is the difference of the
potentials, and then no flux runs in the Gibbs law, at any cell size. A face is open if both of its cells are inside,
however little of them is habitable, and closed otherwise. The balance M u is what leaves each cell: columns of M sum
to 0 and its off-diagonal entries are ≤ 0, so that its null vector is a density. Source: Scharfetter & Gummel (1969),
IEEE Trans. Electron Devices 16:64.
"""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from bayesrange.spaceuse._special import bernoulli
from bayesrange.spaceuse._terms import Parameters, Setting, home_distance, solitary_potential


class Faces(NamedTuple):
    """One value per face (a pytree of arrays).

    Attributes:
        x: between columns.
        y: between rows.
    """

    x: Float[Array, "groups ny nx-1"]
    y: Float[Array, "groups ny-1 nx"]


class Rates(NamedTuple):
    """Entries of M by face, J = onward·u_first − back·u_second; both 0 on closed faces."""

    onward: Faces
    back: Faces


class Terms(NamedTuple):
    """What of the drift does not change with the foreign scent (a pytree of arrays).

    Attributes:
        potential: −βρ + Σγh [1].
        distance: ρ, the distance from home [km].
        avoidance: α [1].
        retreat: κ [1/km].
    """

    potential: Float[Array, "groups ny nx"]
    distance: Float[Array, "groups ny nx"]
    avoidance: Float[Array, "groups 1 1"]
    retreat: Float[Array, "groups 1 1"]


def drift_terms(parameters: Parameters, setting: Setting) -> Terms:
    """The terms of `parameters` on the cells of `setting`."""
    return Terms(
        solitary_potential(parameters, setting),
        home_distance(parameters.home, setting),
        parameters.avoidance[:, None, None],
        parameters.retreat[:, None, None],
    )


def face_drift(foreign: Float[Array, "groups ny nx"], terms: Terms) -> Faces:
    """Drift on faces [1]: differences of −βρ + Σγh − αF̃, and retreat as −κ times mean F̃ times the difference of ρ."""
    gradient = terms.potential - terms.avoidance * foreign

    def between(first: tuple, second: tuple) -> Array:
        scent = 0.5 * terms.retreat * (foreign[first] + foreign[second])
        return gradient[second] - gradient[first] - scent * (terms.distance[second] - terms.distance[first])

    west, east = jnp.s_[:, :, :-1], jnp.s_[:, :, 1:]
    south, north = jnp.s_[:, :-1, :], jnp.s_[:, 1:, :]
    return Faces(between(west, east), between(south, north))


def open_faces(inside: Bool[Array, "ny nx"]) -> tuple[Bool[Array, "1 ny nx-1"], Bool[Array, "1 ny-1 nx"]]:
    """True where both cells of a face are inside."""
    return (inside[:, :-1] & inside[:, 1:])[None], (inside[:-1] & inside[1:])[None]


def steepest(drift: Faces, inside: Bool[Array, "ny nx"]) -> Float[Array, ""]:
    """Largest |w| on an open face [1]; beyond `_special.STEEPEST` the fluxes are held."""
    open_x, open_y = open_faces(inside)
    sizes = [jnp.where(on, jnp.abs(w), 0.0).max(initial=0.0) for on, w in ((open_x, drift.x), (open_y, drift.y))]
    return jnp.maximum(*sizes)


def rates(drift: Faces, inside: Bool[Array, "ny nx"]) -> Rates:
    """B(−w) and B(w) on open faces."""
    open_x, open_y = open_faces(inside)
    onward = Faces(jnp.where(open_x, bernoulli(-drift.x), 0.0), jnp.where(open_y, bernoulli(-drift.y), 0.0))
    back = Faces(jnp.where(open_x, bernoulli(drift.x), 0.0), jnp.where(open_y, bernoulli(drift.y), 0.0))
    return jax.lax.optimization_barrier(Rates(onward, back))


def outflow(
    drift: Faces, density: Float[Array, "groups ny nx"], inside: Bool[Array, "ny nx"]
) -> Float[Array, "groups ny nx"]:
    """M u: what leaves each cell less what enters it. Sums to 0 over the cells of a group.

    J = B(|w|)(u_a − u_b) + w·(the density upstream), the same as B(−w) u_a − B(w) u_b with one exponential less. The
    barrier keeps the compiler from computing that exponential anew for each of the two cells of a face.
    """
    open_x, open_y = open_faces(inside)
    along_x = jnp.where(open_x, _flow(drift.x, density[:, :, :-1], density[:, :, 1:]), 0.0)
    along_y = jnp.where(open_y, _flow(drift.y, density[:, :-1], density[:, 1:]), 0.0)
    along_x, along_y = jax.lax.optimization_barrier((along_x, along_y))
    leaves_x, enters_x = _ends(along_x, 2)
    leaves_y, enters_y = _ends(along_y, 1)
    return leaves_x - enters_x + leaves_y - enters_y


def _flow(drift: Array, first: Array, second: Array) -> Array:
    upstream = jnp.where(drift > 0, first, second)
    return bernoulli(jnp.abs(drift)) * (first - second) + drift * upstream


def diagonal(rate: Rates) -> Float[Array, "groups ny nx"]:
    """Diagonal of M: all that a cell sends out per density."""
    first_x, first_y = _ends(rate.onward.x, 2)[0], _ends(rate.onward.y, 1)[0]
    second_x, second_y = _ends(rate.back.x, 2)[1], _ends(rate.back.y, 1)[1]
    return first_x + first_y + second_x + second_y


def _ends(face: Float[Array, "groups _ _"], axis: int) -> tuple[Array, Array]:
    """Values of faces handed to their first and to their second cell, 0 at the rim."""
    low, high = [(0, 0)] * 3, [(0, 0)] * 3
    low[axis], high[axis] = (0, 1), (1, 0)
    return jnp.pad(face, low), jnp.pad(face, high)
