"""Wrong input of memory cards: status 2, one sentence on standard error, nothing written."""

import pytest
from inference._tiny_tracks import BO, TOM, animals_table, fixes_table, write_tracks

from bayesrange import commands
from bayesrange.inference import _memory_tables

TWO = (BO, TOM)
NARROW = {"family": "log-normal", "median": 1.0, "spread": 0.5}
HALF = {"family": "half-normal", "scale": 1.0}
WRONG = {
    "shared": ({"model": {"pooling": "shared"}}, '"shared" is for range cards'),
    "perception": ({"model": {"perception_m": 200}}, "perception_m: memory-resources has no use for it"),
    "over-marking": ({"model": {"over_marking": True}}, "over_marking"),
    "reading": ({"model": {"reading": "cell"}}, "reading: memory-resources has no use for it"),
    "autocorrelation": ({"model": {"autocorrelation": "ignored"}}, "steps follow one another anyway"),
    "layers without selection": ({"model": {"card": "memory"}}, "has no resource term; take the list out"),
    "selection without layers": ({"model": {"layers": []}}, "list at least one"),
    "vary without selection": ({"model": {"card": "memory", "layers": [], "vary": ["selection"]}}, "has no selection"),
    "prior of no use": ({"model": {"priors": {"encoding_range": NARROW}}}, 'set encoding_range_m = "estimate"'),
    "rhythm of no use": (
        {"model": {"priors": {"step_rhythm": {"family": "normal", "mean": 0.0, "sd": 1.0}}}},
        'set vary = ["step_length"]',
    ),
    "range without ends": (
        {"model": {"encoding_range_m": "estimate", "priors": {"encoding_range": HALF}}},
        "needs an end on both sides",
    ),
    "hierarchical with two": (
        {"fixes": fixes_table().query("animal in @TWO"), "model": {"pooling": "hierarchical"}},
        "needs at least 3 animals that travel apart, the study has 2",
    ),
    "covariate without hierarchy": (
        {"model": {"pooling": "individual", "covariates": ["sex"]}},
        'covariates of animals need pooling = "hierarchical"',
    ),
    "animal with the table's name": (
        {
            "fixes": fixes_table().replace({"animal": {TOM: "new animal"}}),
            "animals": animals_table().replace({"animal": {TOM: "new animal"}}),
        },
        'an animal is called "new animal"',
    ),
    "interval nobody uses": ({"model": {"interval_h": 5.0}}, "no two successive fixes of an animal are 5 h apart"),
    "few steps": ({"fixes": fixes_table().groupby("animal").head(40)}, "at least 50 are needed"),
    "learning days unused": ({"model": {"learning_days": 3}}, "learning_days: it has no use"),
    "too few nodes": ({"model": {"nodes": 4}}, "nodes"),
}  # fmt: skip


@pytest.mark.parametrize("wrong", WRONG)
def test_wrong_study_is_answered_by_one_sentence_and_nothing_is_written(tmp_path, capsys, monkeypatch, wrong):
    changes, words = WRONG[wrong]
    study = write_tracks(tmp_path / "study", **changes)
    monkeypatch.chdir(tmp_path)
    before = sorted(tmp_path.rglob("*"))
    assert commands.main(["fit", str(study)]) == 2
    said = capsys.readouterr()
    assert said.err.startswith("bayesrange: ") and words in said.err, said.err
    assert said.out == "" and said.err.count("\n") == 1
    assert sorted(tmp_path.rglob("*")) == before


def test_what_is_found_out_only_when_tables_are_made_leaves_nothing_behind(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr(_memory_tables, "COLUMNS", ((2, 2),))  # too few for any memory
    write_tracks(tmp_path / "study")
    before = sorted(tmp_path.rglob("*"))
    assert commands.main(["fit", str(tmp_path / "study")]) == 2
    assert "cannot be compressed" in capsys.readouterr().err
    left = [path for path in tmp_path.rglob("*") if path.is_file()]
    assert sorted(left) == [path for path in before if path.is_file()]
