"""Reads a study file into `StudySettings`, and turns every mistake in it into one sentence.

Keys of the design that this version does not use yet are known: at their default they are fine, given otherwise
they are answered with "not built yet", so that nothing a user asked for is passed over.
"""

import difflib
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple, get_args

from pydantic import BaseModel, ValidationError

from bayesrange._errors import StudyError
from bayesrange.study._fix_keys import fix_problems
from bayesrange.study._layer_keys import layer_problems, name_problems
from bayesrange.study._period_keys import animal_problems, period_problems
from bayesrange.study._settings import LayerSection, PeriodSection, Section, StudySettings
from bayesrange.study._texts import refuse_odd_texts, shown

NOT_GIVEN = "(not given)"
"""Area and card of a study that is only looked at, where the study file names none."""

_NOT_NEEDED: dict[str, Any] = {
    "groups": None,
    "layers": {},
    "periods": {},
    "model": {"card": NOT_GIVEN},
    "sampling": {},
}
_NAMED_SECTIONS = {"layers": LayerSection, "periods": PeriodSection}


def locate_study(path: str | Path) -> Path:
    """The study file itself, whether the user named it or its folder."""
    path = Path(path)
    if path.is_dir():
        inside = path / "study.toml"
        if not inside.is_file():
            others = sorted(p.name for p in path.glob("*.toml"))
            hint = f"; it holds {', '.join(others)}: name the one you mean" if others else ""
            raise StudyError(f"{path}: this folder has no study.toml{hint}.")
        return inside
    if not path.is_file():
        raise StudyError(f"{path}: there is no such study file or folder.")
    return path


def read_settings(path: str | Path) -> StudySettings:
    """Read and check the study file; the data files it names are not opened.

    Raises:
        StudyError: not TOML, an unknown key, a wrong value, or a key that is not built yet.
    """
    path = locate_study(path)
    raw = _parse(path)
    if isinstance(raw.get("study"), dict):
        raw["study"].setdefault("name", path.resolve().parent.name)
    try:
        settings = StudySettings.model_validate(raw)
    except ValidationError as error:
        raise StudyError(_sentence(path.name, error)) from None
    for problem in _contradictions(settings):
        raise StudyError(f"{path.name}, {problem}")
    later = list(_not_built(settings))
    if later:
        verb = "are" if len(later) > 1 else "is"
        raise StudyError(f"{path.name}: {'; '.join(later)} {verb} not built yet; take it out to go on without it.")
    return settings


def read_settings_to_screen(path: str | Path) -> tuple[StudySettings, list[str]]:
    """Read the study file as far as a look at the fixes needs it, and what has to be said of the rest.

    Area, cell size and model may be left out. Groups, layers, periods, model and sampling that are wrong are left out
    and said; a fit would refuse them.

    Raises:
        StudyError: what `read_settings` says of the sections on fixes and animals; exact places must not be shown.
    """
    path = locate_study(path)
    raw, said = _parse(path), []
    study = raw.setdefault("study", {})
    if isinstance(study, dict):
        for key, value in {"name": path.resolve().parent.name, "cell_m": "auto", "area": NOT_GIVEN}.items():
            study.setdefault(key, value)
    raw.setdefault("model", {}).setdefault("card", NOT_GIVEN)
    while True:
        try:
            settings = StudySettings.model_validate(raw)
            break
        except ValidationError as error:
            wrong = {str(item["loc"][0]) for item in error.errors()}
            if not wrong <= set(_NOT_NEEDED):
                raise StudyError(_sentence(path.name, error)) from None
            said.append(f"{_sentence(path.name, error)[:-1]}: left out of this look; a fit would refuse it.")
            raw |= {name: _NOT_NEEDED[name] for name in wrong}
    for problem in _contradictions(settings):
        of_fixes = problem.startswith(("[fixes", "[animals", "[bearings"))
        if of_fixes and not problem.startswith("[fixes] detection"):  # which is about a layer
            raise StudyError(f"{path.name}, {problem}")
        said.append(f"{path.name}, {problem}")
    if settings.study.sensitive != "no":
        raise StudyError(
            f'{path.name}: [study] sensitive = "{settings.study.sensitive}", and a look at the fixes shows exact '
            'places, coarsened ones being not built yet: set "no" if they may be shown on this machine.'
        )
    return settings, said


def nearest(word: str, known: list[str]) -> str | None:
    """The known word that looks most like `word`, upper and lower case alike."""
    likeness = {k: difflib.SequenceMatcher(None, word.casefold(), k.casefold()).ratio() for k in known}
    best = max(likeness, key=likeness.__getitem__, default=None)
    return best if best is not None and likeness[best] >= 0.6 else None


def _parse(path: Path) -> dict[str, Any]:
    try:
        content = tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except UnicodeDecodeError:
        raise StudyError(f"{path.name}: the file is not UTF-8 text; save it as UTF-8.") from None
    except tomllib.TOMLDecodeError as error:
        raise StudyError(f"{path.name}: this is not valid TOML: {shown(str(error), 200)}.") from None
    except RecursionError:
        raise StudyError(f"{path.name}: brackets are nested too deep; expected sections with plain keys.") from None
    refuse_odd_texts(content, path.name)
    return content


class _Fields(NamedTuple):
    """What may stand at one place of the file: a section's keys, and how a value there goes on after "expected"."""

    section: type[BaseModel]
    expected: str | None


def _sentence(file: str, error: ValidationError) -> str:
    """One sentence for all mistakes, each key once (a union reports once a member)."""
    parts: dict[str, str] = {}
    for item in error.errors():
        where, fields = _place(item["loc"])
        if where not in parts:
            parts[where] = f"{where}: {_complaint(item, fields)}"
    return f"{file}, {'; '.join(parts.values())}.".replace("?.", "?")


def _complaint(item: Any, fields: _Fields) -> str:
    if item["type"] == "extra_forbidden":
        return _unknown(str(item["loc"][-1]), fields)
    expected = fields.expected or item["msg"]
    if item["type"] == "missing":
        return f"this is missing; expected {expected}"
    return f"expected {expected}, got {_as_toml(item['input'])}"


def _place(loc: tuple[int | str, ...]) -> tuple[str, _Fields]:
    """Name a pydantic location as the study file writes it: `[layers.water] file`."""
    section: type[BaseModel] = StudySettings
    path: list[str] = []
    words = [str(word) for word in loc]
    while words and (inner := _section_at(section, path, words[0])) is not None:
        name = words.pop(0)
        path.append(name)
        section = inner
        if name in _NAMED_SECTIONS and len(path) == 1:
            if not words:
                break
            path.append(words.pop(0))
    table = f"[{'.'.join(path)}]" if path else ""
    if not words:
        return table, _Fields(section, _described(StudySettings, path[0]) if path else None)
    key = words[0]
    return f"{table} {key}".strip(), _Fields(section, _described(section, key))


def _section_at(section: type[BaseModel], path: list[str], word: str) -> type[BaseModel] | None:
    if not path and word in _NAMED_SECTIONS:
        return _NAMED_SECTIONS[word]
    field = section.model_fields.get(word)
    if field is None:
        return None
    kinds = [field.annotation, *get_args(field.annotation)]
    return next((k for k in kinds if isinstance(k, type) and issubclass(k, Section)), None)


def _keys(section: type[BaseModel]) -> dict[str, str | None]:
    return {field.alias or name: field.description for name, field in section.model_fields.items()}


def _described(section: type[BaseModel], key: str) -> str | None:
    return _keys(section).get(key)


def _unknown(key: str, fields: _Fields) -> str:
    known = list(_keys(fields.section))
    close = nearest(key, known)
    if close is not None:
        return f'there is no such key; did you mean "{close}"?'
    for name in StudySettings.model_fields:
        home = _section_at(StudySettings, [], name)
        if home is not None and key in _keys(home):
            return f"there is no such key here; it belongs in [{name}]"
    return f"there is no such key; known are {', '.join(known)}"


def _as_toml(value: Any) -> str:
    if isinstance(value, str):
        return f'"{value}"'
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return f"[{', '.join(_as_toml(v) for v in value)}]"
    return str(value)


def _contradictions(s: StudySettings) -> Iterator[str]:
    """Values that are each well-formed but do not go together."""
    yield from fix_problems(s)
    for name, layer in s.layers.items():
        yield from layer_problems(name, layer)
    yield from name_problems(list(s.layers))
    yield from period_problems(s)
    yield from animal_problems(s)
    for name in s.model.layers:
        if name not in s.layers:
            close = nearest(name, list(s.layers))
            hint = f'did you mean "{close}"?' if close else f"add a section [layers.{name}]."
            yield f'[model] layers: there is no layer "{name}"; {hint}'
        elif s.layers[name].no_go:
            yield f'[model] layers: "{name}" is a no-go layer, which cannot also be a resource; list another layer.'
    for key, names in (("layers", s.model.layers), ("covariates", s.model.covariates)):
        twice = sorted({n for n in names if names.count(n) > 1})
        if twice:
            yield f'[model] {key}: "{twice[0]}" is listed twice; list it once.'
    if s.model.covariates and s.groups is None and (s.animals is None or s.animals.file is None):
        yield (
            "[model] covariates: they are columns of the groups table, or of the animals table for cards of single "
            "animals, and there is neither a section [groups] nor [animals]; add it."
        )
    starts_in_table = s.animals is not None and s.animals.file is not None  # a column memory_start, perhaps
    if s.model.learning_days is not None and s.model.memory_start != "learned" and not starts_in_table:
        yield '[model] learning_days: it has no use unless memory_start = "learned"; add that, or take it out.'


def _not_built(s: StudySettings) -> Iterator[str]:
    """Keys of the design whose given value this version cannot honour."""
    model = s.model
    given = {
        '[study] sensitive = "high"': s.study.sensitive == "high",
        "[model] smallest_effect": model.smallest_effect is not None,
    }
    return (what for what, is_given in given.items() if is_given)
