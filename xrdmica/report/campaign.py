"""What a campaign of many samples comes to: one small row per sample, groups of similar samples, repeats."""

from __future__ import annotations

from dataclasses import dataclass, field

__all__ = ["Campaign", "CampaignRow", "Repeat"]


@dataclass(frozen=True)
class CampaignRow:
    """One sample as the overview shows it; small, so that memory stays flat over many samples.

    Attributes
    ----------
    sample : str
    page : str
        File of its page, relative to the overview; empty when there is none.
    verdict : str
        On swelling: yes, no or cannot tell; empty when the sample failed.
    expandable, low95, high95 : float or None
        Expandable layers with interval, wt %.
    phases : dict
        Phase name -> weight percent, fitted phases only.
    groups : dict
        Group -> weight percent.
    reduced_chi_square : float or None
    flags : tuple of str
        Quality flags in a few words each.
    cluster : int or None
        Number of the group of similar samples, from 1; None when not computed.
    failed : str
        Why the sample failed; empty when it did not.
    """

    sample: str
    page: str = ""
    verdict: str = ""
    expandable: float | None = None
    low95: float | None = None
    high95: float | None = None
    phases: dict[str, float] = field(default_factory=dict)
    groups: dict[str, float] = field(default_factory=dict)
    reduced_chi_square: float | None = None
    flags: tuple[str, ...] = ()
    cluster: int | None = None
    failed: str = ""


@dataclass(frozen=True)
class Repeat:
    """Repeatability of one quantity over the samples that the sheet marks as repeats or standards.

    Attributes
    ----------
    label : str
        What the sheet calls the set.
    phase : str
        Phase name.
    samples : int
    mean, deviation : float
        Mean and standard deviation over the samples, wt %.
    typical_error : float or None
        Mean of the standard errors that the estimates gave, wt %.
    """

    label: str
    phase: str
    samples: int
    mean: float
    deviation: float
    typical_error: float | None = None


@dataclass(frozen=True)
class Campaign:
    """All samples of a run.

    Attributes
    ----------
    title : str
    rows : tuple of CampaignRow
        In the order of the sheet, failed ones too.
    repeats : tuple of Repeat
    figures : dict
        Caption -> file of an SVG figure, relative to the overview.
    """

    title: str
    rows: tuple[CampaignRow, ...]
    repeats: tuple[Repeat, ...] = ()
    figures: dict[str, str] = field(default_factory=dict)
