"""What `screen` and `cards --for` print."""

from pathlib import Path

from rich.console import Console
from rich.markup import escape
from rich.padding import Padding
from rich.table import Table

from bayesrange.screening import Carried
from bayesrange.study import DROPPABLE, FLAGS


def screen_and_show(study: Path, out: Path | None) -> None:
    """Look at a study's data, write what was found, and print it in short.

    Raises:
        StudyError: the fixes are wrong, or the folder holds other things.
    """
    from bayesrange.report import screen, summary

    console = Console()
    found = screen(study, out)
    settings = found.study.settings
    console.print(f"[bold]{escape(settings.study.name)}[/bold]")
    for sentence in summary(found):
        console.print(escape(sentence))
    for warning in found.study.warnings:
        console.print(f"[yellow]Note:[/yellow] {escape(warning)}")
    raised = {name: number for name, number in found.counts.items() if number}
    if raised:
        table = Table(title="Flags", title_justify="left")
        for column in ("flag", "fixes", "meaning"):
            table.add_column(column, justify="right" if column == "fixes" else "left", overflow="fold")
        for name, number in raised.items():
            table.add_row(name, f"{number:,}", escape(FLAGS[name].meaning))
        console.print(table)
    else:
        console.print("No fix is flagged.")
    folder = found.folder or Path()
    console.print(f"Page: {escape(str(folder / 'screening.html'))}", soft_wrap=True)
    if found.replaced:
        console.print("This screening replaces an earlier one there.")
    console.print(f"Every flag with file and line: {escape(str(folder / 'screening.csv'))}", soft_wrap=True)
    for line in _next(study, list(raised), settings.fixes.drop is not None):
        console.print(escape(line), soft_wrap=True)


def _next(study: Path, raised: list[str], drops: bool) -> list[str]:
    """What to do with what was found."""
    wanted = [name for name in DROPPABLE if name in raised]
    said = ["Nothing was changed."]
    if wanted and not drops:
        flags = ", ".join(f'"{name}"' for name in wanted)
        said.append(f"Look at the page; to leave flagged fixes out of a fit: [fixes.drop] flags = [{flags}]")
    elif drops:
        said.append("A fit leaves out what [fixes.drop] names, and counts it.")
    return [*said, f"Which models these data can carry: bayesrange cards --for {study}"]


def show_carried(study: Path, name: str | None) -> None:
    """Which cards a study's data can carry, and why not the others.

    Raises:
        StudyError: no such card, or the fixes are wrong.
    """
    from bayesrange.inference import cards, find_card, read_card
    from bayesrange.screening import carried, look
    from bayesrange.study import locate_study, read_bare

    folder = locate_study(study).parent
    wanted = cards(folder) if name is None else [read_card(find_card(name, folder))]
    found = look(read_bare(study))
    console = Console()
    for one in carried(found.evidence, wanted):
        _show_one(one, console)
    console.print("That a card can be fitted does not make it right: bayesrange cards says what each assumes.")


def _show_one(one: Carried, console: Console) -> None:
    colour = {"yes": "green", "no": "red"}.get(one.verdict, "yellow")
    console.print(f"[bold]{escape(one.card)}[/bold]: [{colour}]{one.verdict}[/{colour}]")
    for text in one.against:
        console.print(Padding(escape(f"{text}."), (0, 0, 0, 4)))
    for text in one.mind:
        console.print(Padding(escape(f"To be minded: {text}."), (0, 0, 0, 4)))
