"""Layers of classes: the commonest class of each cell, as contrasts with the reference class."""

import numpy as np
import pytest
from scipy import stats

NAMES = {1: "wood", 2: "grass", 7: "fen"}


@pytest.fixture
def cover(folder):
    """The study with a layer of classes, 25 m pixels, and those pixels (row 0 north)."""
    codes = np.random.default_rng(3).choice([1, 2, 2, 7], size=(160, 160)).astype("uint8")
    folder.raster("cover.tif", codes, 25.0)
    folder.toml["layers"]["cover"] = {
        "file": "cover.tif",
        "classes": {str(code): name for code, name in NAMES.items()},
        "reference": "grass",
    }
    folder.toml["model"]["layers"] = ["cover", "worms"]
    return folder, codes


def _blocks(codes):
    return codes.reshape(40, 4, 40, 4).swapaxes(1, 2).reshape(40, 40, 16)


def _counts(codes, code):
    return (_blocks(codes) == code).sum(axis=2)


def test_a_cell_takes_the_class_that_covers_most_of_it(cover):
    folder, codes = cover
    layers = folder.read().layers
    counts = np.stack([_counts(codes, code) for code in NAMES])
    clear = (np.sort(counts, axis=0)[-1] > np.sort(counts, axis=0)[-2])[::-1]  # no two classes cover equally much
    assert clear.mean() > 0.8
    commonest = stats.mode(_blocks(codes), axis=2).mode[::-1]  # scipy's mode beside GDAL's
    for code in (1, 7):
        values = layers[f"cover={NAMES[code]}"].values
        assert set(np.unique(values)) == {0.0, 1.0}
        np.testing.assert_array_equal(values[clear], (commonest == code)[clear])
        assert (np.stack([_counts(codes, code)])[0][::-1][values == 1] >= counts.max(axis=0)[::-1][values == 1]).all()


def test_a_model_that_lists_the_layer_gets_all_contrasts_in_the_order_of_the_classes(cover):
    folder, _ = cover
    study = folder.read()
    assert study.model_layers == ("cover=wood", "cover=fen", "worms")
    assert {name: layer.reference for name, layer in study.layers.items()} == {
        "worms": "",
        "cover=wood": "grass",
        "cover=fen": "grass",
    }
    folder.toml["model"]["layers"] = ["worms"]
    assert folder.read().model_layers == ("worms",)


def test_numbers_of_one_name_count_together(cover):
    folder, codes = cover
    folder.toml["layers"]["cover"]["classes"] = {"1": "rough", "2": "grass", "7": "rough"}
    study = folder.read()
    rough, grass = 16 - _counts(codes, 2)[::-1], _counts(codes, 2)[::-1]
    values = study.layers["cover=rough"].values
    np.testing.assert_array_equal(values[rough != grass], (rough > grass)[rough != grass])
    assert study.model_layers == ("cover=rough", "worms")


def test_a_raster_of_classes_on_the_studys_own_cells_passes_unchanged(cover):
    folder, codes = cover
    folder.raster("cover.tif", codes[:40, :40], 100.0)
    np.testing.assert_array_equal(folder.read().layers["cover=fen"].values, codes[:40, :40][::-1] == 7)


def test_pixels_larger_than_a_cell_are_read_at_its_centre(cover):
    folder, codes = cover
    folder.raster("cover.tif", codes[:20, :20], 200.0)
    expected = np.kron(codes[:20, :20], np.ones((2, 2)))[::-1] == 1
    np.testing.assert_array_equal(folder.read().layers["cover=wood"].values, expected)


def test_no_data_pixels_of_a_raster_of_classes_do_not_count(cover):
    folder, codes = cover
    codes[:, ::4] = 255  # a quarter of each cell
    folder.raster("cover.tif", codes, 25.0, nodata=255)
    counts = np.stack([_counts(codes, code) for code in NAMES])
    clear = (np.sort(counts, axis=0)[-1] > np.sort(counts, axis=0)[-2])[::-1]
    wood = (counts.argmax(axis=0) == 0)[::-1]
    np.testing.assert_array_equal(folder.read().layers["cover=wood"].values[clear], wood[clear])


def test_gaps_among_classes_are_filled_with_the_nearest_cells_class(cover):
    folder, _ = cover
    halves = np.repeat([[1, 7]], 40, axis=0).repeat(20, axis=1).astype("uint8")
    halves[0, 0], halves[10:12, 18:22] = 2, 0
    folder.raster("cover.tif", halves, 100.0, nodata=0)
    folder.toml["layers"]["cover"] |= {"fill": "nearest", "fill_within_m": 250}
    study = folder.read()
    np.testing.assert_array_equal(study.layers["cover=fen"].values[28:30, 18:22], [[0, 0, 1, 1]] * 2)
    assert study.counts["cells_filled"] == 8
