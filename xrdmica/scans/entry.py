"""A sample by name with its files, before they are read."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from types import MappingProxyType

from xrdmica.radiation import Radiation
from xrdmica.scans.align import aligned_by
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Mount, RadiationOrigin, Sample
from xrdmica.scans.treatment import Treatment

__all__ = ["SampleEntry", "SheetRow"]


@dataclass(frozen=True)
class SheetRow:
    """One scan of a sample.

    Attributes
    ----------
    line : int or None
        Line of the sheet, None without a sheet.
    path : Path
        The export.
    mount, treatment
        State of the specimen.
    radiation : Radiation or None
        Tube, None to take it from the file.
    radiation_origin : str
        Where `radiation` comes from.
    details : mapping
        Further columns of this row.
    notes : tuple of str
        What was supposed.
    """

    line: int | None
    path: Path
    mount: Mount
    treatment: Treatment
    radiation: Radiation | None = None
    radiation_origin: RadiationOrigin = "option"
    details: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    notes: tuple[str, ...] = ()

    def __reduce__(self) -> tuple[object, ...]:
        # mapping proxies do not pickle, and worker processes are handed entries
        values = (
            self.line, self.path, self.mount, self.treatment, self.radiation, self.radiation_origin, dict(self.details),
            self.notes,
        )  # fmt: skip
        return (_rebuild_row, values)


def _rebuild_row(*values: object) -> SheetRow:
    row = SheetRow(*values)  # type: ignore[arg-type]
    return replace(row, details=MappingProxyType(dict(row.details)))


@dataclass(frozen=True)
class SampleEntry:
    """A sample as the sheet or the folder names it, its files not read yet.

    Attributes
    ----------
    name : str
        Sample.
    rows : tuple of SheetRow
        Its scans in the order of the sheet.
    details : mapping
        Further columns, with different values of several rows joined by semicolons.
    """

    name: str
    rows: tuple[SheetRow, ...]
    details: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    def __reduce__(self) -> tuple[object, ...]:
        return (_rebuild_entry, (self.name, self.rows, dict(self.details)))

    def load(self) -> Sample:
        """Read the files.

        Raises
        ------
        ScanError
            If one of them cannot be read; other samples are not concerned.
        """
        scans = []
        for row in self.rows:
            scan = read_scan(
                row.path, radiation=row.radiation, radiation_origin=row.radiation_origin, mount=row.mount, treatment=row.treatment
            )
            if row.details.get("angle_scale"):
                scan = aligned_by(scan, row.details["angle_scale"])
            metadata = MappingProxyType({**scan.metadata, **row.details})
            scans.append(replace(scan, notes=(*row.notes, *scan.notes), metadata=metadata))
        return Sample(self.name, tuple(scans), self.details)


def _rebuild_entry(name: str, rows: tuple[SheetRow, ...], details: dict[str, str]) -> SampleEntry:
    return SampleEntry(name, rows, MappingProxyType(details))
