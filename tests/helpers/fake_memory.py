"""A run in this process that tells how much memory it holds after some samples, and at the end: OUT COUNT WORKERS."""

from __future__ import annotations

import os
import sys
from pathlib import Path

if __name__ == "__main__":
    os.environ["XRDMICA_TEST_CHEAP"] = "1"
    import fake_quick

    from xrdmica.batch.run import run_batch

    def resident() -> float:
        """Megabytes."""
        status = Path("/proc/self/status").read_text()
        return int(status.split("VmRSS:")[1].split()[0]) / 1024

    def peak() -> float:
        return int(Path("/proc/self/status").read_text().split("VmHWM:")[1].split()[0]) / 1024

    out, count, workers = Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])
    # matplotlib, scipy and what else the end of a run needs are loaded beforehand: they are no growth
    list(run_batch(
        fake_quick.entries(40), out / "first", settings=fake_quick.QuickSettings(), analyse=fake_quick.quick,
        workers=workers or None,
    ))  # fmt: skip
    for number, _ in enumerate(run_batch(
        fake_quick.entries(count), out / "all", settings=fake_quick.QuickSettings(), analyse=fake_quick.quick,
        workers=workers or None,
    ), start=1):  # fmt: skip
        if number == 100:
            print(resident(), flush=True)
    print(resident(), peak(), flush=True)
