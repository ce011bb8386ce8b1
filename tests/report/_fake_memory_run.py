"""A made-up run folder of a memory card, in the format that a fit writes; no fit stands behind it.

Tracks are walks over an invented place that prefer a layer and, with memory, ground where the animal was before.
Draws come from the distributions written here; recall follows mathematics.md §2 exactly, by direct summation.
"""

import hashlib
import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
from arviz_stats import ess, rhat
from fake_tracks import CELL_M, RANGE_M, RECORD_H, SHORTEST_M, SOUTH_M, WEST_M, place, steps_of, tracks

NAMES = [
    "Hind <b>1</b>", "Hind 2 $x$", "Stag/3", "Stag & 4", "Hind 5", "Stag 6, late", "Hind 7", "Stag 8 of the long name",
]  # fmt: skip
SEXES = np.array([0, 0, 1, 1, 0, 1, 0, 1])
UNITS = {
    "step_scale": "m", "selection": "per sd", "reference_decay": "h", "working_decay": "h", "recall_half": "h",
    "encoding_range": "m", "home_pull": "1/km", "home_x": "m", "home_y": "m",
}  # fmt: skip
# centre, sd between draws on the unconstrained scale, spread between animals, prior interval
CENTRES = {
    "step_shape": (1.2, 0.03, 0.05, (0.5, 4.0)), "step_scale": (130.0, 0.04, 0.08, (20.0, 900.0)),
    "turn_concentration": (0.4, 0.1, 0.15, (0.02, 2.0)), "selection": (0.5, 0.08, 0.15, (-1.6, 1.6)),
    "reference_strength": (2.4, 0.3, 0.4, (-1.3, 5.3)), "reference_decay": (520.0, 0.35, 0.25, (97.0, 2590.0)),
    "working_strength": (1.3, 0.25, 0.3, (-1.5, 3.5)), "working_decay": (9.0, 0.3, 0.2, (3.2, 32.0)),
    "recall_half": (5.5, 0.3, 0.0, (1.0, 26.0)), "encoding_range": (150.0, 0.1, 0.0, (50.0, 450.0)),
    "home_pull": (0.6, 0.1, 0.1, (0.02, 3.0)),
}  # fmt: skip
NATURAL = ("selection", "reference_strength", "working_strength")


@dataclass(frozen=True)
class Recipe:
    animals: int = 8
    hierarchical: bool = True
    memory: bool = True
    home: bool = False
    layers: tuple[str, ...] = ("forage",)
    daily: bool = False
    estimate_range: bool = False
    converged: bool = True
    sensitive: str = "no"
    chains: int = 4
    draws: int = 50
    selection: float = 0.5
    thin: int = 1
    card: str = "memory-resources"
    data: str = "one"
    seed: int = 3

    @property
    def names(self) -> list[str]:
        return NAMES[: self.animals]

    @property
    def responses(self) -> list[str]:
        return (
            [f"{name}, {part}" for name in self.layers for part in ("day", "night")] if self.daily else [*self.layers]
        )


def parameter_draws(recipe: Recipe, rng) -> dict[str, tuple[tuple[str, ...], np.ndarray]]:
    """Draws by variable: dims after chain and draw, values."""
    wanted = ["step_shape", "step_scale", "turn_concentration"] + (["selection"] if recipe.layers else [])
    if recipe.memory:
        wanted += ["reference_strength", "reference_decay", "working_strength", "working_decay", "recall_half"]
        wanted += ["encoding_range"] if recipe.estimate_range else []
    wanted += ["home_pull"] if recipe.home else []
    size, count, made = (recipe.chains, recipe.draws), recipe.animals, {}
    for name in wanted:
        centre, sd, between, _ = CENTRES[name]
        centre = recipe.selection if name == "selection" else centre
        extra = (len(recipe.responses),) if name == "selection" else ()
        dims = ("layer",) if extra else ()
        natural = name in NATURAL
        population = (centre if natural else np.log(centre)) + sd * rng.normal(size=(*size, *extra))
        population += 0 if recipe.converged or name != "step_shape" else 0.6 * (np.arange(recipe.chains)[:, None] == 0)
        back = (lambda value: value) if natural else np.exp
        if recipe.hierarchical and name in ("recall_half", "encoding_range"):
            made[name] = ((), back(population))
            continue
        own = population[..., None] + 1.4 * sd * rng.normal(size=(*size, *extra, count))
        own += between * rng.normal(size=(*extra, count))
        made[name] = ((*dims, "animal"), back(own))
        if recipe.hierarchical:
            made[f"{name}_population"] = (dims, back(population))
            made[f"{name}_spread"] = (dims, np.abs(between + 0.3 * between * rng.normal(size=population.shape)))
            made[f"{name}_effect"] = ((*dims, "covariate"), 0.1 + 0.15 * rng.normal(size=(*population.shape, 1)))
    if recipe.home:
        for axis, middle in (("home_x", WEST_M + 3400), ("home_y", SOUTH_M + 2600)):
            made[axis] = (("animal",), middle + 100 * rng.normal(size=(*size, count)))
    return made


def recall(recipe: Recipe, made, at: int, name: str, track: pd.DataFrame, x, y) -> np.ndarray:
    """ρ(M) at the animal's last fix for every draw, (draws, ny, nx)."""
    east, north = (axis.ravel() for axis in np.meshgrid(x, y))
    stays = track.iloc[:-1]
    spent = np.diff(track["hour"])
    age = track["hour"].iloc[-1] - stays["hour"].to_numpy()
    square = (east[:, None] - stays["x"].to_numpy()) ** 2 + (north[:, None] - stays["y"].to_numpy()) ** 2
    near = np.exp(-square / 2 / RANGE_M**2)
    decay = made[name][1][..., at].ravel()
    half = made["recall_half"][1]
    half = half.ravel() if recipe.hierarchical else half[..., at].ravel()
    trace = near @ (spent[:, None] * np.exp(-age[:, None] / decay))
    return (trace / (trace + half)).T.reshape(-1, y.size, x.size)


def summary(recipe: Recipe, made) -> pd.DataFrame:
    """tables/parameters.csv from the draws."""
    rng, rows = np.random.default_rng(1), []
    for variable, (dims, values) in made.items():
        base, _, part = variable.rpartition("_")
        if part not in ("population", "spread", "effect"):
            base, part = variable, ""
        inner = {"layer": recipe.responses, "animal": recipe.names, "covariate": ["sex=male"]}
        for index in np.ndindex(*values.shape[2:]):
            said = {dim: inner[dim][i] for dim, i in zip(dims, index, strict=True)}
            covariate = said.pop("covariate", "")
            name = base + (f"[{', '.join(said.values())}]" if said else "")
            chains = values[(..., *index)]
            if part:
                name += f":{covariate}" if covariate else " spread" if part == "spread" else ""
                rows.append(row_of(name, base, chains, part in ("spread", "effect")))
            else:
                rows.append(row_of(name, base, chains, False))
            if part == "population":
                spread = made[f"{base}_spread"][1][(..., *index)] * rng.normal(size=chains.shape)
                new = chains + spread if base in NATURAL else chains * np.exp(spread)
                one = f"{said['layer']}, new animal" if said else "new animal"
                rows.append(row_of(f"{base}[{one}]", base, new, False))
                if base == "selection":
                    rows.append(row_of(name + " raw", base, chains / 17.0, False) | {"unit": "1/(kg/ha)"})
    order = [row for row in rows if "[" not in row["parameter"] or row["parameter"].startswith("selection")]
    return pd.DataFrame(order + [row for row in rows if row not in order])


def row_of(name: str, base: str, chains: np.ndarray, unconstrained: bool) -> dict:
    draws, found = chains.ravel(), xr.DataArray(chains, dims=("chain", "draw"))
    low, high = (-0.8, 0.8) if unconstrained else CENTRES.get(base, (0, 0, 0, (np.nan, np.nan)))[3]
    low = 0.02 if name.endswith("spread") else low
    lower, median, upper = np.quantile(draws, [0.05, 0.5, 0.95])
    contraction = 1 - draws.var() / ((high - low) / 3.29) ** 2
    return {
        "parameter": name, "unit": "1" if unconstrained else UNITS.get(base, "1"), "mean": draws.mean(),
        "sd": draws.std(ddof=1), "median": median, "lower": lower, "upper": upper, "prob": 0.9,
        "ess_bulk": float(ess(found, method="bulk")) * 12, "ess_tail": float(ess(found, method="tail")) * 12,
        "rhat": 1 + (float(rhat(found)) - 1) * (0.2 if float(rhat(found)) < 1.1 else 1), "mcse_mean": draws.std() / 28,
        "prior_lower": low, "prior_upper": high, "contraction": contraction,
    }  # fmt: skip


def facts(recipe: Recipe, table: pd.DataFrame, counts: dict) -> dict:
    """run.json."""
    digest = hashlib.sha256(recipe.data.encode()).hexdigest()
    other = hashlib.sha256(f"{recipe.card}{recipe.selection}".encode()).hexdigest()
    shifts = {name: 0.02 + 0.005 * at for at, name in enumerate(table["parameter"][:14])}
    layers = {name: {"mean": 40.0, "sd": 17.0, "unit": "kg/ha", "reference": ""} for name in recipe.layers}
    terms = ["steps"] + (["resources"] if recipe.layers else []) + (["memory"] if recipe.memory else [])
    return {
        "format": 1,
        "name": "Fell <i>of</i> Nowhere",
        "study": {"file": "study.toml", "name": "Fell <i>of</i> Nowhere", "sha256": other},
        "files": {
            "study.toml": other, "fixes.csv": digest, "animals.csv": digest, "forage.tif": digest,
            f"models/{recipe.card}.toml": other,
        },
        "crs": "EPSG:32630",
        "cell_m": CELL_M,
        "card": {
            "name": recipe.card,
            "kind": "memory",
            "title": "Steps, resources & memory",
            "terms": terms + (["home"] if recipe.home else []),
            "says": "At each step an animal weighs ground by <resources> and by what it remembers.",
            "not_when": "A place is good for a reason that no layer shows.",
            "pooling": "hierarchical" if recipe.hierarchical else "individual",
            "priors": {"step_shape": "log-normal (median 1, spread 0.5)", "reference_decay": "log-normal (500 h)"},
            "prior_reasons": {"reference_decay": "From days to a season."},
            "changed_priors": [],
            "references": ["Nobody, A. (2031). An invented paper."],
        },
        "finished": "2031-12-01T10:00:00+00:00",
        "scales": {"median_step_m": 121.0, "encoding_range_m": RANGE_M, "layers": layers},
        "sampling": {"chains": recipe.chains, "warmup": 300, "draws": recipe.draws, "seed": 20},
        "versions": {"bayesrange": "0.1.0", "python": "3.12.4", "jax": "0.12.0"},
        "times": {"compile_s": 8.1, "sampling_s": 141.2},
        "counts": {"rows": 5800, "failed": 170, "fixes": 5630, "animals": recipe.animals},
        "effective": None,
        "memory": {
            "interval_h": 1.0, "tolerance": 0.1, "shortest_step_m": SHORTEST_M,
            "encoding_range_m": None if recipe.estimate_range else RANGE_M, "nodes": 64, "columns": 18,
            "range_columns": 10,
            "trace_error": 2.4e-4, "trace_error_limit": 1e-3, "quadrature_shift": shifts,
            "step_autocorrelation": {name: {"lag_1": 0.02 + 0.03 * at, "day": 0.02} for at, name in enumerate(counts)},
            "together": [[*recipe.names[:2], 0.83]] if recipe.animals > 1 else [],
            "record_h": {name: float(RECORD_H) for name in counts}, "steps": counts,
        },
        "diagnostics": {
            "divergences": 0, "failed_solves": 0, "two_states": 0, "min_bfmi": 0.9, "max_rhat": table["rhat"].max(),
            "min_ess_bulk": table["ess_bulk"].min(), "min_ess_tail": table["ess_tail"].min(),
            "problems": [] if recipe.converged else ["R-hat of step_shape is too large: run longer chains."],
        },
        "converged": recipe.converged,
        "warnings": ["170 fixes without coordinates were counted as failed.", "<script>x</script> has a short track."],
        "period": None,
        "sensitive": recipe.sensitive,
    }  # fmt: skip


def build_run(folder: Path, recipe: Recipe = Recipe()) -> Path:
    """Write a run folder without a report."""
    rng = np.random.default_rng(recipe.seed)
    x, y, habitable, layer = place()
    fixes = tracks(recipe.names, x, y, habitable, layer)
    by_animal = {name: steps_of(fixes[fixes["animal"] == name]) for name in recipe.names}
    steps = pd.concat([table for table, _ in by_animal.values()], ignore_index=True)
    made = parameter_draws(recipe, rng)
    names = {"layer": recipe.responses, "animal": recipe.names, "covariate": ["sex=male"]}
    posterior = xr.Dataset({name: (("chain", "draw", *dims), values) for name, (dims, values) in made.items()})
    posterior = posterior.assign_coords({dim: names[dim] for dim in posterior.dims if dim in names})
    text = {name: steps[name].to_numpy(dtype=object) for name in ("animal", "kind")}
    constant = {
        "animal_of_step": ("step", text["animal"]), "kind": ("step", text["kind"]),
        "time": ("step", steps["time"].to_numpy()), "habitable": (("y", "x"), habitable),
        **{name: ("step", steps[name].to_numpy()) for name in ("length_m", "turn", "start_x", "start_y")},
        **{f"fix_{name}": ("fix", fixes[name].to_numpy()) for name in ("x", "y", "time")},
        "fix_animal": ("fix", fixes["animal"].to_numpy(dtype=object)), "weight": ("animal", weights(recipe)),
        "memory_start": ("animal", np.array(["naive"] * recipe.animals, dtype=object)),
    }  # fmt: skip
    coords = {"animal": recipe.names, "x": x, "y": y}
    if recipe.layers:
        constant["layer_value"] = (("layer", "y", "x"), np.array([layer + 3 * at for at in range(len(recipe.layers))]))
        coords["layer"] = list(recipe.layers)
    stats = xr.Dataset({"acceptance_rate": (("chain", "draw"), np.full((recipe.chains, recipe.draws), 0.87))})
    groups = {
        "posterior": posterior, "sample_stats": stats,
        "observed_data": xr.Dataset({name: ("step", steps[name].to_numpy()) for name in ("x", "y")}),
        "constant_data": xr.Dataset(constant, coords=coords),
    }  # fmt: skip
    if recipe.memory:
        groups["memory_use"] = memory_use(recipe, made, fixes, x, y)
    (folder / "tables").mkdir(parents=True)
    xr.DataTree.from_dict(groups).to_netcdf(folder / "posterior.nc", engine="h5netcdf")
    table = summary(recipe, made)
    table.to_csv(folder / "tables" / "parameters.csv", index=False)
    counts = {name: counted for name, (_, counted) in by_animal.items()}
    (folder / "run.json").write_text(json.dumps(facts(recipe, table, counts)), encoding="utf-8")
    return folder


def weights(recipe: Recipe) -> np.ndarray:
    """The first two animals travel together and count as one, where there is a population to count in."""
    return np.array([0.5 if recipe.hierarchical and at < 2 else 1.0 for at in range(recipe.animals)])


def memory_use(recipe: Recipe, made, fixes, x, y) -> xr.Dataset:
    """Recall at the end of each record, over the draws; a thinned surface keeps every so many cells."""
    parts = []
    x, y = (axis[recipe.thin // 2 :: recipe.thin] for axis in (x, y))
    for at, name in enumerate(recipe.names):
        mine = fixes[fixes["animal"] == name]
        reference = recall(recipe, made, at, "reference_decay", mine, x, y)
        working = recall(recipe, made, at, "working_decay", mine, x, y)
        parts.append([reference.mean(0), reference.std(0), working.mean(0)])
    stacked = np.array(parts)
    dims = ("animal", "y", "x")
    return xr.Dataset(
        {key: (dims, stacked[:, i]) for i, key in enumerate(("recall_mean", "recall_sd", "working_mean"))},
        coords={"animal": recipe.names, "y": y, "x": x},
    )


RECIPES = {
    "hierarchical": Recipe(),
    "individual": Recipe(animals=3, hierarchical=False, layers=("forage", "cover"), draws=25, seed=5, thin=2),
    "null": Recipe(animals=3, memory=False, card="steps-home", home=True, draws=25, converged=False),
}
