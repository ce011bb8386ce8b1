"""Text tables as people save them: dialects, encodings, quoting; any text at all is read or refused."""

import csv
import io
import re
import string

import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from bayesrange.study import StudyError, read_study


def rewritten(folder, text, encoding="utf-8"):
    path = folder.write()
    folder.path("fixes.csv").write_bytes(text.encode(encoding))
    return path


def as_text(folder, **dialect):
    return folder.fixes.to_csv(index=False, **dialect)


@pytest.mark.parametrize("encoding", ["utf-16", "utf-8-sig", "cp1252"])
def test_encodings_that_spreadsheets_write(folder, encoding):
    folder.fixes["animal"] = folder.fixes["animal"] + "€ä"
    fixes = read_study(rewritten(folder, as_text(folder), encoding)).fixes
    assert set(fixes["animal"]) == {"E1€ä", "N1€ä", "S1€ä"}


@pytest.mark.parametrize("separator", [";", "\t"])
def test_decimal_commas_are_numbers_and_said(folder, separator):
    plain = folder.read().fixes
    folder.fixes[["x", "y"]] = folder.fixes[["x", "y"]].map(lambda v: f"{v:.1f}".replace(".", ","))
    study = read_study(rewritten(folder, as_text(folder, sep=separator)))
    pd.testing.assert_frame_equal(study.fixes, plain)
    assert any("fixes.csv: x and y are written with decimal commas" in w for w in study.warnings)


def test_commas_that_may_mark_thousands_are_refused(folder):
    folder.fixes["x"] = folder.fixes["x"].map(lambda v: f"{v:,.0f}")
    with pytest.raises(StudyError, match=r'column "x": expected a number, got "501,\d{3}".*with a point'):
        read_study(rewritten(folder, as_text(folder, sep=";")))


@pytest.mark.parametrize(("start", "ending"), [("sep=|\n", "\r\n"), ("\n\n", "\r"), ("", "\n")])
def test_separator_lines_blank_lines_and_line_endings(folder, start, ending):
    plain = folder.read().fixes
    text = start + as_text(folder, sep="|", quoting=csv.QUOTE_ALL)
    fixes = read_study(rewritten(folder, text.replace("\n", ending))).fixes
    assert (fixes["row"] - plain["row"]).unique().tolist() == [start.count("\n")]
    pd.testing.assert_frame_equal(fixes.drop(columns="row"), plain.drop(columns="row"))


def test_a_quoted_note_may_hold_separators_and_line_breaks(folder):
    plain = folder.read().fixes
    folder.fixes["note"] = 'rain, "heavy"\nuntil noon'
    fixes = folder.read().fixes
    pd.testing.assert_frame_equal(fixes.drop(columns="row"), plain.drop(columns="row"))


BROKEN = {
    "open quote": ('N9,2031-03-01T00:00Z,north,500001,"5600001', "the quotes are not as in a CSV file"),
    "after a quote": ('"N9"x,2031-03-01T00:00Z,north,1,1', "the quotes are not as in a CSV file"),
    "hexadecimal": ("N9,2031-03-01T00:00Z,north,0x7A120,5600001", 'expected a number, got "0x7A120"'),
    "underscore": ("N9,2031-03-01T00:00Z,north,501_000,5600001", 'expected a number, got "501_000"'),
    "line break": ('"N\n9",2031-03-01T00:00Z,north,501000,5601000', 'is "N\\n9", which has a line break'),
    "escape": ("N\x1b[31m9,2031-03-01T00:00Z,north,501000,5601000", 'is "N\\x1b[31m9", which has'),
    "long": (f"N9,{'9' * 5000},north,501000,5601000", f'the time "{"9" * 60}…" cannot be read'),
}


@pytest.mark.parametrize("case", BROKEN)
def test_a_broken_line_is_named(folder, case):
    line, match = BROKEN[case]
    with pytest.raises(StudyError, match=re.escape(match)) as caught:
        read_study(rewritten(folder, as_text(folder) + line + "\n"))
    assert str(caught.value).isprintable() and "fixes.csv" in str(caught.value)


def test_files_that_are_no_text(folder):
    with pytest.raises(StudyError, match="begins like UTF-16 text but is none"):
        path = folder.write()
        folder.path("fixes.csv").write_bytes(b"\xff\xfea")
        read_study(path)
    folder.path("fixes.csv").unlink()
    folder.path("fixes.csv").mkdir()
    with pytest.raises(StudyError, match='no file matches "fixes.csv"'):
        read_study(path)
    folder.path("groups.csv").unlink()
    folder.path("groups.csv").mkdir()
    folder.path("fixes.csv").rmdir()
    folder.fixes.to_csv(folder.path("fixes.csv"), index=False)
    with pytest.raises(StudyError, match="groups.csv: this is a folder; expected a file"):
        read_study(path)


CELL = st.one_of(
    st.text(st.characters(codec="utf-8"), max_size=6),
    st.floats(499_900, 504_000).map(str),
    st.sampled_from(["", "north", "N1", "501000,5", "2031-03-01T04:00Z", "2031-03-01 04:00", '"', "nan", "1e9"]),
)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(st.lists(CELL, min_size=5, max_size=6), max_size=3), st.sampled_from(",;\t"), st.booleans())
def test_any_table_gives_a_sound_study_or_one_sentence(folder, rows, separator, quoted):
    text = io.StringIO()
    writer = csv.writer(
        text,
        delimiter=separator,
        quoting=csv.QUOTE_MINIMAL if quoted else csv.QUOTE_NONE,
        quotechar='"',
        escapechar=None if quoted else "\\",
    )
    path = folder.write()
    text.write(as_text(folder, sep=separator))
    writer.writerows(rows)
    folder.path("fixes.csv").write_text(text.getvalue(), encoding="utf-8", newline="")
    try:
        study = read_study(path)
    except StudyError as error:
        assert str(error).isprintable() and str(error)[-1] in ".?" and len(str(error)) < 1000
        return
    assert len(study.fixes) == study.counts["rows"] - study.counts["failed"] == study.counts["fixes"]
    assert study.fixes[["x", "y"]].notna().all(axis=None) and set(study.fixes["group"]) <= set(study.groups["group"])


NAMES = st.text(string.ascii_letters + 'äß€ ,;"', min_size=1, max_size=8).map(str.strip).filter(bool)


@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(NAMES, st.lists(st.floats(600, 3400, allow_subnormal=False), min_size=1, max_size=5))
def test_what_was_read_is_written_and_read_again_the_same(folder, name, places):
    folder.fixes.loc[:59, "animal"] = f"{name} 1"
    folder.fixes["x"] = folder.fixes["x"].astype(object)
    folder.fixes.loc[: len(places) - 1, "x"] = [folder.west + p for p in places]
    first = folder.read()
    again = first.fixes.assign(time=[t.isoformat() for t in first.fixes["time"]]).drop(columns=["file", "row"])
    path = folder.write()
    again.to_csv(folder.path("fixes.csv"), index=False)
    columns = ["animal", "time", "x", "y", "group", "error_m"]
    pd.testing.assert_frame_equal(read_study(path).fixes[columns], first.fixes[columns], check_exact=True)
