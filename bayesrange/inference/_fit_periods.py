"""All periods of a study, fitted one by one, each into a run folder of its own."""

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from bayesrange._errors import StudyError
from bayesrange.inference._fit import fit, refuse_changes
from bayesrange.inference._folder import choose_folder
from bayesrange.inference._prepare import Prepared, prepare
from bayesrange.inference._processes import Message
from bayesrange.inference._run import Run
from bayesrange.study import Study, locate_study, read_settings, read_study


@dataclass(frozen=True)
class PeriodFit:
    """A period and where its run is, or will be.

    Attributes:
        study: as read for this period.
        card: name of the model card.
        folder: the run folder.
        finished: a finished run with the very same inputs is there and is kept.
    """

    study: Study
    card: str
    folder: Path
    finished: bool

    @property
    def period(self) -> str:
        """Its name."""
        return str(self.study.period)


def fit_periods(
    study: str | Path,
    out: str | Path | None = None,
    again: bool = False,
    tell: Callable[[Message], None] | None = None,
    processes: int | None = None,
) -> dict[str, Run]:
    """Fit each period of a study that has some; those finished with the same inputs are kept.

    Args:
        study: study file or its folder.
        out: folder in which the run folders are made; default `runs` beside the study. Each is `<card>-<period>`.
        again: make new folders where finished runs stand; if some of the periods have no finished run yet, only these
            are fitted, so that the same call goes on where it was interrupted.
        tell: called with progress messages, as by `fit`; a run that is kept sends the stage `kept`.
        processes: chains that run at the same time; default one a processor.

    Returns:
        Runs by period, in the order of the study file.

    Raises:
        StudyError: the input of a period is wrong, or a folder is taken; nothing was written.
        WorkerError: a sampling process failed.
    """
    tell = tell or (lambda message: None)
    runs = {}
    for plan in plan_periods(study, out, again):
        if plan.finished:
            tell({"stage": "kept", "folder": str(plan.folder), "period": plan.period})
            runs[plan.period] = Run(plan.folder)
        else:
            runs[plan.period] = fit(plan.study, plan.folder, tell=tell, processes=processes)
    return runs


def study_periods(study: str | Path) -> list[str]:
    """Names of a study's periods, in the order of the study file; none if it has no section [periods].

    Raises:
        StudyError: the study file is wrong.
    """
    return list(read_settings(locate_study(study)).periods)


def plan_periods(study: str | Path, out: str | Path | None = None, again: bool = False) -> list[PeriodFit]:
    """Read every period and choose its run folder, before anything is written.

    Args:
        study: study file or its folder.
        out: folder in which the run folders are made.
        again: as in `fit_periods`.

    Raises:
        StudyError: the study has no periods, a period's input is wrong, or a folder is taken.
    """
    periods = study_periods(study)
    if not periods:
        raise StudyError(f"{locate_study(study).name}: the study file has no section [periods]; fit it as a whole.")
    prepared = [prepare(read_study(study, period)) for period in periods]
    bases = [_base(one, out) for one in prepared]
    kept = [_finished(base, one) for base, one in zip(bases, prepared, strict=True)]
    if again and all(kept):
        kept = [None] * len(kept)
    return [_planned(one, base, there, again) for one, base, there in zip(prepared, bases, kept, strict=True)]


def _base(prepared: Prepared, out: str | Path | None) -> Path:
    folder = Path(out) if out is not None else prepared.study.path.parent / "runs"
    return folder / f"{prepared.card.name}-{prepared.study.period}"


def _planned(prepared: Prepared, base: Path, kept: Path | None, again: bool) -> PeriodFit:
    if kept is not None:
        return PeriodFit(prepared.study, prepared.card.name, kept, True)
    if not again and (base / "run.json").is_file():
        changed = ", ".join(_changed(base, prepared))
        raise StudyError(
            f"{base}: a finished run is here and is never overwritten, and since it was made {changed} changed; undo "
            "the change to keep it, or add --again for new runs."
        )
    folder = choose_folder(prepared.study.path.parent, prepared.card.name, base, again, prepared.fingerprint)
    refuse_changes(folder / "checkpoints", prepared)
    return PeriodFit(prepared.study, prepared.card.name, folder, False)


def _finished(base: Path, prepared: Prepared) -> Path | None:
    """The newest finished run with the same inputs among `base`, `base-2`, `base-3` and so on."""
    found, folder, number = None, base, 1
    while folder.exists():
        if (folder / "run.json").is_file() and not _changed(folder, prepared):
            found = folder
        number += 1
        folder = base.with_name(f"{base.name}-{number}")
    return found


def _changed(folder: Path, prepared: Prepared) -> list[str]:
    """Inputs that are not what they were when a finished run was made."""
    info = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    old, new = info["files"], prepared.inputs
    changed = sorted(name for name in old.keys() | new.keys() if old.get(name) != new.get(name))
    return changed + (["the period"] if info["period"] != prepared.study.period else [])
