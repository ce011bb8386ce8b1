"""The words of a memory report: what a term is, and what its estimate cannot tell."""

from typing import Any

from bayesrange.report._format import listed, number, whole
from bayesrange.report._read_memory import NEW, MemoryContents
from bayesrange.report._sentences import Words

MEANINGS = {
    "step_shape": "shape of the gamma law of step lengths",
    "step_scale": "scale of the gamma law of step lengths; shape × scale is the mean step",
    "turn_concentration": "how straight the animal goes on: 0 any direction, larger straighter (von Mises)",
    "step_rhythm": "step length by the hour of the sun, on the log scale",
    "selection": "weight of the layer in the choice of the next place",
    "reference_strength": "pull of places remembered for long; below 0 they put the animal off",
    "reference_decay": "time after which 37 % (1/e) of a visit is left in the long memory",
    "working_strength": "how far recent visits put the animal off; below 0 they draw it back",
    "working_decay": "time after which 37 % (1/e) of a visit is left in the short memory",
    "recall_half": "remembered time at a place at which recall is half",
    "encoding_range": "distance over which a visit is remembered",
    "home_pull": "pull towards one centre",
    "home_x": "that centre, easting",
    "home_y": "that centre, northing",
}

TERMS = {
    "steps": "step lengths from a gamma law, turns from a von Mises law",
    "resources": "the next place is chosen by the layers there",
    "memory": "a long (reference) memory draws the animal back to places it knows, a short (working) one puts it off",
    "home": "a pull towards one estimated centre",
}

POOLING = {
    "individual": "Each animal is fitted alone; nothing is shared, and nothing is said of animals not tracked.",
    "hierarchical": "Animals differ, and their values come from one population (hierarchical).",
}

CAUTIONS = (
    "A model is no licence. Capture, tagging, release and work near dens and nests need permits from the authorities "
    "in charge, and local regulation comes before anything on this page.",
    "Animals released under licence stay under its terms: how long they are followed, when help is due, and who may "
    "know where they are stands there, not here.",
    "Animal welfare comes first: more tags or longer tracking to narrow an interval must be worth what it asks of the "
    "animals.",
    "This page and the maps hold exact places: tracks, release points and the places animals return to. Locations of "
    "rare or persecuted animals can get them killed; think before you pass them on.",
    "Remembered places show what the model makes of the tracks. They say nothing about ground outside the study area, "
    "other seasons, births, deaths or newcomers.",
    "Fitting well is no proof of the mechanism. Compare cards, with steps-home among them, and look at the posterior "
    "predictive checks, before you lean on it.",
)

UNMAPPED = "A place preferred for a reason not mapped looks the same as a remembered one."


def memory_words(run: MemoryContents) -> Words:
    """Meanings and standing sentences for this run's parameters."""
    interval = hours(float(run.numerics["interval_h"]))
    notes = {
        "selection": (
            "Per sd of the layer over this area, or for a class against the reference class; holds for steps of this "
            f"interval ({interval}). It is not comparable with the resource response of a range card; between studies "
            "only the rows marked “raw”, and those of classes, compare, and only at the same interval."
        ),
        "reference_strength": UNMAPPED,
        "working_strength": (
            "Ground that a visit uses up, and that recovers, looks the same as ground avoided because of the visit."
        ),
    }
    return Words("animal", MEANINGS, notes)


def question(run: MemoryContents) -> str:
    """What the card asks, in words."""
    chosen = "selection" in run.posterior
    if run.has_memory:
        against = ", as against the resources themselves," if chosen else ""
        return f"How strongly does memory{against} hold an animal to places it knows, and over what time does it fade?"
    if "home_pull" in run.posterior:
        what = "what ground does an animal choose at each step, and " if chosen else ""
        return f"Without memory: {what}how strongly is it held to one centre?"
    return "Without memory: what ground does an animal choose at each step?"


def counted_steps(run: MemoryContents) -> str:
    """How many fixes give how many steps, on the first screen."""
    found = list(run.numerics["steps"].values())
    fixes, steps = (sum(row.get(key, 0) for row in found) for key in ("fixes", "steps"))
    animals = "1 animal" if len(found) == 1 else f"{len(found)} animals"
    return f"{whole(fixes)} fixes of {animals} give {whole(steps)} steps that count."


def hours(value: float) -> str:
    """A time in hours, from 72 h up in days: "6 h", "21 days"."""
    return f"{value:g} h" if value < 72 else f"{number(value / 24, value / 24)} days"


def beyond_one(upper: float, record_h: float) -> str:
    """A decay time whose interval passes the record."""
    return (
        f"The interval reaches {hours(upper)}, and the longest record is {hours(record_h)}: its upper end is the prior "
        "speaking."
    )


def beyond_several(names: list[str], animals: list[str]) -> str:
    """The same for several: animals against their own record, a new animal and the population against the longest."""
    others = [name for name in names if name not in animals]
    every = len(animals) > 1 and len(names) - len(others) == len(animals)
    named = ["every animal"] if every else [name for name in names if name in animals]
    said = [f"a {name}" if name == NEW else name for name in named + others]
    return f"The interval passes the record for {listed(said)}: its upper end is the prior speaking."


def together_sentence(pairs: list[list[Any]], pooled: bool, weighted: bool) -> str:
    """Which animals travel together, with the share of simultaneous fixes, and what was done about it."""
    named = listed([_pair(*pair) for pair in pairs])
    if not pooled:
        how = "Each is fitted alone, so that neither widens nor narrows the other’s intervals."
    elif weighted:
        how = "They count together in population intervals: each weighs less than one animal (weights above)."
    else:
        how = "Each still counts as one animal, so that population intervals may be too narrow."
    return f"Animals that travelled together: {named}. {how}"


def _pair(first: str, second: str, share: float | None = None) -> str:
    near = f" ({100 * float(share):.0f} % of simultaneous fixes)" if share is not None else ""
    return f"{first} with {second}{near}"
