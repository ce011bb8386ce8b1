"""The simulator of the memory case study obeys exact laws, and the committed study carries the committed truth.

Only the last tests use bayesrange, as the reader of the study: the simulator has to be right by itself before the
package is measured against it.
"""

import dataclasses
import importlib.util
import json
import subprocess
import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from scipy import ndimage, special, stats

from bayesrange.study import read_study

CASE = Path(__file__).resolve().parents[2] / "case_studies" / "varrow_fell"
sys.path.insert(0, str(CASE))

import varrow_cats as cats  # noqa: E402
import varrow_place as place_module  # noqa: E402
import varrow_walk as walking  # noqa: E402

# Every case study has a simulate.py: this one gets a name of its own.
_spec = importlib.util.spec_from_file_location("varrow_simulate", CASE / "simulate.py")
simulate = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(simulate)
sys.path.remove(str(CASE))

FORGETFUL = cats.Cat(selection=0.0, reference_strength=0.0, working_strength=0.0)


@pytest.fixture(scope="module")
def fell():
    return place_module.varrow_fell()


def turns(tracks):
    steps = np.diff(tracks, axis=1)
    heading = np.arctan2(steps[..., 1], steps[..., 0])
    return (np.diff(heading, axis=1) + np.pi) % (2 * np.pi) - np.pi


def test_without_memory_and_layers_steps_are_gamma_and_turns_von_mises():
    # 300 walks of 10 steps from the middle of 8 km: the edge is 4 km off, Gamma(14, 90 m) reaches it once in 1e9.
    place = place_module.make_place(shapely.box(0, 0, 8000, 8000), layers=False)
    rng = np.random.default_rng(1)
    start = np.array([4000.0, 4000.0])
    tracks = np.array([walking.walk(place, FORGETFUL, start, 10, rng) for _ in range(300)])
    lengths = np.hypot(*np.diff(tracks, axis=1).reshape(-1, 2).T)
    # Laws of SciPy; a correct simulator fails 1 seed in 1,000 in each of the three
    assert stats.kstest(lengths, stats.gamma(1.4, scale=90.0).cdf).pvalue > 1e-3
    assert stats.kstest(turns(tracks).ravel(), stats.vonmises(0.35).cdf).pvalue > 1e-3
    first = np.diff(tracks[:, :2], axis=1)[:, 0]
    # no heading yet: the first step goes anywhere
    assert stats.kstest(np.arctan2(first[:, 1], first[:, 0]), stats.uniform(-np.pi, 2 * np.pi).cdf).pvalue > 1e-3


def sum_of_marks(track, decay_h, xy):
    """Hours remembered at places, hour by hour: exp(−age/τ) exp(−d²/2σ²), without the hour that starts now."""
    age = np.arange(len(track) - 1, 0, -1.0)
    d2 = ((xy[:, None] - track[None, :-1]) ** 2).sum(axis=2)
    return np.exp(-age / decay_h - d2 / (2 * 150.0**2)).sum(axis=1)


@pytest.fixture(scope="module")
def past(fell):
    """A walk of 400 h, and 2,000 places around it on land."""
    rng = np.random.default_rng(2)
    track = walking.walk(fell, cats.POPULATION, np.add((8500.0, 9300.0), place_module.ORIGIN_M), 400, rng)
    near = track[rng.integers(0, len(track), 2400)] + 150.0 * rng.standard_normal((2400, 2))
    return track, near[fell.habitable(near)][:2000]


def remembered(place, track, node_m=walking.NODE_M, cat=cats.POPULATION):
    weight = walking.Weight(place, cat, node_m)
    for xy in track[:-1]:
        weight.spend(xy, 1.0)
    return weight


def test_memory_is_the_sum_of_fading_marks(fell, past):
    track, xy = past
    weight = remembered(fell, track)
    for memory, decay_h in ((weight.reference, 700.0), (weight.working, 8.0)):
        exact = sum_of_marks(track, decay_h, xy)
        hours = np.exp(-np.arange(1.0, len(track)) / decay_h).sum()
        # bilinear error ≤ h²/8 (max|f_xx| + max|f_yy|) = h²/4σ² per hour of memory; cut marks add 1.5e-8
        assert np.abs(memory(xy) - exact).max() < walking.NODE_M**2 / (4 * 150.0**2) * hours
        # a series in closed form, and the bound that rejection relies on
        assert memory.most == pytest.approx(hours, rel=1e-12)
        assert exact.max() < memory.most


def test_a_walk_remembers_every_hour_but_the_one_that_starts_now(fell, monkeypatch):
    seen, draw = [], walking.end_point

    def watched(place, cat, weight, xy, heading, rng):
        if seen:
            at = np.array([xy for xy, _ in seen] + [xy])
            # 1e-3 of an hour per hour: the reading between the nodes
            close = {"rtol": 0.0, "atol": 1.2e-3 * len(at)}
            np.testing.assert_allclose(weight.working(at), sum_of_marks(at, cat.working_decay, at), **close)
            np.testing.assert_allclose(weight.reference(at), sum_of_marks(at, cat.reference_decay, at), **close)
        else:
            assert weight.reference.most == 0.0 and weight.working(xy[None]) == 0.0
        assert np.isnan(heading) == (len(seen) == 0)
        if seen:
            step = seen[-1][1] - seen[-1][0]
            assert np.exp(1j * heading) == pytest.approx(complex(*step) / np.hypot(*step))
        end, direction = draw(place, cat, weight, xy, heading, rng)
        seen.append((xy.copy(), end))
        return end, direction

    monkeypatch.setattr(walking, "end_point", watched)
    start = np.add((8500.0, 9300.0), place_module.ORIGIN_M)
    track = walking.walk(fell, cats.POPULATION, start, 30, np.random.default_rng(7))
    assert len(seen) == 30
    np.testing.assert_array_equal(track[1:], [end for _, end in seen])
    np.testing.assert_array_equal(track[:-1], [xy for xy, _ in seen])


def test_reading_between_the_nodes_is_of_second_order(fell, past):
    track, xy = past
    exact = sum_of_marks(track, 700.0, xy)
    error = [np.sqrt(np.mean((remembered(fell, track, h).reference(xy) - exact) ** 2)) for h in (40.0, 20.0, 10.0)]
    # random places, not nested nodes: the ratios scatter by some percent around 4
    assert np.allclose(np.log2(np.divide(error[:-1], error[1:])), 2.0, atol=0.15)


def weigh(place, track, xy):
    """Log ω of the median female by SciPy and plain sums; only cells with land have cover."""
    inside = (place.share > 0).astype(float)
    mean, sd = place.cover_mean_sd
    rows_columns = ((xy - (place.west_m, place.south_m)) / 50.0 - 0.5).T[::-1]
    land = ndimage.map_coordinates(inside, rows_columns, order=1)
    cover = ndimage.map_coordinates(inside * (place.cover - mean) / sd, rows_columns, order=1)
    cover = np.divide(cover, land, out=np.full(len(xy), np.nan), where=land > 0)
    reference, working = sum_of_marks(track, 700.0, xy), sum_of_marks(track, 8.0, xy)
    return 0.5 * cover + 2.5 * reference / (reference + 6.0) - 1.2 * working / (working + 6.0)


def test_weight_is_that_of_brute_force_sums(fell, past):
    track, xy = past
    error = np.abs(remembered(fell, track).log(xy) - weigh(fell, track, xy))
    # the grid's error as the README states it
    assert error.max() < 1.5e-3
    assert np.sqrt(np.mean(error**2)) < 2e-4


def test_bound_of_rejection_is_above_the_weight_of_any_place(fell, past):
    track, xy = past
    inside, (mean, sd) = fell.share > 0, fell.cover_mean_sd
    best, worst = ((edge(fell.cover[inside]) - mean) / sd for edge in (np.max, np.min))
    hours = {decay_h: np.exp(-np.arange(1.0, len(track)) / decay_h).sum() for decay_h in (700.0, 8.0)}
    recalled, put_off = (hours[decay_h] / (hours[decay_h] + 6.0) for decay_h in (700.0, 8.0))
    # whoever spent all its past in one place of the best cover; then one who likes the open and where it has just been
    bound = remembered(fell, track).log_bound()
    assert bound >= 0.5 * best + 2.5 * recalled - 1e-12
    assert bound > weigh(fell, track, xy).max()
    contrary = dataclasses.replace(cats.POPULATION, selection=-0.5, reference_strength=-2.0, working_strength=-1.2)
    assert remembered(fell, track, cat=contrary).log_bound() >= -0.5 * worst + 1.2 * put_off - 1e-12


def test_an_end_point_follows_the_law_of_its_step(fell, past):
    # One state: 20 h on a circle by the lake, of which part lies ahead. Rings × sectors of 6,000 ends against
    # sums of k ω over 400 quantiles of the length × 720 directions, ω by brute force and 0 in the lake.
    ashore = np.add((8600.0, 8520.0), place_module.ORIGIN_M)
    angle = np.linspace(0.0, 2 * np.pi, 20)[:, None]
    track = np.vstack([ashore + 200.0 * np.column_stack([np.cos(angle) - 1.0, np.sin(angle)]), ashore])
    heading, rng = -0.5, np.random.default_rng(3)
    weight = remembered(fell, track)
    ends = np.array([walking.end_point(fell, cats.POPULATION, weight, ashore, heading, rng)[0] for _ in range(6000)])
    assert fell.habitable(ends).all()

    length = stats.gamma(1.4, scale=90.0).ppf((np.arange(400) + 0.5) / 400)
    turn = (np.arange(720) + 0.5) / 720 * 2 * np.pi - np.pi
    length, turn = (grid.ravel() for grid in np.meshgrid(length, turn, indexing="ij"))
    nodes = ashore + length[:, None] * np.column_stack([np.cos(heading + turn), np.sin(heading + turn)])
    dry = fell.habitable(nodes)
    assert 0.1 < 1.0 - dry.mean() < 0.5  # the lake matters here
    share = np.where(dry, np.exp(0.35 * np.cos(turn) + np.nan_to_num(weigh(fell, track, nodes))), 0.0)

    def cell(length, turn):
        ring = np.searchsorted([60.0, 110.0, 180.0], length)
        sector = np.floor((turn + np.pi) / (2 * np.pi) * 8).astype(int) % 8
        return 8 * ring + sector

    expected = np.bincount(cell(length, turn), share, 32)
    away = ends - ashore
    found_turn = (np.arctan2(away[:, 1], away[:, 0]) - heading + np.pi) % (2 * np.pi) - np.pi
    found = np.bincount(cell(np.hypot(*away.T), found_turn), minlength=32)
    expected *= len(ends) / expected.sum()
    used = expected > 5
    assert used.sum() >= 22 and found[~used].sum() < 20  # the others lie in the lake
    statistic = ((found - expected)[used] ** 2 / expected[used]).sum()
    # Pearson's χ²; a correct simulator fails 1 seed in 1,000
    assert stats.chi2.sf(statistic, used.sum() - 1) > 1e-3


def test_released_animals_settle_and_forgetful_ones_roam():
    # Mean square displacement of a correlated walk without memory grows by E r² + 2 (E r)² c/(1 − c) a step in the long
    # run, c = I₁(κ)/I₀(κ) (Kareiva & Shigesada 1983, from memory): 0.0085 km² for steps half as long as the cats'. In
    # 300 steps that is 1.1 km along each axis, and the edge is 4.5 km off. With memory it levels off.
    place = place_module.make_place(shapely.box(0, 0, 9000, 9000), layers=False)
    middle, rng = np.array([4500.0, 4500.0]), np.random.default_rng(4)
    slow = dataclasses.replace(FORGETFUL, step_scale=45.0)
    c = special.i1(0.35) / special.i0(0.35)
    a_step = 1.4 * 2.4 * 45.0**2 + 2 * (1.4 * 45.0) ** 2 * c / (1 - c)
    roaming = np.array([walking.walk(place, slow, middle, 300, rng)[-1] for _ in range(40)]) - middle
    # 80 squares of normal coordinates: their mean is within 4 √(2/80) of 1; the first steps matter by less
    assert abs((roaming**2).sum(axis=1).mean() / (300 * a_step) - 1) < 4 * np.sqrt(2 / 80)
    keen = dataclasses.replace(cats.POPULATION, step_scale=45.0, reference_strength=4.0)
    held = np.array([walking.walk(place, keen, middle, 300, rng)[-1] for _ in range(20)]) - middle
    assert (held**2).sum(axis=1).mean() < 0.3 * 300 * a_step


def test_cats_are_drawn_around_the_population_on_the_stated_scale():
    def release(sex):
        return tuple(dataclasses.replace(cats.RELEASES[0], sex=sex) for _ in range(4000))

    rng = np.random.default_rng(5)
    drawn = {sex: pd.DataFrame(map(vars, cats.draw_cats(rng, release(sex)))) for sex in ("female", "male")}
    for sex, table in drawn.items():
        working, reference = table.working_decay - 0.5, table.reference_decay - table.working_decay
        males_log = np.log(1.3) if sex == "male" else 0.0
        expected = {  # mean, sd
            "excess of working": (np.log(working), np.log(7.5), 0.2),
            "excess of reference": (np.log(reference), np.log(692.0), 0.2),
            "step_shape": (np.log(table.step_shape), np.log(1.4), 0.08),
            "step_scale": (np.log(table.step_scale), np.log(90.0) + males_log, 0.1),
            "turn_concentration": (np.log(table.turn_concentration), np.log(0.35), 0.2),
            "selection": (table.selection, 0.5, 0.15),
            "reference_strength": (table.reference_strength, 2.5, 0.5),
            "working_strength": (table.working_strength, 1.2, 0.3),
        }
        for name, (values, mean, sd) in expected.items():
            # 16 checks of a mean and an sd: 4.5 standard errors
            assert abs(values.mean() - mean) < 4.5 * sd / np.sqrt(4000), name
            assert abs(values.std() / sd - 1) < 4.5 / np.sqrt(2 * 4000), name
        assert (table.recall_half == 6.0).all()


def test_rounding_leaves_no_fix_in_the_lake(fell):
    rng = np.random.default_rng(6)
    shore = shapely.box(*(np.array([8250.0, 7900.0, 9900.0, 9250.0]) + np.tile(place_module.ORIGIN_M, 2)))
    west, south, east, north = shore.bounds
    xy = rng.uniform((west, south), (east, north), (200_000, 2))
    xy = xy[fell.habitable(xy)]
    assert not fell.habitable(np.round(xy)).all()  # plain rounding would
    rounded = simulate.to_whole_metres(fell, xy)
    assert fell.habitable(rounded).all() and (rounded == np.round(rounded)).all()
    moved = np.abs(rounded - xy).max(axis=1)
    # half a metre, or up to one where the nearest metre is wet
    assert moved.max() < 1.0 and (moved <= 0.5).mean() > 0.99


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """The folder that the command writes with the committed seed, without the package."""
    out = tmp_path_factory.mktemp("varrow")
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); import simulate; assert simulate.main(sys.argv[2:]) == 0; "
        "assert not {'bayesrange', 'jax', 'numpyro'} & set(sys.modules), 'the simulator must stand alone'"
    )
    subprocess.run([sys.executable, "-c", code, str(CASE), "--out", str(out)], cwd=out, check=True)
    return out


def test_command_writes_the_committed_study_anew(written):
    names = ["animals.csv", "area.geojson", "cover.tif", "fixes.csv", "lake.tif", "study.toml", "voles.tif"]
    assert sorted(file.name for file in (written / "study").iterdir()) == names
    # Text bit for bit. NumPy keeps its streams between most releases; if one changes them, simulate anew.
    for name in ("fixes.csv", "animals.csv", "study.toml"):
        assert (written / "study" / name).read_bytes() == (CASE / "study" / name).read_bytes(), name
    # Of files that libraries encode, what they hold: whole numbers, and nine decimals of a degree (0.1 mm)
    for name in ("cover.tif", "voles.tif", "lake.tif"):
        with rasterio.open(written / "study" / name) as new, rasterio.open(CASE / "study" / name) as old:
            assert new.profile == old.profile
            # rounding in the filter may tip a pixel by one on another processor
            assert np.abs(new.read(1).astype(int) - old.read(1)).max() <= (0 if name == "lake.tif" else 1)
    new, old = (gpd.read_file(folder / "study" / "area.geojson").geometry.item() for folder in (written, CASE))
    assert new.equals_exact(old, 2e-9)


def test_same_seed_same_files_and_another_seed_others(tmp_path):
    few = tuple(dataclasses.replace(release, fixes=40) for release in cats.RELEASES[2:4])
    for folder, seed in (("a", 8), ("b", 8), ("c", 9)):
        simulate.simulate(tmp_path / folder, seed, few)

    def content(folder):
        return {f.relative_to(tmp_path / folder): f.read_bytes() for f in (tmp_path / folder).rglob("*.*")}

    assert content("a") == content("b")
    different = {str(name) for name in content("a") if content("a")[name] != content("c")[name]}
    assert different == {"study/fixes.csv", "truth.json"}


def test_command_replaces_nothing_unasked(written):
    before = (written / "study" / "fixes.csv").read_bytes()
    again = [sys.executable, str(CASE / "simulate.py"), "--out", str(written), "--seed", "7"]
    refused = subprocess.run(again, capture_output=True, text=True, check=False)
    assert refused.returncode == 2 and "--replace" in refused.stderr
    assert (written / "study" / "fixes.csv").read_bytes() == before


# The committed study


@pytest.fixture(scope="module")
def truth():
    return json.loads((CASE / "truth.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def fixes():
    return pd.read_csv(CASE / "study" / "fixes.csv")


@pytest.fixture(scope="module")
def animals():
    return pd.read_csv(CASE / "study" / "animals.csv")


def test_committed_parameters_are_the_simulators(truth):
    names = {"selection[cover]": "selection"}
    for name, entry in truth["parameters"].items():
        if name not in ("selection[voles]", "encoding_range", "selection[cover] raw"):
            assert entry["value"] == getattr(cats.POPULATION, names.get(name, name)), name
    assert truth["parameters"]["selection[voles]"]["value"] == 0.0
    assert truth["parameters"]["encoding_range"]["value"] == cats.ENCODING_RANGE_M
    spreads = {names.get(name, name): value for name, value in truth["spreads"].items() if value}
    assert spreads == cats.SPREAD
    males = {name.removesuffix(":sex=male"): value for name, value in truth["covariates"].items() if value}
    assert males == pytest.approx(cats.MALE, rel=1e-15)
    assert truth["seed"] == simulate.SEED and truth["command"].endswith(f"--seed {simulate.SEED}")


def test_committed_animals_are_those_of_the_truth(truth, animals):
    assert list(truth["animals"]) == list(animals.animal)
    assert [own["sex"] for own in truth["animals"].values()] == list(animals.sex)
    assert animals.sex.value_counts().to_dict() == {"female": 4, "male": 4}
    assert animals.release_batch.value_counts().to_dict() == {"spring-1": 4, "spring-2": 4}
    assert (animals.memory_start == "naive").all()
    for own in truth["animals"].values():
        assert 0.5 < own["working_decay"] < own["reference_decay"]
        # five sd of the draw
        assert abs(own["reference_strength"] - 2.5) < 2.5 and own["encoding_range"] == 150.0


def test_committed_fixes_are_hourly_in_whole_metres_with_their_share_missing(fixes, animals, truth):
    assert list(fixes.columns) == ["animal", "time", "x", "y"]
    failed = fixes.x.isna()
    assert truth["counts"] == {"animals": 8, "fixes": 11_784, "failed": int(failed.sum())}
    assert len(fixes) == 11_784 and (failed == fixes.y.isna()).all()
    # binomial; 4 standard errors
    assert abs(failed.sum() - 0.03 * len(fixes)) < 4 * np.sqrt(0.03 * 0.97 * len(fixes))
    seen = fixes[~failed]
    assert (seen.x % 1 == 0).all() and (seen.y % 1 == 0).all()
    for row in animals.itertuples():
        times = pd.to_datetime(fixes.time[fixes.animal == row.animal])
        assert (times.diff().dropna() == pd.Timedelta(hours=1)).all()
        assert times.iloc[0] == pd.Timestamp(row[2])  # column `from`
        assert times.iloc[-1] < pd.Timestamp(row.until)


def test_committed_fixes_avoid_the_lake_and_keep_off_the_edge(fixes):
    seen = fixes.dropna()
    with rasterio.open(CASE / "study" / "lake.tif") as raster:
        water = np.array([value[0] for value in raster.sample(zip(seen.x, seen.y, strict=True))])
        assert raster.read(1).sum() * 12.5**2 > 5e5  # there is a lake: over 50 ha
    assert not water.any()
    area = gpd.read_file(CASE / "study" / "area.geojson").to_crs("EPSG:32629").geometry.item()
    places = shapely.points(seen.x, seen.y)
    assert shapely.contains(area, places).all()
    # no animal is held by the edge: the longest of 12,000 gamma steps is about 1.3 km
    assert shapely.distance(area.boundary, places).min() > 2000


def test_committed_scales_follow_from_the_files(truth):
    """Mean and sd over the dry land by rasterio's windows and masks."""
    area = gpd.read_file(CASE / "study" / "area.geojson").to_crs("EPSG:32629").geometry.item()
    west, south, east, north = (round(edge / 50) for edge in (np.array(area.bounds) + (-25, -25, 25, 25)))
    bounds = 50.0 * np.array([west, south, east, north])
    ny, nx = north - south, east - west
    fine = rasterio.transform.from_bounds(*bounds, 8 * nx, 8 * ny)
    land = rasterio.features.geometry_mask([area], (8 * ny, 8 * nx), fine, invert=True)
    with rasterio.open(CASE / "study" / "lake.tif") as raster:
        window = rasterio.windows.from_bounds(*bounds, raster.transform)
        wet = raster.read(1, window=window, boundless=True, fill_value=0) > 0
    land &= ~wet.repeat(2, axis=0).repeat(2, axis=1)
    share = land.reshape(ny, 8, nx, 8).mean(axis=(1, 3))
    with rasterio.open(CASE / "study" / "cover.tif") as raster:
        pixels = raster.read(1, window=rasterio.windows.from_bounds(*bounds, raster.transform)).astype(float)
    cover = pixels.reshape(ny, 2, nx, 2).mean(axis=(1, 3))
    mean = (share * cover).sum() / share.sum()
    sd = np.sqrt((share * (cover - mean) ** 2).sum() / share.sum())
    found = truth["scales"]["layers"]["cover"]
    # the outline in nine decimals of a degree may move a sub-cell of 39 m² among 228 km²
    np.testing.assert_allclose([found["mean"], found["sd"]], [mean, sd], rtol=1e-6)
    np.testing.assert_allclose(truth["scales"]["habitable_km2"], share.sum() * 0.0025, rtol=1e-6)
    raw = truth["parameters"]["selection[cover] raw"]["value"] * found["sd"]
    np.testing.assert_allclose(raw, truth["parameters"]["selection[cover]"]["value"], rtol=1e-12)


def test_committed_study_is_read_by_the_package(truth, fixes):
    study = read_study(CASE / "study")
    assert len(study.fixes) == int(fixes.x.notna().sum())
    assert set(study.fixes.animal) == set(truth["animals"])
    assert study.counts["outside_within_error"] == 0
    assert study.model_layers == ("cover",)
    found = truth["scales"]["layers"]["cover"]
    weight, values = study.grid.habitable[study.grid.inside], study.layers["cover"].values[study.grid.inside]
    mean = np.average(values, weights=weight)
    # some 60 of 5.8 million sub-cells have their centre on the outline, which the reader bends by the projection
    np.testing.assert_allclose(mean, found["mean"], rtol=1e-5)
    np.testing.assert_allclose(np.sqrt(np.average((values - mean) ** 2, weights=weight)), found["sd"], rtol=1e-5)
    np.testing.assert_allclose(study.grid.habitable_km2, truth["scales"]["habitable_km2"], rtol=1e-5)
