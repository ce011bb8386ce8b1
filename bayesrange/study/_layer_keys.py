"""Whether the keys of a layer's section go together."""

from collections.abc import Iterator

from bayesrange.study._settings import LayerSection


def layer_problems(name: str, layer: LayerSection) -> Iterator[str]:
    """What is wrong with the section `[layers.NAME]`, each as a sentence that begins with the key."""
    where = f"[layers.{name}]"
    sources = {"file": layer.file, "files": layer.files, "distance": layer.distance}
    given = [key for key, value in sources.items() if value is not None]
    if not given:
        yield f"{where} file: this is missing; expected the name of a file in quotes."
    if len(given) > 1:
        yield f"{where} {given[1]}: there is {given[0]} too; a layer comes from one or the other, so take one out."
    if layer.distance is not None:
        for key in ("band", "classes", "reference", "fill", "fill_within_m", "no_go"):
            if getattr(layer, key) not in (None, False):
                yield f"{where} {key}: a distance to features has no use for it; take it out."
    else:
        for key in ("table", "cap_m"):
            if getattr(layer, key) is not None:
                yield f"{where} {key}: this goes with distance, and the layer is from a raster; take it out."
    if layer.no_go:
        for key in ("classes", "fill", "fill_within_m"):
            if getattr(layer, key) is not None:
                yield f"{where} {key}: no-go ground has no use for it; take it out."
    if layer.fill is not None and layer.fill_within_m is None:
        yield f'{where} fill_within_m: fill = "nearest" needs it; expected a number of metres above 0.'
    if layer.fill is None and layer.fill_within_m is not None:
        yield f'{where} fill: fill_within_m needs it; expected "nearest".'
    yield from class_problems(name, layer.classes, layer.reference)


def name_problems(names: list[str]) -> Iterator[str]:
    """What is wrong with the names of layers: a blank one, or two that differ only by upper case or blanks."""
    seen: dict[str, str] = {}
    for name in names:
        plain = "".join(name.casefold().split())
        if not plain:
            yield "[layers]: the name of a layer is blank; give it one, as in [layers.earthworms]."
        elif plain in seen:
            yield (
                f'[layers]: the names "{seen[plain]}" and "{name}" differ only by upper case or blanks; give the '
                "layers names that differ."
            )
        seen[plain] = name


def class_names(classes: dict[str, str]) -> list[str]:
    """The classes' names in the order of the study file; several codes may share one."""
    return list(dict.fromkeys(classes.values()))


def class_problems(name: str, classes: dict[str, str] | None, reference: str | None) -> Iterator[str]:
    """What is wrong with the keys `classes` and `reference` of a layer."""
    where = f"[layers.{name}]"
    if classes is None:
        if reference is not None:
            yield f'{where} reference: this needs classes, such as classes = {{ 1 = "wood", 2 = "grass" }}.'
        return
    for code in classes:
        if not (code.isascii() and code.removeprefix("-").isdecimal()):
            yield (
                f'{where} classes: "{code}" is no whole number; expected the numbers in the raster and their names, '
                'such as { 1 = "wood", 2 = "grass" }.'
            )
            return
    if len({int(code) for code in classes}) < len(classes):
        yield f"{where} classes: a number stands twice; give each number one name."
    names = class_names(classes)
    plain = {"".join(own.casefold().split()) for own in names}
    if len(plain) < len(names) or "" in plain:
        yield f"{where} classes: a name is blank, or two differ only by upper case or blanks; write them alike."
    elif len(names) < 2:
        yield f"{where} classes: expected at least two classes, got {len(names)}."
    elif reference is None:
        yield f'{where} reference: this is missing; expected one of the classes, such as "{names[0]}".'
    elif reference not in names:
        yield f'{where} reference: there is no class "{reference}"; expected one of {", ".join(names)}.'
