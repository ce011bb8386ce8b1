"""From a study and a card to the arrays of a range model."""

import numpy as np

from bayesrange._errors import StudyError
from bayesrange.inference._bearing_nodes import bearings_of
from bayesrange.inference._cards import VARYING, Card
from bayesrange.inference._covariates import code_columns
from bayesrange.inference._fix_entries import ELLIPSE, fix_entries
from bayesrange.inference._range_data import RangeData, RangeSpec
from bayesrange.inference._scales import Scales
from bayesrange.spaceuse import Reading, Setting, make_domain
from bayesrange.study import Study

BUCKET = 256
"""Fixes are padded to a multiple of this, so that data sets of nearly the same size share one compiled program."""

_NOT_COVARIATES = ("group", "x", "y", "animals_low", "animals_high")


def make_spec(study: Study, card: Card) -> RangeSpec:
    """The static part, from a study and a card.

    Raises:
        StudyError: the card and the study do not fit together.
    """
    model, where = study.settings.model, study.path.name
    _check_card(study, card)
    needs_home = not {"localising", "retreat"}.isdisjoint(card.terms)
    hierarchical = model.pooling == "hierarchical"
    if model.covariates and not hierarchical:
        raise StudyError(f'{where}, [model] covariates: covariates of groups need pooling = "hierarchical".')
    if hierarchical and len(study.groups) < 3:
        raise StudyError(
            f'{where}, [model] pooling: "hierarchical" needs at least 3 groups, the study has {len(study.groups)}; '
            'use "shared".'
        )
    if hierarchical and "new group" in set(study.groups["group"]):
        raise StudyError(
            f'{where}: a group is called "new group", which is what the tables call one from the population; rename it.'
        )
    coupled = card.scent and len(study.groups) > 1
    unknown_home = study.groups[["x", "y"]].isna().any(axis=1).to_numpy()
    names = card.parameters + (("over_marking",) if model.over_marking else ())
    return RangeSpec(
        parameters=card.parameters,
        families=tuple((name, card.priors[name].family) for name in names),
        varying=tuple(name for name in card.parameters if name in VARYING) if hierarchical else (),
        solver=card.solver,
        coupled=coupled,
        over_marking=model.over_marking,
        layers=study.model_layers if "resources" in card.terms else (),
        groups=tuple(study.groups["group"]),
        covariates=tuple(name for name, _ in code_covariates(study)),
        estimated=tuple(int(i) for i in np.flatnonzero(unknown_home)) if needs_home else (),
        counted=uncertain_animals(study) if coupled else (),
    )


def _check_card(study: Study, card: Card) -> None:
    model, where = study.settings.model, study.path.name
    if model.pooling == "individual":
        raise StudyError(
            f'{where}, [model] pooling: range cards take "shared" or "hierarchical"; "individual" is for memory cards.'
        )
    for key, given in (
        ("memory_start", model.memory_start != "naive"),
        ("interval_h", model.interval_h is not None),
        ("encoding_range_m", model.encoding_range_m is not None),
        ("shortest_step_m", model.shortest_step_m is not None),
        ("vary", bool(model.vary)),
    ):
        if given:
            raise StudyError(f"{where}, [model] {key}: it is for memory cards, and {card.name} is none; take it out.")
    if not len(study.groups):
        raise StudyError(f"{where}: range cards need groups; add a [groups] table, or a group column to the fixes.")
    if "resources" in card.terms and not model.layers:
        raise StudyError(
            f"{where}, [model] layers: the card {card.name} responds to layers; list at least one, such as "
            'layers = ["forage"].'
        )
    if model.layers and "resources" not in card.terms:
        raise StudyError(
            f"{where}, [model] layers: the card {card.name} has no resource term; take the list out or choose another "
            "card."
        )
    if "over_marking" in model.priors and not model.over_marking:
        raise StudyError(
            f"{where}, [model.priors] over_marking: this prior has no use while over_marking is off; set "
            "over_marking = true in [model], or take the prior out."
        )
    if model.over_marking and not card.scent:
        raise StudyError(f"{where}, [model] over_marking: the card {card.name} has no term that uses scent.")
    if card.scent and len(study.groups) < 2:
        raise StudyError(
            f"{where}, [model] card: {card.name} is about neighbours, and the study has one group; use localising or "
            "resources."
        )


def code_covariates(study: Study) -> list[tuple[str, np.ndarray]]:
    """Covariates of the groups as numbers: (name, value per group), each with mean 0 over the groups.

    A number is standardised; a text column becomes one contrast for each level but the first in alphabetical order.

    Raises:
        StudyError: a column that is missing, empty in places, or constant.
    """
    where, columns = f"{study.path.name}, [model] covariates", {}
    for name in study.settings.model.covariates:
        if name not in study.groups.columns or name in _NOT_COVARIATES:
            raise StudyError(f"{where}: the groups table has no column {name!r} that could be a covariate.")
        columns[name] = study.groups[name]
    return code_columns(columns, list(study.groups["group"]), "group", where)


def make_setting(study: Study, scales: Scales, spec: RangeSpec) -> Setting:
    """Area, standardised layers and marking of a study, in the given scales (NumPy leaves)."""
    grid = study.grid
    area = grid.habitable * (grid.cell_m / 1000) ** 2
    domain = make_domain(grid.x_m / 1000, grid.y_m / 1000, area, scales.perception_m / 1000)
    layers = np.zeros((len(spec.layers), *grid.shape))
    for k, name in enumerate(spec.layers):
        scale = scales.layers[name]
        layers[k] = np.where(grid.inside, (study.layers[name].values - scale.mean) / scale.sd, 0.0)
    marking = study.groups["animals"].to_numpy(float) * scales.a0_km2
    return Setting(domain, layers, marking, np.asarray(scales.eps_m / 1000))


def make_data(study: Study, card: Card, spec: RangeSpec, scales: Scales, weight: np.ndarray) -> RangeData:
    """The numbers of a range model.

    Args:
        study: what the user brought.
        card: with the study's own priors.
        spec: from `make_spec`.
        scales: frozen scales.
        weight: weight of each fix.
    """
    grid, fixes, groups = study.grid, study.fixes, study.groups
    x, y = fixes["x"].to_numpy(float), fixes["y"].to_numpy(float)
    ellipse = fixes[ELLIPSE].to_numpy(float) if ELLIPSE[0] in fixes else None
    error, bearings = fixes["error_m"].to_numpy(float), bearings_of(fixes, study.bearings)
    cell, log_share = fix_entries(grid, x, y, error, study.settings.model.reading, ellipse, bearings)
    owner = fixes["group"].map({name: i for i, name in enumerate(groups["group"])}).to_numpy(np.int32)
    come_and_go = study.epochs if spec.coupled else None  # without scent it makes no difference who is there
    if come_and_go is not None:
        owner = (come_and_go.set_of(fixes["time"]) * len(groups) + owner).astype(np.int32)
    share = grid.basis_share if study.settings.model.reading == "bilinear" else grid.habitable
    padding = -len(fixes) % BUCKET
    reading = Reading(
        np.concatenate([cell, np.repeat(cell[:1], padding, axis=0)]),
        np.concatenate([log_share, np.repeat(log_share[:1], padding, axis=0)]),
        np.concatenate([owner, np.repeat(owner[:1], padding)]),
        share * (grid.cell_m / 1000) ** 2,
    )
    rows, columns = np.nonzero(grid.inside)
    half = grid.cell_m / 2
    box = [
        grid.x_m[columns.min()] - half,
        grid.y_m[rows.min()] - half,
        grid.x_m[columns.max()] + half,
        grid.y_m[rows.max()] + half,
    ]
    spread_scale = np.array([_spread(card, name) for name in spec.varying for _ in range(_copies(name, spec))])
    coded = [values for _, values in code_covariates(study)]
    return RangeData(
        setting=make_setting(study, scales, spec),
        reading=reading,
        weight=np.concatenate([weight, np.zeros(padding)]),
        home=first_homes(study) / 1000,
        box=np.array(box) / 1000,
        priors={name: np.array(card.priors[name].scaled(scales.home_length_km).numbers) for name, _ in spec.families},
        spread_scale=spread_scale,
        covariates=np.stack(coded, axis=1) if coded else np.zeros((len(groups), 0)),
        effect_sd=np.asarray(card.covariate_effect.numbers[1]),
        centring=np.zeros((len(groups), spread_scale.size)),
        animals=groups[["animals_low", "animals_high"]].to_numpy(float)[list(spec.counted)] if spec.counted else None,
        a0=np.asarray(scales.a0_km2) if spec.counted else None,
        log_detection=_log_detection(study),
        share=None if come_and_go is None else come_and_go.share,
    )


def _log_detection(study: Study) -> np.ndarray | None:
    """Log of the chance that a fix succeeds in each cell, 0 outside; None without a layer of it."""
    name = study.settings.fixes.detection
    if name is None:
        return None
    return np.log(np.where(study.grid.inside, study.layers[name].values, 1.0))


def uncertain_animals(study: Study) -> tuple[int, ...]:
    """Indices of the groups whose number of animals is a range."""
    if "animals_low" not in study.groups:
        return ()
    wide = study.groups["animals_low"] < study.groups["animals_high"]
    return tuple(int(i) for i in np.flatnonzero(wide.to_numpy()))


def first_homes(study: Study) -> np.ndarray:
    """Home centres [m]: those given, else the mean of the group's fixes."""
    homes = study.groups[["x", "y"]].to_numpy(float)
    means = study.fixes.groupby("group")[["x", "y"]].mean()
    for i, name in enumerate(study.groups["group"]):
        if np.isnan(homes[i]).any():
            homes[i] = means.loc[name].to_numpy()
    return homes


def _copies(name: str, spec: RangeSpec) -> int:
    return len(spec.layers) if name == "resource" else 1


def _spread(card: Card, name: str) -> float:
    if name not in card.between:
        raise StudyError(
            f'{card.file.name}: pooling = "hierarchical" needs a prior of the spread between groups; write '
            f'[between_groups.{name}] with family = "half-normal" and a scale.'
        )
    return card.between[name].numbers[0]
