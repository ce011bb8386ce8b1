"""The simulator behind the demo obeys closed forms, and the committed study carries the committed truth.

Nothing here uses bayesrange: the simulator has to be right by itself before the package is measured against it.
"""

import dataclasses
import json
import subprocess
import sys
import tomllib
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from scipy import ndimage, stats

CASE = Path(__file__).resolve().parents[2] / "case_studies" / "marram_heath"
sys.path.insert(0, str(CASE))

import marram_particles as particles  # noqa: E402
import marram_place as place_module  # noqa: E402
import simulate  # noqa: E402


def wide_place():
    """One group in the middle of 8 × 8 km, no layer: the edge is felt by 1e-6 of the mass."""
    area = shapely.box(0, 0, 8000, 8000)
    return place_module.make_place(area, ("Lone",), [[4000.0, 4000.0]], [3], earthworms=False)


@pytest.fixture(scope="module")
def lone_radii():
    """Distances to the sett [km] of 3,000 independent particles after 0.9 km² of diffusion × time, from 0.3 km off."""
    truth = particles.Truth(localising=4.5, softening_km=0.005)
    rng = np.random.default_rng(1)
    found = particles.stationary_density(wide_place(), truth, rng, particles=3000, blocks=2, steps=4500, step=1e-4)
    return 4.5 * np.hypot(*(found.xy[0] - 4.0).T)


def test_lone_group_follows_the_holgate_okubo_law(lone_radii):
    # r ~ Gamma(2, β): Holgate 1971, Okubo 1980 (citation from memory; formula checked by quadrature). Particles of a
    # single group don't interact, so the last positions are independent. A correct simulator fails 1 seed in 1,000.
    assert stats.kstest(lone_radii, stats.gamma(2).cdf).pvalue > 1e-3
    # E βr = 2, sd βr = √2; 4 standard errors
    assert abs(lone_radii.mean() - 2.0) < 4 * np.sqrt(2.0 / len(lone_radii))


@pytest.mark.parametrize(("percent", "radius"), [(50, 1.678347), (90, 3.889720), (95, 4.743865)])
def test_lone_group_isopleths(lone_radii, percent, radius):
    # β r_p = χ²(4; p)/2, the chi-square table with 4 degrees of freedom; 4 binomial standard errors
    share = percent / 100
    assert abs((lone_radii < radius).mean() - share) < 4 * np.sqrt(share * (1 - share) / len(lone_radii))


def test_without_drift_particles_fill_the_area_evenly_to_its_edge():
    # No-flux edge: the steady state of pure diffusion is uniform. An L, so that there is a corner to go round.
    area = shapely.box(0, 0, 1000, 1000) - shapely.box(500, 500, 1000, 1000)
    place = place_module.make_place(area, ("Lone",), [[300.0, 300.0]], [3], earthworms=False)
    still = particles.Truth(localising=0.0, avoidance=0.0, resource=0.0)
    # The slowest mode of this L decays at 5.9/km² (4 × 1.4756, from memory): 0.3 % is left after 1 km², noise is 10 %
    rng = np.random.default_rng(2)
    found = particles.stationary_density(place, still, rng, particles=7500, blocks=2, steps=1250, step=4e-4)
    assert shapely.contains_xy(area, 1000 * found.xy[0]).all()
    counts = particles.Walker(place, still).counts(found.xy[0], np.zeros(7500, int))[0]
    assert counts.shape == (10, 10) and counts[5:, 5:].sum() == 0
    assert stats.chisquare(counts[place.share > 0]).pvalue > 1e-3


def test_particles_climb_a_plane_to_truncated_exponentials():
    # u ∝ exp(γ h) between four walls; h rises with x and falls half as fast with y, so both margins are closed forms.
    place = place_module.make_place(shapely.box(0, 0, 1000, 1000), ("Lone",), [[500.0, 500.0]], [3], earthworms=False)
    plane = np.arange(12.0) - 0.5 * np.arange(12.0)[:, None]
    place = dataclasses.replace(place, layer=plane)
    drawn = particles.Truth(localising=0.0, avoidance=0.0, resource=0.8)
    rng = np.random.default_rng(8)
    found = particles.stationary_density(place, drawn, rng, particles=3000, blocks=2, steps=5000, step=1e-4)
    rate = 0.8 / (0.1 * plane[1:-1, 1:-1].std())  # 2.5 per km: a 14 m step at the wall blurs it by less than KS sees
    from_east, from_south = 1.0 - found.xy[0, :, 0], found.xy[0, :, 1]
    for distance, steepness in ((from_east, rate), (from_south, rate / 2)):
        law = stats.truncexpon(steepness, scale=1 / steepness)
        assert stats.kstest(distance, law.cdf).pvalue > 1e-3


def test_inside_is_the_polygon_on_every_cell_of_the_mask():
    place = place_module.marram_heath()
    ny, nx = place.share.shape
    xy = np.random.default_rng(9).uniform((-0.3, -0.3), (0.1 * nx + 0.3, 0.1 * ny + 0.3), (20_000, 2))
    column, row = np.floor(xy / 0.1).astype(int).T
    on_cells = (column >= 0) & (column < nx) & (row >= 0) & (row < ny)
    in_mask = np.zeros(len(xy), bool)
    in_mask[on_cells] = place.share[row[on_cells], column[on_cells]] > 0
    expected = in_mask & shapely.contains_xy(place.area, 1000 * xy + (place.west_m, place.south_m))
    assert np.array_equal(particles.Walker(place, particles.Truth()).inside(xy), expected)


def test_potential_smooths_the_neighbours_scent_and_leaves_out_ones_own(found, truth, groups, layer_by_cell):
    place, settings = place_module.marram_heath(), particles.Truth()
    mass = found["density"] * found["share"] * 0.01
    potential = particles.Walker(place, settings).potential(mass)[:, 1:-1, 1:-1]
    scent = perceived_scent(truth, groups, found)
    layer = truth["scales"]["layers"]["earthworms"]
    h = (layer_by_cell - layer["mean"]) / layer["sd"]
    expected = 0.3 * (scent.sum(axis=0) - scent) - 0.5 * h
    # single precision of the committed density, of values near 1
    np.testing.assert_allclose(potential[:, found["mask"]], expected[:, found["mask"]], atol=1e-5)


def test_heath_particles_stay_inside_and_keep_their_mass():
    place, truth = place_module.marram_heath(), particles.Truth()
    found = particles.stationary_density(place, truth, np.random.default_rng(3), particles=300, blocks=20)
    xy_m = 1000 * found.xy.reshape(-1, 2) + (place.west_m, place.south_m)
    assert shapely.contains_xy(place.area, xy_m).all()
    cell_km2 = 0.01 * place.share
    np.testing.assert_allclose((found.density * cell_km2).sum(axis=(1, 2)), 1.0, rtol=1e-12)  # a few hundred additions
    assert (found.points.sum(axis=(1, 2)) == 300 * 10).all()  # last half of the blocks


def test_same_seed_same_tracks_and_another_seed_others(monkeypatch):
    monkeypatch.setattr(simulate, "FIXES", 5)
    place, truth = place_module.marram_heath(), particles.Truth()

    def fixes(seed):
        rng = np.random.default_rng(seed)
        return simulate.track_fixes(place, truth, particles.stationary_density(place, truth, rng, 50, 4), rng)

    first = fixes(4)
    pd.testing.assert_frame_equal(first, fixes(4))
    assert not first.equals(fixes(5))


def test_command_writes_a_study_without_the_package_and_replaces_nothing_unasked(tmp_path):
    code = (
        "import sys, simulate; assert simulate.main(sys.argv[1:]) == 0; "
        "assert not {'bayesrange', 'jax', 'numpyro'} & set(sys.modules), 'the simulator must stand alone'"
    )
    tiny = ["--out", str(tmp_path), "--seed", "6", "--particles", "50", "--blocks", "3"]
    subprocess.run([sys.executable, "-c", code, *tiny], cwd=CASE, check=True)
    names = {file.name for file in (tmp_path / "study").iterdir()}
    assert names == {"study.toml", "fixes.csv", "groups.csv", "earthworms.tif", "area.geojson"}
    before = (tmp_path / "study" / "fixes.csv").read_bytes()
    again = [sys.executable, str(CASE / "simulate.py"), *tiny[:2], "--seed", "7"]
    refused = subprocess.run(again, capture_output=True, text=True, check=False)
    assert refused.returncode == 2 and "--replace" in refused.stderr
    assert (tmp_path / "study" / "fixes.csv").read_bytes() == before


# The committed study


@pytest.fixture(scope="module")
def truth():
    return json.loads((CASE / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def study():
    return tomllib.loads((CASE / "study" / "study.toml").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def fixes():
    return pd.read_csv(CASE / "study" / "fixes.csv")


@pytest.fixture(scope="module")
def groups():
    return pd.read_csv(CASE / "study" / "groups.csv")


@pytest.fixture(scope="module")
def area():
    return gpd.read_file(CASE / "study" / "area.geojson").to_crs("EPSG:32631").geometry.item()


@pytest.fixture(scope="module")
def found():
    with np.load(CASE / "particles.npz") as file:
        return dict(file)


@pytest.fixture(scope="module")
def layer_by_cell(found):
    """Raw layer averaged onto the cells, by rasterio's own windows; row 0 is the south."""
    half = 50.0
    west, east = found["x_m"][0] - half, found["x_m"][-1] + half
    south, north = found["y_m"][0] - half, found["y_m"][-1] + half
    with rasterio.open(CASE / "study" / "earthworms.tif") as raster:
        assert raster.crs.to_epsg() == 32631 and raster.res == (50.0, 50.0)
        assert raster.bounds.left < west and raster.bounds.right > east
        assert raster.bounds.bottom < south and raster.bounds.top > north
        values = raster.read(1, window=rasterio.windows.from_bounds(west, south, east, north, raster.transform))
    assert values.min() >= 50 and values.max() <= 900
    ny, nx = found["mask"].shape
    return values.reshape(ny, 2, nx, 2).mean(axis=(1, 3))[::-1]


def test_committed_parameters_are_the_simulators(truth):
    settings = particles.Truth()
    values = {name: entry["value"] for name, entry in truth["parameters"].items()}
    assert values["localising"] == settings.localising
    assert values["avoidance"] == settings.avoidance
    assert values["resource[earthworms]"] == settings.resource
    assert truth["seed"] == simulate.SEED and f"--seed {simulate.SEED} " in truth["command"]


def test_committed_fixes_have_the_stated_columns_and_counts(fixes, groups, truth):
    assert list(fixes.columns) == ["animal", "time", "x", "y", "group", "error_m"]
    assert truth["counts"] == {"animals": 10, "fixes": 1500, "failed": int(fixes.x.isna().sum())}
    assert (fixes.x.isna() == fixes.y.isna()).all()
    # failed fixes are binomial(1500, 0.03); 4 standard errors
    assert abs(fixes.x.isna().sum() - 45) < 4 * np.sqrt(1500 * 0.03 * 0.97)
    assert (fixes.groupby("animal").size() == 150).all()
    assert (fixes.groupby("group").animal.nunique() == 2).all()
    assert set(fixes.group) == set(groups.group)
    assert (fixes.error_m == truth["tracks"]["error_m"]).all()
    assert fixes.time.str.endswith("+01:00").all()
    for _, track in fixes.groupby("animal"):
        assert (pd.to_datetime(track.time).diff().dropna() == pd.Timedelta(hours=4)).all()


def test_committed_fixes_and_setts_lie_on_the_heath(fixes, groups, area):
    seen = fixes.dropna()
    assert shapely.contains_xy(area, seen.x, seen.y).all()
    assert shapely.contains_xy(area, groups.x, groups.y).all()


def test_committed_scales_follow_from_the_files(truth, study, groups, area, found, layer_by_cell):
    scales = truth["scales"]
    # GeoJSON holds nine decimals of a degree, 0.1 mm: area to 1e-6
    np.testing.assert_allclose(scales["a0_km2"], area.area / 1e6 / groups.animals.sum(), rtol=1e-6)
    inside = layer_by_cell[found["mask"]]
    # float32 cell means of whole numbers
    np.testing.assert_allclose(scales["layers"]["earthworms"]["mean"], inside.mean(dtype=float), rtol=1e-6)
    np.testing.assert_allclose(scales["layers"]["earthworms"]["sd"], inside.std(dtype=float), rtol=1e-6)
    assert study["model"]["perception_m"] == scales["perception_m"]
    assert study["study"]["cell_m"] == 2 * scales["eps_m"]  # ε is half a cell
    raw = truth["parameters"]["resource[earthworms] raw"]["value"] * scales["layers"]["earthworms"]["sd"]
    np.testing.assert_allclose(raw, truth["parameters"]["resource[earthworms]"]["value"], rtol=1e-12)


def test_committed_place_is_what_the_simulator_makes():
    place = place_module.marram_heath()
    with rasterio.open(CASE / "study" / "earthworms.tif") as raster:
        # whole kg/ha: rounding in the filter may tip a pixel by one
        np.testing.assert_allclose(raster.read(1)[::-1], place.pixels, atol=1.0)


def perceived_scent(truth, groups, found):
    """K ∗ q / K ∗ 1 of each group from the particles' density, by SciPy's Gaussian filter; 0 outside."""
    share, sigma = found["share"].astype(float), truth["scales"]["perception_m"] / 100

    def smooth(field):
        return ndimage.gaussian_filter(field, sigma, mode="constant", truncate=12.0)

    adults, a0_km2 = groups.animals.to_numpy(float), truth["scales"]["a0_km2"]
    scent = np.array([n * a0_km2 * smooth(u * share) for n, u in zip(adults, found["density"], strict=True)])
    return scent / np.where(found["mask"], smooth(share), np.inf)


def gibbs_law_of_found_scent(truth, groups, found, layer_by_cell, avoidance):
    """exp(−βρ + γh − αF̃)/Z per cell, with F̃ of the particles' own density."""
    values, scales = truth["parameters"], truth["scales"]
    x_km, y_km = np.meshgrid(found["x_m"] / 1000, found["y_m"] / 1000)
    share, eps_km = found["share"].astype(float), scales["eps_m"] / 1000
    scent = perceived_scent(truth, groups, found)
    layer = scales["layers"]["earthworms"]
    h = (layer_by_cell - layer["mean"]) / layer["sd"]
    law = []
    for home, own in zip(groups.itertuples(), scent, strict=True):
        rho = np.sqrt((x_km - home.x / 1000) ** 2 + (y_km - home.y / 1000) ** 2 + eps_km**2)
        foreign = scent.sum(axis=0) - own
        pull, gain = values["localising"]["value"], values["resource[earthworms]"]["value"]
        mass = share * np.exp(-pull * rho + gain * h - avoidance * foreign)
        law.append(mass / mass.sum())
    return np.array(law)


def test_committed_density_is_the_gibbs_law_of_its_own_scent(truth, groups, found, layer_by_cell):
    # No flux and a gradient drift: u = exp(potential)/Z exactly. What is left is Monte Carlo noise and the cell size.
    # A Bhattacharyya loss of (cells − 1)/8N is expected: 2,000 cells and about 4e5 effective points give 6e-4.
    mass = found["points"] / found["points"].sum(axis=(1, 2), keepdims=True)
    assert (found["points"].sum(axis=(1, 2)) > 50 * (found["points"] > 0).sum(axis=(1, 2))).all()

    def affinity(avoidance):
        law = gibbs_law_of_found_scent(truth, groups, found, layer_by_cell, avoidance)
        return np.sqrt(law * mass).sum(axis=(1, 2))

    right = affinity(truth["parameters"]["avoidance"]["value"])
    assert (right > 0.9985).all()
    # and the check can tell: without avoidance, or with half of it, every group fits worse
    assert (affinity(0.15) < right).all() and (affinity(0.0) < 0.9985).all()


def test_committed_mass_near_the_edge_is_small(found, area):
    x, y = np.meshgrid(found["x_m"], found["y_m"])
    near = found["mask"] & (shapely.distance(area.boundary, shapely.points(x, y)) < 200)
    mass = found["density"] * found["share"] * 0.01
    np.testing.assert_allclose(mass.sum(axis=(1, 2)), 1.0, rtol=1e-5)  # single precision
    assert (mass[:, near].sum(axis=1) < 0.01).all()


def test_committed_fixes_are_as_far_from_their_setts_as_the_particles(fixes, groups, found):
    x, y = np.meshgrid(found["x_m"], found["y_m"])
    # 150 fixes at 4 h, crossing time 10 h: 1 + 149 tanh(4/20) = 30 effective fixes an animal (checks e2), two animals
    effective = 2 * (1 + 149 * np.tanh(4 / 20))
    z = []
    for home, density in zip(groups.itertuples(), found["density"], strict=True):
        weight = density * found["share"] * 0.01
        r = np.hypot(x - home.x, y - home.y)
        mean, square = (weight * r).sum(), (weight * r**2).sum()
        own = fixes[fixes.group == home.group].dropna()
        seen = np.hypot(own.x - home.x, own.y - home.y).mean()
        z.append((seen - mean) / np.sqrt((square - mean**2) / effective))
    # five independent groups: the sum of squares is χ² with 5 degrees of freedom
    assert stats.chi2.sf(np.sum(np.square(z)), 5) > 1e-3
