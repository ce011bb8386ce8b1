"""A period is fitted into a folder of its own, and an unfinished run of one is not gone on with for another."""

import json

import pytest
from inference._tiny_study import write_study

from bayesrange.inference import _fit, plan_periods
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


def finish(folder, prepared, **changes):
    """A finished run, as far as plans look at it."""
    folder.mkdir(parents=True)
    info = {"files": prepared.inputs, "period": prepared.study.period} | changes
    (folder / "run.json").write_text(json.dumps(info), encoding="utf-8")


def plans_of(path, **how):
    return [
        (plan.folder.name.removeprefix("avoidance-resources-"), plan.finished) for plan in plan_periods(path, **how)
    ]


def test_plan_keeps_what_is_finished_and_fits_what_is_not(tmp_path):
    path = write_study(tmp_path)
    path.write_text(path.read_text(encoding="utf-8") + PERIODS, encoding="utf-8")
    before, after = (_fit.prepare(read_study(path, period)) for period in ("before", "after"))
    runs = tmp_path / "runs"
    assert plans_of(path) == [("before", False), ("after", False)]
    finish(runs / "avoidance-resources-before", before)
    assert plans_of(path) == [("before", True), ("after", False)]
    # --again goes on where it was interrupted, and begins anew only once all are finished
    assert plans_of(path, again=True) == [("before", True), ("after", False)]
    finish(runs / "avoidance-resources-after", after)
    assert plans_of(path, again=True) == [("before-2", False), ("after-2", False)]
    finish(runs / "avoidance-resources-before-2", before)
    finish(runs / "avoidance-resources-after-2", after)
    assert plans_of(path) == [("before-2", True), ("after-2", True)]  # the newest
    assert plans_of(path, out=tmp_path / "elsewhere") == [("before", False), ("after", False)]
    assert plan_periods(path, out=tmp_path / "elsewhere")[0].folder.parent == tmp_path / "elsewhere"


def test_finished_run_of_other_inputs_is_no_finished_run(tmp_path):
    path = write_study(tmp_path)
    path.write_text(path.read_text(encoding="utf-8") + PERIODS, encoding="utf-8")
    before = _fit.prepare(read_study(path, "before"))
    folder = tmp_path / "runs" / "avoidance-resources-before"
    finish(folder, before, files=before.inputs | {"fixes.csv": "0"})
    with pytest.raises(StudyError, match="never overwritten, and since it was made fixes.csv changed; undo the change"):
        plan_periods(path)
    assert plans_of(path, again=True) == [("before-2", False), ("after", False)]
    (folder / "run.json").unlink()
    finish(folder / "checkpoints", before)
    (folder / "checkpoints" / "inputs.json").write_text(json.dumps({"fingerprint": "0", "inputs": {}}))
    with pytest.raises(StudyError, match="an unfinished run is here, and since it began .*fixes.csv.* changed"):
        plan_periods(path)
