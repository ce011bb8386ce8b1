"""A made-up run folder, in the format that a fit writes, whose truth is in closed form.

Each group has u ∝ exp(−β ρ) around a home on a grid with a lake and a slanted edge. The homes, the place and all
names are invented; values are those of the formulas, no fit stands behind them.
"""

import hashlib
import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
from arviz_stats import ess, rhat

CELL_M = 100.0
WEST_M, SOUTH_M = 512_000.0, 5_730_000.0
CRS = "EPSG:32631"
ISOPLETHS = (50, 95)
NAMES = ["North <b>bold</b>/End", "Alder $carr$", "alder $carr$", "Quarry & Sons", "Fen, lower"]


@dataclass(frozen=True)
class Recipe:
    groups: int = 5
    hierarchical: bool = False
    converged: bool = True
    layers: tuple[str, ...] = ("earthworms",)
    estimate_last_home: bool = False
    sensitive: str = "no"
    chains: int = 4
    draws: int = 50
    seed: int = 11


def names(count: int) -> list[str]:
    more = [f"Sett {letter}" for letter in "ABCDEFGHIJKLMNOPQRS"]
    return (NAMES + more)[:count]


def homes(count: int) -> np.ndarray:
    """Home centres on a lattice 1.3 km apart, shifted off the cell centres [m]."""
    columns = int(np.ceil(np.sqrt(count * 1.2)))
    at = np.arange(count)
    x = WEST_M + 1050 + 1300 * (at % columns) + 140 * (at % 3)
    y = SOUTH_M + 1150 + 1300 * (at // columns) + 110 * (at % 2)
    return np.column_stack([x, y]).astype(float)


def grid(count: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cell centres x, y [m] and the habitable share: a lake, and an edge that cuts off the north-eastern corner."""
    far = homes(count).max(axis=0)
    nx, ny = (int((far[0] - WEST_M) / CELL_M) + 12, int((far[1] - SOUTH_M) / CELL_M) + 12)
    x, y = WEST_M + CELL_M * (np.arange(nx) + 0.5), SOUTH_M + CELL_M * (np.arange(ny) + 0.5)
    habitable = np.ones((ny, nx))
    column, row = np.meshgrid(np.arange(nx), np.arange(ny))
    slant = np.clip((nx + ny - 12.0) - (column + row), 0, 1)
    habitable = np.minimum(habitable, slant)
    habitable[4:7, nx // 2 : nx // 2 + 6] = 0.0
    return x, y, habitable


def densities(x, y, habitable, home, beta) -> np.ndarray:
    """u on the grid [1/km²] for home [m] and β [1/km]; integrates to 1 over the habitable ground."""
    east, north = np.meshgrid((x - home[0]) / 1e3, (y - home[1]) / 1e3)
    u = np.where(habitable > 0, np.exp(-beta * np.hypot(east, north)), 0.0)
    return u / (u * habitable).sum() / (CELL_M / 1e3) ** 2


def inside_isopleth(u, habitable, percent) -> np.ndarray:
    order = np.argsort(-u, axis=None)
    mass = np.cumsum((u * habitable).ravel()[order]) * (CELL_M / 1e3) ** 2
    inside = np.zeros(u.size, dtype=bool)
    inside[order[: int(np.searchsorted(mass, percent / 100)) + 1]] = True
    return inside.reshape(u.shape) & (habitable > 0)


def parameter_draws(recipe: Recipe, rng, group_names) -> dict[str, tuple[tuple[str, ...], np.ndarray, dict]]:
    """Draws by variable: dims after chain and draw, values, coordinates."""
    shape = (recipe.chains, recipe.draws)
    shift = np.zeros(shape)
    if not recipe.converged:
        shift[0] = 0.9  # one chain sits elsewhere
    made: dict = {}
    base = {"localising": (7.0, 0.35), "avoidance": (0.22, 0.06)}
    count = len(group_names)
    for name, (centre, sd) in base.items():
        population = centre + sd * rng.normal(size=shape) + (shift if name == "avoidance" else 0)
        if recipe.hierarchical:
            made[f"{name}_population"] = ((), population, {})
            made[f"{name}_spread"] = ((), np.abs(0.3 + 0.08 * rng.normal(size=shape)), {})
            by_group = population[..., None] + 1.2 * sd * rng.normal(size=(*shape, count))
            made[name] = (("group",), by_group, {"group": group_names})
        else:
            made[name] = ((), population, {})
    if recipe.layers:
        coords = {"layer": list(recipe.layers)}
        resource = 0.4 + 0.12 * rng.normal(size=(*shape, len(recipe.layers)))
        if recipe.hierarchical:
            made["resource_population"] = (("layer",), resource, coords)
            made["resource_spread"] = (("layer",), np.abs(0.2 + 0.05 * rng.normal(size=resource.shape)), coords)
            by_group = resource[..., None] + 0.15 * rng.normal(size=(*resource.shape, count))
            made["resource"] = (("layer", "group"), by_group, {**coords, "group": group_names})
        else:
            made["resource"] = (("layer",), resource, coords)
    if recipe.estimate_last_home:
        for axis, key in enumerate(("home_x", "home_y")):
            centre = homes(count)[-1, axis]
            made[key] = (("home_group",), centre + 60 * rng.normal(size=(*shape, 1)), {"home_group": group_names[-1:]})
    return made


def space_use(recipe: Recipe, made, group_names, x, y, habitable) -> xr.Dataset:
    """UDs, isopleths, areas and overlaps of every draw, summed up as in posterior.nc."""
    count, shape = len(group_names), (recipe.chains, recipe.draws)
    beta = made["localising"][1]
    beta = beta if recipe.hierarchical else np.repeat(beta[..., None], count, axis=-1)
    total, square = np.zeros((2, count, *habitable.shape))
    within = np.zeros((len(ISOPLETHS), count, *habitable.shape))
    area = np.zeros((*shape, len(ISOPLETHS), count))
    overlap = np.zeros((*shape, count, count))
    centres = homes(count)
    for draw in np.ndindex(*shape):
        u = np.array([densities(x, y, habitable, centres[at], beta[(*draw, at)]) for at in range(count)])
        total, square = total + u, square + u**2
        root = np.sqrt(u * habitable).reshape(count, -1)
        overlap[draw] = root @ root.T * (CELL_M / 1e3) ** 2
        for level, percent in enumerate(ISOPLETHS):
            for at in range(count):
                inside = inside_isopleth(u[at], habitable, percent)
                within[level, at] += inside
                area[(*draw, level, at)] = (inside * habitable).sum() * (CELL_M / 1e3) ** 2
    number = recipe.chains * recipe.draws
    mean = total / number
    hidden = np.where(habitable > 0, 1.0, np.nan)
    return xr.Dataset(
        {
            "density_mean": (("group", "y", "x"), mean * hidden),
            "density_sd": (("group", "y", "x"), np.sqrt(np.maximum(square / number - mean**2, 0)) * hidden),
            "inside_probability": (("isopleth", "group", "y", "x"), within / number * hidden),
            "area_km2": (("chain", "draw", "isopleth", "group"), area),
            "overlap": (("chain", "draw", "group", "neighbour"), overlap),
        },
        coords={"group": group_names, "neighbour": group_names, "isopleth": list(ISOPLETHS), "x": x, "y": y},
    )


def fixes(recipe: Recipe, rng, group_names, x, y, habitable) -> pd.DataFrame:
    """Fixes drawn from cells in proportion to the density; two animals a group."""
    rows = []
    for at, home in enumerate(homes(len(group_names))):
        u = densities(x, y, habitable, home, 7.0) * habitable
        cell = rng.choice(u.size, size=60, p=(u / u.sum()).ravel())
        row, column = np.unravel_index(cell, u.shape)
        for number in range(60):
            jitter = rng.uniform(-40, 40, size=2)
            rows.append(
                (x[column[number]] + jitter[0], y[row[number]] + jitter[1], group_names[at], f"a{at}{number % 2}")
            )
    table = pd.DataFrame(rows, columns=["x", "y", "group", "animal"])
    table["time"] = pd.Timestamp("2031-03-01") + pd.to_timedelta(4 * np.arange(len(table)), unit="h")
    return table


def summary(made) -> pd.DataFrame:
    """tables/parameters.csv from the draws; the prior is normal with the interval given."""
    prior = {"localising": (0.5, 20.0), "avoidance": (0.02, 1.9), "resource": (-1.6, 1.6)}
    units = {"localising": "1/km", "resource": "per sd", "home_x": "m", "home_y": "m"}
    rows = []
    for variable, (dims, values, coords) in made.items():
        base = variable.removesuffix("_population").removesuffix("_spread")
        end = " spread" if variable.endswith("_spread") else ""
        for index in np.ndindex(*values.shape[2:]):
            inner = ", ".join(str(coords[dim][i]) for dim, i in zip(dims, index, strict=True))
            chains = values[(..., *index)]
            draws, found = chains.ravel(), xr.DataArray(chains, dims=("chain", "draw"))
            low, high = (0.02, 1.9) if end else prior.get(base, (np.nan, np.nan))
            prior_sd = (high - low) / 3.29
            lower, median, upper = np.quantile(draws, [0.05, 0.5, 0.95])
            row = {
                "parameter": base + (f"[{inner}]" if inner else "") + end,
                "unit": "1" if end else units.get(base, "1"),
                "mean": draws.mean(), "sd": draws.std(ddof=1), "median": median, "lower": lower, "upper": upper,
                "prob": 0.9, "ess_bulk": float(ess(found, method="bulk")),
                "ess_tail": float(ess(found, method="tail")), "rhat": float(rhat(found)), "mcse_mean": draws.std() / 28,
                "prior_lower": low, "prior_upper": high, "contraction": 1 - draws.var() / prior_sd**2,
            }  # fmt: skip
            rows.append(row)
            if base == "avoidance" and not end:
                scaled = {key: 0.8 * row[key] for key in ("mean", "sd", "median", "lower", "upper")}
                limits = {key: 0.8 * row[key] for key in ("prior_lower", "prior_upper", "mcse_mean")}
                rows.append(
                    {**row, **scaled, **limits, "parameter": row["parameter"] + " raw", "unit": "km² per animal"}
                )
    return pd.DataFrame(rows)


def facts(recipe: Recipe, table: pd.DataFrame, habitable, count: int, fix_count: int) -> dict:
    """run.json."""
    digest = hashlib.sha256(b"invented").hexdigest()
    problems = (
        [] if recipe.converged else ["R-hat of avoidance is too large, expected 1.01 at most: run longer chains."]
    )
    animals = [
        {"animal": f"a{at // 2}{at % 2}", "fixes": 30, "crossing_time_h": 11.5 + at, "effective": 14.2}
        for at in range(4)
    ]
    terms = ["localising", "avoidance"] + (["resources"] if recipe.layers else [])
    return {
        "format": 1,
        "name": "Heath <i>of</i> Nowhere",
        "study": {"file": "study.toml", "name": "Heath <i>of</i> Nowhere", "sha256": digest},
        "files": {"fixes.csv": digest, "groups.csv": digest, "area.geojson": digest},
        "crs": CRS,
        "cell_m": CELL_M,
        "card": {
            "name": "avoidance-resources",
            "title": "Home, neighbours and resources",
            "terms": terms,
            "says": "Animals drift home & keep <off> their neighbours.",
            "not_when": "A river runs between the groups.",
            "pooling": "hierarchical" if recipe.hierarchical else "shared",
            "priors": {"localising": "log-normal (median 8, spread 0.8)", "avoidance": "half-normal (scale 1)"},
            "prior_reasons": {"localising": "Ranges that just tile the area."},
            "changed_priors": ["avoidance"],
            "references": ["Nobody, A. (2031). An invented paper."],
        },  # fmt: skip
        "finished": "2031-12-01T10:00:00+00:00",
        "scales": {
            "a0_km2": float(habitable.sum() * 0.01 / count),
            "perception_m": 200.0,
            "eps_m": 50.0,
            "layers": {name: {"mean": 41.0, "sd": 12.5, "unit": "kg/ha"} for name in recipe.layers},
        },  # fmt: skip
        "sampling": {"chains": recipe.chains, "warmup": 500, "draws": recipe.draws, "seed": 20},
        "versions": {"bayesrange": "0.1.0", "python": "3.12.4", "jax": "0.12.0"},
        "times": {"compile_s": 8.1, "sampling_s": 141.2},
        "counts": {"rows": fix_count + 17, "failed": 17, "fixes": fix_count, "groups": count},
        "effective": {
            "fixes": fix_count,
            "effective": 0.4 * fix_count,
            "animals": animals,
            "sentence": f"{fix_count} fixes carry the information of about {0.4 * fix_count:.0f} independent ones",
        },  # fmt: skip
        "diagnostics": {
            "divergences": 0 if recipe.converged else 3,
            "failed_solves": 0,
            "two_states": 0,
            "min_bfmi": 0.91,
            "max_rhat": table["rhat"].max(),
            "min_ess_bulk": table["ess_bulk"].min(),
            "min_ess_tail": table["ess_tail"].min(),
            "problems": problems,
        },  # fmt: skip
        "converged": recipe.converged,
        "warnings": [
            "17 fixes without coordinates were counted as failed.",
            "Group <script>x</script> has one collar.",
        ],
        "period": None,
        "sensitive": recipe.sensitive,
    }


def build_run(folder: Path, recipe: Recipe = Recipe()) -> Path:
    """Write a run folder without a report."""
    rng = np.random.default_rng(recipe.seed)
    group_names = names(recipe.groups)
    x, y, habitable = grid(recipe.groups)
    made = parameter_draws(recipe, rng, group_names)
    data = fixes(recipe, rng, group_names, x, y, habitable)
    known = homes(recipe.groups)
    if recipe.estimate_last_home:
        known[-1] = np.nan
    hidden = np.where(habitable > 0, 1.0, np.nan)
    waves = [25 + 20 * np.sin(x[None] / 900 + at) * np.cos(y[:, None] / 700) for at in range(len(recipe.layers))]
    constant = {
        "weight": ("fix", np.full(len(data), 0.4)), "error_m": ("fix", np.full(len(data), 15.0)),
        "group_of_fix": ("fix", data["group"].to_numpy(dtype=object)),
        "animal": ("fix", data["animal"].to_numpy(dtype=object)),
        "time": ("fix", data["time"].to_numpy()), "habitable": (("y", "x"), habitable),
        "home_x": ("group", known[:, 0]), "home_y": ("group", known[:, 1]),
        "animals": ("group", np.arange(2, 2 + recipe.groups)),
    }  # fmt: skip
    coords = {"group": group_names, "x": x, "y": y}
    if recipe.layers:
        constant["layer_value"] = (("layer", "y", "x"), np.array(waves) * hidden)
        coords["layer"] = list(recipe.layers)
    posterior = xr.Dataset({k: (("chain", "draw", *dims), v, {}) for k, (dims, v, _) in made.items()})
    for _, _, given in made.values():
        posterior = posterior.assign_coords(given)
    size = (recipe.chains, recipe.draws)
    stats = {
        "acceptance_rate": (("chain", "draw"), np.full(size, 0.87)),
        "diverging": (("chain", "draw"), np.zeros(size, bool)),
    }
    tree = xr.DataTree.from_dict(
        {
            "posterior": posterior,
            "sample_stats": xr.Dataset(stats),
            "observed_data": xr.Dataset({"x": ("fix", data["x"].to_numpy()), "y": ("fix", data["y"].to_numpy())}),
            "constant_data": xr.Dataset(constant, coords=coords),
            "space_use": space_use(recipe, made, group_names, x, y, habitable),
        }
    )
    (folder / "tables").mkdir(parents=True)
    tree.to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    table = summary(made)
    table.to_csv(folder / "tables" / "parameters.csv", index=False)
    text = json.dumps(facts(recipe, table, habitable, recipe.groups, len(data)))
    (folder / "run.json").write_text(text, encoding="utf-8")
    return folder


RECIPES = {
    "five": Recipe(estimate_last_home=True, draws=110),
    "twelve": Recipe(groups=12, hierarchical=True, layers=("earthworms", "cover"), draws=25),
    "split": Recipe(groups=2, converged=False, draws=25),
}
