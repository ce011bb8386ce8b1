"""A hierarchy with covariates, location error, a home to be found and a card of the user's own, in one short chain."""

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from inference._tiny_study import (
    HOMES,
    NORTH,
    SOUTH,
    SOUTH_GROUP,
    UNWATCHED,
    WEST,
    fixes_table,
    groups_table,
    write_study,
)

from bayesrange import commands, open_run

DRAWS = 53
CARD = """
title = "Home and resources"
terms = ["localising", "resources"]
[priors.localising]
family = "log-normal"
median = 8.0
spread = 0.8
scaled_by = "1/home_length"
[priors.resource]
family = "normal"
mean = 0.0
sd = 1.0
[between_groups.localising]
family = "half-normal"
scale = 0.3
[between_groups.resource]
family = "half-normal"
scale = 0.3
"""


@pytest.fixture(scope="module")
def answered(tmp_path_factory, environment):
    """One chain, and draws that are no multiple of a chunk, written where the user says."""
    groups = groups_table()
    groups.loc[groups["group"] == NORTH, ["x", "y"]] = np.nan
    fixes = fixes_table()
    inner = fixes["x"].between(WEST + 400, WEST + 1500) & fixes["y"].between(SOUTH + 400, SOUTH + 2000)
    fixes.loc[inner & (fixes.index % 4 == 0), "error_m"] = 45.0
    folder = tmp_path_factory.mktemp("hierarchy")
    (folder / "own.toml").write_text(CARD)
    write_study(
        folder, fixes, groups, model={"card": "own", "pooling": "hierarchical", "covariates": ["size"]},
        sampling={"chains": 1, "warmup": 40, "draws": DRAWS},
    )  # fmt: skip
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", environment["XDG_CACHE_HOME"])
        status = commands.main(["fit", str(folder / "study.toml"), "--out", str(folder / "a run")])
    return status, open_run(folder / "a run")


def test_run_that_did_not_converge_ends_with_status_3_and_is_written_and_marked(answered):
    status, run = answered
    assert status == 3 and not run.converged and run.info["card"]["name"] == "own"
    assert {"own.toml", "fixes.csv"} <= set(run.info["files"])
    assert (
        "R-hat cannot be computed from one chain; set chains to at least 2, better 4."
        in run.info["diagnostics"]["problems"]
    )
    assert run.info["diagnostics"]["max_rhat"] is None
    assert "not converged</strong>" in (run.folder / "report.html").read_text(encoding="utf-8")


def test_hierarchical_posterior_has_the_dimensions_of_the_format(answered):
    with xr.open_datatree(answered[1].folder / "posterior.nc", engine="h5netcdf") as tree:
        posterior = tree["posterior"].dataset.load()
        constant = tree["constant_data"].dataset.load()
    assert posterior.sizes["chain"] == 1 and posterior.sizes["draw"] == DRAWS
    own = {name: v.dims[2:] for name, v in posterior.data_vars.items() if not name.startswith("group_")}
    assert own == {
        "localising": ("group",), "localising_population": (), "localising_spread": (),
        "localising_effect": ("covariate",),
        "resource": ("layer", "group"), "resource_population": ("layer",), "resource_spread": ("layer",),
        "resource_effect": ("layer", "covariate"),
        "home_x": ("home_group",), "home_y": ("home_group",),
    }  # fmt: skip
    assert list(posterior["home_group"].values) == [NORTH]
    assert np.isnan(constant["home_x"].sel(group=NORTH)) and constant["home_x"].sel(group=UNWATCHED) == WEST + 1800
    assert set(np.unique(constant["error_m"])) == {0.0, 45.0}


def test_estimated_home_is_where_the_group_lives(answered):
    table = answered[1].parameters.set_index("parameter")
    x, y = HOMES[NORTH]
    # The data were made around it with a spread of 280 m in 100 fixes worth half as many
    assert abs(table.loc[f"home_x[{NORTH}]", "median"] - WEST - x) < 200
    assert abs(table.loc[f"home_y[{NORTH}]", "median"] - SOUTH - y) < 200


def test_table_names_groups_covariates_and_the_new_group(answered):
    names = set(pd.read_csv(answered[1].folder / "tables" / "parameters.csv")["parameter"])
    assert {
        "localising", "localising spread", "localising:size", f"localising[{NORTH}]", f"localising[{SOUTH_GROUP}]",
        "localising[new group]", f"resource[worms, {UNWATCHED}]", "resource[worms] spread",
    } <= names  # fmt: skip


def test_group_without_fixes_stays_near_the_population(answered):
    # Nothing but the population speaks of it (the covariate aside): its spread over draws is at least as wide.
    with xr.open_datatree(answered[1].folder / "posterior.nc", engine="h5netcdf") as tree:
        log = np.log(tree["posterior/localising"].load())
    spread = log.std(("chain", "draw"))
    assert float(spread.sel(group=UNWATCHED)) > 0.8 * float(spread.sel(group=NORTH))
