"""Fixes read from their bearings: against products of scipy's von Mises densities, and against simulated truth."""

import numpy as np
import pandas as pd
import pyproj
import pytest
from inference._tiny_study import SOUTH, WEST, fixes_table, write_study
from scipy import stats

from bayesrange.inference import find_card, fix_entries, make_data, make_scales, make_spec, read_card
from bayesrange.inference._bearing_nodes import bearing_nodes, bearings_of, log_density
from bayesrange.study import read_study
from bayesrange.study._bearing_sd import Sets
from bayesrange.study._ellipses import axes_of
from bayesrange.study._grid import Frame, build_grid
from bayesrange.study._triangulation import lenth_information, locate

KAPPA = 1 / np.radians(5.0) ** 2
STATIONS = np.array([(200.0, 150.0), (2300.0, 500.0), (1300.0, 2500.0)])


def bearings_to(place, stations=STATIONS, off_deg=(0.0, 0.0, 0.0), kappa=KAPPA):
    """One fix's bearings in the study's coordinates, and where they meet best with its ellipse."""
    corner = np.array([WEST, SOUTH])
    away = np.asarray(place) - stations
    azimuth = np.arctan2(away[:, 0], away[:, 1]) + np.radians(off_deg)
    weight = np.full((1, len(stations)), kappa)
    given = (stations + corner)[None], azimuth[None]
    found = locate(*given, weight)
    axes = axes_of(np.linalg.inv(lenth_information(found.place, *given, weight)))[0]
    return np.column_stack([given[0][0], azimuth, weight[0]]), found.place[0], axes


def read(grid, values, place, axes, bearings, reading="bilinear"):
    circle = np.array([np.sqrt((axes[0] ** 2 + axes[1] ** 2) / 2)])
    at = place[:1], place[1:]
    cell, log_share = fix_entries(grid, *at, circle, reading, axes[None], None if bearings is None else {0: bearings})
    return (np.exp(log_share) * values.ravel()[cell]).sum(), np.exp(log_share).sum()


@pytest.mark.parametrize("reading", ["bilinear", "cell"])
@pytest.mark.parametrize("off_deg", [(0, 0, 0), (6, -5, 7)])
@pytest.mark.parametrize("narrow", [False, True])
def test_nodes_average_a_density_as_the_product_of_von_mises_densities(study, reading, off_deg, narrow):
    stations = np.array([(100.0, 300.0), (60.0, 900.0), (300.0, 60.0)]) if narrow else STATIONS
    bearings, place, axes = bearings_to((1400.0, 1300.0), stations, off_deg)
    grid = study.grid
    x, y = np.meshgrid(grid.x_m - WEST, grid.y_m - SOUTH)
    density = 2 + np.sin(x / 300) * np.cos(y / 400)
    at = np.arange(5.0, 2400.0, 10.0)
    east, north = (part.ravel() for part in np.meshgrid(at, at))
    product = np.ones(east.size)
    for station_x, station_y, azimuth, kappa in bearings:
        direction = np.arctan2(east + WEST - station_x, north + SOUTH - station_y)
        product *= stats.vonmises(kappa).pdf(azimuth - direction)
    product *= grid.habitable_at(east + WEST, north + SOUTH)
    exact = (product * (2 + np.sin(east / 300) * np.cos(north / 400))).sum() / product.sum()
    found, mass = read(grid, density, place, axes, bearings, reading)
    # Between centres the density is read along chords, h²/6 · f″/2 on the average: 1 % of its waves
    assert found / mass == pytest.approx(exact, rel=0.01)
    assert mass == pytest.approx(1, abs=0.02) or narrow


def test_a_small_error_is_read_as_its_ellipse(study):
    bearings, place, axes = bearings_to((1200.0, 1250.0), 30 * (STATIONS - 1200) + 1200, kappa=1 / np.radians(0.2) ** 2)
    x, y = np.meshgrid(study.grid.x_m - WEST, study.grid.y_m - SOUTH)
    density = 2 + np.sin(x / 300) * np.cos(y / 400)
    assert 50 < axes[1] < axes[0] < 200
    found, by_ellipse = (read(study.grid, density, place, axes, given)[0] for given in (bearings, None))
    assert found == pytest.approx(by_ellipse, rel=2e-3)
    # Much smaller than a cell nothing can be gained, and the ellipse is taken
    assert bearing_nodes(study.grid, place, np.array([40.0, 30.0, 0.0]), bearings, 5.0) is None
    assert bearing_nodes(study.grid, place, np.array([90.0, 3.0, 0.0]), bearings, 5.0) is None


def test_mass_beyond_the_edge_is_lost(study):
    bearings, place, axes = bearings_to((1200.0, 10.0))
    _, mass = read(study.grid, np.ones(study.grid.shape), place, axes, bearings)
    _, by_ellipse = read(study.grid, np.ones(study.grid.shape), place, axes, None)
    # The area is the grid, so that the product has no ground beyond it to be normalised over, unlike the ellipse
    assert by_ellipse < 0.8 < mass <= 1 + 1e-12


def test_regions_of_the_product_hold_95_percent_of_true_places():
    # Three bearings with sd 6° from a ring of 2 km: 600 sets, binomial standard error 0.009
    frame = Frame(-4000.0, -4000.0, 100.0, 80, 80)
    grid = build_grid(frame, pyproj.CRS("EPSG:32631"), np.ones((640, 640), dtype=bool))
    rng, sd = np.random.default_rng(85), np.radians(6.0)
    place = rng.uniform(-1000, 1000, (600, 2))
    turn = rng.uniform(0, 2 * np.pi, (600, 1)) + np.arange(3) * 2 * np.pi / 3 + rng.uniform(-0.3, 0.3, (600, 3))
    station = 2000 * np.stack([np.cos(turn), np.sin(turn)], axis=-1)
    away = place[:, None] - station
    azimuth = np.arctan2(away[..., 0], away[..., 1]) + sd * rng.normal(size=turn.shape)
    sets = Sets(station, azimuth, np.ones_like(azimuth, dtype=bool), np.zeros_like(azimuth, dtype=int))
    weight = sets.weights(np.array([sd]))
    found = locate(station, azimuth, weight)
    axes = np.full((600, 3), np.nan)
    ok = np.flatnonzero(found.converged)
    axes[ok] = axes_of(np.linalg.inv(lenth_information(found.place[ok], station[ok], azimuth[ok], weight[ok])))
    denser = []
    for k in ok:
        bearings = np.column_stack([station[k], azimuth[k], weight[k]])
        x, y, share = bearing_nodes(grid, found.place[k], axes[k], bearings, 5.0)
        height = log_density(np.column_stack([x, y]), bearings)
        denser.append(share[height > log_density(place[[k]], bearings)[0]].sum())
    assert len(ok) > 590
    assert 0.92 < (np.array(denser) < 0.95).mean() < 0.98
    assert stats.kstest(denser, "uniform").pvalue > 0.001


def test_range_model_reads_a_study_of_bearings_from_them(tmp_path):
    truth = fixes_table()
    truth = truth[truth["x"].between(WEST + 500, WEST + 1900) & truth["y"].between(SOUTH + 500, SOUTH + 1900)]
    rng = np.random.default_rng(3)
    rows = []
    for k, fix in enumerate(truth.itertuples()):
        for j, (x, y) in enumerate(STATIONS):
            azimuth = np.degrees(np.arctan2(fix.x - WEST - x, fix.y - SOUTH - y)) + 4 * rng.normal()
            time = pd.Timestamp(fix.time) + pd.Timedelta(seconds=20 * j)
            rows.append((fix.animal, time.isoformat(), WEST + x, SOUTH + y, round(azimuth % 360, 2), k, fix.group))
    columns = ["animal", "time", "station_x", "station_y", "bearing", "set", "group"]
    path = write_study(tmp_path, truth, model={"card": "localising", "layers": []})
    pd.DataFrame(rows, columns=columns).to_csv(tmp_path / "bearings.csv", index=False)
    text = path.read_text()
    path.write_text(text.replace("[fixes]\n", '[bearings]\nfile = "bearings.csv"\nnorth = "grid"\n\n[fixes]\n', 1))
    path.write_text("\n".join(line for line in path.read_text().splitlines() if not line.startswith('file = "fixes')))
    study, card = read_study(path), read_card(find_card("localising"))
    spec, scales = make_spec(study, card), make_scales(study, [])
    reading = make_data(study, card, spec, scales, np.ones(len(study.fixes))).reading
    table = study.fixes
    bearings = bearings_of(table, study.bearings)
    clear = ~table["flag"].str.contains("behind").to_numpy()
    assert sorted(bearings) == np.flatnonzero(clear).tolist() and len(bearings) > 0.9 * len(table) > 50
    drop = []
    for position, own in bearings.items():
        best = table[["x", "y"]].to_numpy()[[position]]
        near = best + np.array([[1.0, 0.0], [-1.0, 0.0], [0.0, 1.0], [0.0, -1.0]])
        assert (log_density(near, own) < log_density(best, own)).all()  # its place is the likeliest by its bearings
        row = table.iloc[position]
        turn, major = np.radians(row["error_bearing_deg"]), row["error_major_m"]
        step = major * np.array([[np.sin(turn), np.cos(turn)], [-np.sin(turn), -np.cos(turn)]])
        drop.append(log_density(best, own)[0] - log_density(best + step, own).mean())
    assert np.median(drop) == pytest.approx(0.5, abs=0.08)  # one sd of a normal law: half a nat below the top
    args = *(table[c].to_numpy(float) for c in ("x", "y", "error_m")), "bilinear"
    ellipse = table[["error_major_m", "error_minor_m", "error_bearing_deg"]].to_numpy(float)
    expected = fix_entries(study.grid, *args, ellipse, bearings)
    for part, wanted in zip((reading.cell, reading.log_share), expected, strict=True):
        np.testing.assert_array_equal(part[: len(table)], wanted)
