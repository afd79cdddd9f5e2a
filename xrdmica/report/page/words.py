"""The verdict of a sample in two sentences, and other wording that pages share."""

from __future__ import annotations

from collections.abc import Sequence

from xrdmica.report.tables import plain
from xrdmica.results import SampleResult

__all__ = ["ANSWERS", "STATUS_WORDS", "listed", "verdict_sentences"]

STATUS_WORDS = {"present": "present", "trace": "trace", "possible": "possible", "not_detected": "not detected"}
ANSWERS = {"yes": "swells", "no": "does not swell", "cannot tell": "cannot tell"}


def listed(names: Sequence[str]) -> str:
    """Names as a sentence lists them."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} and {names[-1]}"


def _number(value: float) -> str:
    return f"{value:.0f}" if value >= 9.95 else f"{value:.1f}"


def verdict_sentences(result: SampleResult) -> tuple[str, str]:
    """What the sample is, in two sentences: whether it swells, and what it is made of.

    Parameters
    ----------
    result : SampleResult
        Finished sample.

    Returns
    -------
    tuple of str
        Plain text, to be escaped where it is shown.
    """
    s = result.swelling
    if s.verdict == "yes":
        first = "The sample holds swelling layers"
        if s.expandable_percent is not None:
            first += f": about {_number(s.expandable_percent)} % of its sheet silicates by weight"
            if s.low95 is not None and s.high95 is not None:
                first += f" (95 % interval {_number(s.low95)} to {_number(s.high95)} %)"
    elif s.verdict == "no":
        first = "No swelling layers were found in the sample"
        if s.high95 is not None and s.high95 >= 1:
            first += f"; if there are any, they are less than {_number(s.high95)} % of its sheet silicates"
    else:
        first = "These scans cannot tell whether the sample swells"
        if s.measure_next:
            first += f"; what would tell: {plain(s.measure_next).rstrip('.')}"
    weights = {p.phase: p.weight_percent for p in result.proportions.phases}
    found = sorted(result.findings.of_status("present", "trace"), key=lambda f: -(weights.get(f.phase) or 0.0))
    named = [plain(f.name) + (" (trace)" if f.status == "trace" else "") for f in found]
    open_ = [plain(f.name) for f in result.findings.of_status("possible")]
    second = f"It consists of {listed(named)}" if named else "No phase of the library was found for certain"
    if open_:
        second += f"; {listed(open_)} cannot be excluded"
    return f"{first}.", f"{second}."
