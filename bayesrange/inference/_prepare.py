"""A study made ready to be fitted: card, scales, specification; and, when sampling begins, the tasks of its workers."""

import hashlib
import json
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import cached_property
from importlib.metadata import version
from typing import Any

import numpy as np

import bayesrange
from bayesrange.inference._cards import Card, find_card, read_card
from bayesrange.inference._models import Data, Spec
from bayesrange.inference._range_build import make_data, make_spec
from bayesrange.inference._scales import Scales, make_scales
from bayesrange.inference._task import Task
from bayesrange.study import Study, Weights, autocorrelation_weights

Made = tuple[list[Data], list[Any], dict[str, Any]]
"""Data and extra of each task, and facts for run.json that came up on the way."""


@dataclass
class Prepared:
    """A study made ready to be fitted.

    Attributes:
        study: what the user brought.
        card: with the study's own priors.
        specs: static part of each task; one, or one an animal that is fitted alone.
        labels: name of each task: "" if there is one only, else the animal.
        scales: frozen scales.
        inputs: SHA-256 of every file that decides the result.
        make: makes the arrays; called once sampling begins.
        weights: of the fixes, for range cards whose autocorrelation counts.
        plan: of a memory card.
        warnings: sentences for the user.
    """

    study: Study
    card: Card
    specs: list[Spec]
    labels: list[str]
    scales: Any
    inputs: dict[str, str]
    make: Callable[[], Made]
    weights: Weights | None = None
    plan: Any = None
    warnings: list[str] = field(default_factory=list)

    @cached_property
    def fingerprint(self) -> str:
        """Hash of everything that decides the draws."""
        return hashlib.sha256(json.dumps(self.decisive, sort_keys=True).encode()).hexdigest()

    @property
    def decisive(self) -> dict[str, str]:
        """Everything that a run is only gone on with unchanged: input files and the versions that make the draws."""
        versions = {"bayesrange": bayesrange.__version__, **{name: version(name) for name in ("jax", "numpyro")}}
        chosen = {} if self.study.period is None else {"the period": self.study.period}
        return self.inputs | chosen | {f"the version of {name}": number for name, number in versions.items()}

    def make_tasks(self) -> tuple[list[Task], dict[str, Any]]:
        """The workers' tasks, and facts for run.json."""
        sampling = self.study.settings.sampling
        data, extras, facts = self.make()
        tasks = [
            Task(
                spec, numbers, sampling.chains, sampling.warmup, sampling.draws, sampling.seed,
                sampling.target_accept, self.fingerprint, label, extra,
            )
            for spec, numbers, label, extra in zip(self.specs, data, self.labels, extras, strict=True)
        ]  # fmt: skip
        return tasks, facts

    @cached_property
    def task(self) -> Task:
        """The first task, with its arrays."""
        return self.make_tasks()[0][0]


def prepare(study: Study) -> Prepared:
    """Card, scales and specification of a study, checked against each other.

    Raises:
        StudyError: card and study do not fit together.
    """
    model = study.settings.model
    card = read_card(find_card(model.card, study.path.parent)).with_priors(model.priors, study.path.name)
    inputs = dict(study.hashes)
    own_card = card.file.parent == study.path.parent
    card_name = card.file.name if own_card else f"models/{card.file.name}"  # a study file may be called like a card
    inputs[card_name] = hashlib.sha256(card.file.read_bytes()).hexdigest()
    return _memory(study, card, inputs) if card.kind == "memory" else _range(study, card, inputs)


def _range(study: Study, card: Card, inputs: dict[str, str]) -> Prepared:
    model = study.settings.model
    spec = make_spec(study, card)
    scales: Scales = make_scales(study, list(spec.layers))
    weights = None if model.autocorrelation == "ignored" else autocorrelation_weights(study.fixes)
    weight = np.ones(len(study.fixes)) if weights is None else weights.weight
    warnings = list(study.warnings) + (list(weights.warnings) if weights else [])
    if weights is None:
        warnings.append(
            "Autocorrelation is ignored, as the study file asks: intervals are too narrow where fixes follow one "
            "another quickly."
        )

    def make() -> Made:
        return [make_data(study, card, spec, scales, weight)], [None], {}

    return Prepared(study, card, [spec], [""], scales, inputs, make, weights, warnings=warnings)


def _memory(study: Study, card: Card, inputs: dict[str, str]) -> Prepared:
    from bayesrange.inference._memory_build import make_plan, make_tables, specs_of
    from bayesrange.inference._memory_checks import said_of_unused

    plan = make_plan(study, card)

    def make() -> Made:
        tables = make_tables(plan, study)
        facts = {
            "nodes": tables.nodes, "pilot": {str(count): error for count, error in tables.pilot.items()},
            "columns": list(tables.inputs[0].columns) if plan.spec.remembers else [0, 0],
            "trace_errors": tables.proof.error, "without_nodes": [int((~kept).sum()) for kept in tables.proof.kept],
        }  # fmt: skip
        extras = [{"inputs": inputs, "nodes": tables.nodes} for inputs in tables.inputs]
        return list(tables.data), extras, facts

    labels = [""] if plan.spec.pooled else list(plan.spec.animals)
    specs: list[Spec] = list(specs_of(plan))
    warnings = list(study.warnings) + said_of_unused(study, card) + plan.tracks.warnings
    return Prepared(study, card, specs, labels, plan.scales, inputs, make, plan=plan, warnings=warnings)
