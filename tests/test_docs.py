"""What docs/memory-cards.md shows can be done: its study file is read, and its table of keys is that of the code."""

import re
from pathlib import Path

from bayesrange.study._settings import ModelSection
from bayesrange.study._settings_file import read_settings

ROOT = Path(__file__).parent.parent
PAGE = (ROOT / "docs" / "memory-cards.md").read_text(encoding="utf-8")
OF_RANGE_CARDS = {"perception_m", "over_marking", "reading", "autocorrelation"}
NOT_USED_YET = {"smallest_effect"}


def test_the_study_file_on_the_page_is_read(tmp_path):
    example = re.search(r"```toml\n(.*?)```", PAGE, re.DOTALL)[1]
    (tmp_path / "study.toml").write_text(example, encoding="utf-8")
    settings = read_settings(tmp_path)
    assert settings.model.card == "memory-resources" and settings.model.priors["reference_decay"]["median"] == 800


def test_every_key_of_a_memory_card_is_in_the_table_and_no_other():
    section = PAGE.split("## Keys of [model]")[1].split("\n## ")[0]
    in_table = re.findall(r"^\| `(\w+)` \|", section, re.MULTILINE)
    assert set(in_table) == set(ModelSection.model_fields) - OF_RANGE_CARDS - NOT_USED_YET
    assert set(re.findall(r"`(\w+)`", section.rpartition("|")[2])) == OF_RANGE_CARDS  # said to be refused, below it


def test_links_between_pages_lead_somewhere():
    pages = [*ROOT.glob("*.md"), *(ROOT / "docs").rglob("*.md"), *(ROOT / "case_studies").rglob("*.md")]
    lost = [
        f"{page.relative_to(ROOT)}: {target}"
        for page in pages
        for target in re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8"))
        if not (page.parent / target).exists()
    ]
    assert len(pages) > 5 and not lost
