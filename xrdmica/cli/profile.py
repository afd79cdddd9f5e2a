"""``xrdmica profile``: proportions along a coordinate."""

from __future__ import annotations

from pathlib import Path

import click

__all__ = ["command"]


@click.command(name="profile", epilog="Example: xrdmica profile results --along depth_m --out profile")
@click.argument("results", nargs=-1, required=True, metavar="RESULT...", type=click.Path(exists=True, path_type=Path))
@click.option("--along", default="depth_m", show_default=True, metavar="COLUMN", help="Column of the sample sheet to go along.")
@click.option("--out", required=True, metavar="DIR", type=click.Path(path_type=Path), help="Folder for table and figure.")
@click.option(
    "--format", "kind", type=click.Choice(["png", "svg", "pdf"]), default="png", show_default=True, help="Kind of figure."
)
def command(results: tuple[Path, ...], along: str, out: Path, kind: str) -> None:
    """Draw proportions with intervals against depth, or along any column of numbers of the sheet.

    RESULT is a result file of a sample (JSON) or a folder of them, as `xrdmica batch` writes it.
    """
    from xrdmica.interpret.profile import PROFILE_HEADER, profile_points
    from xrdmica.report.figures import save_figure
    from xrdmica.report.files import read_result, sample_of_file, write_csv
    from xrdmica.report.profile_figure import profile_figure

    files: list[Path] = []
    for path in results:
        files += [f for f in sorted(path.glob("*.json")) if sample_of_file(f) is not None] if path.is_dir() else [path]
    points = profile_points([read_result(path) for path in files], along)
    write_csv(out / "profile.csv", PROFILE_HEADER, (point.row for point in points))
    save_figure(profile_figure(points, along), out / f"profile.{kind}")
    click.echo(f"wrote {out / 'profile.csv'} and {out / f'profile.{kind}'}", err=True)
