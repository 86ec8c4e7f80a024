"""The commands that look at a run: ``status``, and of a finished one ``page`` and ``pick``."""

from __future__ import annotations

import math
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from stackopt.errors import Finding, InputError, UnmetMaskError

if TYPE_CHECKING:
    from stackopt.choice import Filters
    from stackopt.front import Front
    from stackopt.runs import FinishedRun

CHOICES = "--rank N, --lightest, --cheapest, --thinnest, --balanced or --weights mass=2,cost=1"
RunFolder = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run.", show_default=False)]


def add_to(app: typer.Typer) -> None:
    """Add the commands to the application."""
    app.command()(status)
    app.command()(page)
    app.command()(pick)


def status(
    run: RunFolder,
    as_json: Annotated[bool, typer.Option("--json", help="One JSON object, for scripts.")] = False,
) -> None:
    """Tell how a run is doing, from any terminal.

    Running, finished, interrupted or dead; how far it is, what it has found, how old that is, and the command to go on
    with. Exit code 2: the folder is no run.
    """
    import json

    from stackopt.outputs.console import make_console
    from stackopt.outputs.run_status import show_state, state_object
    from stackopt.watching import look

    state = look(_folder(run))
    if as_json:
        typer.echo(json.dumps(state_object(state)))
    else:
        show_state(make_console(), state)


def page(
    run: RunFolder,
    out: Annotated[Path | None, typer.Option(metavar="FILE", help="HTML file; RUN/trade_off.html if left out.")] = None,
) -> None:
    """Write the trade-off page of a run.

    One HTML file, without any network, to look at the stacks, narrow them by limits, and compare a few.
    """
    from stackopt.outputs.console import make_console
    from stackopt.outputs.page import write_page
    from stackopt.outputs.report import short_path
    from stackopt.runs import read_run

    finished = read_run(_folder(run))
    path = out or run / "trade_off.html"
    write_page(finished.front, path, run.resolve().name)
    make_console().print(f"Page: {short_path(path)} (opens in a browser, needs no network)", soft_wrap=True)


def pick(
    run: RunFolder,
    rank: Annotated[int | None, typer.Option(metavar="N", help="The stack of this rank.")] = None,
    lightest: Annotated[bool, typer.Option("--lightest", help="The stack of least mass.")] = False,
    cheapest: Annotated[bool, typer.Option("--cheapest", help="The stack of least cost.")] = False,
    thinnest: Annotated[bool, typer.Option("--thinnest", help="The thinnest stack.")] = False,
    balanced: Annotated[
        bool, typer.Option("--balanced", help="The knee of the front (Das, 1999): least sum of scaled objectives.")
    ] = False,
    weights: Annotated[
        str | None, typer.Option(metavar="W", help="Least weighted sum of scaled values, such as mass=2,cost=1.")
    ] = None,
    max_cost: Annotated[float | None, typer.Option(metavar="C", help="Only stacks up to this cost per m^2.")] = None,
    max_sheets: Annotated[int | None, typer.Option(metavar="N", help="Only stacks of up to N sheets.")] = None,
    without: Annotated[
        list[str] | None, typer.Option(metavar="MATERIAL", help="Only stacks without it; may be given several times.")
    ] = None,
    only: Annotated[
        str | None, typer.Option(metavar="MATERIALS", help="Only stacks of these, with commas between.")
    ] = None,
    panel: Annotated[str | None, typer.Option(metavar="SIZE", help='Finished panel, such as "120mm x 80mm".')] = None,
    stock: Annotated[str | None, typer.Option(metavar="SIZE", help="Sheets as bought, to tell the waste.")] = None,
    out: Annotated[Path | None, typer.Option(metavar="FOLDER", help="Folder; RUN/pick-<rank> if left out.")] = None,
) -> None:
    """Pick a stack of a run and write its build sheet.

    Without a choice, a terminal shows the front and asks. Exit code 1: the filters leave no stack.
    """
    from stackopt.build import make_build_sheet
    from stackopt.outputs.build_files import write_build_sheet
    from stackopt.runs import read_run

    simple = {"--lightest": lightest, "--cheapest": cheapest, "--thinnest": thinnest, "--balanced": balanced}
    chosen = [name for name, wanted in simple.items() if wanted]
    chosen += [name for name, value in (("--rank", rank), ("--weights", weights)) if value is not None]
    wrong = _wrong_choice(chosen) + _wrong_numbers(max_cost, max_sheets)
    sizes, wrong_sizes = _sizes({"--panel": panel, "--stock": stock})
    parsed, wrong_weights = _weights(weights)
    _raise(wrong + wrong_sizes + wrong_weights)
    finished = read_run(_folder(run))
    front = finished.front
    if not len(front):
        raise UnmetMaskError(f"This run has no stack to pick. {front.statement}")
    kept = _kept(front, max_cost, max_sheets, without or [], only)
    index = _ask(finished, kept) if not chosen else _choose(front, kept, chosen[0], rank, parsed)
    sheet = make_build_sheet(front, index + 1, sizes["--panel"], sizes["--stock"])
    folder = out or run / f"pick-{index + 1}"
    if out is None and folder.is_symlink():
        raise InputError(Finding(str(folder), "", "is a link to another place; name the folder with --out"))
    _show(finished, index, write_build_sheet(sheet, folder, run.resolve().name), folder)


# Options --------------------------------------------------------------------------------------------------------------


def _folder(run: Path) -> Path:
    if not run.is_dir():
        raise InputError(Finding("", "RUN", f"found {str(run)!r}, which is no folder; name the folder of a run"))
    return run


def _raise(findings: list[Finding]) -> None:
    if findings:
        raise InputError(findings)


def _wrong_choice(chosen: list[str]) -> list[Finding]:
    if len(chosen) > 1:
        return [Finding("", " and ".join(chosen), "cannot be given together; choose one way to pick")]
    if not chosen and not _can_ask():
        return [Finding("", "choice", f"is missing, and there is no terminal to ask in; give {CHOICES}")]
    return []


def _can_ask() -> bool:
    return sys.stdin.isatty()


def _wrong_numbers(max_cost: float | None, max_sheets: int | None) -> list[Finding]:
    wrong = []
    if max_cost is not None and not 0.0 <= max_cost < math.inf:
        wrong.append(Finding("", "--max-cost", f"found {max_cost:g}; write a cost per m^2 of 0 or more"))
    if max_sheets is not None and max_sheets < 1:
        wrong.append(Finding("", "--max-sheets", f"found {max_sheets}; write 1 or more"))
    return wrong


def _sizes(texts: Mapping[str, str | None]) -> tuple[dict[str, tuple[float, float] | None], list[Finding]]:
    """Sizes by option, and what is wrong with them."""
    from stackopt.readers import parse_size

    sizes: dict[str, tuple[float, float] | None] = {}
    wrong = []
    for option, text in texts.items():
        sizes[option] = None
        if text is None:
            continue
        try:
            sizes[option] = parse_size(text)
        except ValueError as error:
            wrong.append(Finding("", option, str(error)))
    if texts["--stock"] is not None and texts["--panel"] is None:
        wrong.append(Finding("", "--stock", "tells nothing without --panel; give the size of the panel too"))
    return sizes, wrong


def _weights(text: str | None) -> tuple[dict[str, float], list[Finding]]:
    """Weights by quantity, and what is wrong with them."""
    from stackopt.choice import QUANTITIES
    from stackopt.readers.files import nearest

    weights: dict[str, float] = {}
    wrong = []
    for part in text.split(",") if text is not None else ():
        name, _, number = (piece.strip() for piece in part.partition("="))
        try:
            value = float(number)
        except ValueError:
            value = math.nan
        if name not in QUANTITIES:
            wrong.append(Finding("", "--weights", f"found {name!r}; {nearest(name, QUANTITIES)}"))
        elif name in weights:
            wrong.append(Finding("", "--weights", f"found {name!r} more than once; weigh each once"))
        elif not 0.0 <= value < math.inf:
            message = f"found {part.strip()!r}; write a quantity and a number of 0 or more, such as mass=2,cost=1"
            wrong.append(Finding("", "--weights", message))
        else:
            weights[name] = value
    if text is not None and not wrong and not any(weights.values()):
        wrong.append(Finding("", "--weights", "all weights are 0; give at least one above 0"))
    return weights, wrong


def _kept(
    front: Front, max_cost: float | None, max_sheets: int | None, without: list[str], only: str | None
) -> list[int]:
    """Indices of the rows that pass the filters."""
    from stackopt.choice import Filters, narrow

    excluded = [name.strip() for text in without for name in text.split(",")]
    wanted = [name.strip() for name in only.split(",")] if only is not None else []
    _raise(_wrong_names(front, "--without", excluded) + _wrong_names(front, "--only", wanted))
    filters: Filters = Filters(max_cost, tuple(excluded), tuple(wanted), max_sheets)
    return narrow(front.rows, filters, front.problem.currency)


def _wrong_names(front: Front, option: str, names: list[str]) -> list[Finding]:
    from stackopt.readers.files import nearest

    known = front.problem.materials
    return [
        Finding("", option, f"found {name!r}, which the material set does not hold; {nearest(name, known)}")
        for name in names
        if name not in known
    ]


# Choosing -------------------------------------------------------------------------------------------------------------


def _choose(front: Front, kept: list[int], option: str, rank: int | None, weights: Mapping[str, float]) -> int:
    from stackopt import choice

    rows = [front.rows[index] for index in kept]
    if option == "--rank":
        return _ranked(front, kept, rank or 0)
    if option == "--balanced":
        return kept[choice.balanced(rows, front.problem.search.objectives)]
    if option == "--weights":
        return kept[choice.weighted(rows, weights)]
    return kept[choice.best(rows, {"--lightest": "mass", "--cheapest": "cost", "--thinnest": "thickness"}[option])]


def _ranked(front: Front, kept: list[int], rank: int) -> int:
    if not 1 <= rank <= len(front):
        raise InputError(Finding("", "--rank", f"found {rank}; the front has ranks 1 to {len(front)}"))
    if rank - 1 not in kept:
        raise InputError(Finding("", "--rank", f"found {rank}, which the filters exclude; left are {_ranks(kept)}"))
    return rank - 1


def _ranks(kept: list[int]) -> str:
    shown = ", ".join(str(index + 1) for index in kept[:20])
    return shown if len(kept) <= 20 else f"{shown} and {len(kept) - 20} more"


def _ask(finished: FinishedRun, kept: list[int]) -> int:
    """Show the stacks that are left and ask for a rank."""
    from stackopt.outputs.console import make_console
    from stackopt.outputs.tables import front_text

    console = make_console()
    console.print(front_text(finished.front, console.width, only=kept), soft_wrap=True)
    while True:
        answer = typer.prompt("\nRank to build").strip()
        if answer.isdecimal() and int(answer) - 1 in kept:
            return int(answer) - 1
        console.print(f"Found {answer!r}; write one of {_ranks(kept)}, or stop with Ctrl-C.", soft_wrap=True)


def _show(finished: FinishedRun, index: int, files: list[Path], folder: Path) -> None:
    from stackopt.outputs.console import make_console
    from stackopt.outputs.report import section_text, short_path
    from stackopt.outputs.words import marked, row_margin_words, totals_words, where_words
    from stackopt.problem import format_stack

    console, front = make_console(), finished.front
    row, problem = front.rows[index], front.problem
    name = marked(front).get(index)
    console.print(f"Rank {index + 1} of {len(front)}{f', {name}' if name else ''}", style="bold", soft_wrap=True)
    lines = [
        ("stack", format_stack(row.stack)),
        ("totals", totals_words(row, problem.currency)),
        ("margin", f"{row_margin_words(row, problem)} {where_words(row, problem)}"),
        ("files", f"{short_path(folder)}: {', '.join(path.name for path in files)}"),
    ]
    console.print(section_text(lines, console.width), soft_wrap=True)
