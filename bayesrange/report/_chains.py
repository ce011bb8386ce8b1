"""Traces and ranks of the chains for the parameters that lead the table."""

import numpy as np
import xarray as xr
from jaxtyping import Float
from matplotlib.figure import Figure
from numpy.typing import NDArray
from scipy.stats import rankdata

from bayesrange.report._contents import RunContents
from bayesrange.report._drawing import HUES, INK, Picture, our_style, picture, short
from bayesrange.report._format import listed

AT_MOST = 10
_NOT_MAIN = {"group", "home_group", "animal", "coefficient"}  # one group's or animal's, and correlations
_BINS = 20


def main_draws(run: RunContents) -> dict[str, Float[NDArray, "chain draw"]]:
    """Draws of every parameter that is not one group's, under the name it has in the tables."""
    found = {}
    for variable, values in run.posterior.data_vars.items():
        if _NOT_MAIN & set(values.dims) or not {"chain", "draw"} <= set(values.dims):
            continue
        for label, one in _flat(str(variable), values):
            found[label] = np.asarray(one.transpose("chain", "draw").values, dtype=float)
    return found


def lead_draws(run: RunContents) -> dict[str, Float[NDArray, "chain draw"]]:
    """The same, population before spreads and effects; where no parameter is shared, all, the largest R-hat first."""
    main = main_draws(run)
    if main:
        later = {label: label.endswith(" spread") + 2 * (":" in label) for label in main}
        return {label: main[label] for label in sorted(main, key=later.__getitem__)}
    every = {label: one for name, values in run.posterior.data_vars.items() for label, one in _flat(str(name), values)}
    rhat = dict(zip(run.parameters["parameter"], run.parameters["rhat"].fillna(np.inf), strict=True))
    worst = sorted((label for label in every if label in rhat), key=lambda label: -rhat[label])
    return {label: np.asarray(every[label].transpose("chain", "draw").values, dtype=float) for label in worst}


def chains_figure(run: RunContents, draws: dict[str, Float[NDArray, "chain draw"]] | None = None) -> Picture | None:
    """Trace and rank histogram, a row a parameter, at most ten; None if there is no parameter of that kind.

    Args:
        run: what the run folder holds.
        draws: by name, in the order to show; `main_draws` if not given.
    """
    write_out = short if draws is None else _two_lines
    draws = main_draws(run) if draws is None else draws
    shown = dict(list(draws.items())[:AT_MOST])
    if not shown:
        return None
    with our_style():
        figure = Figure(figsize=(11.0, 1.25 * len(shown) + 0.8), layout="constrained")
        panels = figure.subplots(len(shown), 2, squeeze=False, width_ratios=[3, 2])
        for (trace, ranks), (label, values) in zip(panels, shown.items(), strict=True):
            _trace(trace, write_out(label), values)
            _ranks(ranks, values)
        panels[0, 0].set_title("Trace")
        panels[0, 1].set_title("Ranks of each chain among all draws")
        panels[-1, 0].set_xlabel("draw after warm-up")
        panels[-1, 1].set_xlabel("rank")
        handles = panels[0, 0].get_lines()
        labels = [f"chain {at}" for at in range(1, len(handles) + 1)]
        figure.legend(handles, labels, loc="outside lower center", ncols=min(len(handles), 8))
        rest = len(draws) - len(shown)
        more = f" {rest} more parameters are not shown; their R-hat stands in the table." if rest else ""
        caption = (
            "Chains that agree give traces without trend that cover each other, and rank histograms that stay near the "
            f"dashed line.{more}"
        )
        return picture(figure, f"Traces and rank histograms of {listed(list(shown))} by chain.", caption)


def _flat(variable: str, values: xr.DataArray) -> list[tuple[str, xr.DataArray]]:
    """Every entry of a variable over chains and draws, under its name in the tables.

    `resource_spread` of a layer is `resource[earthworms] spread`, `localising_effect` of a covariate `localising:sex`;
    a population's value has the plain name.
    """
    base, _, part = variable.rpartition("_")
    if part not in ("population", "spread", "effect"):
        base, part = variable, ""
    rest = [str(dim) for dim in values.dims if dim not in ("chain", "draw")]
    entries = []
    for index in np.ndindex(*(values.sizes[dim] for dim in rest)):
        at = dict(zip(rest, index, strict=True))
        one = values.isel(at)
        said = {dim: str(one[dim].values) if dim in one.coords else str(at[dim]) for dim in rest}
        covariate = said.pop("covariate", "")
        inner = f"[{', '.join(said.values())}]" if said else ""
        entries.append(
            (base + inner + (" spread" if part == "spread" else "") + (f":{covariate}" if covariate else ""), one)
        )
    return entries


def _two_lines(label: str) -> str:
    """The parameter, and below it whose it is, each short enough: both matter where animals have their own."""
    base, bracket, rest = label.partition("[")
    return short(base) + (f"[{short(rest)}" if bracket else "")


def _trace(axes, label: str, values: Float[NDArray, "chain draw"]) -> None:
    for chain, line in enumerate(values):
        axes.plot(line, color=HUES[chain % len(HUES)], linewidth=0.6, alpha=0.85)
    axes.set_ylabel(label.replace("[", "\n["), rotation=0, ha="right", va="center")
    axes.margins(x=0.005)
    axes.locator_params(axis="y", nbins=4)


def _ranks(axes, values: Float[NDArray, "chain draw"]) -> None:
    ranks = rankdata(values).reshape(values.shape)
    edges = np.linspace(0.5, values.size + 0.5, min(_BINS, values.shape[1]) + 1)
    for chain, line in enumerate(ranks):
        counts, _ = np.histogram(line, edges)
        axes.stairs(counts, edges, color=HUES[chain % len(HUES)], linewidth=1.1)
    axes.axhline(values.shape[1] / (edges.size - 1), color=INK, linewidth=0.8, linestyle=(0, (4, 3)))
    axes.set_ylim(bottom=0)
    axes.set_ylabel("draws")
    axes.margins(x=0.005)
    axes.locator_params(axis="y", nbins=3)
