"""One run per output folder: a lock file that tells who holds it, and that is recognised when its run is dead."""

from __future__ import annotations

import json
import os
import secrets
import socket
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from xrdmica.errors import XrdmicaError

__all__ = ["LOCK_NAME", "locked", "refuse_if_locked"]

LOCK_NAME = ".xrdmica-lock"


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the lock of a folder.

    The file holds process id, host, time of boot and start time of the process, so that a lock left by a killed run is
    told from one that is held, also when the process id has been given to another program since.

    Raises
    ------
    XrdmicaError
        If another run holds it, or a run on another computer may hold it.
    """
    path = folder / LOCK_NAME
    mine = {"pid": os.getpid(), "host": _host(), "boot": _boot(), "start": _start(os.getpid()), "token": secrets.token_hex(8)}
    draft = folder / f"{LOCK_NAME}.{mine['token']}.part"
    try:
        draft.write_text(json.dumps(mine), encoding="utf-8")
        try:
            _take(path, draft)
        finally:
            draft.unlink(missing_ok=True)
    except OSError as error:
        raise XrdmicaError(
            f"{path}: cannot be written", why=error.strerror or str(error),
            fix="choose a folder you may write to, on a disk with space",
        ) from None  # fmt: skip
    try:
        yield
    finally:
        if _read(path) == mine:
            path.unlink(missing_ok=True)


def refuse_if_locked(folder: Path) -> None:
    """Raise when another run holds the lock; a stale lock is no hindrance.

    Raises
    ------
    XrdmicaError
        If it is held.
    """
    path = folder / LOCK_NAME
    holder = _read(path)
    if holder is not None and _lives(holder):
        raise _held(path, holder)


def _take(path: Path, draft: Path) -> None:
    for _ in range(10):
        try:
            _link(draft, path)
        except FileExistsError:
            pass
        else:
            return
        holder = _read(path)
        if holder is None:
            continue
        if _lives(holder):
            raise _held(path, holder)
        # of several runs that find the same stale lock only one can rename it away
        aside = draft.with_suffix(".stale.part")
        try:
            path.rename(aside)
        except FileNotFoundError:
            continue
        if _read(aside) != holder:
            _link(aside, path)  # a run that was faster had put its own there
        aside.unlink(missing_ok=True)
    raise XrdmicaError(f"{path}: cannot be taken", why="several runs want it at once", fix="try again")


def _link(source: Path, target: Path) -> None:
    """Give the file its name only if nobody has it; complete from the first moment."""
    try:
        os.link(source, target)
    except FileExistsError:
        raise
    except (OSError, NotImplementedError):  # a file system without hard links
        with target.open("x", encoding="utf-8") as stream:
            stream.write(source.read_text(encoding="utf-8"))


def _held(path: Path, holder: dict[str, object]) -> XrdmicaError:
    if holder.get("pid") == os.getpid() and holder.get("host") == _host():
        return XrdmicaError(
            f"{path.parent}: this very program has a run under way there",
            fix="go through its results to the end, or call close() on what run_batch gave back",
        )
    where = f"process {holder.get('pid')} on {holder.get('host')}"
    return XrdmicaError(
        f"{path.parent}: another run writes there", why=where,
        fix=f"wait for it or end it; if it is certain that it no longer runs, remove {path}",
    )  # fmt: skip


def _read(path: Path) -> dict[str, object] | None:
    """What the lock says; an unreadable one counts as nobody's, a missing one is None."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return None
    except (OSError, ValueError):
        return {}
    return content if isinstance(content, dict) else {}


def _lives(holder: dict[str, object]) -> bool:
    """Whether the holder may still run; on another computer nobody can tell, so it may."""
    pid = holder.get("pid")
    if not isinstance(pid, int) or pid <= 0:
        return False
    if holder.get("host") != _host():
        return True
    if holder.get("boot") != _boot():
        return False
    start = _start(pid)
    if start is None:
        return _exists(pid)
    return holder.get("start") is None or holder.get("start") == start


def _host() -> str:
    return socket.gethostname()


def _boot() -> str | None:
    """Which start of the computer this is; None where it is not told."""
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return None


def _start(pid: int) -> str | None:
    """When a process started, in whatever form the system tells it; None when it is gone or the system does not tell."""
    if Path("/proc/self/stat").exists():
        try:
            text = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace")
        except OSError:
            return None
        # the name of the program stands in brackets and may hold blanks; a zombie holds nothing any more
        fields = text.rpartition(")")[2].split()
        return None if fields[0] in "ZX" else fields[19]
    if sys.platform == "win32":
        return None
    done = subprocess.run(["ps", "-o", "lstart=", "-p", str(pid)], capture_output=True, text=True, check=False)
    return done.stdout.strip() or None


def _exists(pid: int) -> bool:
    """For systems that do not tell start times: whether there is such a process."""
    if Path("/proc/self/stat").exists():
        return False
    if sys.platform == "win32":
        done = subprocess.run(["tasklist", "/FI", f"PID eq {pid}", "/NH"], capture_output=True, text=True, check=False)
        return str(pid) in done.stdout
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True
