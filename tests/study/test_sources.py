"""The same fixes from CSV, Parquet, GeoPackage and CF trajectory NetCDF."""

import re
import shutil

import geopandas
import numpy as np
import pandas as pd
import pyproj
import pytest
import xarray as xr

from bayesrange.study import StudyError, read_study

PLACED = ["animal", "time", "x", "y", "group", "error_m"]


def typed(folder):
    table = folder.fixes.astype({"x": float, "y": float})
    return table.assign(time=pd.to_datetime(table["time"], utc=True))


def as_parquet(folder, name="fixes.parquet"):
    typed(folder).to_parquet(folder.path(name))


def as_geopackage(folder, name="fixes.gpkg", crs="EPSG:4326"):
    table = typed(folder)
    points = geopandas.points_from_xy(table.pop("x"), table.pop("y"))
    geopandas.GeoDataFrame(table, geometry=points, crs=folder.crs).to_crs(crs).to_file(folder.path(name), driver="GPKG")


def trajectories(folder, layout):
    """As CF Conventions, chapter 9 and H.4.3 (contiguous), H.4.4 (indexed) ask."""
    table = typed(folder)
    carry = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True).transform
    longitude, latitude = carry(table["x"].to_numpy(), table["y"].to_numpy())
    names, which = np.unique(table["animal"], return_inverse=True)
    if layout == "contiguous":
        order = np.argsort(which, kind="stable")
    else:
        order = np.random.default_rng(3).permutation(len(table))
    obs = {
        "time": ("obs", table["time"].dt.tz_localize(None).to_numpy()[order], {"standard_name": "time"}),
        "lon": ("obs", longitude[order], {"standard_name": "longitude", "units": "degrees_east"}),
        "lat": ("obs", latitude[order], {"standard_name": "latitude", "units": "degrees_north"}),
        "group": ("obs", table["group"].to_numpy(dtype=object)[order], {"coordinates": "time lat lon"}),
        "name": ("trajectory", names.astype(object), {"cf_role": "trajectory_id"}),
    }
    if layout == "contiguous":
        obs["rowSize"] = ("trajectory", np.bincount(which), {"sample_dimension": "obs"})
    else:
        obs["trajectory_index"] = ("obs", which[order], {"instance_dimension": "trajectory"})
    return xr.Dataset(obs, attrs={"featureType": "trajectory", "Conventions": "CF-1.11"})


def as_netcdf(folder, layout="contiguous", name="fixes.nc", engine="h5netcdf", **changes):
    trajectories(folder, layout).assign_attrs(changes).to_netcdf(folder.path(name), engine=engine)


def read_from(folder, file):
    folder.toml["fixes"]["file"] = file
    return folder.read()


@pytest.mark.parametrize("kind", ["parquet", "gpkg", "metric gpkg", "contiguous", "indexed", "netcdf 3"])
def test_every_kind_of_file_gives_the_fixes_of_the_csv(folder, kind):
    plain = folder.read().fixes
    match kind:
        case "parquet":
            as_parquet(folder)
        case "gpkg":
            as_geopackage(folder)
        case "metric gpkg":
            as_geopackage(folder, crs=folder.crs)
        case "netcdf 3":
            as_netcdf(folder, engine="scipy")
        case _:
            as_netcdf(folder, kind)
    ending = {"parquet": "parquet", "gpkg": "gpkg", "metric gpkg": "gpkg"}.get(kind, "nc")
    study = read_from(folder, f"fixes.{ending}")
    # 1e-6 m: degrees in double precision are good to 1e-9 m, and projecting there and back to far below a millimetre
    pd.testing.assert_frame_equal(study.fixes[PLACED], plain[PLACED], rtol=0, atol=1e-6)
    assert f"fixes.{ending}" in study.hashes and study.fixes["row"].min() == 1


def test_files_of_mixed_kinds_are_read_together(folder):
    plain = folder.read().fixes
    whole = folder.fixes
    folder.fixes = whole[whole["animal"] == "N1"]
    as_parquet(folder, "n.parquet")
    folder.fixes = whole[whole["animal"] == "S1"]
    as_geopackage(folder, "s.gpkg", folder.crs)
    folder.fixes = whole[whole["animal"] == "E1"]
    fixes = read_from(folder, ["fixes.csv", "n.parquet", "s.gpkg"]).fixes
    pd.testing.assert_frame_equal(fixes[PLACED], plain[PLACED])


def test_darwin_core_names_are_understood_in_parquet(folder):
    plain = folder.read().fixes
    table = typed(folder)
    carry = pyproj.Transformer.from_crs(folder.crs, "EPSG:4326", always_xy=True).transform
    table["decimalLongitude"], table["decimalLatitude"] = carry(table.pop("x").to_numpy(), table.pop("y").to_numpy())
    table = table.rename(columns={"animal": "organismID", "time": "eventDate"})
    table.assign(coordinateUncertaintyInMeters=24.477).to_parquet(folder.path("fixes.parquet"))
    fixes = read_from(folder, "fixes.parquet").fixes
    pd.testing.assert_frame_equal(fixes[PLACED[:5]], plain[PLACED[:5]], rtol=0, atol=1e-6)
    assert fixes["error_m"].tolist() == pytest.approx([10.0] * 180)


def test_a_missing_coordinate_is_a_failed_fix(folder):
    folder.fixes.loc[4, ["x", "y"]] = np.nan
    as_parquet(folder)
    assert read_from(folder, "fixes.parquet").counts["failed"] == 1


def broken(folder, name, match):
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        read_from(folder, name)
    assert str(caught.value).isprintable()


@pytest.mark.parametrize("name", ["fixes.parquet", "fixes.gpkg", "fixes.nc"])
def test_files_that_are_none_of_their_kind(folder, name):
    broken(folder, name, f"{name}: there is no such file beside the study file")
    folder.path(name).write_bytes(b"")
    broken(folder, name, f"{name}: the file is empty")
    folder.path(name).write_bytes(b"PAR1 no table at all \0 PAR1")
    broken(folder, name, f"{name}: this cannot be read as ")


def test_a_geopackage_of_something_else(folder):
    square = geopandas.GeoDataFrame({"animal": ["N1"]}, geometry=[folder.box(0, 0, 9, 9)], crs=folder.crs)
    square.to_file(folder.path("fixes.gpkg"), driver="GPKG")
    broken(folder, "fixes.gpkg", "fixes.gpkg: there are shapes of the kind Polygon in it; expected one point a fix")
    square.to_file(folder.path("fixes.gpkg"), driver="GPKG", layer="more")
    broken(folder, "fixes.gpkg", "fixes.gpkg: there are 2 tables in it")


def test_a_geopackage_that_contradicts_the_study_file(folder):
    as_geopackage(folder)
    folder.toml["fixes"]["crs"] = folder.crs
    broken(folder, "fixes.gpkg", "[fixes] crs: it is EPSG:32631, but fixes.gpkg says of itself EPSG:4326")


CF = {
    "feature": (lambda d: d.assign_attrs(featureType="profile"), 'the global attribute featureType = "trajectory"'),
    "no role": (lambda d: d.drop_vars("name"), 'one variable with cf_role = "trajectory_id", found 0'),
    "no longitude": (lambda d: d.drop_vars("lon"), 'one variable with standard_name = "longitude", found 0'),
    "no count": (lambda d: d.drop_vars("rowSize"), "nothing says which sample is of which trajectory"),
    "count": (lambda d: d.assign(rowSize=d["rowSize"] - 1), "rowSize counts 177 samples in 3 trajectories, but there"),
    "index": (
        lambda d: d.drop_vars("rowSize").assign(k=("obs", np.full(180, 7), {"instance_dimension": "trajectory"})),
        "k names trajectories that are not there; expected 0 to 2",
    ),
    "no time": (lambda d: d.assign(time=("obs", np.arange(180.0), d["time"].attrs)), "time is no time; expected units"),
}


@pytest.mark.parametrize("case", CF)
def test_netcdf_that_is_not_laid_out_as_cf_asks(folder, case):
    change, match = CF[case]
    change(trajectories(folder, "contiguous")).to_netcdf(folder.path("fixes.nc"), engine="h5netcdf")
    broken(folder, "fixes.nc", f"fixes.nc: {match}" if case in ("count", "index", "no time", "no count") else match)


def test_a_folder_holds_files_of_all_kinds(folder):
    plain = folder.read().fixes
    as_parquet(folder)
    folder.path("collars").mkdir()
    shutil.move(folder.path("fixes.parquet"), folder.path("collars/a.parquet"))
    pd.testing.assert_frame_equal(read_from(folder, "collars").fixes[PLACED], plain[PLACED])


def test_day_and_clock_in_two_columns(folder):
    plain = folder.read().fixes
    folder.fixes[["date", "clock"]] = folder.fixes.pop("time").str.split("T", expand=True).to_numpy()
    folder.toml["fixes"]["time"] = ["date", "clock"]
    pd.testing.assert_frame_equal(folder.read().fixes, plain)
    folder.fixes.loc[4, "clock"] = ""
    with pytest.raises(StudyError, match=r'line 6: the time "2031-03-01T" cannot be read'):
        read_study(folder.write())
