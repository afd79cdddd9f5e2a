"""``run.json``: what is needed to repeat a run. No clock and no worker count, so that a repeat gives equal bytes."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any, Protocol

from xrdmica.batch.resume import Circumstances
from xrdmica.batch.store import replace_text

__all__ = ["write_record"]


class _Ended(Protocol):
    entry: Any
    stem: str
    digests: tuple[bytes | None, ...]
    fingerprint: str
    finished: bool
    reason: str | None


def write_record(out: Path, tasks: Sequence[_Ended], shared: Circumstances, origin: dict[str, Any]) -> None:
    """Write ``run.json``, one line per sample.

    Parameters
    ----------
    out : Path
        Output folder.
    tasks : sequence
        Samples with what became of them.
    shared : Circumstances
        What all results depend on.
    origin : dict
        Sheets, and files that were not read.
    """
    settings = {key: Path(value).name if key in shared.files_sha256 else value for key, value in shared.settings.items()}
    head = {
        "program": "xrdmica",
        "version": shared.version,
        "python": shared.python,
        "packages": shared.packages,
        "structures_sha256": shared.structures_sha256,
        "analysis": shared.analysis,
        "settings": settings,
        "settings_files_sha256": shared.files_sha256,
        # only a bootstrap draws random numbers; trials carry their seeds in their own records
        "seeds": {"bootstrap": settings["seed"]} if settings.get("bootstrap") else {},
        **origin,
    }
    text = json.dumps(head, indent=2, ensure_ascii=False)
    with replace_text(out / "run.json") as stream:
        stream.write(text.removesuffix("\n}") + ',\n  "samples": [')
        for number, task in enumerate(tasks):
            line = json.dumps(_sample(task), ensure_ascii=False)
            stream.write((",\n    " if number else "\n    ") + line)
        stream.write("\n  ]\n}\n")


def _sample(task: _Ended) -> dict[str, Any]:
    record: dict[str, Any] = {"sample": task.entry.name, "status": "done" if task.finished else "failed"}
    if task.finished:
        record["result"] = f"{task.stem}.json"
    if task.reason is not None:
        record["reason"] = task.reason
    record["fingerprint"] = task.fingerprint
    record["inputs"] = [
        {"file": Path(row.path).name, "sha256": digest.hex() if digest else None}
        for row, digest in zip(task.entry.rows, task.digests, strict=True)
    ]
    return record
