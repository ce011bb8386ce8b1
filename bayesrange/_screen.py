"""What commands print: a fit's progress, its results, and the model cards."""

import time
from pathlib import Path
from typing import Any

import pandas as pd
from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.progress import BarColumn, Progress, TaskID, TextColumn
from rich.table import Table

from bayesrange.inference import Run
from bayesrange.study import Study


def fit_and_report(study: Path | Study, out: Path | None, again: bool, processes: int | None) -> Run:
    """Fit a study, write its tables, maps and page, and print how it went.

    Raises:
        StudyError: the input is wrong.
    """
    from bayesrange.inference import fit, open_run
    from bayesrange.report import write

    console = Console()
    view = FitView(console)
    try:
        run = fit(study, out=out, again=again, tell=view, processes=processes)
    finally:
        view.close()
    console.print("Drawing maps and the report …")
    page = write(run.folder)
    show_result(open_run(run.folder), page, console)
    return run


class FitView:
    """Turns progress messages into lines and bars; call it with each message.

    Where the output is no terminal there are no bars, but a line for every fifth of a chain.
    """

    def __init__(self, console: Console) -> None:
        self.console = console
        self._bars: dict[str, TaskID] = {}
        self._begun: dict[str, tuple[float, int]] = {}
        self._said: dict[str, int] = {}
        self._progress: Progress | None = None

    def __call__(self, message: dict[str, Any]) -> None:
        handler = getattr(self, f"_on_{message['stage']}", None)
        if handler is not None:
            handler(message)

    def close(self) -> None:
        """Leave the terminal as it was."""
        if self._progress is not None:
            self._progress.stop()
            self._progress = None

    def _on_read(self, message: dict[str, Any]) -> None:
        prepared = message["prepared"]
        study, counts = prepared.study, prepared.study.counts
        ny, nx = study.grid.shape
        failed = f", {counts['failed']:,} failed and set aside" if counts.get("failed") else ""
        self.console.print(
            f"[bold]{escape(study.settings.study.name)}[/bold]: {escape(prepared.card.title)} ({prepared.card.name})"
        )
        animals = study.fixes["animal"].nunique()
        of = f"{animals} animal{'s' if animals > 1 else ''}"
        groups = f" in {len(study.groups)} groups" if prepared.card.kind == "range" else ""
        self.console.print(
            f"{len(study.fixes):,} fixes of {of}{groups}{failed}; "
            f"{nx} × {ny} cells of {study.grid.cell_m:g} m, {study.grid.habitable_km2:.1f} km²; "
            f"{escape(study.crs.to_string())}"
        )
        if prepared.weights is not None:
            self.console.print(f"{prepared.weights.sentence}, because an animal's next fix is near its last.")
        for warning in prepared.warnings:
            self.console.print(f"[yellow]Note:[/yellow] {escape(warning)}")
        self.console.print(f"Run folder: {escape(message['folder'])}", soft_wrap=True)

    def _on_tables(self, message: dict[str, Any]) -> None:
        if message["kind"] == "memory":
            self.console.print("Tabulating each animal's past …")

    def _on_compiling(self, message: dict[str, Any]) -> None:
        self.console.print("Compiling the model (the first time takes about half a minute; later runs find it ready) …")

    def _on_mode(self, message: dict[str, Any]) -> None:
        self.console.print("Looking for the mode …")

    def _on_cost(self, message: dict[str, Any]) -> None:
        self.console.print(
            f"This will take about {max(message['minutes'], 0.1):.1f} minutes and {message['gib']:.1f} GiB "
            f"({message['at_once']} chain(s) at a time)."
        )

    def _on_warmup(self, message: dict[str, Any]) -> None:
        label = f"{escape(message['label'])}, " if message.get("label") else ""
        chain, done, of = f"{label}chain {message['chain']}", message["done"], message["of"]
        words = f"divergences {message['divergences']}, step size {message['step_size']:.2g}, {message['stage']}"
        if not self.console.is_terminal:
            if done * 5 // of > self._said.get(chain, 0):
                self._said[chain] = done * 5 // of
                self.console.print(f"{chain}: {done} of {of}, {words}{self._left(chain, done, of)}")
            return
        if self._progress is None:
            columns = (
                TextColumn("{task.fields[chain]}"),
                BarColumn(),
                TextColumn("{task.completed:.0f}/{task.total:.0f} {task.fields[words]}"),
            )
            self._progress = Progress(*columns, console=self.console)
            self._progress.start()
        if chain not in self._bars:
            self._bars[chain] = self._progress.add_task("", total=of, chain=chain, words=words)
        finished = bool(message.get("label")) and done == of  # many animals: only those under way have a bar
        left = words + self._left(chain, done, of)
        self._progress.update(self._bars[chain], completed=done, words=left, visible=not finished)

    _on_sampling = _on_warmup

    def _left(self, chain: str, done: int, of: int) -> str:
        """Time left of a chain, from its pace since it was first heard of."""
        begun, first = self._begun.setdefault(chain, (time.monotonic(), done))
        if done == first or done >= of:
            return ""
        seconds = (time.monotonic() - begun) / (done - first) * (of - done)
        return f", {seconds / 60:.1f} min left" if seconds >= 60 else f", {seconds:.0f} s left"

    def _on_writing(self, message: dict[str, Any]) -> None:
        self.close()
        self.console.print("Writing the posterior …")


def show_result(run: Run, page: Path, console: Console) -> None:
    """Parameters, convergence and where everything is."""
    table = Table(title="Parameters", title_justify="left")
    for name in ("parameter", "unit", "median", "90 % interval", "ESS", "R-hat"):
        table.add_column(name, justify="left" if name in ("parameter", "unit") else "right", overflow="fold")
    shown = population_rows(run)
    for row in shown.itertuples():
        table.add_row(
            escape(row.parameter), escape(str(row.unit)), number(row.median),
            f"{number(row.lower)} to {number(row.upper)}", f"{min(row.ess_bulk, row.ess_tail):.0f}", f"{row.rhat:.3f}",
        )  # fmt: skip
    console.print(table)
    if len(shown) < len(run.parameters):
        console.print("The rows of single animals are in tables/parameters.csv and in the report.")
    if run.converged:
        console.print("[green]Converged[/green]: every convergence check was passed.")
    else:
        console.print("[red bold]Not converged[/red bold]: do not report these intervals.")
        for problem in run.info["diagnostics"]["problems"]:
            console.print(f"  {escape(problem)}")
    console.print(f"Run folder: {escape(str(run.folder))}", soft_wrap=True)
    console.print(f"Report: {escape(str(page))}", soft_wrap=True)


def population_rows(run: Run) -> pd.DataFrame:
    """Rows of the table that fit a screen: of a population of animals, those of no single animal."""
    table = run.parameters
    memory = run.info.get("memory")
    if memory is None or run.info["card"]["pooling"] != "hierarchical":
        return table
    ends = tuple(f"{mark}{animal}]" for animal in memory["record_h"] for mark in ("[", ", "))
    return table[~table["parameter"].str.endswith(ends)]


def number(value: float) -> str:
    """Three significant digits; whole numbers from 1,000 up, as for coordinates in metres."""
    return f"{value:.0f}" if abs(value) >= 1000 else f"{value:.3g}"


def show_cards(name: str | None, study: Path | None) -> None:
    """All cards in short, or one in full.

    Raises:
        StudyError: no such card.
    """
    from bayesrange.inference import cards, find_card, read_card

    console = Console()
    folder = study.parent if study is not None and study.is_file() else study
    if name is None:
        for card in cards(folder):
            own = " (in the study's folder)" if folder is not None and card.file.parent == folder else ""
            console.print(f"[bold]{escape(card.name)}[/bold]{own}: {escape(card.title)}")
            for text in (card.says, f"Use when: {card.use_when}", f"Not when: {card.not_when}"):
                console.print(Padding(escape(text), (0, 0, 0, 4)))
            console.print()
        console.print(
            "A card copied into the study's folder and edited goes before the package's own of the same name."
        )
        return
    card = read_card(find_card(name, folder))
    console.print(f"[bold]{escape(card.name)}[/bold]: {escape(card.title)}\n{escape(card.says)}")
    console.print(
        f"Use when: {escape(card.use_when)}\nNot when: {escape(card.not_when)}\nTerms: {', '.join(card.terms)}"
        + (f"; solver: {card.solver}" if card.solver else "")
    )
    for parameter, prior in card.priors.items():
        console.print(
            f"{parameter}: {prior.in_words()}{' × ' + prior.scaled_by if prior.scaled_by else ''}. "
            f"{escape(prior.reason)}"
        )
    for reference in card.references:
        console.print(escape(reference))
    console.print(f"File: {escape(str(card.file))}")
