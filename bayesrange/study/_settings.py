"""The study file's keys, their types and defaults.

One class a section. A field's `description` is the end of the sentence "expected …", so that a wrong value is
answered in the user's words. `_settings_file.py` reads the file; keys of the design that are not used yet are known
here and refused there.
"""

from datetime import date, datetime
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

type Metres = Annotated[float, Field(gt=0, allow_inf_nan=False)]
type Share = Annotated[float, Field(gt=0, lt=1)]
type Name = Annotated[str, Field(min_length=1)]
type Moment = date | datetime

A_NAME = "a name in quotes"
A_COLUMN = "the name of a column in quotes"
A_FILE = "the name of a file in quotes"
METRES = "a number of metres above 0"


class Section(BaseModel):
    """A table of the study file: unknown keys are errors, values keep the type that TOML gave them."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, populate_by_name=True)


class StudySection(Section):
    """`[study]`: name, reference system, grid and area."""

    name: Name = Field(description=A_NAME)
    crs: Name | None = Field(None, description='a metric reference system such as "EPSG:32631"')
    cell_m: Metres | Literal["auto"] = Field(description='a number of metres above 0, or "auto"')
    area: Name = Field(description="the file with the study area's polygon in quotes")
    sensitive: Literal["no", "high"] = Field("no", description='"no" or "high"')


class KeepSection(Section):
    """`[fixes.keep]`: which fixes are used."""

    sun: Literal["night", "day"] | None = Field(None, description='"night" or "day"')
    hours: Name | None = Field(None, description='two clock times such as "18:00-06:00"')
    column: dict[str, Any] | None = Field(None, description='a column and its value such as { activity = "active" }')


class DropSection(Section):
    """`[fixes.drop]`: fixes with these flags are left out; `screen` shows them."""

    flags: list[Literal["duplicate", "speed", "spike", "stationary", "outside"]] = Field(
        description='a list such as ["duplicate", "speed"], of duplicate, speed, spike, stationary and outside'
    )


class FixesSection(Section):
    """`[fixes]`: files and columns of the relocations."""

    file: Name | list[Name] | None = Field(
        None, description='a file, a pattern such as "collars/*.csv", a folder, or a list of them'
    )
    animal: Name = Field("animal", description=A_COLUMN)
    tag: Name | None = Field(None, description=A_COLUMN)
    time: Name | list[Name] = Field("time", description="the name of a column in quotes, or a list of two")
    x: Name = Field("x", description=A_COLUMN)
    y: Name = Field("y", description=A_COLUMN)
    group: Name = Field("group", description=A_COLUMN)
    error: Name | Annotated[float, Field(ge=0, allow_inf_nan=False)] = Field(
        "error_m", description="a column, or a number of metres of at least 0 (standard deviation per axis)"
    )
    hdop: Name | None = Field(None, description=A_COLUMN)
    uere_m: Metres | None = Field(None, description=METRES)
    error_class: Name | None = Field(None, description=A_COLUMN)
    error_table: Name | None = Field(None, description=A_FILE)
    error_major: Name | None = Field(None, description=A_COLUMN)
    error_minor: Name | None = Field(None, description=A_COLUMN)
    error_bearing: Name | None = Field(None, description=A_COLUMN)
    error_level: Share | None = Field(None, description="a share between 0 and 1 such as 0.95")
    zone: Name | None = Field(None, description='a time zone such as "Europe/Oslo"')
    crs: Name | None = Field(None, description='the reference system of x and y, such as "EPSG:4326"')
    max_speed_kmh: float | None = Field(
        None, gt=0, allow_inf_nan=False, description="a number of kilometres an hour above 0"
    )
    detection: Name | None = Field(None, description="the name of a layer in quotes")
    keep: KeepSection | None = Field(None, description="the keys sun, hours or column")
    drop: DropSection | None = Field(None, description='the key flags, such as flags = ["duplicate", "speed"]')


class BearingsSection(Section):
    """`[bearings]`: directions to the animal, taken from stations, from which its places are computed."""

    file: Name | list[Name] = Field(description='a file, a pattern such as "vhf/*.csv", a folder, or a list of them')
    animal: Name = Field("animal", description=A_COLUMN)
    tag: Name | None = Field(None, description=A_COLUMN)
    time: Name = Field("time", description=A_COLUMN)
    station: Name = Field("station", description=A_COLUMN)
    bearing: Name = Field("bearing", description=A_COLUMN)
    set: Name = Field("set", description=A_COLUMN)
    observer: Name = Field("observer", description=A_COLUMN)
    group: Name = Field("group", description=A_COLUMN)
    stations: Name | None = Field(None, description="the file with the stations (station,x,y) in quotes")
    station_x: Name = Field("station_x", description=A_COLUMN)
    station_y: Name = Field("station_y", description=A_COLUMN)
    crs: Name | None = Field(None, description='the reference system of the stations, such as "EPSG:4326"')
    zone: Name | None = Field(None, description='a time zone such as "Europe/Oslo"')
    north: Literal["magnetic", "true", "grid"] = Field(description='"magnetic", "true" or "grid"')
    declination: Name | Annotated[float, Field(ge=-180, le=180)] | None = Field(
        None, description="a number of degrees, east positive, or a column"
    )
    window_min: Annotated[float, Field(gt=0, allow_inf_nan=False)] | None = Field(
        None, description="a number of minutes above 0"
    )
    sd_deg: Annotated[float, Field(gt=0, lt=90)] | dict[str, float] | None = Field(
        None, description="a number of degrees above 0 and below 90, or one an observer such as { KL = 4, MM = 6 }"
    )


class AnimalsSection(Section):
    """`[animals]`: one row a deployment."""

    file: Name | None = Field(None, description=A_FILE)
    settle_in_days: float = Field(0, ge=0, description="a number of days of at least 0")


class GroupsSection(Section):
    """`[groups]`: the social groups, their home centres and sizes."""

    file: Name = Field(description=A_FILE)


class PeriodSection(Section):
    """One entry of `[periods]`."""

    start: Moment = Field(alias="from", description="a date such as 2031-03-01, without quotes")
    until: Moment = Field(description="a date such as 2031-06-10, without quotes")


class LayerSection(Section):
    """`[layers.NAME]`: a map layer."""

    file: Name | None = Field(None, description=A_FILE)
    files: dict[str, Name] | None = Field(None, description='one file a period, such as { before = "…", after = "…" }')
    distance: Name | None = Field(None, description="the name of a vector file in quotes")
    table: Name | None = Field(None, description="the name of a table of the vector file in quotes")
    cap_m: Metres | None = Field(None, description=METRES)
    band: int | None = Field(None, ge=1, description="a whole number of at least 1")
    classes: dict[str, str] | None = Field(
        None, description='the numbers in the raster and their names, such as { 1 = "wood", 2 = "grass" }'
    )
    reference: Name | None = Field(None, description="the name of one of the classes in quotes")
    unit: str = Field("", description="a unit in quotes")
    fill: Literal["nearest"] | None = Field(None, description='"nearest"')
    fill_within_m: Metres | None = Field(None, description=METRES)
    no_go: bool = Field(False, description="true or false")


class ModelSection(Section):
    """`[model]`: which model card, and how it is applied."""

    card: Name = Field(description='the name of a model card such as "avoidance-resources"')
    layers: list[Name] = Field([], description='a list of layer names such as ["earthworms"]')
    pooling: Literal["shared", "hierarchical", "individual"] | None = Field(
        None, description='"shared", "hierarchical" or "individual"'
    )
    autocorrelation: Literal["weighted", "ignored"] = Field("weighted", description='"weighted" or "ignored"')
    reading: Literal["bilinear", "cell"] = Field("bilinear", description='"bilinear" or "cell"')
    covariates: list[Name] = Field([], description='a list of columns of the groups or animals table such as ["sex"]')
    memory_start: Literal["naive", "learned"] = Field("naive", description='"naive" or "learned"')
    learning_days: float | None = Field(None, gt=0, description="a number of days above 0")
    interval_h: float | None = Field(None, gt=0, description="a number of hours above 0")
    interval_tolerance: Annotated[float, Field(gt=0, lt=0.5)] = Field(
        0.1, description="a share of the interval above 0 and below 0.5"
    )
    vary: list[Literal["step_length", "selection"]] = Field(
        [], description='a list with "step_length" (by the hour), "selection" (by day and night), or both'
    )
    nodes: Annotated[int, Field(ge=16, le=4096)] | Literal["auto"] = Field(
        "auto", description='"auto" or a whole number from 16 to 4096'
    )
    travelling_together: Literal["counted_once", "counted_each"] = Field(
        "counted_once", description='"counted_once" or "counted_each"'
    )
    encoding_range_m: Metres | Literal["estimate"] | None = Field(None, description=METRES + ', or "estimate"')
    shortest_step_m: Metres | None = Field(None, description=METRES)
    perception_m: Metres | None = Field(None, description=METRES)
    over_marking: bool = Field(False, description="true or false")
    smallest_effect: dict[str, float] | None = Field(None, description="numbers such as { avoidance = 0.1 }")
    priors: dict[str, dict[str, Any]] = Field(
        {}, description='a prior such as avoidance = { family = "half-normal", scale = 2.0 }'
    )


class SamplingSection(Section):
    """`[sampling]`: how long and from which seed."""

    chains: int = Field(4, ge=1, description="a whole number of at least 1")
    warmup: int = Field(500, ge=1, description="a whole number of at least 1")
    draws: int = Field(500, ge=1, description="a whole number of at least 1")
    seed: int = Field(20, ge=0, lt=2**32, description="a whole number from 0 to 4294967295")
    target_accept: Share = Field(0.9, description="a number between 0 and 1")


class StudySettings(Section):
    """The whole study file."""

    study: StudySection = Field(description="the section [study]")
    fixes: FixesSection = Field(FixesSection(), description="the section [fixes]")
    bearings: BearingsSection | None = Field(None, description="the section [bearings]")
    animals: AnimalsSection | None = Field(None, description="the section [animals]")
    groups: GroupsSection | None = Field(None, description="the section [groups]")
    periods: dict[str, PeriodSection] = Field({}, description="periods such as before = { from = …, until = … }")
    layers: dict[str, LayerSection] = Field({}, description="sections such as [layers.earthworms]")
    model: ModelSection = Field(description="the section [model]")
    sampling: SamplingSection = Field(SamplingSection(), description="the section [sampling]")
