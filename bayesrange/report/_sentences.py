"""The words that stand beside the numbers: what a term is, and what its estimate cannot tell."""

import math
from dataclasses import dataclass

from bayesrange.report._format import listed

MEANINGS = {
    "localising": "constant pull towards the home centre",
    "avoidance": "movement down the gradient of foreign scent",
    "retreat": "extra pull home per unit of foreign scent",
    "resource": "movement up the gradient of the layer",
    "resources": "movement up the gradient of each layer",
    "over_marking": "extra marking per unit of foreign scent",
    "home_x": "home centre, easting",
    "home_y": "home centre, northing",
    "animals": "number of marking animals, which was given as a range",
}

COUNTS = {
    "rows": "rows of fixes read",
    "failed": "failed fixes (no coordinates)",
    "unsorted": "rows not in the order of time",
    "fixes": "fixes used",
    "outside_within_error": "fixes used that lie outside the area, within their error",
}

POOLING = {
    "shared": "All groups share the parameters.",
    "hierarchical": "Groups differ, and their values come from one population (hierarchical).",
}

NOTES = {
    "avoidance": (
        "Space use is divided as if neighbours were avoided; a river, road or poor ground that is not among the layers "
        "does the same. Where avoidance is strong, read it as “at least”: once the ground is divided, more avoidance "
        "hardly changes the ranges."
    ),
    "retreat": (
        "Animals keep nearer to home on the side of their neighbours as if foreign scent sent them back; a river, road "
        "or poor ground that is not among the layers does the same."
    ),
    "resource": (
        "Per sd of the layer over the habitable part of this area, or for a class against the reference class. It is "
        "no step selection coefficient and not comparable with one; between studies only the rows marked “raw”, and "
        "those of classes, compare."
    ),
}

CAUTIONS = (
    "A model is no licence. Capture, tagging, removal, release and work near dens and nests need permits from the "
    "authorities in charge, and local regulation comes before anything on this page.",
    "Animal welfare comes first: more tags or longer tracking to narrow an interval must be worth what it asks of the "
    "animals.",
    "This page and the maps hold exact places: fixes, home centres and ranges. Locations of rare or persecuted animals "
    "can get them killed; think before you pass them on.",
    "The ranges are a long-run pattern under the model fitted. They say nothing about births, deaths, newcomers or "
    "dates, and nothing about ground outside the study area.",
    "Fitting well is no proof of the mechanism. Compare cards, and look at the posterior predictive checks, before you "
    "lean on it.",
)


@dataclass(frozen=True)
class Words:
    """What the parameters of a kind of card are called: whose they are, what each means, what stands beside each."""

    one: str
    meanings: dict[str, str]
    notes: dict[str, str]


RANGE_WORDS = Words("group", MEANINGS, NOTES)

# Below this contraction the posterior sd is more than half of the prior's.
SPARSE_BELOW = 0.75


def prior_share(contraction: float) -> float | None:
    """The posterior sd as a share of the prior sd, √(1 − contraction), where that is much; None elsewhere."""
    if not math.isfinite(contraction) or contraction >= SPARSE_BELOW:
        return None
    return math.sqrt(1 - contraction)


def sparse_note(name: str, share: float) -> str:
    """How much of one parameter's interval is the prior's."""
    if share >= 1:
        return f"Sparse data for {name}: its interval is no narrower than the prior’s; the fixes say nothing about it."
    return (
        f"Sparse data for {name}: its posterior sd is {100 * share:.0f} % of the prior’s, so a good part of the "
        "interval’s width is the prior’s and not the data’s."
    )


def sparse_groups_note(shares: dict[str, float]) -> str:
    """The same for one parameter of several groups."""
    groups = listed([f"{name} ({100 * share:.0f} %)" for name, share in shares.items()])
    return (
        "Sparse data: in brackets the posterior sd as a share of the prior’s, where it is more than half, so that a "
        f"good part of the interval’s width is the prior’s and not the data’s: {groups}."
    )
