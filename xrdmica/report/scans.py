"""A sample's scans as records for results and tables."""

from __future__ import annotations

from xrdmica.results import ScanSummary
from xrdmica.scans.scan import Sample

__all__ = ["scan_summaries"]


def scan_summaries(sample: Sample) -> tuple[ScanSummary, ...]:
    """How each scan of a sample was read, before any fit.

    Parameters
    ----------
    sample : Sample
        Its scans.

    Returns
    -------
    tuple of ScanSummary
        One per scan under the label it has within the sample; file names without their folder.
    """
    return tuple(
        ScanSummary(
            label=label,
            file=scan.source.replace("\\", "/").rsplit("/", 1)[-1],
            mount=scan.mount,
            treatment=scan.treatment.name,
            radiation=scan.radiation.name,
            radiation_origin=scan.radiation_origin,
            two_theta_range=(float(scan.two_theta[0]), float(scan.two_theta[-1])),
            points=int(scan.two_theta.size),
            notes=scan.notes,
        )
        for label, scan in zip(sample.labels, sample.scans, strict=True)
    )
