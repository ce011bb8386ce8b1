"""Wrong input: status 2, one sentence on standard error, nothing written."""

import subprocess
import sys

import pytest
from inference._tiny_study import fixes_table, groups_table, write_study

from bayesrange import commands


def no_groups_with_two():
    return groups_table().iloc[:2]


WRONG = {
    "unknown key": ({"model": {"avoidence": 1}}, "study.toml"),
    "unknown card": ({"model": {"card": "avoidence"}}, "no card called 'avoidence'"),
    "unknown layer": ({"model": {"layers": ["worm"]}}, "worm"),
    "card with a folder": ({"model": {"card": "../x"}}, "without a folder"),
    "prior of another card": (
        {"model": {"priors": {"retreat": {"family": "half-normal", "scale": 1.0}}}},
        "no such parameter",
    ),
    "prior that can be negative": (
        {"model": {"priors": {"avoidance": {"family": "normal", "mean": 0.0, "sd": 1.0}}}},
        "cannot be below 0",
    ),
    "hierarchical with two": (
        {"model": {"pooling": "hierarchical"}, "groups": no_groups_with_two()},
        "at least 3 groups",
    ),
    "one group": ({"groups": groups_table().iloc[:1], "fixes": fixes_table().iloc[:100]}, "about neighbours"),
    "no chains": ({"sampling": {"chains": 0}}, "chains"),
    "sensitive": ({"study": {"sensitive": "high"}}, "not built yet"),
    "covariate without hierarchy": ({"model": {"covariates": ["size"]}}, "hierarchical"),
    "home outside": ({"groups": groups_table().assign(x=0.0)}, "outside the study area"),
}


@pytest.mark.parametrize("wrong", WRONG)
def test_wrong_study_is_answered_by_one_sentence_and_nothing_is_written(tmp_path, capsys, monkeypatch, wrong):
    changes, words = WRONG[wrong]
    study = write_study(tmp_path / "study", **changes)
    monkeypatch.chdir(tmp_path)
    before = sorted(tmp_path.rglob("*"))
    assert commands.main(["fit", str(study)]) == 2
    said = capsys.readouterr()
    assert said.out == "" and said.err.startswith("bayesrange: ") and words in said.err
    assert said.err.count("\n") == 1
    assert sorted(tmp_path.rglob("*")) == before


def test_wrong_study_in_a_process_of_its_own(bayesrange, tmp_path):
    answer = bayesrange("fit", write_study(tmp_path, model={"avoidence": 1}))
    assert (answer.returncode, answer.stdout) == (2, "")
    assert answer.stderr.startswith("bayesrange: study.toml") and answer.stderr.count("\n") == 1


@pytest.mark.parametrize(
    ("words", "sentence"),
    [
        (["fit"], "STUDY"),
        (["fit", "nowhere.toml"], "nowhere.toml"),
        (["fit", ".", "--processes", "0"], "--processes"),
        (["fti", "."], "fti"),
        (["report", "nowhere"], "nowhere: no finished run here"),
        (["cards", "avoidence"], "Did you mean avoidance"),
    ],
)
def test_wrong_words_are_answered_with_status_2(words, sentence, tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert commands.main(words) == 2
    assert sentence in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


def test_folder_of_other_things_is_refused(tmp_path, capsys):
    study = write_study(tmp_path / "study")
    (tmp_path / "thesis").mkdir()
    (tmp_path / "thesis" / "chapter.txt").write_text("x")
    assert commands.main(["fit", str(study), "--out", str(tmp_path / "thesis")]) == 2
    assert "holds other things than a run" in capsys.readouterr().err
    assert [file.name for file in (tmp_path / "thesis").iterdir()] == ["chapter.txt"]


def test_run_that_cannot_be_written_is_said_in_one_sentence(tmp_path, capsys):
    # A file where the folder of runs should go stands for a folder without permission to write.
    study = write_study(tmp_path)
    (tmp_path / "runs").write_text("x")
    assert commands.main(["fit", str(study)]) == 2
    assert "this folder cannot be made" in capsys.readouterr().err


def test_study_file_named_like_its_card_is_no_card(tmp_path, capsys):
    study = write_study(tmp_path)
    named = study.rename(tmp_path / "avoidance-resources.toml")
    (tmp_path / "runs").write_text("x")  # so that it ends before anything is sampled
    assert commands.main(["fit", str(named)]) == 2
    assert "this folder cannot be made" in capsys.readouterr().err  # card and study were read


def test_cards_are_listed_and_shown(capsys, tmp_path):
    (tmp_path / "fen.toml").write_text(
        'title = "Fen"\nterms = ["resources"]\nsays = "Own words"\n'
        '[priors.resource]\nfamily = "normal"\nmean = 0\nsd = 2\nreason = "[bold]"\n'
    )
    assert commands.main(["cards", "--study", str(tmp_path)]) == 0
    listed = capsys.readouterr().out
    assert all(name in listed for name in ("localising", "retreat-resources", "fen"))
    assert commands.main(["cards", "fen", "--study", str(tmp_path)]) == 0
    shown = capsys.readouterr().out
    assert "resource: normal (mean 0, sd 2). [bold]" in shown and "Own words" in shown


def test_cards_need_no_numerics():
    # Listing is quick: it must not import what sampling needs. Checked in a process of its own.
    code = (
        "import sys; from bayesrange.commands import main; main(['cards', 'localising']); print('jax' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "False"


def test_output_that_knows_few_letters_gets_question_marks_and_no_crash(environment):
    plain = {**environment, "PYTHONIOENCODING": "ascii"}
    command = [sys.executable, "-m", "bayesrange", "cards", "resources"]
    done = subprocess.run(command, capture_output=True, env=plain, check=True)
    assert b"proportional to exp(?" in done.stdout.replace(b"\n", b" ")
