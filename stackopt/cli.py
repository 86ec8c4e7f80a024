"""The commands: options to calls, results to the terminal, exceptions to exit codes.

Everything heavy is imported inside the commands, so that help answers at once.
"""

from __future__ import annotations

import math
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
import typer.core

from stackopt import cli_endings, results_cli
from stackopt.cli_bench import bench
from stackopt.errors import Finding, InputError

if TYPE_CHECKING:
    from stackopt.outputs.console import PlainConsole
    from stackopt.problem import Problem, Stack
    from stackopt.run import RunResult

MOST_PER_CORE = 8
LARGEST_SEED = 2**32 - 1
PLOT_SUFFIXES = (".png", ".svg", ".pdf")


class Commands(typer.core.TyperGroup):
    """The group of all commands, which end as `stackopt.cli_endings` says."""

    def invoke(self, ctx: Any) -> Any:
        """Run the command."""
        return cli_endings.run(lambda: super(Commands, self).invoke(ctx))


app = typer.Typer(
    cls=Commands,
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
    help=(
        "Find the multilayer shield stacks that meet an attenuation mask at least mass, cost and thickness.\n\n"
        "Exit codes: 0 done; 1 the answer is no; 2 bad input; 130 interrupted, checkpoint written."
    ),
)

app.add_typer(bench, name="bench")

ProblemFile = Annotated[Path, typer.Argument(metavar="PROBLEM", help="Problem file (TOML).", show_default=False)]
RunFolder = Annotated[Path, typer.Argument(metavar="RUN", help="Folder of a run.", show_default=False)]
Outside = Annotated[
    bool, typer.Option("--allow-outside", help="Also read tables outside the folders of problem and material set.")
]
Plot = Annotated[Path | None, typer.Option(metavar="FILE", help="Draw the curves (.png, .svg or .pdf).")]
Hours = Annotated[float | None, typer.Option(metavar="H", help="Stop after H hours; the run can go on later.")]
Within = Annotated[
    str | None,
    typer.Option(metavar="SHARE", help="Also list every stack that is within this share of the front, such as 5%."),
]
Workers = Annotated[int | None, typer.Option(metavar="N", help="Processes to work with; one per core if left out.")]
Cluster = Annotated[
    str | None, typer.Option(metavar="ADDRESS", help="Work on a Dask scheduler's workers, such as tcp://host:8786.")
]


def _show_version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        typer.echo(f"stackopt {version('stackopt')}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version and exit.")
    ] = False,
) -> None:
    pass


@app.command()
def check(problem: ProblemFile, allow_outside: Outside = False) -> None:
    """Read a problem and tell whether any stack can meet the mask.

    Says what was understood; every mistake in the files is reported at once. Exit code 1: no stack was found that
    meets the mask.
    """
    from stackopt.compiled import MARGIN_SLACK_DB, compile_problem
    from stackopt.outputs.console import make_console
    from stackopt.outputs.report import sheets_to_look_at, show_scouted, show_sections
    from stackopt.readers import read_problem

    console = make_console()
    known = read_problem(problem, allow_outside)
    compiled = compile_problem(known, sheets_to_look_at(known))
    show_sections(console, compiled)
    console.print()
    _show_cautions(console, compiled.problem)

    from stackopt.scout import scout

    scouted = scout(compiled)
    show_scouted(console, compiled.problem, scouted, problem)
    if scouted.margin_db < -MARGIN_SLACK_DB:
        raise typer.Exit(1)


@app.command()
def predict(
    problem: ProblemFile,
    stacks: Annotated[
        list[str],
        typer.Argument(
            metavar="STACK", help='Such as "steel 150um / copper 35um", source side first; or a stack.toml.'
        ),
    ],
    csv: Annotated[Path | None, typer.Option(metavar="FILE", help="Write the table at full precision.")] = None,
    plot: Plot = None,
    sensitivity: Annotated[
        bool, typer.Option("--sensitivity", help="Tell which layer matters; with --plot, also as a figure beside it.")
    ] = False,
    layers: Annotated[Path | None, typer.Option(metavar="FILE", help="Write flux and heat of every layer.")] = None,
    coil: Annotated[Path | None, typer.Option(metavar="FILE", help="Write the change of the source.")] = None,
    allow_outside: Outside = False,
) -> None:
    """Predict the attenuation of stacks against the mask. Any thickness may be written."""
    from stackopt.outputs import drives
    from stackopt.outputs.console import make_console
    from stackopt.outputs.report import show_verdicts
    from stackopt.outputs.tables import prediction_tables, write_predictions
    from stackopt.prediction import predict as predict_stacks
    from stackopt.readers import read_problem

    _refuse(_wrong_plot(plot))
    console = make_console()
    known = read_problem(problem, allow_outside)
    drives.refuse_without(known, layers, coil)
    chosen = _parse_stacks(stacks, known)
    predictions = predict_stacks(known, chosen, bands=True)
    _show_cautions(console, known, chosen)
    for table in prediction_tables(predictions, console.width):
        console.print(table)
    show_verdicts(console, known, predictions)
    if csv is not None:
        write_predictions(predictions, csv)
        console.print(f"Table: {csv}", soft_wrap=True)
    drives.write_tables(console, known, predictions, layers, coil)
    if plot is not None:
        from stackopt.outputs.plots import write_prediction_plot

        write_prediction_plot(known, chosen, plot)
        console.print(f"Plot: {plot}", soft_wrap=True)
    if sensitivity:
        from stackopt.outputs.tolerances import show_sensitivity

        show_sensitivity(console, known, chosen, plot)


@app.command()
def search(
    problem: Annotated[
        Path | None,
        typer.Argument(
            metavar="PROBLEM", help="Problem file (TOML); a resumed run has its own copy.", show_default=False
        ),
    ] = None,
    hours: Hours = None,
    workers: Workers = None,
    seed: Annotated[int | None, typer.Option(metavar="N", help="Random seed instead of the problem's own.")] = None,
    out: Annotated[
        Path | None, typer.Option(metavar="FOLDER", help="New folder for the run; results/<problem>-<n> if left out.")
    ] = None,
    resume: Annotated[Path | None, typer.Option(metavar="RUN", help="Go on with an interrupted run.")] = None,
    within: Within = None,
    cluster: Cluster = None,
    allow_outside: Outside = False,
) -> None:
    """Find the stacks that meet the mask and that none other beats.

    None other is as good in every objective and better in one. Explores first, then proves that no stack is missing,
    and checks the result on a denser grid. Ctrl-C stops with a checkpoint. Exit code 1: no stack meets the mask.
    """
    _refuse(
        _wrong_hours(hours), _wrong_workers(workers, cluster), _wrong_seed(seed),
        *_wrong_start(problem, seed, out, resume),
    )  # fmt: skip
    from stackopt.outputs.progress import TerminalProgress
    from stackopt.run import RunOptions, search_run

    options = RunOptions(
        hours=hours,
        workers=workers,
        seed=seed,
        out=out,
        resume=resume,
        allow_outside=allow_outside,
        within=_share(within),
        cluster=cluster,
    )
    with TerminalProgress() as watcher:
        result = search_run(problem, options, watcher)
    _show_result(result)


@app.command()
def prove(
    run: RunFolder, hours: Hours = None, workers: Workers = None, within: Within = None, cluster: Cluster = None
) -> None:
    """Go on with the proof that the front of a run is complete.

    The front is all the stacks that meet the mask and that none other beats.
    """
    _refuse(_wrong_hours(hours), _wrong_workers(workers, cluster), _wrong_run("RUN", run))
    from stackopt.outputs.progress import TerminalProgress
    from stackopt.run import RunOptions, prove_run

    options = RunOptions(hours=hours, workers=workers, within=_share(within), cluster=cluster)
    with TerminalProgress() as watcher:
        result = prove_run(run, options, watcher)
    _show_result(result)


@app.command()
def materials(
    material_set: Annotated[Path, typer.Argument(metavar="SET", help="Material set (TOML).", show_default=False)],
    origins: Annotated[bool, typer.Option("--origins", help="Also list where each number comes from.")] = False,
    plot: Plot = None,
    allow_outside: Outside = False,
) -> None:
    """List a material set: stock, prices, permeability, skin depth."""
    from stackopt.outputs.console import make_console
    from stackopt.outputs.materials import material_tables
    from stackopt.outputs.report import show_text
    from stackopt.readers import read_material_set

    _refuse(_wrong_plot(plot))
    console = make_console()
    known = read_material_set(material_set, allow_outside)
    console.print(known.title, style="bold")
    for table in material_tables(known, origins):
        console.print()
        console.print(table)
    for remarks in known.remarks.values():
        for remark in remarks:
            show_text(console, f"Remark: {remark}")
    if plot is not None:
        from stackopt.outputs.material_plots import write_material_plot

        write_material_plot(known, plot)
        console.print(f"Plot: {plot}", soft_wrap=True)


results_cli.add_to(app)


def _parse_stacks(texts: list[str], problem: Problem) -> list[Stack]:
    """Read every stack, or stack file, and report the mistakes of all of them together."""
    from stackopt.readers import parse_stack, read_stack

    stacks: list[Stack] = []
    findings: list[Finding] = []
    for text in texts:
        try:
            is_file = text.strip().lower().endswith(".toml")
            stacks.append(read_stack(text, problem) if is_file else parse_stack(text, problem.materials))
        except InputError as error:
            findings.extend(error.findings)
    if findings:
        raise InputError(findings)
    return stacks


def _show_result(result: RunResult) -> None:
    from stackopt.outputs.console import make_console
    from stackopt.outputs.report import short_path, show_text
    from stackopt.outputs.tables import front_text

    console, front = make_console(), result.front
    folder = short_path(result.folder)
    if len(front):
        _show_cautions(console, front.problem, [row.stack for row in front.rows])
        text = front_text(front, console.width, rest_in=os.path.join(folder, "front.csv"))
        console.print(text + "\n", soft_wrap=True)
    if front.equals:
        count = f"{len(front.equals):,} more stacks have" if len(front.equals) > 1 else "1 more stack has"
        show_text(console, f"{count} exactly the objectives of one of these: see front_equals.csv.")
    show_text(console, front.statement)
    names = ", ".join(sorted(path.name for path in result.folder.iterdir() if not path.name.startswith("checkpoint")))
    show_text(console, f"Files in {folder}: {names}")
    if not len(front):
        raise typer.Exit(1)


def _show_cautions(console: PlainConsole, problem: Problem, stacks: list[Stack] | None = None) -> None:
    from stackopt.outputs.cautions import cautions
    from stackopt.outputs.report import section_text

    console.print("Cautions", style="bold")
    lines = [("-", text) for text in cautions(problem, stacks)]
    console.print(section_text(lines, console.width) + "\n", soft_wrap=True)


def _refuse(*findings: Finding | None) -> None:
    """Report all wrong options together."""
    wrong = [finding for finding in findings if finding is not None]
    if wrong:
        raise InputError(wrong)


def _share(within: str | None) -> float | None:
    """Read ``--within``: 0 % or more, and less than all."""
    from stackopt.units import parse_quantity

    if within is None:
        return None
    try:
        share = parse_quantity(within, "ratio")
    except ValueError as error:
        raise InputError(Finding("", "--within", str(error))) from None
    if not 0.0 <= share <= 1.0:
        raise InputError(Finding("", "--within", f"found {within}; write a share from 0 % to 100 %, such as 5%"))
    return share


def _wrong_hours(hours: float | None) -> Finding | None:
    if hours is None or 0.0 < hours < math.inf:
        return None
    return Finding("", "--hours", f"found {hours:g}; write a time above 0 hours, such as 0.5")


def _wrong_workers(workers: int | None, cluster: str | None) -> Finding | None:
    if workers is not None and cluster is not None:
        return Finding("", "--workers", "cannot be given with --cluster, which has workers of its own; leave one out")
    most = MOST_PER_CORE * (os.cpu_count() or 1)
    if workers is None or 1 <= workers <= most:
        return None
    return Finding("", "--workers", f"found {workers}; write a number from 1 to {most}, {MOST_PER_CORE} for each core")


def _wrong_seed(seed: int | None) -> Finding | None:
    if seed is None or 0 <= seed <= LARGEST_SEED:
        return None
    return Finding("", "--seed", f"found {seed}; write a whole number from 0 to {LARGEST_SEED}")


def _wrong_start(problem: Path | None, seed: int | None, out: Path | None, resume: Path | None) -> list[Finding | None]:
    if resume is None:
        if problem is None:
            return [Finding("", "PROBLEM", "is missing; name a problem file, or a run to go on with: --resume RUN")]
        return [_wrong_out(out)]
    kept = [
        Finding("", name, "cannot be given with --resume: a resumed run keeps its own; leave it out")
        for name, value in (("--seed", seed), ("--out", out))
        if value is not None
    ]
    return [*kept, _wrong_run("--resume", resume)]


def _wrong_out(out: Path | None) -> Finding | None:
    if out is None or not out.exists():
        return None
    if not out.is_dir():
        return Finding("", "--out", f"found {str(out)!r}, which is a file; name a new folder")
    if any(out.iterdir()):
        return Finding(
            "", "--out", f"found {str(out)!r}, which is not empty; name a new folder, or go on with a run: --resume RUN"
        )
    return None


def _wrong_run(name: str, run: Path) -> Finding | None:
    if run.is_dir():
        return None
    return Finding("", name, f"found {str(run)!r}, which is no folder; name the folder of a run")


def _wrong_plot(plot: Path | None) -> Finding | None:
    if plot is None or plot.suffix.lower() in PLOT_SUFFIXES:
        return None
    return Finding("", "--plot", f"found {str(plot)!r}; write a name that ends in {', '.join(PLOT_SUFFIXES)}")


def main() -> None:
    """Entry point of the command ``stackopt``."""
    cli_endings.mend_streams()
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a terminal of few characters shows "?" instead of failing
    with cli_endings.guarded():
        app()
