"""Model cards: those that ship, a user's own, and broken ones."""

import re
import shutil

import pytest

from bayesrange import StudyError
from bayesrange._resources import models_folder
from bayesrange.inference import cards, find_card, read_card
from bayesrange.inference._cards import COMMON, SCENT_TERMS, TERMS, VARYING

SHIPPED = {  # terms and solver of each card: the design of the models
    "localising": (("localising",), "gibbs"),
    "resources": (("resources",), "gibbs"),
    "avoidance": (("localising", "avoidance"), "gibbs"),
    "avoidance-resources": (("localising", "avoidance", "resources"), "gibbs"),
    "retreat-resources": (("localising", "retreat", "resources"), "flux"),
    "steps-resources": (("steps", "resources"), ""),
    "steps-home": (("steps", "resources", "home"), ""),
    "memory": (("steps", "memory"), ""),
    "memory-resources": (("steps", "resources", "memory"), ""),
}

GOOD = """
title = "Own"
terms = ["localising", "avoidance"]
[priors.localising]
family = "log-normal"
median = 8.0
spread = 0.8
scaled_by = "1/home_length"
[priors.avoidance]
family = "half-normal"
scale = 1.0
[priors.over_marking]
family = "half-normal"
scale = 0.03
"""


@pytest.fixture
def card(tmp_path):
    def write(text, name="own"):
        file = tmp_path / f"{name}.toml"
        file.write_text(text, encoding="utf-8")
        return file

    return write


def test_shipped_cards_are_those_of_the_design():
    assert {card.name: (card.terms, card.solver) for card in cards()} == SHIPPED


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_card_says_what_it_assumes_and_why(name):
    card = read_card(find_card(name))
    assert card.file == models_folder() / f"{name}.toml" and card.name == name
    assert min(len(text) for text in (card.title, card.says, card.use_when, card.not_when)) > 15
    assert card.references and all(re.search(r"\(\d{4}\)", text) for text in card.references)
    optional = {"over_marking"} if set(card.terms) & set(SCENT_TERMS) else set()
    if card.kind == "memory":
        optional = {"step_rhythm"} | ({"encoding_range"} if "memory" in card.terms else set())
    assert set(card.priors) == set(card.parameters) | optional
    assert all(len(prior.reason) > 30 for prior in [*card.priors.values(), *card.between.values()])
    may_differ = set(VARYING) if card.kind == "range" else set(card.parameters) - set(COMMON)
    assert set(card.between) == set(card.parameters) & may_differ
    assert card.covariate_effect.family == "normal" and card.covariate_effect.reason


@pytest.mark.parametrize("name", SHIPPED)
def test_priors_with_a_unit_scale_with_the_study_and_the_others_do_not(name):
    # Parameters with a length in their unit refer to a length of the study, and only they.
    with_length = {"localising": "1/home_length", "retreat": "1/home_length", "home_pull": "1/area_length"}
    with_length |= {"step_scale": "median_step", "encoding_range": "median_step"}
    for parameter, prior in read_card(find_card(name)).priors.items():
        assert prior.scaled_by == with_length.get(parameter, "")


def test_card_in_the_study_folder_goes_first(card, tmp_path):
    own = card(GOOD, name="avoidance")
    assert find_card("avoidance", tmp_path) == own
    assert find_card("localising", tmp_path).parent == models_folder()
    assert read_card(own).title == "Own"


def test_shipped_card_copied_under_another_name_reads_alike(tmp_path):
    shutil.copy(models_folder() / "avoidance-resources.toml", tmp_path / "fen.toml")
    copy, shipped = read_card(find_card("fen", tmp_path)), read_card(find_card("avoidance-resources"))
    assert copy.name == "fen"
    assert (copy.priors, copy.terms, copy.says) == (shipped.priors, shipped.terms, shipped.says)


def test_cards_of_a_study_folder_are_listed_beside_its_other_files(card, tmp_path):
    card(GOOD)
    (tmp_path / "study.toml").write_text('[study]\nname = "x"\n')
    (tmp_path / "notes.toml").write_text("not toml at all")
    assert [found.name for found in cards(tmp_path)] == [*sorted(SHIPPED), "own"]


def test_study_file_named_like_a_card_is_not_taken_for_one(tmp_path):
    (tmp_path / "localising.toml").write_text('[study]\nname = "x"\n[model]\ncard = "localising"\n')
    assert find_card("localising", tmp_path).parent == models_folder()


def test_broken_card_of_the_user_is_not_passed_over_for_a_shipped_one(card, tmp_path):
    card("terms = [", name="avoidance")
    with pytest.raises(StudyError, match="avoidance.toml: not a TOML file"):
        read_card(find_card("avoidance", tmp_path))


def test_unknown_card_is_answered_with_the_nearest():
    with pytest.raises(StudyError, match="no card called 'avoidence'; there are .* Did you mean avoidance?"):
        find_card("avoidence")


@pytest.mark.parametrize("name", ["../localising", "models/localising", "/localising"])
def test_card_with_a_path_is_refused(name):
    with pytest.raises(StudyError, match="expected the name of a card without a folder"):
        find_card(name)


BROKEN = {
    "not TOML": (GOOD + "[[", "own.toml: not a TOML file that can be read"),
    "unknown key": ("trems = []\n" + GOOD, "own.toml, trems: a model card has no such key. Did you mean terms?"),
    "no terms": (GOOD.replace("terms =", "references = []\nsays = 'x' #"), "own.toml, terms: expected a list"),
    "unknown term": (GOOD.replace('"avoidance"]', '"avoiding"]'), "own.toml, terms: expected a list with some of"),
    "term twice": (GOOD.replace('"avoidance"]', '"localising"]'), "own.toml, terms: each term once"),
    "unknown solver": ('solver = "newton"\n' + GOOD, 'own.toml, solver: expected "flux" or "gibbs", got .newton.'),
    "retreat by gibbs": (GOOD.replace('"avoidance"]', '"retreat"]'), 'own.toml, solver: expected "flux", got .gibbs.'),
    "prior missing": (GOOD.replace("[priors.avoidance]", "[between_groups.avoidance]"), "priors.avoidance"),
    "prior too many": (
        GOOD + '[priors.resource]\nfamily = "normal"\nmean = 0\nsd = 1\n',
        "own.toml, .priors.resource.*no",
    ),
    "scaled without a length": (
        GOOD.replace("scale = 1.0", 'scale = 1.0\nscaled_by = "1/home_length"'),
        "own.toml, .priors.avoidance.: `scaled_by`",
    ),
    "family": (GOOD.replace('"half-normal"', '"cauchy"'), "`family` must be one of normal, half-normal"),
    "no family": (GOOD.replace('family = "log-normal"', ""), "`family` must be one of .*got None"),
    "number missing": (GOOD.replace("median = 8.0", ""), "own.toml, .priors.localising.: `median` must be a number"),
    "number as text": (GOOD.replace("8.0", '"8"'), "`median` must be a number, got '8'"),
    "number infinite": (GOOD.replace("8.0", "inf"), "`median` must be a number, got inf"),
    "number as flag": (GOOD.replace("8.0", "true"), "`median` must be a number, got True"),
    "spread zero": (GOOD.replace("spread = 0.8", "spread = 0"), "`spread` must be above 0"),
    "number of another family": (
        GOOD.replace("scale = 1.0", "scale = 1.0\nmean = 2"),
        "half-normal takes scale, not mean",
    ),
    "kind unknown": ('kind = "steps"\n' + GOOD, "own.toml, kind: expected range or memory, got 'steps'"),
    "memory without steps": ('kind = "memory"\nterms = ["memory"]\n', 'own.toml: a memory card needs the term "steps"'),
    "memory with a solver": (
        'kind = "memory"\nterms = ["steps"]\nsolver = "gibbs"\n',
        'needs the term "steps", and has no solver',
    ),
    "spread of the other kind": (
        GOOD + '[between_animals.localising]\nfamily = "half-normal"\nscale = 1.0\n',
        r"\[between_animals\]: a card of kind 'range' has \[between_groups\]",
    ),
    "scale of another parameter": (
        GOOD.replace("1/home_length", "median_step"),
        r"\[priors.localising\]: `scaled_by` is 'median_step', but it may be",
    ),
    "scale unknown": (GOOD.replace("1/home_length", "1/cell"), "`scaled_by` must be 1/home_length or .*, got '1/cell'"),
    "negative allowed": (
        GOOD.replace('family = "half-normal"\nscale = 1.0', 'family = "normal"\nmean = 1\nsd = 1'),
        "own.toml, .priors.avoidance.: this parameter cannot be below 0",
    ),
    "uniform below 0": (
        GOOD.replace('family = "half-normal"\nscale = 1.0', 'family = "uniform"\nlow = -1\nhigh = 1'),
        "this parameter cannot be below 0",
    ),
    "uniform upside down": (
        GOOD.replace('family = "half-normal"\nscale = 1.0', 'family = "uniform"\nlow = 2\nhigh = 1'),
        "`low` must be below `high`",
    ),
    "priors no table": (
        "priors = 3\n" + GOOD[: GOOD.index("[priors")],
        "own.toml, .priors.: expected one table a parameter",
    ),
    "between groups misspelt": (
        GOOD + '[between_groups.localizing]\nfamily = "half-normal"\nscale = 1\n',
        "own.toml, .between_groups.localizing.: .*localising",
    ),
    "between groups not half-normal": (
        GOOD + '[between_groups.localising]\nfamily = "exponential"\nmean = 1\n',
        "own.toml, .between_groups.localising.: .*half-normal",
    ),
    "between groups with a unit": (
        GOOD + '[between_groups.localising]\nfamily = "half-normal"\nscale = 1\nscaled_by = "1/home_length"\n',
        "own.toml, .between_groups.localising.: .*scaled_by",
    ),
    "covariate effect": (
        GOOD + '[covariate_effect]\nfamily = "half-normal"\nscale = 1\n',
        "own.toml, .covariate_effect.: .*normal",
    ),
    "covariate effect off centre": (
        GOOD + '[covariate_effect]\nfamily = "normal"\nmean = 1\nsd = 1\n',
        "own.toml, .covariate_effect.: .*mean 0",
    ),
    "covariate effect no table": ("covariate_effect = 3\n" + GOOD, "own.toml, .covariate_effect."),
    "references no tables": ('references = ["Okubo 1980"]\n' + GOOD, "own.toml, .*references"),
}


@pytest.mark.parametrize("broken", BROKEN)
def test_broken_card_is_answered_in_one_sentence_with_file_and_key(card, broken):
    text, sentence = BROKEN[broken]
    with pytest.raises(StudyError, match=sentence) as caught:
        read_card(card(text))
    assert str(caught.value).startswith("own.toml")
    assert "\n" not in str(caught.value).strip()


def test_whole_card_reads(card):
    own = read_card(card(GOOD))
    assert own.terms == ("localising", "avoidance") and own.scent and own.solver == "gibbs"
    assert own.priors["localising"].numbers == (8.0, 0.8)


def test_priors_of_the_study_take_the_place_of_the_cards(card):
    own = read_card(card(GOOD)).with_priors({"avoidance": {"family": "exponential", "mean": 2}}, "study.toml")
    assert (own.priors["avoidance"].family, own.priors["avoidance"].numbers) == ("exponential", (2.0,))
    assert own.priors["localising"].numbers == (8.0, 0.8)
    assert own.changed == ("avoidance",)


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        (
            {"avoidence": {}},
            "study.toml, .model.priors. avoidence: the card own has no such .* Did you mean avoidance?",
        ),
        ({"resource": {}}, "study.toml, .model.priors. resource: the card own has no such parameter"),
        ({"avoidance": {"family": "normal", "mean": 0, "sd": 1}}, "study.toml, .model.priors. avoidance: .*below 0"),
    ],
)
def test_wrong_priors_of_the_study_name_the_study_file(card, override, sentence):
    with pytest.raises(StudyError, match=sentence):
        read_card(card(GOOD)).with_priors(override, "study.toml")


def test_every_term_brings_a_parameter_of_its_own():
    for terms in TERMS.values():
        brought = [name for names in terms.values() for name in names]
        assert all(terms.values()) and len(set(brought)) == len(brought)
