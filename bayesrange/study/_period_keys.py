"""Whether the keys of periods, deployments and times go together."""

import re
from collections.abc import Iterator

from bayesrange.study._settings import StudySettings


def period_problems(s: StudySettings) -> Iterator[str]:
    """What is wrong with `[periods]` and the layers' files by period, each as a sentence that begins with the key."""
    for name in s.periods:
        if not re.fullmatch(r"[\w-]{1,40}", name):
            yield (
                f"[periods]: the name {ascii(name)[:60]} would not do for a folder; expected letters, digits, - and _."
            )
        if name.casefold() == "differences":
            yield f"[periods]: the name {name} is that of the folder with what lies between periods; choose another."
    plain = [name.casefold() for name in s.periods]
    if len(set(plain)) < len(plain):
        yield "[periods]: two names differ only by upper case; give them names that differ."
    for name, layer in s.layers.items():
        if layer.files is None:
            continue
        if not s.periods:
            yield f"[layers.{name}] files: there is no section [periods]; add it, or name one file."
        for period in s.periods:
            if period not in layer.files:
                yield f'[layers.{name}] files: there is none for the period "{period}"; expected one a period.'
        for period in layer.files:
            if period not in s.periods:
                known = ", ".join(s.periods)
                yield f"[layers.{name}] files: there is no period {ascii(period)[:60]}; known are {known}."


def animal_problems(s: StudySettings) -> Iterator[str]:
    """What is wrong with `[animals]`, `[fixes] tag` and `[fixes] time`."""
    if isinstance(s.fixes.time, list) and len(s.fixes.time) != 2:
        yield '[fixes] time: expected one column or two, the day and the clock, such as ["date", "clock"].'
    file = s.animals.file if s.animals is not None else None
    if s.fixes.tag is not None and file is None:
        yield "[fixes] tag: a tag is no animal; name the table of deployments by [animals] file."
    if s.fixes.tag is not None and "animal" in s.fixes.model_fields_set:
        yield "[fixes] tag: there is animal too; the deployments say which animal it is, so take one out."
    if s.animals is not None and s.animals.settle_in_days and file is None:
        yield "[animals] settle_in_days: it counts from a deployment's beginning; name their table by [animals] file."
