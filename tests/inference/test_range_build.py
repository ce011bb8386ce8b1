"""A study and a card made into a model: what fits together, covariates as numbers, arrays in kilometres."""

import dataclasses

import jax
import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest
import rasterio
from inference._tiny_study import HOMES, NORTH, SOUTH, WEST, fixes_table, groups_table, write_study

from bayesrange import StudyError
from bayesrange.inference import as_arrays, find_card, log_likelihood, make_data, make_scales, make_spec, read_card
from bayesrange.inference._range_build import BUCKET, code_covariates, first_homes, make_setting
from bayesrange.spaceuse import Parameters
from bayesrange.study import read_study


def spec_of(tmp_path, card=None, fixes=None, groups=None, own_card=None, **model):
    if own_card is not None:
        tmp_path.mkdir(exist_ok=True)
        (tmp_path / "own.toml").write_text(own_card)
    changes = {"card": card or "own", **model}
    study = read_study(write_study(tmp_path, fixes, groups, model=changes))
    return make_spec(study, read_card(find_card(changes["card"], tmp_path)))


ONE = groups_table().iloc[:1]
OWN = """
terms = ["localising"]
[priors.localising]
family = "log-normal"
median = 8.0
spread = 0.8
"""
WRONG = {
    "a key of memory cards": (
        {"card": "resources", "interval_h": 1.0},
        r"interval_h: it is for memory cards, and resources is none",
    ),
    "layers missing": ({"card": "resources", "layers": []}, r"layers: the card resources responds to layers; list at"),
    "layers too many": ({"card": "avoidance"}, r"layers: the card avoidance has no resource term; take the list out"),
    "over-marking": ({"card": "resources", "over_marking": True}, "over_marking: the card resources has no term that"),
    "a prior without use": (
        {"priors": {"over_marking": {"family": "half-normal", "scale": 0.01}}, "card": "avoidance", "layers": []},
        "over_marking: this prior has no use while over_marking is off",
    ),
    "one group": (
        {"card": "avoidance", "layers": [], "groups": ONE, "fixes": fixes_table().iloc[:100]},
        "card: avoidance is about neighbours, and the study has one group",
    ),
    "covariates": ({"card": "localising", "layers": [], "covariates": ["size"]}, 'covariates .* need pooling = "hier'),
    "a group called like a row": (
        {
            "card": "localising",
            "layers": [],
            "pooling": "hierarchical",
            "groups": groups_table().replace({"group": {"east wood": "new group"}}),
        },
        'a group is called "new group"',
    ),
    "few groups": (
        {"card": "localising", "layers": [], "groups": groups_table().iloc[:2], "pooling": "hierarchical"},
        '"hierarchical" needs at least 3 groups, the study has 2; use "shared"',
    ),
}


@pytest.mark.parametrize("wrong", WRONG)
def test_what_does_not_fit_together_is_answered_in_one_sentence(tmp_path, wrong):
    changes, sentence = WRONG[wrong]
    with pytest.raises(StudyError, match=sentence) as caught:
        spec_of(tmp_path, **changes)
    assert str(caught.value).startswith("study.toml")


def test_study_without_groups_is_refused(tmp_path):
    file = write_study(tmp_path, fixes_table().drop(columns="group"), model={"card": "localising", "layers": []})
    file.write_text(file.read_text().replace('[groups]\nfile = "groups.csv"\n', ""))
    with pytest.raises(StudyError, match="study.toml: range cards need groups"):
        make_spec(read_study(file), read_card(find_card("localising")))


def test_hierarchical_card_without_a_spread_is_refused(tmp_path):
    (tmp_path / "own.toml").write_text(OWN)
    model = {"card": "own", "layers": [], "pooling": "hierarchical"}
    study, card = read_study(write_study(tmp_path, model=model)), read_card(tmp_path / "own.toml")
    spec, scales = make_spec(study, card), make_scales(study, [])
    with pytest.raises(
        StudyError, match=r"own.toml: pooling = .hierarchical. needs .* write .between_groups.localising"
    ):
        make_data(study, card, spec, scales, np.ones(len(study.fixes)))


def test_spec_says_what_the_study_says(tmp_path):
    groups = groups_table()
    groups.loc[groups["group"] == NORTH, ["x", "y"]] = np.nan
    spec = spec_of(tmp_path, "avoidance-resources", groups=groups, pooling="hierarchical", over_marking=True)
    assert spec.parameters == ("localising", "avoidance", "resource") == spec.varying
    assert dict(spec.families)["over_marking"] == "half-normal"
    assert spec.groups == tuple(HOMES) and spec.layers == ("worms",)
    assert spec.estimated == (0,) and spec.coupled and spec.solver == "gibbs"


def test_card_without_homes_estimates_none(tmp_path):
    groups = groups_table()
    groups.loc[groups["group"] == NORTH, ["x", "y"]] = np.nan
    spec = spec_of(tmp_path, "resources", groups=groups)
    assert spec.estimated == () and not spec.coupled and spec.varying == ()


# --- covariates ------------------------------------------------------------------------------------------------------


def covariates_of(study, table, *names):
    groups = study.groups.assign(**table)
    model = study.settings.model.model_copy(update={"covariates": list(names)})
    settings = study.settings.model_copy(update={"model": model})
    return code_covariates(dataclasses.replace(study, groups=groups, settings=settings))


def test_number_is_standardised(study):
    [(name, values)] = covariates_of(study, {"size": [1.0, 2.0, 6.0]}, "size")
    # Mean 3, sd (n in the denominator) √(14/3)
    assert name == "size"
    np.testing.assert_allclose(values, np.array([-2.0, -1.0, 3.0]) / np.sqrt(14 / 3))


def test_text_becomes_contrasts_with_its_first_level(study):
    coded = covariates_of(study, {"site": ["wet", "dry", "mixed"]}, "site")
    assert [name for name, _ in coded] == ["site=mixed", "site=wet"]
    np.testing.assert_allclose(coded[1][1], [2 / 3, -1 / 3, -1 / 3])


def test_coefficient_of_a_contrast_is_the_difference_between_its_levels(study):
    [(_, values)] = covariates_of(study, {"site": ["wet", "dry", "wet"]}, "site")
    assert values.max() - values.min() == 1 and values.sum() == pytest.approx(0)


@pytest.mark.parametrize(
    ("table", "name", "sentence"),
    [
        ({}, "colour", "no column 'colour'"),
        ({}, "x", "no column 'x' that could be a covariate"),
        ({}, "group", "no column 'group' that could be"),
        ({"size": [1.0, np.nan, 2.0]}, "size", "column 'size' .* is empty for group 'säter, <b>low</b>'"),
        ({"size": [2.0, 2.0, 2.0]}, "size", "column 'size' .* has the same value for every group"),
        ({"size": [1.0, np.inf, 2.0]}, "size", "column 'size' .* holds a number that is not finite"),
    ],
)
def test_column_that_cannot_be_a_covariate_is_named(study, table, name, sentence):
    with pytest.raises(StudyError, match=f"study.toml, .model. covariates: .*{sentence}"):
        covariates_of(study, table, name)


# --- arrays ----------------------------------------------------------------------------------------------------------


def test_home_that_is_not_given_begins_at_the_mean_of_the_fixes(study):
    groups = study.groups.assign(x=[np.nan, WEST + 5.0, WEST + 7.0], y=[np.nan, SOUTH + 1.0, SOUTH + 2.0])
    homes = first_homes(dataclasses.replace(study, groups=groups))
    own = study.fixes[study.fixes["group"] == NORTH]
    np.testing.assert_allclose(homes[0], [own["x"].mean(), own["y"].mean()])
    np.testing.assert_allclose(homes[1:], [[WEST + 5, SOUTH + 1], [WEST + 7, SOUTH + 2]])


def test_arrays_are_in_kilometres_and_scales(coupled):
    data, grid = coupled.data, coupled.study.grid
    assert float(data.setting.domain.area.sum()) == pytest.approx(grid.habitable_km2)
    # Marks are scaled so that the mean scent over the area is 1: Σ n_i A₀ = area
    assert float(data.setting.marking.sum()) == pytest.approx(grid.habitable_km2)
    np.testing.assert_allclose(data.home[1:] * 1000, coupled.study.groups[["x", "y"]].to_numpy(float)[1:])
    # The box of a study area that touches all four sides: 2.4 km
    np.testing.assert_allclose(data.box[2:] - data.box[:2], 2.4)
    layer, area = np.asarray(data.setting.layers[0]), np.asarray(data.setting.domain.area)
    assert np.average(layer, weights=area) == pytest.approx(0, abs=1e-12)
    assert np.average(layer**2, weights=area) == pytest.approx(1)
    assert np.isfinite(layer).all()  # also outside, where a NaN would reach the gradient
    length = coupled.scales.home_length_km
    np.testing.assert_allclose(data.priors["localising"], [8 / length, 0.8])


def some_parameters(model):
    groups = len(model.spec.groups)
    return Parameters(
        jnp.full(groups, 6.0), jnp.zeros(groups), jnp.full(groups, 0.3), jnp.full((1, groups), 0.2), jnp.zeros(()),
        jnp.asarray(model.data.home),
    )  # fmt: skip


def test_fixes_are_padded_to_a_bucket_and_padding_changes_nothing(coupled):
    fixes, spec = len(coupled.study.fixes), dataclasses.replace(coupled.spec, coupled=False)
    assert coupled.data.weight.size % BUCKET == 0 and coupled.data.weight.size - fixes < BUCKET
    assert not np.any(coupled.data.weight[fixes:])
    short = coupled.data.reading._replace(
        cell=coupled.data.reading.cell[:fixes],
        log_share=coupled.data.reading.log_share[:fixes],
        group=coupled.data.reading.group[:fixes],
    )
    bare = coupled.data._replace(reading=short, weight=coupled.data.weight[:fixes])

    @jax.jit
    def terms_and_slopes(parameters, data):
        terms, pull = jax.vjp(lambda at: log_likelihood(spec, data, at)[0], parameters)
        return terms, pull(jnp.ones_like(terms))

    terms, slopes = terms_and_slopes(some_parameters(coupled), coupled.data)
    alone, alone_slopes = terms_and_slopes(some_parameters(coupled), bare)
    np.testing.assert_allclose(terms[:fixes], alone, rtol=1e-12)  # vectors of another length round differently
    assert not np.any(terms[fixes:])
    for one, other in zip(jax.tree.leaves(slopes), jax.tree.leaves(alone_slopes), strict=True):
        np.testing.assert_allclose(one, other, rtol=1e-10, atol=1e-10)


def test_a_full_bucket_gets_no_padding(tmp_path):
    fixes = pd.concat([fixes_table(128)])
    study = read_study(write_study(tmp_path, fixes, model={"card": "localising", "layers": []}))
    card = read_card(find_card("localising"))
    spec, scales = make_spec(study, card), make_scales(study, [])
    assert len(study.fixes) == BUCKET
    assert make_data(study, card, spec, scales, np.ones(BUCKET)).weight.size == BUCKET


def test_cell_reading_gives_the_density_of_the_cell(tmp_path):
    model = {"card": "localising", "layers": [], "reading": "cell", "autocorrelation": "ignored"}
    study, card = read_study(write_study(tmp_path, model=model)), read_card(find_card("localising"))
    spec, scales = make_spec(study, card), make_scales(study, [])
    data = as_arrays(make_data(study, card, spec, scales, np.ones(len(study.fixes))))
    parameters = Parameters(
        jnp.full(3, 6.0), jnp.zeros(3), jnp.zeros(3), jnp.zeros((0, 3)), jnp.zeros(()), jnp.asarray(data.home)
    )
    terms, solution = log_likelihood(spec, data, parameters)
    row = ((study.fixes["y"] - SOUTH) // 100).astype(int).to_numpy()
    column = ((study.fixes["x"] - WEST) // 100).astype(int).to_numpy()
    owner = study.fixes["group"].map({name: i for i, name in enumerate(HOMES)}).to_numpy()
    np.testing.assert_allclose(terms[: len(row)], np.asarray(solution.log_density)[owner, row, column], rtol=1e-12)


def test_contrasts_of_classes_enter_as_0_and_1_in_the_order_of_the_study_file(tmp_path):
    file = write_study(tmp_path, model={"layers": ["cover", "worms"]})
    plain = read_study(write_study(tmp_path / "plain")).grid
    codes = np.random.default_rng(1).choice([4, 5, 6], size=plain.shape).astype("uint8")
    profile = {"driver": "GTiff", "height": codes.shape[0], "width": codes.shape[1], "count": 1, "dtype": "uint8"}
    with rasterio.open(tmp_path / "cover.tif", "w", crs=plain.crs, transform=plain.transform, **profile) as target:
        target.write(codes[::-1], 1)
    section = (
        '[layers.cover]\nfile = "cover.tif"\nclasses = { 5 = "fen", 4 = "wood", 6 = "grass" }\nreference = "wood"\n'
    )
    file.write_text(file.read_text() + "\n" + section)
    study = read_study(file)
    spec = make_spec(study, read_card(find_card(study.settings.model.card, tmp_path)))
    assert spec.layers == ("cover=fen", "cover=grass", "worms")
    layers = make_setting(study, make_scales(study, list(spec.layers)), spec).layers
    inside = study.grid.inside
    np.testing.assert_array_equal(layers[0][inside], (codes == 5)[inside])
    np.testing.assert_array_equal(layers[1][inside], (codes == 6)[inside])
