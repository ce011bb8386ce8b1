"""Whether the keys of `[fixes]` and `[bearings]` go together."""

from collections.abc import Iterator

from bayesrange.study._settings import FixesSection, StudySettings

_ERROR_PAIRS = (("hdop", "uere_m"), ("error_class", "error_table"))
_ELLIPSE = ("error_major", "error_minor", "error_bearing")


def fix_problems(s: StudySettings) -> Iterator[str]:
    """What is wrong with `[fixes]` and `[bearings]`, each as a sentence that begins with the key."""
    if s.fixes.file is None and s.bearings is None:
        expected = FixesSection.model_fields["file"].description
        yield f"[fixes] file: this is missing; expected {expected} (or a section [bearings])."
    yield from _error_problems(s.fixes)
    yield from _detection_problems(s)
    yield from _bearing_problems(s)


def _error_problems(fixes: FixesSection) -> Iterator[str]:
    given = [key for key in ("hdop", "error_class", "error_major") if getattr(fixes, key) is not None]
    if "error" in fixes.model_fields_set:
        given.insert(0, "error")
    if len(given) > 1:
        yield f"[fixes] {given[1]}: there is {given[0]} too, and each says the location error; take one out."
    for key, other in (*_ERROR_PAIRS, *(tuple(reversed(pair)) for pair in _ERROR_PAIRS)):
        if getattr(fixes, key) is not None and getattr(fixes, other) is None:
            yield f"[fixes] {key}: {other} is missing beside it; {_FOR[other]}"
    ellipse = [key for key in _ELLIPSE if getattr(fixes, key) is not None]
    if 0 < len(ellipse) < len(_ELLIPSE):
        missing = next(key for key in _ELLIPSE if key not in ellipse)
        yield f"[fixes] {ellipse[0]}: {missing} is missing beside it; an ellipse needs {', '.join(_ELLIPSE)}."
    if fixes.error_level is not None and not ellipse:
        yield "[fixes] error_level: it says what ellipses bound, and there is no error_major; take it out."


_FOR = {
    "uere_m": "say the user-equivalent range error in metres, such as uere_m = 4.",
    "hdop": 'name the column with the dilution of precision, such as hdop = "hdop".',
    "error_table": 'name the table of classes (class,error_m), such as error_table = "classes.csv".',
    "error_class": 'name the column with the class, such as error_class = "class".',
}


def _detection_problems(s: StudySettings) -> Iterator[str]:
    """What is wrong with `[fixes] detection`, as a sentence that begins with the key."""
    name = s.fixes.detection
    if name is None:
        return
    if name not in s.layers:
        known = ", ".join(s.layers) or "none"
        yield f'[fixes] detection: there is no layer "{name}"; add a section [layers.{name}] (the study has {known}).'
        return
    for key, what in (("no_go", "no-go ground"), ("classes", "a layer of classes"), ("distance", "a distance")):
        if getattr(s.layers[name], key):
            yield (
                f'[fixes] detection: "{name}" is {what}; expected a raster of the chance that a fix succeeds, above 0 '
                "and at most 1."
            )


def _bearing_problems(s: StudySettings) -> Iterator[str]:
    given = s.bearings
    if given is None:
        return
    if given.north == "magnetic" and given.declination is None:
        yield (
            "[bearings] declination: this is missing for magnetic bearings; expected a number of degrees (east "
            "positive) or a column."
        )
    if given.north != "magnetic" and given.declination is not None:
        yield f'[bearings] declination: it is for magnetic bearings, but north is "{given.north}"; take one out.'
    for key in ("station_x", "station_y"):
        if given.stations is not None and key in given.model_fields_set:
            yield f"[bearings] {key}: the table of stations says where they are; take {key} or stations out."
    if isinstance(given.sd_deg, dict):
        for observer, sd in given.sd_deg.items():
            if not 0 < sd < 90:
                who = ascii(observer)[:60]
                yield f"[bearings] sd_deg: expected degrees above 0 and below 90 for {who}, got {sd:g}."
    tags = {section: part.tag for section, part in (("fixes", s.fixes), ("bearings", given))}
    if s.fixes.file is not None and (tags["fixes"] is None) != (tags["bearings"] is None):
        lacks = next(section for section, tag in tags.items() if tag is None)
        yield f"[{lacks}] tag: the other section names tags, and this one animals; name tags in both, or in none."
    if given.tag is not None and "animal" in given.model_fields_set:
        yield "[bearings] tag: there is animal too; the deployments say which animal it is, so take one out."
    if given.tag is not None and (s.animals is None or s.animals.file is None):
        yield "[bearings] tag: a tag is no animal; name the table of deployments by [animals] file."
