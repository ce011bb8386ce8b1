"""The log posterior and its gradient against a twin in NumPy and SciPy that shares no code with them."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from inference._tiny_study import HOMES
from inference._twin import Ground, between, fix_densities, gibbs_law, half_normal, log_normal, positive, solitary
from jax.flatten_util import ravel_pytree
from scipy import stats

VARYING = ("localising", "avoidance", "resource")
POINTS = [
    {
        "localising": np.log(6.0), "avoidance": np.log(0.3), "resource": np.array([0.4]),
        "over_marking": np.log(0.01), "home_x": np.array([-0.5]), "home_y": np.array([0.8]),
    },
    {
        "localising": np.log(4.0), "avoidance": np.log(1.2), "resource": np.array([-0.7]),
        "over_marking": np.log(0.03), "home_x": np.array([-0.9]), "home_y": np.array([0.3]),
    },
]  # fmt: skip


def twin_potential(model, ground, z, homes_km):
    """−log posterior of the `coupled` model by hand."""
    study, scales = model.study, model.scales
    rows, columns = np.nonzero(study.grid.habitable > 0)
    edge = study.grid.cell_m / 1000
    west, south = study.grid.west_m / 1000, study.grid.south_m / 1000
    low = (west + columns.min() * edge, south + rows.min() * edge)
    high = (west + (columns.max() + 1) * edge, south + (rows.max() + 1) * edge)
    in_x, x = between(low[0], high[0], z["home_x"])
    in_y, y = between(low[1], high[1], z["home_y"])
    homes = homes_km.copy()
    homes[0] = x[0], y[0]
    length = np.sqrt(ground.area.sum() / 3)
    prior = (
        positive(log_normal(8 / length, 0.8), z["localising"])
        + positive(half_normal(1.0), z["avoidance"])
        + positive(half_normal(0.1), z["over_marking"])
        + stats.norm(0, 1).logpdf(z["resource"]).sum()
        + in_x + in_y
    )  # fmt: skip
    beta, alpha = np.full(3, np.exp(z["localising"])), np.full(3, np.exp(z["avoidance"]))
    gamma = np.repeat(z["resource"][:, None], 3, axis=1)
    potential = solitary(ground, beta, gamma, homes, edge / 2)
    marking = np.array([2.0, 3.0, 4.0]) * ground.area.sum() / 9  # 2, 3 and 4 animals share the area
    density = gibbs_law(ground, potential, alpha, np.exp(z["over_marking"]), marking, scales.perception_m / 1000)
    fixes = study.fixes
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    at = fix_densities(ground, density, fixes["x"].to_numpy(), fixes["y"].to_numpy(), owner, fixes["error_m"])
    return -(prior + (model.weight * np.log(at)).sum())


def test_potential_is_minus_the_log_posterior_worked_by_hand(coupled, homes_km):
    ground = Ground.of(coupled.study, ["worms"])
    for point in POINTS:
        value, _ = coupled.program.value_and_gradient(ravel_pytree(point)[0], coupled.data)
        # The solver stops at a relative 1e-10 in the scent, the twin at 1e-13; some 100 effective fixes add up.
        assert float(value) == pytest.approx(twin_potential(coupled, ground, point, homes_km), rel=1e-8)


def test_search_for_the_mode_begins_where_marks_are_finite_however_wide_the_prior(coupled):
    wide = coupled.data._replace(priors={**coupled.data.priors, "over_marking": jnp.array([50.0])})
    guess = ravel_pytree(coupled.program.first_guess(wide))[0]
    assert np.isfinite(coupled.program.value_and_gradient(guess, wide)[0])


def test_gradient_agrees_with_central_differences(coupled):
    z, step = ravel_pytree(POINTS[0])[0], 1e-4

    def value(at):
        return float(coupled.program.value_and_gradient(at, coupled.data)[0])

    slopes = []
    for i in range(z.size):
        move = step * jnp.eye(z.size)[i]
        slopes.append((value(z + move) - value(z - move)) / (2 * step))
    gradient = coupled.program.value_and_gradient(z, coupled.data)[1]
    # Truncation step²/6 × third derivative, and 1e-8 of solver error over the step.
    np.testing.assert_allclose(gradient, slopes, rtol=1e-5, atol=1e-4)


def reported(program, z, data):
    """What the tables report of a point of the `hierarchical` model, each on the whole line: as many as coordinates."""
    values = {name: value[0] for name, value in program.constrain(z[None], data).items()}
    logs = [jnp.log(values[f"{name}_population"]) for name in ("localising", "avoidance")]
    logs += [jnp.log(values[f"{name}_spread"]) for name in VARYING] + [jnp.log(values[n]) for n in VARYING[:2]]
    plain = [values["resource_population"], values["resource"]] + [values[f"{name}_effect"] for name in VARYING]
    below = values["group_correlation"][jnp.tril_indices(3, -1)]
    parts = logs[:2] + plain[:1] + logs[2:5] + plain[2:] + [below] + logs[5:] + plain[1:2]
    return jnp.concatenate([jnp.ravel(part) for part in parts])


def twin_hierarchical(model, ground, values, homes_km):
    """−log posterior density of the `reported` values, up to the constant of the LKJ density."""
    length = np.sqrt(ground.area.sum() / 3)
    log_beta, log_alpha, gamma, *rest = values
    log_spread, effect, below = np.array(rest).reshape(-1, 3)[:3]
    eta = np.array(rest[9:]).reshape(3, 3)  # coefficients of each group, a row a parameter
    factor = np.eye(3)
    factor[np.tril_indices(3, -1)] = below
    factor[1, 1], factor[2, 2] = np.sqrt(1 - below[0] ** 2), np.sqrt(1 - below[1] ** 2 - below[2] ** 2)
    # Lewandowski, Kurowicka & Joe (2009), J. Multivariate Anal. 100:1989, for a Cholesky factor of K rows: density in
    # its entries below the diagonal ∝ Π L_kk^(K − k + 2η − 2), here K = 3 and η = 2
    log_prior = 3 * np.log(factor[1, 1]) + 2 * np.log(factor[2, 2])
    log_prior += positive(log_normal(8 / length, 0.8), log_beta) + positive(half_normal(1.0), log_alpha)
    log_prior += stats.norm(0, 1).logpdf(gamma) + stats.norm(0, 0.5).logpdf(effect).sum()
    log_prior += sum(positive(half_normal(s), z) for s, z in zip((0.3, 0.5, 0.3), log_spread, strict=True))
    size = model.study.groups["size"].to_numpy(float)
    size = (size - size.mean()) / size.std()
    spread = np.exp(log_spread)
    covariance = spread[:, None] * (factor @ factor.T) * spread
    for group in range(3):
        expected = np.array([log_beta, log_alpha, gamma]) + effect * size[group]
        log_prior += stats.multivariate_normal(expected, covariance).logpdf(eta[:, group])
    potential = solitary(ground, np.exp(eta[0]), eta[2][None], homes_km, 0.05)
    marking = np.array([2.0, 3.0, 4.0]) * ground.area.sum() / 9
    density = gibbs_law(ground, potential, np.exp(eta[1]), 0.0, marking, 0.2)
    fixes = model.study.fixes
    owner = fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    at = fix_densities(ground, density, fixes["x"].to_numpy(), fixes["y"].to_numpy(), owner, fixes["error_m"])
    return -(log_prior + (model.weight * np.log(at)).sum())


@pytest.fixture(scope="module", params=["not centred", "centred in part"])
def centring(request):
    """The sampler's coordinates of the groups: whatever they are, they may not change the posterior."""
    return np.zeros((3, 3)) if request.param == "not centred" else np.random.default_rng(6).uniform(size=(3, 3))


def test_hierarchical_potential_is_minus_the_log_posterior_worked_by_hand(hierarchical, homes_km, centring):
    program, ground = hierarchical.program, Ground.of(hierarchical.study, ["worms"])
    data = hierarchical.data._replace(centring=jnp.asarray(centring))
    rng, ours, theirs = np.random.default_rng(5), [], []
    guess = ravel_pytree(program.first_guess(data))[0]
    for _ in range(3):
        z = guess + jnp.asarray(0.4 * rng.normal(size=program.dimension))
        ours.append(float(program.value_and_gradient(z, data)[0]))
        slope = jax.jacobian(lambda at: reported(program, at, data))(z)
        assert slope.shape == (21, 21)
        values = np.asarray(reported(program, z, data))
        theirs.append(twin_hierarchical(hierarchical, ground, values, homes_km) - np.linalg.slogdet(slope)[1])
    # Differences, because of the constant; the tolerance as above, on some 500 nats.
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs), atol=1e-5)
    assert np.abs(np.diff(ours)).min() > 1  # the points do differ


def test_hierarchical_gradient_agrees_with_central_differences(hierarchical, centring):
    program, data = hierarchical.program, hierarchical.data._replace(centring=jnp.asarray(centring))
    rng, step = np.random.default_rng(9), 1e-4
    z = ravel_pytree(program.first_guess(data))[0] + jnp.asarray(0.3 * rng.normal(size=program.dimension))
    gradient = program.value_and_gradient(z, data)[1]
    for _ in range(5):
        along = jnp.asarray(rng.normal(size=z.size))
        ahead, behind = (float(program.value_and_gradient(z + s * step * along, data)[0]) for s in (1, -1))
        # Truncation step² × |along|³ × third derivative / 6, and 1e-8 of solver error over the step.
        assert float(gradient @ along) == pytest.approx((ahead - behind) / (2 * step), rel=1e-5, abs=1e-3)
