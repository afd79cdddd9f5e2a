"""Puts a stand-in in the place of the analysis, so that commands are tested apart from the science."""

from __future__ import annotations

import sys
from types import ModuleType

import fake_batch


def modules() -> dict[str, ModuleType]:
    """The stand-ins by the name they take."""
    analyse = ModuleType("xrdmica.batch.analyse")
    analyse.Settings = fake_batch.FakeSettings  # type: ignore[attr-defined]
    analyse.analyse_sample = fake_batch.analyse  # type: ignore[attr-defined]
    decide = ModuleType("xrdmica.identify.decide")
    decide.identify = fake_batch.identify  # type: ignore[attr-defined]
    return {"xrdmica.batch.analyse": analyse, "xrdmica.identify.decide": decide}


if __name__ == "__main__":
    sys.modules.update(modules())
    from xrdmica.cli.main import run

    run(sys.argv[1:])
