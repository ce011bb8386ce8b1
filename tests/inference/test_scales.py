"""Frozen scales: made from area, groups and layers, never from fixes; written and read back unchanged."""

import dataclasses
import json

import numpy as np
import pytest
from inference._tiny_study import fixes_table, groups_table, write_study

from bayesrange import StudyError
from bayesrange.inference import Scales, make_scales
from bayesrange.inference._scales import LayerScale
from bayesrange.study import read_study


@pytest.fixture
def scales(study):
    return make_scales(study, ["worms"])


def test_scales_are_those_of_area_and_groups(study, scales):
    # 2 + 3 + 4 animals in 3 groups; cells of 100 m; perception two cells by default
    area = study.grid.habitable_km2
    assert scales.a0_km2 == pytest.approx(area / 9)
    assert scales.home_length_km == pytest.approx(np.sqrt(area / 3))
    assert (scales.perception_m, scales.eps_m) == (200.0, 50.0)


def test_layer_scale_weighs_cells_by_their_habitable_area(study, scales):
    inside = study.grid.habitable > 0
    values, share = study.layers["worms"].values[inside], study.grid.habitable[inside]
    assert 0 < (share < 1).sum()  # the cut corner: some cells count in part
    # Eight by eight sub-cells a cell: repeating each value by its number of habitable sub-cells is exact.
    repeated = np.repeat(values, np.round(share * 64).astype(int))
    assert scales.layers["worms"].mean == pytest.approx(repeated.mean(), rel=1e-12)
    assert scales.layers["worms"].sd == pytest.approx(repeated.std(), rel=1e-12)
    assert scales.layers["worms"].unit == "kg/ha"


def test_scales_do_not_depend_on_the_fixes(scales, tmp_path):
    few = write_study(tmp_path, fixes_table().groupby("group").head(20))
    assert make_scales(read_study(few), ["worms"]) == scales


def test_perception_of_the_study_file_is_taken(tmp_path):
    assert make_scales(read_study(write_study(tmp_path, model={"perception_m": 330})), []).perception_m == 330


def test_scales_survive_json(scales):
    assert Scales.from_json(json.loads(json.dumps(scales.as_json()))) == scales


def test_scales_are_frozen(scales):
    with pytest.raises(dataclasses.FrozenInstanceError):
        scales.a0_km2 = 1.0


def test_layer_that_the_study_lacks_is_named(study):
    with pytest.raises(StudyError, match="study.toml, .model. layers: no layer called 'slope'; the study has worms"):
        make_scales(study, ["slope"])


def test_layer_without_variation_is_refused(study):
    flat = dataclasses.replace(study.layers["worms"], values=np.where(study.grid.inside, 3.7, np.nan))
    with pytest.raises(StudyError, match="worms.tif: layer 'worms' has the same value everywhere"):
        make_scales(dataclasses.replace(study, layers={"worms": flat}), ["worms"])


def test_layer_of_zeros_is_refused(study):
    flat = dataclasses.replace(study.layers["worms"], values=np.where(study.grid.inside, 0.0, np.nan))
    with pytest.raises(StudyError, match="the same value everywhere"):
        make_scales(dataclasses.replace(study, layers={"worms": flat}), ["worms"])


def test_a_contrast_of_classes_is_not_standardised(study):
    wood = (np.arange(study.grid.inside.size) % 3 == 0).reshape(study.grid.shape).astype(float)
    layer = dataclasses.replace(
        study.layers["worms"], values=np.where(study.grid.inside, wood, np.nan), reference="fen"
    )
    scales = make_scales(dataclasses.replace(study, layers={"cover=wood": layer}), ["cover=wood"])
    assert scales.layers["cover=wood"] == LayerScale(0.0, 1.0, "", "fen")
    assert Scales.from_json(json.loads(json.dumps(scales.as_json()))) == scales


def test_home_length_is_that_of_the_groups_in_the_table(tmp_path):
    two = groups_table().iloc[:2]
    study = read_study(write_study(tmp_path, groups=two))
    assert make_scales(study, []).home_length_km == pytest.approx(np.sqrt(study.grid.habitable_km2 / 2))
