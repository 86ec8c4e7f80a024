"""The commands of the bench: fit, calibrate, compare."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from stackopt.errors import Finding, InputError

PLOT_SUFFIXES = (".png", ".svg", ".pdf")
MOST_REPLICATES = 10_000

bench = typer.Typer(
    no_args_is_help=True,
    rich_markup_mode=None,
    help="Fit materials to measured sweeps, compare prototypes.",
)

SetupFile = Annotated[Path, typer.Argument(metavar="SETUP", help="Setup file (TOML).", show_default=False)]
Floor = Annotated[
    str | None,
    typer.Option(
        metavar="LEVEL",
        help='Noise floor: "20 uV" for amplitudes, "-90 dB" for levels, "70 dB" for attenuations at most measurable.',
    ),
]
Seed = Annotated[int, typer.Option(metavar="N", help="Random seed.")]
Plot = Annotated[Path | None, typer.Option(metavar="FILE", help="Draw data and curves (.png, .svg or .pdf).")]
Outside = Annotated[
    bool, typer.Option("--allow-outside", help="Also read files outside the setup's or problem's folder.")
]


@bench.command()
def fit(
    setup: SetupFile,
    material: Annotated[str, typer.Option(metavar="NAME", help="Name of the material.", show_default=False)],
    out: Annotated[Path | None, typer.Option(metavar="FILE", help="Write a material entry (TOML).")] = None,
    json: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Write the fit; beside --out under its name if left out.")
    ] = None,
    plot: Plot = None,
    floor: Floor = None,
    bootstrap: Annotated[int, typer.Option(metavar="N", help="Replicates of the bootstrap; 0 for none.")] = 200,
    seed: Seed = 1,
    allow_outside: Outside = False,
) -> None:
    """Fit a sheet's conductivity and permeability to measured sweeps.

    Says which values the sweeps determine, and which only in combination. With --out it writes a material entry to
    paste into a set, a JSON of the fit and a plot beside it.
    """
    _refuse(_wrong_plot(plot), _wrong_number("--bootstrap", bootstrap), _wrong_number("--seed", seed, 2**32 - 1))
    import datetime
    from importlib.metadata import version

    import numpy as np

    from stackopt.bench.entries import entry_toml, fit_json
    from stackopt.bench.fit import fit as fit_material
    from stackopt.outputs.bench_report import show_fit
    from stackopt.outputs.console import make_console
    from stackopt.readers.setups import read_setup

    console = make_console()
    known = read_setup(setup, floor, allow_outside)
    result = fit_material(known, np.random.default_rng(seed), bootstrap)
    entry = entry_toml(result, material, datetime.date.today())
    show_fit(console, result, material)
    texts = [(out, entry, "Material entry"), (json or _beside(out, ".json"), None, "Fit")]
    for path, text, words in texts:
        if path is not None:
            _write(path, fit_json(result, material, version("stackopt")) if text is None else text)
            console.print(f"{words}: {path}", soft_wrap=True)
    drawn = plot or _beside(out, ".png")
    if drawn is not None:
        from stackopt.outputs.bench_plots import write_fit_plot

        write_fit_plot(result, f"Fit of {material}", drawn)
        console.print(f"Plot: {drawn}", soft_wrap=True)
    if out is not None and "density" not in known.entry:
        console.print(
            "The entry lacks a density, which a set needs: add it, or state it under [known].", soft_wrap=True
        )


@bench.command()
def calibrate(
    setup: SetupFile,
    out: Annotated[Path | None, typer.Option(metavar="FILE", help="Write the calibrated [field] (TOML).")] = None,
    plot: Plot = None,
    floor: Floor = None,
    seed: Seed = 1,
    allow_outside: Outside = False,
) -> None:
    """Fit the gaps and effective radii of a setup to a sheet whose properties are known.

    The setup states conductivity and permeability of the sheet under [known], such as those of rolled copper.
    """
    _refuse(_wrong_plot(plot), _wrong_number("--seed", seed, 2**32 - 1))
    import datetime

    import numpy as np

    from stackopt.bench.calibrate import calibrate as calibrate_setup
    from stackopt.bench.entries import setup_toml
    from stackopt.outputs.bench_report import show_calibration
    from stackopt.outputs.console import make_console
    from stackopt.readers.setups import read_setup

    console = make_console()
    known = read_setup(setup, floor, allow_outside)
    result = calibrate_setup(known, np.random.default_rng(seed))
    show_calibration(console, result)
    if out is not None:
        _write(out, setup_toml(result, datetime.date.today()))
        console.print(
            f"Calibrated field: {out}; put it in place of [field] and [uncertainty] of a setup", soft_wrap=True
        )
    if plot is not None:
        from stackopt.outputs.bench_plots import write_fit_plot

        write_fit_plot(result, f"Calibration of {known.name}", plot)
        console.print(f"Plot: {plot}", soft_wrap=True)


@bench.command()
def compare(
    stack: Annotated[
        str, typer.Argument(metavar="STACK", help='Stack file (.toml), or text such as "steel 150um / copper 35um".')
    ],
    sweep: Annotated[Path, typer.Argument(metavar="SWEEP", help="Measured sweep (.csv or .s2p).", show_default=False)],
    problem: Annotated[Path, typer.Option(metavar="PROBLEM", help="Problem file (TOML).", show_default=False)],
    without: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Touchstone file without the stack, for a .s2p sweep.")
    ] = None,
    requirement: Annotated[
        str | None, typer.Option(metavar="NAME", help="Requirement that was measured, where there are several.")
    ] = None,
    floor: Floor = None,
    noise: Annotated[
        str | None, typer.Option(metavar="LEVEL", help='Standard deviation of the measurement, such as "0.3 dB".')
    ] = None,
    csv: Annotated[Path | None, typer.Option(metavar="FILE", help="Write the table at full precision.")] = None,
    plot: Plot = None,
    allow_outside: Outside = False,
) -> None:
    """Compare a measured prototype with its mask and its prediction.

    Where they differ by more than tolerances and noise explain, likely causes are ranked. Exit code 1: the mask is
    missed at a measured frequency.
    """
    level, wrong = _noise_db(noise)
    _refuse(_wrong_plot(plot), wrong)
    from stackopt.bench.compare import compare as compare_stack
    from stackopt.outputs.bench_report import show_comparison, write_comparison_csv
    from stackopt.outputs.console import make_console
    from stackopt.readers import parse_stack, read_problem
    from stackopt.readers.stacks import read_stack
    from stackopt.readers.sweeps import read_sweep

    console = make_console()
    known = read_problem(problem, allow_outside)
    is_file = stack.lower().endswith(".toml")
    layers = read_stack(Path(stack), known) if is_file else parse_stack(stack, known.materials)
    result = compare_stack(known, layers, read_sweep(sweep, floor, without), requirement, level)
    show_comparison(console, result, known)
    if csv is not None:
        write_comparison_csv(result, csv)
        console.print(f"Table: {csv}", soft_wrap=True)
    if plot is not None:
        from stackopt.outputs.bench_plots import write_comparison_plot

        write_comparison_plot(result, f"Prototype and prediction: {known.title}", plot)
        console.print(f"Plot: {plot}", soft_wrap=True)
    if result.meets_mask is False:
        raise typer.Exit(1)


def _noise_db(text: str | None) -> tuple[float | None, Finding | None]:
    if text is None:
        return None, None
    from stackopt.units import parse_quantity

    try:
        value = parse_quantity(text, "level")
    except ValueError as error:
        return None, Finding("", "--noise", str(error))
    if value <= 0.0:
        return None, Finding("", "--noise", f"found {text!r}; write a level above 0 dB")
    return value, None


def _beside(out: Path | None, suffix: str) -> Path | None:
    return None if out is None else out.with_suffix(suffix)


def _write(path: Path, text: str) -> None:
    from stackopt.outputs.files import write_whole

    def write(part: Path) -> None:
        part.write_text(text, encoding="utf-8")

    write_whole(path, write)


def _refuse(*findings: Finding | None) -> None:
    """Report all wrong options together."""
    wrong = [finding for finding in findings if finding is not None]
    if wrong:
        raise InputError(wrong)


def _wrong_plot(plot: Path | None) -> Finding | None:
    if plot is None or plot.suffix.lower() in PLOT_SUFFIXES:
        return None
    return Finding("", "--plot", f"found {str(plot)!r}; write a name that ends in {', '.join(PLOT_SUFFIXES)}")


def _wrong_number(name: str, value: int, high: int = MOST_REPLICATES) -> Finding | None:
    if 0 <= value <= high:
        return None
    return Finding("", name, f"found {value}; write a whole number from 0 to {high}")
