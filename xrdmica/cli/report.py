"""``xrdmica report``: pages to read in a browser."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from xrdmica.results import SampleResult

__all__ = ["command"]


@click.command(name="report", epilog="Example: xrdmica report results --out pages   (then open pages/index.html)")
@click.argument("sources", metavar="RESULT...", nargs=-1, type=click.Path(exists=True, path_type=Path))
@click.option("--out", required=True, metavar="DIR", type=click.Path(path_type=Path), help="Folder for the pages.")
@click.option("--method", is_flag=True, help="Write the method page: equations, sources, validation numbers.")
def command(sources: tuple[Path, ...], out: Path, method: bool) -> None:
    """Write results as pages that open in any browser, without network.

    RESULT is a result file (<sample>.json) or a folder of them. One result gives one file that needs no other; several
    give a page each and an overview, index.html, with the plotting script stored once beside them.
    """
    if not sources and not method:
        raise click.UsageError("name result files or a folder of them, or give --method")
    if out.is_file():
        raise click.BadParameter(f"{out} is a file; give a folder.", param_hint="--out")
    written: list[Path] = []
    if method:
        from xrdmica.report.page import write_method_page

        written.append(write_method_page(out))
    if sources:
        from xrdmica.report.page import write_pages

        written = write_pages(_results(_files(sources)), out) + written
    click.echo(f"wrote {len(written)} page{'s' if len(written) != 1 else ''}; open {written[0]}", err=True)


def _files(sources: tuple[Path, ...]) -> list[Path]:
    """Result files in the order given, folders in the order of names; other JSON files of a folder are left alone."""
    from xrdmica.errors import XrdmicaError
    from xrdmica.report.files import sample_of_file

    found: list[Path] = []
    for source in sources:
        if not source.is_dir():
            found.append(source)
            continue
        inside = [path for path in sorted(source.glob("*.json")) if sample_of_file(path) is not None]
        if not inside:
            raise XrdmicaError(f"{source}: holds no result file", fix="give the folder that `xrdmica batch --out` made")
        found += inside
    return list(dict.fromkeys(found))


def _results(files: list[Path]) -> Iterator[SampleResult]:
    from xrdmica.report.files import read_result

    for path in files:
        yield read_result(path)
