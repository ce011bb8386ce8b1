"""The invented animals: what is true of the population, and what of each of the eight wildcats.

Names and units are those of tables/parameters.csv. A cat's own value is drawn around the population's on the scale
where spreads are stated. That is the logarithm for what cannot be below 0; of the two decay times, the logarithm of
their excesses, log(τ_W − half an interval) and log(τ_R − τ_W). Strengths and selection are drawn as they are. The
effects are independent of each other.
"""

from dataclasses import dataclass

import numpy as np

ENCODING_RANGE_M = 150.0
LEAST_DECAY_H = 0.5  # half an interval: what working memory outlasts
SIGNED = ("selection", "reference_strength", "working_strength")  # may be below 0


@dataclass(frozen=True)
class Cat:
    """What moves one animal.

    Attributes:
        step_shape: of the gamma law of step lengths.
        step_scale: of the same [m].
        turn_concentration: of the von Mises law of turns.
        selection: response to cover [per sd].
        reference_strength: attraction of remembered places, κ_R.
        reference_decay: τ_R [h].
        working_strength: aversion from places just visited, κ_W.
        working_decay: τ_W [h].
        recall_half: m₀, remembered presence at which recall is half [h].
    """

    step_shape: float = 1.4
    step_scale: float = 90.0
    turn_concentration: float = 0.35
    selection: float = 0.5
    reference_strength: float = 2.5
    reference_decay: float = 700.0
    working_strength: float = 1.2
    working_decay: float = 8.0
    recall_half: float = 6.0


POPULATION = Cat()  # the median female
MALE = {"step_scale": np.log(1.3)}  # added for males, to the logarithm: their steps are 1.3 times as long
SPREAD = {  # sd between cats of one sex, on the scale of the draw; 0 for what is not named
    "step_shape": 0.08,
    "step_scale": 0.1,
    "turn_concentration": 0.2,
    "selection": 0.15,
    "reference_strength": 0.5,
    "reference_decay": 0.2,
    "working_strength": 0.3,
    "working_decay": 0.2,
}
COMMON = ("recall_half", "encoding_range")  # the same for all
UNIT = {
    "step_shape": "1",
    "step_scale": "m",
    "turn_concentration": "1",
    "selection[cover]": "per sd",
    "selection[voles]": "per sd",
    "reference_strength": "1",
    "reference_decay": "h",
    "working_strength": "1",
    "working_decay": "h",
    "recall_half": "h",
    "encoding_range": "m",
}


@dataclass(frozen=True)
class Release:
    """One animal as it was let go.

    Attributes:
        animal: its name.
        sex: female or male.
        batch: which release.
        time: of the release and of the first fix, ISO 8601.
        box_m: release box, metres east and north of the place's origin.
        fixes: scheduled fixes.
        fate: what is known at the end of the record.
    """

    animal: str
    sex: str
    batch: str
    time: str
    box_m: tuple[float, float]
    fixes: int
    fate: str = "alive, collar dropped off"


FIRST, SECOND = "2032-04-06T18:00:00+01:00", "2032-05-11T18:00:00+01:00"
RELEASES = (
    Release("Bryony", "female", "spring-1", FIRST, (8150, 8850), 1500),
    Release("Fescue", "female", "spring-1", FIRST, (9850, 7950), 1500),
    Release("Burdock", "male", "spring-1", FIRST, (10200, 9450), 1500),
    Release("Teasel", "male", "spring-1", FIRST, (8000, 7650), 1284, "unknown, collar fell silent"),
    Release("Sorrel", "female", "spring-2", SECOND, (8850, 9750), 1500),
    Release("Yarrow", "female", "spring-2", SECOND, (8950, 7350), 1500),
    Release("Dock", "male", "spring-2", SECOND, (10600, 8550), 1500),
    Release("Cleaver", "male", "spring-2", SECOND, (7400, 8400), 1500),
)


def draw_cats(rng: np.random.Generator, releases: tuple[Release, ...] = RELEASES) -> list[Cat]:
    """Draw what moves each of the released animals."""
    return [_draw_cat(rng, release.sex == "male") for release in releases]


def _draw_cat(rng: np.random.Generator, male: bool) -> Cat:
    own = {}
    for name, value in _excesses(POPULATION).items():
        effect = SPREAD.get(name, 0.0) * rng.standard_normal() + (MALE.get(name, 0.0) if male else 0.0)
        own[name] = float(value + effect if name in SIGNED else value * np.exp(effect))
    own["working_decay"] += LEAST_DECAY_H
    own["reference_decay"] += own["working_decay"]
    return Cat(**own)


def _excesses(cat: Cat) -> dict[str, float]:
    """A cat's parameters, each decay time as what it is beyond the one that it outlasts [h]."""
    working, reference = cat.working_decay - LEAST_DECAY_H, cat.reference_decay - cat.working_decay
    return vars(cat) | {"working_decay": working, "reference_decay": reference}
