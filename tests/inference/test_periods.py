"""A period is fitted into a folder of its own, and an unfinished run of one is not gone on with for another."""

import pytest
from inference._tiny_study import write_study

from bayesrange.inference import _fit
from bayesrange.study import StudyError, read_study

PERIODS = """
[periods]
before = { from = 2031-03-01, until = 2031-03-08 }
after = { from = 2031-03-09, until = 2031-12-31 }
"""


class Begun(Exception):
    pass


def test_each_period_has_its_own_folder_and_fingerprint(tmp_path, monkeypatch):
    path = write_study(tmp_path)
    path.write_text(path.read_text(encoding="utf-8") + PERIODS, encoding="utf-8")

    def stop(checkpoints, *_):
        raise Begun(checkpoints.parent.relative_to(tmp_path).as_posix())

    monkeypatch.setattr(_fit, "_sample", stop)
    with pytest.raises(StudyError, match="which are fitted one by one"):
        _fit.fit(path)
    assert not (tmp_path / "runs").exists()
    studies = [read_study(path, period) for period in ("before", "after")]
    for study in studies:
        with pytest.raises(Begun, match=f"^runs/avoidance-resources-{study.period}$"):
            _fit.fit(study)
    first, second = (_fit.prepare(study).task.fingerprint for study in studies)
    assert first != second
