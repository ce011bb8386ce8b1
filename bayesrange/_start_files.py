"""A new study: a commented study file and empty tables."""

from pathlib import Path

from bayesrange._errors import StudyError

STUDY = """\
# A study for bayesrange. Lines that start with # are notes; take the # away to use a key.

[study]
name   = "My study"
crs    = "EPSG:32633"          # a metric reference system; all computing happens in it
cell_m = 100                   # edge of a cell in metres, at least 10, better 20 across a group's range; or "auto"
area   = "area.geojson"        # polygon of the study area; animals are taken never to leave it

[fixes]
file   = "fixes.csv"           # or a pattern such as "collars/*.csv"
animal = "animal"              # the names of the columns
time   = "time"                # ISO 8601 with offset; or local time, with the next line
# zone = "Europe/Oslo"
x      = "x"                   # in study.crs; or with the next line. Blank coordinates are failed fixes: counted
y      = "y"
# crs  = "EPSG:4326"           # if x is longitude and y is latitude
group  = "group"               # not needed for tracks
# error = 15                   # location error, standard deviation per axis in metres: a number or a column

[groups]                       # not needed for tracks
file = "groups.csv"            # group,x,y,animals: home centre (empty: estimated), adults that mark (empty: 1)

# [animals]
# file = "animals.csv"         # animal, and what is known of it: from, until, sex, release_batch, memory_start

# [layers.forage]
# file = "forage.tif"          # a GeoTIFF that covers the area
# unit = "kg/ha"

# [layers.water]
# file  = "water.tif"
# no_go = true                 # cells above 0 are outside the area

[model]
card = "avoidance"             # `bayesrange cards` lists them
# layers = ["forage"]          # for cards with a resource term
# perception_m = 200           # distance over which scent is perceived; default two cells

# For tracks (the cards steps-resources, steps-home, memory, memory-resources):
# pooling = "hierarchical"     # or "individual": each animal alone
# covariates = ["sex"]         # columns of animals.csv by which animals may differ
# interval_h = 1.0             # hours from fix to fix that make a step; default the commonest interval
# memory_start = "learned"     # residents, who know their range; default "naive": released, know nothing
# learning_days = 30           # with "learned": the first days of a record, which only build memory
# encoding_range_m = 150       # how far around a place a stay is remembered; default the median step
# vary = ["step_length"]       # step length by the hour of the day; "selection": by day and night

[sampling]
chains = 4
warmup = 500
draws  = 500
seed   = 20
"""

TABLES = {"fixes.csv": "animal,time,x,y,group\n", "groups.csv": "group,x,y,animals\n"}


def write_start(folder: Path) -> list[str]:
    """Write the files.

    Returns:
        Lines for the screen: what was written and what to do next.

    Raises:
        StudyError: the folder holds something already.
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise StudyError(f"{folder}: expected a new or empty folder; nothing was written.")
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    for name, header in TABLES.items():
        (folder / name).write_text(header, encoding="utf-8")
    return [
        f"Written: {folder / 'study.toml'}, {', '.join(TABLES)}.",
        "Fill in the tables, put area.geojson (and layers) beside them, go through study.toml, then:",
        f"  bayesrange fit {folder}",
    ]
