"""What `bayesrange start` writes is a study file that the reader takes, and so is every key in its notes."""

import re
import tomllib

import pytest

from bayesrange._errors import StudyError
from bayesrange._resources import models_folder
from bayesrange._start_files import STUDY, TABLES, write_start
from bayesrange.study._settings_file import read_settings

# A key in a note; whether card and keys go together is looked at later, when a study is made ready to be fitted.
NOTE = re.compile(r"^# (\[[a-z.]+\].*|[a-z_]+ *= .*)$", re.MULTILINE)
TRACKS = ("steps-resources", "steps-home", "memory", "memory-resources")


def test_the_study_file_is_read_as_it_stands(tmp_path):
    write_start(tmp_path / "new")
    settings = read_settings(tmp_path / "new")
    assert settings.model.card == "avoidance" and settings.model.pooling is None and settings.animals is None
    assert {path.name for path in (tmp_path / "new").iterdir()} == {"study.toml", *TABLES}


def test_every_key_in_the_notes_can_be_used(tmp_path):
    text = NOTE.sub(r"\1", STUDY.replace("# hdop", "#  hdop"))  # stands in place of error, with uere_m
    assert "# [" not in text and "\n# interval_h" not in text
    (tmp_path / "study.toml").write_text(text, encoding="utf-8")
    model = read_settings(tmp_path).model
    assert (model.pooling, model.covariates, model.interval_h, model.vary) == (
        "hierarchical",
        ["sex"],
        1.0,
        ["step_length"],
    )
    assert (model.memory_start, model.learning_days, model.encoding_range_m) == ("learned", 30, 150)


def test_the_cards_for_tracks_in_the_notes_are_all_there_are():
    kinds = {
        file.stem: tomllib.loads(file.read_text(encoding="utf-8")).get("kind")
        for file in models_folder().glob("*.toml")
    }
    assert {name for name, kind in kinds.items() if kind == "memory"} == set(TRACKS)
    assert ", ".join(TRACKS) in STUDY


def test_a_folder_that_holds_something_is_left_alone(tmp_path):
    (tmp_path / "fixes.csv").write_text("mine")
    with pytest.raises(StudyError, match="expected a new or empty folder; nothing was written"):
        write_start(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["fixes.csv"] and (
        tmp_path / "fixes.csv"
    ).read_text() == "mine"
