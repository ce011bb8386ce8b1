"""Prior families that cards and study files may name."""

from dataclasses import dataclass
from typing import Any

from bayesrange._errors import StudyError

FAMILIES: dict[str, tuple[str, ...]] = {
    "normal": ("mean", "sd"),
    "half-normal": ("scale",),
    "log-normal": ("median", "spread"),
    "exponential": ("mean",),
    "uniform": ("low", "high"),
}
"""Family → its numbers. `spread` of the log-normal is the sd of the logarithm; `scale` of the half-normal the sd of
the normal that is folded."""

POSITIVE = ("half-normal", "log-normal", "exponential")
SCALINGS = ("1/home_length", "1/area_length", "median_step")
_ABOVE_ZERO = {"sd", "scale", "median", "spread"}
_NOTES = {"reason", "unit", "scaled_by"}


@dataclass(frozen=True)
class Prior:
    """A prior in the units of its card, or in units of a study's scale where `scaled_by` says so.

    Attributes:
        family: a key of `FAMILIES`.
        numbers: its numbers, in the order of `FAMILIES`.
        scaled_by: "" or the scale that the numbers are multiples of, a member of `SCALINGS`.
        reason: why this prior.
    """

    family: str
    numbers: tuple[float, ...]
    scaled_by: str = ""
    reason: str = ""

    def scaled(self, home_length_km: float) -> "Prior":
        """The same prior in the units of the numerics; spreads of logarithms have no unit and stay."""
        return self.times(1 / home_length_km) if self.scaled_by else self

    def times(self, factor: float) -> "Prior":
        """The prior of the same parameter in another unit; spreads of logarithms have no unit and stay."""
        numbers = (n if k == "spread" else n * factor for k, n in zip(FAMILIES[self.family], self.numbers, strict=True))
        return Prior(self.family, tuple(numbers), "", self.reason)

    def in_words(self, unit: str = "") -> str:
        """One line for tables and the report, such as `half-normal (scale 1)`."""
        numbers = ", ".join(f"{k} {n:.4g}" for k, n in zip(FAMILIES[self.family], self.numbers, strict=True))
        return f"{self.family} ({numbers}{' ' + unit if unit and unit != '1' else ''})"


def read_prior(table: dict[str, Any], where: str, positive: bool) -> Prior:
    """Prior from a TOML table.

    Args:
        table: `family`, its numbers, and optionally `reason`, `unit`, `scaled_by`.
        where: file and key, for the error sentence.
        positive: the parameter cannot be below 0.

    Raises:
        StudyError: one sentence that names `where`.
    """
    family = table.get("family")
    if family not in FAMILIES:
        raise StudyError(f"{where}: `family` must be one of {', '.join(FAMILIES)}, got {family!r}.")
    names = FAMILIES[family]
    unknown = set(table) - set(names) - _NOTES - {"family"}
    if unknown:
        raise StudyError(f"{where}: {family} takes {' and '.join(names)}, not {', '.join(sorted(unknown))}.")
    numbers = tuple(_number(table, name, where) for name in names)
    if family == "uniform" and not numbers[0] < numbers[1]:
        raise StudyError(f"{where}: `low` must be below `high`, got {numbers[0]} and {numbers[1]}.")
    can_be_negative = family == "normal" or (family == "uniform" and numbers[0] < 0)
    if positive and can_be_negative:
        raise StudyError(f"{where}: this parameter cannot be below 0; use {', '.join(POSITIVE)} or a uniform from 0.")
    scaled_by = table.get("scaled_by", "")
    if scaled_by not in ("", *SCALINGS):
        raise StudyError(f"{where}: `scaled_by` must be {' or '.join(SCALINGS)}, got {scaled_by!r}.")
    return Prior(family, numbers, scaled_by, " ".join(str(table.get("reason", "")).split()))


def _number(table: dict[str, Any], name: str, where: str) -> float:
    value = table.get(name)
    if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) < float("inf"):
        raise StudyError(f"{where}: `{name}` must be a number, got {value!r}.")
    if (name in _ABOVE_ZERO or (name == "mean" and table["family"] == "exponential")) and value <= 0:
        raise StudyError(f"{where}: `{name}` must be above 0, got {value}.")
    return float(value)
