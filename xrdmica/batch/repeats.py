"""Repeatability of samples that the sheet marks as repeats of another or as preparations of a standard."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from xrdmica.report.campaign import Repeat
from xrdmica.results import SampleResult

__all__ = ["REPEATS_HEADER", "RepeatCollector", "repeats_rows"]

REPEATS_HEADER = ("set", "phase", "samples", "mean", "standard_deviation", "typical_standard_error")
_COLUMNS = ("repeat_of", "standard_sample")


@dataclass
class RepeatCollector:
    """Takes finished samples one by one and keeps the few numbers that are needed.

    The sheet column ``repeat_of`` holds the name of the sample that a sample repeats (which then belongs to the set itself);
    ``standard_sample`` holds the name of a standard material, the same for all its preparations.

    Attributes
    ----------
    originals : frozenset of str
        Samples that others repeat; see `originals_of`.
    """

    originals: frozenset[str] = frozenset()
    _sets: dict[str, dict[str, list[tuple[float, float | None]]]] = field(default_factory=dict)

    @staticmethod
    def originals_of(details: Iterable[Mapping[str, str]]) -> frozenset[str]:
        """Names in the column ``repeat_of``."""
        return frozenset(d["repeat_of"].strip() for d in details if d.get("repeat_of", "").strip())

    def add(self, result: SampleResult) -> None:
        """Note a sample if the sheet marks it."""
        labels = {result.details.get(column, "").strip() for column in _COLUMNS}
        if result.sample in self.originals:
            labels.add(result.sample)
        for label in labels - {""}:
            phases = self._sets.setdefault(label, {})
            for weight in result.proportions.phases:
                if weight.weight_percent is not None:
                    phases.setdefault(weight.name, []).append((weight.weight_percent, weight.standard_error))

    def repeats(self) -> tuple[Repeat, ...]:
        """Standard deviation over the samples of each set, for phases with a weight in two samples at least.

        References
        ----------
        ISO 5725-2: repeatability standard deviation of test results under the same conditions.
        """
        out = []
        for label, phases in self._sets.items():
            for phase, values in phases.items():
                if len(values) < 2:
                    continue
                weights = [weight for weight, _ in values]
                mean = math.fsum(weights) / len(weights)
                deviation = math.sqrt(math.fsum((w - mean) ** 2 for w in weights) / (len(weights) - 1))
                errors = [error for _, error in values if error is not None]
                typical = math.fsum(errors) / len(errors) if len(errors) == len(values) else None
                out.append(Repeat(label, phase, len(weights), mean, deviation, typical))
        return tuple(out)


def repeats_rows(repeats: Iterable[Repeat]) -> list[tuple[str | int | float | None, ...]]:
    """Rows of ``repeats.csv``."""
    return [(r.label, r.phase, r.samples, r.mean, r.deviation, r.typical_error) for r in repeats]
