"""The log posterior of the memory cards and its gradient against a twin in NumPy and SciPy that shares no code."""

from dataclasses import replace

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import pytest
from inference._memory_twin import log_likelihood, twin_tracks
from inference._tiny_tracks import ASE, BO, TOM, VIXEN, fixes_table
from inference._twin import between, log_normal, positive
from jax.flatten_util import ravel_pytree
from scipy import stats

from bayesrange.inference._memory_model import MemoryModel

SHORTEST = 0.001  # km: coordinates are whole metres
LEAST = 0.5  # h: half an interval
SIGNED = ("selection", "reference_strength", "working_strength", "step_rhythm")
SPREADS = {
    "step_shape": 0.3, "step_scale": 0.4, "turn_concentration": 0.5, "selection": 0.5, "reference_strength": 0.7,
    "reference_excess": 0.5, "working_strength": 0.5, "working_excess": 0.5,
}  # fmt: skip
"""Scales of the half-normals in [between_animals] of models/memory-resources.toml."""


def median_step_km():
    """Median of all hourly steps that are no rests."""
    moved = []
    for _, own in fixes_table().groupby("animal"):
        minutes = np.diff(np.asarray(own["time"].str.slice(0, 16), "datetime64[m]")) / np.timedelta64(1, "m")
        length = np.hypot(*np.diff(own[["x", "y"]].to_numpy(), axis=0).T)
        moved += list(length[(np.abs(minutes - 60) <= 6) & (length >= 1)])
    return np.median(moved) / 1000


def priors(study):
    """Priors of the cards in models/, by hand, in km and hours; SciPy distributions of the values themselves."""
    length = np.sqrt(study.grid.habitable_km2)
    step = median_step_km()
    return {
        "step_shape": log_normal(1.3, 0.5), "step_scale": log_normal(step, 0.8),
        "turn_concentration": log_normal(0.4, 1.0), "selection": stats.norm(0, 1),
        "reference_strength": stats.norm(0, 3), "reference_excess": log_normal(500, 1.0),
        "working_strength": stats.norm(0, 2), "working_excess": log_normal(10, 0.7), "recall_half": log_normal(5, 1.0),
        "step_rhythm": stats.norm(0, 0.5), "home_pull": log_normal(12 / length, 1.2),
    }  # fmt: skip


# --- each animal alone ---------------------------------------------------------------------------------------------


def twin_alone(model, own, z, box=None):
    """−log posterior of one animal by hand, at unconstrained coordinates by name."""
    (one,), p, log_prior = model.task.extra["inputs"].animals, {}, 0.0
    own_priors = priors(model.study)
    for name, value in z.items():
        value = np.asarray(value, float)
        if name in ("home_x", "home_y"):
            axis = ("home_x", "home_y").index(name)
            density, p[name] = between(box[axis], box[axis + 2], value)
            log_prior += density
        elif name == "log_encoding_range":
            # Log-normal about the median step with spread 0.5, cut off two spreads from its middle
            middle, reach = np.log(median_step_km()), 2 * 0.5
            density, at = between(middle - reach, middle + reach, value)
            width = 2 * reach
            log_prior += density + np.log(width) + float(stats.truncnorm(-2, 2, middle, 0.5).logpdf(at).sum())
            p["encoding_range"] = float(np.exp(at))
        elif name in SIGNED:
            p[name] = value if name == "step_rhythm" else np.squeeze(value)
            log_prior += own_priors[name].logpdf(value).sum()
        else:
            p[name] = float(np.exp(value).squeeze())
            log_prior += positive(own_priors[name], value)
    if "working_excess" in p:
        p["working_decay"] = LEAST + p["working_excess"]
        p["reference_decay"] = p["working_decay"] + p["reference_excess"]
    reference = model.task.extra["inputs"].reference
    return -(log_prior + log_likelihood(own, p, reference, SHORTEST, one.hour).sum())


def points(model, count=2):
    """The first guess moved about, so that every part of the model has its say."""
    rng, guess = np.random.default_rng(8), model.program.first_guess(model.data)
    for _ in range(count):
        yield {name: np.asarray(value) + 0.4 * rng.normal(size=value.shape) for name, value in guess.items()}


@pytest.mark.parametrize(("card", "layers", "animal"), [
    ("estimated", [], ASE), ("at_home", ["forage"], BO), ("roaming", ["forage"], TOM),
])  # fmt: skip
def test_potential_of_an_animal_alone_is_minus_its_log_posterior_worked_by_hand(request, card, layers, animal):
    model = request.getfixturevalue(card)
    assert model.task.label == animal
    (own,) = twin_tracks(model, layers)
    fixes = model.study.fixes.query("animal == @animal")[["x", "y"]].to_numpy() / 1000
    margin = 0.1 * np.ptp(fixes, axis=0).max()  # a centre lies within the rectangle of the animal's fixes and a tenth
    xy = (*(fixes.min(axis=0) - margin), *(fixes.max(axis=0) + margin))
    for z in points(model):
        value = float(model.program.value_and_gradient(ravel_pytree(z)[0], model.data)[0])
        # Compression is proved to 1e-3 nats; without memory only single precision at the nodes is left: 1e-6 a step.
        bound = 1e-3 if card == "estimated" else 2e-4
        assert value == pytest.approx(twin_alone(model, own, z, xy), abs=bound)


@pytest.mark.parametrize("card", ["estimated", "at_home", "roaming", "pooled"])
def test_gradient_agrees_with_central_differences(request, card):
    model = request.getfixturevalue(card)
    rng, step = np.random.default_rng(9), 1e-3
    z = jnp.asarray(ravel_pytree(next(points(model)))[0])
    gradient = model.program.value_and_gradient(z, model.data)[1]
    assert np.isfinite(gradient).all()
    for _ in range(4):
        along = jnp.asarray(rng.normal(size=z.size))
        along = along / jnp.linalg.norm(along)
        ahead, behind = (float(model.program.value_and_gradient(z + s * step * along, model.data)[0]) for s in (1, -1))
        # Truncation step² × third derivative / 6; single precision at the nodes over the step, 1e-5 nats / 1e-3.
        assert float(gradient @ along) == pytest.approx((ahead - behind) / (2 * step), rel=1e-3, abs=2e-2)


# --- a population ----------------------------------------------------------------------------------------------------

NAMES = ("step_shape", "step_scale", "turn_concentration", "selection", "reference_strength", "reference_excess",
         "working_strength", "working_excess")  # fmt: skip


def by_name(program, z, data):
    """What the tables report of a point, each on the whole line: as many numbers as coordinates."""
    values = {name: value[0] for name, value in program.constrain(z[None], data).items()}
    values["working_excess"] = values["working_decay"] - LEAST
    values["reference_excess"] = values["reference_decay"] - values["working_decay"]
    found = {}
    for name in NAMES:
        plain = (lambda v: v) if name in SIGNED else jnp.log
        found[f"{name}_population"] = jnp.atleast_1d(plain(values[f"{name}_population"]))
        found[f"{name}_spread"] = jnp.log(values[f"{name}_spread"])
        found[f"{name}_effect"] = values[f"{name}_effect"][:, 0]
        found[name] = plain(values[name]).reshape(-1, 4)  # (coefficients, animals)
    found["below"] = values["animal_correlation"][jnp.tril_indices(6, -1)]
    return found | {"recall_half": jnp.log(values["recall_half"]), "step_rhythm": values["step_rhythm"]}


def twin_pooled(model, tracks, v):
    """−log posterior density of the values of `by_name`, up to the constant of the LKJ density."""
    own_priors, v = priors(model.study), {name: np.asarray(value) for name, value in v.items()}
    log_prior = positive(own_priors["recall_half"], v["recall_half"])
    log_prior += own_priors["step_rhythm"].logpdf(v["step_rhythm"]).sum()
    for name in NAMES:
        centre = v[f"{name}_population"]
        log_prior += own_priors[name].logpdf(centre).sum() if name in SIGNED else positive(own_priors[name], centre)
        log_prior += positive(stats.halfnorm(scale=SPREADS[name]), v[f"{name}_spread"])
        log_prior += stats.norm(0, 0.5).logpdf(v[f"{name}_effect"]).sum()
    factor = np.eye(6)
    factor[np.tril_indices(6, -1)] = v["below"]
    for k in range(6):
        factor[k, k] = np.sqrt(1 - (factor[k, :k] ** 2).sum())
    # Lewandowski, Kurowicka & Joe (2009), J. Multivariate Anal. 100:1989, for a Cholesky factor of K rows: density in
    # its entries below the diagonal ∝ Π L_kk^(K − k + 2η − 2), here K = 6 and η = 2
    log_prior += sum((6 - k + 2) * np.log(factor[k - 1, k - 1]) for k in range(2, 7))
    correlation = np.eye(9)
    correlation[3:, 3:] = factor @ factor.T  # the movement kernel's three stand apart
    spread = np.exp(np.concatenate([v[f"{name}_spread"] for name in NAMES]))
    centre, effect, eta = (
        np.concatenate([v[f"{name}{part}"] for name in NAMES]) for part in ("_population", "_effect", "")
    )
    male = np.array([1.0, 1.0, 0.0, 0.0])  # <b>Bo</b>, old tom, vixen, Åse
    law = spread[:, None] * correlation * spread
    for k in range(4):
        log_prior += stats.multivariate_normal(centre + effect * (male[k] - 0.5), law).logpdf(eta[:, k])
    total = 0.0
    for k, (own, one) in enumerate(zip(tracks, model.task.extra["inputs"].animals, strict=True)):
        p = {name: v[name][:, k] if name in SIGNED else np.exp(v[name][:, k]) for name in NAMES}
        p = {name: value if name == "selection" else float(value[0]) for name, value in p.items()}
        p["working_decay"] = LEAST + p["working_excess"]
        p["reference_decay"] = p["working_decay"] + p["reference_excess"]
        p |= {"recall_half": float(np.exp(v["recall_half"])), "step_rhythm": v["step_rhythm"]}
        p["encoding_range"] = median_step_km()
        total += log_likelihood(own, p, model.task.extra["inputs"].reference, SHORTEST, one.hour).sum()
    return -(log_prior + total)


@pytest.mark.parametrize("centring", ["not centred", "centred in part"])
def test_pooled_potential_is_minus_the_log_posterior_worked_by_hand(pooled, pooled_tracks, centring):
    assert [one.name for one in pooled.task.extra["inputs"].animals] == [BO, TOM, VIXEN, ASE]
    share = np.zeros((4, 9)) if centring == "not centred" else np.random.default_rng(6).uniform(size=(4, 9))
    program, data = pooled.program, pooled.data._replace(centring=jnp.asarray(share))
    ours, theirs = [], []
    for z in points(pooled, 3):
        z = jnp.asarray(ravel_pytree(z)[0])
        ours.append(float(program.value_and_gradient(z, data)[0]))
        slope = jax.jacobian(lambda at: ravel_pytree(by_name(program, at, data))[0])(z)
        assert slope.shape == (83, 83)  # 9 populations, spreads and effects, 36 of animals, 15 correlations, 5 common
        theirs.append(twin_pooled(pooled, pooled_tracks, by_name(program, z, data)) - np.linalg.slogdet(slope)[1])
    # Differences, because of the constant. Compression is proved to 1e-3 nats an animal, at both ends of a difference.
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs), atol=2e-3)
    assert np.abs(np.diff(ours)).min() > 1  # the points do differ


def test_animals_of_one_unit_share_coefficients_and_count_by_their_weights(pooled):
    spec = replace(pooled.task.spec, units=("a + b", "c", "d"))
    model = MemoryModel(spec)
    data = pooled.data._replace(
        unit=jnp.array([0, 0, 1, 2], jnp.int32), covariates=pooled.data.covariates[1:], centring=jnp.zeros((3, 9))
    )
    p = numpyro.handlers.seed(model.prior, 3)(data)
    np.testing.assert_array_equal(p.scale[0], p.scale[1])
    np.testing.assert_array_equal(p.selection[0], p.selection[1])
    assert len(np.unique(p.scale)) == 3


def test_working_memory_is_always_the_shorter_one(pooled):
    rng = np.random.default_rng(2)
    for _ in range(100):  # far from the first guess too
        z = jnp.asarray(3 * rng.normal(size=pooled.program.dimension))
        draws = pooled.program.constrain(z[None], pooled.data)
        assert (draws["working_decay"] >= LEAST).all()
        assert (draws["reference_decay"] >= draws["working_decay"]).all()
