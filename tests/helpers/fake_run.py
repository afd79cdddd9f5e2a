"""A run with a stand-in for the analysis, as a process of its own that can be killed: OUT COUNT WORKERS [key=value ...]."""

from __future__ import annotations

import os
import sys
from pathlib import Path

if __name__ == "__main__":
    os.environ["XRDMICA_TEST_CHEAP"] = "1"
    import fake_quick

    from xrdmica.batch.run import run_batch

    out, count, workers = Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])
    options = dict(argument.split("=") for argument in sys.argv[4:])
    try:
        for result in run_batch(
            fake_quick.entries(count), out, settings=fake_quick.QuickSettings(shade=float(options.get("shade", 0))),
            analyse=fake_quick.quick, workers=workers or None, report="report" in options, curves=False,
        ):  # fmt: skip
            print(result.sample, flush=True)
    except KeyboardInterrupt:
        sys.exit(130)
