"""Whether a study and a memory card go together, and how its animals are pooled."""

import numpy as np
import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.inference._cards import Card
from bayesrange.inference._companions import animal_column
from bayesrange.inference._covariates import code_columns
from bayesrange.inference._memory_study import Tracks
from bayesrange.study import Study

FEWEST_POOLED = 3


def check_card(study: Study, card: Card) -> None:
    """Refuse keys of the study file that the card has no use for, and what it lacks.

    Raises:
        StudyError: one sentence on the first of them.
    """
    model, where = study.settings.model, study.path.name
    if model.pooling == "shared":
        raise StudyError(
            f'{where}, [model] pooling: memory cards take "individual" or "hierarchical"; "shared" is for range cards.'
        )
    selects = "resources" in card.terms
    for key, given, needs in (
        ("perception_m", model.perception_m is not None, "a range card"),
        ("over_marking", model.over_marking, "a range card"),
        ("reading", model.reading != "bilinear", "a range card"),
        (
            "autocorrelation",
            "autocorrelation" in model.model_fields_set,
            "a range card: steps follow one another anyway",
        ),
    ):
        if given:
            raise StudyError(f"{where}, [model] {key}: {card.name} has no use for it; it is for {needs}: take it out.")
    if selects and not model.layers:
        raise StudyError(
            f"{where}, [model] layers: the card {card.name} responds to layers; list at least one, such as "
            'layers = ["forage"].'
        )
    if model.layers and not selects:
        raise StudyError(
            f"{where}, [model] layers: the card {card.name} has no resource term; take the list out or choose another "
            "card."
        )
    if "selection" in model.vary and not selects:
        raise StudyError(f'{where}, [model] vary: the card {card.name} has no selection; take "selection" out.')
    for name, optional in (
        ("encoding_range", model.encoding_range_m == "estimate"),
        ("step_rhythm", "step_length" in model.vary),
    ):
        if name in model.priors and not optional:
            raise StudyError(
                f"{where}, [model.priors] {name}: this prior has no use here; set "
                f"{'encoding_range_m = "estimate"' if name == 'encoding_range' else 'vary = ["step_length"]'} in "
                "[model], or take the prior out."
            )


def said_of_unused(study: Study, card: Card) -> list[str]:
    """Keys that a card without memory leaves aside, so that a null takes the same study file as the card it is for."""
    if "memory" in card.terms or study.settings.model.encoding_range_m is None:
        return []
    return [f"[model] encoding_range_m has no use for the card {card.name} and is left aside."]


def is_pooled(study: Study, tracks: Tracks) -> bool:
    """Whether animals share a population: as asked for, else from three that travel apart.

    Raises:
        StudyError: too few animals for it, or covariates without it.
    """
    model, where, units = study.settings.model, study.path.name, len(tracks.units)
    if model.pooling == "hierarchical" and units < FEWEST_POOLED:
        raise StudyError(
            f'{where}, [model] pooling: "hierarchical" needs at least {FEWEST_POOLED} animals that travel apart, the '
            f'study has {units}; use "individual".'
        )
    pooled = model.pooling == "hierarchical" or (model.pooling is None and units >= FEWEST_POOLED)
    if pooled and "new animal" in {one.name for one in tracks.animals}:
        raise StudyError(
            f'{where}: an animal is called "new animal", which is what the tables call one from the population; '
            "rename it."
        )
    if model.covariates and not pooled:
        raise StudyError(f'{where}, [model] covariates: covariates of animals need pooling = "hierarchical".')
    return pooled


def unit_covariates(study: Study, tracks: Tracks, pooled: bool) -> list[tuple[str, np.ndarray]]:
    """Coded covariates of the units; animals that travel together must agree."""
    columns = {}
    for name in study.settings.model.covariates if pooled else ():
        found = animal_column(study, name)
        where = f"{study.path.name}, [model] covariates"
        if found is None or name in ("animal", "tag", "from", "until"):
            raise StudyError(f"{where}: the animals table has no column {name!r} that could be a covariate.")
        values = [[found.get(tracks.animals[i].name, "") for i in unit] for unit in tracks.units]
        for unit, own in zip(tracks.units, values, strict=True):
            if len(set(own)) > 1:
                names = " and ".join(tracks.animals[i].name for i in unit)
                raise StudyError(
                    f"{where}: {names} travel together and count as one, but differ in {name!r}; leave it out, or set "
                    'travelling_together = "counted_each".'
                )
        columns[name] = pd.Series([own[0] for own in values]).replace("", np.nan)
    units = [" + ".join(tracks.animals[i].name for i in unit) for unit in tracks.units]
    return code_columns(columns, units, "animal", f"{study.path.name}, [model] covariates")
