"""``xrdmica trial``: how well would this work for my kind of sample?"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xrdmica.cli import options

if TYPE_CHECKING:
    from rich.console import Console

    from xrdmica.report.trial_report import Recovery

__all__ = ["command"]


@click.command(name="trial", epilog="Example: xrdmica trial --samples 2 --seed 1 --out trial")
@click.argument("specification", required=False, metavar="[FILE]", type=click.Path(path_type=Path))
@click.option("--out", required=True, metavar="DIR", type=click.Path(path_type=Path), help="Folder for what is found.")
@click.option("--samples", default=100, show_default=True, type=click.IntRange(1, 1_000_000), help="Samples to simulate.")
@click.option("--seed", default=1, show_default=True, type=click.IntRange(0), help="Fixes what is drawn.")
@options.workers_option
@click.option("--quiet", is_flag=True, help="No progress.")
def command(specification: Path | None, out: Path, samples: int, seed: int, workers: int | None, quiet: bool) -> None:
    """Simulate samples, analyse them like real ones, and report how well it went.

    FILE is a small TOML file: which phases with which range of weights, which treatments, how much noise and how far
    optics and orientation differ; without it a usual clay mixture is tried. A trial that was stopped goes on where it was.

    Example of a FILE:

    \b
      treatments = ["air_dried", "glycolated"]
      phases_per_sample = [2, 4]
      [phases]
      illite = [10, 60]
      smectite = [5, 50]
      kaolinite = [5, 40]
    """
    from dataclasses import asdict

    from xrdmica.batch.executors import available_cores
    from xrdmica.batch.trial import TrialSpecification, load_specification, run_trial
    from xrdmica.report.figures import save_figure
    from xrdmica.report.files import write_csv, write_text
    from xrdmica.report.tables import console_for
    from xrdmica.report.trial_report import recovery, trial_figure

    chosen = TrialSpecification() if specification is None else load_specification(specification)

    def progress(done: int, total: int) -> None:
        if not quiet and (sys.stderr.isatty() or done % 10 == 0 or done == total):
            click.echo(f"[{done}/{total}]", err=True, nl=not sys.stderr.isatty())
            if sys.stderr.isatty():
                click.echo("\r", err=True, nl=False)

    outcomes = run_trial(
        chosen, out, samples=samples, seed=seed, workers=available_cores() if workers is None else workers, on_progress=progress
    )
    found = recovery(outcomes)
    header = ("sample", "phase", "true_percent", "status", "weight_percent", "low95", "high95", "standard_error")
    rows = [
        (o.number, p.phase, None if p.true_percent != p.true_percent else p.true_percent, p.status, p.weight_percent, p.low95,
         p.high95, p.standard_error)
        for o in outcomes for p in o.phases
    ]  # fmt: skip
    write_csv(out / "trial.csv", header, rows)
    columns = tuple(asdict(found.phases[0])) if found.phases else ("phase",)
    write_csv(out / "recovery.csv", columns, [tuple(asdict(p).values()) for p in found.phases])
    write_text(out / "specification.json", chosen.model_dump_json(indent=2) + "\n")
    save_figure(trial_figure(outcomes), out / "trial.png")
    _tell(found, console_for())
    click.echo(f"\nFiles in {out}: recovery.csv, trial.csv, trial.png, specification.json")


def _shown(value: float | None, factor: float = 1.0, digits: int = 1) -> str:
    return "" if value is None else f"{factor * value:.{digits}f}"


def _tell(found: Recovery, console: Console) -> None:
    """Print a trial for people."""
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD)
    for name in ("phase", "samples", "named", "possible", "wrongly named", "mean error", "bias", "in 68 %", "in 95 %"):
        table.add_column(name, justify="left" if name == "phase" else "right")
    for p in found.phases:
        if p.times or p.wrong:
            table.add_row(
                p.phase, str(p.times), str(p.called), str(p.possible), str(p.wrong), _shown(p.mean_error), _shown(p.bias),
                _shown(p.cover68, 100, 0), _shown(p.cover95, 100, 0),
            )  # fmt: skip
    console.print(table)
    console.print(
        f"{found.samples} samples: of the phases called present or trace {_shown(found.precision, 100)} % were there; of those "
        f"there {_shown(found.recall, 100)} % were called so.\n"
        f"Error per phase {_shown(found.median_error_per_phase)} wt %, summed over a sample "
        f"{_shown(found.median_error_sum)} wt % (medians over samples).\n"
        f"95 % intervals held the truth in {_shown(found.cover95, 100)} %, standard errors in {_shown(found.cover68, 100)} %. "
        f"Median time {found.median_seconds:.2f} s per sample.\n"
        "Simulated samples share part of the program's physics: weigh out mixtures of your own before you rely on this."
    )
