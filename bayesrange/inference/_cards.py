"""Model cards: which drift terms a model has, their priors, and what to say about them.

A card is a TOML file in `models/`; one of the same name in the study's folder goes first, so that a user copies a
card, edits it and names it in the study file.
"""

import tomllib
from dataclasses import dataclass, field, replace
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from bayesrange._errors import StudyError
from bayesrange._resources import models_folder
from bayesrange.inference._priors import Prior, read_prior

TERMS: dict[str, dict[str, tuple[str, ...]]] = {
    "range": {
        "localising": ("localising",),
        "avoidance": ("avoidance",),
        "retreat": ("retreat",),
        "resources": ("resource",),
    },
    "memory": {
        "steps": ("step_shape", "step_scale", "turn_concentration"),
        "resources": ("selection",),
        "home": ("home_pull",),
        "memory": ("reference_strength", "reference_decay", "working_strength", "working_decay", "recall_half"),
    },
}
"""Kind of card → term → the parameters it brings."""

SCENT_TERMS = ("avoidance", "retreat")
SIGNED = ("resource", "selection", "reference_strength", "working_strength", "step_rhythm")
"""Parameters that may be negative; all others are at least 0."""

VARYING = ("localising", "avoidance", "resource")
"""Parameters of range cards that may differ between groups under `pooling = "hierarchical"`."""

COMMON = ("recall_half", "encoding_range", "step_rhythm")
"""Parameters of memory cards that pooled animals share; all others may differ between them."""

SCALED = {
    "localising": "1/home_length", "retreat": "1/home_length", "home_pull": "1/area_length",
    "step_scale": "median_step", "encoding_range": "median_step",
}  # fmt: skip
"""Parameters with a unit of length, and the scale that their priors may be `scaled_by`."""

_KEYS = {"name", "kind", "title", "terms", "solver", "says", "use_when", "not_when", "priors"} | {
    "between_groups", "between_animals", "covariate_effect", "references"
}  # fmt: skip


@dataclass(frozen=True)
class Card:
    """One model: its terms, priors and words."""

    name: str
    title: str
    terms: tuple[str, ...]
    solver: str
    says: str
    use_when: str
    not_when: str
    priors: dict[str, Prior]
    between: dict[str, Prior]
    covariate_effect: Prior
    references: tuple[str, ...]
    file: Path
    kind: str = "range"
    changed: tuple[str, ...] = field(default=())

    @property
    def scent(self) -> bool:
        """Whether a term uses foreign scent."""
        return any(term in SCENT_TERMS for term in self.terms)

    @property
    def parameters(self) -> tuple[str, ...]:
        """Parameters of the card's terms, in the order of the terms."""
        return tuple(name for term in self.terms for name in TERMS[self.kind][term])

    def with_priors(self, overrides: dict[str, dict[str, Any]], where: str) -> "Card":
        """The card with priors of the study file in place of its own.

        Raises:
            StudyError: a parameter that the card does not have, or a prior that cannot be read.
        """
        priors = dict(self.priors)
        for name, table in overrides.items():
            if name not in self.priors:
                near = get_close_matches(name, self.priors, 1)
                hint = f" Did you mean {near[0]}?" if near else ""
                raise StudyError(
                    f"{where}, [model.priors] {name}: the card {self.name} has no such parameter; "
                    f"it has {', '.join(self.priors)}.{hint}"
                )
            priors[name] = read_prior(table, f"{where}, [model.priors] {name}", name not in SIGNED)
        return replace(self, priors=priors, changed=tuple(overrides))


def find_card(name: str, folder: Path | None = None) -> Path:
    """File of a card: in the study's folder first, then among those that come with the package.

    A study file that has a card's name is not taken for one.
    """
    if Path(name).name != name:
        raise StudyError(f"[model] card: expected the name of a card without a folder, got {name!r}.")
    places = [place for place in (folder, models_folder()) if place is not None]
    for place in places:
        file = place / f"{name}.toml"
        if file.is_file() and not _has_key(file, "study"):
            return file
    known = sorted(file.stem for file in models_folder().glob("*.toml"))
    near = get_close_matches(name, known, 1)
    hint = f" Did you mean {near[0]}?" if near else ""
    raise StudyError(
        f"[model] card: no card called {name!r}; there are {', '.join(known)}, or {name}.toml in the study's "
        f"folder.{hint}"
    )


def read_card(file: Path) -> Card:
    """Card from its file.

    Raises:
        StudyError: one sentence that names the file and the key.
    """
    try:
        table = tomllib.loads(file.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise StudyError(f"{file.name}: not a TOML file that can be read ({error}).") from error
    unknown = sorted(set(table) - _KEYS)
    if unknown:
        near = get_close_matches(unknown[0], _KEYS, 1)
        hint = f" Did you mean {near[0]}?" if near else ""
        raise StudyError(f"{file.name}, {unknown[0]}: a model card has no such key.{hint}")
    kind = table.get("kind", "range")
    if kind not in TERMS:
        raise StudyError(f"{file.name}, kind: expected {' or '.join(TERMS)}, got {kind!r}.")
    terms, solver = _terms_and_solver(table, file, kind)
    wanted = [name for term in terms for name in TERMS[kind][term]]
    optional = ["encoding_range", "step_rhythm"] if kind == "memory" else []
    if set(terms) & set(SCENT_TERMS):
        wanted.append("over_marking")
    priors = _read_priors(table.get("priors", {}), file, "priors")
    _only(priors, wanted + optional, file, "priors")
    missing = [name for name in wanted if name not in priors]
    if missing:
        raise StudyError(
            f"{file.name}: no prior for {', '.join(missing)}; write [priors.{missing[0]}] with family and numbers."
        )
    between, other = ("between_groups", "between_animals")[:: 1 if kind == "range" else -1]
    if other in table:
        raise StudyError(f"{file.name}, [{other}]: a card of kind {kind!r} has [{between}] in its place.")
    may_differ = [name for name in wanted if (name in VARYING if kind == "range" else name not in COMMON)]
    words = {key: " ".join(str(table.get(key, "")).split()) for key in ("title", "says", "use_when", "not_when")}
    references = table.get("references", [])
    if not isinstance(references, list) or any(not isinstance(entry, dict) for entry in references):
        raise StudyError(f"{file.name}, references: expected tables [[references]] with a text each.")
    return Card(
        name=file.stem, terms=terms, solver=solver, priors=priors,
        between=_read_between(table.get(between, {}), file, between, may_differ),
        covariate_effect=_read_effect(table, file),
        references=tuple(str(entry.get("text", "")) for entry in references),
        file=file, kind=kind, **words,
    )  # fmt: skip


def _terms_and_solver(table: dict[str, Any], file: Path, kind: str) -> tuple[tuple[str, ...], str]:
    terms, known = table.get("terms"), TERMS[kind]
    if not isinstance(terms, list) or not terms or any(term not in known for term in terms):
        raise StudyError(f"{file.name}, terms: expected a list with some of {', '.join(known)}, got {terms!r}.")
    if len(set(terms)) < len(terms):
        raise StudyError(f"{file.name}, terms: each term once, got {terms!r}.")
    if kind == "memory":
        if "steps" not in terms or "solver" in table:
            raise StudyError(f'{file.name}: a memory card needs the term "steps", and has no solver.')
        return tuple(terms), ""
    solver = table.get("solver", "gibbs")
    if solver not in ("gibbs", "flux") or (solver == "gibbs" and "retreat" in terms):
        raise StudyError(
            f'{file.name}, solver: expected "flux"{"" if "retreat" in terms else ' or "gibbs"'}, got {solver!r}.'
        )
    return tuple(terms), solver


def cards(folder: Path | None = None) -> list[Card]:
    """Every card that comes with the package, then those of the study's folder.

    Args:
        folder: a study's folder; None for the package's own cards only.
    """
    found = [read_card(file) for file in sorted(models_folder().glob("*.toml"), key=lambda file: file.stem)]
    if folder is not None:
        found += [read_card(file) for file in sorted(folder.glob("*.toml")) if _has_key(file, "terms")]
    return found


def _has_key(file: Path, key: str) -> bool:
    try:
        return key in tomllib.loads(file.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError):
        return False


def _read_priors(table: Any, file: Path, section: str, positive: bool = False) -> dict[str, Prior]:
    if not isinstance(table, dict) or any(not isinstance(value, dict) for value in table.values()):
        raise StudyError(f"{file.name}, [{section}]: expected one table a parameter, such as [{section}.localising].")
    priors = {}
    for name, value in table.items():
        where = f"{file.name}, [{section}.{name}]"
        priors[name] = read_prior(value, where, positive or name not in SIGNED)
        scaled_by, allowed = priors[name].scaled_by, SCALED.get(name) if section == "priors" else None
        if scaled_by and scaled_by != allowed:
            hint = f"it may be {allowed!r} here" if allowed else "take it out here"
            raise StudyError(f"{where}: `scaled_by` is {scaled_by!r}, but {hint}.")
    return priors


def _only(priors: dict[str, Prior], wanted: list[str], file: Path, section: str) -> None:
    for name in priors:
        if name not in wanted:
            raise StudyError(
                f"{file.name}, [{section}.{name}]: no term of this card has such a parameter; expected "
                f"{', '.join(wanted) or 'none'}."
            )


def _read_between(table: Any, file: Path, section: str, wanted: list[str]) -> dict[str, Prior]:
    """Priors of the spread between groups or animals: half-normal, on the unconstrained scale."""
    between = _read_priors(table, file, section, positive=True)
    _only(between, wanted, file, section)
    for name, prior in between.items():
        if prior.family != "half-normal":
            raise StudyError(
                f"{file.name}, [{section}.{name}]: the spread {section.replace('_', ' ')} takes a half-normal, got "
                f"{prior.family}."
            )
    return between


def _read_effect(table: dict[str, Any], file: Path) -> Prior:
    """Prior of a covariate's coefficient: normal around 0."""
    where = f"{file.name}, [covariate_effect]"
    given = table.get("covariate_effect", {"family": "normal", "mean": 0.0, "sd": 0.5})
    if not isinstance(given, dict):
        raise StudyError(f"{where}: expected a table with family, mean and sd, got {given!r}.")
    effect = read_prior(given, where, False)
    if effect.family != "normal" or effect.numbers[0] != 0 or effect.scaled_by:
        raise StudyError(f"{where}: expected a normal with mean 0, not scaled, got {effect.in_words()}.")
    return effect
