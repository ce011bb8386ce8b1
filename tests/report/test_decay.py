"""How memory fades: against e^(−t/τ) by numpy, from the draws themselves."""

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from page_text import Page

from bayesrange.report import decay_table, read_memory
from bayesrange.report._decay import Decay, beyond_record, decays

COLUMNS = ["memory", "level", "animal", "elapsed_h", "share_median", "share_lower", "share_upper", "prob"]


def draws_of(folder, memory, level, animal) -> np.ndarray:
    with xr.open_datatree(folder / "posterior.nc", engine="h5netcdf") as tree:
        posterior = tree["posterior"].to_dataset().load()
    if level == "population":
        return posterior[f"{memory}_decay_population"].values.ravel()
    return posterior[f"{memory}_decay"].sel(animal=animal).values.ravel()


@pytest.mark.parametrize("which", ["eight", "alone"])
def test_shares_are_the_formula_over_the_draws(request, which):
    run = request.getfixturevalue(which)
    table = pd.read_csv(run.folder / "tables" / "decay.csv", keep_default_na=False)
    assert list(table.columns) == COLUMNS
    levels = ["population", "new animal", "animal"] if run.recipe.hierarchical else ["animal"]
    assert list(dict.fromkeys(table["level"])) == levels
    extra = 2 if run.recipe.hierarchical else 0
    assert len(table) == 2 * (len(run.recipe.names) + extra) * 3
    assert set(table["elapsed_h"]) == {24.0, 168.0, 720.0}  # a day, a week, 30 days
    for row in table[table["level"] != "new animal"].itertuples():
        shares = np.exp(-row.elapsed_h / draws_of(run.folder, row.memory, row.level, row.animal))
        expected = np.quantile(shares, [0.5, 0.05, 0.95])
        np.testing.assert_allclose([row.share_median, row.share_lower, row.share_upper], expected, rtol=1e-12)
        assert row.prob == 0.9


def test_a_new_animal_is_read_from_the_quantiles_of_its_decay_time(eight):
    table = pd.read_csv(eight.folder / "tables" / "decay.csv")
    parameters = pd.read_csv(eight.folder / "tables" / "parameters.csv").set_index("parameter")
    for row in table[table["level"] == "new animal"].itertuples():
        tau = parameters.loc[f"{row.memory}_decay[new animal]"]
        # e^(−t/τ) grows with τ, so that quantiles map onto quantiles.
        expected = [np.exp(-row.elapsed_h / tau[key]) for key in ("median", "lower", "upper")]
        np.testing.assert_allclose([row.share_median, row.share_lower, row.share_upper], expected, rtol=1e-12)


def test_one_decay_time_later_a_share_of_1_over_e_is_left():
    draws = np.array([90.0, 100.0, 110.0])
    shares = Decay("reference", "animal", "A", 90.0, 100.0, 110.0, draws).shares(np.array([0.0, 100.0]), 0.9)
    np.testing.assert_allclose(shares[:, 0], 1.0, rtol=1e-15)
    assert shares[1, 1] == pytest.approx(np.exp(-1), rel=1e-15)


def test_page_holds_the_shares_of_the_table(eight):
    table = pd.read_csv(eight.folder / "tables" / "decay.csv", keep_default_na=False)
    rows = {
        (row[0], row[1]): row[2:]
        for row in Page(eight.html).rows
        if len(row) == 8 and row[0] in ("reference", "working")
    }
    assert len(rows) == len(table) / 3
    for row in table.itertuples():
        cells = rows[row.memory, row.animal or row.level]
        at = 2 * [24.0, 168.0, 720.0].index(row.elapsed_h)
        said = [text(value) for value in (row.share_median, row.share_lower, row.share_upper)]
        interval = said[1] if said[1] == said[2] else f"{said[1]} to {said[2]}"
        assert cells[at : at + 2] == [said[0], interval]


def text(share: float) -> str:
    return f"{share:.2f}" if share >= 0.005 else "< 0.01"


def test_a_card_without_memory_has_no_decay(no_memory):
    assert decay_table(read_memory(no_memory.folder)).empty
    assert not (no_memory.folder / "tables" / "decay.csv").exists()


def test_decay_beyond_the_record_is_found_by_animal_and_for_the_population(new_memory_run):
    run = read_memory(new_memory_run())
    first, second = run.animals
    table = run.parameters.set_index("parameter")
    uppers = [table.loc[name, "upper"] for name in ("reference_decay", f"reference_decay[{first}]")]
    run.numerics["record_h"] = {first: uppers[1] - 1, second: 1e6}
    found = beyond_record(run)
    # The population is held against the longest record, an animal against its own.
    own = pytest.approx((uppers[1], uppers[1] - 1), rel=1e-12)
    assert {name: row[:2] for name, row in found.items()} == {f"reference_decay[{first}]": ("reference_decay", first)}
    assert found[f"reference_decay[{first}]"][2:] == own
    run.numerics["record_h"] = {first: 1.0, second: 1.0}
    names = ["", f"[{first}]", f"[{second}]", "[new animal]"]
    assert set(beyond_record(run)) == {
        f"{base}{name}" for base in ("reference_decay", "working_decay") for name in names
    }


def test_intervals_take_the_share_of_the_parameters_table(new_memory_run):
    folder = new_memory_run()
    file = folder / "tables" / "parameters.csv"
    pd.read_csv(file).assign(prob=0.5).to_csv(file, index=False)
    run = read_memory(folder)
    row = decay_table(run).iloc[0]
    shares = np.exp(-24.0 / decays(run)[0].draws)
    np.testing.assert_allclose([row["share_lower"], row["share_upper"]], np.quantile(shares, [0.25, 0.75]), rtol=1e-12)
    assert row["prob"] == 0.5
